"""The analog-to-digital converters behind a chain, one for I and one for Q, with their filter.

The filter in front is a digital Butterworth low-pass on the grid of the records (by the bilinear
transform, its corner pre-warped). The converter rounds to the nearest of 2**bits levels from
-full_scale/2 in steps of full_scale/2**bits; zero is one of them.
"""

import math
from dataclasses import dataclass, field

import numpy as np
from scipy.fft import ifft
from scipy.special import ndtr

from cosim.dsp.detection.low_pass import butterworth_sections, run_sections
from cosim.dsp.detection.output_noise import (
    OutputNoise,
    circulant_powers,
    noise_lags,
    noise_period,
)
from cosim.errors import InputError
from cosim.waveform import ComplexArray

# Corner of the filter in units of the sampling rate, unless it is given.
_CORNER = 0.4
# The filter has forgotten its start when its slowest pole is down to this.
_SETTLED = 1e-6
# The ratio of sampling interval to step may be off an integer by this, which is rounding.
_INTEGER = 1e-6


@dataclass(frozen=True, slots=True)
class Adc:
    """An analog-to-digital converter for each quadrature, and the filter in front of it.

    Parameters
    ----------
    bits : int
        1 to 32.
    full_scale : float
        Whole range, from the lowest to the highest input, in V.
    rate : float
        Samples per second in 1/s.
    corner_frequency : float
        Of the anti-alias filter in Hz (-3 dB); 0 stands for 0.4 of the rate.
    order : int
        Of the filter, 1 to 12.

    Raises
    ------
    InputError
        If a number is out of range.
    """

    bits: int = field(metadata={"unit": "1"})
    full_scale: float = field(metadata={"unit": "V"})
    rate: float = field(metadata={"unit": "1/s"})
    corner_frequency: float = field(default=0.0, metadata={"unit": "Hz"})
    order: int = field(default=4, metadata={"unit": "1"})

    def __post_init__(self) -> None:
        if not (1 <= self.bits <= 32 and 1 <= self.order <= 12):
            raise InputError(
                f"adc: wanted 1 to 32 bits and a filter of order 1 to 12, got {self.bits!r} and "
                f"{self.order!r}"
            )
        for name in ("full_scale", "rate"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0):
                raise InputError(f"adc: wanted a positive '{name}', got {value!r}")
        if not (math.isfinite(self.corner_frequency) and self.corner_frequency >= 0):
            raise InputError(
                f"adc: wanted 'corner_frequency' positive in Hz, or 0 for {_CORNER} of the rate, "
                f"got {self.corner_frequency!r}"
            )

    @property
    def lsb(self) -> float:
        """Step between levels in V."""
        return math.ldexp(self.full_scale, -self.bits)

    @property
    def corner(self) -> float:
        """Corner of the filter in Hz."""
        return self.corner_frequency if self.corner_frequency > 0 else _CORNER * self.rate

    @property
    def group_delay(self) -> float:
        """Delay of the analog filter at zero offset in s: the sum over its poles p of -1/p."""
        angles = np.pi * (2 * np.arange(self.order) + 1 + self.order) / (2 * self.order)
        return float(-np.cos(angles).sum() / (2 * np.pi * self.corner))


def quantisation_variance(lsb: float) -> float:
    """Give the power of the rounding of one quadrature.

    Parameters
    ----------
    lsb : float
        Step between levels in V.

    Returns
    -------
    float
        lsb^2 / 12 in V**2, white from sample to sample.

    Notes
    -----
    W. R. Bennett, "Spectra of quantized signals", Bell Syst. Tech. J. 27, 446 (1948); IEEE Std
    1241. It holds where the noise at the converter is about half a step or more.
    """
    return lsb**2 / 12


def quantise(adc: Adc, voltage: ComplexArray) -> ComplexArray:
    """Round each quadrature to the levels of its converter.

    Parameters
    ----------
    adc : Adc
    voltage : ndarray of complex, any shape
        In V.

    Returns
    -------
    ndarray of complex, of the same shape
        In V.
    """
    codes = np.rint(np.ascontiguousarray(voltage).view(np.float64) * (1 / adc.lsb))
    top = 2 ** (adc.bits - 1)
    np.clip(codes, -top, top - 1, out=codes)
    codes *= adc.lsb
    return np.asarray(codes.view(np.complex128))


def clip(adc: Adc, voltage: ComplexArray) -> ComplexArray:
    """Limit each quadrature to the converter's lowest and highest level.

    Parameters
    ----------
    adc : Adc
    voltage : ndarray of complex, any shape
        In V.

    Returns
    -------
    ndarray of complex, of the same shape
        In V.
    """
    low, high = -adc.full_scale / 2, adc.full_scale / 2 - adc.lsb
    return np.asarray(np.clip(voltage.real, low, high) + 1j * np.clip(voltage.imag, low, high))


