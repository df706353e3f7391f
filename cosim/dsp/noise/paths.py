"""Sample paths of Gaussian noise on a uniform grid, from a spectral density and a seed.

A path is a sum of two parts. Up to a few turns per record the density is carried by single lines
at the nodes of a Gauss rule, which reproduces the covariance over the whole record, drifts slower
than the record included. Above, the lines of a discrete Fourier transform carry it, with a period
longer than the record so that its ends do not meet. Between the two the density is shared out
smoothly. The amplitudes of all lines are independent Gaussians, so that the path is Gaussian.
"""

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.random import Generator, Philox, SeedSequence
from scipy.fft import irfft, next_fast_len

from cosim.dsp.noise.bands import frequency_grid
from cosim.dsp.noise.density import SpectralDensity
from cosim.errors import InputError
from cosim.waveform import FloatArray

# From one turn per record the transform takes over from the single lines, within so many turns.
# A wider step would need more lines, a narrower one a longer period.
_STEP_TURNS = 8.0
# By default what is slower than this many records is left to the quasi-static average: over the
# record such a component turns by 2 pi/10 at the most.
_SLOW_RECORDS = 10.0
# The period of the transform is doubled up to this many records.
_LONGEST_PERIOD = 16
# Samples are made in blocks of this size, at fixed places, because the last bit of transforms that
# are made together may depend on their number.
_BLOCK = 16


@dataclass(frozen=True, slots=True)
class PathPlan:
    """What the paths of a density on a grid carry, and what they do not.

    Parameters
    ----------
    count : int
        Samples in a path.
    dt : float
        Their interval in s.
    unit : str
        Unit of the paths.
    slow_variance : float
        Power between `slow_band`, slower than the paths carry: the variance of a constant offset,
        to be averaged apart or drawn with the paths. In the unit's square.
    slow_band : tuple of 2 floats
        In Hz.
    missed_variance : float
        Power in `missed_band`, above half the sampling rate, which no grid of this step carries.
        In the unit's square; infinite for noise that is white without end.
    missed_band : tuple of 2 floats
        In Hz.
    line_frequencies, line_variances : ndarray, shape (lines,)
        Single lines: Hz and the unit's square.
    period : int
        Samples in a period of the transform; 0 without one.
    bin_variances : ndarray, shape (period//2 + 1,)
        Power of the transform's lines in the unit's square.
    covariance_error : float
        Largest deviation of the covariance from that of the transform with a four times longer
        period, over the variance of the paths, dimensionless.
    """

    count: int
    dt: float = field(metadata={"unit": "s"})
    unit: str
    slow_variance: float
    slow_band: tuple[float, float] = field(metadata={"unit": "Hz"})
    missed_variance: float
    missed_band: tuple[float, float] = field(metadata={"unit": "Hz"})
    line_frequencies: FloatArray = field(metadata={"unit": "Hz"})
    line_variances: FloatArray
    period: int
    bin_variances: FloatArray
    covariance_error: float

    @property
    def variance(self) -> float:
        """Variance of a sample of a path in the unit's square, without the slow offset."""
        return float(self.line_variances.sum() + self.bin_variances.sum())


