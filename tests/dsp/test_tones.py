"""Oracle: an average over whole periods of a tone is zero, and of a constant the constant."""

import numpy as np
import pytest

from cosim.dsp.pulse import measure_pulse
from cosim.dsp.tones import own_tone
from cosim.errors import InputError, WaveformError
from cosim.waveform import Envelope, Waveform

CARRIER = 1e9
START, STOP = 50e-9, 250e-9


def envelope(*offsets: float) -> Envelope:
    """A pulse of one tone of 0.8 V at the carrier and one of 1 V at each offset."""
    dt = 0.5e-9
    t = dt * np.arange(601)
    inside = (t >= START) & (t <= STOP)
    tones = [np.exp(2j * np.pi * offset * t) for offset in offsets]
    return Envelope(0.0, dt, inside * np.sum([0.8 + 0j * t, *tones], axis=0), CARRIER)


@pytest.mark.parametrize("offsets", [(100e6,), (-40e6,), (20e6, 40e6, -60e6), (20e6, 33e6)])
def test_the_plateau_is_that_of_the_own_tone(offsets: tuple[float, ...]) -> None:
    found = own_tone(envelope(*offsets), offsets)
    # Two averages of 50 ns and 30 ns reach 40 ns in from either edge.
    part = (found.t > START + 41e-9) & (found.t < STOP - 41e-9)
    # A cubic spline of a tone of 100 MHz on 20 points per period is off by (2 pi/20)^4/384, and
    # by four times that in what its average leaves.
    assert np.abs(found.iq[part] - 0.8).max() < 1e-4


def test_edges_stand_where_they_were() -> None:
    found = own_tone(envelope(), (50e6,))
    size = np.abs(found.iq)
    crossings = found.t[np.flatnonzero(np.diff(np.signbit(size - 0.4)))]
    # To a sample and the half of one in which the pulse begins.
    assert crossings == pytest.approx([START, STOP], abs=0.75e-9)


def test_without_other_tones_nothing_changes() -> None:
    given = envelope()
    np.testing.assert_array_equal(own_tone(given, ()).iq, given.iq)


def test_tones_that_beat_say_how_they_are_told_apart() -> None:
    t = np.linspace(0.0, 300e-9, 24001)
    inside = (t >= START) & (t <= STOP)
    tones = np.cos(2 * np.pi * CARRIER * t) + np.cos(2 * np.pi * (CARRIER + 100e6) * t)
    with pytest.raises(WaveformError, match="could be measured") as caught:
        measure_pulse(Waveform(t, inside * tones), CARRIER)
    assert "[[spectator]]" in str(caught.value)


@pytest.mark.parametrize("offset", [0.0, float("nan"), float("inf")])
def test_an_offset_is_a_number(offset: float) -> None:
    with pytest.raises(InputError, match="offset of a tone"):
        own_tone(envelope(), (offset,))
