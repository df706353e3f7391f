"""The compiled kernel of one slice: exponentials of a constant Hamiltonian in the rotating frame.

In a slice H/hbar is a Hermitian tridiagonal matrix. By the theorem of Cayley and Hamilton its
exponential is a polynomial of degree levels - 1 in it, whose coefficients follow from the
exponential series and the recurrence that the characteristic polynomial gives for the powers
(C. Moler, C. Van Loan, "Nineteen dubious ways to compute the exponential of a matrix, twenty-five
years later", SIAM Rev. 45, 3 (2003), section on polynomial methods; recalled from memory). The
series is safe because the matrix is kept below one in norm. For two levels the exponential is a
quaternion.

A slice's unitary is left without the phase of the mean energy, which no channel sees.

The functions compile at their first call and are cached on disk; nothing compiles at import. The
cache of a function watches its own file alone: whoever changes this one touches batch_kernel.py.
"""

import math

import numba

from cosim.waveform import ComplexArray, FloatArray

# Below this square of the half angle the series of cosine and sine are used.
SERIES_SQUARE = 0.0625
# What the exponential series may leave out of a slice, far below rounding.
SERIES_REST = 1e-17


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _cosine_and_ratio(square: float) -> tuple[float, float]:
    """Give cos(a) and sin(a)/a from a**2; six terms leave less than 2e-16."""
    if square < SERIES_SQUARE:
        cosine = 1 - square / 2 * (
            1 - square / 12 * (1 - square / 30 * (1 - square / 56 * (1 - square / 90)))
        )
        ratio = 1 - square / 6 * (
            1 - square / 20 * (1 - square / 42 * (1 - square / 72 * (1 - square / 110)))
        )
        return cosine, ratio
    angle = math.sqrt(square)
    return math.cos(angle), math.sin(angle) / angle


@numba.njit(cache=True, nogil=True, error_model="numpy")
def step_two(u: ComplexArray, rate: complex, detuning: float, h: float) -> None:
    """Advance a two-level unitary by one slice, up to the phase that makes H traceless."""
    # H/hbar = detuning/2 + v.sigma/2 with the vector v = (Re rate, -Im rate, -detuning).
    x, y, z = 0.5 * h * rate.real, -0.5 * h * rate.imag, -0.5 * h * detuning
    cosine, ratio = _cosine_and_ratio(x * x + y * y + z * z)
    diagonal = complex(cosine, -ratio * z)
    upper = complex(-ratio * y, -ratio * x)
    for j in range(2):
        top, bottom = u[0, j], u[1, j]
        u[0, j] = diagonal * top + upper * bottom
        u[1, j] = diagonal.conjugate() * bottom - upper.conjugate() * top


@numba.njit(cache=True, nogil=True, error_model="numpy")
def _coefficients(
    diagonal: FloatArray, upper: ComplexArray, bound: float, p: FloatArray, c: ComplexArray
) -> None:
    """Write the c with exp(-i H) = sum_j c_j H**j for a tridiagonal H of a norm up to `bound`.

    upper[n] is H[n - 1, n], zero for n = 0; `p` holds four rows of d + 1 numbers of work space.
    """
    d = diagonal.size
    # Characteristic polynomials of the leading blocks, coefficients rising, one from two others.
    for j in range(d + 1):
        p[0, j] = 0.0
        p[1, j] = 0.0
    p[1, 0] = 1.0
    for k in range(d):
        old, now, new = k % 3, (k + 1) % 3, (k + 2) % 3
        square = upper[k].real * upper[k].real + upper[k].imag * upper[k].imag
        p[new, 0] = -diagonal[k] * p[now, 0] - square * p[old, 0]
        for j in range(1, d + 1):
            p[new, j] = p[now, j - 1] - diagonal[k] * p[now, j] - square * p[old, j]
    last = (d + 1) % 3
    # Below, p[3] holds the powers from H**d on in terms of the lower ones.
    factor = 1.0 + 0j
    size = 1.0
    for j in range(d):
        c[j] = factor
        factor *= -1j / (j + 1)
        size *= bound / (j + 1)
        p[3, j] = -p[last, j]
    order = d
    while size > SERIES_REST:
        highest = p[3, d - 1]
        for j in range(d - 1, 0, -1):
            c[j] += factor * p[3, j]
            p[3, j] = p[3, j - 1] - highest * p[last, j]
        c[0] += factor * p[3, 0]
        p[3, 0] = -highest * p[last, 0]
        order += 1
        factor *= -1j / order
        size *= bound / order