def plan_paths(
    density: SpectralDensity,
    count: int,
    dt: float,
    *,
    slowest: float | None = None,
    tolerance: float = 1e-3,
) -> PathPlan:
    """Plan the paths of a density on a uniform grid.

    Parameters
    ----------
    density : SpectralDensity
        Known from `slowest` to half the sampling rate at least.
    count : int
        Samples in a path, at least 2.
    dt : float
        Their interval in s.
    slowest : float, optional
        Lowest frequency in Hz that the paths carry; a tenth of 1/(count dt) by default.
    tolerance : float
        For the covariance, over the variance: the period is doubled, up to 16 records, until the
        error is below. What is reached stands in the plan: below 1e-6 for smooth densities, and
        about the tolerance where the density ends sharply between `slowest` and half the
        sampling rate.

    Returns
    -------
    PathPlan

    Raises
    ------
    InputError
        If a number is out of range, the density does not cover the band, or the power below
        `slowest` is infinite.

    Notes
    -----
    M. Shinozuka, G. Deodatis, "Simulation of stochastic processes by spectral representation",
    Appl. Mech. Rev. 44, 191 (1991), with Gaussian amplitudes in place of random phases.
    """
    if count < 2 or not (math.isfinite(dt) and dt > 0):
        raise InputError(
            f"noise paths: wanted at least two samples at a positive interval in s, got {count!r} "
            f"and {dt!r}"
        )
    duration, nyquist = count * dt, 1 / (2 * dt)
    cut = 1 / (_SLOW_RECORDS * duration) if slowest is None else slowest
    if not 0 < cut < nyquist:
        raise InputError(
            f"noise paths: wanted a slowest frequency between 0 and half the sampling rate, "
            f"{nyquist:.6g} Hz, got {cut!r}"
        )
    density.require(cut, nyquist, f"a path of {count} samples at {dt:.6g} s")
    slow = density.variance(density.low, cut)
    if not math.isfinite(slow):
        raise InputError(
            f"noise paths: the power below {cut:.6g} Hz is infinite",
            hint="give the density a lower corner: one over the time since the last calibration",
        )
    # Paths so short that the transform would carry next to nothing consist of single lines.
    start, stop = _step(duration, cut)
    single = nyquist <= stop + (stop - start)
    top = nyquist if single else stop
    grid = frequency_grid(cut, top, duration, density.corners)
    share = 1.0 if single else 1 - _share_above(grid.frequencies, duration, cut)
    lines = grid.weights * density.at(grid.frequencies) * share
    period, bins, error = 0, np.zeros(1), 0.0
    if not single:
        total = density.variance(cut, nyquist)
        period, bins, error = _transform_bins(density, count, dt, cut, tolerance * total)
        error = error / total if total > 0 else 0.0
    return PathPlan(
        count,
        dt,
        density.unit,
        slow,
        (density.low, cut),
        density.variance(nyquist, density.high),
        (nyquist, density.high),
        grid.frequencies,
        lines,
        period,
        bins,
        error,
    )


def path_covariance(plan: PathPlan) -> FloatArray:
    """Give the covariance of the paths of a plan, exact for what `sample_paths` makes.

    Parameters
    ----------
    plan : PathPlan

    Returns
    -------
    ndarray, shape (count,)
        <x(0) x(k dt)> in the unit's square, without the slow offset.
    """
    lag = np.arange(plan.count) * plan.dt
    found = np.cos(2 * np.pi * np.outer(lag, plan.line_frequencies)) @ plan.line_variances
    if plan.period:
        found = found + _bin_covariance(plan.bin_variances, plan.period, plan.count)
    return np.asarray(found)


def sample_paths(
    plan: PathPlan,
    seed: int,
    first: int,
    count: int,
    *,
    stream: int = 0,
    offset: bool = False,
) -> FloatArray:
    """Draw paths.

    Parameters
    ----------
    plan : PathPlan
    seed : int
        Not negative.
    first, count : int
        Number of the first path and how many; a path depends on the plan, the seed, the stream
        and its number alone, bit by bit, whatever else is drawn with it.
    stream : int
        Tells apart the sources of one run, not negative.
    offset : bool
        Whether the slow part is drawn as well, as a constant of each path.

    Returns
    -------
    ndarray, shape (count, plan.count)
        In the plan's unit.

    Raises
    ------
    InputError
        If a number is negative.
    """
    _check_numbers(seed, first, count, stream)
    phase = 2 * np.pi * np.outer(plan.line_frequencies, np.arange(plan.count) * plan.dt)
    waves = np.concatenate([np.cos(phase), np.sin(phase)])
    size = np.tile(np.sqrt(plan.line_variances), 2)
    bins = plan.bin_variances.size if plan.period else 0
    # The transform counts the lines inside twice, those at its ends once.
    scale = np.sqrt(plan.bin_variances[:bins]) * plan.period / 2
    scale[-1:] *= 2
    found = np.empty((count, plan.count))
    for begin in range(first - first % _BLOCK, first + count, _BLOCK):
        draws = np.array(
            [
                generator(seed, stream, number).standard_normal(1 + size.size + 2 * bins)
                for number in range(begin, begin + _BLOCK)
            ]
        )
        # Not by the BLAS, whose last bit depends on its number of threads.
        block = np.einsum("bl,ln->bn", draws[:, 1 : 1 + size.size] * size, waves)
        if bins:
            pair = draws[:, 1 + size.size :].reshape(_BLOCK, 2, bins) * scale
            spectrum = pair[:, 0] - 1j * pair[:, 1]
            block += irfft(spectrum, plan.period, axis=1)[:, : plan.count]
        if offset:
            block += math.sqrt(plan.slow_variance) * draws[:, :1]
        low, high = max(begin, first), min(begin + _BLOCK, first + count)
        found[low - first : high - first] = block[low - begin : high - begin]
    return found


