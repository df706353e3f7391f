"""Oracle: answers of the host made by hand, each healthy but for one fault."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit import client
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.client import Answer
from cosim.circuit.verdict import judge
from cosim.errors import (
    ConvergenceError,
    MissingDependencyError,
    SimulatorCrashError,
    SimulatorMemoryError,
    UnknownNameError,
)
from tests.circuit.conftest import Runner, prepared_lines

REQUEST = TransientRequest(stop=1e-9, step=1e-10, memory_limit=10**9)
DECK = prepared_lines(["v1 out 0 1", "a1 in out g"], {"v(out)": "out"}, 1e-9, 1e-10)


def answer() -> Answer:
    time = np.linspace(0.0, 1e-9, 11)
    return Answer(
        log=["stdout Doing analysis at TEMP = 27.000000 and TNOM = 27.000000"],
        vectors={"time": time, "out": np.ones(11)},
        done={
            "faults": {"load": "", "run": ""},
            "plots": ["tran1"],
            "wall_time": 0.1,
            "available": ["out", "time"],
        },
        end={"timeout": False, "code": 0, "peak": 10**7, "memory_limit": 10**9},
        part=1.0,
        overhead_time=0.01,
    )


def with_vectors(time: list[float], out: list[float]) -> Answer:
    return replace(answer(), vectors={"time": np.array(time), "out": np.array(out)})


def test_a_healthy_answer_is_a_result() -> None:
    result = judge(DECK, REQUEST, answer(), "ngspice-39", True)
    assert result.time.size == 11
    assert np.array_equal(result.vectors["v(out)"], np.ones(11))
    assert result.log == ("Doing analysis at TEMP = 27.000000 and TNOM = 27.000000",)
    assert result.warnings == ()
    assert (result.wall_time, result.overhead_time) == (0.1, 0.01)
    assert result.deck == DECK.lines


def test_notices_of_the_preparation_stand_on_the_result() -> None:
    deck = replace(DECK, notices=("deck.cir:7: a .control block was left out",))
    result = judge(deck, REQUEST, answer(), "ngspice-39", True)
    assert result.warnings == deck.notices
    assert result.remarks == ()


def test_what_ngspice_says_stands_apart_from_the_notices() -> None:
    deck = replace(DECK, notices=("deck.cir:7: a .control block was left out",))
    said = replace(answer(), log=["stderr Warning: something"])
    result = judge(deck, REQUEST, said, "ngspice-39", True)
    assert result.warnings == (*deck.notices, "Warning: something")
    assert result.remarks == ("Warning: something",)
    assert result.origins == deck.origins
    assert len(result.origins) == len(result.deck)


@pytest.mark.parametrize(
    ("bad", "words"),
    [
        (with_vectors([0.0, 5e-10], [1.0, 1.0]), "stopped at 5e-10 s"),
        (with_vectors([0.0, 2e-9], [1.0, 1.0]), "stopped at 2e-09 s"),
        (with_vectors([], []), "stopped at 0 s"),
        (with_vectors([0.0, 5e-10, 5e-10, 1e-9], [1.0] * 4), "does not rise after 5e-10 s"),
        (with_vectors([0.0, 5e-10, 1e-9], [1.0] * 2), "2 values of 'v(out)' for 3 times"),
    ],
    ids=["short", "long", "empty", "standing", "lengths"],
)
def test_a_run_that_lost_its_way_is_no_result(bad: Answer, words: str) -> None:
    with pytest.raises(SimulatorCrashError) as caught:
        judge(DECK, REQUEST, bad, "ngspice-39", True)
    assert words in caught.value.message


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
def test_a_value_that_is_not_finite_is_named_with_its_time(value: float) -> None:
    bad = with_vectors([0.0, 5e-10, 1e-9], [1.0, value, 1.0])
    with pytest.raises(ConvergenceError, match="not finite from t = 5e-10 s on") as caught:
        judge(DECK, REQUEST, bad, "ngspice-39", True)
    assert caught.value.time == 5e-10


def test_an_absent_or_empty_vector_is_named() -> None:
    for out in ({}, {"out": np.array([])}):
        bad = replace(answer(), vectors={"time": np.linspace(0.0, 1e-9, 11), **out})
        with pytest.raises(UnknownNameError, match=r"no vector for 'v\(out\)'"):
            judge(DECK, REQUEST, bad, "ngspice-39", True)


def test_an_old_plot_is_not_taken_for_a_new_one() -> None:
    # The child sends the time only of a transient plot that is new.
    bad = replace(answer(), vectors={})
    with pytest.raises(SimulatorCrashError, match="no transient"):
        judge(DECK, REQUEST, bad, "ngspice-39", True)


def test_a_fault_of_the_library_is_no_result() -> None:
    good = answer()
    assert good.done is not None
    faults = {"load": "", "run": "ngSpice_Command 'run' returned 1"}
    with pytest.raises(SimulatorCrashError, match="returned 1"):
        judge(DECK, REQUEST, replace(good, done=good.done | {"faults": faults}), "", True)


@pytest.mark.parametrize(
    ("code", "peak", "kind"),
    [
        (-11, 10**7, SimulatorCrashError),
        (-6, 9 * 10**8, SimulatorMemoryError),  # a signal near the limit of 10**9 bytes
        (1, 10**7, SimulatorCrashError),
    ],
)
def test_the_end_of_the_process_is_told_by_its_code(
    code: int, peak: int, kind: type[Exception]
) -> None:
    end = {"timeout": False, "code": code, "peak": peak, "memory_limit": 10**9}
    with pytest.raises(kind) as caught:
        judge(DECK, REQUEST, replace(answer(), done=None, end=end), "ngspice-39", True)
    assert type(caught.value) is kind


@pytest.mark.parametrize(("limit", "words"), [(10**9, "the memory limit"), (10**8, "ulimit -v")])
def test_the_memory_limit_that_was_in_force_is_named(limit: int, words: str) -> None:
    end = {"timeout": False, "code": -6, "peak": 0.9 * limit, "memory_limit": limit}
    with pytest.raises(SimulatorMemoryError, match=f"{words}.* of {limit / 2**20:.0f} MiB"):
        judge(DECK, REQUEST, replace(answer(), done=None, end=end), "ngspice-39", True)


@pytest.mark.ngspice
def test_code_models_that_are_not_installed_are_named(
    run_lines: Runner, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    # An empty folder of start files is what a system without Debian's package ngspice has.
    usual = client._environment
    without = {"SPICE_SCRIPTS": str(tmp_path)}
    monkeypatch.setattr(client, "_environment", lambda *place: usual(*place) | without)
    monkeypatch.setattr(client, "_clients", {})
    body = ["v1 in 0 1", "a1 in out g", ".model g gain(gain=2)", "r1 out 0 1k"]
    try:
        with pytest.raises(MissingDependencyError) as caught:
            run_lines(body, {"v(out)": "out"}, 1e-9, 1e-11)
        # A deck without code models does not need the package.
        assert run_lines(["v1 out 0 1"], {"v(out)": "out"}, 1e-9, 1e-11).time.size > 1
    finally:
        client.client_of_this_process().close()
    assert "code models are not installed" in caught.value.message
    assert "apt-get install ngspice" in str(caught.value)
