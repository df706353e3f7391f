"""Each slot's own channel, in one frame and at one scale for all of them."""

import math
from dataclasses import dataclass, replace
from functools import reduce

import numpy as np

from cosim.adjust import SCALE_RANGE, Calibration, Pulse, calibrate_pulse
from cosim.capture import Capture
from cosim.coupling import DriveLine, rate_per_unit
from cosim.dsp.resampling import interpolant
from cosim.errors import TestbenchError
from cosim.gate import Target, gate_target
from cosim.quantum.channel import nearest_unitary
from cosim.quantum.coherent_error import EXACT, error_vector
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import average_gate_fidelity, leakage, rotation_of, target_unitary
from cosim.quantum.frame import free_frame, phase_frame
from cosim.qubit_drive import couple, make_qubit
from cosim.train.playing import LOOK_AHEAD, Train
from cosim.waveform import ComplexArray, FloatArray

# From an error vector's first three parts to twice the sine of half the angle of a turn.
_TO_TURN = math.sqrt(6.0)


@dataclass(frozen=True, slots=True)
class Frame:
    """What a laboratory's calibration of one pulse after rest fixes for the whole train.

    Parameters
    ----------
    scale : float
        Factor on the amplitude.
    detuning : float
        Offset of the carrier in Hz.
    before, after : float
        Virtual Z angles in rad of each pulse.
    angle : float
        Angle of the target of a pulse of factor 1, in rad; about z it may hold whole turns.
    """

    scale: float
    detuning: float
    before: float
    after: float
    angle: float


@dataclass(frozen=True, slots=True)
class Evolved:
    """The channels of all slots.

    Parameters
    ----------
    raw : tuple of ndarray
        As simulated.
    framed : tuple of ndarray
        In the frame and at the scale of `frame`; the later ones of a sequence are multiplied from
        the left.
    targets : tuple of ndarray, each of shape (2, 2)
        What each slot is meant to do.
    rest : ndarray
        What a slot does in which nothing is played and nothing is left from before.
    frame : Frame
        Found on the first pulse.
    """

    raw: tuple[ComplexArray, ...]
    framed: tuple[ComplexArray, ...]
    targets: tuple[ComplexArray, ...]
    rest: ComplexArray
    frame: Frame

    def vectors(self) -> FloatArray:
        """Error vector of each slot, shape (slots, 6 + 4 (levels - 2))."""
        pairs = zip(self.framed, self.targets, strict=True)
        return np.array([error_vector(channel, target) for channel, target in pairs])

    def turns(self) -> FloatArray:
        """Coherent error of each slot as a turn before the ideal gate, in rad, shape (slots, 3)."""
        found = 0.5 * _TO_TURN * self.vectors()[:, :3]
        size = np.linalg.norm(found, axis=1, keepdims=True)
        # The vector is the sine of half the angle, and goes on straight where that has no more to
        # tell; turns by it add up as what causes them does.
        beyond = EXACT + (size - math.sin(EXACT)) / math.cos(EXACT)
        half = np.where(size <= math.sin(EXACT), np.arcsin(np.minimum(size, 1.0)), beyond)
        return np.asarray(
            2.0 * found * np.divide(half, size, out=np.ones_like(size), where=size > 0.0)
        )

    def infidelities(self, *, raw: bool = False) -> FloatArray:
        """1 - F_avg of each slot, shape (slots,)."""
        pairs = zip(self.raw if raw else self.framed, self.targets, strict=True)
        return np.array([1.0 - average_gate_fidelity(*pair) for pair in pairs])

    def leakages(self) -> FloatArray:
        """L1 of each slot, shape (slots,)."""
        return np.array([max(0.0, leakage(channel)) for channel in self.framed])

    def sequence(self, channels: tuple[ComplexArray, ...]) -> float:
        """1 - F_avg of all slots one after the other against all targets."""
        whole = reduce(lambda done, channel: channel @ done, channels)
        target = reduce(lambda done, unitary: unitary @ done, self.targets)
        return 1.0 - average_gate_fidelity(whole, target)


def evolve_slots(
    train: Train, shot: Capture, *, late: float = 0.0, frame: Frame | None = None
) -> Evolved:
    """Evolve each slot of a train by itself.

    Parameters
    ----------
    train : Train
        What was played.
    shot : Capture
        What came out.
    late : float
        By how much the slots begin later than the testbench says, in s.
    frame : Frame or None
        That of another run; default: found on the first pulse.

    Returns
    -------
    Evolved
        Slots follow one another without a gap.

    Raises
    ------
    InputError
        If the target does not suit the drive.
    """
    target = gate_target(train.bench)
    spans = [train.span(slot, late) for slot in range(len(train.factors))]
    if train.table.shift_per_volt is not None:
        return _by_shift(train, shot, spans, target, frame)
    return _by_drive(train, shot, spans, target, frame)


