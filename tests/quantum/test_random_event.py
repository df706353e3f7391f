"""Oracles: rate equations by SciPy, the exponential distribution, and counts of drawn shots."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.stats import kstest

from cosim.errors import InputError
from cosim.quantum.random_event import (
    ExponentialEvent,
    SpinTunnelling,
    event_probability,
    event_times,
    out_probability,
    tunnelling_times,
)

SHOTS = 20_000
# A right distribution fails this in one of 1e4 seeds; the seeds are fixed.
UNLIKELY = 1e-4


class TestExponentialEvent:
    event = ExponentialEvent(50e-6, start=2e-6)

    def test_probability(self) -> None:
        found = event_probability(self.event, [0.0, 2e-6, 2e-6 + 50e-6 * math.log(2), math.inf])
        assert found == pytest.approx([0.0, 0.0, 0.5, 1.0])

    def test_a_rare_event_keeps_its_digits(self) -> None:
        rare = float(event_probability(ExponentialEvent(1.0), 1e-12))
        assert rare == pytest.approx(1e-12, rel=1e-11, abs=0.0)  # the next order is 5e-13 of it

    def test_times_follow_the_exponential(self) -> None:
        times = event_times(self.event, SHOTS, seed=3)
        assert kstest(times, lambda t: event_probability(self.event, t)).pvalue > UNLIKELY

    def test_the_first_shots_are_the_same_for_any_count(self) -> None:
        many = event_times(self.event, 1000, seed=8)
        assert (event_times(self.event, 10, seed=8) == many[:10]).all()
        assert (event_times(self.event, 10, seed=9) != many[:10]).any()

    def test_never(self) -> None:
        never = ExponentialEvent(math.inf)
        assert np.isinf(event_times(never, 3, seed=1)).all()
        assert event_probability(never, [1e3]) == 0.0


def rate_equations(
    tunnelling: SpinTunnelling, level: int, times: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Give the probabilities that the electron has left, and that the dot is empty."""
    up, down = 1 / tunnelling.out_excited, 1 / tunnelling.out_ground
    fall, fill = 1 / tunnelling.relaxation, 1 / tunnelling.refill

    # States: excited, ground, empty, refilled.
    def slope(_: float, p: np.ndarray) -> list[float]:
        leaving = up * p[0] + down * p[1]
        return [
            -(up + fall) * p[0],
            fall * p[0] - down * p[1],
            leaving - fill * p[2],
            fill * p[2],
        ]

    first = [float(level), 1.0 - level, 0.0, 0.0]
    span = (tunnelling.start, times[-1])
    found = solve_ivp(slope, span, first, t_eval=times, rtol=1e-11, atol=1e-13, method="DOP853").y
    return found[2] + found[3], found[2]


class TestSpinTunnelling:
    cases = (
        SpinTunnelling(20e-6, 300e-6, 60e-6, 150e-6, 5e-6),
        SpinTunnelling(20e-6, 1 / (1 / 20e-6 + 1 / 150e-6), 60e-6, 150e-6),  # Equal rates.
        SpinTunnelling(100e-6, 30e-6, 20e-6, 40e-6),
    )

    @pytest.mark.parametrize("level", [0, 1])
    @pytest.mark.parametrize("tunnelling", cases)
    def test_the_rate_equations(self, tunnelling: SpinTunnelling, level: int) -> None:
        times = tunnelling.start + np.linspace(0.0, 200e-6, 21)
        wanted, _ = rate_equations(tunnelling, level, times)
        # The tolerance of the integrator.
        assert out_probability(tunnelling, level, times) == pytest.approx(wanted, abs=1e-9)

    @pytest.mark.parametrize("level", [0, 1])
    @pytest.mark.parametrize("tunnelling", cases)
    def test_drawn_times_follow_them(self, tunnelling: SpinTunnelling, level: int) -> None:
        out, back = tunnelling_times(tunnelling, level, SHOTS, seed=5)
        assert (back > out).all()
        assert kstest(out, lambda t: out_probability(tunnelling, level, t)).pvalue > UNLIKELY
        times = np.array([30e-6, 100e-6])
        _, empty = rate_equations(tunnelling, level, times)
        for t, wanted in zip(times, empty, strict=True):
            count = float(np.mean((out <= t) & (t < back)))
            # Four standard errors, which a right count leaves in one of 16,000 seeds.
            assert abs(count - wanted) < 4 * math.sqrt(wanted * (1 - wanted) / SHOTS)

    def test_without_relaxation_and_refill_it_is_one_event(self) -> None:
        tunnelling = SpinTunnelling(20e-6)
        times = np.linspace(0.0, 1e-4, 11)
        wanted = event_probability(ExponentialEvent(20e-6), times)
        assert out_probability(tunnelling, 1, times) == pytest.approx(wanted)
        assert (out_probability(tunnelling, 0, times) == 0).all()
        out, back = tunnelling_times(tunnelling, 0, 4, seed=1)
        assert np.isinf(out).all()
        assert np.isinf(back).all()

    def test_the_first_shots_are_the_same_for_any_count(self) -> None:
        many = tunnelling_times(self.cases[0], 1, 1000, seed=8)
        few = tunnelling_times(self.cases[0], 1, 10, seed=8)
        for all_of_them, first in zip(many, few, strict=True):
            assert (all_of_them[:10] == first).all()


def test_what_is_no_event_is_refused() -> None:
    with pytest.raises(InputError, match="mean_time: wanted a time above 0 s"):
        ExponentialEvent(0.0)
    with pytest.raises(InputError, match="start: wanted a time of at least 0 s"):
        ExponentialEvent(1.0, start=-1.0)
    with pytest.raises(InputError, match="refill: wanted a time above 0 s"):
        SpinTunnelling(1.0, refill=math.nan)
    with pytest.raises(InputError, match="wanted the level 0 or 1, got 2"):
        out_probability(SpinTunnelling(1.0), 2, [1.0])
    with pytest.raises(InputError, match="wanted the level 0 or 1, got 2"):
        tunnelling_times(SpinTunnelling(1.0), 2, 1, seed=1)
    with pytest.raises(InputError, match="count of at least 0"):
        event_times(ExponentialEvent(1.0), -1, seed=1)
    with pytest.raises(InputError, match="seed of at least 0"):
        tunnelling_times(SpinTunnelling(1.0), 0, 1, seed=-1)
