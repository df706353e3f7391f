"""The compiled kernel: sixth-order Magnus steps and fourth-order placed dissipation.

Every step lies within one piece of the drive's piecewise cubic, so that the generator is smooth
in it. The step's unitary is the exponential of the sixth-order Magnus series with three Gauss
nodes (S. Blanes, F. Casas, J. Ros, "Improved high order integrators based on the Magnus
expansion", BIT 40, 434 (2000), equations for the sixth-order method; recalled from memory and
checked by its order). For two levels the commutators are cross products and the exponential is a
quaternion.

Dissipation acts as "kicks" between the unitaries: on each panel of two equal halves of length s
the exponentials of s/3, 4 s/3 and s/3 of the dissipator stand at the start, the middle and the
end. This is Simpson's rule in the picture that moves with the unitary, so the error of first
order in the dissipation is of fourth order in s (the idea of R. I. McLachlan, "Composition
methods in the presence of small parameters", BIT 35, 258 (1995)).

The functions compile at their first call and are cached on disk; nothing compiles at import.
"""

import math

import numba
import numpy as np
import numpy.typing as npt

from cosim.waveform import ComplexArray, FloatArray

IndexArray = npt.NDArray[np.int64]

GAUSS_OFFSET = math.sqrt(15) / 10  # Outer Gauss nodes from the middle, in units of the step.
UNIFORM = 1e-6  # Two steps count as equal when their lengths differ by less than this part.


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _nodes(
    begin: float, h: float, origin: float, c: FloatArray, piece: int, omega: float
) -> tuple[complex, complex, complex]:
    """Give rate(t) exp(-i omega t) at the three Gauss nodes of a step."""
    middle = begin + 0.5 * h
    x2 = middle - origin
    shift = GAUSS_OFFSET * h
    x1 = x2 - shift
    x3 = x2 + shift
    c0, c1, c2, c3 = c[0, piece], c[1, piece], c[2, piece], c[3, piece]
    r1 = ((c0 * x1 + c1) * x1 + c2) * x1 + c3
    r2 = ((c0 * x2 + c1) * x2 + c2) * x2 + c3
    r3 = ((c0 * x3 + c1) * x3 + c2) * x3 + c3
    phase = omega * middle
    centre = complex(math.cos(phase), -math.sin(phase))
    turn = complex(math.cos(omega * shift), -math.sin(omega * shift))
    return r1 * centre * turn.conjugate(), r2 * centre, r3 * centre * turn


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _step_two(u: ComplexArray, b1: complex, b2: complex, b3: complex, h: float) -> None:
    """Advance a two-level unitary by one step; the generator is -i (x sigma_x + ...)/2."""
    # b multiplies |0><1|, so the Bloch vector of the generator is 2 (Re b, -Im b, 0).
    x1, y1 = 2 * h * b2.real, -2 * h * b2.imag
    k2 = 2 * math.sqrt(15) / 3 * h
    x2, y2 = k2 * (b3.real - b1.real), -k2 * (b3.imag - b1.imag)
    k3 = 20 / 3 * h
    x3 = k3 * (b3.real - 2 * b2.real + b1.real)
    y3 = -k3 * (b3.imag - 2 * b2.imag + b1.imag)
    # Commutators of the generators are cross products of the vectors.
    c1 = x1 * y2 - y1 * x2
    px = x2 - y1 * c1 / 60
    py = y2 + x1 * c1 / 60
    pz = -(x1 * y3 - y1 * x3) / 30
    qx = -20 * x1 - x3
    qy = -20 * y1 - y3
    vx = x1 + x3 / 12 + (qy * pz - c1 * py) / 240
    vy = y1 + y3 / 12 + (c1 * px - qx * pz) / 240
    vz = (qx * py - qy * px) / 240
    square = 0.25 * (vx * vx + vy * vy + vz * vz)
    if square < 1e-3:
        # Five terms leave less than 1e-18 here.
        cosine = 1 - square / 2 * (1 - square / 12 * (1 - square / 30 * (1 - square / 56)))
        sinc = 1 - square / 6 * (1 - square / 20 * (1 - square / 42 * (1 - square / 72)))
    else:
        angle = math.sqrt(square)
        cosine = math.cos(angle)
        sinc = math.sin(angle) / angle
    sinc *= 0.5
    diagonal = complex(cosine, -sinc * vz)
    upper = complex(-sinc * vy, -sinc * vx)
    for j in range(2):
        top, bottom = u[0, j], u[1, j]
        u[0, j] = diagonal * top + upper * bottom
        u[1, j] = diagonal.conjugate() * bottom - upper.conjugate() * top


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _commutator(x: ComplexArray, y: ComplexArray, out: ComplexArray) -> None:
    """Write [x, y] of two anti-Hermitian matrices into `out`; y x is the adjoint of x y."""
    d = x.shape[0]
    for i in range(d):
        for j in range(d):
            total = 0j
            for k in range(d):
                total += x[i, k] * y[k, j]
            out[i, j] = total
    for i in range(d):
        out[i, i] = complex(0.0, 2 * out[i, i].imag)
        for j in range(i + 1, d):
            value = out[i, j] - out[j, i].conjugate()
            out[i, j] = value
            out[j, i] = -value.conjugate()


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _generator(b: complex, ladder: FloatArray, out: ComplexArray) -> None:
    """Write -i (b a + b^* a^dag) into the off-diagonals of `out`, zero elsewhere."""
    d = out.shape[0]
    for i in range(d):
        for j in range(d):
            out[i, j] = 0j
    for n in range(d - 1):
        out[n, n + 1] = -1j * b * ladder[n]
        out[n + 1, n] = -1j * b.conjugate() * ladder[n]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _apply_exponential(x: ComplexArray, u: ComplexArray, w: ComplexArray) -> None:
    """Replace u by exp(x) u with the Taylor series; `w` holds two matrices of work space."""
    d = x.shape[0]
    bound = 0.0
    for i in range(d):
        row = 0.0
        for j in range(d):
            row += abs(x[i, j].real) + abs(x[i, j].imag)
        bound = max(bound, row)
    for i in range(d):
        for j in range(d):
            w[0, i, j] = u[i, j]
    size = 1.0
    order = 0
    # The rest of the series is below 1e-17 when the bound on its last term is.
    while size > 1e-17 and order < 60:
        order += 1
        size *= bound / order
        now, new = (order - 1) % 2, order % 2
        for i in range(d):
            for j in range(d):
                total = 0j
                for k in range(d):
                    total += x[i, k] * w[now, k, j]
                total /= order
                w[new, i, j] = total
                u[i, j] += total


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _step_many(
    u: ComplexArray,
    b1: complex,
    b2: complex,
    b3: complex,
    h: float,
    ladder: FloatArray,
    energies: FloatArray,
    work: ComplexArray,
) -> None:
    """Advance a unitary of any size by one step; `work` holds eight matrices."""
    d = u.shape[0]
    a1, a2, a3, c1, c2, p = work[0], work[1], work[2], work[3], work[4], work[5]
    _generator(h * b2, ladder, a1)
    for n in range(d):
        a1[n, n] = complex(0.0, -h * energies[n])
    _generator(math.sqrt(15) / 3 * h * (b3 - b1), ladder, a2)
    _generator(10 / 3 * h * (b3 - 2 * b2 + b1), ladder, a3)
    _commutator(a1, a2, c1)
    for i in range(d):
        for j in range(d):
            p[i, j] = 2 * a3[i, j] + c1[i, j]
    _commutator(a1, p, c2)
    for i in range(d):
        for j in range(d):
            p[i, j] = a2[i, j] - c2[i, j] / 60
            c1[i, j] -= 20 * a1[i, j] + a3[i, j]
    _commutator(c1, p, c2)
    for i in range(d):
        for j in range(d):
            a1[i, j] += a3[i, j] / 12 + c2[i, j] / 240
    _apply_exponential(a1, u, work[6:8])


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _set_identity(u: ComplexArray) -> None:
    for i in range(u.shape[0]):
        for j in range(u.shape[0]):
            u[i, j] = 1.0 if i == j else 0.0


