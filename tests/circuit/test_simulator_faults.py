"""Oracle: the fault built into each deck, and the line and time at which it was built in."""

import math
import pickle
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.location import locate
from cosim.circuit.netlist import load_deck
from cosim.circuit.simulator import simulate
from cosim.errors import (
    ConvergenceError,
    CosimError,
    DeckError,
    ForbiddenDeckError,
    MissingFileError,
    SimulatorCrashError,
    SimulatorMemoryError,
    SimulatorTimeoutError,
    UnknownNameError,
    UnsupportedDeckError,
)
from tests.circuit.conftest import Runner

pytestmark = pytest.mark.ngspice

OUT = {"v(out)": "out"}
GOOD = ["v1 in 0 1", "r1 in out 1k", "r2 out 0 1k"]
FILE_SOURCE = (
    '.model fs filesource(file="/nowhere/wave.txt" amploffset=[0] amplscale=[1] timeoffset=0 '
    "timescale=1 timerelative=false amplstep=false)"
)


def assert_healthy(run_lines: Runner) -> None:
    """A good deck after a bad one gives its own numbers."""
    result = run_lines(GOOD, OUT, 1e-9, 1e-11)
    # A divider by two, to the relative tolerance of Newton.
    assert result.vectors["v(out)"] == pytest.approx(0.5, rel=1e-6)
    assert not result.warnings


# Each deck, the error it must raise, the line of "deck.cir" it must name, and words of ngspice.
FAULTS = {
    "model": (["v1 in 0 1", "r1 in out 50", "d1 out 0 nomod"], UnknownNameError, 3, "nomod"),
    "MOS model": (
        ["v1 in 0 1", "m1 out in 0 0 nm w=1u l=1u", "r1 in out 1k"],
        UnknownNameError,
        2,
        "valid modelname",
    ),
    "subcircuit": (["v1 in 0 1", "r1 in out 50", "x1 out 0 nosub"], UnknownNameError, 3, "nosub"),
    "parameter": (["v1 in 0 1", "r1 in out {rx}", "r2 out 0 1"], UnknownNameError, 2, "rx"),
    "parameter of an instance": (
        ["v1 in 0 1", "x1 in out s", ".subckt s a b", "r1 a b {rr}", "r2 b 0 1", ".ends"],
        UnknownNameError,
        4,
        "rr",
    ),
    "word in an instance": (
        ["v1 in 0 1", "x1 in out s", ".subckt s a b", "r1 a b 1", "c1 b 0 1p bar=2", ".ends"],
        DeckError,
        5,
        "bar",
    ),
    "value": (["v1 in 0 1", "r1 in out abc", "r2 out 0 1"], UnknownNameError, 2, "abc"),
    "word": (["v1 in 0 1", "r1 in out 50", "c1 out 0 1p foo=3"], DeckError, 3, "foo"),
    "card": (["v1 in 0 1", "r1 in out 50", ".foo bar"], DeckError, 3, "unimplemented"),
    "duplicate": (["v1 in 0 1", "r1 in out 50", "r1 in out 50"], DeckError, 3, "already exists"),
    "function": (["v1 in 0 1", "b1 out 0 v=foo(v(in))"], DeckError, 2, "foo"),
    "ports": (
        ["v1 in 0 1", "x1 in s", ".subckt s a b", "r1 a b 1k", ".ends"],
        DeckError,
        2,
        "Too few parameters",
    ),
    "ends": (["v1 in 0 1", "x1 in out s", ".subckt s a b", "r1 a b 1k"], DeckError, 3, ".ends"),
    "coupling": (
        ["v1 in 0 1", "l1 in out 1n", "r1 out 0 1", "k1 l1 l5 0.5"],
        UnknownNameError,
        4,
        "l5",
    ),
    "device": (["v1 in 0 1", "n1 out in nm", ".model nm nmod"], UnsupportedDeckError, 2, "device"),
    "include": (["v1 in 0 1", ".include /nowhere/x.inc"], MissingFileError, 2, "/nowhere/x.inc"),
    "library": (["v1 in 0 1", ".lib /nowhere/x.lib tt"], MissingFileError, 2, "/nowhere/x.lib"),
    "data file": (
        ["a1 %vd([out 0]) fs", FILE_SOURCE, "r1 out 0 50"],
        MissingFileError,
        1,
        "cannot open file",
    ),
    "state file": (
        [
            *["v1 in 0 1", "a1 [in in in in] [d1 d2 k r] adc", ".model adc adc_bridge"],
            *["a2 [d1 d2] k r [q1 q2] st", '.model st d_state(state_file="/nowhere/s.txt")'],
            *["a3 [q1] [out] dac", ".model dac dac_bridge", "r1 out 0 1k"],
        ],
        MissingFileError,
        4,
        "failed to open state file",
    ),
    "no value": (["v1 in 0 1", "r1 in out", "r2 out 0 1k"], DeckError, 2, "1 mOhm"),
    "no value in an instance": (
        ["v1 in 0 1", "x1 in out s", ".subckt s a b", "r1 a b", "r2 b 0 1", ".ends"],
        DeckError,
        4,
        "1 mOhm",
    ),
}


