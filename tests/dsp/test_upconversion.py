"""Oracle: the definition v = I cos(2 pi f t) - Q sin(2 pi f t), and demodulation back."""

import numpy as np
import pytest

from cosim.dsp.demodulation import demodulate
from cosim.dsp.upconversion import upconvert
from cosim.errors import WaveformError
from cosim.waveform import Waveform

CARRIER = 5e9


def pair() -> tuple[Waveform, Waveform]:
    """A Gaussian and its scaled derivative on a coarse, uneven grid of about 50 ps."""
    t = np.sort(np.concatenate([np.arange(0, 40e-9, 50e-12), np.arange(10e-9, 11e-9, 17e-12)]))
    t = np.unique(np.append(t, 40e-9))
    shape = np.exp(-(((t - 20e-9) / 5e-9) ** 2))
    return Waveform(t, 0.3 * shape), Waveform(t, -0.1 * (t - 20e-9) / 5e-9 * shape)


def test_the_wave_is_that_of_the_definition() -> None:
    i, q = pair()
    wave = upconvert(i, q, CARRIER)
    shape = np.exp(-(((wave.t - 20e-9) / 5e-9) ** 2))
    phase = 2 * np.pi * CARRIER * wave.t
    wanted = 0.3 * shape * np.cos(phase) + 0.1 * (wave.t - 20e-9) / 5e-9 * shape * np.sin(phase)
    # A cubic spline through samples of a Gaussian, 100 of them per standard width: 1e-8.
    assert np.abs(wave.v - wanted).max() < 1e-8
    assert wave.t[0] == 0
    assert wave.t[-1] == i.t[-1]


def test_demodulation_gives_the_pair_back() -> None:
    i, q = pair()
    envelope = demodulate(upconvert(i, q, CARRIER), CARRIER)
    inside = (envelope.t > 5e-9) & (envelope.t < 35e-9)
    wanted = np.interp(envelope.t, i.t, i.v) + 1j * np.interp(envelope.t, q.t, q.v)
    # The oracle is linear between samples 50 ps apart: (50 ps/5 ns)^2/8 x 2 x 0.3 V = 8e-6 V.
    assert np.abs(envelope.iq - wanted)[inside].max() < 1e-5


def test_without_q() -> None:
    i, q = pair()
    zero = Waveform(q.t, 0 * q.v)
    assert np.array_equal(upconvert(i, None, CARRIER).v, upconvert(i, zero, CARRIER).v)


def test_pairs_that_do_not_fit() -> None:
    i, q = pair()
    with pytest.raises(WaveformError, match="I is in V and Q in A"):
        upconvert(i, Waveform(q.t, q.v, "A"), CARRIER)
    with pytest.raises(WaveformError, match="at least one carrier period"):
        upconvert(i, Waveform(q.t + 39.9e-9, q.v), CARRIER)
