"""Oracle: constant Hamiltonians solved by scipy's matrix exponential, and the area theorem."""

import numpy as np
import pytest
from scipy.linalg import expm

from cosim.errors import InputError, WaveformError
from cosim.quantum.channel import pauli_transfer_matrix, unitary_superoperator
from cosim.quantum.evolution import evolve
from cosim.quantum.hamiltonian import rotating_wave_hamiltonian
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_reference, evolve_rotating_wave
from tests import sources
from tests.quantum.drives import CARRIER, smooth_burst
from tests.validation import Validate

TOPIC = "dynamics in the rotating-wave approximation"
T = np.linspace(2e-9, 30e-9, 113)
RATE = np.full(T.size, 2 * np.pi * 20e6 * np.exp(0.7j), dtype=np.complex128)


class TestEvolveRotatingWave:
    def test_lossless_constant_drive(self) -> None:
        qubit = Qubit(CARRIER, 4, -0.3e9)
        u = expm(-1j * rotating_wave_hamiltonian(qubit, RATE[0]) * (T[-1] - T[0]))
        # Solver tolerance 1e-9 per step, some hundred steps in the upper levels.
        assert np.abs(evolve_rotating_wave(qubit, RATE, T) - unitary_superoperator(u)).max() < 1e-7

    def test_lossy_constant_drive(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, 10e-6, 8e-6, 0.1)
        h = rotating_wave_hamiltonian(qubit, RATE[0])
        one = np.eye(3)
        liouvillian = -1j * (np.kron(one, h) - np.kron(h.T, one))
        for c in qubit.collapse_operators():
            n = c.conj().T @ c
            liouvillian += np.kron(c.conj(), c) - (np.kron(one, n) + np.kron(n.T, one)) / 2
        wanted = expm(liouvillian * (T[-1] - T[0]))
        assert np.abs(evolve_rotating_wave(qubit, RATE, T) - wanted).max() < 1e-7

    def test_does_not_step_over_a_pulse_after_a_long_wait(self, validate: Validate) -> None:
        t = np.linspace(0.0, 4e-6, 16001)
        rate = (2 * np.pi * 50e6 * np.exp(-(((t - 3.8e-6) / 3e-9) ** 2) / 2)).astype(complex)
        channel = evolve_rotating_wave(Qubit(CARRIER), rate, t)
        # Area theorem on resonance: the angle is the area of the envelope. The spline through
        # samples at a twelfth of the pulse's width is good to 1e-6.
        area = 2 * np.pi * 50e6 * 3e-9 * np.sqrt(2 * np.pi)
        quantity = "z of |0> after a Gaussian pulse at the end of 4 us"
        found = float(pauli_transfer_matrix(channel)[3, 3])
        validate(quantity, sources.ALLEN_EBERLY, float(np.cos(area)), found, abs=1e-6)

    def test_no_drive_at_all(self) -> None:
        channel = evolve_rotating_wave(
            Qubit(CARRIER), np.zeros(5, dtype=complex), np.linspace(0, 1e-8, 5)
        )
        assert np.abs(channel - np.eye(4)).max() < 1e-15

    def test_refuses_bad_envelopes_and_tolerances(self) -> None:
        qubit = Qubit(CARRIER)
        with pytest.raises(WaveformError, match="n >= 4"):
            evolve_rotating_wave(qubit, RATE[:3], T[:3])
        with pytest.raises(WaveformError, match="sample 5 of 113"):
            evolve_rotating_wave(qubit, np.where(np.arange(113) == 5, np.nan + 0j, RATE), T)
        with pytest.raises(WaveformError, match="uniform"):
            evolve_rotating_wave(qubit, RATE, T**2)
        with pytest.raises(InputError, match="rtol"):
            evolve_rotating_wave(qubit, RATE, T, rtol=0.1)


class TestEvolveReference:
    def test_keeps_the_frame_of_the_deck_for_a_late_window(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, 10e-6, 10e-6)
        drive = smooth_burst(50e6, 5e-9, start=7e-9)
        start = 8e-9 + 0.3e-12
        found = evolve_reference(qubit, drive, start, 11e-9)
        # Both solvers are good to 1e-9 here; a lost phase of the start would be of order 1.
        assert np.abs(found - evolve(qubit, drive, start, 11e-9)).max() < 1e-8

    def test_refuses_a_window_outside_the_drive(self) -> None:
        with pytest.raises(WaveformError, match="known only"):
            evolve_reference(Qubit(CARRIER), smooth_burst(50e6, 2e-9), 0.0, 3e-9)
