"""The free frame: what phase references before and after a gate absorb at no cost."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.errors import InputError
from cosim.quantum.channel import levels_of, restrict, unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, process_fidelity
from cosim.waveform import ComplexArray

# Below this size an element of a target counts as zero, and fidelities count as equal.
ZERO = 1e-9
TIE = 1e-13
# Points of the search grid over one turn; the function searched has two harmonics.
GRID = 96


@dataclass(frozen=True, slots=True)
class FreeFrame:
    """The best fidelity that phase references before and after the gate can give.

    Parameters
    ----------
    before, after : float
        Angles in rad, in (-pi, pi], of Z(after) E Z(before) with Z = exp(-i theta a^dag a).
    average_gate_fidelity, process_fidelity : float
        Of the channel with these two.
    """

    before: float = field(metadata={"unit": "rad"})
    after: float = field(metadata={"unit": "rad"})
    average_gate_fidelity: float = field(metadata={"unit": "1"})
    process_fidelity: float = field(metadata={"unit": "1"})


def phase_frame(superop: ComplexArray, before: float, after: float) -> ComplexArray:
    """Put phase references before and after a channel.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
        One qubit of d levels.
    before, after : float
        Angles in rad.

    Returns
    -------
    ndarray, shape (d**2, d**2)
        Z(after) E Z(before), Z = exp(-i theta a^dag a).

    Raises
    ------
    InputError
        If an angle is not finite.

    Notes
    -----
    D. C. McKay et al., "Efficient Z gates for quantum computing", Phys. Rev. A 96, 022330 (2017),
    for the virtual Z; the formula is the definition.
    """
    if not (math.isfinite(before) and math.isfinite(after)):
        raise InputError(f"phase frame: wanted finite angles in rad, got {before!r} and {after!r}")
    d = levels_of(superop)
    n = np.arange(d)
    # Element rho_mn, in row m + d n, turns by exp(-i theta (m - n)).
    order = (n[None, :] - n[:, None]).reshape(-1)
    turned = np.exp(-1j * after * order)[:, None] * superop * np.exp(-1j * before * order)
    return np.asarray(turned)


def free_frame(superop: ComplexArray, target: ComplexArray) -> FreeFrame:
    """Maximise the average gate fidelity of Z(after) E Z(before) over the two angles.

    Parameters
    ----------
    superop : ndarray, shape (d**2, d**2)
        One qubit of d levels.
    target : ndarray, shape (2, 2)
        Unitary.

    Returns
    -------
    FreeFrame
        The global maximum. For a diagonal target only the sum of the angles matters, for an
        antidiagonal one (a rotation by pi about an axis in the plane) only their difference; then
        the pair of least norm is given, as also among equal maxima.

    Raises
    ------
    InputError
        If the shapes do not fit or `target` is not unitary.

    Notes
    -----
    The angles do not change the leakage, so the process fidelity decides. It is the trigonometric
    polynomial sum_pq f_pq exp(-i (p after + q before)) with p, q = -1, 0, 1. For a given `before`
    the best `after` is in closed form; what is left is a function of one angle with harmonics up
    to the second, which a grid resolves; Newton's method on both angles ends the search.
    """
    as_is = process_fidelity(superop, target)
    u = np.asarray(target, dtype=np.complex128)
    if u.shape != (2, 2):
        raise InputError(f"free frame: wanted a one-qubit target of shape (2, 2), got {u.shape}")
    f = _harmonics(superop, u)
    if abs(u[0, 1]) < ZERO:
        half = float(np.angle(f[2, 2])) / 2
        before, after = half, half
    elif abs(u[0, 0]) < ZERO:
        half = float(np.angle(f[2, 0])) / 2
        before, after = -half, half
    else:
        before, after = _search(f)
    if _value(f, before, after) <= as_is:
        # Rounding must not make the free frame worse than no frame at all.
        before, after = 0.0, 0.0
    framed = phase_frame(superop, before, after)
    return FreeFrame(
        before,
        after,
        average_gate_fidelity(framed, target),
        process_fidelity(framed, target),
    )


def _harmonics(superop: ComplexArray, target: ComplexArray) -> ComplexArray:
    """Give f[p + 1, q + 1], shape (3, 3), of the process fidelity as a function of the angles."""
    product = unitary_superoperator(target).conj() * restrict(superop, (0, 1)) / 4
    order = np.array([0, 1, -1, 0])  # m - n of the rows m + 2 n
    f = np.zeros((3, 3), dtype=np.complex128)
    np.add.at(f, (order[:, None] + 1, order[None, :] + 1), product)
    return f


def _value(f: ComplexArray, before: float, after: float) -> float:
    p = np.array([-1, 0, 1])
    return float((np.exp(-1j * after * p) @ f @ np.exp(-1j * before * p)).real)


def _search(f: ComplexArray) -> tuple[float, float]:
    angles = np.linspace(-np.pi, np.pi, GRID, endpoint=False)
    waves = np.exp(-1j * np.outer((-1, 0, 1), angles))
    # For each `before`: constant part and first harmonic in `after`.
    constant = (f[1] @ waves).real
    first = f[2] @ waves
    best = constant + 2 * np.abs(first)
    tops = np.flatnonzero((best >= np.roll(best, 1)) & (best >= np.roll(best, -1)))
    found = []
    for top in tops:
        before, after = _newton(f, float(angles[top]), float(np.angle(first[top])))
        before, after = _wrap(before), _wrap(after)
        found.append((_value(f, before, after), before, after))
    highest = max(item[0] for item in found)
    tied = [item for item in found if item[0] >= highest - TIE]
    _, before, after = min(tied, key=lambda item: math.hypot(item[1], item[2]))
    return before, after


def _newton(f: ComplexArray, before: float, after: float) -> tuple[float, float]:
    """Climb from a start near a maximum; a step that does not climb ends it."""
    p = np.array([-1, 0, 1])
    value = _value(f, before, after)
    for _ in range(50):
        row, column = np.exp(-1j * after * p), np.exp(-1j * before * p)
        first_row, first_column = -1j * p * row, -1j * p * column
        gradient = np.array([(row @ f @ first_column).real, (first_row @ f @ column).real])
        cross = (first_row @ f @ first_column).real
        hessian = np.array(
            [
                [(row @ f @ (-p * p * column)).real, cross],
                [cross, ((-p * p * row) @ f @ column).real],
            ]
        )
        # Along a direction without curvature there is nothing to gain; pinv does not move there.
        step = -np.linalg.pinv(hessian, rcond=1e-10, hermitian=True) @ gradient
        new = _value(f, before + float(step[0]), after + float(step[1]))
        if new <= value:
            break
        before, after, value = before + float(step[0]), after + float(step[1]), new
    return before, after


def _wrap(angle: float) -> float:
    """Bring an angle in rad to (-pi, pi]."""
    return math.pi - (math.pi - angle) % (2 * math.pi)
