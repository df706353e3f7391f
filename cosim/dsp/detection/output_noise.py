"""The noise at the output of a chain: its density, covariance and sample paths.

The complex noise is circular: I and Q have the same power and are in quadrature. Its density is
two-sided in the offset from the carrier and need not be symmetric. Power is counted for I and Q
together: E|x|^2 = integral of S over f. The noise of a single real output is real, with a density
that is even.
"""

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.random import Generator
from scipy.fft import fft, ifft, next_fast_len
from scipy.special import spherical_jn

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# Lags whose covariance is worked out at once: bounds the memory.
_LAGS = 1024
# Part of the variance below which the covariance counts as faded where paths are made.
_FADED = 1e-7


def _no_points() -> FloatArray:
    return np.zeros(0)


@dataclass(frozen=True, slots=True)
class OutputNoise:
    """Stationary Gaussian noise at the output of a chain.

    Parameters
    ----------
    white : float
        Level in V**2/Hz, two-sided, in the whole band that the records carry.
    frequencies : ndarray, shape (m,)
        Offsets from the carrier in Hz, rising, negative ones included.
    density : ndarray, shape (m,)
        Two-sided in V**2/Hz, linear between the points and zero outside them; added to `white`.
        A one-sided density S1 of the carrier-band voltage makes an envelope (peak amplitudes) of
        2 S1(f_c + f). Where the noise is not circular, as behind a limiter, give twice the density
        along the axis between the states.
    quadratures : int
        2 for I + jQ, 1 for a single real output, whose density is even.

    Raises
    ------
    InputError
        If a number is negative or not finite, frequencies do not rise, the number of quadratures
        is another, or the density of a single output is not even.
    """

    white: float = field(default=0.0, metadata={"unit": "V**2/Hz"})
    frequencies: FloatArray = field(
        default_factory=_no_points, metadata={"unit": "Hz", "axes": ("frequencies",)}
    )
    density: FloatArray = field(
        default_factory=_no_points, metadata={"unit": "V**2/Hz", "axes": ("frequencies",)}
    )
    quadratures: int = field(default=2, metadata={"unit": "1"})

    def __post_init__(self) -> None:
        f = np.ascontiguousarray(self.frequencies, dtype=np.float64)
        s = np.ascontiguousarray(self.density, dtype=np.float64)
        object.__setattr__(self, "frequencies", f)
        object.__setattr__(self, "density", s)
        if self.quadratures not in (1, 2):
            raise InputError(f"output noise: wanted 1 or 2 quadratures, got {self.quadratures!r}")
        if f.ndim != 1 or f.shape != s.shape or f.size == 1:
            raise InputError(
                f"output noise: wanted as many densities as frequencies, none or at least two, got "
                f"shapes {f.shape} and {s.shape}"
            )
        if not (np.isfinite(f).all() and (np.diff(f) > 0).all()):
            raise InputError("output noise: the frequencies must be finite and rise")
        if (
            not (math.isfinite(self.white) and self.white >= 0 and np.isfinite(s).all())
            or (s < 0).any()
        ):
            raise InputError("output noise: wanted finite densities of at least zero in V**2/Hz")
        if self.quadratures == 1 and f.size:
            mirrored = np.interp(-f, f, s, left=0.0, right=0.0)
            # Rounding of the mirrored frequencies, with room.
            if np.abs(mirrored - s).max() > 1e-6 * s.max():
                raise InputError(
                    "output noise: the density of a single real output must be even",
                    hint="give it at negative frequencies as well, with half the one-sided value",
                )

    def at(self, frequencies: FloatArray) -> FloatArray:
        """Give the density.

        Parameters
        ----------
        frequencies : ndarray, any shape
            Offsets in Hz.

        Returns
        -------
        ndarray, shape as `frequencies`
            In V**2/Hz, two-sided.
        """
        if not self.frequencies.size:
            return np.full(np.shape(frequencies), self.white)
        table = np.interp(frequencies, self.frequencies, self.density, left=0.0, right=0.0)
        return np.asarray(self.white + table)


