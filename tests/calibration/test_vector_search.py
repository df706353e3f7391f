"""Oracles: closed forms of the best pulse, scipy's optimisers, and fine scans of the same cost."""

import itertools
import math

import numpy as np
import pytest
from scipy.optimize import minimize

from cosim.calibration.judgement import judge_gate
from cosim.calibration.vector_search import search_by_vector
from cosim.errors import InputError, SimulationError
from tests.calibration.pulses import Analytic, knob, square, table


def test_amplitude_and_phase_are_found_in_six_runs() -> None:
    runner = Analytic([knob(0.5, 2.0, 0.9), knob(-0.6, 0.6, 0.1)], square)
    found = search_by_vector(runner, table(), runner.knobs, 1)
    assert found.complete
    assert len(runner.history) <= 6
    # Both by closed form: a quarter turn about x. A cost of 1e-9 is an angle of 8e-5.
    assert runner.values(found.best.place) == pytest.approx([1.0, 0.0], abs=1e-4)
    assert found.best.value < 1e-9


def test_a_detuning_that_no_knob_reaches_is_shared_as_by_scipy() -> None:
    knobs = [knob(0.5, 2.0, 0.9), knob(-0.6, 0.6, 0.1)]
    runner = Analytic(knobs, lambda a, phi: square(a, phi, 0.2))
    found = search_by_vector(runner, table(), knobs, 1)
    wanted = minimize(
        lambda x: runner.cost(*x), [1.0, 0.0], method="Nelder-Mead", options={"fatol": 1e-14}
    )
    assert len(runner.history) <= 8
    assert wanted.fun > 1e-3
    # What a further run must promise: 1e-9 and 1e-5 of the cost.
    assert found.best.value <= wanted.fun + 2.0 * (1e-9 + 1e-5 * wanted.fun)
    limits = judge_gate(found.model).limits
    assert limits.unreached == pytest.approx(wanted.fun, rel=1e-3)


@pytest.mark.parametrize("start", [0.1, 0.35, 1.8])
def test_a_start_far_away_is_brought_home(start: float) -> None:
    runner = Analytic([knob(0.05, 2.0, start)], square)
    found = search_by_vector(runner, table(), runner.knobs, 1)
    assert found.complete
    assert found.best.value < 1e-9
    assert len(runner.history) <= 8


def test_codes_are_the_best_of_all_codes() -> None:
    # 6 bits of amplitude and 5 of phase, neither of which hits the target.
    knobs = [
        knob(0, 63, 30, 1.0, name="code", whole=True),
        knob(0, 31, 20, 1.0, name="phase", whole=True),
    ]

    def unitary(code: float, phase: float) -> np.ndarray:
        return square(code / 41.4, 0.05 * (phase - 13.3), 0.05)

    runner = Analytic(knobs, unitary)
    found = search_by_vector(runner, table(), knobs, 1)
    scan = {pair: runner.cost(*pair) for pair in itertools.product(range(64), range(32))}
    best = min(scan, key=lambda pair: scan[pair])
    assert runner.values(found.best.place) == list(best)
    assert len(runner.history) <= 11  # 12 with that at half the step
    tried = {tuple(runner.values(point.place)) for point in runner.history}
    for other in ((best[0] - 1, best[1]), (best[0] + 1, best[1])):
        assert other in tried
    assert judge_gate(found.model).limits.resolution == pytest.approx(
        scan[best] - judge_gate(found.model).limits.unreached, rel=1e-6
    )


def test_a_code_beside_a_free_knob_is_the_best_of_all() -> None:
    knobs = [knob(0, 63, 20, 1.0, name="code", whole=True), knob(-0.5, 0.5, 0.3)]

    def unitary(code: float, phase: float) -> np.ndarray:
        return square(code / 25.5, phase + 0.004 * code)

    runner = Analytic(knobs, unitary)
    found = search_by_vector(runner, table(), knobs, 1)
    scan = [
        minimize(lambda x, c=code: runner.cost(c, float(x[0])), [0.0], method="Nelder-Mead").fun
        for code in range(22, 30)
    ]
    # 25 and 26 are as far off: either is right.
    assert runner.values(found.best.place)[0] in (25.0, 26.0)
    # What a further run must promise.
    assert found.best.value <= min(scan) + 1e-9 + 1e-4 * min(scan)
    assert len(runner.history) <= 11


