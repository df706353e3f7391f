"""Oracle: the tables that the README documents for a testbench without a circuit."""

import math
from typing import Any

import pytest

import cosim
from cosim.errors import TestbenchError
from cosim.specification.request import read_request
from tests.specification.benches import SPIN, SQUARE, design
from tests.specification.test_readout_specification import READOUT, RESONATOR

SPECIFY: dict[str, Any] = {"target": 1e-3, "pulse": SQUARE, "jitter": {}}


def test_quantities_are_in_si_units() -> None:
    made = design(
        {
            "phase": {"value": "1 deg", "weight": 2.0},
            "wideband": {"value": "2 nV/sqrt(Hz)", "temperature": "4 K"},
            "image": {"value": "-40 dBc", "power": {"a": "2 mW", "n": 1.5, "at": "-50 dBc"}},
        },
        qubit={"t1": "30 us"},
    )
    assert made.qubit is not None
    assert made.qubit.t1 == 30e-6
    request = read_request(made.studies["specify"], "bench.toml")
    assert request.pulse.duration == 50e-9
    assert request.blocks["phase"].value == pytest.approx(math.radians(1.0))
    assert request.blocks["phase"].weight == 2.0
    assert request.blocks["wideband"].value == pytest.approx(4e-18)
    assert request.powers["image"] == (2e-3, 1.5, pytest.approx(10**-2.5))


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({"qubit": SPIN, "specify": SPECIFY}, r"the table \[gate\] is missing"),
        ({"resonator": RESONATOR, "gate": {"target": "x"}, "specify": SPECIFY}, "resonator"),
        ({"readout": READOUT, "specify": {"target": 0.01}}, r"\[resonator\] is missing"),
        (
            {"qubit": SPIN, "gate": {"target": "x"}, "drive": {}, "specify": SPECIFY},
            "unknown key 'drive'",
        ),
        ({"qubit": SPIN, "gate": {"target": "x"}}, r"\[drive\] is missing"),
        ({"qubit": SPIN, "gate": {"target": "x"}, "specify": 3}, r"wanted a table \[specify\]"),
    ],
)
def test_tables_that_do_not_make_a_testbench(tables: dict[str, Any], message: str) -> None:
    with pytest.raises(TestbenchError, match=message):
        cosim.make_testbench(tables)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"pulse": {"shape": "square"}}, "'duration' is missing"),
        ({"pulse": {**SQUARE, "drag": 0.5}}, "no slope"),
        ({"pulse": {**SQUARE, "edge": "1 ns"}}, "goes with shape"),
        (
            {"pulse": {"shape": "raised cosine", "duration": "10 ns", "edge": "6 ns"}},
            "at most half of the duration",
        ),
        ({"frame": "laboratory"}, "frame"),
        ({"samples": 3}, "64 to 100000"),
        ({"phase_noise": {}}, "'low' is missing"),
        ({"phase_noise": {"low": "1 MHz", "high": "1 kHz"}}, "less than 'high'"),
        (
            {"phase_noise": {"low": "1 Hz", "points": [["1 kHz", "-90 dBc/Hz"]]}},
            "at least two offsets",
        ),
        ({"dac_bits": {}}, "'rate' is missing"),
        ({"image": {"value": "3 dBc"}}, "at most 0 dBc"),
        ({"amplitude": {"power": "much"}}, "wanted a table"),
    ],
)
def test_what_is_refused_of_the_table(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(TestbenchError, match=message):
        read_request({**SPECIFY, **changes}, "bench.toml")
