"""How far a quantity has moved after a time: structure functions of noise since a trim.

D(t) = <(x(t) - x(0))^2> = 2 int S(f) (1 - cos(2 pi f t)) df, S one-sided. What is slower than the
time itself counts little: the trim has taken it out.
"""

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.special import sici

from cosim.dsp.noise.density import PowerLaw, SpectralDensity
from cosim.dsp.noise.terms import Term
from cosim.waveform import FloatArray

# Below this part of 1/t a density as steep as 1/f^2 has a millionth of the whole.
_LOWEST = 1e-6
# From so many turns on the cosine is integrated apart from the density, by parts.
_TURNS = 10.0
# Per octave, of up to five turns.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(48)


class Fluctuation(Protocol):
    """What wanders by chance."""

    def structure(self, t: float) -> float:
        """Give the mean square of the move since a time t ago."""
        ...


@dataclass(frozen=True, slots=True)
class RandomWalk:
    """A random walk.

    Parameters
    ----------
    level : float
        Standard deviation after 1 s, in the unit of the quantity.
    """

    level: float

    def structure(self, t: float) -> float:
        """Give the mean square of the move in a time.

        Parameters
        ----------
        t : float
            In s.

        Returns
        -------
        float
            level^2 t, of a density level^2/(2 pi^2 f^2).
        """
        return self.level**2 * t


@dataclass(frozen=True, slots=True)
class Flicker:
    """Noise of a density level/f within a band.

    Parameters
    ----------
    level : float
        One-sided density at 1 Hz, in the square of the unit per Hz.
    low, high : float
        Band in Hz; `low` may be zero.
    """

    level: float
    low: float
    high: float

    def structure(self, t: float) -> float:
        """Give the mean square of the move in a time.

        Parameters
        ----------
        t : float
            In s.

        Returns
        -------
        float
            2 level (Cin(2 pi high t) - Cin(2 pi low t)), Cin(z) = gamma + ln z - Ci(z); for high t
            well above 1 and low t well below it 2 level (gamma + ln(2 pi high t)).
        """
        return 2.0 * self.level * (_cin(2.0 * math.pi * self.high * t) - _cin(self._low(t)))

    def _low(self, t: float) -> float:
        return 2.0 * math.pi * self.low * t


def _cin(z: float) -> float:
    """The entire cosine integral int_0^z (1 - cos u)/u du."""
    if z < 1e-3:
        return z**2 / 4.0  # The next term is z^4/96.
    return float(np.euler_gamma + math.log(z) - sici(z)[1])


@dataclass(frozen=True, slots=True)
class White:
    """White noise up to a frequency.

    Parameters
    ----------
    level : float
        One-sided density, in the square of the unit per Hz.
    high : float
        In Hz.
    """

    level: float
    high: float

    def structure(self, t: float) -> float:
        """Give the mean square of the move in a time.

        Parameters
        ----------
        t : float
            In s.

        Returns
        -------
        float
            2 level high (1 - sinc(2 high t)).
        """
        return float(2.0 * self.level * self.high * (1.0 - np.sinc(2.0 * self.high * t)))


@dataclass(frozen=True, slots=True)
class Shaped:
    """Noise of any density within a band.

    Parameters
    ----------
    density : SpectralDensity
        One-sided, of power laws; at low frequencies less steep than 1/f^3.
    low, high : float
        Band in Hz.
    """

    density: SpectralDensity
    low: float
    high: float

    def structure(self, t: float) -> float:
        """Give the mean square of the move in a time, by quadrature.

        Parameters
        ----------
        t : float
            In s.

        Returns
        -------
        float
        """
        if t <= 0.0:
            return 0.0
        middle = min(max(_TURNS / t, self.low), self.high)
        edges = self._edges(max(self.low, _LOWEST / t), middle)
        half = 0.5 * np.diff(np.log(edges))[:, None]
        f = np.sqrt(edges[:-1] * edges[1:])[:, None] * np.exp(half * _NODES)
        moved = 4.0 * self.density.at(f) * np.sin(math.pi * f * t) ** 2
        total = float(np.sum(half * _WEIGHTS * moved * f))
        if middle < self.high:
            total += 2.0 * self.density.variance(middle, self.high)
            total -= 2.0 * sum(self._wave(term, middle, t) for term in self.density.terms)
        return total

    def _wave(self, term: Term, middle: float, t: float) -> float:
        """Integrate a power law times cos(2 pi f t) from `middle` on, by parts, three times.

        The next terms are less than the exponent over 2 pi _TURNS, to the third power, of the
        first, which is itself a sixtieth of the integral without the cosine.
        """
        assert isinstance(term, PowerLaw)
        low, high = max(term.low, middle), min(term.high, self.high)
        if low >= high:
            return 0.0
        w, p = 2.0 * math.pi * t, term.exponent

        def parts(f: float) -> float:
            value = term.level * (f / term.reference) ** -p / w
            slow = p / (w * f)
            steep = slow * (p + 1.0) / (w * f)
            return float(value) * ((1.0 - steep) * math.sin(w * f) - slow * math.cos(w * f))

        return float(parts(high) - parts(low))

    def _edges(self, low: float, high: float) -> FloatArray:
        """Cut a band at the corners of the density, into pieces of an octave at most."""
        if low >= high:
            return np.array([high])
        count = math.ceil(math.log2(high / low) + 1e-9)
        inner = [edge for edge in self.density.corners if low < edge < high]
        return np.unique([*np.geomspace(low, high, count + 1), *inner])


@dataclass(frozen=True, slots=True)
class Motion:
    """How a quantity moves after it has been trimmed.

    Parameters
    ----------
    rate : float
        Linear drift, in the unit per s.
    trim_error : float
        Standard deviation right after the trim.
    fluctuations : tuple of Fluctuation
        Independent of one another and of the trim's error.
    """

    rate: float = 0.0
    trim_error: float = 0.0
    fluctuations: tuple[Fluctuation, ...] = ()

    def mean(self, t: float) -> float:
        """Give the mean move.

        Parameters
        ----------
        t : float
            Since the trim, in s.

        Returns
        -------
        float
            In the unit of the quantity.
        """
        return self.rate * t

    def deviation(self, t: float) -> float:
        """Give the standard deviation of the move.

        Parameters
        ----------
        t : float
            Since the trim, in s.

        Returns
        -------
        float
            In the unit of the quantity.
        """
        moved = math.fsum(item.structure(t) for item in self.fluctuations)
        return math.sqrt(self.trim_error**2 + max(0.0, moved))


def from_allan(kind: str, deviation: float, time: float, high: float) -> Fluctuation:
    """Give the noise that has an Allan deviation at a time of averaging.

    Parameters
    ----------
    kind : str
        "white", "flicker" or "random walk", of the frequency.
    deviation : float
        Allan deviation, in any unit.
    time : float
        Of averaging, in s; it does not matter for flicker noise.
    high : float
        Frequency in Hz up to which the noise counts.

    Returns
    -------
    Fluctuation
        In the unit of the deviation.

    Notes
    -----
    sigma^2(tau) = h0/(2 tau) of S = h0, 2 ln 2 h of S = h/f, and (2 pi^2/3) tau h of S = h/f^2:
    D. W. Allan, "Statistics of atomic frequency standards", Proc. IEEE 54, 221 (1966), and IEEE
    Std 1139. The last is a random walk of level sigma sqrt(3/tau).
    """
    if kind == "white":
        return White(2.0 * deviation**2 * time, high)
    if kind == "flicker":
        return Flicker(deviation**2 / (2.0 * math.log(2.0)), 0.0, high)
    return RandomWalk(deviation * math.sqrt(3.0 / time))
