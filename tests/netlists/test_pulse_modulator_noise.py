"""Oracle: linearity, superposition, and the square root of the noise temperature."""

from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.injection import device_noise
from cosim.circuit.netlist import load_deck, with_parameters, with_terminations
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
    assert len(whole.devices) == 64
    assert whole.left_out == ()
    size = np.std(whole.samples[PROBE])
    halves = [
        device_noise(pulse, 1, NoiseSettings(COLD), devices=part).samples[PROBE]
        for part in (whole.devices[::2], whole.devices[1::2])
    ]
    warm = device_noise(pulse, 1, NoiseSettings(NoiseTemperatures(42.0, 42.0, 42.0)))
    # Measured 0.3 % and 0.7 %: products of noise with itself in the buffers' edges, which grow
    # with the square of its size.
    assert np.std(sum(halves) - whole.samples[PROBE]) < 0.01 * size
    assert np.std(warm.samples[PROBE] / np.sqrt(10) - whole.samples[PROBE]) < 0.02 * size
