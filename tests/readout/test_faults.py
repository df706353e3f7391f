"""Oracle: the wrong inputs of a readout, each with the words that it must find."""

from pathlib import Path
from typing import Any

import pytest

from cosim.checks import check_testbench
from cosim.errors import CosimError
from cosim.readout import run_readout
from tests.readout.benches import LINEAR, bench, kelvin

pytestmark = pytest.mark.ngspice
FEW = {"shots": 1000, "records": 100}
# A tanh of 1 mV: the answers of some 0.05 mV pass, those of |1> in the test below do not.
BENT = LINEAR.replace("e1 amp 0 in 0 20", "b1 amp 0 v={20*1m*tanh(v(in)/1m)}")


@pytest.mark.parametrize(
    ("tables", "deck", "words"),
    [
        ({"readout": {"source": "vnone"}}, LINEAR, "vnone"),
        ({"readout": {"window": ["20 ns", "2 us"]}}, LINEAR, "does not lie within the run"),
        (
            {
                "resonator": {"start": "50 ns", "length": "100 ns"},
                "readout": {"window": ["0 ns", "40 ns"]},
            },
            LINEAR,
            "0 ns to 40 ns is over before the state counts, from 'start' at 50 ns on",
        ),
        ({"readout": {"window": ["20 ns", "460 ns"]}}, LINEAR, "half of the demodulator's filter"),
        (
            {"readout": {"output_frequency": "5 GHz"}},
            LINEAR,
            "key 'output_frequency': wanted at most 800 MHz, 20 time steps of 62.5 ps in a period "
            "(half the rate of the steps, 8 GHz, is the end of what they can tell), got 5 GHz",
        ),
        (
            {"readout": {"output_frequency": "20 MHz"}},
            LINEAR,
            "key 'window': wanted at least 425.1 ns, half of the demodulator's filter at 20 MHz, "
            "got 400 ns, 8 of its periods",
        ),
        ({"readout": {"probe": "v(nowhere)"}}, LINEAR, "key 'probe'"),
        ({"readout": {"probe": "i(vin)"}}, LINEAR, "wanted a voltage"),
        ({"resonator": {"length": "1 us"}}, LINEAR, "behind the run's end"),
        (
            {"resonator": {"photons": None, "power": "-20 dBm"}},
            LINEAR,
            "photons into the resonator, wanted at most 4e+06",
        ),
        (
            {
                "resonator": {
                    "qubit_frequency": "4.5 GHz",
                    "coupling": "60 MHz",
                    "anharmonicity": "-300 MHz",
                }
            },
            LINEAR,
            "turn its sign",
        ),
        (
            {"readout": {"adc_bits": 8, "adc_full_scale": "1 V", "adc_rate": "1 MHz"}},
            LINEAR,
            "window",
        ),
        ({"noise": [{"acts_on": "phase", "deviation": "1 deg"}]}, LINEAR, "one table"),
        (
            {"noise": [{"acts_on": "probe", "from": "netlist"}]},
            LINEAR.replace("r0 emf in 50", "r0 emf in 75"),
            "75 ohm",
        ),
        (
            {"noise": [{"acts_on": "probe", "from": "netlist"}]},
            LINEAR.replace("r0 emf in 50", "l0 emf in 1n"),
            "one resistor behind the source",
        ),
    ],
)
def test_what_is_refused(tmp_path: Path, tables: dict[str, Any], deck: str, words: str) -> None:
    tables = {name: dict(table) if name != "noise" else table for name, table in tables.items()}
    tables["readout"] = {**FEW, **tables.get("readout", {})}
    with pytest.raises(CosimError) as caught:
        run_readout(bench(tmp_path, deck, **tables))
    assert words in f"{caught.value} {caught.value.hint}"


def test_a_chain_that_saturates_for_one_state_is_named(tmp_path: Path) -> None:
    # At the resonance for |0> the resonator in transmission answers that state alone.
    tables = {
        "resonator": {
            "geometry": "transmission",
            "kappa_in": "1 MHz",
            "kappa_out": "4 MHz",
            "chi": "10 MHz",
            "drive_frequency": "5.99 GHz",
        },
        "readout": {**FEW, "gain": "90 dB", "t1": "20 us", "decay_times": 2},
    }
    result = run_readout(bench(tmp_path, BENT, **tables))
    (words,) = [text for text in result.warnings if "saturates" in text]
    assert "for |0> more than for |1>" in words
    assert result.errors.saturation != 0.0


def test_less_noise_than_there_can_be_is_named(tmp_path: Path) -> None:
    result = run_readout(bench(tmp_path, quanta=0.2, readout=FEW))
    (words,) = [text for text in result.warnings if "quanta" in text]
    assert "0.2 quanta" in words
    assert result.added_noise_quanta == pytest.approx(0.2, rel=1e-3)
    assert kelvin(1.0) == pytest.approx(0.288, rel=1e-2)


def test_a_converter_too_coarse_for_the_noise_is_named(tmp_path: Path) -> None:
    """Of 8 bits over 50 V a step is 0.2 V, where the noise is of millivolts at most."""
    adc = {"adc_bits": 8, "adc_full_scale": "50 V", "adc_rate": "100 MHz"}
    result = run_readout(bench(tmp_path, readout={**FEW, **adc}))
    (words,) = [text for text in result.warnings if "a step of the converter is" in text]
    assert "of the noise of a sample, so that rounding is not like noise" in words
    assert result.split.lsb_over_sigma > 100.0


def test_the_check_refuses_noise_that_is_not_the_netlists(tmp_path: Path) -> None:
    made = bench(tmp_path, noise=[{"acts_on": "phase", "deviation": "1 deg"}])
    (tmp_path / "testbench.toml").write_text(made.to_toml(), encoding="utf-8")
    with pytest.raises(CosimError, match="a readout takes one table"):
        check_testbench(tmp_path / "testbench.toml")
