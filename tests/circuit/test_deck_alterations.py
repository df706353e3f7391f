"""Oracle: `ngspice -b` on decks edited by hand, number by number."""

import tomllib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.netlist import (
    Deck,
    deck_from_text,
    load_deck,
    with_instances,
    with_parameters,
    with_terminations,
)
from cosim.config import read_table
from cosim.errors import DeckError, InputError, TestbenchError, UnknownNameError
from cosim.schema import NetlistTable
from cosim.toml_writing import write_tables
from tests.circuit.batch import DECKS, OPTIONS, ROUNDING, WRITING, copy_decks, original, output, run

# Deck, how it is altered, and the same edit by hand: (old text, new text) pairs.
Edit = tuple[str, Callable[[Deck], Deck], list[tuple[str, str]]]
EDITS: dict[str, Edit] = {
    "one of several on a line": (
        "parameters",
        lambda deck: with_parameters(deck, {"FREQ": 0.7e9}),
        [("freq=1g", "freq=0.7g")],
    ),
    "in braces": (
        "parameters",
        lambda deck: with_parameters(deck, {"rhalf": 300.0}),
        [("rhalf={500}", "rhalf=300")],
    ),
    "in quotes": (
        "parameters",
        lambda deck: with_parameters(deck, {"rload": 1234.5}),
        [("rload='2*rhalf'", "rload=1234.5")],
    ),
    "given twice": (
        "parameters",
        lambda deck: with_parameters(deck, {"amp": 0.25}),
        [(".param amp=1", ".param amp=0.25")],
    ),
    "a condition": (
        "parameters",
        lambda deck: with_parameters(deck, {"choice": 1}),
        [("choice=2", "choice=1")],
    ),
    "in an include": (
        "includes",
        lambda deck: with_parameters(deck, {"cload": 0.05e-12}),
        [('.INC "parts/two words.inc"', ".param cload=0.05p")],
    ),
    "in a section": (
        "includes",
        lambda deck: with_parameters(deck, {"rbase": 350}),
        [(".lib parts/corners.lib TT", ".param rbase=350 rcorner={rbase}")],
    ),
    "drawn at random": (
        "random",
        lambda deck: with_parameters(deck, {"spread": 0.0, "other": 2e3}),
        [("spread=agauss(0,0.1,1) other={aunif(1k,100)}", "spread=0 other=2k")],
    ),
    "an instance": (
        "hierarchy",
        lambda deck: with_instances(deck, {"x2": {"W": 1e-6}}),
        [("w=4u rl", "w=1u rl")],
    ),
    "an instance that took the default": (
        "hierarchy",
        lambda deck: with_instances(deck, {"X1": {"rl": 500}}),
        [("stage w=2u", "stage w=2u rl=500")],
    ),
    "a multiplier": (
        "hierarchy",
        lambda deck: with_instances(deck, {"xd": {"m": 5}}),
        [("half m=2", "half m=5")],
    ),
    "a parameter of the body": (
        "hierarchy",
        lambda deck: with_instances(deck, {"xd": {"rh": 5e3}}),
        [("half m=2", "half m=2 rh=5k")],
    ),
    "a transistor of a kit": (
        "kit_user",
        lambda deck: with_instances(deck, {"xm2": {"w": 0.7}, "x1": {"mult": 2, "l": 0.2}}),
        [("l=0.5 w=1 nf=1", "l=0.5 w=0.7 nf=1"), ("l=0.15", "l=0.2 mult=2")],
    ),
    "an inner instance of one of two": (
        "hierarchy",
        lambda deck: with_instances(deck, {"x1.xb": {"w": 9e-6}}),
        [
            ("x1 in net<3> stage w=2u", "x1 in net<3> other w=2u"),
            (".subckt deep", OTHER := """.subckt other in out w=1u rl=2k
xa in mid deep r={rl} w={w}
xb mid out deep r={rl} w=9u
.subckt local a b
r1 a b rmod
.model rmod r r=10k
.ends local
xl mid vdd! local
.ends other
.subckt deep"""),
        ],
    ),
    "devices of two instances": (
        "hierarchy",
        lambda deck: with_instances(
            deck, {"x1.xb.m1": {"w": 9e-6}, "x1.xa.rd": {"value": 700.0}, "r1": {"value": 5e3}}
        ),
        [
            ("x1 in net<3> stage w=2u", "x1 in net<3> other w=2u"),
            ("r1 bus[2] out+ 1k", "r1 bus[2] out+ 5k"),
            (".subckt deep", OTHER.replace("xb mid out deep r={rl} w=9u", "xb mid out deepb r={rl}")
             .replace("xa in mid deep", "xa in mid deepa")
             .replace(".subckt deep", """.subckt deepa g d r=1k w=1u
m1 d g 0 0 nch w={w} l=0.1u
rd vdd! d 700
cd d 0 5f
.model nch nmos level=1 vto=0.3 kp=300u lambda=0.1
.ends
.subckt deepb g d r=1k w=1u
m1 d g 0 0 nch w=9u l=0.1u
rd vdd! d {r}
cd d 0 5f
.model nch nmos level=1 vto=0.3 kp=300u lambda=0.1
.ends
.subckt deep""")),
        ],
    ),
    "inside a definition inside a definition": (
        "hierarchy",
        lambda deck: with_instances(deck, {"x2.xl.r1": {"value": 2000.0}}),
        [
            ("x2 net<3> out stage params: w=4u rl=1.5k", "x2 net<3> out other w=4u rl=1.5k"),
            (".subckt deep", OTHER.replace("w=9u", "w={2*w}").replace("a b rmod", "a b 2k rmod")),
        ],
    ),
    "a value and a coefficient": (
        "start",
        lambda deck: with_instances(deck, {"r1": {"tc1": 5e-3, "value": 200.0}}),
        [("r1 out 0 500 tc1=2e-3", "r1 out 0 200 tc1=5e-3")],
    ),
    "values of a capacitor and a coil": (
        "start",
        lambda deck: with_instances(deck, {"c1": {"value": 2e-12}, "L1": {"l": 2e-9}}),
        [("l1 out 0 1n", "l1 out 0 2n"), ("c1 out 0 1p", "c1 out 0 2p")],
    ),
    "a termination": (
        "hierarchy",
        lambda deck: with_terminations(deck, ["OUT", "net<3>", "x2.xb.d"], 5000.0),
        [(".tran", "ra out 0 5k\nrb net<3> 0 5k\n.tran")],
    ),
}  # fmt: skip


