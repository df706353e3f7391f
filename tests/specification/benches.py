"""Testbenches of specifications, and the pulses and curves behind them."""

import math
from typing import Any

import cosim
from cosim.quantum.qubit import Qubit
from cosim.specification.building import AnyCurve, make_curves
from cosim.specification.pulse import IdealPulse, make_pulse
from cosim.specification.request import PulseTable, Request, read_request
from cosim.testbench import DesignBench

SPIN = {"kind": "spin", "frequency": "6 GHz", "rabi_per_volt": "85 MHz/V"}
TRANSMON = {
    "kind": "transmon",
    "levels": 3,
    "frequency": "5 GHz",
    "anharmonicity": "-300 MHz",
    "rabi_per_volt": "100 GHz/V",
}
SQUARE = {"shape": "square", "duration": "50 ns"}
RABI_PER_VOLT = 85e6
DURATION = 50e-9


def design(
    blocks: dict[str, dict[str, Any]],
    *,
    target: float = 1e-4,
    qubit: dict[str, Any] | None = None,
    gate: str = "x",
    pulse: dict[str, Any] | None = None,
    **own: Any,
) -> DesignBench:
    """Make a testbench of a gate without a circuit; `own` are further keys of [specify]."""
    tables = {
        "qubit": {**SPIN, **(qubit or {})},
        "gate": {"target": gate},
        "specify": {"target": target, "pulse": pulse or SQUARE, **own, **blocks},
    }
    bench = cosim.make_testbench(tables)
    assert isinstance(bench, DesignBench)
    return bench


def request_of(blocks: dict[str, dict[str, Any]], **own: Any) -> Request:
    """Read a table [specify] with a square pulse."""
    return read_request({"target": 1e-4, "pulse": SQUARE, **own, **blocks}, "bench.toml")


def square_pulse(angle: float = math.pi, duration: float = DURATION) -> IdealPulse:
    """A square pulse on two levels."""
    return make_pulse(PulseTable("square", duration), Qubit(6e9), angle)


def curve(name: str, table: dict[str, Any], pulse: IdealPulse, frame: str = "qubit") -> AnyCurve:
    """The exact curve of one block."""
    request = request_of({name: table}, frame=frame)
    return make_curves(request, pulse, RABI_PER_VOLT, 64)[name]
