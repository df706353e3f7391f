"""Oracles: counting of all words, and numpy's interpolation of the pulses one by one."""

import itertools

import numpy as np
import pytest

from cosim.dsp.trains import (
    covering_bits,
    hold_samples,
    pulse_span,
    random_bits,
    repeat_shape,
    sample_waveform,
)
from cosim.errors import WaveformError
from cosim.waveform import Waveform

PULSE = Waveform(np.array([1.0, 2.0, 4.0, 5.0]) * 1e-9, np.array([0.1, 0.6, 0.6, 0.1]))


@pytest.mark.parametrize("order", [1, 2, 3, 6])
def test_every_slot_meets_every_history_once(order: int) -> None:
    bits = covering_bits(order)
    words = [bits[at : at + order + 1] for at in range(len(bits) - order)]
    assert sorted(words) == sorted(itertools.product((0, 1), repeat=order + 1))


def test_histories_have_a_length() -> None:
    with pytest.raises(WaveformError, match="1 to 8 slots can be covered, got 9"):
        covering_bits(9)


def test_random_bits_are_those_of_their_seed() -> None:
    assert random_bits(200, 3) == random_bits(200, 3)
    assert random_bits(200, 3) != random_bits(200, 4)
    # 200 fair bits lie within four standard deviations, 28, of a hundred ones.
    assert abs(sum(random_bits(200, 3)) - 100) < 28


def test_a_train_is_the_sum_of_its_pulses() -> None:
    factors = (0.0, 1.0, -0.5, 0.0, 2.0)
    train = repeat_shape(PULSE, factors, 4e-9)
    t = np.linspace(0.0, 30e-9, 3001)
    wanted = 0.1 + sum(
        factor * (np.interp(t - n * 4e-9, PULSE.t, PULSE.v) - 0.1)
        for n, factor in enumerate(factors)
    )
    # Straight lines through the same points: rounding only.
    assert np.interp(t, train.t, train.v) == pytest.approx(wanted, abs=1e-12)
    assert pulse_span(PULSE) == (1e-9, 5e-9)


def test_a_pulse_fits_its_slot_and_comes_back() -> None:
    with pytest.raises(WaveformError, match=r"lasts 4 ns.*longer than the spacing of 3.9 ns"):
        repeat_shape(PULSE, (1.0,), 3.9e-9)
    with pytest.raises(WaveformError, match="does not come back to its rest"):
        pulse_span(Waveform(PULSE.t[:3], PULSE.v[:3]))
    with pytest.raises(WaveformError, match="no pulse to repeat"):
        pulse_span(Waveform(PULSE.t, np.ones(4)))


def test_a_converter_holds_its_samples() -> None:
    samples = sample_waveform(PULSE, 2e9, 12)
    assert samples == pytest.approx(np.interp(np.arange(12) * 0.5e-9, PULSE.t, PULSE.v))
    held = hold_samples(samples, 2e9, 0.1e-9, "V")
    # Behind the edge a sample stands until the next tick.
    for part in (0.2, 0.6, 0.99):
        t = (np.arange(12) + part) * 0.5e-9
        assert np.interp(t, held.t, held.v) == pytest.approx(samples, abs=1e-12)
    with pytest.raises(WaveformError, match="an edge takes more than 0 s and at most the 5e-10 s"):
        hold_samples(samples, 2e9, 0.6e-9, "V")
