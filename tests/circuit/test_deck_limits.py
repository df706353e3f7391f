"""Oracle: an error of this package, of bounded length, for what no deck and no probe holds."""

from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

from cosim.capture import make_plan
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import (
    deck_from_text,
    load_deck,
    node_names,
    prepare,
    resolve_saves,
    with_instances,
    with_parameters,
)
from cosim.circuit.probe import evaluate_probe, parse_probe
from cosim.circuit.simulator import simulate
from cosim.errors import DeckError, InputError, ProbeError, TestbenchError
from cosim.testbench import Testbench, make_testbench

NO_PATHS = ["a\0b.cir", "\ud800.cir"]


@pytest.mark.parametrize("name", NO_PATHS)
def test_names_that_no_file_can_have_are_named(name: str) -> None:
    with pytest.raises(DeckError, match="is no path"):
        load_deck(name)
    with pytest.raises(DeckError, match="is no path"):
        deck_from_text("t\nr1 a 0 1\n", name=name)
    with pytest.raises(DeckError, match="is no path"):
        deck_from_text("t\nr1 a 0 1\n", folder=name)
    with pytest.raises(DeckError, match="is no path"):
        deck_from_text("t\nr1 a 0 1\n", include_paths=[name])


def bench_of(netlist: Mapping[str, object], folder: str = ".") -> Testbench:
    return make_testbench(
        {
            "netlist": {"stop": "10 ns", **netlist},
            "drive": {"probe": "v(out)", "termination": "50 ohm", "carrier": "5 GHz"},
            "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "1 MHz/V"},
            "gate": {"target": "x"},
        },
        folder=folder,
    )


@pytest.mark.parametrize("name", [*NO_PATHS, "~no-such-user-here/x.cir"])
@pytest.mark.parametrize("key", ["file", "include_paths", "confidential"])
def test_a_testbench_with_such_a_name_names_its_key(tmp_path: Path, name: str, key: str) -> None:
    (tmp_path / "deck.cir").write_text("t\nv1 out 0 1\nr1 out 0 1k\n")
    netlist = {"file": "deck.cir", key: name if key == "file" else [name]}
    with pytest.raises(TestbenchError, match=f"key '{key}': .* is no path"):
        make_plan(bench_of(netlist, folder=str(tmp_path)))


