"""Oracle: first-order theory of DRAG and of leakage; published definitions of leakage and seepage.

All trials of a test, weights or pulse lengths, are the rows of one batch. H and the signs as in
card B13: E_x + i E_y drives upwards, so that the rate of a batch is E_x - i E_y.
"""

import math

import numpy as np
import pytest

from cosim.quantum.batch import BatchDrive, evolve_batch, propagate_batch
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, leakage, seepage
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.published.test_quantum_cards import DRAG_CARDS, Drag, X
from tests.validation import Validate

TOPIC = "DRAG"
ALPHA = 2 * math.pi * -300e6
TRANSMON = Qubit(5e9, 3, -300e6)
# From edge to edge in standard deviations: the edges are 1.5e-8 of the peak.
WIDTH = 12.0
SAMPLES = 4001


def gaussians(angle: float, sigma: float, weights: FloatArray) -> BatchDrive:
    """Gaussians of one area with E_y = -weight E_x'/alpha, a row for each weight."""
    x = np.linspace(-WIDTH / 2, WIDTH / 2, SAMPLES)
    e = angle / (sigma * math.sqrt(2 * math.pi)) * np.exp(-(x**2) / 2)
    y = -weights[:, None] * (-x / sigma * e) / ALPHA
    return BatchDrive(WIDTH * sigma / (SAMPLES - 1), e - 1j * y, order=4)


def leaked(drive: BatchDrive) -> FloatArray:
    """The leakage L1 of each row."""
    return np.array([leakage(channel) for channel in evolve_batch(TRANSMON, drive).channels])


class TestWeights:
    # So small an angle that the second order, angle**2/4 beside one, is 1e-4.
    ANGLE = 0.02

    @pytest.mark.parametrize("width", [2.0, 2.5, 3.0])
    def test_leakage_falls_with_the_width(self, validate: Validate, width: float) -> None:
        # First order: |1> goes to |2> with the amplitude sqrt(2)/2 times the pulse's spectrum at
        # alpha, angle exp(-(alpha sigma)**2/2); L1 is half of its square.
        (found,) = leaked(gaussians(self.ANGLE, width / -ALPHA, np.zeros(1)))
        wanted = self.ANGLE**2 / 4 * math.exp(-(width**2))
        quantity = f"L1 of a Gaussian of 0.02 rad without DRAG, |alpha| sigma = {width}"
        source = sources.MOTZOI + ", angle^2/4 exp(-(alpha sigma)^2)"
        # The second order, times the number of ways there.
        validate(quantity, source, wanted, float(found), rel=1e-3, card="B13", digits=12)

    def test_leakage_falls_with_the_weight(self, validate: Validate) -> None:
        # The quadrature takes the part `weight` of the first order away.
        weights = np.array([-1.0, 0.0, 0.5, 0.9, 1.1, 2.0])
        found = leaked(gaussians(self.ANGLE, 2.0 / -ALPHA, weights))
        ratios = found / found[1]
        # The second order, 1e-4 in amplitude, beside a tenth at the least.
        assert ratios == pytest.approx((1 - weights) ** 2, rel=2e-3)
        # The parabola's lowest point is the coefficient of the first order.
        best = float(np.polynomial.Polynomial.fit(weights, found, 2).deriv().roots()[0].real)
        quantity = "weight of DRAG's quadrature, in units of -E_x'/alpha, with the least leakage"
        source = sources.MOTZOI + ", E_y = -E_x'/alpha"
        validate(quantity, source, 1.0, best, abs=1e-3, card="B13", digits=12)

    def test_phase_error_falls_with_the_weight(self, validate: Validate) -> None:
        # A pi pulse long enough not to leak: what is left is the phase that |2> pushes on |1>.
        weights = np.linspace(0.0, 1.0, 11)
        unitaries = propagate_batch(TRANSMON, gaussians(math.pi, 8e-9, weights)).unitaries
        errors = [1 - average_gate_fidelity(unitary_superoperator(u), X) for u in unitaries]
        best = float(np.polynomial.Polynomial.fit(weights, errors, 4).deriv().roots().real[1])
        assert min(errors) < 0.01 * errors[0]
        quantity = "weight of DRAG's quadrature, in units of -E_x'/alpha, with the least error"
        source = sources.KRANTZ + ", eq. (101) and text"
        # Next order: (peak/alpha)**2 = 0.7 % of it, with a factor of a few.
        validate(quantity, source, 0.5, best, abs=0.01, card="B13", digits=12)


def test_the_controls_of_the_paper_in_one_batch(validate: Validate) -> None:
    t = np.linspace(0.0, Drag.duration, 3001)
    rates = np.array([Drag(kind, t).rate for kind in DRAG_CARDS])
    found = evolve_batch(Qubit(5e9, 5, -300e6), BatchDrive(t[1], rates, order=4))
    for (kind, wanted), channel in zip(DRAG_CARDS.items(), found.channels, strict=True):
        got = leakage(channel), 1 - average_gate_fidelity(channel, X)
        for name, expected, value in zip(("L1", "1 - F_avg"), wanted, got, strict=True):
            quantity = f"{name} of X180 of 12 ns, {kind} DRAG, by the batch"
            source = sources.MOTZOI + "; numbers from two other solvers"
            # The 2 % granted by the card.
            validate(quantity, source, expected, value, rel=0.02, card="B14", digits=4)


class TestSeepage:
    def channels(self, qubit: Qubit) -> ComplexArray:
        return evolve_batch(qubit, gaussians(math.pi, 2e-9, np.array([0.0, 1.0]))).channels

    def test_seepage_balances_leakage(self, validate: Validate) -> None:
        # Unital: what the two states below lose is what the one above them loses.
        plain, drag = self.channels(TRANSMON)
        for name, channel in (("without", plain), ("with", drag)):
            quantity = f"L2/L1 of a pi pulse of three levels {name} DRAG"
            source = sources.WOOD + ", d_1 L1 = d_2 L2 of unital channels"
            lost, back = leakage(channel), seepage(channel)
            # Rounding of some thousand products, beside the leakage.
            validate(quantity, source, 2.0, back / lost, abs=1e-12 / lost, digits=6)
        assert leakage(plain) > 20 * leakage(drag)

    def test_relaxation_seeps_and_does_not_leak(self, validate: Validate) -> None:
        # |2> decays at twice the rate of |1>; nothing rises.
        t1, time = 20e-6, 100e-9
        idle = BatchDrive(time / 10, np.zeros(10, dtype=complex))
        (channel,) = evolve_batch(Qubit(5e9, 3, -300e6, t1), idle).channels
        quantity = "L2 of an idle of 100 ns, T1 20 us, three levels"
        source = sources.WOOD + ", amplitude damping, 1 - exp(-2 t/T1)"
        wanted = -math.expm1(-2 * time / t1)
        validate(quantity, source, wanted, seepage(channel), rel=1e-9, digits=12)
        assert abs(leakage(channel)) < 1e-13  # Rounding.
