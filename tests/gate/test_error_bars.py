"""Oracle: a run of the same circuit at a quarter of the step and much tighter tolerances."""

from math import sin
from pathlib import Path

import pytest

import cosim
from cosim.adjust import Pulse, calibrate_pulse
from cosim.capture import capture_probe, make_plan
from cosim.coupling import DriveLine, drive_rate
from cosim.dsp.resampling import interpolant
from cosim.fidelities import RICHARDSON, Views, error_bar
from cosim.gate import gate_target
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import average_gate_fidelity, process_fidelity
from cosim.quantum.frame import free_frame, phase_frame
from cosim.quantum.qubit import Qubit
from cosim.result import Fidelity
from cosim.waveform import ComplexArray, Waveform

EXAMPLES = Path(__file__).parents[2] / "examples"


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", ["x90_spin", "x180_transmon"])
def test_error_bars_cover_the_error(name: str) -> None:
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    plan = make_plan(bench)
    half = plan.half_step()
    plans = (plan, half, half.half_step())
    waveforms = [capture_probe(item).waveform for item in plans]
    target = gate_target(bench).unitary
    perfect = calibrate_pulse(pulse_of(bench, waveforms[0], 1.0), target).scale
    for over_rotation in (1.0, 1.01):
        first, second, best = (
            pulse_of(bench, waveform, perfect * over_rotation) for waveform in waveforms
        )
        channel = first.channel()
        free = free_frame(channel, target)
        calibration = calibrate_pulse(first, target, guess=1 / over_rotation)
        views = Views(channel, free, calibration, target)
        for view in views.fidelities(second):
            check(view, best, target)


def pulse_of(bench: cosim.Testbench, waveform: Waveform, scale: float) -> Pulse:
    table, drive = bench.qubit, bench.drive
    assert isinstance(table.frequency, float)
    qubit = Qubit(
        frequency=table.frequency,
        levels=table.levels or 2,
        anharmonicity=table.anharmonicity or 0.0,
        t1=table.t1,
        t2=table.t2,
        thermal_population=table.thermal_population,
    )
    line = DriveLine(table.rabi_per_volt * scale, drive.attenuation)
    spline = interpolant(drive_rate(waveform, line))
    window = bench.gate.window or (float(waveform.t[0]), float(waveform.t[-1]))
    return Pulse(qubit, DriveSpline(spline.x, spline.c), *window)


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
    """Two rotations about one axis, off by delta and delta + eps: the bar is the change, times e.

    Source: elementary SU(2) algebra, 1 - F_avg = (2/3) sin^2(delta/2), and Richardson's factor.
    """
    delta, eps = 1e-2, 1e-4
    infidelity = [2 / 3 * sin(angle / 2) ** 2 for angle in (delta, delta + eps, eps)]
    bar = error_bar(1 - infidelity[0], 1 - infidelity[1], infidelity[2])
    change = 2 / 3 * (sin((delta + RICHARDSON * eps) / 2) ** 2 - sin(delta / 2) ** 2)
    assert bar == pytest.approx(change, rel=1e-4)  # angles of 1e-2 against their sines
