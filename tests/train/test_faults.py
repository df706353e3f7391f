"""Oracle: the words of errors, for what a table [train] gets wrong."""

import re
from pathlib import Path
from typing import Any

import pytest

from cosim.errors import SimulatorTimeoutError, TestbenchError
from cosim.train.study import run_train
from cosim.train.table import TrainTable
from tests.train.lines import LOW_PASS, POINTS, bench

TRAIN = {"spacing": "20 ns", "pattern": "1101", "shift_per_volt": "-50 MHz/V"}
FILTER = {"taps": 8, "rate": "1 GHz", "full_scale": "1 V"}


def with_filter(**more: Any) -> dict[str, Any]:
    return {**TRAIN, "predistortion": {**FILTER, **more}}


@pytest.mark.parametrize(
    ("train", "words"),
    [
        ({"spacing": "20 ns"}, "wanted one of the keys 'pattern', 'count', 'random' and 'order'"),
        ({**TRAIN, "count": 3}, "got 'pattern' and 'count'"),
        ({**TRAIN, "pattern": "1121"}, "slot 3 must be 0 or 1, got '2'"),
        ({**TRAIN, "pattern": "0000"}, "no pulse in any of its slots"),
        ({**TRAIN, "pattern": "1"}, "wanted 2 to 1000 slots, got 1"),
        ({**TRAIN, "spacing": "11 ns"}, "the pulse lasts 12 ns, from 2 ns to 14 ns, which is lon"),
        ({**TRAIN, "sources": ["vother"]}, "the source 'vother' has none"),
        ({**TRAIN, "shift_per_volt": "0 Hz/V"}, "wanted a shift other than zero"),
        ({**TRAIN, "step": "1 us"}, "a step of 1 µs does not end within the run of 80.05 ns"),
        ({"spacing": "20 ns", "order": 9}, "key 'order': wanted 1 to 8, got 9"),
        (with_filter(rate="0.93 GHz"), "20 ns is 18.6 samples, wanted a whole number"),
        (with_filter(taps=0), "key 'taps': wanted 1 to 512, got 0"),
        (with_filter(taps=600), "key 'taps': wanted 1 to 512, got 600"),
        (with_filter(taps=81), "81 of them last 81 ns, longer than the train of 80 ns"),
        (with_filter(full_scale="0.4 V"), "the train itself reaches 0.5 V, more than 0.4 V"),
        (with_filter(full_scale="10 mA"), "'full_scale' is in A, but the source 'vin' plays V"),
        (with_filter(edge="2 ns"), "an edge of 2e-09 s is longer than the 1e-09 s of one sample"),
        (with_filter(tap=3), "unknown key 'tap'"),
    ],
)
def test_tables_that_cannot_be_played(tmp_path: Path, train: dict[str, Any], words: str) -> None:
    with pytest.raises(TestbenchError, match=re.escape(words)):
        run_train(bench(tmp_path, LOW_PASS, train))


@pytest.mark.parametrize(
    ("tables", "words"),
    [
        ({"stimulus": []}, "repeats a [[stimulus]] that plays a pulse, and there is none"),
        (
            {"stimulus": [{"source": "vin", "points": POINTS[:3]}]},
            "does not come back to its rest of 0 V: it ends at 0.5 V",
        ),
        (
            {
                "stimulus": [
                    {
                        "source": "vin",
                        "pattern": "01",
                        "period": "5 ns",
                        "low": "0 V",
                        "high": "1 V",
                        "edge": "1 ns",
                        "repeat": True,
                    }
                ]
            },
            "has repeat = true, so that it is no single pulse",
        ),
        ({"gate": {"target": "x90"}}, "turns it about z, got x90"),
        (
            {"drive": {"probe": "v(out)", "termination": "in deck", "carrier": "5 GHz"}},
            "a line that shifts the qubit has no carrier",
        ),
        (
            {"drive": {"probe": "v(out)", "termination": "in deck", "carrier": "estimate"}},
            "the carrier is estimated, but its phase must be known over all slots",
        ),
    ],
)
def test_testbenches_without_a_train(tmp_path: Path, tables: dict[str, Any], words: str) -> None:
    with pytest.raises(TestbenchError, match=re.escape(words)):
        run_train(bench(tmp_path, LOW_PASS, TRAIN, **tables))


def test_a_testbench_says_that_it_has_no_train(tmp_path: Path) -> None:
    other = bench(tmp_path, LOW_PASS, TRAIN)
    other.studies.clear()  # type: ignore[attr-defined]  # A mapping for readers, a dict inside.
    with pytest.raises(TestbenchError, match=r"has no table \[train\]"):
        run_train(other)


@pytest.mark.ngspice
def test_a_train_longer_than_the_time_limit(tmp_path: Path) -> None:
    """Four million steps take some 20 s."""
    slow = {"file": "line.cir", "max_step": "20 fs", "time_limit": "0.2 s"}
    with pytest.raises(SimulatorTimeoutError, match="the train of 4 slots lasts 80 ns") as caught:
        run_train(bench(tmp_path, LOW_PASS, TRAIN, netlist=slow))
    assert "make it shorter" in caught.value.hint


def test_trains_are_told_in_four_ways() -> None:
    assert TrainTable(20e-9, pattern="101").factors() == (1.0, 0.0, 1.0)
    assert TrainTable(20e-9, pattern=(1, -0.5, 0)).factors() == (1.0, -0.5, 0.0)
    assert TrainTable(20e-9, count=3).factors() == (1.0, 1.0, 1.0)
    assert TrainTable(20e-9, order=1).factors() == (1.0, 0.0, 0.0, 1.0, 1.0)
    assert TrainTable(20e-9, random=30, seed=2) == TrainTable(20e-9, random=30, seed=2)
    assert len(TrainTable(20e-9, random=30, seed=2).factors()) == 30
