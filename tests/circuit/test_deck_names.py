"""Oracle: ngspice's own list of vectors, and Kirchhoff's current law for the currents it saves."""

import re
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit import lookup
from cosim.circuit.netlist import deck_from_text, load_deck, node_names, resolve_saves
from cosim.errors import DeckError, ProbeError, UnknownNameError
from tests.circuit.batch import (
    DECKS,
    OPTIONS,
    ROUNDING,
    WRITING,
    copy_decks,
    original,
    run,
    run_batch,
)


def vectors_of_ngspice(folder: Path, name: str) -> set[str]:
    """Voltages that plain ngspice has in its plot, without internal nodes of devices."""
    text = (folder / name).read_text(encoding="utf-8")
    (folder / "listed.cir").write_text(re.sub("wrdata.*", "display", text), encoding="utf-8")
    log = run_batch("listed.cir", folder)
    found = re.findall(r"^\s*(\S+)\s*: voltage, real", log, re.MULTILINE)
    names = {re.sub(r"^V\((.*)\)$", r"\1", vector) for vector in found}
    # "#" marks internal nodes of devices, "_int" those of the sources that ngspice adds for
    # behavioural E and G elements.
    return {name for name in names if "#" not in name and "_int" not in name}


@pytest.mark.ngspice
@pytest.mark.parametrize(
    "name",
    ["lines", "includes", "parameters", "hierarchy", "devices", "code_models", "start", "kit_user"],
)
def test_nodes_are_those_of_ngspice(tmp_path: Path, name: str) -> None:
    folder = copy_decks(tmp_path)
    wanted = vectors_of_ngspice(folder, f"{name}.cir")
    assert wanted
    assert node_names(load_deck(folder / f"{name}.cir")) == wanted


@pytest.mark.ngspice
def test_every_node_can_be_saved_and_seen_from_inside(tmp_path: Path) -> None:
    deck = load_deck(copy_decks(tmp_path) / "hierarchy.cir")
    names = sorted(node_names(deck))
    assert {"x1.mid", "net<3>", "bus[2]", "out+", "vdd!", "3"} <= set(names)
    inside = {"x1.out": "net<3>", "x2.xb.d": "out", "x2.xb.g": "x2.mid", "X1.XL.B": "vdd!"}
    inside |= {"x1.vdd!": "vdd!", "x1.xa.d": "x1.mid", "x1.xb.d": "net<3>"}
    saves = [f"v({name})" for name in [*names, *inside]]
    result = run(deck, *saves)
    assert set(result.vectors) == {save.lower() for save in saves}
    for inner, outer in inside.items():
        np.testing.assert_array_equal(
            result.vectors[f"v({inner.lower()})"], result.vectors[f"v({outer})"]
        )


# Nodes of devices.cir -> the currents that flow into them, each with its sign. A current i(x) of
# ngspice flows from the first node through the device to the second.
KIRCHHOFF = {
    "bv": "-i(b1) - i(rbv)",
    "bi": "+i(b2) - i(rbi)",
    "e1o": "-i(e1) - i(re)",
    "e2o": "-i(e2) + i(re)",
    "g1o": "-i(g1) - i(rg)",
    "f1o": "-i(f1) - i(rf)",
    "h1o": "-i(h1) - i(rh)",
    "s1o": "+i(s1) - i(rs)",
    "l1o": "+i(l1) - i(rl1)",
}


@pytest.mark.ngspice
def test_currents_obey_kirchhoff(tmp_path: Path) -> None:
    deck = load_deck(copy_decks(tmp_path) / "devices.cir")
    terms = {n: re.findall(r"([-+])\s*(i\(\w+\))", text) for n, text in KIRCHHOFF.items()}
    saves = sorted({save for found in terms.values() for _, save in found})
    result = run(deck, *saves)
    for node, found in terms.items():
        total = sum((1 if sign == "+" else -1) * result.vectors[save] for sign, save in found)
        largest = max(np.max(np.abs(result.vectors[save])) for _, save in found)
        assert largest > 1e-6, node
        # Newton's iteration stops at reltol = 1e-4 of a current.
        assert np.max(np.abs(total)) < 1e-3 * largest, node


