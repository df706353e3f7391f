"""What stands beside a pulse: lines of its spectrum, decays after its edges, converter's steps."""

import math
from dataclasses import dataclass

import numpy as np

from cosim.waveform import ComplexArray, FloatArray

# Below this part of the pulse's amplitude nothing is looked for: -86 dBc.
LEAST = 5e-5
# A line stands out by this factor from the median of the spectrum.
_PROMINENCE = 6.0
MOST_LINES = 6
# What is left in the second half of a plateau of a line that rings in its first third, at most.
_KEPT = 0.3
# A line is told from amplitude, phase and droop from this many periods on the plateau on.
_LEAST_PERIODS = 2.5
# Lines are told from one another from this many periods of their distance on.
APART = 1.5
# Of the power that a decay explains, to be told from none.
_EXPLAINED = 0.3


@dataclass(frozen=True, slots=True)
class Line:
    """A line of the spectrum of what is left of a plateau.

    Parameters
    ----------
    frequency : float
        Offset in Hz.
    amplitude : complex
        Over that of the pulse, at t = 0.
    decay_time : float
        In s; infinite for a steady line.
    """

    frequency: float
    amplitude: complex
    decay_time: float = math.inf


def find_lines(t: FloatArray, y: ComplexArray) -> tuple[Line, ...]:
    """Find the lines in what is left of a plateau.

    Parameters
    ----------
    t : ndarray, shape (n,)
        Uniform times on the plateau in s.
    y : ndarray of complex, shape (n,)
        What is left over the pulse.

    Returns
    -------
    tuple of Line
        What decays first, of which there is one at most; then steady lines, the strongest first.
    """
    if t.size < 32:
        return ()
    x = np.linspace(-1.0, 1.0, t.size)
    basis = np.vander(x, 3).astype(np.complex128)
    left = y - basis @ np.linalg.lstsq(basis, y, rcond=None)[0]
    ringing, left = _ringing(t, left)
    window = np.hanning(t.size + 2)[1:-1]
    frequencies: list[float] = []
    amplitudes: list[complex] = []
    rest = left
    while len(frequencies) < MOST_LINES:
        frequency = _strongest(t, rest, window)
        if frequency is None:
            break
        near = min((abs(frequency - other) for other in frequencies), default=math.inf)
        if near * float(t[-1] - t[0]) < APART:
            break
        frequencies, amplitudes, rest = _together(t, left, [*frequencies, frequency])
    lines = [Line(*pair) for pair in zip(frequencies, amplitudes, strict=True)]
    lines = [line for line in lines if abs(line.amplitude) > LEAST]
    lines.sort(key=lambda line: -abs(line.amplitude))
    return (*([] if ringing is None else [ringing]), *lines)


def _together(
    t: FloatArray, y: ComplexArray, frequencies: list[float]
) -> tuple[list[float], list[complex], ComplexArray]:
    """Fit steady lines and a parabola; frequencies by the method of Gauss and Newton."""
    middle = 0.5 * (t[0] + t[-1])
    x = np.linspace(-1.0, 1.0, t.size)
    smooth = np.vander(x, 3)
    count, found = len(frequencies), np.array(frequencies)
    # Once more for the amplitudes, with frequencies that stay.
    for last in (False, False, True):
        tones = np.exp(2j * math.pi * found * (t[:, None] - middle))
        columns = [tones, smooth] if last else [tones, smooth, (t[:, None] - middle) * tones]
        parts = np.linalg.lstsq(np.hstack(columns), y, rcond=None)[0]
        if not last:
            found = found + (parts[count + 3 :] / parts[:count]).imag / (2.0 * math.pi)
    rest = y - np.hstack(columns) @ parts
    begin = parts[:count] * np.exp(-2j * math.pi * found * middle)
    return found.tolist(), begin.tolist(), np.asarray(rest)


