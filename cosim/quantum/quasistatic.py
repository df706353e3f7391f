"""Averages over Gaussian parameters that stay constant during a gate."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.special import roots_hermitenorm

from cosim.errors import EvolutionError, InputError
from cosim.waveform import FloatArray

FIRST_NODES = 4
MOST_NODES = 256
# Points of a product grid; a batch of three-level channels of this size holds about 100 MB.
MOST_POINTS = 100_000
MOST_PARAMETERS = 3
# Nodes of less weight than this cannot change an average of numbers of size 1 by more than 1e-14,
# even all points of a grid together.
LEAST_WEIGHT = 1e-19


@dataclass(frozen=True, slots=True)
class QuasiStaticAverage:
    """An average over Gaussian parameters.

    Parameters
    ----------
    value : ndarray
        The average, of the shape of one value of the function.
    nodes : int
        Nodes per parameter of the last grid.
    points : int
        Evaluations of the function in the last grid.
    change : float
        Largest change of an element of the average from half as many nodes.
    """

    value: npt.NDArray[Any]
    nodes: int
    points: int
    change: float = field(metadata={"unit": "1"})


def gaussian_average(
    function: Callable[[FloatArray], npt.NDArray[Any]],
    deviations: Sequence[float],
    *,
    tolerance: float = 1e-9,
) -> QuasiStaticAverage:
    """Average a function over independent Gaussian parameters of mean zero.

    Parameters
    ----------
    function : callable
        Takes points of shape (batch, parameters) and gives values of shape (batch, ...), real or
        complex: channels, fidelities, unitaries' superoperators.
    deviations : sequence of 1 to 3 floats
        Standard deviation of each parameter in its own unit; zero for one that does not vary.
    tolerance : float
        Largest change of an element of the average when the nodes are doubled.

    Returns
    -------
    QuasiStaticAverage

    Raises
    ------
    InputError
        If a deviation is negative, there are none or more than three, the tolerance is not
        positive, or the function's values are not finite or not one per point.
    EvolutionError
        If the average still changes by more than the tolerance at the largest grid.

    Notes
    -----
    Gauss-Hermite quadrature on a product grid (textbook); exact for polynomials of up to
    2 nodes - 1 in each parameter.
    """
    sigma = np.asarray(deviations, dtype=np.float64)
    fits = sigma.ndim == 1 and 1 <= sigma.size <= MOST_PARAMETERS
    if not (fits and np.isfinite(sigma).all() and (sigma >= 0).all()):
        raise InputError(
            f"quasi-static average: wanted one to {MOST_PARAMETERS} standard deviations of at "
            f"least zero, got {deviations!r}"
        )
    if not tolerance > 0:
        raise InputError(f"quasi-static average: wanted a positive tolerance, got {tolerance!r}")
    nodes, before, change = FIRST_NODES, None, math.inf
    while True:
        axes = _axes(sigma, nodes)
        size = math.prod(axis[0].size for axis in axes)
        if nodes > MOST_NODES or size > MOST_POINTS:
            raise EvolutionError(
                f"quasi-static average: wanted a change below {tolerance:.3g} when the nodes are "
                f"doubled, got {change:.3g} at {nodes // 2} nodes for standard deviations of "
                f"{', '.join(f'{value:.6g}' for value in sigma)}",
                hint="the function turns many times within the spread: ask for less accuracy, or "
                "draw the parameter at random instead",
            )
        points = _product([axis[0] for axis in axes])
        weights = _product([axis[1] for axis in axes]).prod(axis=1)
        average = np.tensordot(weights, _values(function, points), axes=1)
        if before is not None:
            change = float(np.abs(average - before).max())
            if change <= tolerance or not sigma.any():
                return QuasiStaticAverage(average, nodes, size, change)
        before, nodes = average, 2 * nodes


def _axes(sigma: FloatArray, nodes: int) -> list[tuple[FloatArray, FloatArray]]:
    """Give the nodes and weights of each parameter; one node where it does not vary."""
    x, w = roots_hermitenorm(nodes)
    w = w / w.sum()
    kept = w > LEAST_WEIGHT
    x, w = x[kept], w[kept]
    return [(value * x, w) if value > 0 else (np.zeros(1), np.ones(1)) for value in sigma.tolist()]


def _product(axes: list[FloatArray]) -> FloatArray:
    """Give the product grid of some axes, shape (points, axes)."""
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, len(axes))


def _values(function: Callable[[FloatArray], npt.NDArray[Any]], points: FloatArray) -> Any:
    values = np.asarray(function(points))
    if values.ndim < 1 or values.shape[0] != points.shape[0]:
        raise InputError(
            f"quasi-static average: wanted one value for each of {points.shape[0]} points, got an "
            f"array of shape {values.shape}"
        )
    if not np.isfinite(values).all():
        bad = points[int(np.argwhere(~np.isfinite(values))[0][0])]
        raise InputError(f"quasi-static average: the function is not finite at {bad.tolist()}")
    return values
