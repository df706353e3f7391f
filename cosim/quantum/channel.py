"""Channels: superoperator, Choi matrix, Pauli transfer matrix and what makes them physical.

A superoperator S is column-stacking: vec(E(rho)) = S vec(rho), with vec(rho)[m + d n] = rho_mn.
The computational subspace of one qubit is |0> and |1>.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import EvolutionError, InputError
from cosim.waveform import ComplexArray, FloatArray

PAULI = np.array(
    [[[1, 0], [0, 1]], [[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]],
    dtype=np.complex128,
)
PAULI.setflags(write=False)


@dataclass(frozen=True, slots=True)
class ChannelCheck:
    """How far a map is from a physical channel.

    Parameters
    ----------
    trace_error : float
        Largest deviation of the trace functional from trace preservation, dimensionless.
    min_choi_eigenvalue : float
        Smallest eigenvalue of the Choi matrix (of trace d); negative values beyond rounding mean
        that the map is not completely positive.
    """

    trace_error: float = field(metadata={"unit": "1"})
    min_choi_eigenvalue: float = field(metadata={"unit": "1"})


def levels_of(superop: ComplexArray) -> int:
    """Give the number of levels of a superoperator.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)

    Returns
    -------
    int
        d.

    Raises
    ------
    InputError
        If the array is not square of a squared size of at least 2 levels, or not finite.
    """
    shape = np.shape(superop)
    d = math.isqrt(shape[0]) if shape else 0
    if len(shape) != 2 or shape[0] != shape[1] or d * d != shape[0] or d < 2:
        raise InputError(f"superoperator: wanted shape (d**2, d**2) with d >= 2, got {shape}")
    if not np.isfinite(superop).all():
        raise InputError(f"superoperator of {d} levels: an element is not finite")
    return d


def unitary_superoperator(u: ComplexArray) -> ComplexArray:
    """Give the superoperator of rho -> u rho u^dag.

    Parameters
    ----------
    u : ndarray, shape (d, d)
        Unitary, or any matrix.

    Returns
    -------
    ndarray, shape (d**2, d**2)
        conj(u) kron u, column-stacking.

    Raises
    ------
    InputError
        If `u` is not square or not finite.
    """
    u = np.asarray(u, dtype=np.complex128)
    if u.ndim != 2 or u.shape[0] != u.shape[1] or not np.isfinite(u).all():
        raise InputError(f"unitary: wanted a finite square matrix, got shape {u.shape}")
    return np.asarray(np.kron(u.conj(), u))


def apply_channel(superop: ComplexArray, rho: ComplexArray) -> ComplexArray:
    """Apply a channel to a density matrix.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    rho : ndarray, shape (d, d)

    Returns
    -------
    ndarray, shape (d, d)

    Raises
    ------
    InputError
        If the shapes do not fit.
    """
    d = levels_of(superop)
    rho = np.asarray(rho, dtype=np.complex128)
    if rho.shape != (d, d):
        raise InputError(f"density matrix: wanted shape {(d, d)}, got {rho.shape}")
    return np.asarray((superop @ rho.reshape(-1, order="F")).reshape(d, d, order="F"))


def restrict(superop: ComplexArray, subspace: Sequence[int]) -> ComplexArray:
    """Give the block of a superoperator from and to the operators on a subspace.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    subspace : sequence of int
        Indices of the m basis states that span the subspace, in order.

    Returns
    -------
    ndarray, shape (m**2, m**2)
        Column-stacking; trace preserving only if nothing leaks.

    Raises
    ------
    InputError
        If an index is out of range or stands twice.
    """
    d = levels_of(superop)
    index = np.asarray(subspace, dtype=np.int64)
    if index.ndim != 1 or index.size < 2 or len(set(index.tolist())) != index.size:
        raise InputError(f"subspace: wanted two or more different indices, got {list(subspace)}")
    if index.min() < 0 or index.max() >= d:
        raise InputError(f"subspace: wanted indices from 0 to {d - 1}, got {list(subspace)}")
    rows = (index[None, :] + d * index[:, None]).reshape(-1)
    return np.ascontiguousarray(np.asarray(superop)[np.ix_(rows, rows)])


def pauli_transfer_matrix(superop: ComplexArray, levels: int | None = None) -> FloatArray:
    """Give the Pauli transfer matrix on the computational subspace of one qubit.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    levels : int, optional
        Number of levels d; checked against the shape when given.

    Returns
    -------
    ndarray, shape (4, 4)
        R_ij = Tr(P_i E(P_j))/2 with P = I, X, Y, Z on |0> and |1>, dimensionless.

    Raises
    ------
    InputError
        If the shape is not that of a superoperator of `levels` levels.

    Notes
    -----
    D. Greenbaum, "Introduction to quantum gate set tomography", arXiv:1509.02921 (2015),
    equation (2.8).
    """
    _check_levels(superop, levels)
    # Row-stacking the conjugate of a Hermitian matrix column-stacks the matrix itself.
    vectors = PAULI.reshape(4, 4).conj()
    block = restrict(superop, (0, 1))
    return np.ascontiguousarray((vectors.conj() @ block @ vectors.T).real / 2)


def choi(superop: ComplexArray) -> ComplexArray:
    """Give the Choi matrix sum_ij |i><j| kron E(|i><j|).

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)

    Returns
    -------
    ndarray, shape (d**2, d**2)
        Of trace d; Hermitian and positive for a completely positive map.

    Raises
    ------
    InputError
        If the shape is not that of a superoperator.

    Notes
    -----
    M.-D. Choi, "Completely positive linear maps on complex matrices", Linear Algebra Appl. 10,
    285 (1975).
    """
    d = levels_of(superop)
    # superop[m + d n, i + d j] as [n, m, j, i] becomes [i, m, j, n].
    tensor = np.asarray(superop, dtype=np.complex128).reshape(d, d, d, d)
    return np.ascontiguousarray(tensor.transpose(3, 1, 2, 0).reshape(d * d, d * d))


def check_channel(superop: ComplexArray, *, tolerance: float = 1e-8) -> ChannelCheck:
    """Check that a map is a physical channel: trace preserving and completely positive.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    tolerance : float
        Largest trace error and largest size of a negative eigenvalue that pass. The default
        covers the compiled kernel's rounding (below 1e-11); a solver run at a relative tolerance
        r needs about 100 r.

    Returns
    -------
    ChannelCheck

    Raises
    ------
    EvolutionError
        If the trace error or the negative part exceeds the tolerance.
    InputError
        If the shape is not that of a superoperator.
    """
    d = levels_of(superop)
    matrix = choi(superop)
    trace_out = np.trace(matrix.reshape(d, d, d, d), axis1=1, axis2=3)
    trace_error = float(np.abs(trace_out - np.eye(d)).max())
    skew = float(np.abs(matrix - matrix.conj().T).max())
    smallest = float(np.linalg.eigvalsh((matrix + matrix.conj().T) / 2)[0])
    if trace_error > tolerance:
        raise EvolutionError(
            f"the channel does not preserve the trace: error {trace_error:.3g}, wanted at most "
            f"{tolerance:.3g}",
            hint="evolve with smaller steps or tighter tolerances",
        )
    if smallest < -tolerance or skew > tolerance:
        raise EvolutionError(
            f"the channel is not completely positive: smallest Choi eigenvalue {smallest:.3g}, "
            f"anti-Hermitian part {skew:.3g}, wanted at least {-tolerance:.3g} and at most "
            f"{tolerance:.3g}",
            hint="evolve with smaller steps or tighter tolerances",
        )
    return ChannelCheck(trace_error, smallest)


def nearest_unitary(superop: ComplexArray, levels: int | None = None) -> ComplexArray:
    """Give the one-qubit unitary with the largest process fidelity to a channel.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    levels : int, optional
        Number of levels d; checked against the shape when given.

    Returns
    -------
    ndarray, shape (2, 2)
        In SU(2), with a non-negative real part of the trace.

    Raises
    ------
    InputError
        If the shape is not that of a superoperator of `levels` levels.

    Notes
    -----
    With U = q_0 - i (q_1 X + q_2 Y + q_3 Z), q real of norm 1, the process fidelity is the
    quadratic form q^T M q, so that the global maximum is the top eigenvector of M: the quaternion
    method of B. K. P. Horn, "Closed-form solution of absolute orientation using unit
    quaternions", J. Opt. Soc. Am. A 4, 629 (1987), which also works where the channel contracts.
    """
    _check_levels(superop, levels)
    matrix = choi(restrict(superop, (0, 1)))
    # Vectors of the Choi matrix are column-stacked operators; quaternion units are I and -i P.
    units = PAULI * np.array([1, -1j, -1j, -1j])[:, None, None]
    columns = units.transpose(0, 2, 1).reshape(4, 4).T
    form = (columns.conj().T @ matrix @ columns).real
    q = np.linalg.eigh((form + form.T) / 2)[1][:, -1]
    if q[0] < 0:
        q = -q
    return np.asarray(np.tensordot(q, units, axes=1))


def _check_levels(superop: ComplexArray, levels: int | None) -> None:
    d = levels_of(superop)
    if levels is not None and levels != d:
        raise InputError(f"superoperator: wanted {levels} levels, got {d} by its shape")
