"""Oracle: closed forms on matrices written down by hand, and averages over states."""

import math

import numpy as np
import pytest
import qutip

from cosim.errors import InputError
from cosim.quantum.channel import apply_channel, unitary_superoperator
from cosim.quantum.fidelity import (
    average_gate_fidelity,
    channel_distance,
    incoherent_infidelity,
    leakage,
    process_fidelity,
    rotation_of,
    seepage,
    target_unitary,
    unitarity,
)
from tests import sources
from tests.validation import Validate

TOPIC = "metrics"
X = np.array([[0, 1], [1, 0]], dtype=complex)


class TestAverageGateFidelity:
    def test_is_the_mean_over_the_six_cardinal_states(self) -> None:
        # The cardinal states form a 2-design, so their mean is the average over all states
        # (A. Klappenecker, M. Rotteler, IEEE ISIT (2005), recalled from memory).
        superop = np.asarray(qutip.rand_super_bcsz(3, seed=11).full())
        u = qutip.rand_unitary(2, seed=12).full()
        h = 1 / math.sqrt(2)
        states = [(1, 0), (0, 1), (h, h), (h, -h), (h, 1j * h), (h, -1j * h)]
        found = []
        for state in states:
            psi = np.array([*state, 0], dtype=complex)
            wanted = np.array([*(u @ psi[:2]), 0])
            rho = apply_channel(superop, np.outer(psi, psi.conj()))
            found.append((wanted.conj() @ rho @ wanted).real)
        # Rounding.
        assert average_gate_fidelity(superop, u) == pytest.approx(np.mean(found), abs=1e-14)

    def test_two_qutrits_with_indices(self) -> None:
        cz = np.diag([1, 1, 1, -1]).astype(complex)
        full = np.diag([1, 1, 1j, 1, -1, 1, 1j, 1, -1]).astype(complex)
        superop = unitary_superoperator(full)
        assert average_gate_fidelity(superop, cz, subspace=(0, 1, 3, 4)) == pytest.approx(1)
        with pytest.raises(InputError, match="4 states does not fit a subspace of 3"):
            average_gate_fidelity(superop, cz, subspace=(0, 1, 3))

    def test_refuses_targets(self) -> None:
        superop = unitary_superoperator(X)
        with pytest.raises(InputError, match="not unitary"):
            process_fidelity(superop, np.asarray(1.1 * X, dtype=complex))
        with pytest.raises(InputError, match="out of 2 levels"):
            process_fidelity(superop, np.eye(3, dtype=complex))
        with pytest.raises(InputError, match=r"\(2,\)"):
            process_fidelity(superop, np.ones(2, dtype=complex))


class TestLeakageAndSeepage:
    def test_a_rotation_between_one_and_two(self, validate: Validate) -> None:
        c, s = math.cos(0.2), math.sin(0.2)
        u = np.array([[1, 0, 0], [0, c, -s], [0, s, c]], dtype=complex)
        superop = unitary_superoperator(u)
        # Half of the computational population sees the rotation; all of |2> does.
        for name, wanted, got in (
            ("leakage", s**2 / 2, leakage(superop)),
            ("seepage", s**2, seepage(superop)),
        ):
            quantity = f"{name} of a turn by 0.4 rad between |1> and |2>"
            source = "mean over the states, computed from the formula"
            validate(quantity, source, wanted, got, abs=1e-15)

    def test_two_levels_have_neither(self) -> None:
        superop = unitary_superoperator(X)
        assert leakage(superop) == pytest.approx(0, abs=1e-15)
        assert seepage(superop) == 0.0


class TestUnitarity:
    def test_does_not_depend_on_the_basis_of_operators(self) -> None:
        from_pauli = np.asarray(qutip.rand_super_bcsz(2, seed=13).full())
        paulis = [np.eye(2), X, np.array([[0, -1j], [1j, 0]]), np.diag([1.0, -1.0])]
        block = np.array(
            [[np.trace(p @ apply_channel(from_pauli, q)).real / 2 for q in paulis] for p in paulis]
        )[1:, 1:]
        assert unitarity(from_pauli) == pytest.approx(np.sum(block**2) / 3, abs=1e-14)

    def test_incoherent_infidelity_of_depolarising(self, validate: Validate) -> None:
        p = 0.97
        mix = np.outer([1, 0, 0, 1], [1, 0, 0, 1]) / 2
        superop = (p * np.eye(4) + (1 - p) * mix).astype(complex)
        # A depolarising channel is all incoherent: r = (1 - p)/2.
        assert incoherent_infidelity(superop) == pytest.approx((1 - p) / 2, abs=1e-14)
        rotated = superop @ unitary_superoperator(target_unitary((1, 2, 3), 0.4))
        quantity = "incoherent part of 1 - F_avg, depolarisation by 3 % after a rotation"
        found = incoherent_infidelity(rotated)
        validate(quantity, sources.WALLMAN, 0.015, found, abs=1e-14, digits=12)


class TestChannelDistance:
    def test_of_unitaries_is_the_average_infidelity(self) -> None:
        u = qutip.rand_unitary(2, seed=14).full()
        v = qutip.rand_unitary(2, seed=15).full()
        distance = channel_distance(unitary_superoperator(u), unitary_superoperator(v))
        infidelity = 1 - average_gate_fidelity(unitary_superoperator(u), v)
        assert distance == pytest.approx(infidelity, abs=1e-14)

    def test_takes_different_numbers_of_levels(self) -> None:
        large = np.diag([1, 1, 1j]).astype(complex)
        assert channel_distance(unitary_superoperator(large), np.eye(4, dtype=complex)) == 0.0


class TestRotations:
    @pytest.mark.parametrize("angle", [1e-7, 0.3, math.pi / 2, 3.0])
    def test_round_trip_with_a_global_phase(self, angle: float) -> None:
        axis = (2 / 3, -1 / 3, 2 / 3)
        found = rotation_of(np.exp(0.9j) * target_unitary(axis, angle))
        # The axis of a rotation by 1e-7 is known to 1e-16/1e-7.
        assert np.allclose(found.axis, axis, atol=1e-8)
        assert found.angle == pytest.approx(angle, abs=1e-14)

    def test_beyond_half_a_turn_is_the_opposite_axis(self) -> None:
        found = rotation_of(target_unitary((0, 1, 0), 1.5 * math.pi))
        assert np.allclose(found.axis, (0, -1, 0), atol=1e-15)
        assert found.angle == pytest.approx(math.pi / 2)

    def test_half_a_turn_has_a_positive_first_component(self) -> None:
        found = rotation_of(target_unitary((-1, 1, 0), math.pi))
        assert np.allclose(found.axis, (math.sqrt(0.5), -math.sqrt(0.5), 0), atol=1e-12)

    def test_identity(self) -> None:
        assert rotation_of(np.eye(2, dtype=complex)).angle == 0.0
        assert rotation_of(-np.eye(2, dtype=complex)).angle == 0.0

    def test_refuses_bad_rotations(self) -> None:
        with pytest.raises(InputError, match="not all zero"):
            target_unitary((0, 0, 0), 1.0)
        with pytest.raises(InputError, match="finite angle"):
            target_unitary((1, 0, 0), math.inf)
        with pytest.raises(InputError, match="one-qubit"):
            rotation_of(np.eye(3, dtype=complex))