@pytest.mark.ngspice
@pytest.mark.parametrize("name", EDITS)
def test_an_altered_deck_is_the_deck_edited_by_hand(tmp_path: Path, name: str) -> None:
    stem, alter, edits = EDITS[name]
    folder = copy_decks(tmp_path)
    deck = load_deck(folder / f"{stem}.cir")
    initial = "uic" if deck.tran and deck.tran.uic else "op"
    got = output(alter(deck), initial=initial)
    assert np.max(np.abs(got - output(deck, initial=initial))) > 1e-3  # It has an effect at all.
    text = (folder / f"{stem}.cir").read_text(encoding="utf-8")
    for old, new in edits:
        assert old in text
        text = text.replace(old, new, 1)
    (folder / "edited.cir").write_text(text, encoding="utf-8")
    wanted = original("edited.cir", folder)
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("stem", "key", "section", "written"),
    [
        ("includes", "parts/corners.lib", "SS", " TT"),
        ("includes", "corners.lib", "ss", " TT"),
        ("kit_user", "top.lib.spice", "ff", " tt"),
    ],
)
def test_a_section_chosen_is_the_section_written(
    tmp_path: Path, stem: str, key: str, section: str, written: str
) -> None:
    folder = copy_decks(tmp_path)
    deck = folder / f"{stem}.cir"
    got = output(load_deck(deck, sections={key: section}))
    assert np.max(np.abs(got - output(load_deck(deck)))) > 1e-3  # It has an effect at all.
    text = deck.read_text(encoding="utf-8")
    (folder / "edited.cir").write_text(text.replace(written, f" {section}", 1), encoding="utf-8")
    wanted = original("edited.cir", folder)
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


