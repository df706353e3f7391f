"""Butterworth low-passes on a uniform grid: their sections, and the compiled kernel that runs them.

scipy.signal is not used here because its import alone takes as long as all else that a readout
imports. The kernel compiles at its first call and is cached on disk; nothing compiles at import.
"""

import math

import numba
import numpy as np

from cosim.waveform import ComplexArray, FloatArray


def butterworth_sections(order: int, corner: float) -> FloatArray:
    """Give the sections of a digital Butterworth low-pass, by the bilinear transform.

    Parameters
    ----------
    order : int
        At least 1.
    corner : float
        Frequency of -3 dB over the rate of the samples, above 0 and below 1/2; it is pre-warped.

    Returns
    -------
    ndarray, shape (k, 5)
        b0, b1, b2, a1, a2 of each section (a0 = 1), each with a gain of 1 at frequency 0.

    Notes
    -----
    S. Butterworth, "On the theory of filter amplifiers", Experimental Wireless 7, 536 (1930), for
    the poles; s = (z - 1)/(z + 1) puts them on the grid.
    """
    w = math.tan(math.pi * corner)
    rows = []
    for k in range(order // 2):
        damping = 2.0 * w * math.sin(math.pi * (2 * k + 1) / (2 * order))
        whole = 1.0 + damping + w**2
        b = w**2 / whole
        rows.append((b, 2.0 * b, b, 2.0 * (w**2 - 1.0) / whole, (1.0 - damping + w**2) / whole))
    if order % 2:
        b = w / (1.0 + w)
        rows.append((b, b, 0.0, (w - 1.0) / (1.0 + w), 0.0))
    return np.array(rows)


@numba.njit(cache=True, nogil=True)
def run_sections(sections: FloatArray, records: ComplexArray) -> ComplexArray:
    """Send records through a filter that is at rest before them.

    Parameters
    ----------
    sections : ndarray, shape (k, 5)
        From `butterworth_sections`.
    records : ndarray of complex, shape (rows, n)
        In any unit.

    Returns
    -------
    ndarray of complex, shape (rows, n)
        In that unit.
    """
    rows, count = records.shape
    found = np.empty_like(records)
    first = np.zeros(sections.shape[0], np.complex128)
    second = np.zeros(sections.shape[0], np.complex128)
    for row in range(rows):
        first[:] = 0.0
        second[:] = 0.0
        for n in range(count):
            x = records[row, n]
            for k in range(sections.shape[0]):
                # The transposed second direct form.
                y = sections[k, 0] * x + first[k]
                first[k] = sections[k, 1] * x - sections[k, 3] * y + second[k]
                second[k] = sections[k, 2] * x - sections[k, 4] * y
                x = y
            found[row, n] = x
    return found