def clipped_share(adc: Adc, voltage: ComplexArray, sigma: float, quadratures: int) -> float:
    """Give the expected share of samples outside the converter's range.

    Parameters
    ----------
    adc : Adc
    voltage : ndarray of complex, any shape
        Means in V.
    sigma : float
        Standard deviation of the noise of one quadrature in V, positive.
    quadratures : int
        1 if the imaginary part does not count.

    Returns
    -------
    float
        0 to 1; of two quadratures both count as samples.
    """
    low = -(adc.full_scale + adc.lsb) / 2
    high = (adc.full_scale - adc.lsb) / 2
    parts = (voltage.real, voltage.imag)[:quadratures]
    shares = [ndtr((low - v) / sigma) + ndtr((v - high) / sigma) for v in parts]
    return float(np.mean(shares))


def decimation(adc: Adc, step: float) -> int:
    """Give the number of steps of the records in a sampling interval.

    Parameters
    ----------
    adc : Adc
    step : float
        Of the records in s.

    Returns
    -------
    int
        At least 1.

    Raises
    ------
    InputError
        If it is not an integer, or the records are too coarse for the filter.
    """
    ratio = 1 / (adc.rate * step)
    whole = round(ratio)
    if whole < 1 or abs(ratio - whole) > _INTEGER * ratio:
        near = 1 / (max(whole, 1) * step)
        raise InputError(
            f"adc: wanted a sampling interval of a whole number of steps of the records, "
            f"{step:.6g} s, got {ratio:.6g} steps at a rate of {adc.rate:.6g} 1/s",
            hint=f"choose a rate of {near:.9g} 1/s, or records on a grid that fits",
        )
    if not adc.corner < 0.5 / step:
        raise InputError(
            f"adc: the corner of the filter, {adc.corner:.6g} Hz, must be below half the rate of "
            f"the records, {0.5 / step:.6g} Hz",
            hint="lower the corner or give finer records",
        )
    return whole


def filter_records(adc: Adc, step: float, records: ComplexArray) -> ComplexArray:
    """Send records through the anti-alias filter.

    Parameters
    ----------
    adc : Adc
    step : float
        In s.
    records : ndarray of complex, shape (rows, n)
        In V; before the first sample they are taken to have its value.

    Returns
    -------
    ndarray of complex, shape (rows, n)
        In V, on the same grid.
    """
    # A steady value passes as it is: only what differs from it meets a filter at rest.
    begin = records[:, :1]
    return np.asarray(begin + filter_noise(adc, step, records - begin))


def filter_noise(adc: Adc, step: float, noise: ComplexArray) -> ComplexArray:
    """Send noise through the anti-alias filter, which is at rest before it.

    Parameters
    ----------
    adc : Adc
    step : float
        In s.
    noise : ndarray of complex, shape (rows, n)
        In V.

    Returns
    -------
    ndarray of complex, shape (rows, n)
        In V, on the same grid; as noise of the chain is from `settling_samples` on.
    """
    sections = butterworth_sections(adc.order, adc.corner * step)
    return np.asarray(run_sections(sections, np.ascontiguousarray(noise)))


def settling_samples(adc: Adc, step: float) -> int:
    """Give the number of steps after which the filter has forgotten how it started.

    Parameters
    ----------
    adc : Adc
    step : float
        In s.

    Returns
    -------
    int
        Down to 1e-6 of the start.
    """
    slowest = 2 * math.pi * adc.corner * math.sin(math.pi / (2 * adc.order))
    return math.ceil(-math.log(_SETTLED) / (slowest * step))


def sampled_lags(adc: Adc, noise: OutputNoise, step: float, count: int) -> ComplexArray:
    """Give the covariance of the noise behind filter and sampling, before rounding.

    Parameters
    ----------
    adc : Adc
    noise : OutputNoise
        At the chain's output.
    step : float
        Of the records in s.
    count : int
        Number of samples of the converter.

    Returns
    -------
    ndarray of complex, shape (count,)
        In V**2 at lags of the sampling interval; what lies beyond half the sampling rate behind
        the filter is folded into it.

    Raises
    ------
    InputError
        As `decimation`.
    """
    every = decimation(adc, step)
    # Periodic with room for the filter's memory on top of all lags.
    period = noise_period(every * count + settling_samples(adc, step))
    powers = circulant_powers(noise_lags(noise, step, period // 2 + 1), period)
    f = np.fft.fftfreq(period)
    # The tangents of the bilinear transform are infinite at half the rate of the records.
    warped = np.tan(np.pi * np.abs(np.where(f == -0.5, 0.0, f))) / np.tan(np.pi * adc.corner * step)
    passed = np.where(f == -0.5, 0.0, 1 / (1 + warped ** (2 * adc.order)))
    lags = ifft(powers * passed)[: every * count : every]
    return np.asarray(lags if noise.quadratures == 2 else lags.real + 0j)
