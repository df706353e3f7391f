"""Oracle: items that each have a closed form, brute force through the chain, and limits."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.special import ndtr

from cosim import archive
from cosim.dsp.detection.aftermath import decision_latency, repeat_agreement
from cosim.dsp.detection.assignment import (
    AssignmentSplit,
    ErrorItems,
    IntegrationScan,
    scan_integration,
    split_assignment,
)
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.outcomes import state_odds
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.projection import Projection
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Transitions, relaxation
from cosim.dsp.detection.shots import ShotCounts, integrated_shots, record_shots, shot_points
from cosim.dsp.noise.paths import generator
from tests.dsp.detections import (
    NOTHING,
    SURE,
    bent,
    pointer_difference,
    pointers,
    separation_error,
    steady,
)

STEP, COUNT, RATE = 4e-9, 250, 2 * math.pi * 2e6
DURATION = STEP * COUNT
NAMES = ("separation", "saturation", "quantisation", "excitation", "decay", "preparation")


def saturating(level: float = 2e-8) -> ChainOutput:
    return pointers(COUNT, STEP, RATE, OutputNoise(white=level), gain=1.5)


class TestItems:
    def test_each_in_its_closed_form(self) -> None:
        """Preparation, excitation and decay of a steady chain so quiet that nothing else counts."""
        rates, preparation = Transitions(2e5, 3e4), Preparation(0.01, 0.002)
        split = split_assignment(
            steady(COUNT, STEP, 1e5), Detector(weights="boxcar"), rates, preparation
        )
        # What changes before the middle is taken for the other state.
        up, down = (-math.expm1(-rate * DURATION / 2) for rate in (3e4, 2e5))
        first, second = preparation.wrong
        assert split.errors.separation == 0.0
        # Threshold crossings are 1e-5 of the window wide.
        assert split.errors.excitation == pytest.approx(up / 2, rel=1e-5)
        assert split.errors.decay == pytest.approx(down / 2, rel=1e-5)
        wanted = (first + second) * (1 - up - down) / 2
        assert split.errors.preparation == pytest.approx(wanted, rel=1e-5)
        assert second == pytest.approx(0.01 * 0.998 + 0.99 * 0.002, rel=1e-12)

    def test_rounding_adds_its_variance(self) -> None:
        adc = Adc(4, 60.0, 125e6, corner_frequency=50e6)
        output = pointers(COUNT, STEP, RATE, OutputNoise(white=2e-7))
        split = split_assignment(output, Detector(weights="matched", adc=adc), NOTHING, SURE)
        w = split.projection.weights
        smaller = split.projection.sigmas**2 - (adc.lsb**2 / 12) * (np.abs(w) ** 2).sum()
        distance = np.ptp(split.projection.values)
        before = separation_error(float(distance / np.sqrt(smaller.mean())))
        wanted = separation_error(split.snr) - before
        assert split.errors.quantisation == pytest.approx(wanted, rel=1e-6)
        assert split.errors.quantisation > 1e-3 * split.assignment_error
        assert split.clipped == pytest.approx(0.0, abs=1e-12)

    def test_saturation_is_the_loss_against_the_linear_chain(self) -> None:
        output = saturating()
        assert output.linear is not None
        detector = Detector()
        split = split_assignment(output, detector, NOTHING, SURE)
        linear = split_assignment(output.linearised(), detector, NOTHING, SURE)
        assert split.errors.separation == linear.assignment_error
        wanted = split.assignment_error - linear.assignment_error
        assert split.errors.saturation == pytest.approx(wanted, rel=1e-12)
        assert split.errors.saturation > 0.5 * split.assignment_error
        # The offset of the amplifier drives state 1 further into saturation.
        assert split.gains[1] < 0.95 * split.gains[0] < 1.0

    def test_saturation_with_a_quieter_chain_may_help(self) -> None:
        output = replace(saturating(), linear_noise=OutputNoise(white=4e-7))
        split = split_assignment(output, Detector(), NOTHING, SURE)
        assert split.errors.saturation < 0
        assert split.errors.total == pytest.approx(split.assignment_error, rel=1e-12)

    def test_what_is_not_there_has_an_item_of_zero(self) -> None:
        split = split_assignment(steady(COUNT, STEP, 4.0), Detector(), NOTHING, SURE)
        assert [getattr(split.errors, name) for name in NAMES[1:]] == [0.0] * 5
        assert split.gains.tolist() == [1.0, 1.0]
        assert split.interpolation_error == 0.0


@settings(max_examples=30, deadline=None)
@given(
    level=st.floats(-9.5, -6.5),
    t1=st.floats(-6.5, -4.0),
    population=st.floats(0.0, 0.3),
    error=st.floats(0.0, 0.2),
    bits=st.integers(5, 14),
    weights=st.sampled_from(["boxcar", "matched"]),
    threshold=st.sampled_from(["mid", "optimal"]),
    gain=st.sampled_from([0.0, 0.5, 2.0]),
)
def test_items_sum_and_do_not_fall_below_zero(
    level: float,
    t1: float,
    population: float,
    error: float,
    bits: int,
    weights: str,
    threshold: str,
    gain: float,
) -> None:
    output = pointers(COUNT, STEP, RATE, OutputNoise(white=10**level), gain=gain, times=9)
    # Twelve standard deviations of a sample beyond the signal, so that nothing is clipped.
    room = 12 * math.sqrt(10**level / STEP)
    detector = Detector(weights, threshold, adc=Adc(bits, 5.0 + room, 125e6))  # type: ignore[arg-type]
    split = split_assignment(
        output, detector, relaxation(10**t1, population), Preparation(population, error)
    )
    items = [getattr(split.errors, name) for name in NAMES]
    # Rounding; the search for the best threshold leaves the square of its step.
    assert math.fsum(items) == pytest.approx(split.assignment_error, rel=1e-12)
    for name, item in zip(NAMES, items, strict=True):
        assert item >= (-1e-10 if name != "saturation" else -math.inf), name
    assert split.assignment_matrix.sum(axis=0) == pytest.approx([1, 1], rel=1e-12)
    assert (split.assignment_matrix >= -1e-15).all()
    assert split.assignment_matrix[[1, 0], [0, 1]].mean() == split.assignment_error


class TestConversion:
    """A state that looks like the other one until it converts, as a spin whose electron tunnels."""

    def test_in_closed_form(self) -> None:
        rates = Transitions(down=2e5, up=1e4, conversion=5e6)
        output, detector = steady(COUNT, STEP, 1e5), Detector(weights="boxcar")
        split = split_assignment(output, detector, rates, SURE)
        # Seen if it converts before it goes down and before the middle of the window.
        missed = 1 - 5e6 / 5.2e6 * -math.expm1(-5.2e6 * DURATION / 2)
        up = -math.expm1(-1e4 * DURATION / 2)
        # Threshold crossings are 1e-5 of the window wide.
        assert split.assignment_matrix[0, 1] == pytest.approx(missed, rel=1e-4)
        assert split.assignment_matrix[1, 0] == pytest.approx(up, rel=1e-4)
        assert split.errors.decay == pytest.approx(missed / 2, rel=1e-4)
        assert split.errors.excitation == pytest.approx(up / 2, rel=1e-4)

    def test_a_fast_one_is_none(self) -> None:
        output = pointers(COUNT, STEP, RATE, OutputNoise(white=1e-7), times=31)
        fast = split_assignment(output, Detector(), Transitions(conversion=1e12), SURE)
        none = split_assignment(output, Detector(), NOTHING, SURE)
        # 1 ps late in a response of 80 ns.
        assert fast.assignment_error == pytest.approx(none.assignment_error, rel=1e-3)

    @pytest.mark.parametrize("snr", [12.0, 1e4])
    def test_and_back_in_closed_form(self, snr: float) -> None:
        rates = Transitions(conversion=4e6, reversion=1e6)
        split = split_assignment(steady(COUNT, STEP, snr), Detector(weights="boxcar"), rates, SURE)
        # The time that it is seen for, over the window, by adaptive quadrature of both times.
        half = DURATION / 2

        def seen(t: float) -> float:
            kept = math.exp(-1e6 * (DURATION - t)) * ndtr(snr * (1 - t / DURATION - 0.5))
            part = quad(
                lambda u: 1e6 * math.exp(-1e6 * u) * ndtr(snr * (u / DURATION - 0.5)),
                0,
                DURATION - t,
                points=[min(half, DURATION - t)],
            )[0]
            return 4e6 * math.exp(-4e6 * t) * float(kept + part)

        never = math.exp(-4e6 * DURATION) * separation_error(snr)
        wanted = never + quad(seen, 0, DURATION, points=[half], epsabs=1e-9)[0]
        # Two times are averaged over in steps of a 128th of the window, to second order.
        assert split.assignment_matrix[1, 1] == pytest.approx(wanted, rel=2e-4)
        if snr > 100:
            exact = -math.expm1(-4e6 * half) * math.exp(-1e6 * half)
            assert split.assignment_matrix[1, 1] == pytest.approx(exact, rel=2e-4)

    def test_and_back_through_a_chain_that_saturates(self) -> None:
        """Brute force: both times drawn, each record sent through the chain."""
        rates, shots = Transitions(conversion=4e6, reversion=1.5e6), 100_000
        split = split_assignment(saturating(5e-8), Detector(weights="boxcar"), rates, SURE)
        random = generator(12, 0, 0)
        first = random.exponential(1 / 4e6, shots)
        second = first + random.exponential(1 / 1.5e6, shots)
        t = STEP * np.arange(COUNT)
        never = pointer_difference(t, np.array([math.inf]), RATE)
        values = np.empty(shots)
        for begin in range(0, shots, 4000):
            out, back = (
                pointer_difference(t, times[begin : begin + 4000], RATE)
                for times in (first, second)
            )
            rows = bent(back - never - out, 1.5)
            values[begin : begin + 4000] = split.projection.along(
                rows @ split.projection.weights.conj()
            )
        values += split.projection.sigmas[1] * random.standard_normal(shots)
        counted = float(np.mean(values < split.threshold))
        error = math.sqrt(counted * (1 - counted) / shots)
        # The chain settles in 80 ns; transitions closer than that are no sum of two.
        assert split.assignment_matrix[0, 1] == pytest.approx(counted, abs=3 * error)

    @pytest.mark.parametrize("reversion", [0.0, 1.5e6])
    def test_shots_agree(self, reversion: float) -> None:
        rates, preparation = Transitions(2e5, 1e5, 4e6, reversion), Preparation(0.02, 0.01)
        output, detector = saturating(5e-8), Detector(threshold="optimal")
        split = split_assignment(output, detector, rates, preparation)
        assert split.errors.decay > 0.01
        shots = integrated_shots(split, rates, preparation, 1_000_000, 3)
        assert abs(shots.deviation(split.assignment_matrix)) < 3
        records = record_shots(output, detector, split, rates, preparation, 6000, 3)
        assert abs(records.deviation(split.assignment_matrix)) < 3
        points = shot_points(split, rates, preparation, 50_000, 4)
        share = float(np.mean(split.projection.along(points[1]) <= split.threshold))
        wanted = split.assignment_matrix[0, 1]
        error = math.sqrt(wanted * (1 - wanted) / 50_000)
        assert share == pytest.approx(wanted, abs=3 * error)


class TestInterpolation:
    def brute_force(
        self, split: AssignmentSplit, rates: Transitions, shots: int
    ) -> tuple[float, float]:
        """P(0|1) by sending every record with a decay through the chain itself."""
        random = generator(11, 0, 0)
        times = random.exponential(1 / rates.down, shots)
        t = STEP * np.arange(COUNT)
        values = np.empty(shots)
        for begin in range(0, shots, 4000):
            rows = bent(pointer_difference(t, times[begin : begin + 4000], RATE), 1.5)
            values[begin : begin + 4000] = split.projection.along(
                rows @ split.projection.weights.conj()
            )
        values += split.projection.sigmas[1] * random.standard_normal(shots)
        share = float(np.mean(values < split.threshold))
        return share, math.sqrt(share * (1 - share) / shots)

    def test_a_chain_that_saturates_stays_so(self) -> None:
        rates = Transitions(1 / (2 * DURATION))
        split = split_assignment(saturating(5e-9), Detector(weights="boxcar"), rates, SURE)
        counted, error = self.brute_force(split, rates, 100_000)
        assert split.assignment_matrix[0, 1] == pytest.approx(counted, abs=3 * error)
        # With the two steady records alone, values on a straight line, it would be wrong.
        straight = replace(
            split.projection,
            path_points=np.linspace(
                split.projection.points[::-1], split.projection.points, 1025
            ).T.copy(),
        )
        wrong = state_odds(straight, rates, split.threshold, 1, 0).decided
        assert abs(wrong - counted) > 10 * error

    def test_its_error_is_told(self) -> None:
        rates, detector = Transitions(1 / DURATION), Detector(weights="boxcar")
        noise = OutputNoise(white=5e-9)
        exact = split_assignment(
            pointers(COUNT, STEP, RATE, noise, gain=1.5, times=99), detector, rates, SURE
        )
        for times in (5, 9, 19):
            few = split_assignment(
                pointers(COUNT, STEP, RATE, noise, gain=1.5, times=times), detector, rates, SURE
            )
            assert abs(few.assignment_error - exact.assignment_error) <= few.interpolation_error

    def test_a_second_transition_is_bounded(self) -> None:
        split = split_assignment(steady(COUNT, STEP, 5.0), Detector(), Transitions(1e5, 2e4), SURE)
        assert split.neglected == pytest.approx(1e5 * 2e4 * DURATION**2 / 2, rel=1e-12)


class TestWindow:
    def test_a_later_start_cuts_the_records(self) -> None:
        output = pointers(COUNT, STEP, RATE, OutputNoise(white=1e-8))
        rates = Transitions(1e5)
        late = split_assignment(
            output, Detector(weights="boxcar", start=200e-9, stop=800e-9), rates, SURE
        )
        assert late.projection.integration_time == pytest.approx(600e-9, rel=1e-12)
        assert late.projection.weights.size == 150
        # A decay before the window still counts: the state is the other one in all of it.
        first = state_odds(late.projection, rates, late.threshold, 1, 0)
        assert first.kept == pytest.approx(math.exp(-1e5 * 800e-9), rel=1e-12)
        assert first.decided_and_changed > -math.expm1(-1e5 * 200e-9)

    def test_a_converter_on_the_grid_changes_little(self) -> None:
        output = pointers(COUNT, STEP, RATE, OutputNoise(white=1e-8))
        plain = split_assignment(output, Detector(), Transitions(1e5), SURE)
        fine = Detector(adc=Adc(14, 8.0, 125e6))
        sampled = split_assignment(output, fine, Transitions(1e5), SURE)
        # The filter delays the signal by 8 ns in 1 us and cuts noise off that weights cut anyway.
        assert sampled.snr == pytest.approx(plain.snr, rel=0.03)
        assert sampled.projection.step == pytest.approx(8e-9, rel=1e-12)


class TestRepeat:
    def test_without_transitions(self) -> None:
        split = split_assignment(steady(COUNT, STEP, 3.0), Detector(), NOTHING, SURE)
        found = repeat_agreement(split, NOTHING, SURE)
        e = separation_error(3.0)
        assert found.mean == pytest.approx((1 - e) ** 2 + e**2, rel=1e-12)
        assert found.ground_kept == found.excited_kept == 1.0

    def test_against_brute_force(self) -> None:
        rates, preparation, wait = Transitions(3e5, 1e5), Preparation(0.05, 0.02), 700e-9
        split = split_assignment(steady(COUNT, STEP, 4.0), Detector(), rates, preparation)
        found = repeat_agreement(split, rates, preparation, wait)
        random, shots = generator(5, 0, 0), 200_000
        leaving = np.array([rates.up, rates.down])

        def read(state: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            times = random.standard_exponential(shots) / leaving[state]
            part = np.minimum(times / DURATION, 1.0)
            value = np.where(state == 1, part, 1 - part) + random.standard_normal(shots) / 4
            return value > 0.5, np.where(times < DURATION, 1 - state, state)

        for prepared, wanted in ((0, found.ground), (1, found.excited)):
            wrong = random.random(shots) < preparation.wrong[prepared]
            first, state = read(np.where(wrong, 1 - prepared, prepared))
            left = np.full(shots, wait)
            while (left > 0).any():
                left -= random.standard_exponential(shots) / leaving[state]
                state = np.where(left > 0, 1 - state, state)
            second, _ = read(state)
            counted = float(np.mean(first == second))
            error = math.sqrt(counted * (1 - counted) / shots)
            assert wanted == pytest.approx(counted, abs=3 * error)
        assert found.excited_kept == pytest.approx(math.exp(-3e5 * DURATION), rel=1e-12)

    def test_latency(self) -> None:
        assert decision_latency(Adc(8, 1.0, 250e6), 9) == pytest.approx(40e-9, rel=1e-12)


def test_the_archive_keeps_the_results(tmp_path: Path) -> None:
    rates = relaxation(20e-6, 0.01)
    split = split_assignment(saturating(), Detector(), rates, SURE)
    kinds = {
        cls.__name__: cls
        for cls in (AssignmentSplit, ErrorItems, Projection, IntegrationScan, ShotCounts)
    }
    results = (
        split,
        scan_integration(saturating(), Detector(), rates, SURE),
        integrated_shots(split, rates, SURE, 1000, 1),
        repeat_agreement(split, rates, SURE),
    )
    for number, result in enumerate(results):
        path = tmp_path / f"{number}.h5"
        archive.write(path, result)
        back = archive.read(path, kinds | {type(result).__name__: type(result)})
        assert type(back) is type(result)
        for name in result.__dataclass_fields__:
            wanted, found = getattr(result, name), getattr(back, name)
            if isinstance(wanted, (np.ndarray, float)):
                assert np.array_equal(wanted, found, equal_nan=True), name
