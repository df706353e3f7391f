"""Oracles: scipy's optimisers on the same assignment error in closed form."""

import math
from collections.abc import Sequence

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.special import erfc

from cosim.calibration.judgement import judge_readout
from cosim.calibration.points import Point
from cosim.calibration.surrogate_search import fitted, search_by_surrogate
from cosim.errors import InputError
from tests.calibration.pulses import knob, table


def readout(gain: float, phase: float = 0.0, bias: float = 1.0) -> float:
    """A chain that saturates, behind a mixer of some phase, with a decay of the state."""
    signal = math.tanh(gain) * math.cos(phase - 0.4)
    noise = 0.1 * math.sqrt(1.0 + (0.5 * gain) ** 2) * (1.0 + 0.3 * math.log(bias) ** 2)
    return float(0.5 * erfc(signal / noise / (2 * math.sqrt(2))) + 1e-4)


class Runner:
    def __init__(self, knobs: Sequence, cost=readout) -> None:
        self.knobs, self.cost = knobs, cost
        self.history: list[Point] = []

    def values(self, place: Sequence[float]) -> list[float]:
        return [item.at(part) for item, part in zip(self.knobs, place, strict=True)]

    def run(self, places: Sequence[tuple[float, ...]], purpose: str) -> list[Point]:
        points = [
            Point(place, purpose, self.cost(*self.values(place)), np.zeros(0)) for place in places
        ]
        self.history += points
        return points

    def finish(self, point: Point) -> Point:
        return point


def test_one_knob_ends_at_scipys_optimum_within_ten_runs() -> None:
    runner = Runner([knob(0.2, 4.0, 0.6)])
    found = search_by_surrogate(runner, table(12), runner.knobs, 1)
    wanted = minimize(lambda x: readout(float(x[0])), [1.0], method="Nelder-Mead").fun
    assert found.complete
    assert len(runner.history) <= 10
    # The search ends where a run promises less than a thousandth.
    assert found.best.value == pytest.approx(wanted, rel=3e-3)


def test_two_knobs_end_at_scipys_optimum_within_seventeen_runs() -> None:
    runner = Runner([knob(0.2, 4.0, 0.9), knob(-1.0, 1.0, -0.1)])
    found = search_by_surrogate(runner, table(18), runner.knobs, 1)
    wanted = minimize(lambda x: readout(*x), [1.0, 0.0], method="Nelder-Mead").fun
    assert found.complete
    assert len(runner.history) <= 17
    assert found.best.value == pytest.approx(wanted, rel=3e-3)


def test_codes_are_whole_numbers_and_the_best_of_all() -> None:
    runner = Runner([knob(0, 15, 3, 1.0, whole=True)], lambda code: readout(0.2 + 0.25 * code))
    found = search_by_surrogate(runner, table(12), runner.knobs, 1)
    scan = [runner.cost(code) for code in range(16)]
    assert found.best.value == min(scan)
    assert all(
        point.place[0] * 15 == pytest.approx(round(point.place[0] * 15)) for point in runner.history
    )


def test_a_bound_is_reached_and_its_slope_looked_at() -> None:
    runner = Runner([knob(0.2, 0.8, 0.4)])
    found = search_by_surrogate(runner, table(12), runner.knobs, 1)
    judged = judge_readout(found.surrogate)
    assert runner.values(found.best.place) == [0.8]
    assert judged.limits.bounds > 0.01 * found.best.value
    slope = (readout(0.8) - readout(0.79)) / 0.01
    # A quadratic through runs a twentieth of the range apart.
    assert judged.gradient[0] / 0.6 == pytest.approx(slope, rel=0.15)


def test_a_bound_at_which_the_error_is_flat_does_not_exclude_the_optimum() -> None:
    # As a converter's range that is small enough.
    runner = Runner([knob(0.0, 1.0, 0.6)], lambda x: 1e-3 + 0.1 * max(0.0, x - 0.2) ** 2)
    found = search_by_surrogate(runner, table(14), runner.knobs, 1)
    assert found.best.value == pytest.approx(1e-3, rel=3e-3)
    assert judge_readout(found.surrogate).limits.bounds < 0.02 * found.best.value


def test_a_knob_that_does_nothing_is_named() -> None:
    runner = Runner([knob(0.2, 4.0, 0.6), knob(0, 1, 0.5, name="idle")], lambda g, _: readout(g))
    with pytest.raises(InputError, match=r"'qubit\.idle' does nothing"):
        search_by_surrogate(runner, table(14), runner.knobs, 1)


def test_too_few_runs_are_refused() -> None:
    runner = Runner([knob(0.2, 4.0, 0.6), knob(-1.0, 1.0, -0.1)])
    with pytest.raises(InputError, match="at least 7 runs, got 6"):
        search_by_surrogate(runner, table(6), runner.knobs, 1)


def test_a_quadratic_is_fitted_exactly() -> None:
    def value(x: float, y: float) -> float:
        return math.exp(-3 + 2 * (x - 0.3) ** 2 + 0.5 * (y - 0.6) ** 2 + (x - 0.3) * (y - 0.6))

    rng = np.random.default_rng(2)
    points = [
        Point(tuple(place), "step", value(*place), np.zeros(0))
        for place in rng.uniform(size=(9, 2))
    ]
    made = fitted(points, 0.3)
    assert made.hessian == pytest.approx(np.array([[4.0, 1.0], [1.0, 1.0]]), rel=1e-8)
    lowest = made.lowest(np.zeros(2), np.ones(2), [np.full(2, 0.5)])
    assert lowest == pytest.approx([0.3, 0.6], abs=1e-5)