def telegraph_paths(
    amplitude: float,
    rate: float,
    samples: int,
    dt: float,
    seed: int,
    first: int,
    count: int,
    *,
    stream: int = 0,
) -> FloatArray:
    """Draw paths of a random telegraph signal, which is not Gaussian.

    Parameters
    ----------
    amplitude : float
        The signal is +amplitude or -amplitude, in any unit.
    rate : float
        Rate of flips each way in 1/s, so that the correlation time is 1/(2 rate).
    samples : int
        In a path.
    dt : float
        Their interval in s.
    seed, first, count, stream
        As in `sample_paths`.

    Returns
    -------
    ndarray, shape (count, samples)
        The signal at the samples, exact in law there, in the unit of `amplitude`.

    Raises
    ------
    InputError
        If a number is out of range.

    Notes
    -----
    Between samples the signal has flipped an odd number of times with the probability
    (1 - exp(-2 rate dt))/2 (Poisson process).
    """
    _check_numbers(seed, first, count, stream)
    if samples < 1 or not (rate >= 0 and math.isfinite(rate) and dt > 0 and math.isfinite(dt)):
        raise InputError(
            f"telegraph paths: wanted samples, a positive interval in s and a rate of at least "
            f"zero in 1/s, got {samples!r}, {dt!r} and {rate!r}"
        )
    flip = -math.expm1(-2 * rate * dt) / 2
    found = np.empty((count, samples))
    for row, number in enumerate(range(first, first + count)):
        draws = generator(seed, stream, number).random(samples)
        flips = np.concatenate(([draws[0] < 0.5], draws[1:] < flip))
        found[row] = amplitude * (1 - 2 * (np.cumsum(flips) % 2))
    return found


def generator(seed: int, stream: int, number: int) -> Generator:
    """Give the random numbers of one sample of one source.

    Parameters
    ----------
    seed, stream, number : int
        Not negative.

    Returns
    -------
    numpy.random.Generator
        Independent for each triple, the same on every machine and worker.
    """
    return Generator(Philox(SeedSequence(seed, spawn_key=(stream, number))))


def _step(duration: float, cut: float) -> tuple[float, float]:
    """Give the band in Hz in which the transform takes over from the single lines."""
    start = max(1 / duration, cut)
    return start, start + _STEP_TURNS / duration


def _share_above(frequencies: FloatArray, duration: float, cut: float) -> FloatArray:
    """Give the share of the density that the transform carries, from 0 to 1 without a kink."""
    start, stop = _step(duration, cut)
    x = np.clip((frequencies - start) / (stop - start), 0.0, 1.0)
    return np.asarray(np.sin(np.pi / 2 * np.sin(np.pi / 2 * x) ** 2) ** 2)


def _transform_bins(
    density: SpectralDensity, count: int, dt: float, cut: float, allowed: float
) -> tuple[int, FloatArray, float]:
    """Find a period long enough: its samples, the power of its lines, the error left."""
    records = 2
    while True:
        period = 2 * next_fast_len(records * count // 2 + 1, real=True)
        bins = _bin_variances(density, count, dt, cut, period)
        longer = _bin_variances(density, count, dt, cut, 4 * period)
        difference = _bin_covariance(bins, period, count)
        difference = difference - _bin_covariance(longer, 4 * period, count)
        error = float(np.abs(difference).max())
        if error <= allowed or 2 * records > _LONGEST_PERIOD:
            return period, bins, error
        records *= 2


def _bin_variances(
    density: SpectralDensity, count: int, dt: float, cut: float, period: int
) -> FloatArray:
    """Give the power of each line of the transform."""
    step, nyquist = 1 / (period * dt), 1 / (2 * dt)
    f = np.minimum(np.arange(period // 2 + 1) * step, nyquist)
    share = _share_above(f, count * dt, cut)
    used = share > 0
    found = np.zeros(f.size)
    found[used] = density.at(f[used]) * step
    found[-1] /= 2
    # Where the density jumps inside a line's band, its mean over the band counts.
    for corner in density.corners:
        for line in {math.floor(corner / step), math.floor(corner / step) + 1}:
            low, high = max((line - 0.5) * step, cut), min((line + 0.5) * step, nyquist)
            if line < f.size and used[line] and low <= corner <= high:
                found[line] = density.variance(low, high)
    return found * share


def _bin_covariance(bins: FloatArray, period: int, count: int) -> FloatArray:
    halves = np.concatenate([bins[:1], bins[1:-1] / 2, bins[-1:]])
    return np.asarray(irfft(halves.astype(np.complex128), period)[:count] * period)


def _check_numbers(seed: int, first: int, count: int, stream: int) -> None:
    numbers = (("seed", seed), ("first path", first), ("count", count), ("stream", stream))
    for name, value in numbers:
        if value < 0:
            raise InputError(f"noise paths: wanted a {name} of at least zero, got {value!r}")
