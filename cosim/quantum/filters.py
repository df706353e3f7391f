"""Filter functions: what a control lets through of a noise, to first order in its density.

The Hamiltonian is H(t) + x(t) N(t) with x stationary, of mean zero and one-sided density S(f). In
the frame of the nominal evolution U, N becomes X = U^dag N U, and the noise turns a state by
A = integral of x X dt. Averaged over the states of the computational subspace P, of m states, the
infidelity against the nominal final states is, to second order in x,

    1 - F_avg = <||Q A P||^2>/m + <||P A P||^2 - |tr P A P|^2/m>/(m + 1)

with Q = 1 - P. The first part is leakage, the second the error that stays inside. Of the second
order of the Dyson series only A^2/2 counts: the rest is a commutator, imaginary under the trace of
P. Every <|integral of x X_jk dt|^2> is the integral of S times the square of a
Fourier transform, so 1 - F_avg = integral of S(f) F(f) df over f > 0.

Sources: T. J. Green, J. Sastrawan, H. Uys, M. J. Biercuk, "Arbitrary quantum control of qubits in
the presence of universal noise", New J. Phys. 15, 095004 (2013), for the first order; L. H.
Pedersen, N. M. Moller, K. Molmer, "Fidelity of quantum operations", Phys. Lett. A 367, 47 (2007),
for the average over a subspace. The two together are derived here.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.quantum.transforms import fourier_integral
from cosim.waveform import ComplexArray, FloatArray

# A segment is interpolated by cubics, which take the ends from the samples next to them.
LEAST_SAMPLES = 8
# Deviation from U^dag U = 1, or from N^dag = N over the norm of N, that is taken for rounding.
ROUNDING = 1e-8


@dataclass(frozen=True, slots=True)
class PathSegment:
    """The nominal evolution over a stretch in which the control is smooth.

    A gate is one segment, or several where the control jumps; what happens in no time, such as an
    ideal pulse, stands between the end of one and the start of the next.

    Parameters
    ----------
    start : float
        Time of the first sample in s.
    dt : float
        Sample interval in s.
    unitaries : ndarray of complex, shape (n, d, d)
        U from the start of the gate to start + k dt, at least 8 samples, both ends included.

    Raises
    ------
    InputError
        If the shape does not fit, the interval is not positive or a matrix is not unitary.
    """

    start: float = field(metadata={"unit": "s"})
    dt: float = field(metadata={"unit": "s"})
    unitaries: ComplexArray

    def __post_init__(self) -> None:
        u = np.ascontiguousarray(self.unitaries, dtype=np.complex128)
        object.__setattr__(self, "unitaries", u)
        if u.ndim != 3 or u.shape[1] != u.shape[2] or u.shape[0] < LEAST_SAMPLES:
            raise InputError(
                f"filter function: wanted at least {LEAST_SAMPLES} unitaries, an array of shape "
                f"(n, d, d), got {u.shape}"
            )
        if not (math.isfinite(self.start) and math.isfinite(self.dt) and self.dt > 0):
            raise InputError(
                f"filter function: wanted a start and a positive interval in s, got "
                f"{self.start!r} and {self.dt!r}"
            )
        deviation = np.abs(_dagger(u) @ u - np.eye(u.shape[1])).max(axis=(1, 2))
        if not (deviation < ROUNDING).all():
            bad = int(np.flatnonzero(~(deviation < ROUNDING))[0])
            raise InputError(
                f"filter function: matrix {bad} of the path is not unitary, U^dag U differs from 1 "
                f"by {deviation[bad]:.3g}",
                hint="relaxation has no filter function: give the evolution without it",
            )

    @property
    def stop(self) -> float:
        """Time of the last sample in s."""
        return float(self.start + self.dt * (self.unitaries.shape[0] - 1))


@dataclass(frozen=True, slots=True)
class FilterFunction:
    """1 - F_avg = integral over f > 0 of S(f) (inside + leakage) df, S one-sided per Hz.

    Parameters
    ----------
    frequencies : ndarray, shape (k,)
        In Hz.
    inside : ndarray, shape (k,)
        The part within the computational subspace, in 1/(unit of the noise)**2.
    leakage : ndarray, shape (k,)
        The part that leaves it: its integral with S is the average leaked population.
    """

    frequencies: FloatArray = field(metadata={"unit": "Hz"})
    inside: FloatArray
    leakage: FloatArray

    @property
    def total(self) -> FloatArray:
        """The sum of both parts, shape (k,)."""
        return np.asarray(self.inside + self.leakage)


@dataclass(frozen=True, slots=True)
class PhaseFilters:
    """Filter functions of the phase of the oscillator that makes the drive, in rad**-2.

    Parameters
    ----------
    qubit_frame : FilterFunction
        The phase error of the drive counts in full: the qubit's own frame is the reference.
    oscillator_frame : FilterFunction
        The oscillator is the reference, as it is for a later pulse and readout from the same one:
        what stays is the frequency error, (2 pi f)**2 times the filter function of a detuning.
    """

    qubit_frame: FilterFunction
    oscillator_frame: FilterFunction


@dataclass(frozen=True, slots=True)
class NoiseInfidelity:
    """The effect of a noise on a gate to first order.

    Parameters
    ----------
    infidelity : float
        1 - F_avg, dimensionless, leakage included.
    leakage : float
        Average population that leaves the computational subspace, dimensionless.
    """

    infidelity: float = field(metadata={"unit": "1"})
    leakage: float = field(metadata={"unit": "1"})


def filter_function(
    path: Sequence[PathSegment],
    operators: Sequence[ComplexArray],
    frequencies: FloatArray,
    *,
    subspace: Sequence[int] = (0, 1),
) -> FilterFunction:
    """Give the filter function of a noise.

    Parameters
    ----------
    path : sequence of PathSegment
        In order of time; the first matrix is the identity.
    operators : sequence of ndarray of complex, each of shape (d, d) or (n, d, d)
        N of each segment, constant or at each of its samples, Hermitian, in rad/s per unit of the
        noise, in the frame of the path: a^dag a for a detuning in rad/s, the drive's own
        Hamiltonian for its relative amplitude, `phase_operator` for its phase.
    frequencies : ndarray, shape (k,)
        In Hz, any.
    subspace : sequence of int
        Indices of the m computational states.

    Returns
    -------
    FilterFunction

    Raises
    ------
    InputError
        If shapes do not fit, an operator is not Hermitian, the path does not start with the
        identity, or the subspace is not one of its levels.
    """
    f = np.asarray(frequencies, dtype=np.float64)
    signals = _signals(path, operators, subspace)
    transform: ComplexArray = np.zeros((signals[0].shape[0], f.size), dtype=np.complex128)
    for segment, values in zip(path, signals, strict=True):
        turn = np.exp(-2j * np.pi * f * (segment.start - path[0].start))
        transform += fourier_integral(values, segment.dt, f) * turn
    power = transform.real**2 + transform.imag**2
    inside = len(subspace) ** 2 - 1
    return FilterFunction(f, power[:inside].sum(axis=0), power[inside:].sum(axis=0))


def filter_area(
    path: Sequence[PathSegment],
    operators: Sequence[ComplexArray],
    *,
    subspace: Sequence[int] = (0, 1),
) -> NoiseInfidelity:
    """Integrate a filter function over all frequencies.

    Parameters
    ----------
    path, operators, subspace
        As in `filter_function`.

    Returns
    -------
    NoiseInfidelity
        Its integral from 0 to infinity, the effect of white noise of density 1: what is left of
        it above some frequency is the most that a lower density there can cost.

    Raises
    ------
    InputError
        As in `filter_function`.

    Notes
    -----
    Parseval's theorem; the integral over time by Gregory's rule.
    """
    signals = _signals(path, operators, subspace)
    inside = len(subspace) ** 2 - 1
    areas = np.zeros(signals[0].shape[0])
    for segment, values in zip(path, signals, strict=True):
        areas += _integrate(values**2, segment.dt) / 2
    leakage = float(areas[inside:].sum())
    return NoiseInfidelity(float(areas[:inside].sum()) + leakage, leakage)


def phase_operator(number: ComplexArray, drive: ComplexArray) -> ComplexArray:
    """Give the operator that the phase of a drive multiplies.

    Parameters
    ----------
    number : ndarray, shape (d, d)
        a^dag a; for several qubits on one oscillator the sum.
    drive : ndarray, shape (d, d) or (n, d, d)
        The drive's Hamiltonian in rad/s, in the rotating frame.

    Returns
    -------
    ndarray, shape as `drive`
        -i [number, drive] in rad/s per rad: a drive that is late by a phase phi, v = A cos(omega t
        + phi), has the Hamiltonian exp(-i phi number) drive exp(i phi number).
    """
    return np.asarray(-1j * (number @ drive - drive @ number))


def phase_filter_functions(
    path: Sequence[PathSegment],
    drives: Sequence[ComplexArray],
    number: ComplexArray,
    frequencies: FloatArray,
    *,
    subspace: Sequence[int] = (0, 1),
) -> PhaseFilters:
    """Give the filter functions of an oscillator's phase in both frames.

    Parameters
    ----------
    path, frequencies, subspace
        As in `filter_function`.
    drives : sequence of ndarray of complex, each of shape (d, d) or (n, d, d)
        The drive's Hamiltonian in each segment in rad/s.
    number : ndarray, shape (d, d)
        a^dag a.

    Returns
    -------
    PhaseFilters

    Raises
    ------
    InputError
        As in `filter_function`.

    Notes
    -----
    H. Ball, W. D. Oliver, M. J. Biercuk, "The role of master clock stability in quantum
    information processing", npj Quantum Inf. 2, 16033 (2016), for the oscillator's frame. The two
    differ by the phases at the ends of the gate, since the phase's operator is the time derivative
    of the detuning's in the frame of the nominal evolution.
    """
    operators = [phase_operator(number, drive) for drive in drives]
    qubit = filter_function(path, operators, frequencies, subspace=subspace)
    detuning = filter_function(path, [number] * len(path), frequencies, subspace=subspace)
    square = (2 * np.pi * detuning.frequencies) ** 2
    oscillator = FilterFunction(
        detuning.frequencies, square * detuning.inside, square * detuning.leakage
    )
    return PhaseFilters(qubit, oscillator)


def noise_infidelity(
    function: FilterFunction, density: FloatArray, weights: FloatArray
) -> NoiseInfidelity:
    """Integrate a density with a filter function.

    Parameters
    ----------
    function : FilterFunction
        At k frequencies.
    density : ndarray, shape (k,)
        One-sided, in (unit of the noise)**2/Hz at the function's frequencies, not negative.
    weights : ndarray, shape (k,)
        Quadrature weights in Hz.

    Returns
    -------
    NoiseInfidelity

    Raises
    ------
    InputError
        If shapes differ, or a density is negative or not finite.
    """
    if not density.shape == weights.shape == function.frequencies.shape:
        raise InputError(
            f"noise infidelity: wanted a density and a weight at each frequency, got shapes "
            f"{density.shape} and {weights.shape} for {function.frequencies.shape}"
        )
    bad = np.flatnonzero(~((density >= 0) & np.isfinite(density)))
    if bad.size:
        raise InputError(
            f"noise infidelity: wanted a density of at least zero, got {density[bad[0]]} at "
            f"{function.frequencies[bad[0]]:.6g} Hz"
        )
    each = density * weights
    leakage = float(each @ function.leakage)
    return NoiseInfidelity(float(each @ function.inside) + leakage, leakage)


def _signals(
    path: Sequence[PathSegment], operators: Sequence[ComplexArray], subspace: Sequence[int]
) -> list[FloatArray]:
    """Give real functions of time, shape (functions, n), whose squared transforms sum to F.

    The first m**2 - 1 are the coordinates of the traceless part of P X P over sqrt(m + 1), the
    others the real and imaginary parts of Q X P over sqrt(m).
    """
    if not path or len(path) != len(operators):
        raise InputError(
            f"filter function: wanted one operator for each segment of a path, got "
            f"{len(operators)} for {len(path)}"
        )
    d = path[0].unitaries.shape[1]
    chosen = sorted(set(subspace))
    if len(chosen) != len(subspace) or len(chosen) < 2 or chosen[0] < 0 or chosen[-1] >= d:
        raise InputError(
            f"filter function: wanted a subspace of at least two of {d} levels, got "
            f"{tuple(subspace)}"
        )
    first = path[0].unitaries[0]
    if np.abs(first - np.eye(d)).max() > ROUNDING:
        raise InputError(
            f"filter function: the path must start with the identity, its first matrix differs "
            f"by {np.abs(first - np.eye(d)).max():.3g}"
        )
    return [
        _coordinates(segment.unitaries, _operator(operator, segment), chosen)
        for segment, operator in zip(path, operators, strict=True)
    ]


def _operator(operator: ComplexArray, segment: PathSegment) -> ComplexArray:
    n = np.asarray(operator, dtype=np.complex128)
    shape = segment.unitaries.shape
    if n.shape not in (shape, shape[1:]):
        raise InputError(
            f"filter function: wanted an operator of shape {shape[1:]} or {shape}, got {n.shape}"
        )
    skew = float(np.abs(n - _dagger(n)).max())
    if not skew <= ROUNDING * float(np.abs(n).max()):
        raise InputError(
            f"filter function: the operator of the noise is not Hermitian, it differs by {skew:.3g}"
        )
    return n


def _coordinates(u: ComplexArray, operator: ComplexArray, inside: list[int]) -> FloatArray:
    m, outside = len(inside), [k for k in range(u.shape[1]) if k not in inside]
    x = _dagger(u) @ (operator @ u[:, :, inside])
    block = x[:, inside, :].transpose(1, 2, 0)
    upper = block[np.triu_indices(m, k=1)]
    diagonal = np.diagonal(block, axis1=0, axis2=1).real.T
    # Helmert's basis of the differences of the diagonal elements, which has no trace.
    helmert = np.array(
        [[1.0] * k + [-float(k)] + [0.0] * (m - 1 - k) for k in range(1, m)]
    ) / np.sqrt([[k * (k + 1.0)] for k in range(1, m)])
    within = [helmert @ diagonal, math.sqrt(2) * upper.real, math.sqrt(2) * upper.imag]
    parts = [part / math.sqrt(m + 1) for part in within]
    if outside:
        lost = x[:, outside, :].reshape(u.shape[0], -1).T / math.sqrt(m)
        parts += [lost.real, lost.imag]
    return np.ascontiguousarray(np.concatenate(parts))


def _dagger(matrices: ComplexArray) -> ComplexArray:
    return np.asarray(np.conj(np.swapaxes(matrices, -1, -2)))


def _integrate(values: FloatArray, dt: float) -> FloatArray:
    """Integrate over the last axis; Gregory's end weights make the rule one of fourth order."""
    weights = np.ones(values.shape[-1])
    weights[:3] = weights[-3:][::-1] = (3 / 8, 7 / 6, 23 / 24)
    return np.asarray(values @ weights * dt)