@numba.njit(cache=True, nogil=True, error_model="numpy")
def unitary_product(
    begin: FloatArray,
    length: FloatArray,
    piece: IndexArray,
    t: FloatArray,
    c: FloatArray,
    omega: float,
    ladder: FloatArray,
    energies: FloatArray,
) -> ComplexArray:
    """Multiply the unitaries of all steps.

    Parameters
    ----------
    begin, length : ndarray, shape (n,)
        Start and length of each step in s.
    piece : ndarray of int64, shape (n,)
        Piece of the drive in which each step lies.
    t, c : ndarray, shapes (m,) and (4, m - 1)
        Knots in s and cubic coefficients of the drive rate, rad/s and powers of s.
    omega : float
        Angular frequency of the frame in rad/s.
    ladder : ndarray, shape (levels - 1,)
        Matrix elements <n|a|n + 1> times the factor on the drive.
    energies : ndarray, shape (levels,)
        Level energies in the frame in rad/s.

    Returns
    -------
    ndarray, shape (levels, levels)
    """
    d = energies.size
    u = np.zeros((d, d), dtype=np.complex128)
    _set_identity(u)
    work = np.zeros((8, d, d), dtype=np.complex128)
    for k in range(begin.size):
        h = length[k]
        b1, b2, b3 = _nodes(begin[k], h, t[piece[k]], c, piece[k], omega)
        if d == 2:
            _step_two(u, ladder[0] * b1, ladder[0] * b2, ladder[0] * b3, h)
        else:
            _step_many(u, b1, b2, b3, h, ladder, energies, work)
    return u


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _conjugate(rho: ComplexArray, u: ComplexArray, half: ComplexArray) -> None:
    """Replace rho by u rho u^dag."""
    d = u.shape[0]
    for i in range(d):
        for j in range(d):
            total = 0j
            for k in range(d):
                total += u[i, k] * rho[k, j]
            half[i, j] = total
    for i in range(d):
        for j in range(d):
            total = 0j
            for k in range(d):
                total += half[i, k] * u[j, k].conjugate()
            rho[i, j] = total


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _dissipate(
    rho: ComplexArray,
    time: float,
    decay: FloatArray,
    down: FloatArray,
    up: FloatArray,
    size: float,
    w: ComplexArray,
) -> None:
    """Replace rho by exp(D time) rho with the Taylor series; `size` bounds the rates in 1/s."""
    d = rho.shape[0]
    for i in range(d):
        for j in range(d):
            w[0, i, j] = rho[i, j]
    bound = 1.0
    order = 0
    while bound > 1e-17 and order < 60:
        order += 1
        factor = time / order
        bound *= size * factor
        now, new = (order - 1) % 2, order % 2
        for i in range(d):
            for j in range(d):
                value = -decay[i, j] * w[now, i, j]
                if i + 1 < d and j + 1 < d:
                    value += down[i, j] * w[now, i + 1, j + 1]
                if i > 0 and j > 0:
                    value += up[i, j] * w[now, i - 1, j - 1]
                value *= factor
                w[new, i, j] = value
                rho[i, j] += value


