"""The drive path: testbench, netlist, waveform, Hamiltonian, channel, fidelity."""

import math
import platform
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from importlib.metadata import version

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.adjust import Calibration, Pulse, calibrate_pulse
from cosim.capture import Capture, Plan, capture_probe, check_steps, make_plan
from cosim.coupling import DriveLine, drive_rate, rotating_rate
from cosim.dsp.carrier import estimate_carrier
from cosim.dsp.demodulation import demodulate
from cosim.dsp.pulse import measure_pulse
from cosim.dsp.resampling import interpolant
from cosim.fidelities import Views
from cosim.quantum.channel import check_channel, nearest_unitary, pauli_transfer_matrix
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import (
    Rotation,
    average_gate_fidelity,
    channel_distance,
    leakage,
    rotation_of,
    seepage,
    target_unitary,
    unitarity,
)
from cosim.quantum.frame import FreeFrame, free_frame
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from cosim.quantum.targets import target_rotation
from cosim.result import Channel, Fidelity, GateResult, RunRecord
from cosim.testbench import Testbench
from cosim.waveform import ComplexArray, Envelope, Waveform

# A change of the average gate fidelity by one more level that is worth a warning.
LEVELS_TOLERANCE = 1e-6

# Carrier left at an edge of the window, over the plateau, that is worth a warning: a pulse cut
# there by the window loses an angle of the same order.
EDGE_TOLERANCE = 1e-3

PACKAGES = ("qcosim", "numpy", "scipy", "qutip", "PySpice", "numba", "h5py")


@dataclass(frozen=True, slots=True)
class Target:
    """What the gate is meant to do.

    Parameters
    ----------
    name : str
        In words.
    angle : float
        Angle of the rotation in rad.
    unitary : ndarray of complex, shape (2, 2)
        R_n(angle) = exp(-i angle n.sigma/2).
    """

    name: str
    angle: float
    unitary: ComplexArray


def gate_target(bench: Testbench) -> Target:
    """Read the target of a testbench.

    Parameters
    ----------
    bench : Testbench
        The testbench.

    Returns
    -------
    Target
        Name, angle and unitary.

    Raises
    ------
    InputError
        If a rotation of that name does not exist, or an axis has no length.
    """
    wanted = bench.gate.target
    if isinstance(wanted, str):
        rotation = target_rotation(wanted)
        name = wanted
    else:
        rotation = Rotation(wanted.axis, wanted.angle)
        axis = ", ".join(f"{part:g}" for part in wanted.axis)
        name = f"{math.degrees(wanted.angle):g}° about ({axis})"
    return Target(name, rotation.angle, target_unitary(rotation.axis, rotation.angle))


@dataclass(frozen=True, slots=True)
class _Frame:
    """What the first run fixes for both: carrier, qubit, line, window."""

    carrier_frequency: float
    qubit: Qubit
    line: DriveLine
    window: tuple[float, float]