LIBRARY = """.lib tt
.param rr=1k
.endl
.lib ff
.param rr=500
.endl
.lib res_typ
.param ll=1k
.endl
.lib res_max
.param ll=3k
.endl
"""
TWO_SECTIONS = "t\n.lib 'k.lib' tt\n.lib k.lib RES_typ\nv1 in 0 sin(0 1 1g)\n"
TWO_SECTIONS += f"r1 in out {{rr}}\nr2 out 0 {{ll}}\n{OPTIONS}\n{WRITING}"


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("chosen", "edits"),
    [
        ({"tt": "ff"}, [("' tt", "' ff")]),
        ({"TT": "ff", "res_typ": "res_max"}, [("' tt", "' ff"), ("RES_typ", "res_max")]),
        ({"res_typ": "res_max"}, [("RES_typ", "res_max")]),
    ],
)
def test_each_of_several_sections_of_a_library_is_chosen(
    tmp_path: Path, chosen: dict[str, str], edits: list[tuple[str, str]]
) -> None:
    by_hand = TWO_SECTIONS
    for old, new in edits:
        by_hand = by_hand.replace(old, new)
    (tmp_path / "k.lib").write_text(LIBRARY)
    (tmp_path / "by_hand.cir").write_text(by_hand)
    wanted = original("by_hand.cir", tmp_path)
    got = output(deck_from_text(TWO_SECTIONS, folder=tmp_path, sections={"k.lib": chosen}))
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


def test_one_section_cannot_stand_for_several(tmp_path: Path) -> None:
    (tmp_path / "k.lib").write_text(LIBRARY)
    with pytest.raises(DeckError, match=r"2 sections of 'k.lib' \(tt, RES_typ\)") as caught:
        deck_from_text(TWO_SECTIONS, folder=tmp_path, sections={"k.lib": "ff"})
    assert caught.value.hint.endswith('sections = { "k.lib" = { tt = "ff" } }')
    with pytest.raises(UnknownNameError, match="no section 'res_tpy'") as unknown:
        deck_from_text(TWO_SECTIONS, folder=tmp_path, sections={"k.lib": {"res_tpy": "res_max"}})
    assert "RES_typ" in unknown.value.hint
    # A section that is read twice is one.
    twice = TWO_SECTIONS.replace("RES_typ", "Tt").replace("{ll}", "1k")
    deck = deck_from_text(twice, folder=tmp_path, sections={"k.lib": "ff"})
    assert [line.text for line in deck.lines[:2]] == [".param rr=500"] * 2


def test_a_testbench_says_a_section_or_a_table_of_them() -> None:
    sections = {"k.lib": {"tt": "ff"}, "b.lib": "ss"}
    given = {"file": "a.cir", "sections": sections}
    table = read_table(given, NetlistTable, file="b.toml", name="netlist")
    assert table.sections == sections
    written = tomllib.loads(write_tables("t", {"netlist": table}))["netlist"]
    assert read_table(written, NetlistTable, file="b.toml", name="netlist") == table
    with pytest.raises(TestbenchError, match=r"sections\.k\.lib"):
        read_table({"file": "a", "sections": {"k.lib": 1}}, NetlistTable, file="b", name="netlist")


@pytest.mark.ngspice
def test_a_node_inside_can_be_terminated(tmp_path: Path) -> None:
    deck = load_deck(copy_decks(tmp_path) / "hierarchy.cir")
    loaded = with_terminations(deck, ["x1.mid"], 500.0)
    v = run(loaded, "v(x1.mid)", "i(rtermination1)").vectors
    assert np.ptp(v["v(x1.mid)"]) > 0.01
    # ngspice works the current out from the same voltage; rounding alone differs.
    np.testing.assert_allclose(v["i(rtermination1)"], v["v(x1.mid)"] / 500.0, rtol=1e-9)


def test_commas_between_parameters_are_spaces() -> None:
    # With the commas ngspice 39 never ends (.param, .subckt) or reports an error (x1).
    body = (
        ".param a=1, b={max(1,2)}, c=3\nx1 p,0 s w={a}, l=2\n.subckt s (m,n) w=1, l=3\nr1 m n 1\n"
    )
    deck = deck_from_text(f"t\n{body}.ends\n")
    assert [line.text for line in deck.lines[:3]] == [
        ".param a=1  b={max(1,2)}  c=3",
        "x1 p 0 s w={a}  l=2",
        ".subckt s (m,n) w=1  l=3",
    ]
    assert with_parameters(deck, {"b": 5}).lines[0].text == ".param a=1  b=5.0  c=3"
    assert with_instances(deck, {"x1": {"l": 7}}).lines[1].text == "x1 p 0 s w={a}  l=7.0"