@pytest.mark.parametrize("name", FAULTS)
def test_a_faulty_deck_is_named_by_its_own_line(run_lines: Runner, name: str) -> None:
    body, kind, line, words = FAULTS[name]
    with pytest.raises(DeckError) as caught:
        run_lines(body, OUT, 1e-9, 1e-11)
    error = caught.value
    assert type(error) is kind
    assert (error.file, error.line) == ("deck.cir", line)
    assert error.message.startswith(f"deck.cir:{line}: ")
    assert words in error.message
    assert any(words in text for text in error.log)
    copy = pickle.loads(pickle.dumps(error))
    assert (type(copy), str(copy), copy.log) == (kind, str(error), error.log)
    # The stale-circuit trap: after a failed load ngspice would run the previous circuit again.
    assert_healthy(run_lines)


def test_a_faulty_deck_after_a_good_one_gives_no_old_waveform(run_lines: Runner) -> None:
    assert_healthy(run_lines)
    with pytest.raises(UnknownNameError):
        run_lines([*GOOD, "d1 out 0 nomod"], OUT, 1e-9, 1e-11)


@pytest.mark.parametrize(
    ("body", "saves", "missing"),
    [
        (GOOD, {"v(out)": "out", "v(uot)": "uot"}, "v(uot)"),
        (GOOD, {"v(uot)": "uot"}, "v(uot)"),
        (GOOD, {"v(out)": "out", "@m1[id]": "@m1[id]"}, "@m1[id]"),
    ],
    ids=["one of two", "all", "device quantity"],
)
def test_a_missing_vector_is_an_error(
    run_lines: Runner, body: list[str], saves: dict[str, str], missing: str
) -> None:
    with pytest.raises(UnknownNameError) as caught:
        run_lines(body, saves, 1e-9, 1e-11)
    assert missing in caught.value.message


def test_a_near_name_is_offered_for_a_missing_vector(run_lines: Runner) -> None:
    with pytest.raises(UnknownNameError) as caught:
        run_lines(GOOD, {"v(out)": "out", "v(uot)": "uot"}, 1e-9, 1e-11)
    assert "did you mean 'out'?" in str(caught.value)


def test_a_loop_of_sources_fails_at_the_operating_point(run_lines: Runner) -> None:
    with pytest.raises(ConvergenceError, match="at the operating point") as caught:
        run_lines(["v1 out 0 1", "v2 out 0 2", "r1 out 0 50"], OUT, 1e-9, 1e-11)
    assert caught.value.time == 0.0
    assert "#branch" in caught.value.message


def test_a_run_that_stops_says_at_which_time_and_in_which_line(run_lines: Runner) -> None:
    # ln(0.5 - v) has no value once the ramp that starts at 0.5 ns and lasts 0.1 ns is half way up.
    body = [
        "v1 in 0 pulse(0 1 0.5n 0.1n 1p 1 2)",
        "r1 in out 50",
        "c1 out 0 1f",
        "b1 x 0 v=ln(0.5-v(in))",
        "r2 x 0 1",
    ]
    with pytest.raises(ConvergenceError) as caught:
        run_lines(body, OUT, 1e-9, 1e-11)
    assert caught.value.time is not None
    # It stops within a step of 10 ps before the point without a solution.
    assert 0.54e-9 <= caught.value.time <= 0.55e-9
    assert "deck.cir:4: " in caught.value.message
    assert "range for ln" in caught.value.message