def test_bounds_that_exclude_the_optimum_are_told_with_the_slope_there() -> None:
    knobs = [knob(0.5, 0.95, 0.8), knob(-0.6, 0.6, 0.1)]
    runner = Analytic(knobs, square)
    found = search_by_vector(runner, table(), knobs, 1)
    judged = judge_gate(found.model)
    assert runner.values(found.best.place)[0] == 0.95
    # (2/3) sin^2(pi/4 x 0.05), and its slope by differences of the closed form.
    assert found.best.value == pytest.approx(2 / 3 * math.sin(math.pi / 4 * 0.05) ** 2, rel=1e-4)
    slope = (runner.cost(0.951, 0.0) - runner.cost(0.949, 0.0)) / 0.002
    # The Jacobian is mostly that of the start, where the sine of the error angle has bent by 1.2 %,
    # and the slope of the square has it twice.
    assert judged.gradient[0] / knobs[0].range == pytest.approx(slope, rel=0.03)
    assert judged.limits.bounds == pytest.approx(found.best.value, rel=0.01)
    assert judged.optimum[0] * knobs[0].range + 0.5 == pytest.approx(1.0, abs=2e-3)


def test_a_knob_that_does_nothing_is_named() -> None:
    knobs = [knob(0.5, 2.0, 0.9), knob(0, 1, 0.5, name="idle")]
    runner = Analytic(knobs, lambda a, _: square(a))
    with pytest.raises(InputError, match=r"'qubit\.idle' does nothing"):
        search_by_vector(runner, table(), knobs, 1)


def test_a_weak_knob_is_tried_with_a_wider_step_before_it_is_judged() -> None:
    knobs = [knob(-1.0, 1.0, 0.1)]
    runner = Analytic(knobs, lambda phase: square(1.0, 1e-3 * phase + 4e-4))
    found = search_by_vector(runner, table(), knobs, 1)
    assert len([point for point in runner.history if point.purpose == "difference"]) == 2
    assert found.best.value < 2e-9


def test_knobs_that_do_the_same_are_told() -> None:
    knobs = [knob(0.5, 1.5, 0.9), knob(0.5, 1.5, 1.0, name="duration"), knob(-0.6, 0.6, 0.1)]
    runner = Analytic(knobs, lambda a, t, phase: square(a * t, phase))
    found = search_by_vector(runner, table(), knobs, 1)
    assert judge_gate(found.model).alike == (0, 1)
    assert found.best.value < 1e-9


def test_a_run_that_fails_on_the_way_is_a_step_too_far() -> None:
    # The first step from a bent start overshoots to where the circuit does not converge.
    knobs = [knob(0.05, 3.0, 0.3)]
    runner = Analytic(knobs, lambda a: square((a / 1.2) ** 2), fails=1.5)
    found = search_by_vector(runner, table(), knobs, 1)
    assert any(point.fault for point in runner.history)
    assert runner.values(found.best.place) == pytest.approx([1.2], rel=1e-3)


def test_a_start_that_fails_is_an_error() -> None:
    runner = Analytic([knob(0.05, 3.0, 1.6)], square, fails=1.5)
    with pytest.raises(SimulationError):
        search_by_vector(runner, table(), runner.knobs, 1)


def test_runs_that_are_used_up_are_told() -> None:
    runner = Analytic([knob(0.05, 2.0, 0.1)], square)
    found = search_by_vector(runner, table(4), runner.knobs, 1)
    assert not found.complete
    assert len(runner.history) == 3
