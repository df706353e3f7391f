"""From the uneven time grid of a circuit simulator to a uniform one, with a stated error.

A simulator keeps a fixed step except behind a breakpoint (a corner of a source), where it starts
again with a small step that doubles. The slope of the signal may jump there. One spline through
such a corner rings into the coarse steps beside it, so the interpolant of this module is a cubic
spline in pieces: it is cut wherever the time step collapses and grows again.
"""

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy.fft import irfft, next_fast_len, rfft
from scipy.interpolate import PPoly
from scipy.linalg import solve_banded

from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform

IntArray = npt.NDArray[np.intp]

# Two samples closer than this part of the median step are one sample: their difference quotient
# would be rounding noise.
_MERGE = 1e-6
# A step that is the start of a restart is smaller than a neighbour two steps away by this ratio.
_RESTART = 1.9
# Weights in the estimate of the interpolation error, chosen by measurement; see `resample`.
_SAFETY, _ROUGHNESS = 2.0, 20.0
# This part of a record is faded in and out before its spectrum is taken for the alias bound.
_TAPER = 0.02


@dataclass(frozen=True, slots=True)
class Resampled:
    """A waveform on a uniform grid, with what the resampling may have cost.

    Parameters
    ----------
    waveform : Waveform
        The samples, on the grid `start + k * step`.
    step : float
        Step of the grid in s.
    interpolation_error : float
        Estimate, meant as a bound, of the largest distance between the interpolant and the
        signal from which the samples came, in the waveform's unit.
    alias_bound : float
        Largest instantaneous value, in the waveform's unit, of the part of the signal that lies
        above half the new sampling rate and so cannot be represented on the grid. The outer 2 %
        of the record are faded out and do not count.
    """

    waveform: Waveform
    step: float = field(metadata={"unit": "s"})
    interpolation_error: float = field(metadata={"unit": "V"})
    alias_bound: float = field(metadata={"unit": "V"})


def interpolant(waveform: Waveform) -> PPoly:
    """Give the interpolant that stands for a waveform everywhere in the package.

    A cubic spline in pieces, cut where the time step restarts; each piece has not-a-knot ends.
    Inside a piece the second derivative is continuous, at a cut the value only. Samples closer
    than 1e-6 of the median step are merged.

    Parameters
    ----------
    waveform : Waveform
        At least two samples, shape (n,), time in s.

    Returns
    -------
    PPoly
        Coefficients `c` of shape (4, m - 1) with `v(t) = sum_k c[k, i] (t - x[i])**(3 - k)` on
        `[x[i], x[i + 1]]`, in the waveform's unit, over the m <= n merged times `x` in s. It is
        not defined outside the record.

    Notes
    -----
    Spline equations in the slopes: C. de Boor, "A Practical Guide to Splines" (1978), chapter IV.
    """
    t, v = _merged(waveform)
    return PPoly.construct_fast(_coefficients(t, v, _restarts(t)), t, extrapolate=False)


def resample(
    waveform: Waveform, step: float, *, start: float | None = None, stop: float | None = None
) -> Resampled:
    """Put a waveform on a uniform grid and state the error.

    Parameters
    ----------
    waveform : Waveform
        Samples on any rising grid, shape (n,).
    step : float
        Step of the new grid in s.
    start, stop : float or None
        Window in s, inside the record; None stands for the ends of the record. The last sample
        is the last one that does not lie behind `stop`.

    Returns
    -------
    Resampled
        The new samples, the interpolation error and the alias bound.

    Raises
    ------
    WaveformError
        If the step is not positive, the window leaves the record, or it holds fewer than two
        samples.

    Notes
    -----
    The interpolation error of a cubic spline in a smooth signal is h^4 v''''/384 to leading order
    (proven bound 5/384: C. A. Hall and W. W. Meyer, J. Approx. Theory 16, 105 (1976), recalled
    from memory; 1/384 is what is measured between even samples), with v'''' from the jumps
    of the spline's third derivative. At a corner or a switch the jumps alternate from sample to
    sample; 20 times their second difference is added there, and the whole is doubled. Over
    sines, Gaussians, squared sines, corners, ramps, switches and steps at 20 to 80 samples per
    period the statement was 1.3 to 63 times the true error, 1.3 to 6 times for sines and
    Gaussians. Pieces of fewer than five samples cannot be judged and do not count; the samples
    themselves are taken as exact.
    """
    first, last = float(waveform.t[0]), float(waveform.t[-1])
    start = first if start is None else start
    stop = last if stop is None else stop
    if not (np.isfinite(step) and step > 0):
        raise WaveformError(f"the step of a uniform grid must be positive, got {step:.6g} s")
    slack = 1e-6 * step
    if start < first - slack or stop > last + slack:
        raise WaveformError(
            f"the window {start:.6g} s to {stop:.6g} s leaves the record, which goes from "
            f"{first:.6g} s to {last:.6g} s",
            hint="simulate longer or choose a window inside the record",
        )
    count = int(np.floor((stop - start + slack) / step)) + 1
    if count < 2:
        raise WaveformError(
            f"the window {start:.6g} s to {stop:.6g} s holds fewer than two samples at a step of "
            f"{step:.6g} s"
        )
    curve = interpolant(waveform)
    t: FloatArray = np.asarray(start + step * np.arange(count), dtype=np.float64)
    v = curve(np.clip(t, first, last))
    return Resampled(
        waveform=Waveform(t, v, waveform.unit),
        step=step,
        interpolation_error=_interpolation_error(curve, start, stop),
        alias_bound=_alias_bound(curve, step, max(start, first), min(stop, last)),
    )