def _by_drive(
    train: Train,
    shot: Capture,
    spans: list[tuple[float, float]],
    target: Target,
    frame: Frame | None,
) -> Evolved:
    drive = couple(train.bench, shot)
    whole = drive.pulse(shot.waveform)
    pulses = [replace(whole, start=start, stop=stop) for start, stop in spans]
    raw = tuple(pulse.channel() for pulse in pulses)
    targets = _targets(train, target, target.rotation.angle)
    first = train.first
    if frame is None:
        resonance = drive.qubit.frequency - drive.carrier_frequency
        found = _calibrated(train, pulses[first], raw[first], targets[first], resonance)
        frame = Frame(
            found.scale,
            found.detuning,
            found.frame.before,
            found.frame.after,
            target.rotation.angle,
        )
    adjusted = raw
    if frame.scale != 1.0 or frame.detuning != 0.0:
        adjusted = tuple(
            pulse.channel(scale=frame.scale, detuning=frame.detuning) for pulse in pulses
        )
    # A phase reference turns the whole train; what goes beyond it is a virtual Z of each pulse.
    reference = 0.5 * (frame.before - frame.after)
    framed = tuple(
        phase_frame(channel, frame.before, frame.after)
        if factor
        else phase_frame(channel, reference, -reference)
        for channel, factor in zip(adjusted, train.factors, strict=True)
    )
    rest = _rest(pulses[1], spans[1])
    return Evolved(raw, framed, targets, rest, frame)


def _calibrated(
    train: Train, pulse: Pulse, channel: ComplexArray, target: ComplexArray, resonance: float
) -> Calibration:
    free = free_frame(channel, target)
    unadjusted = Calibration(1.0, 0.0, channel, free)
    wanted = rotation_of(target).angle
    angle = rotation_of(nearest_unitary(channel)).angle
    names = train.bench.gate.calibrate
    if not names or wanted == 0.0:
        return unadjusted
    found = calibrate_pulse(
        pulse,
        target,
        guess=wanted / angle if angle > 0.0 else 1.0,
        with_amplitude="amplitude" in names,
        with_detuning="detuning" in names,
        resonance=resonance,
    )
    better = found.frame.average_gate_fidelity > free.average_gate_fidelity
    return found if better else unadjusted


def _by_shift(
    train: Train,
    shot: Capture,
    spans: list[tuple[float, float]],
    target: Target,
    frame: Frame | None,
) -> Evolved:
    if abs(target.rotation.axis[2]) < 1.0 - 1e-9 and target.rotation.angle != 0.0:
        raise TestbenchError(
            f"{train.bench.source or 'the testbench'}, table [gate], key 'target': a line that "
            f"shifts the qubit turns it about z, got {target.name}"
        )
    phases = shift_phases(train, shot, spans)
    first, factor = train.first, train.factors[train.first]
    if frame is None:
        # |1> turns by exp(-i phase), R_z(angle) has exp(+i angle) there.
        wanted = -math.copysign(target.rotation.angle, target.rotation.axis[2])
        wanted += 2.0 * math.pi * round((phases[first] / factor - wanted) / (2.0 * math.pi))
        scale = wanted * factor / phases[first] if phases[first] != 0.0 else 1.0
        adjusts = "amplitude" in train.bench.gate.calibrate and wanted != 0.0
        scale = min(max(scale, SCALE_RANGE[0]), SCALE_RANGE[1]) if adjusts else 1.0
        frame = Frame(float(scale), 0.0, 0.0, 0.0, -wanted)
    qubit = make_qubit(train.bench.qubit, train.carrier)
    nothing = DriveSpline(np.array(spans[1]), np.zeros((4, 1)))
    rest = _rest(Pulse(qubit, nothing, *spans[1]), spans[1])
    about_z = replace(target, rotation=replace(target.rotation, axis=(0.0, 0.0, 1.0)))
    return Evolved(
        tuple(phase_frame(rest, phase, 0.0) for phase in phases),
        tuple(phase_frame(rest, frame.scale * phase, 0.0) for phase in phases),
        _targets(train, about_z, frame.angle),
        rest,
        frame,
    )


def shift_phases(train: Train, shot: Capture, spans: list[tuple[float, float]]) -> FloatArray:
    """Integrate the qubit's shift over each slot.

    Parameters
    ----------
    train : Train
        With `shift_per_volt`.
    shot : Capture
        What came out.
    spans : list of two floats each
        Start and end in s.

    Returns
    -------
    ndarray, shape (slots,)
        2 pi k times the integral of the probe's departure from its rest, in rad.
    """
    wave = shot.extra["i"]
    integral = interpolant(wave).antiderivative()
    per_unit = shift_rate(train, wave.unit)
    edges = np.clip(np.array(spans), wave.t[0], wave.t[-1])
    # The operating point is less exact than what the run settles to.
    last = int(np.searchsorted(wave.t, train.pulse_begin - LOOK_AHEAD * shot.step, "right")) - 1
    rest = wave.v[max(last, 0)]
    areas = integral(edges[:, 1]) - integral(edges[:, 0]) - rest * np.diff(edges)[:, 0]
    return np.asarray(per_unit * areas)


def shift_rate(train: Train, unit: str) -> float:
    """Give the shift of the qubit in rad/s per unit of the probe.

    Parameters
    ----------
    train : Train
        With `shift_per_volt`.
    unit : str
        Of the probe, "V" or "A".

    Returns
    -------
    float
        Behind the attenuation of [drive].
    """
    assert train.table.shift_per_volt is not None
    drive = train.bench.drive
    line = DriveLine(train.table.shift_per_volt, drive.attenuation, drive.reference_impedance)
    return rate_per_unit(line, unit)


def _targets(train: Train, target: Target, angle: float) -> tuple[ComplexArray, ...]:
    axis = target.rotation.axis
    return tuple(target_unitary(axis, factor * angle) for factor in train.factors)


def _rest(pulse: Pulse, span: tuple[float, float]) -> ComplexArray:
    """What the qubit does by itself during one slot."""
    return replace(pulse, drive=DriveSpline(np.array(span), np.zeros((4, 1)))).channel()
