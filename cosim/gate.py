"""The drive path: testbench, netlist, waveform, Hamiltonian, channel, fidelity."""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from cosim.adjust import Calibration, Pulse, calibrate_pulse
from cosim.capture import Capture, Plan, capture_probe, make_plan
from cosim.dsp.demodulation import demodulate
from cosim.dsp.pulse import measure_pulse
from cosim.dsp.tones import own_tone
from cosim.errors import InputError, TestbenchError
from cosim.fidelities import Views
from cosim.guards import (
    area_warnings,
    carrier_warnings,
    edge_warnings,
    floor_warnings,
    level_warnings,
    scale_warnings,
    step_warnings,
    twin_warnings,
)
from cosim.imported import every_second, import_waveform
from cosim.line import through_line
from cosim.neighbours import (
    Neighbour,
    heating_warnings,
    idle_effect,
    other_tones,
    spectator_effects,
)
from cosim.noise_setup import line_of_noise
from cosim.quantum.channel import check_channel, nearest_unitary, pauli_transfer_matrix
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
from cosim.quantum.frame import FreeFrame, free_frame, phase_frame
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.reference import evolve_operators, evolve_reference
from cosim.quantum.targets import target_rotation
from cosim.qubit_drive import QubitDrive, couple
from cosim.record import Clock, make_record
from cosim.result import Channel, GateResult
from cosim.testbench import Testbench
from cosim.waveform import ComplexArray

Progress = Callable[[float], None]