@numba.njit(cache=True, nogil=True, error_model="numpy")
def channel_product(
    begin: FloatArray,
    length: FloatArray,
    piece: IndexArray,
    kick: FloatArray,
    t: FloatArray,
    c: FloatArray,
    omega: float,
    ladder: FloatArray,
    energies: FloatArray,
    decay: FloatArray,
    down: FloatArray,
    up: FloatArray,
) -> ComplexArray:
    """Multiply the unitaries of all steps and the dissipation between them.

    Parameters
    ----------
    begin, length, piece, t, c, omega, ladder, energies
        As in `unitary_product`.
    kick : ndarray, shape (n + 1,)
        Time in s for which the dissipator acts before step i; the last one after all steps.
    decay, down, up : ndarray, shape (levels, levels)
        Dissipator in 1/s: D[rho]_ij = -decay_ij rho_ij + down_ij rho_i+1,j+1 + up_ij rho_i-1,j-1.

    Returns
    -------
    ndarray, shape (levels, levels, levels, levels)
        Element [i, j] is the image of |i><j|, a matrix.
    """
    d = energies.size
    images = np.zeros((d, d, d, d), dtype=np.complex128)
    for i in range(d):
        for j in range(d):
            images[i, j, i, j] = 1
    u = np.zeros((d, d), dtype=np.complex128)
    work = np.zeros((8, d, d), dtype=np.complex128)
    size = 0.0
    for i in range(d):
        for j in range(d):
            size = max(size, decay[i, j] + down[i, j] + up[i, j])
    _set_identity(u)
    for k in range(begin.size + 1):
        if kick[k] > 0:
            # Images of |j><i| are the adjoints, so half of them is enough.
            for i in range(d):
                for j in range(i, d):
                    _conjugate(images[i, j], u, work[0])
                    _dissipate(images[i, j], kick[k], decay, down, up, size, work[1:3])
            _set_identity(u)
        if k == begin.size:
            break
        h = length[k]
        b1, b2, b3 = _nodes(begin[k], h, t[piece[k]], c, piece[k], omega)
        if d == 2:
            _step_two(u, ladder[0] * b1, ladder[0] * b2, ladder[0] * b3, h)
        else:
            _step_many(u, b1, b2, b3, h, ladder, energies, work)
    for i in range(d):
        for j in range(i):
            for m in range(d):
                for n in range(d):
                    images[i, j, m, n] = images[j, i, n, m].conjugate()
    return images


