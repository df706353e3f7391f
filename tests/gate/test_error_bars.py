"""Oracle: a run of the same circuit at a quarter of the step and much tighter tolerances."""

from dataclasses import replace
from math import sin
from pathlib import Path

import pytest

import cosim
from cosim.adjust import Pulse, calibrate_pulse
from cosim.capture import Capture, capture_probe, make_plan
from cosim.fidelities import MARGIN, Views, error_bar
from cosim.gate import gate_target
from cosim.quantum.channel import nearest_unitary
from cosim.quantum.fidelity import average_gate_fidelity, process_fidelity, rotation_of
from cosim.quantum.frame import free_frame, phase_frame
from cosim.qubit_drive import couple
from cosim.result import Fidelity
from cosim.waveform import ComplexArray

EXAMPLES = Path(__file__).parents[2] / "examples"


# Shorter pulses of the slow decks: what the step does to a pulse is there in each carrier period
# and at each edge. The drive is made stronger, so that the angle stays what it is.
# Parameters, and in s the end of the run and the window.
SHORT: dict[str, tuple[dict[str, float], float, tuple[float, float]]] = {
    "x90_spin": ({"t_start": 4e-9, "t_stop": 12e-9}, 26e-9, (2e-9, 25e-9)),
    "x180_transmon": ({}, 50e-9, (0.0, 50e-9)),
    "x90_bsim4": ({"t_start": 4e-9, "t_stop": 12e-9}, 26e-9, (2e-9, 25e-9)),
    "x90_oscillator": ({"t_stop": 30e-9}, 40e-9, (5e-9, 38e-9)),
    "x90_baseband": ({}, 130e-9, (5e-9, 125e-9)),
}


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SHORT)
def test_error_bars_cover_the_error(name: str) -> None:
    parameters, stop, window = SHORT[name]
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    assert bench.netlist is not None
    together = {**bench.netlist.parameters, **parameters}
    netlist = replace(bench.netlist, parameters=together, stop=stop)
    bench = replace(bench, netlist=netlist, gate=replace(bench.gate, window=window))
    plan = make_plan(bench)
    half = plan.half_step()
    shots = [capture_probe(item) for item in (plan, half, half.half_step())]
    target = gate_target(bench)
    angle = rotation_of(nearest_unitary(pulses(bench, shots, 1.0)[0].channel())).angle
    rough = target.rotation.angle / angle
    perfect = rough * calibrate_pulse(pulses(bench, shots, rough)[0], target.unitary).scale
    for over_rotation in (1.0, 1.01):
        first, second, best = pulses(bench, shots, perfect * over_rotation)
        channel = first.channel()
        free = free_frame(channel, target.unitary)
        calibration = calibrate_pulse(first, target.unitary, guess=1 / over_rotation)
        views = Views(channel, free, calibration, target.unitary)
        for view in views.fidelities(second):
            check(view, best, target.unitary)


def pulses(bench: cosim.Testbench, shots: list[Capture], scale: float) -> list[Pulse]:
    """The pulses of the three runs, as the drive path couples them, with a stronger drive."""
    table = replace(bench.qubit, rabi_per_volt=bench.qubit.rabi_per_volt * scale)
    drive = couple(replace(bench, qubit=table), shots[0])
    others = [drive.second_pulse(shots[0].waveform, shot.waveform)[0] for shot in shots[1:]]
    return [drive.pulse(shots[0].waveform), *others]


def check(view: Fidelity, best: Pulse, target: ComplexArray) -> None:
    channel = best.channel(scale=view.amplitude_scale, detuning=view.detuning)
    channel = phase_frame(channel, view.z_before, view.z_after)
    average = average_gate_fidelity(channel, target)
    process = process_fidelity(channel, target)
    assert abs(view.average_gate_fidelity - average) <= view.error_bar
    assert abs(view.process_fidelity - process) <= view.process_error_bar
    # A bar that covers everything says nothing: it stays below the infidelity and a floor of
    # 1e-6, the size of the circuits' own numerical floors.
    assert view.error_bar < max(view.infidelity, 1e-6)


def test_the_bar_is_tight_for_an_error_along_the_over_rotation() -> None:
    """Two rotations about one axis, off by delta and delta + eps: the bar is the change at e eps.

    Source: elementary SU(2) algebra, 1 - F_avg = (2/3) sin^2(delta/2).
    """
    delta, eps = 1e-2, 1e-4
    infidelity = [2 / 3 * sin(angle / 2) ** 2 for angle in (delta, delta + eps, eps)]
    bar = error_bar(1 - infidelity[0], 1 - infidelity[1], infidelity[2])
    change = 2 / 3 * (sin((delta + MARGIN * eps) / 2) ** 2 - sin(delta / 2) ** 2)
    assert bar == pytest.approx(change, rel=1e-4)  # angles of 1e-2 against their sines
