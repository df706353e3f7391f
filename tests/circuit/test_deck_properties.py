"""Oracle: the promise that a deck, however broken, gives a result or an error of the package;
and that what is sent stays within the allow-list after the splitting that the host does.
"""

import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import Deck
from cosim.circuit.netlist import (
    deck_from_text,
    load_deck,
    node_names,
    prepare,
    resolve_saves,
    with_instances,
    with_parameters,
)
from cosim.errors import CosimError
from tests.circuit.batch import DECKS

TEXTS = [path.read_text(encoding="utf-8") for path in sorted(DECKS.glob("*.cir"))]
REQUEST = TransientRequest(stop=1e-9, step=1e-12)
# Pieces that mean something to a reader of decks, and characters that break lines.
PIECES = st.sampled_from(
    [
        ".control\n", "\n.endc\n", "*#shell ls\n", "\n+ ", "\\\\\n", "{", "}", "'", '"', "(", ")",
        "=", ",", ";", "$ ", "//", "\n.subckt a b c\n", "\n.ends\n", "\n.if (x)\n", "\n.else\n",
        "\n.endif\n", "\n.lib x\n", "\n.include y\n", "\n.param ", "\n.model m filesource(file=",
        "\n.options ", "\n.tran ", "\n.temp ", "\nx1 a b c", "\na1 [", "] %vd(", "\n.func f(x) ",
        "\x0b", "\x0c", "\r", "\x1c", "\x85", "\u2028", "\x00", "\u00b5", "\u00a0", "poly(", "\n@",
        "\n.prot\n", "\n.unprot\n", "{scratch}", "`", "external", "trnoise(", "\n.end\n", "\t",
        "\nk1 l1 l2 1", "\nn1 a b m", "\n.global ", "99999999999", "1e999", "\n.hdl x\n",
    ]
)  # fmt: skip


@st.composite
def mutated(draw: st.DrawFn) -> str:
    """One of the decks with a few pieces cut out, put in or moved."""
    text = draw(st.sampled_from(TEXTS))
    for _ in range(draw(st.integers(1, 6))):
        at = draw(st.integers(0, len(text)))
        size = draw(st.integers(0, 40))
        kind = draw(st.sampled_from(["cut", "put", "copy"]))
        if kind == "cut":
            text = text[:at] + text[at + size :]
        elif kind == "put":
            text = text[:at] + draw(PIECES) + text[at:]
        else:
            to = draw(st.integers(0, len(text)))
            text = text[:to] + text[at : at + size] + text[to:]
    return text


def alterations(deck: Deck) -> None:
    """Whatever can be done with a deck, for some of the names that are in it."""
    names = sorted(node_names(deck))[:5]
    resolve_saves(deck, [f"v({name})" for name in names])
    elements = [line.text.split()[0].lower() for line in deck.lines if line.text[0].isalpha()]
    for name in elements[:3]:
        with_instances(deck, {name: {"m": 2.0}})
    for found in re.findall(r"\.param (\w+)", " ".join(line.text for line in deck.lines))[:2]:
        with_parameters(deck, {found: 1.0})


@settings(derandomize=True, deadline=None, max_examples=400)
@given(mutated())
def test_a_broken_deck_gives_a_result_or_an_error_of_the_package(text: str) -> None:
    try:
        deck = deck_from_text(text)
        sent = prepare(deck, REQUEST).lines
        alterations(deck)
    except CosimError:
        return
    assert "\n".join(sent).splitlines() == list(sent)
    for line in sent:
        assert line.isprintable()
        assert re.match(r"[A-Za-z.]", line)
        assert not re.match(r"\.(contr|inc|lib|meas|hdl|csdf|titl)", line, re.IGNORECASE)
        assert "`" not in line


@settings(derandomize=True, deadline=None, max_examples=200)
@given(st.binary(max_size=200))
def test_bytes_are_a_deck_or_an_error(
    tmp_path_factory: pytest.TempPathFactory, data: bytes
) -> None:

    path = tmp_path_factory.getbasetemp() / "bytes.cir"
    path.write_bytes(data)
    fault = ""
    try:
        prepare(load_deck(path), REQUEST)
    except CosimError as error:
        fault = str(error)
    assert not fault or "bytes.cir" in fault


@settings(derandomize=True, deadline=None, max_examples=200)
@given(st.sampled_from(TEXTS), st.text(max_size=30), st.text(max_size=10))
def test_any_name_is_found_or_an_error(text: str, name: str, parameter: str) -> None:
    try:
        deck = deck_from_text(text)
    except CosimError:
        return  # Decks with includes cannot be read without a folder.
    for use in (
        lambda: resolve_saves(deck, [f"v({name})", f"i({name})", f"@{name}[{parameter}]", name]),
        lambda: with_instances(deck, {name: {parameter: 1.0}}),
        lambda: with_parameters(deck, {name: 1.0}),
    ):
        with pytest.raises(CosimError):
            use()
