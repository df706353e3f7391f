"""Oracle: small-error formulas of rectangular pulses, and differences of noise that is known."""

import math

import numpy as np
import pytest

from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.sensitivity.response import (
    NO_EFFECT,
    RESOLVED,
    UNRESOLVED,
    Outcome,
    Pair,
    moved_by,
    respond,
)
from tests.calibration.pulses import X90, square
from tests.sources import ALGEBRA
from tests.validation import Validate

TOPIC = "metrics"
THETA = math.pi / 2


def outcome(unitary: np.ndarray, noise: np.ndarray | float = 0.0) -> Outcome:
    channel = unitary_superoperator(unitary)
    vector = error_vector(channel, X90)
    value = 1.0 - average_gate_fidelity(channel, X90)
    moved = vector + noise
    return Outcome(value + float(moved @ moved - vector @ vector), moved)


def pair(step: float, **start: float) -> Pair:
    """A square pulse whose `key` is moved from its start."""
    (key,) = start
    return Pair(
        step,
        outcome(square(**{"amplitude": 1.0, key: start[key] - step})),
        outcome(square(**{"amplitude": 1.0, key: start[key] + step})),
    )


@pytest.mark.parametrize(
    ("key", "card", "second"),
    [
        # 1 - F = theta^2 x^2/6 of a relative amplitude, so that the second derivative is a third.
        ("amplitude", "A03", THETA**2 / 3),
        # x^2/3 of x = Delta/Omega, and here Delta T = x theta.
        ("detuning", "A04", 2 / 3 / THETA**2),
        ("phase", "A05", 2 / 3),
    ],
)
def test_second_derivatives_at_the_optimum(
    key: str, card: str, second: float, validate: Validate
) -> None:
    start = 1.0 if key == "amplitude" else 0.0
    both = pair(1e-3, **{key: start})
    found = respond(outcome(square(1.0)), both, both, 1e-9)
    assert abs(found.first) < found.first_error
    # What is left of order step^2 is of the fourth derivative, of the order of the second.
    quantity = f"second derivative of the infidelity of a pi/2 pulse by its {key}"
    validate(quantity, ALGEBRA, second, found.second, rel=1e-6, card=card)
    assert found.second_error < 1e-4 * second
    assert (found.status, found.cost_low > 0.0) == (RESOLVED, True)
    assert found.cost_high == pytest.approx(0.5 * second * 1e-6, rel=1e-5, abs=0.0)


def test_first_derivative_away_from_the_optimum() -> None:
    both = pair(1e-3, amplitude=1.05)
    found = respond(outcome(square(1.05)), both, both, 1e-9)
    # 1 - F = (2/3) sin^2(theta x/2), whose derivative is (theta/3) sin(theta x); the error of
    # differences is of the order of the step squared.
    assert found.first == pytest.approx(THETA / 3 * math.sin(0.05 * THETA), rel=1e-5)
    assert found.second == pytest.approx(THETA**2 / 3 * math.cos(0.05 * THETA), rel=1e-5)


def test_noise_of_the_runs_is_bounded() -> None:
    rng = np.random.default_rng(3)
    noise, step = 1e-6, 1e-3
    clean = pair(step, amplitude=1.02)
    wanted = respond(outcome(square(1.02)), clean, clean, noise)
    worst = np.zeros(2)
    for _ in range(50):

        def kick() -> np.ndarray:
            found = rng.normal(size=6)
            return noise * found / np.linalg.norm(found)

        runs = [outcome(square(1.02 + x), kick()) for x in (0.0, -step, step)]
        noisy = Pair(step, runs[1], runs[2])
        found = respond(runs[0], noisy, noisy, noise)
        off = abs(found.first - wanted.first) / found.first_error
        bend = abs(found.second - wanted.second) / found.second_error
        worst = np.maximum(worst, [off, bend])
    assert (worst <= 1.0).all()
    assert (worst > 0.05).all()  # They are bounds that mean something.


def test_what_is_below_the_noise_is_not_resolved_and_a_bound_is_given() -> None:
    center = outcome(square(1.01))
    both = Pair(1e-3, outcome(square(1.01), 1e-8), outcome(square(1.01), -1e-8))
    found = respond(center, both, both, 1e-6)
    assert found.status == UNRESOLVED
    # 2 |e| n + n^2 of the vector as it stands.
    size = float(np.linalg.norm(center.vector))
    assert found.bound == pytest.approx(2e-6 * size + 1e-12, rel=0.01, abs=0.0)


def test_what_changes_nothing_has_no_effect() -> None:
    here = outcome(square(1.01))
    both = Pair(1e-3, here, here)
    found = respond(here, both, both, 1e-6)
    assert (found.status, found.first, found.second) == (NO_EFFECT, 0.0, 0.0)
    assert moved_by(here, both) == 0.0


def test_one_side_alone_gives_a_first_derivative() -> None:
    full = pair(1e-5, amplitude=1.05)
    for half in (Pair(1e-5, full.low, None), Pair(1e-5, None, full.high)):
        found = respond(outcome(square(1.05)), half, half, 1e-9)
        # The error is half the second derivative times the step.
        assert found.first == pytest.approx(THETA / 3 * math.sin(0.05 * THETA), rel=1e-3)
        assert math.isnan(found.second)
        assert math.isnan(found.cost_low) != math.isnan(found.cost_high)
        assert found.status == RESOLVED


def test_a_metric_without_a_vector_is_differenced_itself() -> None:
    empty = np.zeros(0)
    runs = [Outcome(math.exp(x), empty) for x in (-0.01, 0.0, 0.01)]
    both = Pair(0.01, runs[0], runs[2])
    found = respond(runs[1], both, both, 1e-6)
    assert found.first == pytest.approx(1.0, rel=1e-4)  # step^2/6
    assert found.second == pytest.approx(1.0, rel=1e-4)  # step^2/12
    assert moved_by(runs[1], both) == pytest.approx(math.exp(0.01) - 1.0)