@numba.njit(cache=True, nogil=True, error_model="numpy")
def step_three(
    u: ComplexArray,
    rate: complex,
    detuning: float,
    h: float,
    ladder: FloatArray,
    energies: FloatArray,
) -> None:
    """Advance a three-level unitary by one slice as `step_many` does, in registers."""
    mean = h * (float(energies[0] + energies[1] + energies[2]) / 3 + detuning)
    a0 = h * energies[0] - mean
    a1 = h * (energies[1] + detuning) - mean
    a2 = h * (energies[2] + 2 * detuning) - mean
    b1, b2 = 0.5 * h * ladder[0] * rate, 0.5 * h * ladder[1] * rate
    s1 = b1.real * b1.real + b1.imag * b1.imag
    s2 = b2.real * b2.real + b2.imag * b2.imag
    # Frobenius' norm bounds the largest eigenvalue.
    bound = math.sqrt(a0 * a0 + a1 * a1 + a2 * a2 + 2 * (s1 + s2))
    repeats = max(1, math.ceil(bound))
    if repeats > 1:
        bound /= repeats
        a0, a1, a2 = a0 / repeats, a1 / repeats, a2 / repeats
        b1, b2 = b1 / repeats, b2 / repeats
        s1, s2 = s1 / repeats**2, s2 / repeats**2
    # H is traceless: H**3 = q1 H + q0.
    q1 = s1 + s2 - a0 * a1 - a1 * a2 - a2 * a0
    q0 = a0 * a1 * a2 - s1 * a2 - s2 * a0
    # exp(-i H) = c0 + c1 H + c2 H**2; even powers of the series are real, odd ones imaginary.
    x0, x1, x2 = 1.0, 0.0, -0.5
    y0, y1, y2 = 0.0, -1.0, 0.0
    v0, v1, v2 = q0, q1, 0.0
    factor = 1 / 6
    size = bound * bound * bound / 6
    order = 3
    while size > SERIES_REST:
        y0 += factor * v0
        y1 += factor * v1
        y2 += factor * v2
        v0, v1, v2 = v2 * q0, v0 + v2 * q1, v1
        factor /= order + 1
        x0 += factor * v0
        x1 += factor * v1
        x2 += factor * v2
        v0, v1, v2 = v2 * q0, v0 + v2 * q1, v1
        factor /= -(order + 2)
        size *= bound * bound / ((order + 1) * (order + 2))
        order += 2
    c0, c1, c2 = complex(x0, y0), complex(x1, y1), complex(x2, y2)
    e00 = c0 + c1 * a0 + c2 * (a0 * a0 + s1)
    e11 = c0 + c1 * a1 + c2 * (a1 * a1 + s1 + s2)
    e22 = c0 + c1 * a2 + c2 * (a2 * a2 + s2)
    lower, higher = c1 + c2 * (a0 + a1), c1 + c2 * (a1 + a2)
    e01, e10 = lower * b1, lower * b1.conjugate()
    e12, e21 = higher * b2, higher * b2.conjugate()
    both = b1 * b2
    e02, e20 = c2 * both, c2 * both.conjugate()
    for _ in range(repeats):
        for j in range(3):
            p0, p1, p2 = u[0, j], u[1, j], u[2, j]
            u[0, j] = e00 * p0 + e01 * p1 + e02 * p2
            u[1, j] = e10 * p0 + e11 * p1 + e12 * p2
            u[2, j] = e20 * p0 + e21 * p1 + e22 * p2


