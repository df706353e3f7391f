"""The ideal shapes of a pulse, as the demodulator shows them."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.dsp.demodulation import low_pass
from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

FAMILIES = ("square", "flat-top", "raised cosine", "gaussian")

# A Gaussian's full width at half height over its standard deviation.
GAUSSIAN_WIDTH = math.sqrt(8.0 * math.log(2.0))
# From 10 to 90 % of a raised-cosine edge, as a part of its whole length.
TEN_TO_NINETY = (math.asin(0.8) * 2.0) / math.pi
# Cells of an edge per sample of the grid: it changes the edge's spectrum by 2e-3 at the end of the
# pass band, and its area not at all.
_CELLS = 4


@dataclass(frozen=True, slots=True)
class Shape:
    """An ideal envelope of peak 1.

    Parameters
    ----------
    family : str
        One of `FAMILIES`.
    centre : float
        Middle between the half heights in s.
    duration : float
        From half height to half height in s.
    rise, fall : float
        Whole lengths of the raised-cosine edges in s; of no meaning for a Gaussian.
    weight : float
        Of the DRAG quadrature (dS/dt)/alpha.
    """

    family: str
    centre: float = field(metadata={"unit": "s"})
    duration: float = field(metadata={"unit": "s"})
    rise: float = field(default=0.0, metadata={"unit": "s"})
    fall: float = field(default=0.0, metadata={"unit": "s"})
    weight: float = field(default=0.0, metadata={"unit": "1"})

    @property
    def start(self) -> float:
        """Time of the rising half height in s."""
        return self.centre - 0.5 * self.duration

    @property
    def stop(self) -> float:
        """Time of the falling half height in s."""
        return self.centre + 0.5 * self.duration


@dataclass(frozen=True, slots=True)
class Grid:
    """Where envelopes are sampled, and how the demodulator smooths them.

    Parameters
    ----------
    t : ndarray, shape (n,)
        Uniform times in s.
    weights, offsets : ndarray, shape (k,)
        The demodulator's low-pass: weights and times in s.
    anharmonicity : float
        That of the DRAG quadrature in rad/s, negative; 0 where there is none.
    """

    t: FloatArray
    weights: FloatArray
    offsets: FloatArray
    anharmonicity: float = 0.0

    @property
    def step(self) -> float:
        """Time between samples in s."""
        return float(self.t[1] - self.t[0])


def make_grid(t: FloatArray, carrier_frequency: float, anharmonicity: float = 0.0) -> Grid:
    """Make a grid.

    Parameters
    ----------
    t : ndarray, shape (n,)
        Uniform times in s, n at least 16.
    carrier_frequency : float
        In Hz, that of the demodulator.
    anharmonicity : float
        As in `Grid`.

    Returns
    -------
    Grid

    Raises
    ------
    InputError
        If there are too few times.
    """
    if t.size < 16:
        raise InputError(f"a pulse of {t.size} samples cannot be taken apart: wanted 16 or more")
    cell = float(t[1] - t[0]) / _CELLS
    weights = low_pass(carrier_frequency, cell)
    reach = weights.size // 2
    offsets = cell * np.arange(-reach, reach + 1)
    return Grid(t, weights, np.asarray(offsets, dtype=np.float64), anharmonicity)


def edge(grid: Grid, middle: float, length: float) -> tuple[FloatArray, FloatArray]:
    """Give a rising edge and its slope, smoothed.

    Parameters
    ----------
    grid : Grid
    middle : float
        Time of its half height in s.
    length : float
        In s; 0 is a jump.

    Returns
    -------
    value, slope : ndarray, shape (n,)
        From 0 to 1, and in 1/s.
    """
    t = grid.t - middle
    value = (t > 0.0).astype(np.float64)
    slope = np.zeros(t.size)
    reach = 0.5 * length + grid.offsets[-1] + grid.step
    first, last = np.searchsorted(t, (-reach, reach))
    if last > first:
        # Means over cells, of which the smoothing takes some to each side.
        cell = grid.step / _CELLS
        taps = grid.weights.size
        count = _CELLS * (last - first - 1) + taps
        ends = t[first] + cell * (np.arange(count + 1) - 0.5 - taps // 2)
        area, height = (np.diff(kind(ends, length)) / cell for kind in (_area, _height))
        value[first:last] = np.convolve(area, grid.weights, "valid")[::_CELLS]
        slope[first:last] = np.convolve(height, grid.weights, "valid")[::_CELLS]
    return value, slope


def _height(t: FloatArray, length: float) -> FloatArray:
    if length <= 0.0:
        return np.heaviside(t, 0.5)
    u = np.clip(t / length, -0.5, 0.5)
    return np.asarray(0.5 + 0.5 * np.sin(math.pi * u))


def _area(t: FloatArray, length: float) -> FloatArray:
    """Give the integral of an edge up to t."""
    if length <= 0.0:
        return np.maximum(t, 0.0)
    u = np.clip(t / length, -0.5, 0.5)
    inside = length * (0.5 * (u + 0.5) - 0.5 / math.pi * np.cos(math.pi * u))
    return np.asarray(inside + np.maximum(t - 0.5 * length, 0.0))


@dataclass(frozen=True, slots=True)
class ShapeSamples:
    """A shape on a grid.

    Parameters
    ----------
    value : ndarray of complex, shape (n,)
        With its quadrature.
    size : ndarray, shape (n,)
        Without it.
    rising, falling : ndarray, shape (n,)
        1 from the rising edge on, and from the falling edge on; of a Gaussian from its ends.
    """

    value: ComplexArray
    size: FloatArray
    rising: FloatArray
    falling: FloatArray


def sample_shape(shape: Shape, grid: Grid) -> ShapeSamples:
    """Sample a shape.

    Parameters
    ----------
    shape : Shape
    grid : Grid

    Returns
    -------
    ShapeSamples
    """
    if shape.family == "gaussian":
        sigma = shape.duration / GAUSSIAN_WIDTH
        u = (grid.t - shape.centre) / sigma
        size = np.exp(-0.5 * u**2)
        slope = -u / sigma * size
        rising, _ = edge(grid, shape.start, shape.duration)
        falling, _ = edge(grid, shape.stop, shape.duration)
    else:
        rising, up = edge(grid, shape.start, shape.rise)
        falling, down = edge(grid, shape.stop, shape.fall)
        size, slope = rising - falling, up - down
    value = size.astype(np.complex128)
    if shape.weight != 0.0 and grid.anharmonicity != 0.0:
        value += 1j * shape.weight / grid.anharmonicity * slope
    return ShapeSamples(value, np.asarray(size), rising, falling)
