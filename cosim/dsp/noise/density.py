"""Spectral densities: one-sided, per Hz of ordinary frequency, variance = integral over f > 0.

Against the two-sided density per Hz of the angular frequency, S1(f) = 2 S2(2 pi f). A density is
a sum of terms, each of which knows its power in any band in closed form, and it says in which band
it is known: outside there is an error, not a guess.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from cosim.dsp.noise.terms import Lorentzian, PowerLaw, Term
from cosim.errors import InputError
from cosim.waveform import FloatArray

__all__ = [
    "Lorentzian",
    "Outside",
    "PowerLaw",
    "SpectralDensity",
    "add_densities",
    "density_from_points",
]

# What holds outside the points of a density: nothing is known, no noise, the value of the last
# point, or the slope of the last two.
Outside = Literal["error", "zero", "hold", "extend"]
OUTSIDE = ("error", "zero", "hold", "extend")
# A band may reach past the known one by this part: half a sampling rate is a rounded number.
ROUNDING = 1e-9


@dataclass(frozen=True, slots=True)
class SpectralDensity:
    """A one-sided spectral density and the band in which it is known.

    Parameters
    ----------
    unit : str
        Unit of the quantity that fluctuates, "rad/s" for example; the density is in its square
        per Hz.
    terms : tuple of PowerLaw or Lorentzian
        Their sum is the density.
    low, high : float
        The band in Hz in which the density is known; what lies outside is not taken for zero.

    Raises
    ------
    InputError
        If the band is empty.
    """

    unit: str
    terms: tuple[Term, ...]
    low: float = field(default=0.0, metadata={"unit": "Hz"})
    high: float = field(default=math.inf, metadata={"unit": "Hz"})

    def __post_init__(self) -> None:
        if not 0 <= self.low < self.high:
            raise InputError(
                f"spectral density: wanted a band 0 <= low < high in Hz, got {self.low!r} and "
                f"{self.high!r}"
            )

    @property
    def corners(self) -> tuple[float, ...]:
        """Frequencies in Hz at which the density jumps or bends, rising, without repetition."""
        ends = [f for f in (self.low, self.high) if 0 < f < math.inf]
        return tuple(sorted({*ends, *(f for term in self.terms for f in term.corners)}))

    def at(self, frequencies: npt.ArrayLike) -> FloatArray:
        """Give the density.

        Parameters
        ----------
        frequencies : array_like, any shape
            In Hz.

        Returns
        -------
        ndarray, shape as `frequencies`
            In the square of the unit per Hz.

        Raises
        ------
        InputError
            If a frequency lies outside the band in which the density is known, or the density
            diverges there.
        """
        f = np.asarray(frequencies, dtype=np.float64)
        if f.size == 0:
            return np.zeros_like(f)
        if not np.isfinite(f).all():
            raise InputError("spectral density: wanted finite frequencies in Hz")
        self.require(float(f.min()), float(f.max()), "the frequencies asked for")
        # The last point, and what rounding put past it, belongs to the piece that ends there.
        f = np.clip(f, self.low, np.nextafter(self.high, 0.0))
        found = np.asarray(sum((term.at(f) for term in self.terms), np.zeros_like(f)))
        if not np.isfinite(found).all():
            raise InputError(
                "spectral density: it diverges at 0 Hz",
                hint="give the term a lower corner, or ask for frequencies above zero",
            )
        return found

    def variance(self, low: float, high: float) -> float:
        """Integrate the density over a band, in closed form.

        Parameters
        ----------
        low, high : float
            In Hz.

        Returns
        -------
        float
            In the square of the unit; infinite where the integral diverges.

        Raises
        ------
        InputError
            If the band is not within the one in which the density is known.
        """
        if not low < high:
            return 0.0
        self.require(low, high, "the band of the integral")
        return math.fsum(term.variance(low, high) for term in self.terms)

    def require(self, low: float, high: float, purpose: str) -> None:
        """Refuse a band in which the density is not known.

        Parameters
        ----------
        low, high : float
            In Hz.
        purpose : str
            What needs the band, for the message.

        Raises
        ------
        InputError
            With both bands, if the one asked for is not within the known one.
        """
        if not (self.low * (1 - ROUNDING) <= low <= high <= self.high * (1 + ROUNDING)):
            raise InputError(
                f"spectral density: known from {self.low:.6g} to {self.high:.6g} Hz, but "
                f"{purpose} needs {low:.6g} to {high:.6g} Hz",
                hint="give points that cover the band, or say what holds below and above them: "
                "zero, hold or extend",
            )

    def scaled(self, factor: float, unit: str) -> "SpectralDensity":
        """Give the density of a multiple of the quantity.

        Parameters
        ----------
        factor : float
            On the *density*, the square of the factor on the quantity; not negative.
        unit : str
            Unit of the new quantity.

        Returns
        -------
        SpectralDensity

        Raises
        ------
        InputError
            If the factor is negative or not finite.
        """
        if not (math.isfinite(factor) and factor >= 0):
            raise InputError(f"spectral density: wanted a factor of at least zero, got {factor!r}")
        terms = tuple(replace(term, level=term.level * factor) for term in self.terms)
        return SpectralDensity(unit, terms, self.low, self.high)


def add_densities(densities: Sequence[SpectralDensity]) -> SpectralDensity:
    """Give the density of the sum of independent quantities.

    Parameters
    ----------
    densities : sequence of SpectralDensity
        At least one, all of one unit.

    Returns
    -------
    SpectralDensity
        Known where all of them are known.

    Raises
    ------
    InputError
        If there are none, their units differ or no band is common to all.
    """
    units = sorted({density.unit for density in densities})
    if len(units) != 1:
        raise InputError(f"spectral density: wanted a sum over one unit, got {units}")
    low = max(density.low for density in densities)
    high = min(density.high for density in densities)
    terms = tuple(term for density in densities for term in density.terms)
    return SpectralDensity(units[0], terms, low, high)


def density_from_points(
    frequencies: npt.ArrayLike,
    values: npt.ArrayLike,
    unit: str,
    *,
    below: Outside = "error",
    above: Outside = "error",
) -> SpectralDensity:
    """Make a density from points, a power law between each two.

    Parameters
    ----------
    frequencies : array_like, shape (n,)
        In Hz, positive, rising; at least two.
    values : array_like, shape (n,)
        One-sided density in the square of `unit` per Hz, positive.
    unit : str
        Unit of the quantity that fluctuates.
    below, above : {"error", "zero", "hold", "extend"}
        What holds below the first and above the last point: nothing is known and asking is an
        error; there is no noise; the value of the outermost point; the slope of the outermost two.

    Returns
    -------
    SpectralDensity

    Raises
    ------
    InputError
        If a value is not positive, the frequencies do not rise, or shapes differ.
    """
    f = np.asarray(frequencies, dtype=np.float64)
    s = np.asarray(values, dtype=np.float64)
    _check_points(f, s)
    for name, choice in (("below", below), ("above", above)):
        if choice not in OUTSIDE:
            raise InputError(
                f"spectral density: wanted {name} as one of {', '.join(OUTSIDE)}, got {choice!r}"
            )
    slopes = -np.diff(np.log(s)) / np.diff(np.log(f))
    terms = [
        PowerLaw(float(s[k]), float(slopes[k]), float(f[k]), float(f[k]), float(f[k + 1]))
        for k in range(f.size - 1)
    ]
    first, last = float(f[0]), float(f[-1])
    if below in ("hold", "extend"):
        slope = float(slopes[0]) if below == "extend" else 0.0
        terms.insert(0, PowerLaw(float(s[0]), slope, first, 0.0, first))
    if above in ("hold", "extend"):
        slope = float(slopes[-1]) if above == "extend" else 0.0
        terms.append(PowerLaw(float(s[-1]), slope, last, last))
    low = first if below == "error" else 0.0
    high = last if above == "error" else math.inf
    return SpectralDensity(unit, tuple(terms), low, high)


def _check_points(f: FloatArray, s: FloatArray) -> None:
    if f.ndim != 1 or f.shape != s.shape or f.size < 2:
        raise InputError(
            f"spectral density: wanted at least two points, as many values as frequencies, got "
            f"shapes {f.shape} and {s.shape}"
        )
    bad = np.flatnonzero(~(np.isfinite(f) & np.isfinite(s)))
    if bad.size:
        raise InputError(
            f"spectral density: point {bad[0] + 1} is not finite: {f[bad[0]]} Hz, {s[bad[0]]}"
        )
    bad = np.flatnonzero(np.diff(f, prepend=0.0) <= 0)
    if bad.size:
        before = f" after {f[bad[0] - 1]:.6g} Hz" if bad[0] else ", which is not positive"
        raise InputError(
            f"spectral density: the frequencies must rise from above zero, but point "
            f"{bad[0] + 1} is at {f[bad[0]]:.6g} Hz{before}"
        )
    bad = np.flatnonzero(s <= 0)
    if bad.size:
        raise InputError(
            f"spectral density: wanted positive values, got {s[bad[0]]:.6g} at {f[bad[0]]:.6g} Hz",
            hint="where there is no noise, end the points and say zero below or above them",
        )
