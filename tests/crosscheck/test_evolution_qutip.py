"""Oracle: QuTiP's master-equation solver in the laboratory frame on the same interpolant."""

import numpy as np
import pytest

from cosim.quantum.channel import pauli_transfer_matrix
from cosim.quantum.evolution import DriveSpline, evolve
from cosim.quantum.qubit import Qubit
from cosim.quantum.reference import evolve_reference
from tests.quantum.drives import CARRIER, smooth_burst, square_burst

# QuTiP at rtol 1e-11 over some 1e4 steps is good to about 1e-9, the kernel to 1e-10; the promise
# is 1e-8 for each entry.
TOLERANCE = 1e-8


def largest_difference(qubit: Qubit, drive: DriveSpline) -> float:
    start, stop = float(drive.t[0]), float(drive.t[-1])
    found = pauli_transfer_matrix(evolve(qubit, drive, start, stop))
    wanted = pauli_transfer_matrix(evolve_reference(qubit, drive, start, stop))
    return float(np.abs(found - wanted).max())


class TestAgainstQutip:
    @pytest.mark.full
    def test_two_levels_at_full_length_with_short_times(self) -> None:
        qubit = Qubit(CARRIER, t1=10e-6, t2=10e-6)
        assert largest_difference(qubit, smooth_burst(100e6, 120e-9)) < TOLERANCE

    @pytest.mark.full
    def test_two_levels_at_full_length_with_square_edges(self) -> None:
        qubit = Qubit(CARRIER, t1=10e-6, t2=20e-6, thermal_population=0.1)
        assert largest_difference(qubit, square_burst(100e6, 120e-9, 2e-12)) < TOLERANCE

    @pytest.mark.full
    def test_three_levels_at_full_length(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, 10e-6, 10e-6)
        assert largest_difference(qubit, smooth_burst(10e6, 120e-9)) < TOLERANCE

    @pytest.mark.full
    def test_four_levels_with_square_edges(self) -> None:
        qubit = Qubit(CARRIER, 4, -0.3e9, 10e-6, 10e-6)
        step = 1 / (80 * CARRIER)
        assert largest_difference(qubit, square_burst(100e6, 25e-9, step)) < TOLERANCE

    @pytest.mark.full
    @pytest.mark.parametrize("levels", [4, 6])
    def test_more_levels_without_loss_at_full_length(self, levels: int) -> None:
        qubit = Qubit(CARRIER, levels, -0.3e9)
        assert largest_difference(qubit, smooth_burst(30e6, 120e-9)) < TOLERANCE

    def test_off_resonance_at_a_low_carrier(self) -> None:
        # The drive is 150 MHz away from the qubit, whose frame alone counts.
        qubit = Qubit(1.15e9, 3, -0.2e9, 30e-6, 20e-6)
        drive = smooth_burst(60e6, 60e-9, carrier=1.0e9, start=7.3e-9)
        assert largest_difference(qubit, drive) < TOLERANCE
