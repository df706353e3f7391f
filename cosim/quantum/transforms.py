"""Fourier integrals of smooth functions given by samples, at any frequencies."""

import math

import numpy as np

from cosim.waveform import ComplexArray, FloatArray

# Frequencies treated at once: bounds the memory to some 1e5 numbers per function.
CHUNK = 1024


def fourier_integral(values: FloatArray, dt: float, frequencies: FloatArray) -> ComplexArray:
    """Integrate functions times exp(-2 pi i f t) over their samples, t = 0 at the first.

    Parameters
    ----------
    values : ndarray, shape (functions, n)
        Real samples, n at least 4.
    dt : float
        Interval in s.
    frequencies : ndarray, shape (k,)
        In Hz, any: also above the sampling rate, where the interpolant's spectrum counts.

    Returns
    -------
    ndarray, shape (functions, k)
        In the unit of the values times s.

    Notes
    -----
    The cubic through the four nearest samples is integrated exactly with the exponential (the rule
    of L. N. G. Filon, Proc. R. Soc. Edinburgh 49, 38 (1928), with cubics), which comes to a
    discrete transform with a factor, and corrections at the ends. The error is of fourth order in
    the step, whatever the frequency.
    """
    theta = 2 * np.pi * dt * np.asarray(frequencies, dtype=np.float64)
    found = np.empty((values.shape[0], theta.size), dtype=np.complex128)
    for begin in range(0, theta.size, CHUNK):
        part = slice(begin, begin + CHUNK)
        found[:, part] = dt * _integral(values, theta[part])
    return found


def _integral(values: FloatArray, theta: FloatArray) -> ComplexArray:
    n = values.shape[1]
    inner = _moments((-1, 0, 1, 2), theta)
    outer = _moments((0, 1, 2, 3), theta)
    shifts = np.exp(1j * np.outer((-1, 0, 1, 2), theta))
    shifted = inner * shifts
    found = shifted.sum(axis=0).real * _discrete(values, theta)
    # What the cubic of the first interval gives, less what the sum above has counted too much.
    last = np.exp(-1j * (n - 1) * theta)
    for j in range(4):
        weight = outer[j] - shifted[j + 1 :].sum(axis=0) * np.exp(-1j * j * theta)
        found += np.outer(values[:, j], weight)
        found += np.outer(values[:, n - 1 - j], weight.conj() * last)
    return np.asarray(found)


def _moments(nodes: tuple[int, ...], theta: FloatArray) -> ComplexArray:
    """Integrate the Lagrange cubics of four nodes times exp(-i theta u) over u from 0 to 1."""
    order = 16 + math.ceil(float(np.abs(theta).max(initial=0.0)))
    x, w = np.polynomial.legendre.leggauss(order)
    u, w = (x + 1) / 2, w / 2
    cubics = [
        math.prod((u - other) / (node - other) for other in nodes if other != node)
        for node in nodes
    ]
    return np.asarray((np.array(cubics) * w) @ np.exp(-1j * np.outer(u, theta)))


def _discrete(values: FloatArray, theta: FloatArray) -> ComplexArray:
    """Sum values[k] exp(-i theta k), in two steps, so that few exponentials are needed."""
    functions, n = values.shape
    columns = math.isqrt(n - 1) + 1
    rows = -(-n // columns)
    padded = np.zeros((functions, rows * columns))
    padded[:, :n] = values
    within = np.outer(np.arange(columns), theta)
    waves = np.concatenate([np.cos(within), np.sin(within)], axis=1)
    inner = (padded.reshape(functions * rows, columns) @ waves).reshape(functions, rows, 2, -1)
    turn = np.exp(-1j * np.outer(columns * np.arange(rows), theta))
    found = np.zeros((functions, theta.size), dtype=np.complex128)
    for row in range(rows):
        found += (inner[:, row, 0] - 1j * inner[:, row, 1]) * turn[row]
    return found
