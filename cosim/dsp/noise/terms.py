"""The terms of a spectral density: power laws in a band, and Lorentzians."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.waveform import FloatArray


@dataclass(frozen=True, slots=True)
class PowerLaw:
    """The density level (reference/f)**exponent in one band, zero outside it.

    Parameters
    ----------
    level : float
        Density at `reference` in the square of the quantity's unit per Hz, not negative.
    exponent : float
        0 for white noise, 1 for 1/f noise.
    reference : float
        In Hz, positive; without effect for white noise.
    low, high : float
        Lower (inclusive) and upper (exclusive) corner in Hz; the cut is sharp.

    Raises
    ------
    InputError
        If a number is out of range or the corners are not in order.
    """

    level: float
    exponent: float = 0.0
    reference: float = field(default=1.0, metadata={"unit": "Hz"})
    low: float = field(default=0.0, metadata={"unit": "Hz"})
    high: float = field(default=math.inf, metadata={"unit": "Hz"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.level) and self.level >= 0):
            raise InputError(
                f"spectral density: wanted a level of at least zero, got {self.level!r}"
            )
        if not math.isfinite(self.exponent):
            raise InputError(f"spectral density: wanted a finite exponent, got {self.exponent!r}")
        if not (math.isfinite(self.reference) and self.reference > 0):
            raise InputError(
                f"spectral density: wanted a positive reference frequency in Hz, got "
                f"{self.reference!r}"
            )
        if not 0 <= self.low < self.high:
            raise InputError(
                f"spectral density: wanted corners 0 <= low < high in Hz, got {self.low!r} and "
                f"{self.high!r}"
            )

    @property
    def corners(self) -> tuple[float, ...]:
        """Frequencies in Hz at which the term jumps; not zero, not infinite."""
        return tuple(f for f in (self.low, self.high) if 0 < f < math.inf)

    def at(self, frequencies: FloatArray) -> FloatArray:
        """Give the density, shape as `frequencies`; infinite at 0 Hz where it diverges.

        Parameters
        ----------
        frequencies : ndarray
            In Hz, not negative.

        Returns
        -------
        ndarray
            In the square of the quantity's unit per Hz.
        """
        inside = (frequencies >= self.low) & (frequencies < self.high)
        with np.errstate(divide="ignore"):
            shape = np.power(frequencies / self.reference, -self.exponent)
        return np.where(inside & (self.level > 0), self.level * shape, 0.0)

    def variance(self, low: float, high: float) -> float:
        """Integrate the density over a band.

        Parameters
        ----------
        low, high : float
            In Hz.

        Returns
        -------
        float
            In the square of the quantity's unit; infinite where the integral diverges.
        """
        low, high = max(low, self.low), min(high, self.high)
        if self.level == 0 or not low < high:
            return 0.0
        rise = 1 - self.exponent
        a, b = low / self.reference, high / self.reference
        scale = self.level * self.reference
        if (a == 0 and rise <= 0) or (b == math.inf and rise >= 0):
            return math.inf
        if a == 0 or b == math.inf:
            return float(scale * (b**rise if a == 0 else -(a**rise)) / rise)
        # b**rise - a**rise cancels for exponents near 1, where the integral is a logarithm.
        span = math.log(b / a)
        ratio = math.expm1(rise * span) / rise if rise * span != 0 else span
        return float(scale * a**rise * ratio)


@dataclass(frozen=True, slots=True)
class Lorentzian:
    """The density of a quantity whose memory fades exponentially, 4 s**2 tc/(1 + (2 pi f tc)**2).

    Parameters
    ----------
    level : float
        Variance s**2 in the square of the quantity's unit, not negative.
    correlation_time : float
        tc in s, positive; 1/(2 gamma) for a random telegraph signal that flips at the rate gamma.

    Raises
    ------
    InputError
        If a number is out of range.

    Notes
    -----
    G. E. Uhlenbeck, L. S. Ornstein, "On the theory of the Brownian motion", Phys. Rev. 36, 823
    (1930).
    """

    level: float
    correlation_time: float = field(metadata={"unit": "s"})

    def __post_init__(self) -> None:
        if not (math.isfinite(self.level) and self.level >= 0):
            raise InputError(
                f"spectral density: wanted a variance of at least zero, got {self.level!r}"
            )
        if not (math.isfinite(self.correlation_time) and self.correlation_time > 0):
            raise InputError(
                f"spectral density: wanted a positive correlation time in s, got "
                f"{self.correlation_time!r}"
            )

    @property
    def corners(self) -> tuple[float, ...]:
        """The frequency in Hz around which the term bends; there is no jump."""
        return (1 / (2 * math.pi * self.correlation_time),)

    def at(self, frequencies: FloatArray) -> FloatArray:
        """Give the density, shape as `frequencies`.

        Parameters
        ----------
        frequencies : ndarray
            In Hz, not negative.

        Returns
        -------
        ndarray
            In the square of the quantity's unit per Hz.
        """
        turn = 2 * np.pi * frequencies * self.correlation_time
        return np.asarray(4 * self.level * self.correlation_time / (1 + turn**2))

    def variance(self, low: float, high: float) -> float:
        """Integrate the density over a band.

        Parameters
        ----------
        low, high : float
            In Hz.

        Returns
        -------
        float
            In the square of the quantity's unit.
        """
        if not low < high:
            return 0.0
        a, b = (2 * math.pi * f * self.correlation_time for f in (low, high))
        # The difference of two arcus tangents near pi/2 would cancel.
        turn = math.atan2(1.0, a) if b == math.inf else math.atan2(b - a, 1 + a * b)
        return self.level * 2 / math.pi * turn


Term = PowerLaw | Lorentzian