@pytest.mark.ngspice
def test_currents_of_nonlinear_devices_and_capacitors(tmp_path: Path) -> None:
    deck = load_deck(copy_decks(tmp_path) / "devices.cir")
    saves = ["i(r1)", "i(d1)", "@q1[ib]", "@j1[ig]", "i(c1)", "v(out)", "i(m1)", "i(rms)", "i(i1)"]
    result = run(deck, *saves, "i(q1)", "@q1[ie]", "i(rqe)", "@m1[id]", "v(in)", "v(a)")
    v = result.vectors
    np.testing.assert_array_equal(v["i(m1)"], v["@m1[id]"])
    # The collector's and the base's current leave through the emitter's resistor; the model's
    # charges carry a part during edges, so only the mean over whole periods is compared.
    period = (result.time >= 1e-9) & (result.time <= 2e-9)
    t = result.time[period]
    mean = {name: np.trapezoid(v[name][period], t) / np.ptp(t) for name in v}
    assert mean["i(q1)"] + mean["@q1[ib]"] == pytest.approx(mean["i(rqe)"], rel=1e-2)
    assert mean["i(m1)"] == pytest.approx(mean["i(rms)"], rel=1e-2)
    np.testing.assert_allclose(v["i(i1)"], 1e-6, rtol=1e-12)
    # C dv/dt by central differences on the raw grid; their error is about (w h)^2/6 = 3e-5 of the
    # peak at 1 GHz, larger where the grid changes at the start.
    derivative = 50e-15 * np.gradient(v["v(out)"], result.time)
    late = slice(50, -2)
    assert np.max(np.abs(v["i(c1)"] - derivative)[late]) < 2e-2 * np.max(np.abs(derivative))


def test_names_of_vectors() -> None:
    deck = load_deck(DECKS / "hierarchy.cir")
    wanted = {
        "v(out)": "out",
        "v(3)": "V(3)",
        "i(v1)": "v1#branch",
        "i(x1.xa.rd)": "@r.x1.xa.rd[i]",
        "i(r.x1.xa.rd)": "@r.x1.xa.rd[i]",
        "@x2.xb.m1[gm]": "@m.x2.xb.m1[gm]",
        "@m.x2.xb.m1[gm]": "@m.x2.xb.m1[gm]",
        "i(c1)": "@c1[i]",
        "v(x2.xb.d)": "out",
    }
    assert resolve_saves(deck, [save.upper() for save in wanted]) == wanted


@pytest.mark.parametrize(
    ("save", "kind", "words"),
    [
        ("v(owt)", UnknownNameError, ["owt", "'out'"]),
        ("v(x1.mdi)", UnknownNameError, ["x1.mdi", "'x1.mid'"]),
        ("v(x1.xa.q)", UnknownNameError, ["x1.xa.q"]),
        ("v(x9.out)", UnknownNameError, ["x9.out"]),
        ("i(v2)", UnknownNameError, ["v2", "'v1'"]),
        ("i(x1.m9)", UnknownNameError, ["x1.m9"]),
        ("@x3.m1[id]", UnknownNameError, ["instance 'x3'", "'x2'"]),
        ("i(x1)", ProbeError, ["0 V"]),
        ("v(0)", ProbeError, ["ground"]),
        ("out", ProbeError, ["v(node)"]),
    ],
)
def test_what_does_not_exist_is_an_error(
    save: str, kind: type[Exception], words: list[str]
) -> None:
    with pytest.raises(kind) as caught:
        resolve_saves(load_deck(DECKS / "hierarchy.cir"), [save])
    assert all(word in str(caught.value) for word in words)


@pytest.mark.parametrize("save", ["i(a1)", "i(e3)", "i(r9)", "i(t1)", "i(k1)"])
def test_devices_without_a_current_say_what_to_do(save: str) -> None:
    deck = load_deck(DECKS / ("code_models.cir" if save == "i(a1)" else "devices.cir"))
    with pytest.raises(ProbeError, match="in series"):
        resolve_saves(deck, [save])


def test_nodes_that_carry_events_are_no_nodes() -> None:
    deck = load_deck(DECKS / "code_models.cir")
    with pytest.raises(UnknownNameError, match="inverted"):
        resolve_saves(deck, ["v(inverted)"])


@pytest.mark.parametrize(
    "body",
    [
        ".if (x==1)\nr1 a 0 1\n.else\nr1 b 0 1\n.endif\n",  # x is unknown: both may be there
        ".param x=1\n.if (x==1)\nr1 a 0 1\n.endif\nr2 b 0 1\n",
    ],
)
def test_branches_that_may_be_there_count(body: str) -> None:
    assert node_names(deck_from_text("t\n" + body)) == {"a", "b"}


