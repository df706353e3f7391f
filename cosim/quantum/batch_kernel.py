"""The compiled kernel of the batches: products of slices and dissipation, row after row.

Each row goes through its own operations in its own order, so that its numbers depend neither on
the rest of the batch nor on the thread that runs it.

The functions compile at their first call and are cached on disk; nothing compiles at import.
"""

import math

import numba
import numpy as np

from cosim.quantum import slice_kernel
from cosim.quantum.kernel import IndexArray
from cosim.waveform import ComplexArray, FloatArray

# Rows whose images are turned together: four vectors of eight numbers.
LANES = 32


@numba.njit(cache=True, nogil=True, error_model="numpy")
def row_sizes(rate: ComplexArray) -> tuple[FloatArray, FloatArray]:
    """Give the largest rate of each row and the root of the sum of its squared jumps.

    Parameters
    ----------
    rate : ndarray, shape (rows, n)
        In rad/s.

    Returns
    -------
    largest, jumps : ndarray, shape (rows,)
        In rad/s.
    """
    largest = np.zeros(rate.shape[0])
    jumps = np.zeros(rate.shape[0])
    for row in range(rate.shape[0]):
        top = 0.0
        total = 0.0
        before = rate[row, 0]
        for k in range(rate.shape[1]):
            value = rate[row, k]
            change = value - before
            total += change.real * change.real + change.imag * change.imag
            top = max(top, value.real * value.real + value.imag * value.imag)
            before = value
        largest[row] = math.sqrt(top)
        jumps[row] = math.sqrt(total)
    return largest, jumps