def test_what_depends_on_a_parameter_follows() -> None:
    text = "t\n.param f=1g\nv1 a 0 sin(0 1 {f})\nr1 a 0 1\n.temp {f/1e7}\n.tran {1/(10*f)} '20/f'\n"
    deck = deck_from_text(text)
    assert deck.tran is not None
    assert (deck.tran.step, deck.tran.stop) == pytest.approx((1e-10, 2e-8))
    assert deck.temperature == pytest.approx(373.15)
    altered = with_parameters(deck, {"f": 2e9})
    assert altered.tran is not None
    assert (altered.tran.step, altered.tran.stop) == pytest.approx((5e-11, 1e-8))
    assert altered.temperature == pytest.approx(473.15)
    assert deck.lines[0].text == ".param f=1g"


@pytest.mark.parametrize(
    ("line", "parameter", "wanted"),
    [
        ("r1 a 0 1k", "value", "r1 a 0 5.0"),
        ("r1 a 0 {x*(1 + 2)} tc1=1m", "r", "r1 a 0 5.0 tc1=1m"),
        ("r1 a 0 R = 1k", "value", "r1 a 0 R = 5.0"),
        ("r1 (a,0) resistance='2*x' m=2", "r", "r1 (a,0) resistance=5.0 m=2"),
        ("r1 a 0 mod w=1u", "value", "r1 a 0 5.0 mod w=1u"),
        ("r1 a 0 1k ac=2k", "ac", "r1 a 0 1k ac=5.0"),
        ("r1 a 0 1k", "tc1", "r1 a 0 1k tc1=5.0"),
        ("v1 a 0 sin(0 1 1g)", "dc", "v1 a 0 5.0 sin(0 1 1g)"),
        ("v1 a 0 sin(0 1 1g) DC 1", "dc", "v1 a 0 sin(0 1 1g) DC 5.0"),
        ("v1 a 0", "value", "v1 a 0 5.0"),
        ("i1 a 0 -1m", "dc", "i1 a 0 5.0"),
        ("v1 a 0 vdd", "dc", "v1 a 0 5.0"),
        ("v1 a 0 external", "dc", "v1 a 0 5.0 external"),
        ("r1 a 0 mod 2k", "value", "r1 a 0 mod 5.0"),
        ("r1 a 0 MOD {2*x} tc1=1m", "r", "r1 a 0 MOD 5.0 tc1=1m"),
        ("r1 a 0 2k mod", "value", "r1 a 0 5.0 mod"),
        ("r1 (a 0) 2k", "value", "r1 (a 0) 5.0"),
        ("r1 a 0 tc1=1m", "value", "r1 a 0 5.0 tc1=1m"),
        ("r1 a 0 rr", "value", "r1 a 0 5.0"),
        ("c1 a 0 cc ic=1", "c", "c1 a 0 5.0 ic=1"),
        ("l1 a 0 ll", "l", "l1 a 0 5.0"),
    ],
)
def test_values_are_replaced_where_they_stand(line: str, parameter: str, wanted: str) -> None:
    deck = deck_from_text(f"t\n{line}\nr2 a 0 1\n.model mod r rsh=1\n")
    name = line.split()[0]
    assert with_instances(deck, {name: {parameter: 5}}).lines[0].text == wanted


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("line", "by_hand"),
    [
        ("r1 in out rm 2k", "r1 in out rm 3k"),
        ("r1 in out rm {rr} tc1=0", "r1 in out rm 3k tc1=0"),
        ("r1 in out rm", "r1 in out 3k rm"),
        ("r1 in out rr", "r1 in out 3k"),
        ("x1 in out s\n.subckt s a b\nr1 a b rl 2k\n.model rl r rsh=1\n.ends", "r1 in out 3k"),
    ],
)
def test_a_value_beside_a_model_or_as_a_bare_parameter(
    tmp_path: Path, line: str, by_hand: str
) -> None:
    def text(what: str) -> str:
        cards = ".param rr=2k\n.model rm r rsh=100\nv1 in 0 sin(0 1 1g)\nr2 out 0 1k\n"
        return f"t\n{cards}{what}\n{OPTIONS}\n{WRITING}"

    (tmp_path / "deck.cir").write_text(text(by_hand))
    wanted = original("deck.cir", tmp_path)
    name = "x1.r1" if line[0] == "x" else "r1"
    got = output(with_instances(deck_from_text(text(line)), {name: {"value": 3e3}}))
    assert np.ptp(wanted) > 0.01
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