def run_gate(bench: Testbench, *, progress: Callable[[float], None] | None = None) -> GateResult:
    """Run a testbench with a gate from the netlist to its fidelity.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    progress : callable or None
        Called with the simulated time in s now and then, during both runs of the simulator.

    Returns
    -------
    GateResult
        A design estimate; its error bars cover the numerical errors, not those of the models.

    Raises
    ------
    InputError
        If the testbench, the deck or the waveform cannot be used.
    SimulationError
        If ngspice or the evolution fails.
    """
    clock = _Clock()
    target = gate_target(bench)
    plan = make_plan(bench)
    clock.lap("deck")
    shot = capture_probe(plan, progress=progress)
    clock.lap_simulation(shot)
    frame, notices = _fix_frame(bench, plan, shot.waveform)
    pulse = _pulse(frame, shot.waveform)
    clock.lap("interpolation")
    channel = pulse.channel()
    check_channel(channel)
    clock.lap("evolution")
    envelope = demodulate(shot.waveform, frame.carrier_frequency)
    measures = measure_pulse(shot.waveform, frame.carrier_frequency, envelope=envelope)
    clock.lap("demodulation")
    twin = _rotating_wave_twin(frame, envelope)
    clock.lap("rotating_wave_twin")
    free = free_frame(channel, target.unitary)
    rotation = rotation_of(nearest_unitary(channel))
    calibration = _calibrate(bench, pulse, free, channel, rotation.angle, target)
    clock.lap("calibration")
    second = _second_pulse(bench, plan, frame, progress, clock)
    views = Views(channel, free, calibration, target.unitary)
    as_simulated, in_free_frame, calibrated = views.fidelities(second)
    floor = views.floor(second)
    clock.lap("fidelities")
    warnings = (
        *plan.deck.notices,
        *plan.notices,
        *shot.result.warnings,
        *notices,
        *_edge_warnings(frame, envelope, measures.amplitude),
        *_level_warnings(pulse, target),
        *_floor_warnings(calibrated, floor),
    )
    clock.lap("checks")
    return GateResult(
        title=bench.title,
        target=target.name,
        as_simulated=as_simulated,
        free_frame=in_free_frame,
        calibrated=calibrated,
        leakage=max(0.0, leakage(channel)),
        seepage=max(0.0, seepage(channel)),
        numerical_floor=floor,
        rotating_wave_error=channel_distance(channel, twin),
        phase_slip=_phase_slip(free, target),
        rotation=rotation,
        unitarity=unitarity(channel),
        carrier_frequency=frame.carrier_frequency,
        qubit_frequency=frame.qubit.frequency,
        window=frame.window,
        pulse=measures,
        waveform=shot.waveform,
        envelope=envelope,
        channel=Channel(channel, pauli_transfer_matrix(channel)),
        extra=shot.extra,
        warnings=tuple(dict.fromkeys(warnings)),
        run=_record(bench, plan, frame, shot, clock),
    )


class _Clock:
    """Wall-clock times of the stages of a run, in s."""

    def __init__(self) -> None:
        self.started = datetime.now().astimezone().isoformat(timespec="seconds")
        self.laps: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, name: str) -> None:
        """End a stage; time since the last one is its own."""
        now = time.perf_counter()
        self.laps[name] = self.laps.get(name, 0.0) + now - self._last
        self._last = now

    def lap_simulation(self, shot: Capture, prefix: str = "") -> None:
        """End a simulation; ngspice's own time is told from everything else around it."""
        self.lap(prefix + "simulator_overhead")
        self.laps[prefix + "ngspice"] = shot.result.wall_time
        self.laps[prefix + "simulator_overhead"] -= shot.result.wall_time


def _fix_frame(bench: Testbench, plan: Plan, waveform: Waveform) -> tuple[_Frame, tuple[str, ...]]:
    notices: tuple[str, ...] = ()
    carrier = bench.drive.carrier
    if isinstance(carrier, str):
        carrier = estimate_carrier(waveform).frequency
        period = 1.0 / carrier
        notices = check_steps(period / plan.request.step, period)
    table = bench.qubit
    nominal = table.frequency if isinstance(table.frequency, float) else carrier
    levels = table.levels or (2 if table.kind == "spin" else 4)
    qubit = Qubit(
        frequency=nominal + table.detuning,
        levels=levels,
        anharmonicity=table.anharmonicity or 0.0,
        t1=table.t1,
        t2=table.t2,
        thermal_population=table.thermal_population,
    )
    line = DriveLine(
        rabi_per_volt=table.rabi_per_volt,
        attenuation=bench.drive.attenuation,
        impedance=bench.drive.reference_impedance,
    )
    last = float(waveform.t[-1])
    window = bench.gate.window or (float(waveform.t[0]), last)
    return _Frame(carrier, qubit, line, (window[0], min(window[1], last))), notices


def _pulse(frame: _Frame, waveform: Waveform) -> Pulse:
    spline = interpolant(drive_rate(waveform, frame.line))
    return Pulse(frame.qubit, DriveSpline(spline.x, spline.c), *frame.window)


def _rotating_wave_twin(frame: _Frame, envelope: Envelope) -> ComplexArray:
    """Evolve the demodulated envelope with the independent solver."""
    start, stop = frame.window
    times = np.linspace(start, stop, max(2, round((stop - start) / envelope.dt) + 1))
    iq = CubicSpline(envelope.t, envelope.iq)(times)
    offset = frame.carrier_frequency - frame.qubit.frequency
    rate = rotating_rate(iq, times, frame.line, envelope.unit, offset)
    return evolve_rotating_wave(frame.qubit, rate, times)


