"""Oracles: Gauss-Hermite quadrature of exact propagators over all processes, and brentq."""

import math
from collections.abc import Callable, Sequence

import numpy as np
import pytest
from scipy.optimize import brentq

from cosim.drift.interval import duty_lost, longest_interval
from cosim.drift.outlook import Outlook
from cosim.drift.response import Response, cost_of
from cosim.drift.structure import Motion, RandomWalk
from cosim.drift.table import Process
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.quantum.quasistatic import gaussian_average
from cosim.sensitivity.response import Outcome
from tests.calibration.pulses import X90, square

Pulse = Callable[[float], np.ndarray]


def outcome(unitary: np.ndarray) -> Outcome:
    channel = unitary_superoperator(unitary)
    return Outcome(1.0 - average_gate_fidelity(channel, X90), error_vector(channel, X90))


def response(pulse: Pulse, reach: float, count: int) -> Response:
    nodes = -np.cos(math.pi * np.arange(count) / (count - 1))
    centre = outcome(pulse(0.0))
    rows = []
    for x in nodes * reach:
        found = outcome(pulse(x))
        rows.append([*(found.vector - centre.vector), found.rest - centre.rest])
    return Response(reach, np.polynomial.chebyshev.chebfit(nodes, np.array(rows), count - 1))


def outlook(pulses: Sequence[Pulse], motions: Sequence[Motion], count: int = 9) -> Outlook:
    t = 1.0
    processes = [Process(f"p{at}", "1", motion, ()) for at, motion in enumerate(motions)]
    responses = [
        response(pulse, abs(motion.mean(t)) + 5.0 * motion.deviation(t), count)
        for pulse, motion in zip(pulses, motions, strict=True)
    ]
    return Outlook(outcome(pulses[0](0.0)), processes, responses)


def cost(amplitude: float, detuning: float) -> float:
    return outcome(square(amplitude, 0.0, detuning)).value


def test_two_processes_have_the_mean_of_exact_propagators() -> None:
    # An amplitude that is 1 % high, wanders by 1.5 % and goes up by another one; and a detuning.
    made = outlook(
        [lambda x: square(1.01 + x, 0.0, 0.02), lambda x: square(1.01, 0.0, 0.02 + x)],
        [Motion(0.01, 0.0, (RandomWalk(0.015),)), Motion(0.0, 0.03, (RandomWalk(0.04),))],
    )

    def exact(points: np.ndarray) -> np.ndarray:
        return np.array([cost(1.02 + a, 0.02 + d) for a, d in points])

    wanted = float(gaussian_average(exact, [0.015, 0.05], tolerance=1e-9).value)
    # Turns that do not commute: of the order of the angles, some 3 %, times themselves.
    assert made.mean(1.0) == pytest.approx(wanted, rel=3e-3)
    # At the start there is the trim's error alone.
    wanted = float(
        gaussian_average(
            lambda points: np.array([cost(1.01, 0.02 + d) for (d,) in points]), [0.03]
        ).value
    )
    assert made.mean(0.0) == pytest.approx(wanted, rel=1e-6)
    moves = np.array([[0.02, -0.06], [0.0, 0.0]])
    assert made.at(moves)[0] == pytest.approx(cost(1.03, -0.04), rel=0.02)
    assert made.at(moves)[1] == pytest.approx(cost(1.01, 0.02), rel=1e-9)


def test_a_large_drift_is_not_the_square_of_its_vector() -> None:
    # Angles of half a turn's standard deviation: (1/3)(1 - exp(-s^2/2)) of a Gaussian angle s.
    spread = 1.5
    made = outlook(
        [lambda x: square(1.0 + x / (0.5 * math.pi))],
        [Motion(fluctuations=(RandomWalk(spread),))],
        65,
    )
    wanted = (1.0 - math.exp(-(spread**2) / 2)) / 3
    # Sobol points; and beyond half a turn the vector jumps, which a polynomial does not follow.
    assert made.mean(1.0) == pytest.approx(wanted, rel=0.05)
    assert made.mean(1.0) < 0.8 * spread**2 / 6


def test_costs_of_vectors_are_those_of_the_channels() -> None:
    for angle in (0.01, 0.5, 1.5, 2.8):
        made = outcome(square(1.0 + angle / (0.5 * math.pi)))
        assert cost_of(made.vector[None])[0] == pytest.approx(
            (2 / 3) * math.sin(angle / 2) ** 2, rel=1e-9
        )


def test_quantiles_of_one_normal_number() -> None:
    made = outlook([lambda x: square(1.0 + x)], [Motion(fluctuations=(RandomWalk(0.01),))])
    theta = 0.5 * math.pi
    # Of x^2 with a normal x: chi-square of one degree, at 5, 50 and 95 %.
    wanted = np.array([0.00393214, 0.454936, 3.841459]) * (theta * 0.01) ** 2 / 6
    # 4096 Sobol points, of which the 205 least tell the first quantile.
    np.testing.assert_allclose(made.quantiles(1.0), wanted, rtol=0.02)


def test_what_each_adds_alone_and_the_average_over_time() -> None:
    made = outlook(
        [lambda x: square(1.0 + x), lambda x: square(1.0, x)],
        [Motion(fluctuations=(RandomWalk(0.01),)), Motion(rate=0.02)],
    )
    theta = 0.5 * math.pi
    alone = made.alone(1.0)
    # theta^2 e^2/6 of an amplitude, phi^2/3 of a phase; the next order is 1e-4 of it.
    np.testing.assert_allclose(alone, [(theta * 0.01) ** 2 / 6, 0.02**2 / 3], rtol=1e-3)
    # One grows as t, the other as t^2.
    assert made.average(1.0) == pytest.approx(alone[0] / 2 + alone[1] / 3, rel=1e-3)
    assert made.mean(1.0) == pytest.approx(alone.sum(), rel=1e-3)


def test_the_longest_interval_is_brentqs() -> None:
    def cost_at(t: float) -> float:
        return 1e-4 + 1e-6 * t + 1e-9 * t**2

    wanted = brentq(lambda t: cost_at(t) - 5e-4, 1.0, 1e5)
    assert longest_interval(cost_at, 5e-4, 1.0, 1e5) == pytest.approx(wanted, rel=1e-5)
    assert longest_interval(cost_at, 1e3, 1.0, 1e5) == math.inf
    # Before the first time that is shown, too.
    wanted = brentq(lambda t: cost_at(t) - 1.01e-4, 1e-3, 1e2)
    assert longest_interval(cost_at, 1.01e-4, 10.0, 1e5) == pytest.approx(wanted, rel=1e-5)
    assert longest_interval(lambda t: 1.0, 0.5, 1.0, 2.0) == 0.0
    # The first time counts, although it comes back below.
    assert longest_interval(lambda t: 1 - (t - 3) ** 2, 0.5, 1.0, 9.0) == pytest.approx(
        3 - math.sqrt(0.5), rel=1e-5
    )


def test_the_duty_of_trims() -> None:
    assert duty_lost(1.0, 9.0) == 0.1
    assert duty_lost(1.0, math.inf) == 0.0
    assert math.isnan(duty_lost(math.nan, 9.0))
