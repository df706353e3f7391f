"""What may be wrong with a pulse, for many pulses at once, and their evolution.

In the order of the signal's way: the envelope is stretched; what the converters make of it is
added; the modulator adds the image; oscillator and amplifier turn and scale all of it; leakage of
the carrier, spurs and noise are added.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.kernel import IndexArray
from cosim.specification.pulse import Envelope, IdealPulse, tone_factor
from cosim.waveform import ComplexArray, FloatArray


def _none() -> FloatArray:
    return np.zeros((1, 1))


def _nothing() -> ComplexArray:
    return np.zeros((1, 1), dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class Distortion:
    """What is wrong with each pulse of a batch; arrays have 1 row or one for each pulse.

    Parameters
    ----------
    stretch : ndarray, shape (batch, 1)
        By how much the pulse is longer, in s: its halves move apart, the peak held between them.
    rounding : ndarray of complex, shape (batch, cells)
        Added to the envelope, relative to its peak.
    image : ndarray of complex, shape (batch, 1)
        Factor on the mirrored signal.
    image_offset : float
        Of the image from the signal in Hz.
    gain : ndarray, shape (batch, 1 or cells)
        Relative change of the amplitude.
    phase : ndarray, shape (batch, 1 or cells)
        Of the oscillator in rad.
    turn : ndarray, shape (batch, 1)
        Phase of this pulse against the oscillator in rad.
    frequency : ndarray, shape (batch, 1)
        Of the carrier, added in Hz; its phase is right at the start of the pulse.
    leakage : ndarray of complex, shape (batch, 1)
        Carrier over the peak of the pulse; it is there all the time.
    leakage_before, leakage_after : float
        Time in s before and after the pulse in which it counts.
    added : ndarray of complex, shape (batch, cells)
        Added to the drive, relative to the peak, in the frame of the carrier.
    """

    stretch: FloatArray = field(default_factory=_none)
    rounding: ComplexArray = field(default_factory=_nothing)
    image: ComplexArray = field(default_factory=_nothing)
    image_offset: float = 0.0
    gain: FloatArray = field(default_factory=_none)
    phase: FloatArray = field(default_factory=_none)
    turn: FloatArray = field(default_factory=_none)
    frequency: FloatArray = field(default_factory=_none)
    leakage: ComplexArray = field(default_factory=_nothing)
    leakage_before: float = 0.0
    leakage_after: float = 0.0
    added: ComplexArray = field(default_factory=_nothing)

    def __add__(self, other: "Distortion") -> "Distortion":
        """Put two together, row by row; single numbers come from the one that has them."""
        found: dict[str, Any] = {}
        for item in fields(self):
            mine, yours = getattr(self, item.name), getattr(other, item.name)
            if isinstance(mine, np.ndarray):
                found[item.name] = mine + yours
            else:
                found[item.name] = mine if mine else yours
        return Distortion(**found)

    def repeated(self, times: int) -> "Distortion":
        """Give every row several times, each next to itself."""
        return self._mapped(lambda rows: np.repeat(rows, times, axis=0) if len(rows) > 1 else rows)

    def tiled(self, times: int) -> "Distortion":
        """Give the whole batch several times, one after the other."""
        return self._mapped(lambda rows: np.tile(rows, (times, 1)) if len(rows) > 1 else rows)

    def picked(self, numbers: IndexArray) -> "Distortion":
        """Give some pulses of the batch, shape (k,) of their numbers."""
        return self._mapped(lambda rows: rows[numbers] if len(rows) > 1 else rows)

    def _mapped(self, change: Callable[[FloatArray], FloatArray]) -> "Distortion":
        found: dict[str, Any] = {item.name: getattr(self, item.name) for item in fields(self)}
        for name, value in found.items():
            if isinstance(value, np.ndarray):
                found[name] = change(value)
        return Distortion(**found)


def only(where: str, rows: FloatArray | ComplexArray) -> Distortion:
    """Give pulses with one thing wrong.

    Parameters
    ----------
    where : str
        Name of a field of `Distortion`.
    rows : ndarray, shape (batch, 1 or cells)
        Its value.

    Returns
    -------
    Distortion
    """
    change: dict[str, Any] = {where: rows}
    return Distortion(**change)


def distorted_unitaries(pulse: IdealPulse, what: Distortion, frame: str = "qubit") -> ComplexArray:
    """Evolve the qubit under distorted pulses, without decoherence.

    Parameters
    ----------
    pulse : IdealPulse
        What they were meant to be.
    what : Distortion
        What is wrong with each.
    frame : "qubit" or "oscillator"
        Against which the carrier's phase counts: with "oscillator" the phases that it has at the
        start and the end of the pulse are no error.

    Returns
    -------
    ndarray, shape (batch, d, d)
        In the qubit's frame, or that of the oscillator where it is `frame`.
    """
    rate = _rates(pulse, what)
    found = propagate_batch(pulse.lossless, BatchDrive(pulse.step, rate)).unitaries
    return _in_frame(pulse, what, _with_leakage(pulse, what, found), frame)


def kicked_unitaries(
    pulse: IdealPulse, where: str, kick: complex, frame: str = "qubit"
) -> ComplexArray:
    """Evolve the qubit under pulses of which each is wrong in one cell.

    Parameters
    ----------
    pulse, frame
        As in `distorted_unitaries`.
    where : "gain", "phase", "rounding" or "added"
        What is wrong.
    kick : complex
        By how much; real for gain and phase.

    Returns
    -------
    ndarray, shape (cells, d, d)
        As `distorted_unitaries` of `kick` times the identity matrix gives them, at the cost of two
        evolutions: what comes before and after the kick is the clean evolution.
    """
    cells = pulse.middles.size
    rows: FloatArray | ComplexArray = np.eye(cells) * complex(kick).real
    if where in ("added", "rounding"):
        rows = np.asarray(np.eye(cells) * complex(kick), dtype=np.complex128)
    what = only(where, rows)
    each = np.concatenate([np.diagonal(_rates(pulse, what)), _rates(pulse, Distortion())[0]])
    drive = BatchDrive(pulse.step, np.ascontiguousarray(each)[:, None])
    slices = propagate_batch(pulse.lossless, drive).unitaries
    kicked, clean = slices[:cells], slices[cells:]
    before = np.empty_like(clean)
    after = np.empty_like(clean)
    before[0] = after[-1] = np.eye(pulse.qubit.levels)
    for k in range(1, cells):
        before[k] = clean[k - 1] @ before[k - 1]
        after[-1 - k] = after[-k] @ clean[-k]
    return _in_frame(pulse, what, after @ kicked @ before, frame)


def distorted_losses(pulse: IdealPulse, what: Distortion, frame: str = "qubit") -> FloatArray:
    """Give the infidelities of distorted pulses without decoherence.

    Parameters
    ----------
    pulse, what, frame
        As in `distorted_unitaries`.

    Returns
    -------
    ndarray, shape (batch,)
        1 - F_avg.
    """
    return pulse.losses(distorted_unitaries(pulse, what, frame))


def longest_stretch(pulse: IdealPulse) -> float:
    """Give the change of the duration that the cells have room for, in s.

    Parameters
    ----------
    pulse : IdealPulse

    Returns
    -------
    float
    """
    return 1.9 * pulse.room * pulse.step


def _rates(pulse: IdealPulse, what: Distortion) -> ComplexArray:
    middles = pulse.middles
    level = np.diff(_stretched(pulse.envelope, pulse, what.stretch), axis=1) / pulse.step
    level = level + what.rounding * pulse.within
    mirrored = np.exp(-2j * math.pi * what.image_offset * middles)
    mirrored = mirrored * tone_factor(pulse, np.array(-what.image_offset))
    level = level + what.image * mirrored * np.conj(level)
    level = level * (1.0 + what.gain) * np.exp(1j * what.turn)
    level = level + what.leakage * _leaking(pulse, what) + what.added * pulse.within
    turn = 2.0 * math.pi * (pulse.offset + what.frequency) * middles
    return np.asarray(pulse.peak * level * np.exp(1j * (turn + what.phase)))


def _stretched(envelope: Envelope, pulse: IdealPulse, stretch: FloatArray) -> ComplexArray:
    """Running integral at the cells' edges with the halves moved apart, shape (batch, edges)."""
    t = pulse.edges
    if not stretch.any():
        return envelope.up_to(t)[None, :]
    middle, half = 0.5 * pulse.duration, 0.5 * stretch
    # A negative stretch leaves out what lies about the middle, where the halves would overlap.
    rising = envelope.up_to(np.minimum(t + half, middle + np.minimum(half, 0.0)))
    start = middle - np.minimum(half, 0.0)
    falling = envelope.up_to(np.maximum(t - half, start)) - envelope.up_to(start)
    # Between the halves the peak is held.
    held = np.clip(t - middle + half, 0.0, np.maximum(stretch, 0.0))
    return np.asarray(rising + falling + held)


