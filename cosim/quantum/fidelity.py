"""Metrics of a gate: fidelities, leakage, seepage, unitarity, distance, axis and angle.

Every metric takes the column-stacking superoperator of the whole system, with or without levels
above the computational subspace. The target is a unitary on the m states of that subspace; by
default these are the first m, for two qubits of more than two levels each give their indices.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.quantum.channel import PAULI, levels_of, restrict, unitary_superoperator
from cosim.waveform import ComplexArray, FloatArray

# Below this size a component of an axis counts as zero.
ZERO = 1e-9


@dataclass(frozen=True, slots=True)
class Rotation:
    """A rotation exp(-i angle (axis . sigma)/2) of the Bloch sphere.

    Parameters
    ----------
    axis : tuple of 3 floats
        Unit vector; (0, 0, 1) for the identity, where it has no meaning.
    angle : float
        In rad, in [0, pi].
    """

    axis: tuple[float, float, float]
    angle: float = field(metadata={"unit": "rad"})


def process_fidelity(
    superop: ComplexArray, target: ComplexArray, *, subspace: Sequence[int] | None = None
) -> float:
    """Give the process (entanglement) fidelity of a channel against a unitary.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    target : ndarray, shape (m, m)
        Unitary on the computational subspace.
    subspace : sequence of int, optional
        Indices of the m computational states; the first m by default.

    Returns
    -------
    float
        Tr(S_U^dag S_E)/m**2 over the computational subspace, dimensionless, 0 to 1.

    Raises
    ------
    InputError
        If the shapes do not fit or `target` is not unitary.

    Notes
    -----
    M. A. Nielsen, "A simple formula for the average gate fidelity of a quantum dynamical
    operation", Phys. Lett. A 303, 249 (2002).
    """
    target = _check_target(target)
    m = target.shape[0]
    block = restrict(superop, _subspace(superop, m, subspace))
    overlap = np.vdot(unitary_superoperator(target), block)
    return float(overlap.real / m**2)


def average_gate_fidelity(
    superop: ComplexArray, target: ComplexArray, *, subspace: Sequence[int] | None = None
) -> float:
    """Give the fidelity averaged over all pure states of the computational subspace.

    Parameters
    ----------
    superop, target, subspace
        As in `process_fidelity`.

    Returns
    -------
    float
        (m F_pro + 1 - L1)/(m + 1), dimensionless; never the square-root convention.

    Raises
    ------
    InputError
        As in `process_fidelity`.

    Notes
    -----
    L. H. Pedersen, N. M. Moller, K. Molmer, "Fidelity of quantum operations", Phys. Lett. A 367,
    47 (2007), with the leakage L1 of a channel in place of that of a unitary.
    """
    m = len(target)
    process = process_fidelity(superop, target, subspace=subspace)
    lost = leakage(superop, _subspace(superop, m, subspace))
    return (m * process + 1 - lost) / (m + 1)


def leakage(superop: ComplexArray, subspace: Sequence[int] = (0, 1)) -> float:
    """Give the population that leaves the computational subspace, averaged over its states.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    subspace : sequence of int
        Indices of the computational states.

    Returns
    -------
    float
        L1 = 1 - Tr(P E(P/m)), dimensionless; zero for a system without further levels.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    C. J. Wood, J. M. Gambetta, "Quantification and characterization of leakage errors", Phys. Rev.
    A 97, 032306 (2018).
    """
    block = restrict(superop, subspace)
    return float(1 - _population_kept(block))


def seepage(superop: ComplexArray, subspace: Sequence[int] = (0, 1)) -> float:
    """Give the population that comes back from the levels outside the computational subspace.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    subspace : sequence of int
        Indices of the computational states.

    Returns
    -------
    float
        L2 = Tr(P E(P_leak/d_leak)), dimensionless; 0.0 where there are no further levels.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    Source as for `leakage`.
    """
    d = levels_of(superop)
    restrict(superop, subspace)
    inside = np.asarray(subspace, dtype=np.int64)
    outside = np.setdiff1d(np.arange(d), inside)
    if outside.size == 0:
        return 0.0
    populations = np.asarray(superop)[np.ix_(inside * (d + 1), outside * (d + 1))].real
    return float(populations.sum() / outside.size)


def unitarity(superop: ComplexArray, subspace: Sequence[int] = (0, 1)) -> float:
    """Give the unitarity of a channel on the computational subspace.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
    subspace : sequence of int
        Indices of the m computational states.

    Returns
    -------
    float
        Tr(R_u^T R_u)/(m**2 - 1), R_u the block of the Pauli transfer matrix from traceless to
        traceless operators, dimensionless.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    J. Wallman, C. Granade, R. Harper, S. T. Flammia, "Estimating the coherence of noise", New J.
    Phys. 17, 113020 (2015).
    """
    block = restrict(superop, subspace)
    m = math.isqrt(block.shape[0])
    # Projecting the identity out on both sides leaves the traceless block in any basis.
    identity = np.eye(m).reshape(-1) / math.sqrt(m)
    project = np.eye(m * m) - np.outer(identity, identity)
    return float(np.linalg.norm(project @ block @ project)) ** 2 / (m * m - 1)


def incoherent_infidelity(superop: ComplexArray) -> float:
    """Give the least average infidelity that any unitary correction could leave.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
        One qubit.

    Returns
    -------
    float
        (1/2) (1 - sqrt(u)), u the unitarity, dimensionless.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    Bound of Wallman et al. (2015), source as for `unitarity`.
    """
    return 0.5 * (1 - math.sqrt(unitarity(superop)))


def channel_distance(
    first: ComplexArray, second: ComplexArray, *, subspace: Sequence[int] = (0, 1)
) -> float:
    """Give the distance of two channels on the scale of an average gate infidelity.

    Parameters
    ----------
    first, second : ndarray, shape (d**2, d**2)
        May have different numbers of levels.
    subspace : sequence of int
        Indices of the m computational states.

    Returns
    -------
    float
        m/(m + 1) ||P (S1 - S2) P||**2/(2 m**2) with the Hilbert-Schmidt norm, dimensionless. It is
        exactly zero for equal channels and equals 1 - F_avg(U1, U2) for unitaries.

    Raises
    ------
    InputError
        If the shapes do not fit.

    Notes
    -----
    For unitaries ||S1 - S2||**2 = 2 m**2 (1 - F_pro); the rest is the relation of M. Horodecki et
    al., Phys. Rev. A 60, 1888 (1999). Unlike 1 - F of one channel against the other it does not
    count the incoherent error that both share.
    """
    difference = restrict(first, subspace) - restrict(second, subspace)
    m = len(subspace)
    return float(np.linalg.norm(difference) ** 2 / (2 * m * (m + 1)))


def target_unitary(axis: Sequence[float], angle: float) -> ComplexArray:
    """Give the unitary of a rotation.

    Parameters
    ----------
    axis : sequence of 3 floats
        Any length but zero.
    angle : float
        In rad.

    Returns
    -------
    ndarray, shape (2, 2)
        exp(-i angle (n . sigma)/2), n the unit vector along `axis`.

    Raises
    ------
    InputError
        If the axis is not three finite numbers with a length, or the angle is not finite.

    Notes
    -----
    Textbook SU(2).
    """
    n = np.asarray(axis, dtype=np.float64)
    length = float(np.linalg.norm(n)) if n.shape == (3,) else 0.0
    if not (math.isfinite(length) and length > 0 and math.isfinite(angle)):
        raise InputError(
            f"rotation: wanted an axis of three numbers, not all zero, and a finite angle in rad, "
            f"got {axis!r} and {angle!r}"
        )
    generator = np.tensordot(n / length, PAULI[1:], axes=1)
    return np.asarray(math.cos(angle / 2) * PAULI[0] - 1j * math.sin(angle / 2) * generator)


def rotation_of(u: ComplexArray) -> Rotation:
    """Give axis and angle of a one-qubit unitary; a global phase does not matter.

    Parameters
    ----------
    u : ndarray, shape (2, 2)

    Returns
    -------
    Rotation
        Angle in [0, pi]; at pi, where both signs of the axis are right, its first component that
        is not zero is positive.

    Raises
    ------
    InputError
        If `u` is not a unitary of one qubit.

    Notes
    -----
    Textbook SU(2).
    """
    u = _check_target(u)
    if u.shape != (2, 2):
        raise InputError(f"rotation: wanted a one-qubit unitary of shape (2, 2), got {u.shape}")
    u = u / np.sqrt(np.linalg.det(u))
    cosine = float(np.trace(u).real / 2)
    vector: FloatArray = np.array([-np.trace(p @ u).imag / 2 for p in PAULI[1:]])
    sine = float(np.linalg.norm(vector))
    if cosine < 0:
        cosine, vector = -cosine, -vector
    if sine == 0:
        return Rotation((0.0, 0.0, 1.0), 0.0)
    axis = vector / sine
    if cosine < ZERO and axis[np.flatnonzero(np.abs(axis) > ZERO)[0]] < 0:
        axis = -axis
    return Rotation((float(axis[0]), float(axis[1]), float(axis[2])), 2 * math.atan2(sine, cosine))


def _population_kept(block: ComplexArray) -> float:
    m = math.isqrt(block.shape[0])
    diagonal = np.arange(m) * (m + 1)
    return float(block[np.ix_(diagonal, diagonal)].real.sum() / m)


def _subspace(superop: ComplexArray, m: int, subspace: Sequence[int] | None) -> Sequence[int]:
    d = levels_of(superop)
    chosen = range(m) if subspace is None else subspace
    if len(chosen) != m or m > d:
        raise InputError(
            f"fidelity: a target on {m} states does not fit a subspace of {len(chosen)} states "
            f"out of {d} levels"
        )
    return chosen


def _check_target(target: ComplexArray) -> ComplexArray:
    target = np.asarray(target, dtype=np.complex128)
    if target.ndim != 2 or target.shape[0] != target.shape[1] or target.shape[0] < 2:
        raise InputError(f"target: wanted a unitary matrix, got shape {target.shape}")
    deviation = float(np.abs(target.conj().T @ target - np.eye(target.shape[0])).max())
    if not deviation < 1e-6:
        raise InputError(
            f"target: the matrix is not unitary, U^dag U differs from 1 by {deviation:.3g}"
        )
    return target
