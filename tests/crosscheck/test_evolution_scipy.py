"""Oracle: scipy's DOP853 on a master equation written out here, on the same interpolant."""

import cmath
from bisect import bisect_right
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from cosim.quantum.channel import pauli_transfer_matrix
from cosim.quantum.evolution import DriveSpline, evolve
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray
from tests.quantum.drives import CARRIER, smooth_burst, square_burst


def integrate(qubit: Qubit, drive: DriveSpline, start: float, stop: float) -> ComplexArray:
    """Integrate the superoperator; nothing of the package but the numbers of the qubit is used."""
    d = qubit.levels
    n = np.arange(d)
    omega = 2 * np.pi * qubit.frequency
    energies = np.pi * qubit.anharmonicity * n * (n - 1)
    a = np.diag(np.sqrt(np.arange(1.0, d)), 1).astype(complex)
    one = np.eye(d)
    static = -1j * (np.kron(one, np.diag(energies)) - np.kron(np.diag(energies), one))
    p = qubit.thermal_population
    rate_phi = max(0.0, 1 / qubit.t2 - 1 / (2 * qubit.t1))
    for rate, c in (
        ((1 - p) / qubit.t1, a),
        (p / qubit.t1, a.conj().T),
        (2 * rate_phi, np.diag(n).astype(complex)),
    ):
        m = c.conj().T @ c
        static += rate * (np.kron(c.conj(), c) - (np.kron(one, m) + np.kron(m.T, one)) / 2)
    lower = -1j * (np.kron(one, a) - np.kron(a.T, one))
    upper = -1j * (np.kron(one, a.T) - np.kron(a, one))
    # Plain numbers: a call of scipy's PPoly for each of millions of times takes most of the time.
    begins, pieces = drive.t[:-1].tolist(), drive.c.T.tolist()

    def derivative(t: float, y: FloatArray) -> FloatArray:
        piece = max(bisect_right(begins, t) - 1, 0)
        x = t - begins[piece]
        cubic, square, linear, constant = pieces[piece]
        turn = (((cubic * x + square) * x + linear) * x + constant) * cmath.exp(-1j * omega * t)
        generator = static + turn * lower + turn.conjugate() * upper
        return np.asarray((generator @ y.reshape(d * d, d * d)).reshape(-1))

    # The third derivative of the rate jumps at each knot, which costs a step across knots more
    # than its error estimate says (4e-10 in 10 ns): so the steps are the knot intervals, and the
    # integrator starts anew where these change their length.
    inside = drive.t[(drive.t > start) & (drive.t < stop)]
    knots = np.concatenate([[start], inside, [stop]])
    h = np.diff(knots)
    breaks = np.flatnonzero(np.abs(np.diff(h)) > 1e-6 * h[1:]) + 1
    edges = [0, *breaks.tolist(), h.size]
    y = np.eye(d * d, dtype=complex).reshape(-1)
    for first, last in pairwise(edges):
        step = (knots[last] - knots[first]) / (last - first)
        solution = solve_ivp(
            derivative,
            (knots[first], knots[last]),
            y,
            method="DOP853",
            rtol=1e-10,
            atol=1e-12,
            first_step=step * (1 - 1e-12),
            max_step=step,
        )
        assert solution.success
        y = solution.y[:, -1]
    return np.asarray(y.reshape(d * d, d * d))


def largest_difference(qubit: Qubit, drive: DriveSpline, start: float, stop: float) -> float:
    found = pauli_transfer_matrix(evolve(qubit, drive, start, stop))
    wanted = pauli_transfer_matrix(integrate(qubit, drive, start, stop))
    return float(np.abs(found - wanted).max())


# Steps of a knot interval leave DOP853 far below the kernel's own error, which the kernel's step
# estimate puts below 1e-10; the promise is 1e-8 for each entry.
TOLERANCE = 1e-10


class TestAgainstScipy:
    @pytest.mark.parametrize("levels", [2, 3, pytest.param(6, marks=pytest.mark.full)])
    @pytest.mark.parametrize("rabi", [10e6, 100e6])
    def test_smooth_burst(self, levels: int, rabi: float) -> None:
        qubit = Qubit(CARRIER, levels, -0.3e9, 10e-6, 12e-6, 0.1)
        drive = smooth_burst(rabi, 4e-9)
        assert largest_difference(qubit, drive, 0.0, drive.t[-1]) < TOLERANCE

    @pytest.mark.parametrize("levels", [2, pytest.param(4, marks=pytest.mark.full)])
    def test_square_edges_on_the_grid_of_a_circuit_simulator(self, levels: int) -> None:
        qubit = Qubit(CARRIER, levels, -0.3e9, 10e-6, 10e-6)
        drive = square_burst(100e6, 4e-9, 2e-12)
        assert largest_difference(qubit, drive, 0.0, drive.t[-1]) < TOLERANCE

    def test_window_that_starts_and_ends_within_knot_intervals(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, 10e-6, 10e-6)
        drive = smooth_burst(100e6, 4e-9, start=6e-9)
        start, stop = drive.t[300] + 0.7e-12, drive.t[1500] + 1.1e-12
        assert largest_difference(qubit, drive, start, stop) < TOLERANCE

    @pytest.mark.full
    def test_two_levels_for_longer(self) -> None:
        qubit = Qubit(CARRIER, t1=10e-6, t2=10e-6)
        drive = smooth_burst(20e6, 30e-9)
        assert largest_difference(qubit, drive, 0.0, drive.t[-1]) < TOLERANCE