@dataclass(frozen=True, slots=True)
class Target:
    """What the gate is meant to do.

    Parameters
    ----------
    name : str
        In words.
    rotation : Rotation
        Axis, and angle in rad.
    unitary : ndarray of complex, shape (2, 2)
        R_n(angle) = exp(-i angle n.sigma/2).
    """

    name: str
    rotation: Rotation
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
        Name, rotation and unitary.

    Raises
    ------
    InputError
        If a rotation of that name does not exist, or an axis has no length.
    """
    wanted = bench.gate.target
    if isinstance(wanted, str):
        try:
            rotation = target_rotation(wanted)
        except InputError as error:
            where = f"{bench.source or 'the testbench'}, table [gate], key 'target'"
            raise TestbenchError(f"{where}: {error.message}", hint=error.hint) from None
        name = wanted
    else:
        rotation = Rotation(wanted.axis, wanted.angle)
        axis = ", ".join(f"{part:g}" for part in wanted.axis)
        name = f"{math.degrees(wanted.angle):g}° about ({axis})"
    return Target(name, rotation, target_unitary(rotation.axis, rotation.angle))


@dataclass(frozen=True, slots=True)
class Shots:
    """The simulator's part of a run, made beforehand: several runs may share it.

    Parameters
    ----------
    plan : Plan
        The deck and the transient, from `cosim.capture.make_plan`.
    first : Capture
        The waveform at the probe, without the line behind it.
    second : Capture or None
        The same at half the step, for the numerical floor.
    """

    plan: Plan
    first: Capture
    second: Capture | None


def run_gate(
    bench: Testbench,
    *,
    system: OperatorSystem | None = None,
    progress: Progress | None = None,
    shots: Shots | None = None,
) -> GateResult:
    """Run a testbench with a gate from the netlist, or from a waveform, to its fidelity.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    system : OperatorSystem or None
        A user's own system, for a testbench with kind = "operators" in [qubit].
    progress : callable or None
        Called with the simulated time in s now and then, during both runs of the simulator.
    shots : Shots or None
        What the simulator gave for this deck; None lets it run.

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
    clock = Clock()
    target = gate_target(bench)
    plan, shot = _capture(bench, progress, shots, clock)
    drive = couple(bench, shot, system)
    pulse = drive.pulse(shot.waveform)
    clock.lap("interpolation")
    clean = channel = pulse.channel()
    check_channel(channel)
    clock.lap("evolution")
    envelope = demodulate(shot.waveform, drive.carrier_frequency)
    # The measures are those of the tone that plays the gate, where others are played with it.
    tone = own_tone(envelope, other_tones(bench.spectator, drive))
    measures = measure_pulse(shot.waveform, drive.carrier_frequency, envelope=tone)
    clock.lap("demodulation")
    twin = drive.rotating_wave_twin(envelope)
    rotating_wave_error = math.nan if twin is None else channel_distance(clean, twin)
    clock.lap("rotating_wave_twin")
    noise = line_of_noise(bench, plan, drive.carrier_frequency, envelope)
    noisy = noise.on(drive)
    if noisy is not None:
        pulse = replace(pulse, before=noisy.correction)
        channel = clean @ noisy.correction
    clock.lap("noise")
    free = free_frame(channel, target.unitary)
    rotation = _unfolded(rotation_of(nearest_unitary(channel)), target.rotation)
    calibration = best_calibration(bench, drive, pulse, free, channel, rotation.angle, target)
    clock.lap("calibration")
    second, carrier = _second_run(bench, plan, drive, shot, progress, shots, clock)
    if second is not None:
        second = replace(second, before=pulse.before)
    views = Views(channel, free, calibration, target.unitary)
    as_simulated, in_free_frame, calibrated = views.fidelities(second)
    floor = views.floor(second)
    clock.lap("fidelities")
    told = () if noisy is None else noisy.warnings
    neighbours = spectator_effects(bench.spectator, drive, pulse, noise, told)
    idle, idle_warnings = None, tuple[str, ...]()
    if bench.gate.idle is not None:
        idle, idle_warnings = idle_effect(
            bench.gate.idle, drive, pulse, shot.waveform, measures.amplitude, noise, told
        )
    clock.lap("neighbours")
    reference = _reference_error(bench, pulse, clean)
    clock.lap("reference")
    warnings = (
        *shot.notices,
        *(step_warnings(shot.step, drive.carrier_frequency) if plan and not plan.baseband else ()),
        *edge_warnings(drive.window, shot.waveform, drive.carrier_frequency, measures.amplitude),
        *area_warnings(drive.window, tone, drive.line, target.rotation.angle),
        *level_warnings(pulse, target.unitary),
        *carrier_warnings(measures),
        *scale_warnings(calibrated),
        *twin_warnings(drive.carrier_frequency, drive.qubit.frequency, rotating_wave_error),
        *floor_warnings(calibrated, floor),
        *told,
        *heating_warnings(noise.noises, drive, envelope.unit),
        *(text for item in neighbours for text in item.warnings),
        *idle_warnings,
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
        rotating_wave_error=rotating_wave_error,
        reference_error=reference,
        phase_slip=_phase_slip(channel, free, target, drive),
        rotation=rotation,
        unitarity=unitarity(channel),
        carrier_frequency=carrier,
        qubit_frequency=drive.qubit.frequency
        + (carrier - drive.carrier_frequency if drive.follows else 0.0),
        window=drive.window,
        pulse=measures,
        waveform=shot.waveform,
        envelope=envelope,
        channel=Channel(channel, pauli_transfer_matrix(channel)),
        extra=shot.extra,
        warnings=tuple(dict.fromkeys(warnings)),
        run=make_record(bench, shot, drive.carrier_frequency, clock),
        noise=None if noisy is None else noisy.effect,
        spectators=tuple(item.effect for item in neighbours),
        register_infidelity=_register(in_free_frame.infidelity, neighbours),
        idle=idle,
    )


def _register(own: float, neighbours: tuple[Neighbour, ...]) -> float:
    if not neighbours:
        return math.nan
    return own + sum(item.effect.free_frame_infidelity for item in neighbours)


def _capture(
    bench: Testbench, progress: Progress | None, shots: Shots | None, clock: Clock
) -> tuple[Plan | None, Capture]:
    if shots is not None:
        clock.note_capture(shots.first)
        return shots.plan, through_line(bench, shots.first)
    if bench.netlist is None:
        shot = through_line(bench, import_waveform(bench))
        clock.lap_capture(shot)
        return None, shot
    plan = make_plan(bench)
    clock.lap("deck")
    shot = through_line(bench, capture_probe(plan, progress=progress))
    clock.lap_capture(shot)
    return plan, shot


