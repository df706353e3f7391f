"""What digital-to-analog converters make of an ideal envelope: a staircase of rounded levels."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.dsp.noise.paths import generator
from cosim.specification.distortion import Distortion, distorted_losses
from cosim.specification.pulse import IdealPulse
from cosim.specification.spectra import paired
from cosim.waveform import ComplexArray, FloatArray

# Samples of the pulse that are tried for the rate: each number, then in steps of a twelfth.
EVERY = 48
MOST_SAMPLES = 4096


@dataclass(frozen=True, slots=True)
class Staircase:
    """The samples of converters of some rate, and the part of each cell that each of them fills.

    Parameters
    ----------
    levels : ndarray of complex, shape (n,)
        I + jQ in the middle of each sample, of peak 1.
    parts : ndarray, shape (cells, n)
        Share of a cell.
    """

    levels: ComplexArray
    parts: FloatArray = field(metadata={"unit": "1"})

    def over_cells(self, levels: ComplexArray) -> ComplexArray:
        """Hold levels over their samples, shape (..., cells)."""
        return np.asarray(levels @ self.parts.T)


def staircase(pulse: IdealPulse, rate: float) -> Staircase:
    """Sample the ideal envelope from the start of the pulse on.

    Parameters
    ----------
    pulse : IdealPulse
    rate : float
        Of the converters in Hz.

    Returns
    -------
    Staircase
    """
    count = max(1, math.ceil(pulse.duration * rate * (1.0 - 1e-9)))
    edges = np.arange(count + 1) / rate
    middles = edges[:-1] + 0.5 / rate
    # The slope of the running integral is the envelope.
    small = 1e-4 * pulse.duration
    area = pulse.envelope.up_to(middles + small) - pulse.envelope.up_to(middles - small)
    inside = np.clip(pulse.edges[:, None], edges[:-1], edges[1:])
    return Staircase(area / (2.0 * small), np.diff(inside, axis=0) / pulse.step)


def staircase_error(pulse: IdealPulse, rate: float) -> ComplexArray:
    """Give the staircase less the ideal envelope, with the area of I trimmed to be the same.

    Parameters
    ----------
    pulse : IdealPulse
    rate : float
        Of the converters in Hz.

    Returns
    -------
    ndarray of complex, shape (cells,)
        Relative to the peak: a calibration of the amplitude takes the droop away.
    """
    stairs = staircase(pulse, rate)
    held = stairs.over_cells(stairs.levels)
    ideal = np.diff(pulse.envelope.up_to(pulse.edges)) / pulse.step
    area = held.real.sum()
    scale = ideal.real.sum() / area if area > 0.0 else 1.0
    return np.asarray(scale * held - ideal)


@dataclass(frozen=True, slots=True)
class RateCurve:
    """What the staircase costs, at whole numbers of samples in the pulse.

    Parameters
    ----------
    name : str
        Of the block.
    pulse : IdealPulse
    frame : str
        As in `distorted_unitaries`.
    base : float
        What the pulse loses without it.
    counts : ndarray, shape (n,)
        Samples in the pulse, rising.
    costs : ndarray, shape (n,)
        What they cost.
    """

    name: str
    pulse: IdealPulse
    frame: str
    base: float
    counts: FloatArray
    costs: FloatArray

    @property
    def rows(self) -> int:
        """A staircase has no signs and no phases."""
        return 1

    @property
    def scale(self) -> float:
        """A time between samples at which it is looked which way the error turns, in s."""
        return self.pulse.duration / 16.0

    def cost(self, x: float) -> float:
        """Give what converters cost that sample every x seconds."""
        lost = distorted_losses(self.pulse, self.variants(x), self.frame)
        return max(0.0, float(lost[0]) - self.base)

    def variants(self, x: float, count: int = 1) -> Distortion:
        """Give the staircase of converters that sample every x seconds, one row."""
        del count
        return Distortion(rounding=staircase_error(self.pulse, 1.0 / x)[None, :])

    def limit(self, share: float) -> float:
        """Give the longest time between samples from which on all shorter ones cost no more.

        Parameters
        ----------
        share : float
            Infidelity.

        Returns
        -------
        float
            In s; infinite where a single sample does.
        """
        bad = np.flatnonzero(self.costs > share)
        if bad.size == 0:
            return math.inf
        place = min(int(bad[-1]) + 1, self.counts.size - 1)
        return self.pulse.duration / float(self.counts[place])


def rate_curve(pulse: IdealPulse, frame: str, base: float) -> RateCurve:
    """Work out what the staircase costs.

    Parameters
    ----------
    pulse, frame, base
        As in `RateCurve`.

    Returns
    -------
    RateCurve
    """
    counts = [*range(1, EVERY)]
    while counts[-1] < min(MOST_SAMPLES, 4 * pulse.cells):
        counts.append(counts[-1] + max(1, counts[-1] // 12))
    rows = np.array([staircase_error(pulse, count / pulse.duration) for count in counts])
    costs = distorted_losses(pulse, Distortion(rounding=rows), frame) - base
    numbers = np.array(counts, dtype=np.float64)
    return RateCurve("dac_rate", pulse, frame, base, numbers, np.maximum(costs, 0.0))


def rounding_errors(
    pulse: IdealPulse, rate: float, headroom: float, x: float, count: int, seed: int, stream: int
) -> Distortion:
    """Round the samples of the envelope, with the codes at any place against it.

    Parameters
    ----------
    pulse : IdealPulse
    rate : float
        Of the converters in Hz.
    headroom : float
        Positive full scale over the peak of the pulse.
    x : float
        Step over the whole range, 2^-bits.
    count : int
        How many places, even: the rounding errors come in pairs of opposite sign.
    seed, stream : int
        Of the places.

    Returns
    -------
    Distortion
        Rounded to the nearest level of I and of Q; an offset that is the same for all samples moves
        the levels, as the pulse's size does.
    """
    stairs = staircase(pulse, rate)
    step = 2.0 * headroom * x
    half = count // 2
    random = generator(seed, stream, 0)
    places = np.stack(
        [(random.permutation(half) + random.random(half)) / half for _ in range(2)], axis=1
    )
    errors = []
    for column, levels in enumerate((stairs.levels.real, stairs.levels.imag)):
        moved = levels / step + places[:, column : column + 1]
        errors.append(step * (np.rint(moved) - moved))
    # Nothing is played on a converter that stays at zero, and what it plays there is no error.
    silent = not stairs.levels.imag.any()
    both = np.asarray(errors[0] + (0.0 if silent else 1.0) * 1j * errors[1], dtype=np.complex128)
    return Distortion(rounding=paired(stairs.over_cells(both)).astype(np.complex128))