def test_trial_steps_out_of_range_do_not_fail_a_run_that_recovers(run_lines: Runner) -> None:
    core = ["v1 in 0 sin(2.5 2.49 5g)", "r1 in out 10", "b1 out 0 i=10*v(out)**3", "c1 out 0 1f"]
    # v(out) solves (v_in - v)/10 = 10 v^3 and stays below 0.36 V, but Newton's first try is 2.5 V.
    plain = run_lines(core, OUT, 2e-9, 2e-11)
    result = run_lines([*core, "b2 y 0 v=sqrt(0.5-v(out))", "r2 y 0 1"], OUT, 2e-9, 2e-11)
    drive = 2.5 + 2.49 * np.sin(2 * math.pi * 5e9 * result.time)
    voltage = result.vectors["v(out)"]
    # The capacitor's 1 fF delays by 10 fs: 3e-4 V at the steepest place.
    assert voltage + 100 * voltage**3 == pytest.approx(drive, abs=2e-2)
    assert voltage[-1] == pytest.approx(plain.vectors["v(out)"][-1], rel=1e-4)  # reltol
    assert any("out of range for sqrt in line b2" in text for text in result.warnings)
    assert any("source stepping" in text for text in result.warnings)


def test_a_floating_node_is_a_named_warning(run_lines: Runner) -> None:
    result = run_lines(
        ["v1 in 0 1", "r1 in out 50", "c1 out mid 1p", "c2 mid 0 1p"], OUT, 1e-9, 1e-11
    )
    assert any("node mid" in text for text in result.warnings)
    assert any("operating point" in text for text in result.warnings)


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (
            ["v1 in 0 1", "r1 in out 1k", "m1 out in 0 0 nm", ".model nm nmos level=1 foo=3"],
            "deck.cir:4: Warning: Model issue on line 6",
        ),
        (
            ["v1 in 0 1", "r1 in out 1k", "r2 out 0 1k", ".ic v(nowhere)=3"],
            "deck.cir:4: Warning : IC on non-existent node - nowhere",
        ),
    ],
    ids=["model parameter", "initial condition"],
)
def test_what_ngspice_passes_over_is_a_warning_with_its_line(
    run_lines: Runner, body: list[str], words: str
) -> None:
    result = run_lines(body, OUT, 1e-9, 1e-11)
    assert any(text.startswith(words) for text in result.warnings), result.warnings


def test_the_check_of_a_model_card_is_one_warning_for_all_of_its_devices(
    run_lines: Runner,
) -> None:
    body = [
        *["v1 in 0 1", "x1 in out s", "x2 in out s", ".subckt s a b", "m1 b a 0 0 nm w=1u l=1u"],
        ".model nm.1 nmos level=54 version=4.5 eta0=-0.5 etab=-7 lmin=0.1u lmax=9u wmin=0.1u "
        "wmax=9u",
        *[".ends", "r1 in out 1k"],
    ]
    result = run_lines(body, OUT, 1e-9, 1e-11)
    assert sum(line.startswith("Checking parameters") for line in result.log) >= 2
    checks = [text for text in result.warnings if "check of the card" in text]
    assert checks == ["deck.cir:6: ngspice's check of the card nm.1: Eta0 = -0.5 is negative"], (
        result.warnings
    )
    assert not any(text.startswith("Warning: Eta0") for text in result.warnings)


def test_a_width_in_the_wrong_unit_points_to_the_scale(run_lines: Runner) -> None:
    body = [
        *["v1 in 0 1", "r1 in out 1k", "m1 out in 0 0 nm w=2u l=1u", ".options scale=1u"],
        ".model nm.1 nmos level=54 version=4.5 lmin=0.1u lmax=9u wmin=0.1u wmax=9u",
    ]
    with pytest.raises(UnknownNameError, match="no model card fits") as caught:
        run_lines(body, OUT, 1e-9, 1e-11)
    assert "scale=1u multiplies all lengths" in caught.value.hint
    assert caught.value.line == 3
    healthy = [line.replace("w=2u l=1u", "w=2 l=1") for line in body]
    assert run_lines(healthy, OUT, 1e-9, 1e-11).vectors["v(out)"].size > 10


@pytest.mark.parametrize(
    "body",
    [
        ["v1 in 0 dc 0 external", "r1 in out 50", "c1 out 0 1p"],
        [".include {scratch}/self.inc", *GOOD],
    ],
    ids=["external source", "file that includes itself"],
)
def test_a_crash_is_an_error_and_the_caller_lives(run_lines: Runner, body: list[str]) -> None:
    data = {"self.inc": b".include self.inc\n"}
    with pytest.raises(SimulatorCrashError, match="signal"):
        run_lines(body, OUT, 1e-9, 1e-11, data=data)
    assert_healthy(run_lines)


