"""Frequencies and weights for integrals of a spectral density over a band."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.waveform import FloatArray

# Nodes of Gauss's rule in each panel. Panels are at most one octave, or one over the record's
# length: over one full turn of the cosine six nodes leave 1.4e-6 of its amplitude.
ORDER = 6
# More frequencies than these would cost seconds and gigabytes, mostly by an oversight in a unit.
MOST_FREQUENCIES = 400_000


@dataclass(frozen=True, slots=True)
class FrequencyGrid:
    """Nodes and weights: the integral of g is sum(weights * g(frequencies)).

    Parameters
    ----------
    frequencies : ndarray, shape (n,)
        In Hz, rising, positive.
    weights : ndarray, shape (n,)
        In Hz, positive.
    """

    frequencies: FloatArray = field(metadata={"unit": "Hz"})
    weights: FloatArray = field(metadata={"unit": "Hz"})


def frequency_grid(
    low: float, high: float, duration: float, corners: Sequence[float] = ()
) -> FrequencyGrid:
    """Choose frequencies for integrals of a density times what a record of some length sees.

    Parameters
    ----------
    low, high : float
        Band in Hz, 0 <= low < high, finite.
    duration : float
        Length of the record or the gate in s; what is integrated turns over in 1/duration.
    corners : sequence of float
        Frequencies in Hz at which the density jumps or bends; panels end there.

    Returns
    -------
    FrequencyGrid
        Gauss's rule in panels of one octave up to 1/duration and of 1/duration above.

    Raises
    ------
    InputError
        If the band is empty or holds more turns than can be integrated.

    Notes
    -----
    Gauss-Legendre quadrature on panels (textbook).
    """
    if not (0 <= low < high < math.inf and 0 < duration < math.inf):
        raise InputError(
            f"frequencies: wanted a band 0 <= low < high and a positive duration, got {low!r} to "
            f"{high!r} Hz and {duration!r} s"
        )
    if (high - low) * duration * ORDER > MOST_FREQUENCIES:
        raise InputError(
            f"frequencies: a band up to {high:.6g} Hz over {duration:.6g} s makes "
            f"{(high - low) * duration:.3g} turns, more than {MOST_FREQUENCIES // ORDER}",
            hint="end the band where the noise no longer matters",
        )
    knee = 1 / duration
    inside = [f for f in corners if low < f < high]
    # Towards zero the density is constant below its last corner, and so is what a record sees.
    start = low if low > 0 else min([knee, *inside]) / 2**4
    octaves = start * 2.0 ** np.arange(max(0, math.ceil(math.log2(knee / start))))
    turns = knee * np.arange(max(1.0, math.floor(low / knee)), high / knee)
    edges = np.unique(np.concatenate([[low, high], inside, octaves, turns]))
    edges = edges[(edges >= low) & (edges <= high)]
    nodes, weights = np.polynomial.legendre.leggauss(ORDER)
    widths = np.diff(edges)[:, None]
    frequencies = edges[:-1, None] + widths * (nodes + 1) / 2
    return FrequencyGrid(frequencies.reshape(-1), (widths * weights / 2).reshape(-1))
