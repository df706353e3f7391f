"""Oracle: the promise that a deck, however broken, gives a result or an error of the package.

Decks are changed in ways that keep their structure: a value becomes extreme, a node or a name
is exchanged, a line is lost, doubled or moved, a card is inserted. What the loader lets pass is
run in ngspice. `python -m pytest tests/properties -m slow` throws 10,000 decks.
"""

import os
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.netlist import deck_from_text, node_names
from cosim.circuit.simulator import simulate
from cosim.errors import CosimError

ROOT = Path(__file__).parents[2]
DECKS = [
    # The deck in a dialect asks for a compatibility mode, which a testbench gives.
    *sorted(
        path for path in (ROOT / "tests" / "data" / "decks").glob("*.cir") if path.stem != "dialect"
    ),
    ROOT / "netlists" / "iq_upconverter" / "iq_upconverter.cir",
    ROOT / "netlists" / "pulse_modulator" / "pulse_modulator.cir",
]
LINES = {path: path.read_text(encoding="utf-8").splitlines() for path in DECKS}

NUMBER = re.compile(r"(?<![\w.])[+-]?\d+\.?\d*(?:e[+-]?\d+)?[a-z]*", re.IGNORECASE)
WORD = re.compile(r"[A-Za-z_][\w.]*")
VALUES = st.sampled_from(
    ["0", "-1", "1e300", "-1e-300", "1e999", "nan", "", "1meg", "1e-30", "{0/0}", "{x}", "'1+'"]
)
CARDS = st.sampled_from(
    [
        ".param x=1", ".param amp={amp}", ".subckt lost a b", ".ends", ".if (1)", ".else", ".endif",
        ".options reltol=1e-30", ".options gmin=0", ".temp -300", ".ic v(out)=1e6", ".global out",
        ".model nch nmos level=14", ".model nch pnp", "v9 0 0 1", "c9 out 0 -1p", "l9 out out 1n",
        "r9 out 0 0", "d9 out 0 nodiode", "b9 out 0 v=1/(time-1n)", "b8 out 0 i=exp(1000*v(out))",
        "e9 out 0 out 0 2", "x9 out lost", "k9 l1 l2 2", "m9 out out out out nch w=0 l=0", "+ 1 2",
        "a9 [out] out9 lost", ".nodeset v(none)=1", ".func f(x) {f(x)}", ".end", "t9 out 0 out 0",
    ]
)  # fmt: skip


@st.composite
def mutated(draw: st.DrawFn) -> tuple[Path, str]:
    """A deck with one to five changes."""
    path = draw(st.sampled_from(DECKS))
    lines = list(LINES[path])
    for _ in range(draw(st.integers(1, 5))):
        at = draw(st.integers(1, len(lines) - 1))
        kind = draw(st.sampled_from(["value", "word", "drop", "double", "move", "card", "cut"]))
        if kind == "value":
            lines[at] = exchanged(NUMBER, lines[at], draw(st.integers(0, 9)), draw(VALUES))
        elif kind == "word":
            other = draw(st.sampled_from(WORD.findall(" ".join(lines))))
            lines[at] = exchanged(WORD, lines[at], draw(st.integers(0, 9)), other)
        elif kind == "drop" and len(lines) > 2:
            del lines[at]
        elif kind == "double":
            lines.insert(at, lines[at])
        elif kind == "move":
            lines.insert(draw(st.integers(1, len(lines))), lines[at])
        elif kind == "card":
            lines.insert(at, draw(CARDS))
        else:
            lines[at] = lines[at][: draw(st.integers(0, max(1, len(lines[at]))))]
    return path, "\n".join(lines) + "\n"


def exchanged(pattern: re.Pattern[str], line: str, which: int, by: str) -> str:
    found = list(pattern.finditer(line))
    if not found:
        return line
    match = found[which % len(found)]
    return line[: match.start()] + by + line[match.end() :]


def throw(path: Path, text: str) -> TransientResult | None:
    """Load and run a deck; only errors of the package may come out."""
    try:
        deck = deck_from_text(text, name=path.name, folder=path.parent)
        node = min(node_names(deck), default="out")
        request = TransientRequest(
            stop=0.2e-9,
            step=2e-12,
            saves=(f"v({node})",),
            time_limit=3.0,
            memory_limit=2 * 2**30,
        )
        return simulate(deck, request)
    except CosimError:
        return None


def check(case: tuple[Path, str]) -> None:
    before = set(os.listdir(case[0].parent))
    result = throw(*case)
    assert set(os.listdir(case[0].parent)) == before
    if result is not None:
        assert all(np.isfinite(values).all() for values in result.vectors.values())


@pytest.mark.full
@pytest.mark.ngspice
@settings(
    derandomize=True,
    deadline=None,
    max_examples=200,
    database=None,
    suppress_health_check=[HealthCheck.too_slow],
)
@given(mutated())
def test_two_hundred_mutated_decks(case: tuple[Path, str]) -> None:
    check(case)


@pytest.mark.ngspice
@pytest.mark.slow
@settings(
    deadline=None,
    max_examples=10_000,
    database=None,
    suppress_health_check=[HealthCheck.too_slow],
)
@given(mutated())
def test_ten_thousand_mutated_decks(case: tuple[Path, str]) -> None:
    check(case)


@pytest.mark.ngspice
@pytest.mark.parametrize("path", DECKS, ids=lambda path: path.stem)
def test_the_decks_run_unchanged(path: Path) -> None:
    """Else the mutations would test nothing but the first error."""
    assert throw(path, "\n".join(LINES[path]) + "\n") is not None