def best_calibration(
    bench: Testbench,
    drive: QubitDrive,
    pulse: Pulse,
    free: FreeFrame,
    channel: ComplexArray,
    angle: float,
    target: Target,
) -> Calibration:
    """Find what the calibrated fidelity adjusts, as far as [gate] lists it.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    drive : QubitDrive
        Qubit and carrier.
    pulse : Pulse
        With the noise before it.
    free : FreeFrame
        Of its channel.
    channel : ndarray of complex, shape (levels^2, levels^2)
        As simulated.
    angle : float
        Of its rotation, in rad.
    target : Target
        What the gate is meant to do.

    Returns
    -------
    Calibration
        No worse than the free frame alone.
    """
    adjusted = bench.gate.calibrate
    # No amplitude makes a gate that does nothing better.
    with_amplitude = "amplitude" in adjusted and target.rotation.angle != 0.0
    if not with_amplitude and "detuning" not in adjusted:
        return Calibration(1.0, 0.0, channel, free)
    found = calibrate_pulse(
        pulse,
        target.unitary,
        guess=target.rotation.angle / angle if angle > 0.0 else 1.0,
        with_amplitude=with_amplitude,
        with_detuning="detuning" in adjusted,
        resonance=drive.qubit.frequency - drive.carrier_frequency,
    )
    # The search leaves decoherence and noise out of account, which move its optimum by very little.
    if found.frame.average_gate_fidelity < free.average_gate_fidelity:
        return Calibration(1.0, 0.0, channel, free)
    return found


def _second_run(
    bench: Testbench,
    plan: Plan | None,
    drive: QubitDrive,
    first: Capture,
    progress: Progress | None,
    shots: Shots | None,
    clock: Clock,
) -> tuple[Pulse | None, float]:
    """Simulate once more at half the step; give the pulse and the carrier in Hz.

    An imported waveform is taken once more by every second sample instead.
    """
    if not bench.accuracy.floor:
        return None, drive.carrier_frequency
    if plan is None:
        halved = every_second(first.waveform, drive.carrier_frequency)
        second = None if halved is None else drive.pulse(halved)
        return second, drive.carrier_frequency
    if shots is not None and shots.second is not None:
        shot = through_line(bench, shots.second)
        clock.note_capture(shot, "floor_")
    else:
        shot = through_line(bench, capture_probe(plan.half_step(), progress=progress))
        clock.lap_capture(shot, "floor_")
    return drive.second_pulse(first.waveform, shot.waveform)


def _reference_error(bench: Testbench, pulse: Pulse, channel: ComplexArray) -> float:
    if not bench.accuracy.reference:
        return math.nan
    window = (pulse.start, pulse.stop)
    if isinstance(pulse.qubit, OperatorSystem):
        # This system is solved by QuTiP in the first place: a hundredth of the tolerance then.
        again = evolve_operators(pulse.qubit, pulse.drive, *window, rtol=1e-12)
    else:
        again = evolve_reference(pulse.qubit, pulse.drive, *window)
    return channel_distance(channel, again)


def _unfolded(found: Rotation, wanted: Rotation) -> Rotation:
    """Tell 187 degrees about x as that, where x is wanted, and not as 173 degrees about -x."""
    along = sum(one * two for one, two in zip(found.axis, wanted.axis, strict=True))
    other = 2.0 * math.pi - found.angle
    if along >= 0.0 or abs(other - wanted.angle) > abs(found.angle - wanted.angle):
        return found
    return Rotation((-found.axis[0], -found.axis[1], -found.axis[2]), other)


def _phase_slip(channel: ComplexArray, free: FreeFrame, target: Target, drive: QubitDrive) -> float:
    # For a half turn about an axis in the xy-plane only the difference of the two angles is
    # determined, and near one their sum is of no weight: it counts only if it gains something.
    half = 0.5 * (free.before + free.after)
    without = phase_frame(channel, free.before - half, free.after - half)
    loss = free.average_gate_fidelity - average_gate_fidelity(without, target.unitary)
    counts = loss > 1e-8 + 0.01 * (1.0 - free.average_gate_fidelity)
    start, stop = drive.window
    detuning = drive.qubit.frequency - drive.carrier_frequency
    slip = (2.0 * half if counts else 0.0) - 2.0 * math.pi * detuning * (stop - start)
    return math.remainder(slip, 2.0 * math.pi)
