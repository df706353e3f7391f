"""Oracle: published and closed-form numbers of signal over noise, decay and matched filters."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import minimize_scalar
from scipy.special import ndtr

from cosim.dsp.detection.assignment import scan_integration, split_assignment
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.projection import project, snr_over_time
from cosim.dsp.detection.reception import ChainOutput, Detector, receive
from cosim.dsp.detection.records import Preparation, Records, relaxation
from cosim.dsp.detection.weights import Rule
from tests import sources
from tests.dsp.detections import NOTHING, SURE, separation_error, snr_for_error, steady
from tests.validation import Validate

TOPIC = "readout"
DISPERSIVE = f"{sources.CLERK}; {sources.GAMBETTA_TRAJECTORY}; {sources.KRANTZ}"
KAPPA, CHI, PHOTONS, TAU = 2 * math.pi * 5e6, 2 * math.pi * 1e6, 5.0, 400e-9
BOXCAR = Detector(weights="boxcar")


def dispersive(level: float, count: int = 4000, *, ring_up: bool = True) -> ChainOutput:
    """Outgoing fields of a resonator with one port, in sqrt(photon/s) in place of V."""
    step = TAU / count
    # Samples stand for intervals, so that they are taken in their middles.
    t = step * (np.arange(count) + 0.5)
    drive = math.sqrt(PHOTONS * (KAPPA**2 / 4 + CHI**2))
    poles = [KAPPA / 2 + 1j * s * CHI for s in (-1, 1)]
    fields = [
        math.sqrt(KAPPA) * drive / p * ((1 - np.exp(-p * t)) if ring_up else np.ones(count))
        for p in poles
    ]
    return ChainOutput(Records(step, fields[0], fields[1]), OutputNoise(white=level))


class TestDispersive:
    # A quadrature of the vacuum has 1/4 photon per second and Hz, both together 1/2.
    def test_steady(self, validate: Validate) -> None:
        eta = 0.4
        split = split_assignment(dispersive(1 / (2 * eta), ring_up=False), BOXCAR, NOTHING, SURE)
        # Rounding of the card.
        validate("SNR, steady", DISPERSIVE, 7.447507, split.snr, rel=1e-7, card="D09")
        got = split.assignment_error
        validate("separation error, steady", DISPERSIVE, 9.81413e-05, got, rel=1e-6, card="D09")

    def test_boxcar_from_the_start_of_the_drive(self, validate: Validate) -> None:
        split = split_assignment(dispersive(1 / 0.8), BOXCAR, NOTHING, SURE)
        # The midpoint rule with 4000 intervals leaves 1e-6 at the most.
        validate("SNR, boxcar with ring-up", DISPERSIVE, 5.403141, split.snr, rel=1e-6, card="D09")
        got = split.assignment_error
        quantity = "separation error, boxcar with ring-up"
        validate(quantity, DISPERSIVE, 0.003450642, got, rel=1e-5, card="D09")
        assert split.errors.separation == split.errors.total == got

    @pytest.mark.parametrize(("added", "snr"), [(0.0, 11.77554), (0.5, 8.326566), (6.95, 3.050618)])
    def test_added_noise(self, validate: Validate, added: float, snr: float) -> None:
        output = dispersive(0.5 + added, ring_up=False)
        got = project(receive(output, BOXCAR), "boxcar").snr
        quantity = f"SNR with {added:g} added quanta"
        # Rounding of the card.
        validate(quantity, sources.CLERK, snr, got, rel=5e-7, card="D18")


@pytest.mark.parametrize(("snr", "error"), [(4.0, 0.02275013), (5.0, 0.006209665)])
def test_snr_to_error(validate: Validate, snr: float, error: float) -> None:
    split = split_assignment(steady(100, 1e-9, snr), BOXCAR, NOTHING, SURE)
    quantity = f"error of each state at an SNR of {snr:g}"
    # Rounding of the card.
    validate(quantity, sources.KRANTZ, error, split.assignment_matrix[1, 0], rel=3e-7, card="D11")
    validate(quantity, sources.KRANTZ, error, split.assignment_matrix[0, 1], rel=3e-7, card="D11")
    assert split.assignment_error == pytest.approx(separation_error(snr), rel=1e-12)
    assert split.assignment_matrix.sum(axis=0) == pytest.approx([1.0, 1.0], rel=1e-15)


class TestDecay:
    TAU, T1 = 500e-9, 50e-6

    def test_without_noise(self, validate: Validate) -> None:
        split = split_assignment(
            steady(500, self.TAU / 500, 1e6), BOXCAR, relaxation(self.T1), SURE
        )
        source = sources.GAMBETTA_PROTOCOLS
        # Rounding of the card to five digits.
        got = split.assignment_matrix[0, 1]
        validate("P(0|1), decay alone", source, 0.0049875, got, rel=1e-5, card="D12")
        got = split.errors.decay
        quantity = "assignment error, decay alone"
        validate(quantity, source, 0.0024938, got, rel=3e-5, card="D12")
        assert split.assignment_matrix[1, 0] == 0.0
        # Leading order, off by tau/(4 T1) of itself.
        assert got == pytest.approx(self.TAU / (4 * self.T1), rel=3e-3)

    def test_with_noise(self, validate: Validate) -> None:
        split = split_assignment(
            steady(500, self.TAU / 500, 6.0), BOXCAR, relaxation(self.T1), SURE
        )
        got = split.assignment_matrix[0, 1]
        source = sources.GAMBETTA_PROTOCOLS
        # Rounding of the card to five digits.
        validate("P(0|1), decay at an SNR of 6", source, 0.0063226, got, rel=1e-5, card="D12")


@pytest.mark.parametrize(
    ("shape", "rule", "ratio"),
    [
        ("field", "boxcar", 0.8013476),
        ("field", "matched", 0.8382664),
        ("difference", "boxcar", 0.6094331),
        ("difference", "matched", 0.6845972),
        # Nothing is better for white noise.
        ("difference", "whitened", 0.6845972),
    ],
)
def test_matched_filter(validate: Validate, shape: str, rule: Rule, ratio: float) -> None:
    # The recursion for whitened weights takes the square of the number of samples.
    count = 2000
    u = 5.0 * (np.arange(count) + 0.5) / count
    signal = 1 - np.exp(-u) * (1 + u * (shape == "difference"))
    output = ChainOutput(Records(1e-10, 0j * u, signal * 1j), OutputNoise(white=1e-9))
    flat = ChainOutput(Records(1e-10, 0j * u, 0j * u + 1), OutputNoise(white=1e-9))
    got = project(receive(output, BOXCAR), rule).snr / project(receive(flat, BOXCAR), rule).snr
    # The midpoint rule leaves (5/2000)^2/24.
    validate(f"{rule} over steady, {shape}", sources.NORTH, ratio, got, rel=1e-6, card="D13")


def test_charge_readout(validate: Validate) -> None:
    needed = snr_for_error(1e-3)
    # Rounding of the card.
    validate("SNR for 99.9 %", sources.CONNORS, 6.180465, needed, rel=1e-7, card="D15")
    count, tau = 3000, 300e-9
    output = steady(count, tau / count, needed, quadratures=1)
    detector = Detector(weights="matched")
    error = split_assignment(output, detector, NOTHING, SURE).assignment_error
    validate("error in 300 ns", sources.CONNORS, 1e-3, error, rel=1e-9, card="D15")
    # SNR^2 grows along a straight line.
    squares = snr_over_time(receive(output, detector), "matched") ** 2
    got = float(np.interp(1.0, squares, tau / count * np.arange(1, count + 1)))
    quantity = "integration time for an SNR of 1"
    validate(quantity, sources.CONNORS, 7.853785e-09, got, "s", rel=1e-6, card="D15")


def test_snr_grows_with_the_root_of_time(validate: Validate) -> None:
    snr = snr_over_time(receive(steady(400, 1e-9, 8.0), BOXCAR), "boxcar")
    quantity = "SNR at a quarter of the time over that at the whole"
    validate(quantity, sources.NORTH, 0.5, snr[99] / snr[399], rel=1e-12)


def test_the_best_integration_time() -> None:
    """A steady signal with decay, against a minimum of the formula by scipy."""
    count, step, snr, t1 = 400, 5e-9, 9.0, 10e-6
    stop = count * step

    def error(tau: float) -> float:
        signal = snr * math.sqrt(tau / stop)
        rate = 1 / t1

        def part(x: float) -> float:
            return rate * tau * math.exp(-rate * tau * x) * float(ndtr(signal * (0.5 - x)))

        decayed = quad(part, 0, 1, epsabs=1e-13)[0]
        kept = math.exp(-rate * tau) * separation_error(signal)
        return (separation_error(signal) + decayed + kept) / 2

    wanted = minimize_scalar(
        error, bounds=(0.1 * stop, stop), method="bounded", options={"xatol": 1e-12}
    )
    scan = scan_integration(steady(count, step, snr), BOXCAR, relaxation(t1), SURE)
    # The least error is flat in the time, so that a sample more or less makes 1e-5 of it.
    assert scan.best_error == pytest.approx(wanted.fun, rel=2e-5)
    assert scan.best_time == pytest.approx(wanted.x, abs=1.01 * step)
    assert scan.best_error == scan.assignment_error.min()
    assert (np.diff(scan.times) > 0).all()
    for time, found in zip(scan.times[::20], scan.assignment_error[::20], strict=True):
        assert found == pytest.approx(error(time), rel=1e-4)
    assert scan.snr[-1] == pytest.approx(snr, rel=1e-12)


@pytest.mark.parametrize("prior", [0.1, 0.5, 0.8])
def test_the_best_threshold_for_a_prior(prior: float) -> None:
    """Likelihoods cross at the middle + sigma^2/distance ln((1 - p)/p) for equal Gaussians."""
    detector = Detector(weights="boxcar", threshold="optimal", prior_excited=prior)
    split = split_assignment(steady(100, 1e-9, 5.0), detector, NOTHING, SURE)
    wanted = 0.5 + math.log((1 - prior) / prior) / 25
    # Where a cost is least it says its place to the root of its own error only.
    assert split.threshold == pytest.approx(wanted, abs=1e-5)


def test_the_best_threshold_with_decay_lies_lower() -> None:
    t1 = relaxation(2e-6)
    output = steady(100, 1e-8, 5.0)
    mid = split_assignment(output, BOXCAR, t1, Preparation(0.02, 0.01))
    best = split_assignment(
        output, Detector(weights="boxcar", threshold="optimal"), t1, Preparation(0.02, 0.01)
    )
    assert best.threshold < mid.threshold
    assert best.assignment_error < mid.assignment_error
