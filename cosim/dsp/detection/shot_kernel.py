"""The compiled kernel of integrated shots: one decision after the other.

The function compiles at its first call and is cached on disk; nothing compiles at import.
"""

import math

import numba
import numpy as np
import numpy.typing as npt
from numpy.random import Generator

from cosim.waveform import FloatArray

IndexArray = npt.NDArray[np.int64]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _look_up(table: FloatArray, place: float) -> float:
    """Value at a place between the table's points, counted from 0."""
    k = int(place)
    return table[k] + (place - k) * (table[k + 1] - table[k])  # type: ignore[no-any-return]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def count_excited(
    generator: Generator,
    count: int,
    prepared: int,
    wrong: float,
    seen: IndexArray,
    rates: FloatArray,
    changes: FloatArray,
    backs: FloatArray,
    stop: float,
    values: FloatArray,
    sigmas: FloatArray,
    paths: FloatArray,
    path_sigmas: FloatArray,
    threshold: float,
) -> int:
    """Draw shots of one prepared state and count the decisions 1.

    Parameters
    ----------
    generator : numpy.random.Generator
        Moved on.
    count : int
        Number of shots.
    prepared : int
        0 or 1.
    wrong : float
        Probability of the other state at the start.
    seen : ndarray of int64, shape (2,)
        Whose record each state starts with.
    rates : ndarray, shape (2,)
        At which something happens to each state in 1/s.
    changes : ndarray, shape (2,)
        Probability that the record then goes over to the other state.
    backs : ndarray, shape (2,)
        Rate at which it goes back after that in 1/s.
    stop : float
        End of the window in s.
    values, sigmas : ndarray, shape (2,)
        Mean and standard deviation for each state that stays, in V.
    paths, path_sigmas : ndarray, shape (2, n)
        The same for a change of each state at n equidistant times from 0 to `stop`, in V.
    threshold : float
        In V.

    Returns
    -------
    int
    """
    found = 0
    last = paths.shape[1] - 1
    scale = last / stop
    for _ in range(count):
        state = prepared
        if wrong > 0.0 and generator.random() < wrong:
            state = 1 - prepared
        start = seen[state]
        value = values[start]
        sigma = sigmas[start]
        if rates[state] > 0.0:
            place = generator.standard_exponential() / rates[state] * scale
            changed = changes[state] == 1.0 or generator.random() < changes[state]
            if changed and place < last:
                value = _look_up(paths[start], place)
                sigma = _look_up(path_sigmas[start], place)
                if backs[state] > 0.0:
                    place += generator.standard_exponential() / backs[state] * scale
                    if place < last:
                        other = 1 - start
                        value += _look_up(paths[other], place) - values[other]
                        after = _look_up(path_sigmas[other], place)
                        sigma = math.sqrt(sigma**2 + after**2 - sigmas[other] ** 2)
        if value + sigma * generator.standard_normal() > threshold:
            found += 1
    return found
