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
_RESTART = 2.0
# The estimate of the interpolation error is multiplied by this.
_SAFETY = 2.0
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
    The interpolation error is found by leaving out samples: a spline through every second sample
    is compared with those left out (e2), one through every fourth likewise (e4). The ratio
    e2/e4 shows the order of convergence that the samples really have, 1/16 for a smooth signal
    and about 1/2 for a corner, so 2 e2 (e2/e4) is stated, the ratio held between 1/16 and 1. The
    samples themselves are taken as exact.
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
    h = np.diff(t)
    here, before, after = h[2:-2], h[1:-3], h[3:-1]
    # The step in front of a corner is cut to land on it and may be shorter than the restart's
    # own first step; hence the factor 1.5, and the look two steps back and forth.
    valley = (
        (here <= 1.5 * before)
        & (here < 0.75 * after)
        & (h[4:] >= _RESTART * here)
        & (np.maximum(before, h[:-4]) >= _RESTART * here)
    )
    return np.flatnonzero(valley) + 2


def _coefficients(t: FloatArray, v: FloatArray, cuts: IntArray) -> FloatArray:
    """Coefficients, shape (4, n - 1), of the spline through (t, v) that is cut at `cuts`.

    All pieces stand in one tridiagonal system for the slopes, in which a cut sample occurs
    twice, once as the end of a piece and once as the start of the next.
    """
    scale = (t[-1] - t[0]) / (t.size - 1)  # Steps of order one keep the rows comparable.
    h = np.diff(t) / scale
    slope = np.diff(v) / h
    index = np.sort(np.concatenate((np.arange(t.size), cuts)), kind="stable")
    real = np.diff(index) > 0  # False between the two copies of a cut sample.
    left = np.zeros(index.size)
    right = np.zeros(index.size)
    d_left = np.zeros(index.size)
    d_right = np.zeros(index.size)
    right[:-1][real], left[1:][real] = h, h
    d_right[:-1][real], d_left[1:][real] = slope, slope

    lower, diagonal, upper = right.copy(), 2 * (left + right), left.copy()
    rhs = 3 * (right * d_left + left * d_right)
    ends = np.append(np.flatnonzero(~real), index.size - 1)
    starts = np.append(0, ends[:-1] + 1)
    size = ends - starts + 1

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

    banded = np.zeros((3, index.size))
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


def _halved(t: FloatArray, cuts: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Every second sample of each piece: indices kept, indices left out, cuts among the kept."""
    starts = np.concatenate(([0], cuts))
    place = np.arange(t.size) - np.repeat(starts, np.diff(np.append(starts, t.size)))
    keep = place % 2 == 0
    keep[-1] = True
    kept = np.flatnonzero(keep)
    return kept, np.flatnonzero(~keep), np.searchsorted(kept, cuts)


def _interpolation_error(curve: PPoly, start: float, stop: float) -> float:
    """See `resample`; from the knots inside the window only."""
    low = max(int(np.searchsorted(curve.x, start, "right")) - 1, 0)
    high = min(int(np.searchsorted(curve.x, stop, "left")) + 1, curve.x.size)
    t = curve.x[low:high]
    v = np.append(curve.c[3], curve(curve.x[-1]))[low:high]
    if t.size < 5:
        # Too few samples to leave any out: the whole distance from a straight line is doubtful.
        return float(np.ptp(v))
    cuts = _restarts(t)
    distances = []
    all_t, all_v = t, v
    for _ in range(2):
        kept, _out, cuts = _halved(t, cuts)
        t, v = t[kept], v[kept]
        coarse = PPoly.construct_fast(_coefficients(t, v, cuts), t)
        distances.append(float(np.abs(coarse(all_t) - all_v).max()))
    e2, e4 = distances
    if e2 == 0:
        return 0.0
    return _SAFETY * e2 * float(np.clip(e2 / e4 if e4 > 0 else 1.0, 1 / 16, 1.0))


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