def noise_lags(noise: OutputNoise, step: float, count: int) -> ComplexArray:
    """Give the covariance of the noise on a uniform grid.

    Parameters
    ----------
    noise : OutputNoise
    step : float
        In s.
    count : int
        Number of lags.

    Returns
    -------
    ndarray of complex, shape (count,)
        r_k = E[x_{j+k} x_j^*] in V**2. The white part has the band of the grid, 1/step.

    Notes
    -----
    r(t) = integral of S(f) exp(2 pi i f t) df (theorem of Wiener and Khinchin), exact for the
    straight lines between the points.
    """
    r = np.zeros(count, dtype=np.complex128)
    if noise.frequencies.size:
        width = np.diff(noise.frequencies)
        middle = noise.frequencies[:-1] + width / 2
        mean = width * (noise.density[:-1] + noise.density[1:]) / 2
        rise = width * np.diff(noise.density) / 2
        for begin in range(0, count, _LAGS):
            lag = step * np.arange(begin, min(begin + _LAGS, count))
            x = np.pi * np.outer(lag, width)
            wave = np.exp(2j * np.pi * np.outer(lag, middle))
            # A line over one interval: its mean goes with sin(x)/x, its slope with j1(x).
            part = mean * np.sinc(x / np.pi) + 1j * rise * spherical_jn(1, x)
            r[begin : begin + lag.size] = (wave * part).sum(axis=1)
    r[0] += noise.white / step
    return r if noise.quadratures == 2 else np.asarray(r.real, dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class NoiseSpectrumPlan:
    """The lines from which noise of a given covariance is made.

    Parameters
    ----------
    amplitudes : ndarray, shape (period,)
        Of the lines of a transform in V, for real and imaginary parts of unit variance.
    quadratures : int
        As in `OutputNoise`.
    error : float
        Power of lines that would have to be negative and are left out, over the whole power; 0
        where the paths have exactly the covariance that was asked for.
    """

    amplitudes: FloatArray = field(metadata={"unit": "V"})
    quadratures: int = field(metadata={"unit": "1"})
    error: float = field(metadata={"unit": "1"})


def noise_period(count: int) -> int:
    """Give the period in samples that paths of a length need.

    Parameters
    ----------
    count : int
        Samples of a path.

    Returns
    -------
    int
        At least twice as many, of small prime factors.
    """
    return int(next_fast_len(2 * count))


def circulant_powers(lags: ComplexArray, period: int) -> FloatArray:
    """Give the power of each line of a periodic process with a covariance.

    Parameters
    ----------
    lags : ndarray of complex, shape (at least period//2 + 1,)
        Covariance in V**2.
    period : int
        In samples.

    Returns
    -------
    ndarray, shape (period,)
        In V**2; summed over the lines it is period times the variance. May be negative where the
        covariance does not fade within half the period.
    """
    circle = np.zeros(period, dtype=np.complex128)
    half = period // 2
    circle[: half + 1] = lags[: half + 1]
    circle[period - half :] = np.conj(lags[half:0:-1])
    return np.asarray(fft(circle).real)


def plan_noise(noise: OutputNoise, step: float, count: int) -> NoiseSpectrumPlan:
    """Plan paths of noise on a uniform grid.

    Parameters
    ----------
    noise : OutputNoise
    step : float
        In s.
    count : int
        Samples of a path.

    Returns
    -------
    NoiseSpectrumPlan

    Notes
    -----
    Circulant embedding: C. R. Dietrich, G. N. Newsam, "Fast and exact simulation of stationary
    Gaussian processes through circulant embedding of the covariance matrix", SIAM J. Sci. Comput.
    18, 1088 (1997).
    """
    longest = noise_period(count)
    lags = noise_lags(noise, step, longest // 2 + 1)
    # A path must not meet itself a period later: where the covariance has faded, it may be short.
    memory = int(np.flatnonzero(np.abs(lags) >= _FADED * abs(lags[0]))[-1])
    period = min(longest, int(next_fast_len(count + memory)))
    powers = circulant_powers(lags, period)
    total = np.abs(powers).sum()
    error = float(np.abs(powers[powers < 0]).sum() / total) if total > 0 else 0.0
    return NoiseSpectrumPlan(
        np.sqrt(np.maximum(powers, 0.0) / (2 * period)), noise.quadratures, error
    )


def draw_noise(plan: NoiseSpectrumPlan, draws: ComplexArray, count: int) -> ComplexArray:
    """Make paths from independent complex numbers.

    Parameters
    ----------
    plan : NoiseSpectrumPlan
    draws : ndarray of complex, shape (paths, period)
        From `draw_lines`.
    count : int
        Samples of a path, at most half the period.

    Returns
    -------
    ndarray of complex, shape (paths, count)
        In V.
    """
    paths = ifft(draws * plan.amplitudes, axis=1, norm="forward", overwrite_x=True)[:, :count]
    if plan.quadratures == 1:
        # The real part of circular noise has half its power.
        return np.asarray(math.sqrt(2) * paths.real + 0j)
    return np.asarray(paths)


def draw_lines(generator: Generator, paths: int, period: int) -> ComplexArray:
    """Draw circular complex numbers.

    Parameters
    ----------
    generator : numpy.random.Generator
    paths, period : int

    Returns
    -------
    ndarray of complex, shape (paths, period)
        Real and imaginary part of unit variance each.
    """
    return np.asarray(generator.standard_normal((paths, 2 * period)).view(np.complex128))
