"""The compiled kernel of batches of small systems: dense Hamiltonians, slice by slice.

As in `cosim.quantum.batch_kernel` each row goes through its own operations in its own order. The
exponential of a slice is the Taylor series on the unitary, in parts of a norm of at most one.

The functions compile at their first call and are cached on disk; nothing compiles at import.
"""

import math

import numba
import numpy as np

from cosim.quantum.kernel import IndexArray
from cosim.waveform import ComplexArray

# What the exponential series may leave out of a slice, far below rounding.
SERIES_REST = 1e-17


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _step(
    u: ComplexArray,
    static: ComplexArray,
    operators: ComplexArray,
    controls: ComplexArray,
    h: float,
    generator: ComplexArray,
    w: ComplexArray,
) -> None:
    """Advance a unitary by one slice; `generator` and the two matrices of `w` are work space."""
    d = u.shape[0]
    for i in range(d):
        for j in range(d):
            generator[i, j] = 0.5 * h * static[i, j]
    for k in range(controls.size):
        c = 0.5 * h * controls[k]
        if c != 0:
            for i in range(d):
                for j in range(d):
                    generator[i, j] += c * operators[k, i, j]
    # What was gathered is half of h H without its adjoint; -i h H takes its place.
    for i in range(d):
        generator[i, i] = complex(0.0, -2 * generator[i, i].real)
        for j in range(i + 1, d):
            value = generator[i, j] + generator[j, i].conjugate()
            generator[i, j] = complex(value.imag, -value.real)
            generator[j, i] = complex(-value.imag, -value.real)
    bound = 0.0
    for i in range(d):
        row = 0.0
        for j in range(d):
            row += abs(generator[i, j].real) + abs(generator[i, j].imag)
        bound = max(bound, row)
    repeats = max(1, math.ceil(bound))
    bound /= repeats
    for _ in range(repeats):
        for i in range(d):
            for j in range(d):
                w[0, i, j] = u[i, j]
        size = 1.0
        order = 0
        now = 0
        while size > SERIES_REST:
            order += 1
            size *= bound / order
            factor = 1.0 / (order * repeats)
            new = 1 - now
            for i in range(d):
                for j in range(d):
                    total = 0j
                    for k in range(d):
                        total += generator[i, k] * w[now, k, j]
                    total *= factor
                    w[new, i, j] = total
                    u[i, j] += total
            now = new


@numba.njit(cache=True, nogil=True, error_model="numpy")
def system_unitary_rows(
    static: ComplexArray,
    operators: ComplexArray,
    controls: ComplexArray,
    rows: IndexArray,
    step: float,
) -> ComplexArray:
    """Multiply the unitaries of all slices, row by row.

    Parameters
    ----------
    static : ndarray, shape (states, states)
        In rad/s.
    operators : ndarray, shape (count, states, states)
    controls : ndarray, shape (rows, n, count)
        In rad/s; H/hbar is static + sum_k (c_k operators[k] + h.c.)/2.
    rows : ndarray of int64, shape (m,)
        Rows to be done.
    step : float
        Length of a slice in s.

    Returns
    -------
    ndarray, shape (m, states, states)
    """
    d = static.shape[0]
    out = np.zeros((rows.size, d, d), dtype=np.complex128)
    generator = np.empty((d, d), dtype=np.complex128)
    w = np.empty((2, d, d), dtype=np.complex128)
    for i in range(rows.size):
        u = out[i]
        for n in range(d):
            u[n, n] = 1.0
        for k in range(controls.shape[1]):
            _step(u, static, operators, controls[rows[i], k], step, generator, w)
    return out


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _turn(u: ComplexArray, x: ComplexArray, half: ComplexArray) -> None:
    """Replace x by u x u^dag."""
    d = u.shape[0]
    for i in range(d):
        for j in range(d):
            total = 0j
            for k in range(d):
                total += u[i, k] * x[k, j]
            half[i, j] = total
    for i in range(d):
        for j in range(d):
            total = 0j
            for k in range(d):
                total += half[i, k] * u[j, k].conjugate()
            x[i, j] = total


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _lose(growth: ComplexArray, x: ComplexArray, half: ComplexArray) -> None:
    """Add growth on the column-stacked x to x."""
    d = x.shape[0]
    for i in range(d):
        for j in range(d):
            total = 0j
            for n in range(d):
                for m in range(d):
                    # Losses of single qubits leave most elements zero.
                    if growth[i + d * j, m + d * n] != 0:
                        total += growth[i + d * j, m + d * n] * x[m, n]
            half[i, j] = total
    for i in range(d):
        for j in range(d):
            x[i, j] += half[i, j]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def system_channel_rows(
    static: ComplexArray,
    operators: ComplexArray,
    controls: ComplexArray,
    rows: IndexArray,
    step: float,
    parts: int,
    kick: IndexArray,
    growths: ComplexArray,
) -> ComplexArray:
    """Multiply the unitaries of all slices and the loss between them, row by row.

    Parameters
    ----------
    static, operators, controls, rows, step
        As in `system_unitary_rows`.
    parts, kick
        As in `cosim.quantum.batch_kernel.channel_rows`.
    growths : ndarray, shape (kinds, states**2, states**2)
        exp(dissipator time) - 1 for each kind of kick, column-stacking.

    Returns
    -------
    ndarray, shape (m, states**2, states**2)
        Column-stacking superoperators.
    """
    d = static.shape[0]
    out = np.empty((rows.size, d * d, d * d), dtype=np.complex128)
    # Images of |i><j| with i <= j; those of |j><i| are the adjoints.
    images = np.empty((d, d, d, d), dtype=np.complex128)
    half = np.empty((d, d), dtype=np.complex128)
    u = np.empty((d, d), dtype=np.complex128)
    generator = np.empty((d, d), dtype=np.complex128)
    w = np.empty((2, d, d), dtype=np.complex128)
    h = step / parts
    for row in range(rows.size):
        images[:] = 0.0
        for i in range(d):
            for j in range(i, d):
                images[i, j, i, j] = 1.0
        begin = 0
        for end in range(kick.size):
            if kick[end] < 0:
                continue
            u[:] = 0.0
            for i in range(d):
                u[i, i] = 1.0
            for k in range(begin, end):
                _step(u, static, operators, controls[rows[row], k // parts], h, generator, w)
            for i in range(d):
                for j in range(i, d):
                    if end > begin:
                        _turn(u, images[i, j], half)
                    _lose(growths[kick[end]], images[i, j], half)
            begin = end
        for i in range(d):
            for j in range(i, d):
                for m in range(d):
                    for n in range(d):
                        value = images[i, j, m, n]
                        out[row, m + d * n, i + d * j] = value
                        out[row, n + d * m, j + d * i] = value.conjugate()
    return out
