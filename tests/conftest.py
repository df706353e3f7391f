"""Shared by all tests: small decks and testbenches made in a temporary folder."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from cosim.testbench import Testbench, make_testbench

pytest_plugins = ["tests.validation"]

Tables = dict[str, dict[str, Any]]
BenchMaker = Callable[..., Testbench]


@pytest.fixture
def make_bench(tmp_path: Path) -> BenchMaker:
    """Make a testbench from a deck's text; tables given override single keys."""

    def make(deck: str, tables: Tables) -> Testbench:
        (tmp_path / "deck.cir").write_text(deck, encoding="utf-8")
        base: Tables = {
            "netlist": {"file": "deck.cir"},
            "drive": {"probe": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
            "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "20 MHz/V"},
            "gate": {"target": "x"},
            "accuracy": {"floor": False},
        }
        for name, table in tables.items():
            base[name] = {**base[name], **table}
        return make_testbench(base, folder=tmp_path)

    return make
