"""Runs of equal slices in a lossy batch, which one exponential each makes exact."""

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm

from cosim.quantum.kernel import IndexArray
from cosim.waveform import ComplexArray

# A run of at least so many slices is done by one exponential: about where that is the quicker way
# for rows that share nothing (2 to 6 levels).
LEAST_RUN = 64

BoolArray = npt.NDArray[np.bool_]
# Begin, end and whether it is a run of equal slices.
Cut = tuple[int, int, bool]


def cuts_of(equal: BoolArray) -> tuple[Cut, ...]:
    """Cut the slices of one row into runs and what lies between them.

    Parameters
    ----------
    equal : ndarray of bool, shape (n - 1,)
        Whether slice k + 1 goes on as slice k.

    Returns
    -------
    tuple of (begin, end, run)
        In order, together all slices; runs have at least `LEAST_RUN` slices.
    """
    edges = np.concatenate([[0], np.flatnonzero(~equal) + 1, [equal.size + 1]])
    cuts: list[Cut] = []
    done = 0
    for k in np.flatnonzero(np.diff(edges) >= LEAST_RUN):
        begin, end = int(edges[k]), int(edges[k + 1])
        if begin > done:
            cuts.append((done, begin, False))
        cuts.append((begin, end, True))
        done = end
    if done <= equal.size:
        cuts.append((done, equal.size + 1, False))
    return tuple(cuts)


def group_rows(equal: BoolArray, count: int) -> Iterable[tuple[IndexArray, tuple[Cut, ...]]]:
    """Put rows together that are cut alike.

    Parameters
    ----------
    equal : ndarray of bool, shape (1 or count, n - 1)
        As in `cuts_of`, for all rows or for each.
    count : int
        Number of rows.

    Returns
    -------
    iterable of (rows, cuts)
        Each row once; a row's cuts depend on that row alone.
    """
    groups: dict[tuple[Cut, ...], list[int]] = {}
    whole: tuple[Cut, ...] = ((0, equal.shape[1] + 1, False),)
    # Every run has slices in a row at one of these places, so that noise is soon told apart.
    some = np.asarray(equal[:, LEAST_RUN // 2 - 1 :: LEAST_RUN // 2].any(axis=1))
    for row, candidate in enumerate(some.tolist()):
        cuts = cuts_of(equal[row]) if candidate else whole
        groups.setdefault(cuts, []).append(row)
    if equal.shape[0] == 1:
        return [(np.arange(count), cuts) for cuts in groups]
    return [(np.array(rows), cuts) for cuts, rows in groups.items()]


def constant_channel(
    hamiltonian: ComplexArray, dissipator: ComplexArray, time: float
) -> ComplexArray:
    """Give the channel of a constant Hamiltonian and dissipator.

    Parameters
    ----------
    hamiltonian : ndarray, shape (d, d)
        H/hbar in rad/s.
    dissipator : ndarray, shape (d**2, d**2)
        Column-stacking, in 1/s.
    time : float
        In s.

    Returns
    -------
    ndarray, shape (d**2, d**2)
        Column-stacking superoperator.

    Notes
    -----
    scipy's Pade approximant with scaling and squaring.
    """
    one = np.eye(hamiltonian.shape[0])
    turning = np.kron(one, hamiltonian) - np.kron(hamiltonian.T, one)
    return np.asarray(expm((dissipator - 1j * turning) * time))


def compose_rows(later: ComplexArray, earlier: ComplexArray) -> ComplexArray:
    """Multiply superoperators row by row.

    Parameters
    ----------
    later, earlier : ndarray, shape (m, d**2, d**2)

    Returns
    -------
    ndarray, shape (m, d**2, d**2)
    """
    # One by one: a product of a stack might choose its way by the length of the stack.
    return np.array([b @ a for b, a in zip(later, earlier, strict=True)])
