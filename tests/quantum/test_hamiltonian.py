"""Oracle: the textbook transformation of the laboratory Hamiltonian into the rotating frame."""

import numpy as np
import pytest

from cosim.errors import InputError
from cosim.quantum.hamiltonian import (
    anharmonic_energies,
    full_hamiltonian,
    rotating_wave_hamiltonian,
)
from cosim.quantum.qubit import Qubit

QUBIT = Qubit(6.2e9, 4, -0.3e9)


class TestAnharmonicEnergies:
    def test_ladder_of_transitions(self) -> None:
        transitions = np.diff(anharmonic_energies(QUBIT)) / (2 * np.pi)
        # Rounding of numbers of 1e9.
        assert np.allclose(transitions, [0, -0.3e9, -0.6e9], atol=1e-5)


class TestFullHamiltonian:
    def test_equals_the_transformed_laboratory_hamiltonian(self) -> None:
        t, rate = 1.234e-9, 3e8
        n = np.arange(4)
        a = np.diag(np.sqrt([1, 2, 3]), 1)
        frame = np.diag(np.exp(2j * np.pi * 6.2e9 * t * n))
        laboratory = np.diag(2 * np.pi * -0.3e9 * n * (n - 1) / 2) + rate * (a + a.T)
        wanted = frame @ laboratory @ frame.conj().T
        # Rounding: 1e-16 of energies of 1e10 rad/s.
        assert np.allclose(full_hamiltonian(QUBIT, rate, t), wanted, atol=1e-4)

    def test_carries_the_shape_of_its_arguments(self) -> None:
        assert full_hamiltonian(QUBIT, np.zeros((3, 2)), np.zeros(2)).shape == (3, 2, 4, 4)

    def test_refuses_a_complex_rate_and_shapes_that_do_not_fit(self) -> None:
        with pytest.raises(InputError, match="real"):
            full_hamiltonian(QUBIT, 1j, 0.0)
        with pytest.raises(InputError, match=r"\(3,\) and \(2,\)"):
            full_hamiltonian(QUBIT, np.zeros(3), np.zeros(2))


class TestRotatingWaveHamiltonian:
    def test_is_the_average_of_the_full_one_over_a_period(self) -> None:
        rate = 2e8 * np.exp(0.7j)
        t = np.arange(64) / 64 / 6.2e9
        real = (rate * np.exp(2j * np.pi * 6.2e9 * t)).real
        average = full_hamiltonian(QUBIT, real, t).mean(axis=0)
        # The counter-rotating part averages out exactly on an even grid; rounding remains.
        assert np.allclose(rotating_wave_hamiltonian(QUBIT, rate), average, atol=1e-4)

    def test_two_level_form_of_in_phase_and_quadrature(self) -> None:
        hamiltonian = rotating_wave_hamiltonian(Qubit(6.2e9), 3.0 + 4.0j)
        sigma_x = np.array([[0, 1], [1, 0]])
        sigma_y = np.array([[0, -1j], [1j, 0]])
        # (I sigma_x - Q sigma_y)/2, exact numbers.
        assert np.allclose(hamiltonian, 1.5 * sigma_x - 2.0 * sigma_y, atol=1e-15)