def test_names_with_dots_lead_to_their_instances() -> None:
    body = "X.1 a s\nxb a s\n.subckt s a\nr.2 a 0 1k\nx.y a h\n.ends\n"
    body += ".subckt h a\nr1 a 0 1k\n.ends\n"
    deck = deck_from_text(f"t\nv1 a 0 1\n{body}")
    altered = with_instances(deck, {"x.1.R.2": {"r": 5}, "x.1.x.y.r1": {"r": 7}})
    texts = {line.text for line in altered.lines}
    assert {"r.2 a 0 5.0", "r1 a 0 7.0", "r.2 a 0 1k", "r1 a 0 1k"} <= texts
    with pytest.raises(UnknownNameError, match=r"'x\.1\.r9' does not exist"):
        with_instances(deck, {"x.1.r9": {"r": 5}})


def test_all_digits_of_a_value_reach_the_deck() -> None:
    deck = deck_from_text("t\n.param a=1 b={a}\nr1 x 0 {a}\n")
    value = 0.1 + 0.2
    assert with_parameters(deck, {"a": value}).lines[0].text == ".param a=0.30000000000000004 b={a}"


@pytest.mark.parametrize(
    ("alter", "words"),
    [
        (lambda d: with_parameters(d, {"chioce": 1}), ["chioce", "'choice'"]),
        (lambda d: with_parameters(d, {"gain": 1}), ["gain", "top-level"]),
        (lambda d: with_parameters(d, {"twice": 1}), ["twice"]),
        (lambda d: with_instances(d, {"x2": {"gain": 1}}), ["x2", "'x1'"]),
        (lambda d: with_instances(d, {"x1": {"gian": 1}}), ["gian", "'gain'", "parameters.cir:"]),
        (lambda d: with_instances(d, {"x1.r9": {"r": 1}}), ["x1.r9", "'x1.r1'"]),
        (lambda d: with_instances(d, {"r1.m1": {"w": 1}}), ["r1", "device"]),
        (lambda d: with_instances(d, {"x1.e1": {"value": 1.0}, "x1.": {"a": 1}}), ["x1."]),
        (lambda d: with_terminations(d, ["owt"], 50), ["owt", "'out'"]),
    ],
)
def test_wrong_names_are_errors_with_near_names(
    alter: Callable[[Deck], Deck], words: list[str]
) -> None:
    deck = load_deck(DECKS / "parameters.cir")
    with pytest.raises(UnknownNameError) as caught:
        alter(deck)
    assert all(word in str(caught.value) for word in words)


@pytest.mark.parametrize("value", [float("nan"), float("inf"), True, "1k"])
def test_values_are_finite_numbers(value: float) -> None:
    deck = load_deck(DECKS / "parameters.cir")
    with pytest.raises(InputError, match="finite"):
        with_parameters(deck, {"amp": value})
    with pytest.raises(InputError, match="finite"):
        with_instances(deck, {"x1": {"gain": value}})


@pytest.mark.parametrize("resistance", [0.0, -1.0, float("nan"), float("inf")])
def test_a_termination_is_a_positive_resistance_at_a_node(resistance: float) -> None:
    deck = load_deck(DECKS / "parameters.cir")
    with pytest.raises(InputError, match="positive"):
        with_terminations(deck, ["out"], resistance)
    with pytest.raises(InputError, match="ground"):
        with_terminations(deck, ["gnd"], 50.0)


def test_the_names_of_terminations_are_free() -> None:
    deck = deck_from_text("t\nrtermination1 a 0 1\nRTERMINATION2 a b 1\nr1 b 0 1\n")
    lines = with_terminations(with_terminations(deck, ["a", "A", "b"], 50), ["a"], 75).lines
    names = [line.text.split()[0].lower() for line in lines]
    assert len(set(names)) == len(names) == 6
    assert lines[-1].text == "rtermination5 a 0 75.0 noisy=0"
