"""Oracle: closed forms: Bloch relaxation, driven and damped oscillator, order of the method."""

import math

import numpy as np
import pytest

from cosim.quantum.channel import apply_channel, pauli_transfer_matrix
from cosim.quantum.evolution import evolve, propagate_unitary, run_plan
from cosim.quantum.qubit import Qubit
from cosim.quantum.steps import DriveSpline, StepPlan, plan_steps
from cosim.waveform import ComplexArray
from tests import sources
from tests.quantum.drives import CARRIER, constant, smooth_burst
from tests.validation import Validate

TOPIC = "dynamics without rotating wave"


class TestRelaxation:
    def test_bloch_equations_without_a_drive(self, validate: Validate) -> None:
        t1, t2, p, time = 2e-6, 1.5e-6, 0.2, 0.4e-6
        qubit = Qubit(CARRIER, t1=t1, t2=t2, thermal_population=p)
        found = pauli_transfer_matrix(evolve(qubit, constant(0.0, 0.0, time), 0.0, time))
        along, across = math.exp(-time / t1), math.exp(-time / t2)
        # F. Bloch, Phys. Rev. 70, 460 (1946): the vector relaxes to 1 - 2 p along z.
        wanted = np.diag([1, across, across, along])
        wanted[3, 0] = (1 - 2 * p) * (1 - along)
        # Rounding of some 1e4 products.
        assert np.abs(found - wanted).max() < 1e-11
        for name, (row, column) in (("along", (3, 3)), ("across", (1, 1)), ("towards", (3, 0))):
            quantity = f"relaxation {name} the thermal state's axis after 0.4 us"
            entry = wanted[row, column]
            validate(quantity, sources.BLOCH, entry, found[row, column], abs=1e-11)

    def test_second_level_decays_twice_as_fast(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, t1=1e-6, t2=2e-6)
        time = 0.3e-6
        channel = evolve(qubit, constant(0.0, 0.0, time), 0.0, time)
        populations = apply_channel(channel, np.diag([0, 0, 1]).astype(complex)).diagonal().real
        x = math.exp(-time / 1e-6)
        # Each of the two quanta survives with probability x, independently: binomial law of a
        # damped oscillator (textbook). Rounding.
        assert populations == pytest.approx([(1 - x) ** 2, 2 * x * (1 - x), x**2], abs=1e-11)

    def test_frame_without_a_drive(self) -> None:
        qubit = Qubit(CARRIER, 4, -0.3e9)
        u = propagate_unitary(qubit, constant(0.0, 1e-9, 6e-9), 1e-9, 6e-9)
        phases = np.exp(-2j * np.pi * -0.3e9 * np.array([0, 0, 1, 3]) * 5e-9)
        assert np.abs(u - np.diag(phases)).max() < 1e-11  # Rounding.


class TestDrivenOscillator:
    """A harmonic oscillator under any force stays in a coherent state, damped or not.

    R. J. Glauber, "Coherent and incoherent states of the radiation field", Phys. Rev. 131, 2766
    (1963); with damping the amplitude obeys beta' = -beta/(2 t1) - i rate exp(i omega t).
    No rotating-wave approximation is involved.
    """

    @pytest.mark.parametrize("t1", [math.inf, pytest.param(0.2e-6, marks=pytest.mark.full)])
    def test_vacuum_becomes_a_coherent_state(self, validate: Validate, t1: float) -> None:
        levels = 8
        qubit = Qubit(CARRIER, levels, 0.0, t1=t1, t2=2 * t1)
        drive = smooth_burst(20e6, 10e-9)
        channel = evolve(qubit, drive, 0.0, 10e-9)
        vacuum = np.zeros((levels, levels), dtype=complex)
        vacuum[0, 0] = 1
        beta = self._amplitude(drive, 10e-9, 1 / (2 * t1))
        n = np.arange(levels)
        norms = np.sqrt([math.factorial(int(k)) for k in n])
        state = np.exp(-(abs(beta) ** 2) / 2) * beta**n / norms
        found = apply_channel(channel, vacuum)
        # |beta| = 0.3 leaves an amplitude |beta|**8/sqrt(8!) = 3e-7 above the levels kept; on the
        # three lowest levels it acts back with further powers of |beta| only.
        assert abs(beta) > 0.25
        assert np.abs(found - np.outer(state, state.conj()))[:3, :3].max() < 1e-10
        loss = "without loss" if t1 == math.inf else f"T1 {t1 * 1e6:g} us"
        quantity = f"population of |1> of a driven oscillator, {loss}"
        wanted = float(abs(state[1]) ** 2)
        validate(quantity, sources.GLAUBER, wanted, found[1, 1].real, abs=1e-10)

    @staticmethod
    def _amplitude(drive: DriveSpline, stop: float, decay: float) -> complex:
        """Integrate -i rate exp(i omega t) exp(-decay (stop - t)) by Gauss's rule on each piece."""
        nodes, weights = np.polynomial.legendre.leggauss(8)
        h = np.diff(drive.t)[:, None]
        x = h * (nodes + 1) / 2
        c0, c1, c2, c3 = (row[:, None] for row in drive.c)
        rate = ((c0 * x + c1) * x + c2) * x + c3
        t = drive.t[:-1, None] + x
        value = rate * np.exp(2j * np.pi * CARRIER * t - decay * (stop - t))
        return complex(-1j * np.sum(value * weights * h / 2))


class TestOrder:
    @pytest.mark.parametrize("levels", [2, 3, 5])
    def test_unitary_steps_are_of_sixth_order(self, validate: Validate, levels: int) -> None:
        qubit = Qubit(1e9, levels, -0.1e9)
        # One cubic piece over one and a half carrier periods, a turn of about 2 rad.
        drive = DriveSpline(np.array([0.0, 1.5e-9]), np.array([[8e36], [-12e27], [4e18], [2e9]]))

        def unitary(steps: int) -> ComplexArray:
            length = np.full(steps, 1.5e-9 / steps)
            begin = np.arange(steps) * length
            piece = np.zeros(steps, dtype=np.int64)
            return run_plan(qubit, drive, StepPlan(begin, length, piece, np.zeros(steps + 1)))

        exact = unitary(512)
        errors = [np.abs(unitary(steps) - exact).max() for steps in (16, 32, 64)]
        orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
        # The method is symmetric, so the next terms are of eighth order: a quarter at these steps.
        assert errors[-1] > 1e-12  # Well above rounding.
        for count, got in zip((16, 32), orders, strict=True):
            quantity = f"order of the kernel's steps, {levels} levels, {count} to {2 * count} steps"
            validate(quantity, sources.BLANES, 6.0, float(got), abs=0.3, digits=12)

    def test_step_estimate_falls_with_the_steps(self) -> None:
        qubit = Qubit(CARRIER, 3, -0.3e9, 10e-6, 10e-6)
        drive = smooth_burst(60e6, 10e-9, per_period=10)

        def channel(refine: int) -> ComplexArray:
            plan = plan_steps(qubit, drive, 0.0, 10e-9, phase_step=1.0, refine=refine)
            return run_plan(qubit, drive, plan)

        exact = channel(8)
        errors = [np.abs(channel(refine) - exact).max() for refine in (1, 2)]
        # Drive and loss together: at least the fourth order that both parts promise.
        assert errors[0] / errors[1] > 2**4
