"""Oracle: what a user must be told for each fault, end to end from a testbench with a real deck."""

import os
from pathlib import Path

import pytest

import cosim
from cosim.errors import (
    ConvergenceError,
    CosimError,
    DeckError,
    ForbiddenDeckError,
    InputError,
    MissingFileError,
    SimulationError,
    SimulatorTimeoutError,
    TestbenchError,
    UnknownNameError,
    UnsupportedDeckError,
    WaveformError,
)
from tests.conftest import BenchMaker, Tables

DECK = """a steady carrier through a stage
.param level=0.1
.subckt stage in out
r1 in out 1k
c1 out 0 1f
.ends
v1 src 0 sin(0 {level} 1g 0 0 90)
x1 src out stage
.tran 1n 30n
.end
"""
TABLES: Tables = {
    "drive": {"carrier": "1 GHz"},
    "qubit": {"frequency": "1 GHz", "rabi_per_volt": "100 MHz/V"},
    "gate": {"target": "x90", "window": ["2 ns", "27 ns"]},
}


def run(make_bench: BenchMaker, deck: str = DECK, **tables: dict[str, object]) -> None:
    merged = {name: {**TABLES.get(name, {}), **tables.get(name, {})} for name in TABLES}
    merged |= {name: table for name, table in tables.items() if name not in TABLES}
    cosim.run(make_bench(deck, merged))


@pytest.mark.ngspice
def test_the_deck_itself_is_fine(make_bench: BenchMaker) -> None:
    run(make_bench)


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        ((".ends\n", ""), DeckError, ["deck.cir", "stage"]),
        (
            ("x1 src out stage", "x1 src out stag"),
            UnknownNameError,
            ["deck.cir:8", "stag", "stage"],
        ),
        (("{level}", "{levle}"), CosimError, ["levle"]),
        (("c1 out 0 1f", "d1 out 0 nomodel"), CosimError, ["nomodel", "deck.cir"]),
        (("r1 in out 1k", ".include none.lib"), MissingFileError, ["deck.cir:4", "none.lib"]),
        (("r1 in out 1k", ".include /dev/zero"), ForbiddenDeckError, ["/dev/zero"]),
        (("r1 in out 1k", ".include /etc/passwd"), ForbiddenDeckError, ["/etc/passwd"]),
        (("r1 in out 1k", ".hdl model.va"), UnsupportedDeckError, ["waveform"]),
        (("c1 out 0 1f", "n1 out 0 veriloga"), UnsupportedDeckError, ["waveform"]),
        ((".tran", "v2 src 0 dc 1\n.tran"), SimulationError, []),
        (
            ("c1 out 0 1f", "b1 out 0 i=ln(1e-9-time)"),
            ConvergenceError,
            ["time"],
        ),
        ((".tran 1n 30n\n", ""), TestbenchError, ["stop", ".tran"]),
    ],
)
def test_decks_with_a_fault(
    make_bench: BenchMaker, change: tuple[str, str], error: type[Exception], words: list[str]
) -> None:
    with pytest.raises(error) as caught:
        run(make_bench, DECK.replace(*change))
    for word in words:
        assert word in str(caught.value) + "\n".join(getattr(caught.value, "log", ()))


@pytest.mark.parametrize(
    ("tables", "error", "words"),
    [
        ({"drive": {"probe": "v(oat)"}}, UnknownNameError, ["oat", "'out'"]),
        ({"drive": {"probe": "v(x1.oat)"}}, UnknownNameError, ["x1.oat"]),
        ({"drive": {"probe": "v(out) +* 2"}}, cosim.InputError, ["v(out) +* 2"]),
        ({"netlist": {"max_step": "100 ps"}}, TestbenchError, ["10 steps", "at least 20"]),
        ({"netlist": {"parameters": {"levle": 1}}}, UnknownNameError, ["levle", "'level'"]),
        ({"netlist": {"instances": {"x2": {"w": 1}}}}, UnknownNameError, ["x2", "'x1'"]),
        ({"netlist": {"file": "dcek.cir"}}, MissingFileError, ["dcek.cir"]),
        ({"netlist": {"temperature": "4.2"}}, TestbenchError, ["'temperature'", '"4.2 K"']),
        ({"gate": {"window": ["2 ns", "35 ns"]}}, TestbenchError, ["35 ns", "30 ns"]),
        ({"gate": {"target": "x91"}}, InputError, ["x91", "'x90'"]),
        ({"drive": {"carrier": "estimate"}}, TestbenchError, ["max_step"]),
        (
            {"drive": {"probe": "i(v1)", "termination": "50 ohm"}},
            TestbenchError,
            ["current", "in deck"],
        ),
    ],
)
def test_testbenches_with_a_fault(
    make_bench: BenchMaker, tables: Tables, error: type[Exception], words: list[str]
) -> None:
    with pytest.raises(error) as caught:
        run(make_bench, **tables)
    for word in words:
        assert word in str(caught.value)


@pytest.mark.ngspice
def test_a_missing_include_three_levels_down_names_the_way(
    make_bench: BenchMaker, tmp_path: Path
) -> None:
    (tmp_path / "one.inc").write_text(".include two.inc\n", encoding="utf-8")
    (tmp_path / "two.inc").write_text("* text\n.include three.inc\n", encoding="utf-8")
    with pytest.raises(MissingFileError) as caught:
        run(make_bench, DECK.replace(".tran", ".include one.inc\n.tran"))
    for word in ("three.inc", "two.inc:2", "one.inc:1"):
        assert word in str(caught.value)


@pytest.mark.ngspice
def test_a_hanging_run_is_ended(make_bench: BenchMaker) -> None:
    with pytest.raises(SimulatorTimeoutError, match="time"):
        run(make_bench, netlist={"stop": "200 us", "time_limit": "0.5 s"})


@pytest.mark.ngspice
def test_no_carrier_at_the_probe(make_bench: BenchMaker) -> None:
    with pytest.raises(WaveformError):
        run(make_bench, netlist={"parameters": {"level": 0}})
    with pytest.raises(WaveformError):
        run(
            make_bench,
            netlist={"parameters": {"level": 0}, "max_step": "10 ps"},
            drive={"carrier": "estimate"},
        )


SHELL = [
    ".control\nshell touch CANARY\n.endc",
    "  .CONTROL\nshell touch CANARY\n.ENDC",
    "*#shell touch CANARY",
    ".control\n!touch CANARY\n.endc",
    ".options measoutfile=CANARY\n.meas tran top max v(out)",
    ".control\nwrdata CANARY v(out)",
]


@pytest.mark.ngspice
@pytest.mark.parametrize("attack", SHELL)
def test_a_deck_runs_no_command_and_writes_no_file(
    make_bench: BenchMaker, tmp_path: Path, attack: str
) -> None:
    canary = tmp_path / "canary"
    text = attack.replace("CANARY", str(canary))
    before = set(os.listdir(tmp_path))
    try:
        run(make_bench, DECK.replace(".tran", f"{text}\n.tran"))
    except InputError:
        pass  # Left out with a notice, or refused: both are safe.
    assert set(os.listdir(tmp_path)) - before <= {"deck.cir"}