@numba.njit(cache=True, nogil=True, error_model="numpy")
def unitary_rows(
    rate: ComplexArray,
    detuning: FloatArray,
    rows: IndexArray,
    step: float,
    ladder: FloatArray,
    energies: FloatArray,
) -> ComplexArray:
    """Multiply the unitaries of all slices, row by row.

    Parameters
    ----------
    rate : ndarray, shape (1, n) or (batch, n)
        In rad/s; H/hbar contains (rate a + rate^* a^dag)/2.
    detuning : ndarray, shape (1 or batch, 1 or n)
        In rad/s; multiplies a^dag a.
    rows : ndarray of int64, shape (m,)
        Rows to be done.
    step : float
        Length of a slice in s.
    ladder : ndarray, shape (levels - 1,)
        Matrix elements <n|a|n + 1>.
    energies : ndarray, shape (levels,)
        Level energies in the frame in rad/s.

    Returns
    -------
    ndarray, shape (m, levels, levels)
    """
    d = energies.size
    out = np.zeros((rows.size, d, d), dtype=np.complex128)
    diagonal = np.zeros(d)
    upper = np.zeros(d + 1, dtype=np.complex128)
    p = np.zeros((4, d + 1))
    c = np.zeros(d, dtype=np.complex128)
    w = np.zeros((2, d + 2, d), dtype=np.complex128)
    for i in range(rows.size):
        drive = rate[rows[i] if rate.shape[0] > 1 else 0]
        offset = detuning[rows[i] if detuning.shape[0] > 1 else 0]
        u = out[i]
        if d == 2:
            slice_kernel.two_level_product(drive, offset, step, u)
        else:
            for n in range(d):
                u[n, n] = 1.0
            for k in range(drive.size):
                delta = offset[k if offset.size > 1 else 0]
                if d == 3:
                    slice_kernel.step_three(u, drive[k], delta, step, ladder, energies)
                else:
                    slice_kernel.step_many(
                        u, drive[k], delta, step, ladder, energies, diagonal, upper, p, c, w
                    )
        # The mean energy's phase, from sums that lose no digits to the number of slices.
        turns = offset.sum() if offset.size > 1 else drive.size * offset[0]
        phase = step * (drive.size * energies.mean() + 0.5 * (d - 1) * turns)
        u *= complex(math.cos(phase), -math.sin(phase))
    return out


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _turn_image(u: FloatArray, x: FloatArray, half: FloatArray, count: int) -> None:
    """Replace x by u x u^dag in the first `count` lanes; `half` is work space like x.

    Arrays are of shape (2, d, d, LANES): real and imaginary parts, matrix, row of the batch.
    """
    d = x.shape[1]
    ur, ui, xr, xi, hr, hi = u[0], u[1], x[0], x[1], half[0], half[1]
    for i in range(d):
        for j in range(d):
            for lane in range(count):
                hr[i, j, lane] = ur[i, 0, lane] * xr[0, j, lane] - ui[i, 0, lane] * xi[0, j, lane]
                hi[i, j, lane] = ur[i, 0, lane] * xi[0, j, lane] + ui[i, 0, lane] * xr[0, j, lane]
            for k in range(1, d):
                for lane in range(count):
                    hr[i, j, lane] += (
                        ur[i, k, lane] * xr[k, j, lane] - ui[i, k, lane] * xi[k, j, lane]
                    )
                    hi[i, j, lane] += (
                        ur[i, k, lane] * xi[k, j, lane] + ui[i, k, lane] * xr[k, j, lane]
                    )
    for i in range(d):
        for j in range(d):
            for lane in range(count):
                xr[i, j, lane] = ur[j, 0, lane] * hr[i, 0, lane] + ui[j, 0, lane] * hi[i, 0, lane]
                xi[i, j, lane] = ur[j, 0, lane] * hi[i, 0, lane] - ui[j, 0, lane] * hr[i, 0, lane]
            for k in range(1, d):
                for lane in range(count):
                    xr[i, j, lane] += (
                        ur[j, k, lane] * hr[i, k, lane] + ui[j, k, lane] * hi[i, k, lane]
                    )
                    xi[i, j, lane] += (
                        ur[j, k, lane] * hi[i, k, lane] - ui[j, k, lane] * hr[i, k, lane]
                    )


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _dissipate(table: FloatArray, x: FloatArray, half: FloatArray, count: int) -> None:
    """Add sum_m table_ijm x_m,m+j-i to x_ij; arrays and lanes as in `_turn_image`."""
    d = x.shape[1]
    for part in range(2):
        old, new = x[part], half[part]
        for i in range(d):
            for j in range(d):
                for lane in range(count):
                    new[i, j, lane] = 0.0
                for m in range(max(0, i - j), d - max(0, j - i)):
                    a = table[i, j, m]
                    for lane in range(count):
                        new[i, j, lane] += a * old[m, m + j - i, lane]
        for i in range(d):
            for j in range(d):
                for lane in range(count):
                    old[i, j, lane] += new[i, j, lane]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _write_channels(images: FloatArray, out: ComplexArray) -> None:
    """Write column i + d j from the column-stacked image of |i><j|, for the lanes that count."""
    d = images.shape[2]
    q = 0
    for i in range(d):
        for j in range(i, d):
            for m in range(d):
                for n in range(d):
                    for lane in range(out.shape[0]):
                        value = complex(images[q, 0, m, n, lane], images[q, 1, m, n, lane])
                        out[lane, m + d * n, i + d * j] = value
                        out[lane, n + d * m, j + d * i] = value.conjugate()
            q += 1