def _calibrate(
    bench: Testbench,
    pulse: Pulse,
    free: FreeFrame,
    channel: ComplexArray,
    angle: float,
    target: Target,
) -> Calibration:
    if target.angle == 0.0 or "amplitude" not in bench.gate.calibrate:
        return Calibration(1.0, 0.0, channel, free)
    guess = target.angle / angle if angle > 0.0 else 1.0
    with_detuning = "detuning" in bench.gate.calibrate
    return calibrate_pulse(pulse, target.unitary, guess=guess, with_detuning=with_detuning)


def _second_pulse(
    bench: Testbench,
    plan: Plan,
    frame: _Frame,
    progress: Callable[[float], None] | None,
    clock: _Clock,
) -> Pulse | None:
    """Simulate once more at half the step, in the frame that the first run fixed."""
    if not bench.accuracy.floor:
        return None
    shot = capture_probe(plan.half_step(), progress=progress)
    clock.lap_simulation(shot, "floor_")
    return _pulse(frame, shot.waveform)


def _phase_slip(free: FreeFrame, target: Target) -> float:
    # A half turn about an axis in the xy-plane turns a Z before it into its inverse behind it,
    # so that only the difference of the two angles is determined.
    half_turn = abs(target.unitary[0, 0]) < 1e-9
    slip = free.after - free.before if half_turn else free.after + free.before
    return math.remainder(slip, 2.0 * math.pi)


def _edge_warnings(frame: _Frame, envelope: Envelope, amplitude: float) -> tuple[str, ...]:
    size = np.abs(envelope.iq)
    found = []
    for name, edge in zip(("start", "end"), frame.window, strict=True):
        level = float(np.interp(edge, envelope.t, size)) / amplitude
        if level > EDGE_TOLERANCE:
            found.append(
                f"the carrier is at {20 * math.log10(level):.0f} dB of the pulse at the {name} "
                f"of the window ({edge * 1e9:g} ns): the window cuts the pulse"
            )
    return tuple(found)


def _level_warnings(pulse: Pulse, target: Target) -> tuple[str, ...]:
    qubit = pulse.qubit
    if qubit.levels == 2:
        return ()
    # What more levels change is coherent, so the quick lossless path tells it.
    pulse = pulse.lossless()
    more = replace(pulse, qubit=replace(pulse.qubit, levels=qubit.levels + 1))
    change = abs(
        average_gate_fidelity(more.channel(), target.unitary)
        - average_gate_fidelity(pulse.channel(), target.unitary)
    )
    if change <= LEVELS_TOLERANCE:
        return ()
    return (
        f"{qubit.levels} levels are too few: with {qubit.levels + 1} the average gate fidelity "
        f"changes by {change:.1e}; raise 'levels' in [qubit]",
    )


def _floor_warnings(calibrated: Fidelity, floor: float) -> tuple[str, ...]:
    if floor > calibrated.infidelity:
        return (
            f"the calibrated infidelity {calibrated.infidelity:.1e} is below the numerical "
            f"floor {floor:.1e}: a smaller step is needed to resolve it",
        )
    return ()


def _record(bench: Testbench, plan: Plan, frame: _Frame, shot: Capture, clock: _Clock) -> RunRecord:
    versions = {name: version(name) for name in PACKAGES}
    versions["python"] = platform.python_version()
    versions["ngspice"] = shot.result.simulator_version.removeprefix("ngspice-")
    return RunRecord(
        started=clock.started,
        host=f"{platform.node()} ({platform.platform()})",
        versions=versions,
        seed=plan.request.seed,
        wall_times=clock.laps,
        testbench=bench.to_toml(),
        deck_files=plan.deck.files,
        deck_sent="\n".join(shot.result.deck) + "\n",
        log=shot.result.log,
        points=shot.waveform.t.size,
        step=plan.request.step,
        steps_per_period=1.0 / (plan.request.step * frame.carrier_frequency),
    )
