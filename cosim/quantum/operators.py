"""A user's own system: Hamiltonian, drive operator and collapse operators."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cosim.errors import InputError
from cosim.waveform import ComplexArray, FloatArray

# Largest part of an operator that may fail to be Hermitian, over its norm: rounding.
HERMITIAN_TOLERANCE = 1e-12


@dataclass(frozen=True, slots=True)
class OperatorSystem:
    """A system given by its operators, in the laboratory frame.

    H/hbar = hamiltonian + rate(t) drive, with rate = 2 pi k v(t). The two lowest eigenstates of
    the Hamiltonian are |0> and |1>, their phases such that <0|drive|1> is real and positive, so
    that v = A cos(omega t) rotates about +x. The channel is seen in the frame that rotates with
    the Hamiltonian, phase zero at t = 0. Use `operator_system` to make one from QuTiP's objects.

    Parameters
    ----------
    energies : ndarray, shape (levels,)
        Eigenvalues of the Hamiltonian in rad/s, rising, the lowest at zero.
    drive : ndarray of complex, shape (levels, levels)
        Drive operator in the eigenbasis, without unit.
    collapse : tuple of ndarray of complex, each of shape (levels, levels)
        Collapse operators in the eigenbasis, in sqrt(1/s).
    """

    energies: FloatArray
    drive: ComplexArray
    collapse: tuple[ComplexArray, ...] = ()

    @property
    def levels(self) -> int:
        """Number of levels."""
        return self.energies.size

    @property
    def frequency(self) -> float:
        """Transition frequency |0>-|1> in Hz."""
        return float(self.energies[1] - self.energies[0]) / (2 * np.pi)

    def without_collapse(self) -> "OperatorSystem":
        """The same system without its collapse operators."""
        return OperatorSystem(self.energies, self.drive)


def operator_system(
    hamiltonian: object, drive: object, collapse: Sequence[object] = ()
) -> OperatorSystem:
    """Make a system from operators.

    Parameters
    ----------
    hamiltonian : qutip.Qobj or array_like, shape (levels, levels)
        H/hbar without drive in rad/s, Hermitian, in the laboratory frame.
    drive : qutip.Qobj or array_like, shape (levels, levels)
        What the rate 2 pi k v(t) multiplies, Hermitian, without unit; a + a^dag for a ladder.
    collapse : sequence of qutip.Qobj or array_like, each of shape (levels, levels)
        Collapse operators in sqrt(1/s).

    Returns
    -------
    OperatorSystem
        In the eigenbasis of the Hamiltonian.

    Raises
    ------
    InputError
        If shapes differ, an operator is not finite or not Hermitian, the two lowest states are
        degenerate, or the drive does not connect them.
    """
    h = _matrix("hamiltonian", hamiltonian)
    d = _matrix("drive", drive)
    others = [_matrix(f"collapse[{k}]", item) for k, item in enumerate(collapse)]
    for name, matrix in [("drive", d), *((f"collapse[{k}]", c) for k, c in enumerate(others))]:
        if matrix.shape != h.shape:
            raise InputError(
                f"{name}: wanted the Hamiltonian's shape {h.shape}, got {matrix.shape}"
            )
    for name, matrix in (("hamiltonian", h), ("drive", d)):
        if np.abs(matrix - matrix.conj().T).max() > HERMITIAN_TOLERANCE * np.abs(matrix).max():
            raise InputError(f"{name}: the operator is not Hermitian")
    energies, basis = np.linalg.eigh(h)
    energies = energies - energies[0]
    if energies[1] <= 1e-9 * energies[-1]:
        raise InputError("hamiltonian: its two lowest states are degenerate")
    d = basis.conj().T @ d @ basis
    element = d[0, 1]
    if abs(element) <= 1e-12 * np.abs(d).max():
        raise InputError("drive: the operator does not connect the two lowest states")
    phases = np.ones(energies.size, dtype=np.complex128)
    phases[1] = np.conj(element) / abs(element)
    basis = basis * phases
    turn = [basis.conj().T @ c @ basis for c in others]
    d = phases.conj()[:, None] * d * phases[None, :]
    return OperatorSystem(np.asarray(energies), np.asarray(d), tuple(turn))


def _matrix(name: str, operator: object) -> ComplexArray:
    full = getattr(operator, "full", None)
    matrix = np.asarray(full() if callable(full) else operator, dtype=np.complex128)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or matrix.shape[0] < 2:
        raise InputError(f"{name}: wanted a square matrix of at least 2 x 2, got {matrix.shape}")
    if not np.isfinite(matrix).all():
        raise InputError(f"{name}: the matrix is not finite")
    return matrix
