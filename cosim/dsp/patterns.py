"""Waveforms made from points, bit patterns and words, as digital sources and generators play."""

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np
import numpy.typing as npt

from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform

EdgeShape = Literal["linear", "smooth"]

_MOST_SAMPLES = 5_000_000
# Straight pieces of a smooth edge. They depart from the raised cosine by at most
# (pi/n)^2/16 of the step, 1.5e-4 here: the error of linear interpolation, h^2/8 max|f''|.
_SMOOTH_PIECES = 64


def from_points(points: Sequence[tuple[float, float]], *, unit: str = "V") -> Waveform:
    """Give the waveform that goes through points in straight lines.

    Parameters
    ----------
    points : sequence of (float, float)
        Time in s, rising, and value in `unit`; at least two.
    unit : str
        "V" or "A".

    Returns
    -------
    Waveform
        Shape (number of points,).

    Raises
    ------
    WaveformError
        If there are fewer than two points, or the times do not rise.
    """
    return Waveform(
        np.array([time for time, _ in points], dtype=np.float64),
        np.array([value for _, value in points], dtype=np.float64),
        unit,
    )


def repeat_pattern(
    bits: str | Sequence[int],
    period: float,
    *,
    low: float,
    high: float,
    edge: float,
    start: float = 0.0,
    count: int = 1,
    stop: float | None = None,
    shape: EdgeShape = "linear",
    unit: str = "V",
) -> Waveform:
    """Play a pattern of bits, once or again and again.

    Parameters
    ----------
    bits : str or sequence of int
        Of 0 and 1, in the order of time: "0110".
    period : float
        Duration of one bit in s.
    low, high : float
        Levels of 0 and 1 in `unit`.
    edge : float
        Whole duration of a change of level in s, more than 0 and at most `period`. A change begins
        where its bit begins, as with SPICE's PULSE.
    start : float
        Time in s at which the first bit begins; before it, its level holds.
    count : int
        How often the pattern is played; after the last bit, its level holds.
    stop : float or None
        In place of `count`: play until this time in s.
    shape : "linear" or "smooth"
        Straight edges, or a raised cosine in 64 straight pieces.
    unit : str
        "V" or "A".

    Returns
    -------
    Waveform
        Its first sample is at `start`, its last one where the last bit ends or later.

    Raises
    ------
    WaveformError
        If the bits are none, a duration is out of its range, or more than five million samples
        would be needed.
    """
    levels = _bits(bits)
    _check_timing(period, edge, start)
    if stop is not None:
        if not math.isfinite(stop):
            raise WaveformError(f"the stop must be finite, got {stop!r} s")
        count = max(1, math.ceil((stop - start) / (period * levels.size)))
    if count < 1:
        raise WaveformError(f"a pattern is played at least once, got count = {count}")
    pieces = 1 if shape == "linear" else _SMOOTH_PIECES
    if levels.size * count * (pieces + 1) > _MOST_SAMPLES:
        raise WaveformError(
            f"{levels.size * count} bits of {period:.6g} s take more than {_MOST_SAMPLES} samples",
            hint="take a longer period, linear edges, or an earlier stop",
        )
    played = np.tile(levels, count)
    return _played(np.where(played, high, low), period, edge, start, pieces, unit)


def clocked_words(
    words: Sequence[int],
    clock_frequency: float,
    width: int,
    *,
    low: float,
    high: float,
    edge: float,
    start: float = 0.0,
    count: int = 1,
    stop: float | None = None,
    shape: EdgeShape = "linear",
    unit: str = "V",
) -> tuple[Waveform, ...]:
    """Play words on a bus of parallel lines, one word per clock period.

    Parameters
    ----------
    words : sequence of int
        Unsigned words, in the order of time.
    clock_frequency : float
        Words per second in Hz.
    width : int
        Number of lines.
    low, high, edge, start, count, stop, shape, unit
        As in `repeat_pattern`, for every line.

    Returns
    -------
    tuple of Waveform
        One for each line, the least significant bit first.

    Raises
    ------
    WaveformError
        If a word is not from 0 to 2**width - 1, or as `repeat_pattern`.
    """
    if width < 1:
        raise WaveformError(f"a bus has at least one line, got {width}")
    if not (math.isfinite(clock_frequency) and clock_frequency > 0.0):
        raise WaveformError(f"the clock must be positive and finite, got {clock_frequency!r} Hz")
    for place, word in enumerate(words, start=1):
        if not 0 <= word < 2**width:
            raise WaveformError(
                f"word {place} is {word}, which does not fit {width} line{'s' * (width > 1)}: "
                f"wanted 0 to {2**width - 1}"
            )
    return tuple(
        repeat_pattern(
            [word >> line & 1 for word in words],
            1.0 / clock_frequency,
            low=low,
            high=high,
            edge=edge,
            start=start,
            count=count,
            stop=stop,
            shape=shape,
            unit=unit,
        )
        for line in range(width)
    )


def _bits(bits: str | Sequence[int]) -> npt.NDArray[np.bool_]:
    found = [{"0": 0, "1": 1}.get(bit, -1) if isinstance(bit, str) else bit for bit in bits]
    if not found:
        raise WaveformError("a pattern needs at least one bit")
    for place, bit in enumerate(found):
        if bit not in (0, 1):
            raise WaveformError(f"bit {place + 1} must be 0 or 1, got {bits[place]!r}")
    return np.array(found, dtype=bool)


def _check_timing(period: float, edge: float, start: float) -> None:
    if not (math.isfinite(period) and period > 0.0):
        raise WaveformError(f"the period must be positive and finite, got {period!r} s")
    if not 0.0 < edge <= period * (1.0 + 1e-12):
        raise WaveformError(
            f"an edge takes more than 0 s and at most the {period:.6g} s of one bit, "
            f"got {edge:.6g} s"
        )
    if not math.isfinite(start):
        raise WaveformError(f"the start must be finite, got {start!r} s")


def _played(
    values: FloatArray, period: float, edge: float, start: float, pieces: int, unit: str
) -> Waveform:
    """Join levels by edges; samples stand at the start, along each edge and at the end."""
    changes = np.flatnonzero(np.diff(values)) + 1
    along = np.arange(pieces + 1) / pieces
    rise = along if pieces == 1 else (1.0 - np.cos(np.pi * along)) / 2.0
    before, after = values[changes - 1], values[changes]
    # The last piece of an edge as long as a bit ends where the next edge begins, or one rounding
    # behind it: the earlier of the two samples is left out.
    t = start + changes[:, None] * period + along * edge
    v = before[:, None] + (after - before)[:, None] * rise
    v[:, -1] = after
    end = start + values.size * period
    times = np.concatenate(([start], t.ravel(), [max(end, float(t.max(initial=end)))]))
    levels = np.concatenate((values[:1], v.ravel(), values[-1:]))
    keep = np.append(np.diff(times) > 1e-9 * edge, True)
    return Waveform(times[keep], levels[keep], unit)