def coarsest_step(waveform: Waveform) -> float:
    """Give the largest time step over which the value moves.

    Parameters
    ----------
    waveform : Waveform
        Samples on any rising grid, shape (n,).

    Returns
    -------
    float
        Step in s. Steps with less than a thousandth of the largest change from one sample to
        the next do not count, so that long steps in a quiet part do no harm. The median step
        when the value never moves.
    """
    steps = np.diff(waveform.t)
    change = np.abs(np.diff(waveform.v))
    largest = float(change.max())
    moving = steps[change > 1e-3 * largest] if largest > 0 else steps
    return float(np.median(steps) if largest == 0 else moving.max())


def _merged(waveform: Waveform) -> tuple[FloatArray, FloatArray]:
    t, v = waveform.t, waveform.v
    steps = np.diff(t)
    small = steps <= _MERGE * float(np.median(steps))
    if not small.any() or t.size - int(small.sum()) < 2:
        return t, v
    keep = np.append(True, ~small)
    t_kept, v_kept = t[keep].copy(), v[keep].copy()
    if small[-1]:  # The record must still end where it ended.
        t_kept[-1], v_kept[-1] = t[-1], v[-1]
    return t_kept, v_kept


def _restarts(t: FloatArray) -> IntArray:
    """Indices of the interior samples at which the step has collapsed and grows again."""
    if t.size < 6:
        return np.empty(0, dtype=np.intp)
    h = np.append(np.diff(t), [0.0, 0.0])
    before, here, after = h[1:-4], h[2:-3], h[3:-2]
    # The step in front of a corner is cut to land on it and may be shorter than the restart's
    # own first step; hence the factor 1.5, and the look two steps back and forth.
    valley = (
        (here <= 1.5 * before)
        & (here < 0.75 * after)
        & (np.maximum(after, h[4:-1]) >= _RESTART * here)
        & (np.maximum(before, h[:-5]) >= _RESTART * here)
    )
    found = np.flatnonzero(valley) + 2
    # A restart doubles its steps. When the doubling starts one step later, the shortest step is
    # the cut one in front of the corner, and the corner is at its end.
    first, second = h[found + 1] / h[found], h[found + 2] / h[found + 1]
    late = (np.abs(second - 2) < 0.1) & (np.abs(first - 2) >= 0.1)
    return np.unique(found + late)


