"""Oracle: the closed form within three standard errors of the count; equality of bits."""

import math

import numpy as np
import pytest

from cosim.dsp.detection.assignment import split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Transitions, relaxation
from cosim.dsp.detection.shots import integrated_shots, record_shots, shot_points
from tests.dsp.detections import pointers, steady

STEP, COUNT, RATE = 4e-9, 250, 2 * math.pi * 2e6
RATES, PREPARATION = relaxation(30e-6, 0.02), Preparation(0.02, 0.003)
F = np.linspace(-125e6, 125e6, 101)
ADC = Adc(9, 60.0, 125e6)


def coloured(level: float, *, centre: float = 4e6, quadratures: int = 2) -> OutputNoise:
    """A floor and a resonance beside the carrier."""
    return OutputNoise(level / 4, F, level / (1 + ((F - centre) / 15e6) ** 2), quadratures)


def chain(level: float, *, gain: float = 1.5) -> ChainOutput:
    return pointers(COUNT, STEP, RATE, coloured(level), gain=gain)


class TestIntegrated:
    # Levels that make errors of about 1e-1 to 1e-4 without transitions.
    @pytest.mark.parametrize("snr", [2.56, 4.65, 6.18, 7.44])
    @pytest.mark.parametrize("decays", [False, True])
    def test_against_the_closed_form(self, snr: float, decays: bool) -> None:
        rates, prepared = (RATES, PREPARATION) if decays else (Transitions(), Preparation())
        split = split_assignment(steady(COUNT, STEP, snr), Detector(), rates, prepared)
        shots = integrated_shots(split, rates, prepared, 1_000_000, 3)
        assert abs(shots.deviation(split.assignment_matrix)) < 3
        assert shots.count == 1_000_000
        wanted = split.assignment_error
        # The count's own standard error is that of the closed form, within its own scatter.
        error = math.sqrt(wanted * (1 - wanted) / 1e6)
        assert shots.standard_error == pytest.approx(error, rel=0.3)

    def test_of_noise_that_differs_between_the_states(self) -> None:
        output = pointers(COUNT, STEP, RATE, OutputNoise(1e-8), gain=1.5)
        output = ChainOutput(output.records, output.noise, OutputNoise(1e-7))
        rates = Transitions(5e5, 1e5)
        split = split_assignment(output, Detector(threshold="optimal"), rates, PREPARATION)
        shots = integrated_shots(split, rates, PREPARATION, 1_000_000, 8)
        # Each state by itself, since the two have different errors.
        for decided, prepared in ((1, 0), (0, 1)):
            wanted = split.assignment_matrix[decided, prepared]
            error = math.sqrt(wanted * (1 - wanted) / 500_000)
            got = shots.assignment_matrix[decided, prepared]
            assert got == pytest.approx(wanted, abs=3 * error)

    def test_a_seed_is_a_result(self) -> None:
        split = split_assignment(chain(1e-7), Detector(), RATES, PREPARATION)
        first = integrated_shots(split, RATES, PREPARATION, 20_000, 5)
        again = integrated_shots(split, RATES, PREPARATION, 20_000, 5)
        other = integrated_shots(split, RATES, PREPARATION, 20_000, 6)
        assert np.array_equal(first.assignment_matrix, again.assignment_matrix)
        assert not np.array_equal(first.assignment_matrix, other.assignment_matrix)


def test_points_are_decided_as_the_shots_are() -> None:
    split = split_assignment(chain(1e-7), Detector(), RATES, PREPARATION)
    points = shot_points(split, RATES, PREPARATION, 100_000, 2)
    shares = (split.projection.along(points) > split.threshold).mean(axis=1)
    for prepared in (0, 1):
        wanted = split.assignment_matrix[1, prepared]
        error = math.sqrt(wanted * (1 - wanted) / 100_000)
        assert shares[prepared] == pytest.approx(wanted, abs=3 * error)
    across = (points[0] * np.exp(-1j * split.projection.axis)).imag
    # Circular noise: as wide across the axis as along it; decays move it by next to nothing here.
    assert across.std() == pytest.approx(split.projection.sigmas[0], rel=0.02)


