"""The nominal evolution under a control, sampled in time, and its computational subspace."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# A segment is interpolated by cubics, which take the ends from the samples next to them.
LEAST_SAMPLES = 8
# Deviation from U^dag U = 1, or from N^dag = N over the norm of N, that is taken for rounding.
ROUNDING = 1e-8


@dataclass(frozen=True, slots=True)
class PathSegment:
    """The nominal evolution over a stretch in which the control is smooth.

    A gate is one segment, or several where the control jumps; what happens in no time, such as an
    ideal pulse, stands between the end of one and the start of the next.

    Parameters
    ----------
    start : float
        Time of the first sample in s.
    dt : float
        Sample interval in s.
    unitaries : ndarray of complex, shape (n, d, d)
        U from the start of the gate to start + k dt, at least 8 samples, both ends included.

    Raises
    ------
    InputError
        If the shape does not fit, the interval is not positive or a matrix is not unitary.
    """

    start: float = field(metadata={"unit": "s"})
    dt: float = field(metadata={"unit": "s"})
    unitaries: ComplexArray

    def __post_init__(self) -> None:
        u = np.ascontiguousarray(self.unitaries, dtype=np.complex128)
        object.__setattr__(self, "unitaries", u)
        if u.ndim != 3 or u.shape[1] != u.shape[2] or u.shape[0] < LEAST_SAMPLES:
            raise InputError(
                f"filter function: wanted at least {LEAST_SAMPLES} unitaries, an array of shape "
                f"(n, d, d), got {u.shape}"
            )
        if not (math.isfinite(self.start) and math.isfinite(self.dt) and self.dt > 0):
            raise InputError(
                f"filter function: wanted a start and a positive interval in s, got "
                f"{self.start!r} and {self.dt!r}"
            )
        deviation = np.abs(dagger(u) @ u - np.eye(u.shape[1])).max(axis=(1, 2))
        if not (deviation < ROUNDING).all():
            bad = int(np.flatnonzero(~(deviation < ROUNDING))[0])
            raise InputError(
                f"filter function: matrix {bad} of the path is not unitary, U^dag U differs from 1 "
                f"by {deviation[bad]:.3g}",
                hint="relaxation has no filter function: give the evolution without it",
            )

    @property
    def stop(self) -> float:
        """Time of the last sample in s."""
        return float(self.start + self.dt * (self.unitaries.shape[0] - 1))


def checked_subspace(path: Sequence[PathSegment], subspace: Sequence[int]) -> list[int]:
    """Check that a path can be used with a subspace, and give its states in order.

    Parameters
    ----------
    path : sequence of PathSegment
        In order of time.
    subspace : sequence of int
        Indices of the computational states.

    Returns
    -------
    list of int
        Rising.

    Raises
    ------
    InputError
        If there is no segment, they differ in levels, the first matrix is not the identity, or
        the subspace is not one of at least two of the levels.
    """
    shapes = {segment.unitaries.shape[1:] for segment in path}
    if len(shapes) != 1:
        raise InputError(
            f"filter function: wanted segments of one number of levels, got {sorted(shapes)}"
        )
    first = path[0].unitaries[0]
    d = first.shape[0]
    chosen = sorted(set(subspace))
    if len(chosen) != len(subspace) or len(chosen) < 2 or chosen[0] < 0 or chosen[-1] >= d:
        raise InputError(
            f"filter function: wanted a subspace of at least two of {d} levels, got "
            f"{tuple(subspace)}"
        )
    deviation = float(np.abs(first - np.eye(d)).max())
    if deviation > ROUNDING:
        raise InputError(
            f"filter function: the path must start with the identity, its first matrix differs "
            f"by {deviation:.3g}"
        )
    return chosen


def differences(m: int) -> FloatArray:
    """Give an orthonormal basis of the vectors of m elements whose sum is zero.

    Parameters
    ----------
    m : int
        At least 2.

    Returns
    -------
    ndarray, shape (m - 1, m)

    Notes
    -----
    Helmert's matrix without its constant row.
    """
    rows = [[1.0] * k + [-float(k)] + [0.0] * (m - 1 - k) for k in range(1, m)]
    return np.asarray(np.array(rows) / np.sqrt([[k * (k + 1.0)] for k in range(1, m)]))


def dagger(matrices: ComplexArray) -> ComplexArray:
    """Give the adjoint of matrices.

    Parameters
    ----------
    matrices : ndarray, shape (..., d, d)

    Returns
    -------
    ndarray, shape (..., d, d)
    """
    return np.asarray(np.conj(np.swapaxes(matrices, -1, -2)))
