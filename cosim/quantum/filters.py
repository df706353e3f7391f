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
from cosim.quantum.control_path import (
    ROUNDING,
    PathSegment,
    checked_subspace,
    dagger,
    differences,
)
from cosim.quantum.transforms import fourier_integral
from cosim.waveform import ComplexArray, FloatArray

__all__ = [
    "FilterFunction",
    "NoiseInfidelity",
    "PathSegment",
    "PhaseFilters",
    "carrier_filter_function",
    "filter_area",
    "filter_function",
    "noise_infidelity",
    "phase_filter_functions",
    "phase_operator",
]


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


def carrier_filter_function(
    path: Sequence[PathSegment],
    lowering: ComplexArray,
    offsets: FloatArray,
    *,
    subspace: Sequence[int] = (0, 1),
) -> FilterFunction:
    """Give the filter function of noise that is added to the drive, around the frame's frequency.

    Parameters
    ----------
    path, subspace
        As in `filter_function`, in a frame that rotates at f_frame, the qubit's or the carrier's.
    lowering : ndarray, shape (d, d)
        What the rate multiplies, the part that lowers: a of H/hbar = rate (a + a^dag).
    offsets : ndarray, shape (k,)
        Frequencies less f_frame in Hz, of both signs.

    Returns
    -------
    FilterFunction
        In (rad/s)**-2: 1 - F_avg = integral of S(f_frame + offset) times it over all offsets, with
        S the one-sided density of the rate 2 pi k v(t) at the qubit in (rad/s)**2/Hz.

    Raises
    ------
    InputError
        As in `filter_function`.

    Notes
    -----
    First order as above with N = a exp(-i omega t) + a^dag exp(i omega t). Noise is stationary, so
    that its sidebands do not interfere; what turns at twice the frequency is left out, as in the
    rotating-wave approximation. White noise costs an idle of two levels 2/3 `flip_rate` per time.
    """
    chosen = checked_subspace(path, subspace)
    shape = path[0].unitaries.shape[1:]
    a = np.asarray(lowering, dtype=np.complex128)
    if a.shape != shape:
        raise InputError(
            f"filter function: wanted a lowering operator of shape {shape}, got {a.shape}"
        )
    f = -np.asarray(offsets, dtype=np.float64)
    transform: ComplexArray = np.zeros((shape[0] ** 2, f.size), dtype=np.complex128)
    for segment in path:
        u = segment.unitaries
        values = np.ascontiguousarray((dagger(u) @ a @ u).reshape(u.shape[0], -1).T)
        part = fourier_integral(values.real, segment.dt, f)
        part = part + 1j * fourier_integral(values.imag, segment.dt, f)
        transform += part * np.exp(-2j * np.pi * f * (segment.start - path[0].start))
    block = transform.reshape(*shape, -1)
    m, others = len(chosen), [k for k in range(shape[0]) if k not in chosen]
    power = np.abs(block) ** 2
    within = power[np.ix_(chosen, chosen)].sum(axis=(0, 1))
    trace = block[chosen, chosen].sum(axis=0)
    # A classical force raises and lowers alike, so that half the density counts in each direction.
    lost = power[np.ix_(others, chosen)].sum(axis=(0, 1))
    lost = lost + power[np.ix_(chosen, others)].sum(axis=(0, 1))
    return FilterFunction(-f, (within - np.abs(trace) ** 2 / m) / (m + 1), lost / (2 * m))


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
    if len(path) != len(operators):
        raise InputError(
            f"filter function: wanted one operator for each segment of a path, got "
            f"{len(operators)} for {len(path)}"
        )
    chosen = checked_subspace(path, subspace)
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
    skew = float(np.abs(n - dagger(n)).max())
    if not skew <= ROUNDING * float(np.abs(n).max()):
        raise InputError(
            f"filter function: the operator of the noise is not Hermitian, it differs by {skew:.3g}"
        )
    return n


def _coordinates(u: ComplexArray, operator: ComplexArray, inside: list[int]) -> FloatArray:
    m, outside = len(inside), [k for k in range(u.shape[1]) if k not in inside]
    x = dagger(u) @ (operator @ u[:, :, inside])
    block = x[:, inside, :].transpose(1, 2, 0)
    upper = block[np.triu_indices(m, k=1)]
    diagonal = np.diagonal(block, axis1=0, axis2=1).real.T
    within = [differences(m) @ diagonal, math.sqrt(2) * upper.real, math.sqrt(2) * upper.imag]
    parts = [part / math.sqrt(m + 1) for part in within]
    if outside:
        lost = x[:, outside, :].reshape(u.shape[0], -1).T / math.sqrt(m)
        parts += [lost.real, lost.imag]
    return np.ascontiguousarray(np.concatenate(parts))


def _integrate(values: FloatArray, dt: float) -> FloatArray:
    """Integrate over the last axis; Gregory's end weights make the rule one of fourth order."""
    weights = np.ones(values.shape[-1])
    weights[:3] = weights[-3:][::-1] = (3 / 8, 7 / 6, 23 / 24)
    return np.asarray(values @ weights * dt)
