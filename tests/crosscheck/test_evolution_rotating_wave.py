"""Oracle: the kernel and QuTiP's rotating-wave solver on one weak pulse, in one frame."""

import numpy as np
import pytest

from cosim.quantum.channel import pauli_transfer_matrix
from cosim.quantum.evolution import evolve
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_rotating_wave
from tests.quantum.drives import spline


@pytest.mark.parametrize("offset", [-3e6, 0.0, 3e6])
def test_both_paths_share_one_frame(offset: float) -> None:
    carrier, start, stop, phase = 6.2e9, 5.3e-9, 65.3e-9, 0.4
    qubit = Qubit(carrier - offset, 3, -0.3e9, 30e-6, 20e-6)

    t = np.linspace(start, stop, 30001)
    envelope = 2 * np.pi * 8e6 * np.sin(np.pi * (t - start) / (stop - start)) ** 2
    drive = spline(t, envelope * np.cos(2 * np.pi * carrier * t + phase))
    full = evolve(qubit, drive, start, stop)

    coarse = slice(None, None, 60)
    rate = envelope[coarse] * np.exp(1j * (phase + 2 * np.pi * offset * t[coarse]))
    twin = evolve_rotating_wave(qubit, rate, t[coarse])

    difference = pauli_transfer_matrix(full) - pauli_transfer_matrix(twin)
    # What is left is the Bloch-Siegert shift: the integral of Omega**2/(4 omega) is 4e-4 rad. A
    # lost phase of the start, or a sign of the offset, would be of order 1.
    assert np.abs(difference).max() < 1e-3
    assert np.abs(pauli_transfer_matrix(full) - np.eye(4)).max() > 0.5