def test_half_the_step_keeps_what_sources_take_for_it(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text("t\nv1 out 0 pulse(0 1 1n 0)\nr1 out 0 1k\n")
    plan = make_plan(bench_of({"file": "deck.cir"}, folder=str(tmp_path)))
    half = plan.half_step().request
    assert half.step == plan.request.step / 2
    assert half.output_step == plan.request.output_step == plan.request.step


@pytest.mark.parametrize("count", ["\u00b2", "9" * 5000, "1" * 7])
def test_a_number_of_controlling_nodes_is_a_small_number(count: str) -> None:
    deck = deck_from_text(f"t\nv1 a 0 1\nr1 a 0 1\ne1 b 0 poly({count}) a 0 1 2\nr2 b 0 1\n")
    assert node_names(deck) == {"a", "b"}


def test_a_deep_chain_of_parameters_gives_no_times() -> None:
    chain = "".join(f".param p{k}={{{'(' * 35}p{k + 1}{')' * 35}}}\n" for k in range(39))
    deck = deck_from_text(f"t\nv1 a 0 1\nr1 a 0 1\n{chain}.param p39=1n\n.tran {{p0}} 10n\n")
    assert deck.tran is None
    assert any("cannot be told" in notice for notice in deck.notices)


def test_a_source_line_of_brackets_is_read_in_one_pass() -> None:
    # Backtracking over these brackets took a time that grew with the third power of their number.
    line = "v" + "(" * 20_000 + "trnoise"
    deck = deck_from_text(f"t\nv1 a 0 1\nr1 a 0 1\n.if (0)\n{line}\n.endif\n")
    assert deck.lines[3].text == line


def test_a_resistor_of_many_zeros_is_judged_in_one_pass() -> None:
    # The same for zeros, which took the square.
    deck = deck_from_text(f"t\nv1 a 0 1\nr1 a 0 1\nr9 a 0 {'0' * 100_000}x\n.tran 1n 2n\n")
    prepared = prepare(deck, TransientRequest(stop=2e-9, step=1e-9))
    assert len(prepared.zeros) == 1


LONG = "n" * 10_000
SHORT_RUN = TransientRequest(stop=1e-9, step=1e-11)
CIRCUIT = "v1 a 0 1\nr1 a 0 1\n"


@pytest.mark.parametrize(
    "fault",
    [
        lambda: parse_probe(f"v({LONG}) *"),
        lambda: parse_probe(f"v({LONG}) + i(r1)"),
        lambda: parse_probe(f"@r1[{LONG}]"),
        lambda: evaluate_probe(parse_probe(f"v({LONG})"), {}),
        lambda: resolve_saves(deck_from_text(f"t\n{CIRCUIT}"), [f"v({LONG})"]),
        lambda: resolve_saves(deck_from_text(f"t\n{CIRCUIT}"), [f"i({LONG}.{LONG})"]),
        lambda: resolve_saves(deck_from_text(f"t\n{CIRCUIT}"), [LONG]),
        lambda: with_parameters(deck_from_text(f"t\n{CIRCUIT}"), {LONG: 1.0}),
        lambda: with_instances(deck_from_text(f"t\n{CIRCUIT}"), {LONG: {"r": 1.0}}),
        lambda: deck_from_text(f"t\n{CIRCUIT}.tran {LONG}\n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}.{LONG}\n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}x{LONG} a {LONG}\n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}m{LONG} a a a a {LONG}\n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}r2{LONG} = \n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}.lib {LONG}\n"),
        lambda: deck_from_text(f"t\n{CIRCUIT}.include {LONG}\n", folder="."),
        lambda: deck_from_text(f"t\n{CIRCUIT}", compatibility=LONG),
        lambda: prepare(deck_from_text(f"t\n{CIRCUIT}.model {LONG} {LONG}\n"), SHORT_RUN),
    ],
)
def test_no_message_quotes_a_long_text_in_full(fault: Callable[[], object]) -> None:
    with pytest.raises(InputError) as caught:
        fault()
    assert len(str(caught.value)) < 1500
    assert "characters)" in str(caught.value)


@pytest.mark.ngspice
def test_what_ngspice_says_of_a_long_line_is_cut_as_well() -> None:
    deck = deck_from_text(f"t\n{CIRCUIT}r2 a 0 1 {' '.join(['foo'] * 30_000)}\n")
    with pytest.raises(DeckError) as caught:
        simulate(deck, TransientRequest(stop=1e-9, step=1e-11, saves=("v(a)",)))
    assert len(str(caught.value)) < 1500


def test_long_probes_take_one_pass_and_have_an_end() -> None:
    # 20,000 terms, and a factor on each of them as often, took a time that grew with the square.
    count = 20_000
    probe = parse_probe("(" + " + ".join(f"v(n{k})" for k in range(count)) + ")" + " * -1" * count)
    assert probe.terms[:: count - 1] == ((1.0, "v(n0)"), (1.0, f"v(n{count - 1})"))
    assert len(probe.nodes) == count
    with pytest.raises(ProbeError, match="longer than 1000000 characters"):
        parse_probe("v(a)" + " " * 1_000_000)


def test_a_dialect_for_includes_only_is_said_to_reach_further() -> None:
    for mode, sent in (("ps", "psa"), ("lt", "lta")):
        prepared = prepare(deck_from_text(f"t\n{CIRCUIT}", compatibility=mode), SHORT_RUN)
        assert prepared.commands[0] == f"set ngbehavior={sent}"
        assert [note for note in prepared.notices if f"'{mode}' is sent as '{sent}'" in note]
    for mode in ("psa", "all", "spe", "hs", None):
        prepared = prepare(deck_from_text(f"t\n{CIRCUIT}", compatibility=mode), SHORT_RUN)
        assert prepared.notices == ()