@numba.njit(cache=True, nogil=True, error_model="numpy")
def place_kicks(
    begin: FloatArray, length: FloatArray, piece: IndexArray, half: float
) -> tuple[FloatArray, FloatArray, IndexArray, FloatArray]:
    """Form Simpson panels of equal steps and place the dissipation in them.

    Parameters
    ----------
    begin, length, piece : ndarray, shape (n,)
        Steps as in `unitary_product`.
    half : float
        Longest half panel in s.

    Returns
    -------
    begin, length, piece : ndarray, shape (m,)
        Steps; one that found no equal neighbour is cut in two.
    kick : ndarray, shape (m + 1,)
        Time of dissipation before each step and after the last, in s.
    """
    n = begin.size
    new_begin = np.empty(2 * n)
    new_length = np.empty(2 * n)
    new_piece = np.empty(2 * n, dtype=np.int64)
    kick = np.zeros(2 * n + 1)
    k = 0
    m = 0
    while k < n:
        h = length[k]
        most = 2 * max(1, int(half / h * (1 + UNIFORM)))
        count = 1
        while count < most and k + count < n and abs(length[k + count] - h) <= UNIFORM * h:
            count += 1
        if count == 1:
            new_begin[m], new_length[m], new_piece[m] = begin[k], h / 2, piece[k]
            new_begin[m + 1], new_length[m + 1] = begin[k] + h / 2, h / 2
            new_piece[m + 1] = piece[k]
            used, made = 1, 2
        else:
            used = made = count - count % 2
            for j in range(used):
                new_begin[m + j], new_length[m + j] = begin[k + j], length[k + j]
                new_piece[m + j] = piece[k + j]
        s = 0.5 * (new_begin[m + made - 1] + new_length[m + made - 1] - new_begin[m])
        kick[m] += s / 3
        kick[m + made // 2] += 4 * s / 3
        kick[m + made] += s / 3
        k += used
        m += made
    return new_begin[:m], new_length[:m], new_piece[:m], kick[: m + 1]