class TestRecords:
    @pytest.mark.parametrize("weights", ["boxcar", "matched", "whitened"])
    @pytest.mark.parametrize("adc", [None, ADC], ids=["plain", "adc"])
    def test_against_the_closed_form(self, weights: str, adc: Adc | None) -> None:
        detector = Detector(weights, start=100e-9, adc=adc)  # type: ignore[arg-type]
        output, rates = chain(3e-7), relaxation(3e-6, 0.1)
        split = split_assignment(output, detector, rates, PREPARATION)
        shots = record_shots(output, detector, split, rates, PREPARATION, 6000, 4)
        assert abs(shots.deviation(split.assignment_matrix)) < 3
        assert shots.noise_error < 1e-9
        if adc is not None:
            assert split.lsb_over_sigma < 0.1
            assert split.clipped < 1e-12
            assert shots.clipped == 0.0
        else:
            assert math.isnan(shots.clipped)

    def test_of_noise_that_differs_between_the_states(self) -> None:
        output = pointers(COUNT, STEP, RATE, OutputNoise(3e-8), gain=1.5)
        output = ChainOutput(output.records, output.noise, OutputNoise(3e-7))
        detector, rates = Detector(weights="boxcar", threshold="optimal"), Transitions(5e5, 1e5)
        split = split_assignment(output, detector, rates, PREPARATION)
        shots = record_shots(output, detector, split, rates, PREPARATION, 10_000, 4)
        for decided, prepared in ((1, 0), (0, 1)):
            wanted = split.assignment_matrix[decided, prepared]
            error = math.sqrt(wanted * (1 - wanted) / 5000)
            got = shots.assignment_matrix[decided, prepared]
            assert got == pytest.approx(wanted, abs=3 * error)

    def test_of_a_single_real_output(self) -> None:
        output = steady(COUNT, STEP, 3.0, quadratures=1)
        output = ChainOutput(output.records, coloured(8e-8, centre=0.0, quadratures=1))
        split = split_assignment(output, Detector(), RATES, PREPARATION)
        shots = record_shots(output, Detector(), split, RATES, PREPARATION, 6000, 4)
        assert 1e-2 < split.errors.separation < 0.2
        assert abs(shots.deviation(split.assignment_matrix)) < 3

    def test_clipping_is_counted(self) -> None:
        """Where the closed form does not hold, the count says so."""
        detector = Detector(adc=Adc(6, 4.0, 125e6))
        output = chain(3e-7)
        split = split_assignment(output, detector, RATES, PREPARATION)
        shots = record_shots(output, detector, split, RATES, PREPARATION, 2000, 4)
        assert split.clipped > 0.3
        # Three standard errors of the count, for samples that are nearly independent, and as
        # much again for the states that are not those prepared.
        assert shots.clipped == pytest.approx(split.clipped, abs=6e-3)

    def test_a_seed_is_a_result(self) -> None:
        detector, output = Detector(adc=ADC), chain(3e-7)
        split = split_assignment(output, detector, RATES, PREPARATION)
        found = [
            record_shots(output, detector, split, RATES, PREPARATION, 2000, seed).assignment_matrix
            for seed in (4, 4, 5)
        ]
        assert np.array_equal(found[0], found[1])
        assert not np.array_equal(found[0], found[2])


@pytest.mark.full
@pytest.mark.parametrize("level", [3e-8, 1e-7, 3e-7])
def test_whole_records_of_a_chain_that_saturates(level: float) -> None:
    detector, output = Detector(adc=ADC), chain(level)
    split = split_assignment(output, detector, RATES, PREPARATION)
    shots = record_shots(output, detector, split, RATES, PREPARATION, 60_000, 9)
    assert abs(shots.deviation(split.assignment_matrix)) < 3
