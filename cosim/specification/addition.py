"""How errors that stay the same add: the angles between their error rotations."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.specification.building import AnyCurve
from cosim.specification.curves import error_coordinates
from cosim.specification.distortion import Distortion, distorted_unitaries
from cosim.waveform import FloatArray


@dataclass(frozen=True, slots=True)
class Alignment:
    """How far errors that stay the same act about the same axis.

    Parameters
    ----------
    names : tuple of str
        Of the blocks.
    cosines : ndarray, shape (n, n)
        Largest |cosine| between the error rotations of two of them, over their signs and phases:
        1 where they add in amplitude, 0 where they add in power.
    """

    names: tuple[str, ...]
    cosines: FloatArray = field(metadata={"unit": "1"})


def alignment(curves: Sequence[AnyCurve]) -> Alignment:
    """Work out how errors that stay the same add.

    Parameters
    ----------
    curves : sequence of Curve or RateCurve
        Of errors that stay the same.

    Returns
    -------
    Alignment
    """
    coordinates = []
    for curve in curves:
        what = curve.variants(curve.scale, curve.rows)
        found = error_coordinates(curve.pulse, distorted_unitaries(curve.pulse, what, curve.frame))
        clean = error_coordinates(
            curve.pulse, distorted_unitaries(curve.pulse, Distortion(), curve.frame)
        )
        vectors = found - clean
        largest = float(np.linalg.norm(vectors, axis=1).max())
        coordinates.append(vectors / largest if largest > 0.0 else vectors)
    n = len(curves)
    cosines = np.eye(n)
    for j in range(n):
        for k in range(j):
            cosines[j, k] = cosines[k, j] = min(
                1.0, float(np.abs(coordinates[j] @ coordinates[k].T).max())
            )
    return Alignment(tuple(curve.name for curve in curves), cosines)