def test_a_hang_ends_at_the_time_limit(run_lines: Runner) -> None:
    with pytest.raises(SimulatorTimeoutError) as caught:
        run_lines(["v1 out 0 sin(0 1 5g)", "r1 out 0 50"], OUT, 20e-6, 1e-12, time_limit=0.5)
    assert isinstance(caught.value, TimeoutError)
    assert "0.5 s" in caught.value.message
    assert_healthy(run_lines)


@pytest.mark.parametrize("stop", [1e-3, 10e-6], ids=["at once", "on the way"])
def test_too_much_memory_is_an_error(run_lines: Runner, stop: float) -> None:
    body = ["v1 in 0 sin(0 1 5g)"]
    body += [f"r{n} in n{n} 1k" for n in range(40)] + [f"c{n} n{n} 0 1p" for n in range(40)]
    saves = {f"v(n{n})": f"n{n}" for n in range(40)}
    with pytest.raises(SimulatorMemoryError) as caught:
        run_lines(body, saves, stop, 1e-12, memory_limit=400 * 2**20)
    assert isinstance(caught.value, MemoryError)
    assert "400 MiB" in caught.value.message
    assert_healthy(run_lines)


def test_a_time_limit_of_years_is_one(run_lines: Runner) -> None:
    body = ["v1 in 0 1", "r1 in out 1k", "r2 out 0 1k"]
    assert run_lines(body, OUT, 1e-9, 1e-11, time_limit=1e12).vectors["v(out)"][-1] > 0.4


def test_a_run_cut_short_is_not_taken_for_a_result(run_lines: Runner) -> None:
    # The deck stops at 0.5 ns where 1 ns was asked for, as a run would that ends early.
    with pytest.raises(SimulatorCrashError, match=r"stopped at 5e-10 s of 1e-09 s"):
        run_lines(GOOD, OUT, 1e-9, 1e-11, tran=".tran 1e-11 0.5n 0 1e-11")


@pytest.mark.parametrize(
    "line", ["", "r3 a 0 1k\x0b.control", "r3 a\0 0 1k", "r3 a 0 1k\nr4 a 0 1"]
)
def test_lines_that_the_library_would_split_are_refused(run_lines: Runner, line: str) -> None:
    with pytest.raises(ForbiddenDeckError, match=r"deck\.cir:4: "):
        run_lines([*GOOD, line], OUT, 1e-9, 1e-11)


def test_every_error_is_of_the_tree(run_lines: Runner) -> None:
    with pytest.raises(CosimError):
        run_lines(["bin\x7fgarbage \x80 =(", "}}{{"], OUT, 1e-9, 1e-11)
    assert_healthy(run_lines)


HIERARCHY = """\
* title
x1 a one
x2 a two gain = 3
r1 a 0 abc
.subckt one p
r2 p 0 {loss}
xi p inner
.ends
.subckt two p gain = 1
xi p other
.ends
.subckt inner q
r7 q 0 1
.ends
.subckt other q
r7 q 0
.ends""".splitlines()


@pytest.mark.parametrize(
    ("words", "line"),
    [
        (["Error on line 4 or its substitute:", "r1 a 0 abc"], "r1 a 0 abc"),
        # Where the number and the quoted line disagree, the quoted line counts.
        (["Error on line 2 or its substitute:", "r1 a 0 abc"], "r1 a 0 abc"),
        (["Error on line:", "r.x1.xi.r7 a b 1k"], "r7 q 0 1"),
        (["Warning: r.x2.xi.r7: resistance to low, set to 1 mOhm"], "r7 q 0"),
        (["Netlist line no. 0:", "Undefined parameter [loss]"], "r2 p 0 {loss}"),
        (["something else went wrong"], None),
    ],
)
def test_words_of_ngspice_lead_to_their_line(words: list[str], line: str | None) -> None:
    index = locate(HIERARCHY, words)
    assert (None if index is None else HIERARCHY[index]) == line


def test_a_fault_in_an_included_file_is_named_by_that_file(tmp_path: Path) -> None:
    (tmp_path / "parts.inc").write_text("* parts\n\n.subckt half a b\nr1 a b 1k\nr2 b 0\n.ends\n")
    deck = tmp_path / "top.cir"
    deck.write_text("Divider\n.include parts.inc\nv1 in 0 1\nx1 in out half\n.end\n")
    request = TransientRequest(stop=1e-9, step=1e-11, saves=("v(out)",))
    with pytest.raises(DeckError, match="without a value") as caught:
        simulate(load_deck(deck), request)
    assert Path(caught.value.file).name == "parts.inc"
    assert caught.value.line == 5
