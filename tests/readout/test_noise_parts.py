"""Oracle: Johnson noise in closed form, of loads at 4 K in a pair and in both bands of a mixer."""

from pathlib import Path

import numpy as np
import pytest

from cosim.errors import CosimError
from cosim.readout import run_readout
from tests import sources
from tests.readout.benches import LINEAR, PAIR, bench, kelvin
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "readout"
NOISE = {"acts_on": "probe", "from": "netlist", "resistor_temperature": "4 K"}
FEW = {"shots": 1000, "records": 100, "gain": "10 dB", "noise_temperature": f"{kelvin(0.75)} K"}
ARRIVING = 10.0 * kelvin(0.75 + 0.5)  # K behind 10 dB, with the half quantum of vacuum
# No switch, so that the conversion is exact: half of the gain of 40 to either side.
MIXER = """ideal mixer
vin emf 0 dc 0
r0 emf in 50
rin in 0 50
vlo lo 0 sin(0 1 150meg)
b1 amp 0 v={40*v(in)*v(lo)}
r1 amp out 50 noisy=0
rl out 0 50 noisy=0
.end
"""
BASEBAND = {
    **FEW,
    "signal": "baseband",
    "intermediate_frequency": None,
    "output_frequency": None,
    "probe": None,
    "source": "vi",
    "source_q": "vq",
    "i": "v(i_out)",
    "q": "v(q_out)",
}


def test_both_methods_for_a_pair_in_baseband(tmp_path: Path, validate: Validate) -> None:
    """A load of I and one of Q: each has half of the noise power of a load at a carrier.

    Around a carrier 4 K are k 4 K to either side of it, which fall on one frequency of the pair.
    """
    steps = {"steps_per_period": None, "max_step": "1 ns"}
    found = {
        method: run_readout(
            bench(
                tmp_path, PAIR, noise=[{**NOISE, "method": method}], netlist=steps, readout=BASEBAND
            )
        )
        for method in ("auto", "injection")
    }
    still, noisy = found["auto"], found["injection"]
    assert still.noise_method == "stationary"
    assert "without transistors" in still.noise.reason
    validate(
        "noise temperature of two loads at 4 K in a pair in baseband, by stationary",
        sources.JOHNSON_NYQUIST,
        2.0,
        still.noise_temperature,
        "K",
        # ngspice's Boltzmann constant is 3.5e-7 off; both have it from the same densities.
        rel=1e-6,
    )
    assert still.noise.devices["arriving"] == pytest.approx(ARRIVING / (ARRIVING + 2.0), rel=1e-6)
    # Flat, for nothing in the deck depends on the frequency.
    np.testing.assert_allclose(still.noise.density, still.noise.density[0], rtol=1e-6)
    assert noisy.noise_method == "injection"
    assert noisy.noise_temperature_error < 0.2 * 2.0
    assert noisy.noise_temperature == pytest.approx(2.0, abs=4.0 * noisy.noise_temperature_error)
    # SNR goes with the root of the density.
    assert noisy.snr == pytest.approx(still.snr, rel=2.0 * noisy.noise.relative_error)


def test_what_arrives_in_the_image_band_is_the_netlists(tmp_path: Path, validate: Validate) -> None:
    """200 MHz and 100 MHz reach 50 MHz alike: the load counts twice, and what arrives once more."""
    readout = {**FEW, "output_frequency": "50 MHz", "window": ["100 ns", "290 ns"]}
    result = run_readout(bench(tmp_path, MIXER, noise=[NOISE], readout=readout))
    assert result.noise_method == "injection"
    validate(
        "noise temperature of an ideal mixer with a load at 4 K, of both bands",
        sources.FRIIS,
        2.0 * 4.0 + ARRIVING,
        result.noise_temperature,
        "K",
        abs=4.0 * result.noise_temperature_error,
    )
    assert result.noise_temperature_error < 0.2 * (8.0 + ARRIVING)


def test_noise_that_bends_the_chain_is_named(tmp_path: Path) -> None:
    # 0.4 mV rms of noise arrive, and a tanh of 0.2 mV holds the noise of the load back as well.
    deck = LINEAR.replace("e1 amp 0 in 0 20", "b1 amp 0 v={20*200u*tanh(v(in)/200u)}")
    noise = [{**NOISE, "method": "injection", "seeds": 2, "resistor_temperature": "100000 K"}]
    result = run_readout(bench(tmp_path, deck, noise=noise, readout={**FEW, "gain": "60 dB"}))
    (words,) = [text for text in result.warnings if "do not add up" in text]
    assert "differ from their sum" in words


@pytest.mark.parametrize(
    ("method", "more", "words"),
    [
        ("frozen", {}, "goes with one output at its 'output_frequency'"),
        ("stationary", {"output_frequency": "200 MHz"}, "or with outputs in baseband"),
    ],
)
def test_what_is_refused(tmp_path: Path, method: str, more: dict[str, str], words: str) -> None:
    steps = {"steps_per_period": None, "max_step": "0.25 ns"}
    noise = [{**NOISE, "method": method}]
    with pytest.raises(CosimError) as caught:
        run_readout(bench(tmp_path, PAIR, noise=noise, netlist=steps, readout={**BASEBAND, **more}))
    assert words in str(caught.value)