def test_branches_that_are_not_there_do_not_count() -> None:
    branches = ".if (x==1)\nr1 a 0 1\n.elseif (x==2)\nr1 b 0 1\n.else\nr1 c 0 1\n.endif\n"
    assert node_names(deck_from_text("t\n.param x=2\n" + branches)) == {"b"}


def test_many_instances_are_many_nodes_and_too_many_an_error(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(lookup, "_MOST_NODES", 2000)
    levels = [
        f".subckt s{k} a\n" + "".join(f"x{i} a s{k + 1}\n" for i in range(10)) + ".ends\n"
        for k in range(8)
    ]
    body = "".join(levels) + ".subckt s8 a\nr1 a m 1\nr2 m 0 1\n.ends\nx0 in s5\n"
    assert len(node_names(deck_from_text("t\n" + body))) == 1001
    deck = deck_from_text("t\n" + body + "x1 in s0\n")
    assert resolve_saves(deck, ["v(x1.x2.x3.x4.x5.x6.x7.x8.x9.m)"])
    with pytest.raises(DeckError, match="nodes"):
        node_names(deck)


@pytest.mark.ngspice
def test_a_node_named_like_a_hierarchical_one_is_itself() -> None:
    body = "v1 in 0 sin(0 1 1g)\nr1 in x1.out 1k\nr2 x1.out 0 1k\n"
    result = run(deck_from_text(f"t\n{OPTIONS}\n{body}"), "v(x1.out)")
    assert np.max(result.vectors["v(x1.out)"]) == pytest.approx(0.5, rel=1e-4)  # sampled peak


BRANCHES = """t
v1 in 0 sin(0 1 1g)
r1 in out 1k
r2 out 0 1k
xq in out q t=2
.subckt q a b t=1
.if (t==1)
{first}
.else
{second}
.endif
.ends
.subckt r p n
r1 p m 1k
r2 m n 1k
.ends
.subckt s p m
r1 p m 1k
.ends
"""


def test_a_port_that_branches_tie_to_different_nets_is_refused() -> None:
    deck = deck_from_text(BRANCHES.format(first="X1 a b r", second="X1 b a r"))
    for probe in ("v(xq.x1.p)", "v(XQ.X1.N)"):
        with pytest.raises(DeckError, match="several branches") as caught:
            resolve_saves(deck, [probe])
        assert "in or out" in str(caught.value) or "out or in" in str(caught.value)
    # The node inside has one name, whichever branch is there.
    assert resolve_saves(deck, ["v(xq.x1.m)"]) == {"v(xq.x1.m)": "xq.x1.m"}
    assert resolve_saves(deck, ["i(xq.x1.r2)"]) == {"i(xq.x1.r2)": "@r.xq.x1.r2[i]"}
    mixed = deck_from_text(BRANCHES.format(first="X1 a b r", second="X1 a b s"))
    assert resolve_saves(mixed, ["v(xq.x1.p)"]) == {"v(xq.x1.p)": "in"}
    with pytest.raises(DeckError, match="several branches"):
        resolve_saves(mixed, ["v(xq.x1.m)"])  # A port in one of them, a node inside in the other.
    with pytest.raises(UnknownNameError, match=r"node 'xq\.x1\.k'"):
        resolve_saves(deck, ["v(xq.x1.k)"])


@pytest.mark.ngspice
def test_an_instance_with_a_dot_in_its_name(tmp_path: Path) -> None:
    body = "v1 in 0 sin(0 1 1g)\nX.1 in out s\nr2 out 0 1k\n"
    body += ".subckt s a b\nx.y a mid h\nxz mid b h\n.ends\n.subckt h a b\nr1 a q 500\nr2 q b 1k\n"
    text = f"t\n{body}.ends\n{OPTIONS}\n{WRITING}"
    (tmp_path / "deck.cir").write_text(text.replace("v(out)", "v(x.1.x.y.q)"))
    wanted = original("deck.cir", tmp_path)
    saves = ("v(x.1.x.y.q)", "i(x.1.x.y.r1)", "v(x.1.mid)", "v(x.1.x.y.b)", "i(r.x.1.xz.r1)")
    v = run(deck_from_text(text), *saves).vectors
    np.testing.assert_allclose(v["v(x.1.x.y.q)"], wanted, rtol=0, atol=ROUNDING)
    np.testing.assert_array_equal(v["v(x.1.x.y.b)"], v["v(x.1.mid)"])
    # One current through both; ngspice works it out from voltages of up to 1 V over 500 ohm.
    np.testing.assert_allclose(v["i(x.1.x.y.r1)"], v["i(r.x.1.xz.r1)"], rtol=0, atol=1e-15)
