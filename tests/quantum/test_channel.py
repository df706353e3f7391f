"""Oracle: Kraus forms and matrices written down by hand; QuTiP's conversions."""

import numpy as np
import pytest
import qutip

from cosim.errors import EvolutionError, InputError
from cosim.quantum.channel import (
    PAULI,
    apply_channel,
    check_channel,
    choi,
    levels_of,
    nearest_unitary,
    pauli_transfer_matrix,
    restrict,
    unitary_superoperator,
)
from cosim.waveform import ComplexArray


def kraus_superoperator(operators: list[ComplexArray]) -> ComplexArray:
    return np.asarray(np.sum([np.kron(k.conj(), k) for k in operators], axis=0))


def damping(gamma: float) -> ComplexArray:
    """Amplitude damping (textbook Kraus form)."""
    keep = np.diag([1, np.sqrt(1 - gamma)]).astype(complex)
    fall = np.array([[0, np.sqrt(gamma)], [0, 0]], dtype=complex)
    return kraus_superoperator([keep, fall])


def random_channel(levels: int, seed: int) -> ComplexArray:
    return np.asarray(qutip.rand_super_bcsz(levels, seed=seed).full())


class TestUnitarySuperoperator:
    def test_stacks_columns_as_qutip_does(self) -> None:
        u = qutip.rand_unitary(3, seed=1)
        # Rounding.
        assert np.allclose(unitary_superoperator(u.full()), qutip.to_super(u).full(), atol=1e-14)

    def test_refuses_what_is_not_square(self) -> None:
        with pytest.raises(InputError, match=r"\(2, 3\)"):
            unitary_superoperator(np.zeros((2, 3), dtype=complex))


class TestApplyChannel:
    def test_conjugates_a_state(self) -> None:
        u = qutip.rand_unitary(3, seed=2).full()
        rho = qutip.rand_dm(3, seed=3).full()
        assert np.allclose(apply_channel(unitary_superoperator(u), rho), u @ rho @ u.conj().T)
        with pytest.raises(InputError, match=r"\(3, 3\)"):
            apply_channel(unitary_superoperator(u), np.eye(2, dtype=complex))


class TestPauliTransferMatrix:
    def test_amplitude_damping(self) -> None:
        gamma = 0.19
        wanted = np.diag([1, 0.9, 0.9, 0.81])
        wanted[3, 0] = gamma
        # M. A. Nielsen, I. L. Chuang, "Quantum Computation and Quantum Information" (2000),
        # section 8.3.5, as an affine map of the Bloch vector; rounding.
        assert np.allclose(pauli_transfer_matrix(damping(gamma)), wanted, atol=1e-15)

    def test_quarter_turn_about_x_takes_y_to_z(self) -> None:
        u = (PAULI[0] - 1j * PAULI[1]) / np.sqrt(2)
        wanted = np.array([[1, 0, 0, 0], [0, 1, 0, 0], [0, 0, 0, -1], [0, 0, 1, 0]])
        assert np.allclose(pauli_transfer_matrix(unitary_superoperator(u)), wanted, atol=1e-15)

    def test_is_taken_on_the_two_lowest_levels(self) -> None:
        u = np.diag([1, 1, -1]).astype(complex)
        assert np.allclose(pauli_transfer_matrix(unitary_superoperator(u), 3), np.eye(4))
        with pytest.raises(InputError, match="wanted 2 levels, got 3"):
            pauli_transfer_matrix(unitary_superoperator(u), 2)


class TestChoi:
    def test_agrees_with_qutip(self) -> None:
        superop = random_channel(3, 4)
        dims = [[[3], [3]], [[3], [3]]]
        wanted = qutip.to_choi(qutip.Qobj(superop, dims=dims)).full()
        assert np.allclose(choi(superop), wanted, atol=1e-14)  # Rounding.


class TestCheckChannel:
    def test_passes_a_random_channel(self) -> None:
        check = check_channel(random_channel(3, 5), tolerance=1e-12)
        assert check.trace_error < 1e-12  # Rounding.
        assert check.min_choi_eigenvalue > -1e-12

    def test_names_a_lost_trace(self) -> None:
        with pytest.raises(EvolutionError, match=r"error 0\.001, wanted at most 1e-08"):
            check_channel(0.999 * damping(0.1))

    def test_names_a_map_that_is_not_completely_positive(self) -> None:
        transpose = np.eye(4)[[0, 2, 1, 3]].astype(complex)
        # The transposition has the Choi eigenvalue -1 (A. Peres, Phys. Rev. Lett. 77, 1413, 1996).
        with pytest.raises(EvolutionError, match="smallest Choi eigenvalue -1"):
            check_channel(transpose)

    def test_names_a_map_that_breaks_hermiticity(self) -> None:
        broken = np.diag([1, 1, 1j, 1]).astype(complex)
        with pytest.raises(EvolutionError, match="anti-Hermitian part"):
            check_channel(broken)

    @pytest.mark.parametrize("shape", [(3, 3), (4, 9), (4,), (1, 1)])
    def test_refuses_shapes(self, shape: tuple[int, ...]) -> None:
        with pytest.raises(InputError, match="superoperator"):
            check_channel(np.ones(shape, dtype=complex))

    def test_refuses_what_is_not_finite(self) -> None:
        with pytest.raises(InputError, match="not finite"):
            levels_of(np.full((4, 4), np.nan, dtype=complex))


class TestRestrict:
    def test_picks_the_computational_states_of_two_qutrits(self) -> None:
        rng = np.random.default_rng(6)
        small = np.linalg.qr(rng.normal(size=(4, 4)) + 1j * rng.normal(size=(4, 4)))[0]
        inside = [0, 1, 3, 4]
        large = np.eye(9, dtype=complex)
        large[np.ix_(inside, inside)] = small
        block = restrict(unitary_superoperator(large), inside)
        assert np.allclose(block, unitary_superoperator(small), atol=1e-15)

    @pytest.mark.parametrize("subspace", [(0,), (0, 0), (0, 3), (-1, 0)])
    def test_refuses_bad_indices(self, subspace: tuple[int, ...]) -> None:
        with pytest.raises(InputError, match="subspace"):
            restrict(unitary_superoperator(np.eye(3, dtype=complex)), subspace)


class TestNearestUnitary:
    def test_finds_the_unitary_under_damping_and_a_third_level(self) -> None:
        u = qutip.rand_unitary(2, seed=7).full()
        large = np.eye(3, dtype=complex)
        large[:2, :2] = u
        depolarise = 0.9 * np.eye(4) + 0.1 * np.outer([1, 0, 0, 1], [1, 0, 0, 1]) / 2
        for superop in (unitary_superoperator(large), depolarise @ unitary_superoperator(u)):
            found = nearest_unitary(superop)
            # Depolarisation shrinks evenly and so leaves the nearest unitary; up to a phase.
            assert abs(np.trace(found.conj().T @ u)) == pytest.approx(2, abs=1e-12)

    def test_is_the_maximum_over_random_unitaries(self) -> None:
        superop = random_channel(2, 8)
        found = unitary_superoperator(nearest_unitary(superop))
        best = np.vdot(found, superop).real
        others = [
            np.vdot(qutip.to_super(qutip.rand_unitary(2, seed=seed)).full(), superop).real
            for seed in range(200)
        ]
        assert best >= max(others)