@numba.njit(cache=True, nogil=True, error_model="numpy")
def step_many(
    u: ComplexArray,
    rate: complex,
    detuning: float,
    h: float,
    ladder: FloatArray,
    energies: FloatArray,
    diagonal: FloatArray,
    upper: ComplexArray,
    p: FloatArray,
    c: ComplexArray,
    w: ComplexArray,
) -> None:
    """Advance a unitary of any size by one slice, up to the phase that makes H traceless.

    From `diagonal` on it is work space; upper[0], upper[d], w[:, 0] and w[:, d + 1] stay zero.
    """
    d = u.shape[0]
    mean = 0.0
    for n in range(d):
        diagonal[n] = h * (energies[n] + n * detuning)
        mean += diagonal[n] / d
    b = 0.5 * h * rate
    bound = 0.0
    for n in range(d):
        diagonal[n] -= mean
        row = abs(diagonal[n])
        if n > 0:
            upper[n] = b * ladder[n - 1]
            row += abs(upper[n].real) + abs(upper[n].imag)
        if n + 1 < d:
            row += ladder[n] * (abs(b.real) + abs(b.imag))
        bound = max(bound, row)
    repeats = max(1, math.ceil(bound))
    if repeats > 1:
        bound /= repeats
        for n in range(d):
            diagonal[n] /= repeats
            upper[n] /= repeats
    _coefficients(diagonal, upper, bound, p, c)
    for _ in range(repeats):
        # Horner's rule: w takes the place of c_k u + H w, from the highest power down.
        for n in range(d):
            for j in range(d):
                w[0, n + 1, j] = c[d - 1] * u[n, j]
        now = 0
        for k in range(d - 2, -1, -1):
            new = 1 - now
            for n in range(d):
                below, above = upper[n].conjugate(), upper[n + 1]
                for j in range(d):
                    w[new, n + 1, j] = (
                        c[k] * u[n, j]
                        + diagonal[n] * w[now, n + 1, j]
                        + below * w[now, n, j]
                        + above * w[now, n + 2, j]
                    )
            now = new
        for n in range(d):
            for j in range(d):
                u[n, j] = w[now, n + 1, j]


@numba.njit(cache=True, nogil=True, error_model="numpy")
def two_level_product(rate: ComplexArray, detuning: FloatArray, h: float, u: ComplexArray) -> None:
    """Write the product of all slices of a two-level row, up to its phase, as a quaternion."""
    a0, a1, a2, a3 = 1.0, 0.0, 0.0, 0.0
    varies = detuning.size > 1
    z = -0.5 * h * detuning[0]
    for k in range(rate.size):
        if varies:
            z = -0.5 * h * detuning[k]
        x, y = 0.5 * h * rate[k].real, -0.5 * h * rate[k].imag
        b0, ratio = _cosine_and_ratio(x * x + y * y + z * z)
        b1, b2, b3 = ratio * x, ratio * y, ratio * z
        # (b0 - i b.sigma)(a0 - i a.sigma)
        c0 = b0 * a0 - (b1 * a1 + b2 * a2 + b3 * a3)
        c1 = b0 * a1 + b1 * a0 + (b2 * a3 - b3 * a2)
        c2 = b0 * a2 + b2 * a0 + (b3 * a1 - b1 * a3)
        c3 = b0 * a3 + b3 * a0 + (b1 * a2 - b2 * a1)
        a0, a1, a2, a3 = c0, c1, c2, c3
    u[0, 0] = complex(a0, -a3)
    u[0, 1] = complex(-a2, -a1)
    u[1, 0] = complex(a2, -a1)
    u[1, 1] = complex(a0, a3)