def _coefficients(t: FloatArray, v: FloatArray, cuts: IntArray) -> FloatArray:
    """Coefficients, shape (4, n - 1), of the spline through (t, v) that is cut at `cuts`.

    All pieces stand in one tridiagonal system for the slopes, in which a cut sample occurs
    twice, once as the end of a piece and once as the start of the next.
    """
    scale = (t[-1] - t[0]) / (t.size - 1)  # Steps of order one keep the rows comparable.
    h = np.diff(t) / scale
    slope = np.diff(v) / h
    count = t.size + cuts.size
    ends = np.append(cuts + np.arange(cuts.size), count - 1)
    starts = np.append(0, ends[:-1] + 1)
    size = ends - starts + 1
    real = np.ones(count - 1, dtype=bool)
    real[ends[:-1]] = False  # Between the two copies of a cut sample lies no interval.
    left, right, d_left, d_right = np.zeros((4, count))
    right[:-1][real], left[1:][real] = h, h
    d_right[:-1][real], d_left[1:][real] = slope, slope

    lower, diagonal, upper = right.copy(), 2 * (left + right), left.copy()
    rhs = 3 * (right * d_left + left * d_right)
    long, three, two = size >= 4, size == 3, size == 2
    i = starts[long]
    h0, h1 = right[i], right[i + 1]
    diagonal[i], upper[i] = h1, h0 + h1
    rhs[i] = ((3 * h0 + 2 * h1) * h1 * d_right[i] + h0**2 * d_right[i + 1]) / (h0 + h1)
    i = ends[long]
    h0, h1 = left[i], left[i - 1]
    diagonal[i], lower[i] = h1, h0 + h1
    rhs[i] = ((3 * h0 + 2 * h1) * h1 * d_left[i] + h0**2 * d_left[i - 1]) / (h0 + h1)
    # Three samples make a parabola, two a straight line.
    for i, other, d in ((starts, upper, d_right), (ends, lower, d_left)):
        diagonal[i[three]], other[i[three]], rhs[i[three]] = 1.0, 1.0, 2 * d[i[three]]
        diagonal[i[two]], other[i[two]], rhs[i[two]] = 1.0, 0.0, d[i[two]]
    lower[starts], upper[ends] = 0.0, 0.0

    banded = np.zeros((3, count))
    banded[0, 1:], banded[1], banded[2, :-1] = upper[:-1], diagonal, lower[1:]
    s = solve_banded((1, 1), banded, rhs, overwrite_ab=True, overwrite_b=True, check_finite=False)
    s0, s1 = s[:-1][real], s[1:][real]
    bend = (s0 + s1 - 2 * slope) / h
    c = np.empty((4, t.size - 1))
    c[0] = bend / h / scale**3
    c[1] = ((slope - s0) / h - bend) / scale**2
    c[2] = s0 / scale
    c[3] = v[:-1]
    return c


def _interpolation_error(curve: PPoly, start: float, stop: float) -> float:
    """See `resample`; the largest over the samples around the window."""
    t, c = curve.x, curve.c
    low = max(int(np.searchsorted(t, start, "right")) - 1, 0)
    high = min(int(np.searchsorted(t, stop, "left")) + 1, t.size)
    if t.size < 6:
        # Too few samples to tell a smooth signal from any other: all that is seen is doubtful.
        return float(np.ptp(curve(t)))
    h = np.diff(t)
    # Fourth derivative at the samples, from the jumps of the third.  At the ends of a piece and
    # beside them the not-a-knot condition hides it.
    fourth = np.zeros(t.size)
    fourth[1:-1] = 12 * np.diff(c[0]) / (h[:-1] + h[1:])
    ends = np.concatenate(([0], _restarts(t), [t.size - 1]))
    known = np.ones(t.size, dtype=bool)
    for offset in (-1, 0, 1):
        known[np.clip(ends + offset, 0, t.size - 1)] = False
    fourth[~known] = 0.0
    bend = np.zeros(t.size)
    trio = known[:-2] & known[1:-1] & known[2:]
    bend[1:-1] = np.abs(fourth[:-2] - 2 * fourth[1:-1] + fourth[2:]) * trio
    size = np.abs(fourth) + _ROUGHNESS * bend
    longest = np.append(np.maximum(h, np.append(0.0, h[:-1])), h[-1])
    error = size * longest**4
    return _SAFETY * float(error[low:high].max()) / 384


def _alias_bound(curve: PPoly, step: float, start: float, stop: float) -> float:
    """Largest value of the part above 1/(2 step), from a grid at least twice as fine."""
    fine = min(step / 2, float(np.median(np.diff(curve.x))))
    count = next_fast_len(int(np.ceil((stop - start) / fine)) + 1, real=True)
    t, fine = np.linspace(start, stop, count, retstep=True)
    v = curve(t)
    v -= np.linspace(v[0], v[-1], count)  # The ends must meet: the spectrum is that of a ring.
    ramp = max(int(_TAPER * count), 1)
    fade = np.sin(0.5 * np.pi * (np.arange(ramp) + 0.5) / ramp) ** 2
    v[:ramp] *= fade
    v[-ramp:] *= fade[::-1]
    spectrum = rfft(v, overwrite_x=True)
    spectrum[: int(np.floor(count * float(fine) / (2 * step))) + 1] = 0
    return float(np.abs(irfft(spectrum, count, overwrite_x=True)).max())
