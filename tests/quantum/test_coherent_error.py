"""Oracles: the fidelity of the same channel, and SU(2) algebra in closed form."""

import math

import numpy as np
import pytest
from scipy.linalg import expm
from scipy.stats import unitary_group

from cosim.errors import InputError
from cosim.quantum.channel import PAULI, unitary_superoperator
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import average_gate_fidelity, leakage, target_unitary

X90 = target_unitary((1.0, 0.0, 0.0), math.pi / 2)


def turn(axis: tuple[float, ...], angle: float) -> np.ndarray:
    return target_unitary(axis, angle)


def near(target: np.ndarray, levels: int, size: float, seed: int) -> np.ndarray:
    """A unitary of some levels whose block is near the target."""
    rng = np.random.default_rng(seed)
    h = rng.normal(size=(levels, levels)) + 1j * rng.normal(size=(levels, levels))
    whole = np.eye(levels, dtype=complex)
    whole[:2, :2] = target
    return np.asarray(whole @ expm(-0.5j * size * (h + h.conj().T)))


def damped(u: np.ndarray, probability: float) -> np.ndarray:
    """A unitary, then depolarised."""
    kept = unitary_superoperator(u)
    mixed = np.zeros((4, 4), dtype=complex)
    for pauli in PAULI:
        mixed += unitary_superoperator(pauli) / 4
    return np.asarray(((1 - probability) * np.eye(4) + probability * mixed) @ kept)


@pytest.mark.parametrize("levels", [2, 3, 4])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_its_square_is_the_infidelity_of_a_unitary(levels: int, seed: int) -> None:
    superop = unitary_superoperator(near(X90, levels, 0.05, seed))
    vector = error_vector(superop, X90)
    lost = 1.0 - average_gate_fidelity(superop, X90)
    assert lost > 1e-5
    # 1 - F and an eigenvalue of 2 to their rounding.
    assert vector @ vector == pytest.approx(lost, rel=1e-9, abs=1e-14)
    weighted = error_vector(superop, X90, leakage_weight=3.0)
    wanted = lost + 3.0 * leakage(superop)
    assert weighted @ weighted == pytest.approx(wanted, rel=1e-9, abs=1e-14)


def test_a_small_turn_before_the_gate_is_told_by_axis_and_angle() -> None:
    axis = np.array([2.0, -1.0, 2.0]) / 3.0
    vector = error_vector(unitary_superoperator(X90 @ turn(tuple(axis), 0.02)), X90)
    # sin(theta/2) sqrt(2/3) n; rounding.
    assert vector[:3] == pytest.approx(math.sqrt(2 / 3) * math.sin(0.01) * axis, rel=1e-10)
    assert np.abs(vector[3:]).max() < 1e-12


def test_the_phase_of_a_unitary_does_not_matter() -> None:
    u = near(X90, 3, 0.1, 5)
    first = error_vector(unitary_superoperator(u), X90)
    again = error_vector(unitary_superoperator(np.exp(2.1j) * u), X90)
    assert again == pytest.approx(first, abs=1e-12)  # rounding


def test_decoherence_leaves_the_direction_and_is_not_in_the_square() -> None:
    wrong = X90 @ turn((0.0, 1.0, 0.0), 0.03)
    clean = error_vector(unitary_superoperator(wrong), X90)
    superop = damped(wrong, 1e-3)
    vector = error_vector(superop, X90)
    # The largest part of the channel is the unitary times sqrt(1 - 3 p/4).
    assert vector == pytest.approx(math.sqrt(1 - 0.75e-3) * clean, abs=1e-12)
    rest = 1.0 - average_gate_fidelity(superop, X90) - vector @ vector
    # 1 - F of a depolarised qubit is p/2 (ALGEBRA: F_avg = 1 - p + p/2), less the part of the
    # coherent error that goes with it, 1e-3 of 1.5e-4.
    assert rest == pytest.approx(0.5e-3, abs=3e-7)


def test_it_goes_on_rising_beyond_a_quarter_turn() -> None:
    angles = np.linspace(0.0, 0.99 * math.pi, 40)
    lengths = [
        np.linalg.norm(error_vector(unitary_superoperator(X90 @ turn((1, 0, 0), angle)), X90))
        for angle in angles
    ]
    slopes = np.diff(lengths) / np.diff(angles)
    # Of the root of the infidelity the slope at a half turn is nothing; here it stays that of a
    # quarter turn: sqrt(2/3) cos(pi/4)/2.
    assert slopes.min() > math.sqrt(2 / 3) * math.cos(math.pi / 4) / 2 * (1 - 1e-9)
    assert slopes[25:] == pytest.approx(slopes[25], rel=1e-6)


def test_any_unitary_squares_to_its_infidelity_up_to_a_quarter_turn() -> None:
    for u in unitary_group.rvs(2, size=20, random_state=3):
        lost = 1.0 - average_gate_fidelity(unitary_superoperator(u), X90)
        vector = error_vector(unitary_superoperator(u), X90)
        if lost < 1.0 / 3.0:  # 2/3 sin^2(pi/4)
            assert vector @ vector == pytest.approx(lost, rel=1e-9)
        else:
            assert vector @ vector >= 1.0 / 3.0


def test_a_target_of_another_size_is_refused() -> None:
    with pytest.raises(InputError, match="one-qubit target"):
        error_vector(np.eye(4), np.eye(3))