@numba.njit(cache=True, nogil=True, error_model="numpy")
def channel_rows(
    rate: ComplexArray,
    detuning: FloatArray,
    rows: IndexArray,
    step: float,
    parts: int,
    kick: IndexArray,
    tables: FloatArray,
    ladder: FloatArray,
    energies: FloatArray,
) -> ComplexArray:
    """Multiply the unitaries of all slices and the dissipation between them, row by row.

    Parameters
    ----------
    rate, detuning, rows, step, ladder, energies
        As in `unitary_rows`.
    parts : int
        Equal parts into which each slice is cut for the dissipation.
    kick : ndarray of int64, shape (n parts + 1,)
        Which of the tables acts before part k, or -1 for none; the last one after all parts.
    tables : ndarray, shape (kinds, levels, levels, levels)
        Dissipation of a given time: rho_ij grows by sum_m tables[., i, j, m] rho_m,m+j-i. That
        the identity is left out keeps the digits of a thousand small steps.

    Returns
    -------
    ndarray, shape (m, levels**2, levels**2)
        Column-stacking superoperators.

    Notes
    -----
    Rows go in blocks of `LANES`, so that what is dear, turning the images, runs in the
    processor's vector units. Sums and products are those of single numbers there, so that a
    row's neighbours do not matter.
    """
    d = energies.size
    out = np.empty((rows.size, d * d, d * d), dtype=np.complex128)
    # Images of |i><j| with i <= j; those of |j><i| are the adjoints.
    images = np.empty((d * (d + 1) // 2, 2, d, d, LANES))
    half = np.empty((2, d, d, LANES))
    lanes = np.empty((2, d, d, LANES))
    u = np.empty((d, d), dtype=np.complex128)
    diagonal = np.zeros(d)
    upper = np.zeros(d + 1, dtype=np.complex128)
    p = np.zeros((4, d + 1))
    c = np.zeros(d, dtype=np.complex128)
    w = np.zeros((2, d + 2, d), dtype=np.complex128)
    h = step / parts
    varies = detuning.shape[1] > 1
    for block in range(0, rows.size, LANES):
        count = min(LANES, rows.size - block)
        images[:] = 0.0
        q = 0
        for i in range(d):
            for j in range(i, d):
                images[q, 0, i, j] = 1.0
                q += 1
        begin = 0
        for end in range(kick.size):
            if kick[end] < 0:
                continue
            if end > 0:
                for lane in range(count):
                    row = rows[block + lane]
                    a = row if rate.shape[0] > 1 else 0
                    b = row if detuning.shape[0] > 1 else 0
                    u[:] = 0.0
                    for i in range(d):
                        u[i, i] = 1.0
                    for k in range(begin, end):
                        value = rate[a, k // parts]
                        delta = detuning[b, k // parts if varies else 0]
                        if d == 2:
                            slice_kernel.step_two(u, value, delta, h)
                        elif d == 3:
                            slice_kernel.step_three(u, value, delta, h, ladder, energies)
                        else:
                            slice_kernel.step_many(
                                u, value, delta, h, ladder, energies, diagonal, upper, p, c, w
                            )
                    for i in range(d):
                        for j in range(d):
                            lanes[0, i, j, lane] = u[i, j].real
                            lanes[1, i, j, lane] = u[i, j].imag
                for q in range(images.shape[0]):
                    _turn_image(lanes, images[q], half, count)
            for q in range(images.shape[0]):
                _dissipate(tables[kick[end]], images[q], half, count)
            begin = end
        _write_channels(images, out[block : block + LANES])
    return out


@numba.njit(cache=True, nogil=True, error_model="numpy")
def add_moments(count: int, mean: ComplexArray, squares: FloatArray, values: ComplexArray) -> None:
    """Take samples into a running mean and sum of squared deviations, one after the other.

    Parameters
    ----------
    count : int
        Samples that are in `mean` already.
    mean, squares : ndarray, shape (d, d)
        Changed in place: mean, and sum of abs(value - mean)**2.
    values : ndarray, shape (m, d, d)
        New samples.

    Notes
    -----
    B. P. Welford, "Note on a method for calculating corrected sums of squares and products",
    Technometrics 4, 419 (1962); recalled from memory. The order of the samples alone decides the
    rounding, not how they are cut into chunks.
    """
    for row in range(values.shape[0]):
        part = 1.0 / (count + row + 1)
        for i in range(mean.shape[0]):
            for j in range(mean.shape[1]):
                change = values[row, i, j] - mean[i, j]
                mean[i, j] += part * change
                left = values[row, i, j] - mean[i, j]
                squares[i, j] += change.real * left.real + change.imag * left.imag
