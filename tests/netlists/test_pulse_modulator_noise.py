"""Oracle: linearity, superposition, and ngspice's `.noise` where the deck does not switch."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.deck import SourceLine
from cosim.circuit.injection import device_noise
from cosim.circuit.netlist import load_deck, with_parameters, with_terminations
from cosim.circuit.noise import NoiseRequest, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.stationarity import check_stationarity

pytestmark = [pytest.mark.ngspice, pytest.mark.full]

DECK = Path(__file__).parents[2] / "netlists" / "pulse_modulator" / "pulse_modulator.cir"
STEP = 1 / (80 * 6.2e9)
PROBE = "v(rf_p) - v(rf_n)"
COLD = NoiseTemperatures(4.2, 4.2, 4.2)


@pytest.fixture(scope="module")
def pulse() -> CleanRun:
    """Give the clean run of a short pulse from 2 ns on."""
    deck = with_terminations(load_deck(str(DECK)), ("rf_p", "rf_n"), 50.0)
    deck = with_parameters(deck, {"t_start": 2e-9, "t_stop": 6e-9, "c_edge": 60e-15})
    return clean_run(deck, TransientRequest(stop=6e-9, step=STEP), [PROBE])


def test_it_is_not_stationary(pulse: CleanRun) -> None:
    found = check_stationarity(pulse, 2e-9, 6e-9)
    assert not found.stationary
    assert {f"m.xmix.m{k}" for k in (1, 2, 3, 4)} <= set(found.breaking)


def test_noise_is_linear_and_adds_up(pulse: CleanRun) -> None:
    whole = device_noise(pulse, 1, NoiseSettings(COLD))
    assert len(whole.devices) == 62
    assert whole.left_out == ()
    size = np.std(whole.samples[PROBE])
    halves = [
        device_noise(pulse, 1, NoiseSettings(COLD), devices=part).samples[PROBE]
        for part in (whole.devices[::2], whole.devices[1::2])
    ]
    warm = device_noise(pulse, 1, NoiseSettings(NoiseTemperatures(42.0, 42.0, 42.0)))
    # Measured 1.2 % and 2.7 %, of the power 1e-4 and 7e-4: products of noise with itself in the
    # buffers' edges, and what Newton's iteration leaves, which at a tenth of the temperature makes
    # 2.3 % of the first.
    assert np.std(sum(halves) - whole.samples[PROBE]) < 0.02 * size
    assert np.std(warm.samples[PROBE] / np.sqrt(10) - whole.samples[PROBE]) < 0.04 * size


def test_at_rest_it_is_that_of_small_signals() -> None:
    deck = with_terminations(load_deck(str(DECK)), ("rf_p", "rf_n"), 50.0)
    deck = with_parameters(deck, {"lo_on": 0.0, "t_start": 1e-6, "t_stop": 2e-6})
    # The deck has no source with an ac value, which `.noise` asks for: one that touches nothing.
    idle = [SourceLine("vidle idle 0 dc 0 ac 1", "", 0), SourceLine("cidle idle 0 1f", "", 0)]
    deck = replace(deck, lines=(*deck.lines, *idle))
    request = NoiseRequest("v(rf_p,rf_n)", "vidle", 1e9, 40e9, 100, by_device=True)
    small = simulate_noise(deck, request)
    stop, settled, seeds = 24e-9, 4e-9, 3
    run = clean_run(deck, TransientRequest(stop=stop, step=STEP), [PROBE])
    assert check_stationarity(run, settled, stop).stationary
    even = np.arange(settled, stop, STEP)
    window = np.hanning(even.size)
    f = np.fft.rfftfreq(even.size, STEP)
    band = (f > 2e9) & (f < 30e9)
    wanted = np.exp(
        np.interp(np.log(f[band]), np.log(small.frequency), np.log(small.output_density))
    )
    ratios = []
    for seed in range(seeds):
        # The formula of level 1, so that both ways have the same densities.
        noise = device_noise(run, seed, NoiseSettings(channel="transconductance"))
        values = np.interp(even, noise.time, noise.samples[PROBE])
        density = 2 * STEP * np.abs(np.fft.rfft(values * window)) ** 2 / np.sum(window**2)
        ratios.append(density[band] / wanted)
    # Four standard deviations of a mean of exponential numbers, of which a Hann window makes
    # neighbours alike and the variance of the mean 35/18 times as large; and 2 % for the
    # trapezoidal rule and straight lines between time points at 30 GHz.
    bound = 4 * np.sqrt(35 / 18 / (seeds * np.count_nonzero(band))) + 0.02
    assert np.mean(ratios) == pytest.approx(1.0, abs=bound)