def _leaking(pulse: IdealPulse, what: Distortion) -> FloatArray:
    """Share of each cell in which the carrier counts that is always there."""
    before, after = -what.leakage_before, pulse.duration + what.leakage_after
    inside = np.clip(pulse.edges, before, after)
    return np.asarray(np.diff(inside) / pulse.step)


def _with_leakage(pulse: IdealPulse, what: Distortion, found: ComplexArray) -> ComplexArray:
    """Add the stretches before and after the cells, in which only the carrier leaks."""
    room = pulse.room * pulse.step
    for length, last in ((what.leakage_before - room, False), (what.leakage_after - room, True)):
        if length <= 0.0 or not what.leakage.any():
            continue
        if pulse.offset == 0.0 and not what.frequency.any():
            drive = BatchDrive(length, pulse.peak * what.leakage * np.exp(1j * what.phase[:, :1]))
        else:
            cells = max(8, math.ceil(length / pulse.step))
            t = (np.arange(cells) + 0.5) * length / cells
            t = t + (pulse.duration + room if last else -room - length)
            turn = 2.0 * math.pi * (pulse.offset + what.frequency) * t
            rate = pulse.peak * what.leakage * np.exp(1j * (turn + what.phase[:, :1]))
            drive = BatchDrive(length / cells, rate)
        more = propagate_batch(pulse.lossless, drive).unitaries
        found = more @ found if last else found @ more
    return found


def _in_frame(pulse: IdealPulse, what: Distortion, found: ComplexArray, frame: str) -> ComplexArray:
    """Go over to the oscillator's frame at the start and the end of the pulse, if asked to."""
    if frame != "oscillator":
        return found
    n = np.arange(pulse.qubit.levels)
    first, last = _end_phases(pulse, what)
    # a exp(i phi) = D a D^dag with D = exp(-i phi n): the oscillator's frame turns with it.
    turned = np.exp(1j * last * n)[:, :, None] * found * np.exp(-1j * first * n)[:, None, :]
    return np.asarray(turned)


def _end_phases(pulse: IdealPulse, what: Distortion) -> tuple[FloatArray, FloatArray]:
    """Phase of the oscillator at the start and the end of the pulse, shape (batch, 1) each."""
    phase = what.phase
    if phase.shape[1] > 1:
        # The ends lie between two cells, and a phase has no jumps.
        first, last = (
            0.5 * (phase[:, edge - 1 : edge] + phase[:, edge : edge + 1])
            for edge in (pulse.room, pulse.room + pulse.cells)
        )
    else:
        first = last = phase
    return first + 0.0, last + 2.0 * math.pi * what.frequency * pulse.duration
