"""What else the line does: to its other qubits while the gate is played, and to its own at rest."""

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np

from cosim.added_noise import INJECTION
from cosim.adjust import Pulse
from cosim.coupling import rate_per_unit
from cosim.errors import InputError, TestbenchError
from cosim.guards import DOUBLE_TOLERANCE, level_warnings
from cosim.noise_effect import NoisyGate
from cosim.noise_setup import LineOfNoise
from cosim.noises import VOLTAGES, AmplitudeNoise, DetuningNoise, Noise, PhaseNoise
from cosim.quantum.channel import nearest_unitary
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import average_gate_fidelity, leakage, rotation_of, target_unitary
from cosim.quantum.frame import FreeFrame, free_frame
from cosim.quantum.heating import flip_rate
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.quantum.targets import target_rotation
from cosim.qubit_drive import QubitDrive, make_qubit
from cosim.schema import SpectatorTable
from cosim.side_results import IdleEffect, SpectatorEffect
from cosim.waveform import Envelope, Waveform

# Part of the pulse's amplitude that a stretch without a pulse does not reach.
PULSE_TOLERANCE = 0.1

_IDENTITY = np.eye(2, dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class Neighbour:
    """What happens to another qubit of the line, and what the reader must know of it.

    Parameters
    ----------
    effect : SpectatorEffect
        In numbers.
    warnings : tuple of str
        Each with its name.
    """

    effect: SpectatorEffect
    warnings: tuple[str, ...]


def spectator_effects(
    tables: Sequence[SpectatorTable],
    drive: QubitDrive,
    pulse: Pulse,
    noise: LineOfNoise,
    told: Collection[str] = (),
) -> tuple[Neighbour, ...]:
    """Evolve the other qubits of the line under the same waveform, with the same noise.

    Parameters
    ----------
    tables : sequence of SpectatorTable
        The tables [[spectator]].
    drive : QubitDrive
        Of the gate.
    pulse : Pulse
        The gate's; without the rotating-wave approximation, as the gate's own headline.
    noise : LineOfNoise
        That of the line reaches every qubit; the detuning's is the gate's qubit's own.
    told : collection of str
        Warnings that the reader has of the gate, which are not repeated.

    Returns
    -------
    tuple of Neighbour
        In the order of the tables.

    Raises
    ------
    InputError
        If a target does not exist, or the gate's qubit is given by operators.
    SimulationError
        If a noisy run of the circuit fails.
    """
    if not tables:
        return ()
    if isinstance(drive.qubit, OperatorSystem):
        raise InputError("[[spectator]] tables do not go with a system of operators")
    return tuple(
        _spectator(table, number, drive, pulse, noise, told)
        for number, table in enumerate(tables, start=1)
    )


def other_tones(tables: Sequence[SpectatorTable], drive: QubitDrive) -> tuple[float, ...]:
    """Tell where the tones lie that play the gates of other qubits.

    Parameters
    ----------
    tables : sequence of SpectatorTable
        The tables [[spectator]].
    drive : QubitDrive
        Of the gate.

    Returns
    -------
    tuple of float
        Of each qubit with a gate of its own the frequency less the carrier's, in Hz; none within
        one over the window, which no average over the pulse tells apart from the carrier.
    """
    if isinstance(drive.qubit, OperatorSystem):
        return ()
    played = [table for table in tables if table.target != "identity"]
    base, carrier = drive.qubit.frequency, drive.carrier_frequency
    offsets = [make_qubit(table.qubit(base), carrier).frequency - carrier for table in played]
    start, stop = drive.window
    return tuple(offset for offset in offsets if abs(offset) * (stop - start) >= 1.0)


def _spectator(
    table: SpectatorTable,
    number: int,
    drive: QubitDrive,
    pulse: Pulse,
    noise: LineOfNoise,
    told: Collection[str],
) -> Neighbour:
    assert not isinstance(drive.qubit, OperatorSystem)
    qubit = make_qubit(table.qubit(drive.qubit.frequency), drive.carrier_frequency)
    # The line is the same; only what a volt does to this qubit differs.
    share = table.rabi_per_volt / drive.line.rabi_per_volt
    spline = DriveSpline(pulse.drive.t, pulse.drive.c * share)
    try:
        wanted = target_rotation(table.target)
    except InputError as error:
        raise TestbenchError(
            f"table [[spectator]] number {number}, key 'target': {error.message}", hint=error.hint
        ) from None
    target = target_unitary(wanted.axis, wanted.angle)
    own = Pulse(qubit, spline, pulse.start, pulse.stop)
    line = replace(drive.line, rabi_per_volt=table.rabi_per_volt)
    noisy = noise.on_another(replace(drive, qubit=qubit, line=line))
    if noisy is not None:
        own = replace(own, before=noisy.correction)
    channel = own.channel()
    framed = free_frame(channel, target)
    effect = SpectatorEffect(
        name=table.name or f"spectator {number}",
        frequency=qubit.frequency,
        target=table.target,
        infidelity=_loss(average_gate_fidelity(channel, target)),
        free_frame_infidelity=_loss(framed.average_gate_fidelity),
        rotation=rotation_of(nearest_unitary(channel)),
        phase=_phase(framed),
        leakage=max(0.0, leakage(channel)),
        noise=None if noisy is None else noisy.effect,
    )
    found = [
        *_carrier_warnings(effect, qubit, drive),
        *level_warnings(own, target, table=f"[[spectator]] number {number}"),
        *_new_warnings(noisy, told),
    ]
    return Neighbour(effect, tuple(f"'{effect.name}': {text}" for text in found))


def _carrier_warnings(item: SpectatorEffect, qubit: Qubit, drive: QubitDrive) -> tuple[str, ...]:
    start, stop = drive.window
    width = 1.0 / (stop - start)
    if item.target != "identity":
        return ()
    within = f"Hz from the carrier, within the pulse's own width of {width:.3g} Hz"
    offset = abs(item.frequency - drive.carrier_frequency)
    if offset < width:
        return (f"it lies {offset:.3g} {within}: it is driven like the target",)
    second = abs(item.frequency + qubit.anharmonicity - drive.carrier_frequency)
    if qubit.levels > 2 and second < width:
        return (f"its second transition lies {second:.3g} {within}: it leaks from |1>",)
    return ()


def idle_effect(
    span: tuple[float, float],
    drive: QubitDrive,
    pulse: Pulse,
    waveform: Waveform,
    amplitude: float,
    noise: LineOfNoise,
    told: Collection[str] = (),
) -> tuple[IdleEffect, tuple[str, ...]]:
    """Judge a stretch without a pulse.

    Parameters
    ----------
    span : tuple of two floats
        Start and end in s.
    drive : QubitDrive
        Of the gate.
    pulse : Pulse
        The gate's, whose drive reaches over the whole run.
    waveform : Waveform
        At the probe.
    amplitude : float
        Of the gate's pulse there, carrier peak amplitude in the waveform's unit.
    noise : LineOfNoise
        All of it acts at rest as well.
    told : collection of str
        Warnings that the reader has of the gate, which are not repeated.

    Returns
    -------
    effect : IdleEffect
    warnings : tuple of str

    Raises
    ------
    TestbenchError
        If the stretch does not lie within the run.
    SimulationError
        If a noisy run of the circuit fails.
    """
    start, stop = span
    first, last = float(waveform.t[0]), float(waveform.t[-1])
    if start < first or stop > last:
        raise TestbenchError(
            f"table [gate], key 'idle': {start:.6g} s to {stop:.6g} s is not within the run, which "
            f"goes from {first:.6g} s to {last:.6g} s"
        )
    own = replace(pulse, start=start, stop=stop, before=None)
    clean = own.channel()
    phase = free_frame(clean, _IDENTITY)
    noisy = noise.on(replace(drive, window=span))
    if noisy is not None:
        own = replace(own, before=noisy.correction)
    channel = own.channel()
    framed = free_frame(channel, _IDENTITY)
    inside = (waveform.t >= start) & (waveform.t <= stop)
    left = _left(noise.envelope, span)
    turn = _phase(phase)
    flips, dephasing = _rates(span, drive, waveform.unit, left, noise.noises)
    if noisy is not None:
        injected = [item.flips for item in noisy.effect.sources if item.method == INJECTION]
        flips += sum(injected) / (stop - start)
    effect = IdleEffect(
        start=start,
        stop=stop,
        infidelity=_loss(average_gate_fidelity(channel, _IDENTITY)),
        free_frame_infidelity=_loss(framed.average_gate_fidelity),
        phase=turn,
        stark_shift=turn / (2.0 * math.pi * (stop - start)),
        leakage=max(0.0, leakage(channel)),
        residual=float(np.ptp(waveform.v[inside])) / 2.0 if inside.any() else math.nan,
        extinction=20.0 * math.log10(amplitude / left) if left > 0.0 else math.inf,
        flip_rate=flips,
        dephasing_rate=dephasing,
        noise=None if noisy is None else noisy.effect,
        rotation=rotation_of(nearest_unitary(clean)),
    )
    found = (*_pulse_warnings(noise.envelope, span, amplitude), *_new_warnings(noisy, told))
    return effect, tuple(f"at rest: {text}" for text in found)


def _pulse_warnings(
    envelope: Envelope, span: tuple[float, float], amplitude: float
) -> tuple[str, ...]:
    inside = (envelope.t >= span[0]) & (envelope.t <= span[1])
    peak = float(np.abs(envelope.iq[inside]).max(initial=0.0)) / amplitude
    if peak <= PULSE_TOLERANCE:
        return ()
    return (f"the carrier reaches {peak:.0%} of the pulse: 'idle' in [gate] lies on a pulse",)


def _new_warnings(noisy: NoisyGate | None, told: Collection[str]) -> tuple[str, ...]:
    return () if noisy is None else tuple(text for text in noisy.warnings if text not in told)


def _phase(framed: FreeFrame) -> float:
    # No phase is 0.0, not -0.0.
    return math.remainder(-(framed.before + framed.after), 2.0 * math.pi) + 0.0


def _left(envelope: Envelope, span: tuple[float, float]) -> float:
    """Give the median of the carrier's amplitude, which the tail of a pulse does not move."""
    inside = (envelope.t >= span[0]) & (envelope.t <= span[1])
    size = np.abs(envelope.iq[inside])
    return float(np.median(size)) if size.size else math.nan


def heating_warnings(noises: Sequence[Noise], drive: QubitDrive, unit: str) -> tuple[str, ...]:
    """Tell when a voltage added to the line may be what the testbench's t1 stands for already.

    Parameters
    ----------
    noises : sequence of Noise
        The tables [[noise]].
    drive : QubitDrive
        Of the gate.
    unit : str
        Of the probe.

    Returns
    -------
    tuple of str
        A warning for each that flips the qubit at more than a tenth of t1's rate.
    """
    if isinstance(drive.qubit, OperatorSystem) or drive.qubit.gamma_1 == 0.0:
        return ()
    slowest = 1.0 / (drive.window[1] - drive.window[0])
    found = []
    for place, noise in enumerate(noises, start=1):
        rate = 0.0
        if isinstance(noise, VOLTAGES):
            level = _level(noise, drive, abs(drive.carrier_frequency - _frequency(drive)), slowest)
            rate = 2.0 * _added_flips(drive, unit, level)
        if rate > DOUBLE_TOLERANCE * drive.qubit.gamma_1:
            found.append(
                f"noise '{noise.name or f'noise {place}'}' alone relaxes the qubit at {rate:.3g} "
                f"1/s, and the testbench's t1 at {drive.qubit.gamma_1:.3g} 1/s: the same noise may "
                "be counted twice"
            )
    return tuple(found)


def _rates(
    span: tuple[float, float],
    drive: QubitDrive,
    unit: str,
    left: float,
    noises: Sequence[Noise],
) -> tuple[float, float]:
    """Give the rates in 1/s of flips, each way, and of dephasing, by the golden rule."""
    flips = dephasing = 0.0
    slowest = 1.0 / (span[1] - span[0])
    offset = abs(drive.carrier_frequency - _frequency(drive))
    for noise in noises:
        if isinstance(noise, DetuningNoise):
            dephasing += _level(noise, drive, 0.0, slowest) / 4.0
        elif isinstance(noise, VOLTAGES):
            flips += _added_flips(drive, unit, _level(noise, drive, offset, slowest))
        elif isinstance(noise, (AmplitudeNoise, PhaseNoise)):
            # It has one quadrature, on what is left of the carrier.
            rate = left * rate_per_unit(drive.line, unit)
            flips += flip_rate(0.25 * rate**2 * _level(noise, drive, offset, slowest))
    return flips, dephasing


def _level(noise: Noise, drive: QubitDrive, frequency: float, slowest: float) -> float:
    """Give the density at a frequency in Hz; what is slower than `slowest` is no rate."""
    density = noise.density(drive.carrier_frequency)
    if density is None:
        return 0.0
    where = min(max(frequency, slowest, density.low), density.high)
    return float(density.at([where])[0])


def _added_flips(drive: QubitDrive, unit: str, level: float) -> float:
    # Of each quadrature beside the carrier; of the voltage itself it is half of that.
    return flip_rate(0.5 * rate_per_unit(drive.line, unit) ** 2 * level)


def _frequency(drive: QubitDrive) -> float:
    if isinstance(drive.qubit, OperatorSystem):
        return drive.carrier_frequency
    return drive.qubit.frequency


def _loss(fidelity: float) -> float:
    # Rounding may carry a perfect gate past 1.
    return max(0.0, 1.0 - fidelity)
