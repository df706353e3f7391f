"""Shared by all tests: small decks and testbenches made in a temporary folder."""

import os
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from cosim.testbench import Testbench, make_testbench

pytest_plugins = ["tests.validation"]

Tables = dict[str, dict[str, Any]]
BenchMaker = Callable[..., Testbench]


# Hundreds of CPU seconds in one file; a process that starts one of these last works on alone.
LONGEST = ("tests/examples/", "tests/kit/")

# Where the quick part starts ngspice, half of its time otherwise: the simulator's own tests, and
# those of the commands from end to end.
SIMULATING = ("tests/circuit/", "tests/test_")


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Begin with the files that take longest, so that all processes end at about one time.

    Of chains and studies the tests that start ngspice belong to the whole suite.
    """
    long = {item.path for item in items if item.get_closest_marker("full")}
    for item in items:
        if item.get_closest_marker("ngspice") and not item.nodeid.startswith(SIMULATING):
            item.add_marker(pytest.mark.full)
    items.sort(key=lambda item: (not item.nodeid.startswith(LONGEST), item.path not in long))


@pytest.fixture(scope="session", autouse=True)
def no_wait_for_the_disk() -> Iterator[None]:
    """Let fsync look at its handle only, for the archives of these tests are thousands.

    It decides what is left when the power fails, which no test can try; what a process that was
    killed has written is there all the same. Processes that a test starts anew do wait.
    """
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(os, "fsync", os.fstat)
        yield


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