def _ringing(t: FloatArray, left: ComplexArray) -> tuple[Line | None, ComplexArray]:
    """Find what rings at the beginning and no more in the end, and take it away."""
    first = slice(0, t.size // 3)
    count = t[first].size
    # It is greatest where it begins, so that this window begins at its greatest.
    window = np.cos(0.5 * math.pi * np.arange(count) / count) ** 2
    frequency = _strongest(t[first], left[first], window)
    if frequency is None:
        return None, left
    tone = np.exp(2j * math.pi * frequency * t)
    begins = abs(complex(window @ (left / tone)[first] / window.sum()))
    last = slice(t.size // 2, None)
    ends = abs(complex(np.mean((left / tone)[last] * np.hanning(t[last].size)))) * 2.0
    if ends > _KEPT * begins:
        return None, left
    span = float(t[-1] - t[0])
    best, chosen = math.inf, (0.0, left, complex(0.0))
    for time in np.geomspace(2.0 * (t[1] - t[0]), span, 16):
        fade = np.exp(-(t - t[0]) / time)
        columns = np.column_stack((fade * tone, fade * tone.conj()))
        parts = np.linalg.lstsq(columns, left, rcond=None)[0]
        missed = left - columns @ parts
        power = float(np.vdot(missed, missed).real)
        if power < best:
            best, chosen = power, (float(time), missed, complex(np.abs(parts).sum()))
    if best > (1.0 - _EXPLAINED) * float(np.vdot(left, left).real):
        return None, left
    return Line(abs(frequency), chosen[2], chosen[0]), chosen[1]


def _strongest(t: FloatArray, y: ComplexArray, window: FloatArray) -> float | None:
    """Give the frequency of the strongest line, if it stands out."""
    span = float(t[-1] - t[0])
    spectrum, frequencies = _spectrum(y * window / window.sum(), span / (t.size - 1))
    size = np.where(np.abs(frequencies) * span >= _LEAST_PERIODS, np.abs(spectrum), 0.0)
    if not np.any(size > 0.0):
        return None
    peak = int(np.argmax(size))
    if size[peak] < max(LEAST, _PROMINENCE * float(np.median(size[size > 0.0]))):
        return None
    return _peak_place(size, peak, frequencies)


def find_decay(t: FloatArray, y: ComplexArray, begin: float, duration: float) -> float | None:
    """Find an exponential approach in what is left of a plateau.

    Parameters
    ----------
    t : ndarray, shape (n,)
        Uniform times on the plateau in s.
    y : ndarray of complex, shape (n,)
        What is left over the pulse.
    begin : float
        Time of the edge in s.
    duration : float
        Of the pulse in s.

    Returns
    -------
    float or None
        Its time constant in s, to begin from; None where there is none.
    """
    if t.size < 16:
        return None
    x = np.linspace(-1.0, 1.0, t.size)
    smooth = np.vander(x, 3).astype(np.complex128)
    rest = y - smooth @ np.linalg.lstsq(smooth, y, rcond=None)[0]
    power = float(np.vdot(rest, rest).real)
    best, chosen = 0.0, None
    for time in np.geomspace(2.0 * (t[1] - t[0]), duration / 3.0, 14):
        decay = np.exp(-(t - begin) / time)
        columns = np.column_stack((smooth, decay))
        parts, *_ = np.linalg.lstsq(columns, y, rcond=None)
        missed = y - columns @ parts
        gain = power - float(np.vdot(missed, missed).real)
        if abs(parts[-1]) * decay[0] > LEAST and gain > max(best, _EXPLAINED * power):
            best, chosen = gain, float(time)
    return chosen


def above(y: ComplexArray, step: float, frequency: float) -> ComplexArray:
    """Give what lies farther from the carrier than some offset.

    Parameters
    ----------
    y : ndarray of complex, shape (n,)
        Samples that are small at both ends.
    step : float
        Time between them in s.
    frequency : float
        In Hz.

    Returns
    -------
    ndarray of complex, shape (n,)
    """
    spectrum = np.fft.fft(y)
    spectrum[np.abs(np.fft.fftfreq(y.size, step)) <= frequency] = 0.0
    return np.asarray(np.fft.ifft(spectrum))


def _spectrum(y: ComplexArray, step: float) -> tuple[ComplexArray, FloatArray]:
    count = 4 * y.size
    return np.fft.fftshift(np.fft.fft(y, count)), np.fft.fftshift(np.fft.fftfreq(count, step))


def _peak_place(size: FloatArray, peak: int, frequencies: FloatArray) -> float:
    """Give the vertex of a parabola through the logarithm around a peak."""
    if not 0 < peak < size.size - 1 or min(size[peak - 1], size[peak + 1]) <= 0.0:
        return float(frequencies[peak])
    low, middle, high = np.log(size[peak - 1 : peak + 2])
    bend = low - 2.0 * middle + high
    shift = 0.5 * (low - high) / bend if bend < 0.0 else 0.0
    return float(frequencies[peak] + shift * (frequencies[1] - frequencies[0]))
