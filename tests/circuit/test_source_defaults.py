"""Oracle: `ngspice -b` on the same deck, for what it takes where a source leaves values out."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import Deck, load_deck, prepare
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray
from tests.circuit.batch import OPTIONS, ROUNDING, TOLERANCES, WRITING, run_batch

STOP, STEP = 4e-9, 10e-12
CIRCUIT = "title\n{source}\nR1 in out 1k\nC1 out 0 1p\n"


def request(*, stop: float = STOP, step: float = STEP) -> TransientRequest:
    """The run that `deck_of` asks for, or one of another stop or step."""
    return TransientRequest(stop=stop, step=step, saves=("v(out)",), tolerances=TOLERANCES)


def deck_of(folder: Path, source: str, tran: str = ".tran 200p 4n 0 10p") -> Deck:
    """A source that drives a low-pass, in a file of its own."""
    path = folder / "deck.cir"
    path.write_text(f"{CIRCUIT.format(source=source)}{OPTIONS}\n{tran}\n.end\n")
    return load_deck(path)


def batch(folder: Path, source: str, tran: str) -> FloatArray:
    """Time in s and v(out) in V as `ngspice -b` writes them, shape (n, 2)."""
    card, _, script = WRITING.partition("\n")
    assert card.startswith(".tran")
    text = f"{CIRCUIT.format(source=source)}{OPTIONS}\n{tran}\n{script}"
    (folder / "batch.cir").write_text(text)
    log = run_batch("batch.cir", folder)
    assert (folder / "out.txt").exists(), log
    return np.loadtxt(folder / "out.txt")


@pytest.mark.ngspice
@pytest.mark.parametrize("output", ["1p", "200p", "8n"])
@pytest.mark.parametrize(
    "source",
    [
        "V1 in 0 pulse(0 1 0.5n 0 0 1n 3n)",
        "V1 in 0 pulse(0 1)",
        "V1 in 0 exp(0 1 0.5n)",
        "V1 in 0 exp 0 1 0.5n 0.3n 2n 0",
        "I1 0 in exp(0 1m 0.2n)",
    ],
)
def test_the_output_step_shapes_sources_as_in_the_deck(
    tmp_path: Path, source: str, output: str
) -> None:
    tran = f".tran {output} 4n 0 10p"
    wanted = batch(tmp_path, source, tran)
    deck = deck_of(tmp_path, source, tran)
    got = simulate(deck, request())
    assert np.ptp(wanted[:, 1]) > 1e-3
    # wrdata writes 15 digits: of times of 4 ns they leave 1e-24 s.
    np.testing.assert_allclose(got.time, wanted[:, 0], rtol=0, atol=1e-22)
    np.testing.assert_allclose(got.vectors["v(out)"], wanted[:, 1], rtol=0, atol=ROUNDING)


def test_half_the_step_keeps_the_output_step(tmp_path: Path) -> None:
    deck = deck_of(tmp_path, "V1 in 0 pulse(0 1 0.5n 0 0 1n 3n)")
    card = prepare(deck, request(step=STEP / 2)).lines[-2]
    assert card == ".tran 2e-10 4e-09 0.0 5e-12"
    without = replace(deck, lines=tuple(x for x in deck.lines if x.text[:5] != ".tran"), tran=None)
    half = replace(request(step=STEP / 2), output_step=STEP)
    assert prepare(without, half).lines[-2] == ".tran 1e-11 4e-09 0.0 5e-12"


@pytest.mark.parametrize(
    ("source", "words"),
    [
        ("V1 in 0 pulse(0 1 0.5n 0 0.1n 1n 3n)", "rise time;"),
        ("V1 in 0 dc 0 PULSE ( 0 1 0.5n )", "rise time and fall time"),
        ("V1 in 0 exp(0 1 0.5n 0.1n)", "fall delay and fall time"),
        ("I1 0 in exp(0 1 0.5n 0.1n 2n {0*2})", "fall time"),
    ],
)
def test_without_tran_a_source_that_needs_its_step_is_named(
    tmp_path: Path, source: str, words: str
) -> None:
    deck = deck_of(tmp_path, source, "")
    notices = [text for text in prepare(deck, request()).notices if "leaves out" in text]
    assert len(notices) == 1
    assert notices[0].startswith(f"{deck.path}:2: {source[:2].lower()} leaves out its ")
    assert words in notices[0]
    assert "1e-11 s" in notices[0]
    assert not prepare(deck_of(tmp_path, source), request()).notices


@pytest.mark.parametrize(
    ("source", "words"),
    [
        ("V1 in 0 sin(0 1)", "frequency"),
        ("V1 in 0 sin(0 1 0 1n)", "frequency"),
        ("V1 in 0 sffm(0 1 1g 2)", "signal frequency"),
        ("V1 in 0 am(1 0 0 1g 0)", "modulating frequency"),
    ],
)
def test_another_stop_time_than_the_decks_names_the_source_that_follows_it(
    tmp_path: Path, source: str, words: str
) -> None:
    deck = deck_of(tmp_path, source)
    assert not prepare(deck, request()).notices
    (notice,) = prepare(deck, request(stop=2 * STOP)).notices
    assert f"{deck.path}:2: v1 leaves out its {words};" in notice
    assert "8e-09 s here and 4e-09 s in the deck" in notice


@pytest.mark.parametrize(
    "source",
    [
        "V1 in 0 sin(0 1 1g)",
        "V1 in 0 pulse(0 1 0 1p 1p)",  # Width and period become the stop time: never reached.
        "V1 in 0 1",
        "V1 pulse 0 pwl(0 0 1n 1)\nR2 pulse in 1",
        "V1 in 0 sffm(0 1 1g 2 0.1g)",
    ],
)
def test_sources_with_all_their_values_are_not_named(tmp_path: Path, source: str) -> None:
    for tran in ("", ".tran 200p 1n"):
        assert not prepare(deck_of(tmp_path, source, tran), request()).notices


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("lines", "numbers"),
    [
        (".param x=0 y={2*x}\nR2 out 0 {y}\nR3 out 0 1k", [7]),
        (".param x=0\nR2 out 0 x\nR3 out 0 r='x'", [7, 8]),
        ("R2 out 0 0 tc=1", [6]),
        ("R2 out 0 0.0k", [6]),
        ("X1 out s\n.subckt s a\nR2 a 0 0\n.ends", [8]),
        (".param x=0\nX1 out s\n.subckt s a\nR2 a 0 {x}\n.ends", [9]),
        # What a subcircuit's own parameter is cannot be told from its lines alone.
        (".param x=0\nX1 out s\n.subckt s a x=1k\nR2 a 0 {x}\n.ends", []),
    ],
)
def test_a_resistor_that_a_parameter_makes_zero_is_named(
    tmp_path: Path, lines: str, numbers: list[int]
) -> None:
    path = tmp_path / "deck.cir"
    path.write_text(f"t\nV1 in 0 1\nR1 in out 1k\nC1 out 0 1p\n* c\n{lines}\n.tran 10p 40p\n")
    run = simulate(load_deck(path), request(stop=4e-11))
    named = [text for text in run.warnings if "1 mOhm" in text]
    assert [int(text.removeprefix(f"{path}:").split(":")[0]) for text in named] == numbers
    # The divider of 1 kohm and 1 mohm, to the solver's tolerance.
    wanted = 1e-6 / max(len(numbers), 1) if numbers else 0.5
    assert run.vectors["v(out)"][-1] == pytest.approx(wanted, rel=1e-3)
