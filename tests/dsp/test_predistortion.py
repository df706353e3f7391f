"""Oracles: the exact inverse of a sampled pole, numpy's lstsq, scipy's filters and normal law."""

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import norm

from cosim.dsp.predistortion import (
    band_limited,
    factorise,
    filter_samples,
    superpose,
    unit_tap,
)
from cosim.errors import WaveformError
from cosim.waveform import Waveform
from tests.validation import Validate

TOPIC = "signal"
RNG = np.random.default_rng(5)


def test_two_taps_undo_a_sampled_pole(validate: Validate) -> None:
    """y[n] = a y[n-1] + (1-a) x[n] has the inverse x[n] = (y[n] - a y[n-1])/(1-a)."""
    pole = 0.7
    played = RNG.normal(size=60)
    response = lfilter([1.0 - pole], [1.0, -pole], played)
    fit = factorise(response.astype(complex), 2, 1)
    design = fit.solve(played.astype(complex), unit_tap(2, 0.0), 0.0)
    source = "inverse of a first-order recursion, elementary"
    # Rounding of a well-conditioned fit.
    validate("tap 0 of the inverse of a pole", source, 1.0 / 0.3, design.taps[0], rel=1e-12)
    validate("tap 1 of the inverse of a pole", source, -0.7 / 0.3, design.taps[1], rel=1e-12)
    assert design.residual < 1e-7  # The square of the residual is a difference of rounded sums.
    # A longer filter needs no further tap, and what it makes of new samples is these again.
    longer = factorise(response.astype(complex), 5, 1).solve(
        played.astype(complex), unit_tap(5, 0.0), 0.0
    )
    assert longer.taps == pytest.approx([*design.taps, 0.0, 0.0, 0.0], abs=1e-9)
    fresh = np.append(0.0, RNG.normal(size=40))
    undone = lfilter([1.0 - pole], [1.0, -pole], filter_samples(fresh, design.taps))
    assert undone == pytest.approx(fresh, abs=1e-10)


@pytest.mark.parametrize("regularisation", [0.0, 1e-3, 0.3])
def test_a_complex_response_gets_the_taps_of_numpys_least_squares(regularisation: float) -> None:
    response = RNG.normal(size=90) + 1j * RNG.normal(size=90)
    target = RNG.normal(size=90) + 1j * RNG.normal(size=90)
    count, stride = 6, 4
    columns = np.array([np.append(np.zeros(k * stride), response)[:90] for k in range(count)]).T
    stacked = np.vstack((columns.real, columns.imag))
    fit = factorise(response, count, stride)
    largest = np.linalg.norm(stacked, 2)
    ridge = regularisation * largest * np.eye(count)
    prior = unit_tap(count, 1.5)
    wanted, *_ = np.linalg.lstsq(
        np.vstack((stacked, ridge)),
        np.concatenate((target.real, target.imag, ridge @ prior)),
        rcond=None,
    )
    design = fit.solve(target, prior, regularisation)
    assert design.taps == pytest.approx(wanted, abs=1e-12)
    missed = np.linalg.norm(columns @ wanted - target) / np.linalg.norm(target)
    assert design.residual == pytest.approx(missed, rel=1e-9)
    assert design.condition == pytest.approx(np.linalg.cond(stacked), rel=1e-9)


def test_an_ill_conditioned_fit_is_named() -> None:
    """A response of one sine has two directions only, whatever the number of taps."""
    response = np.sin(2.0 * np.pi * 0.05 * np.arange(400)).astype(complex)
    fit = factorise(response, 1, 1)
    assert fit.solve(response, unit_tap(1, 0.0), 0.0).taps == pytest.approx([1.0])
    flat = factorise(np.append(np.zeros(399), 1.0).astype(complex), 3, 1)
    with pytest.raises(WaveformError, match="3 taps is ill-conditioned"):
        flat.solve(response, unit_tap(3, 0.0), 0.0)
    # Regularised, the directions without a response stay with plain delay.
    held = flat.solve(response, unit_tap(3, 1.0), 1e-3)
    assert held.rank == 1
    assert held.taps[1:] == pytest.approx([1.0, 0.0])


def test_taps_last_no_longer_than_the_record() -> None:
    with pytest.raises(WaveformError, match="11 taps last longer than the record of 10 samples"):
        factorise(np.ones(40, dtype=complex), 11, 4)
    with pytest.raises(WaveformError, match="does not respond"):
        factorise(np.zeros(40, dtype=complex), 2, 4)


def test_samples_are_filtered_about_their_rest() -> None:
    samples = 0.3 + np.append(0.0, RNG.normal(size=50))
    taps = RNG.normal(size=7)
    assert filter_samples(samples, taps) == pytest.approx(
        0.3 + lfilter(taps, [1.0], samples - 0.3), abs=1e-13
    )


def test_copies_add_up_as_a_filter_does() -> None:
    response = RNG.normal(size=64) + 1j * RNG.normal(size=64)
    weights = RNG.normal(size=9)
    spread = np.zeros(33)
    spread[::4] = weights
    wanted = lfilter(spread, [1.0], response)
    assert superpose(response, weights.tolist(), 4) == pytest.approx(wanted, abs=1e-12)


def test_delay_lies_between_two_taps() -> None:
    assert unit_tap(4, 1.25) == pytest.approx([0.0, 0.75, 0.25, 0.0])
    assert unit_tap(3, 9.0) == pytest.approx([0.0, 0.0, 1.0])


def test_the_ideal_line_is_gaussian(validate: Validate) -> None:
    bandwidth = 200e6
    sigma = np.sqrt(np.log(2.0)) / (2.0 * np.pi * bandwidth)
    t = np.linspace(-5e-9, 5e-9, 401)
    # A step so short, 1e-6 of sigma, that it is one.
    step = Waveform(np.array([-1e-15, 1e-15]), np.array([0.2, 1.2]))
    wanted = 0.2 + norm.cdf(t / sigma)
    # Two lines of slope 5e14 V/s cancel: their rounding, 1e-16 x 5e14 x 5e-9, is 2.5e-10 V.
    assert band_limited(step, t, bandwidth) == pytest.approx(wanted, abs=1e-8)
    # A triangle of 2 ps has the filter's own spectrum.
    pulse = Waveform(np.array([-1e-12, 0.0, 1e-12]), np.array([0.0, 1.0, 0.0]))
    wide = np.linspace(-20e-9, 20e-9, 4001)
    shape = band_limited(pulse, wide, bandwidth)
    ratio = np.sum(shape * np.cos(2.0 * np.pi * bandwidth * wide)) / np.sum(shape)
    validate(
        "Gaussian filter at its corner",
        "definition of the -3 dB frequency",
        float(np.sqrt(0.5)),
        float(ratio),
        rel=1e-6,  # The triangle itself is lower by (2 pi f 1 ps)^2/12, 1.3e-7, and cancellation.
    )
