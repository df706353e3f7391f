"""Weights with which a record is integrated to one point."""

from typing import Literal

import numpy as np
from scipy.linalg import solve_toeplitz

from cosim.errors import InputError
from cosim.waveform import ComplexArray

# Samples of whitened weights: a matrix of this many complex numbers squared takes 256 MiB.
_LONGEST = 4096

Rule = Literal["boxcar", "matched", "whitened"]


def boxcar(count: int) -> ComplexArray:
    """Give equal weights.

    Parameters
    ----------
    count : int
        Samples.

    Returns
    -------
    ndarray of complex, shape (count,)
        1/count each.
    """
    return np.full(count, 1.0 / count, dtype=np.complex128)


def matched(difference: ComplexArray) -> ComplexArray:
    """Give the best weights for white noise.

    Parameters
    ----------
    difference : ndarray of complex, shape (n,)
        Mean record of state 1 less that of state 0 in V.

    Returns
    -------
    ndarray of complex, shape (n,)
        The difference, with a sum of magnitudes of 1.

    Raises
    ------
    InputError
        If the two records are equal.

    Notes
    -----
    Matched filter: D. O. North, "An analysis of the factors which determine signal/noise
    discrimination in pulsed carrier systems", RCA report PTR-6C (1943).
    """
    return _scaled(difference)


def whitened(difference: ComplexArray, lags: ComplexArray) -> ComplexArray:
    """Give the best weights for noise of any colour.

    Parameters
    ----------
    difference : ndarray of complex, shape (n,)
        As in `matched`.
    lags : ndarray of complex, shape (at least n,)
        Covariance of the noise in V**2.

    Returns
    -------
    ndarray of complex, shape (n,)
        R^-1 difference with R_jk = lags[j - k], with a sum of magnitudes of 1.

    Raises
    ------
    InputError
        If the two records are equal, there are over 4096 samples, or the noise leaves
        combinations of samples without any, so that no weights are the best.

    Notes
    -----
    Generalised matched filter; the system is solved by Levinson's recursion.
    """
    check_length(difference.size)
    first = lags[: difference.size]
    try:
        found = solve_toeplitz((first, np.conj(first)), difference)
    except np.linalg.LinAlgError:
        found = np.full(difference.size, np.nan + 0j)
    # Where the recursion loses its digits what it gives is no solution.
    power = float(np.real(np.vdot(found, difference)))
    if not (np.isfinite(found).all() and power >= 0):
        raise too_narrow()
    return _scaled(found)


def check_length(count: int) -> None:
    """Refuse more samples than whitened weights are worked out for.

    Parameters
    ----------
    count : int

    Raises
    ------
    InputError
        If there are over 4096.
    """
    if count > _LONGEST:
        raise InputError(
            f"whitened weights: wanted at most {_LONGEST} samples, whose square sets the cost, got "
            f"{count}",
            hint="use a converter with a lower rate, or matched weights",
        )


def too_narrow() -> InputError:
    """Give the error for noise that does not fill the band of the grid.

    Returns
    -------
    InputError
    """
    return InputError(
        "whitened weights: the noise is too narrow for the grid: there are combinations of "
        "samples without noise",
        hint="give the noise a white part, or use a converter with a lower rate",
    )


def _scaled(weights: ComplexArray) -> ComplexArray:
    size = np.abs(weights).sum()
    if size == 0:
        raise InputError(
            "weights: the two states give equal records, so that nothing tells them apart",
            hint="check that the state changes something: a dispersive shift of zero does not",
        )
    return np.asarray(weights / size, dtype=np.complex128)
