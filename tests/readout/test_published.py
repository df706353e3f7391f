"""Oracles: published numbers of dispersive readout, from the resonator through ngspice."""

from pathlib import Path
from typing import Any

import pytest

from cosim.readout import run_readout
from tests import sources
from tests.readout.benches import PAIR, bench, kelvin
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "readout"

# Half a sample of 1 ns at either end of the window, where the record's cells and the pulse's
# edge differ from the continuous formula: 400 samples of a signal that begins with zero.
CLOSE = 1e-3


@pytest.mark.parametrize("signal", ["if", "baseband"])
def test_dispersive_readout_with_ring_up(tmp_path: Path, validate: Validate, signal: str) -> None:
    """eta = 0.4 is 1/(1 + 2 n) with n = 0.75 quanta added by an amplifier that keeps the phase.

    Source: sources.GAMBETTA_TRAJECTORY, boxcar from the start of a step drive.
    """
    more: dict[str, Any] = {}
    deck = None
    if signal == "baseband":
        deck = PAIR
        more = {
            "netlist": {"steps_per_period": None, "max_step": "0.2 ns"},
            "readout": {
                "signal": "baseband",
                "intermediate_frequency": None,
                "output_frequency": None,
                "probe": None,
                "source": "vi",
                "source_q": "vq",
                "i": "v(i_out)",
                "q": "v(q_out)",
            },
        }
    made = bench(tmp_path, deck, **more) if deck else bench(tmp_path, **more)
    result = run_readout(made)
    source = sources.GAMBETTA_TRAJECTORY
    name = f"readout through ngspice, {signal}"
    validate(f"SNR of a {name}", source, 5.403141, result.snr, rel=CLOSE, card="D09")
    validate(
        f"error of a {name}", source, 0.003450642, result.assignment_error, rel=1e-2, card="D09"
    )
    assert result.errors.separation == pytest.approx(result.assignment_error, rel=1e-12)
    assert result.added_noise_quanta == pytest.approx(0.75, rel=CLOSE)


def test_steady_state_and_added_noise(tmp_path: Path, validate: Validate) -> None:
    """The window begins when the field stands: exp(-kappa t/2) is 2e-7 after 1 us.

    Source: sources.CLERK: SNR times 1/sqrt(1 + 2 n).
    """
    more = {
        "netlist": {"stop": "1.45 us"},
        "resonator": {"start": "0 ns", "length": "1.4 us"},
        "readout": {"window": ["1 us", "1.4 us"]},
    }
    result = run_readout(bench(tmp_path, quanta=6.95, **more))
    validate(
        "SNR of a steady readout with 6.95 quanta added, through ngspice",
        sources.CLERK,
        3.050618,
        result.snr,
        rel=CLOSE,
        card="D18",
    )


def test_measurement_dephases(tmp_path: Path, validate: Validate) -> None:
    result = run_readout(bench(tmp_path, resonator={"photons": 0.5}))
    validate(
        "rate of dephasing by the measurement in a readout's result",
        sources.GAMBETTA_DEPHASING,
        4.333231e6,
        result.dephasing_rate,
        "1/s",
        rel=1e-6,
        card="D10",
    )


@pytest.mark.full
def test_decay_during_the_readout(tmp_path: Path, validate: Validate) -> None:
    """Noise is small and the field stands: a decay in the first half of the window is an error.

    Source: sources.GAMBETTA_PROTOCOLS. The field follows a decay within 2/kappa = 6.4 ns, of a
    window of 500 ns: an error of 2 %, for a decay is seen later by that.
    """
    more = {
        "netlist": {"stop": "1.05 us"},
        "resonator": {
            "kappa_in": "50 MHz",
            "chi": "10 MHz",
            "start": "0 ns",
            "length": "1 us",
            "photons": 500.0,
        },
        "readout": {"window": ["500 ns", "1 us"], "t1": "50 us", "decay_times": 16},
    }
    result = run_readout(bench(tmp_path, **more))
    # From the start of the pulse on: 500 ns before the window, and half of it.
    validate(
        "error by decay in a readout through ngspice",
        f"{sources.GAMBETTA_PROTOCOLS}; before the window a decay is an error at all times",
        0.5 * (1.0 - 2.718281828459045 ** (-750e-9 / 50e-6)),
        result.errors.decay,
        rel=0.02,
        card="D12",
    )


@pytest.mark.parametrize(
    "method", ["stationary", pytest.param("injection", marks=pytest.mark.full)]
)
def test_noise_temperature_of_a_matched_resistor(
    tmp_path: Path, validate: Validate, method: str
) -> None:
    """A matched load at 4 K adds its own temperature to what arrives, as Friis has it.

    The rest of the netlist is quiet. What arrives behind 30 dB is 360 K, and 8 noisy runs of all of
    it know its density within 16 %: 57 K.
    """
    noise = {"acts_on": "probe", "from": "netlist", "method": method}
    noise["resistor_temperature"] = "4 K"
    readout = {"gain": "30 dB", "noise_temperature": f"{kelvin(0.75)} K"}
    result = run_readout(bench(tmp_path, noise=[noise], readout=readout))
    assert result.noise_method == method
    # Of the stationary density what is left is rounding; of noisy runs four standard errors.
    bar = max(1e-9, result.noise_temperature_error)
    assert bar < 0.2 * 4.0
    validate(
        f"noise temperature of a matched load at 4 K, by {method}",
        sources.JOHNSON_NYQUIST,
        4.0,
        result.noise_temperature,
        "K",
        abs=4.0 * bar,
    )
    validate(
        f"quanta added by an amplifier and a load at 4 K behind 30 dB, by {method}",
        sources.FRIIS,
        0.75 + 0.004 / kelvin(1.0),
        result.added_noise_quanta,
        abs=4.0 * bar * 1e-3 / kelvin(1.0),
    )
