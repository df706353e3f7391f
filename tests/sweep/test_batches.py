"""Oracle: counting, and the errors that the runs were told to raise."""

import pickle
from functools import partial

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.errors import (
    CosimError,
    DeckError,
    EvolutionError,
    InputError,
    MissingDependencyError,
    SimulationError,
    SimulatorCrashError,
    SimulatorMemoryError,
)
from cosim.sweep.batches import (
    Batch,
    Outcome,
    attempt,
    parse_slice,
    perform,
    run_each,
    status_of,
    take_slice,
)
from tests.sweep.stubs import batches, count_wrong, stub


def test_a_run_that_is_done() -> None:
    (outcome,) = perform(batches([("square", 3)])[0])
    assert (outcome.number, outcome.status, outcome.result) == (1, "done", 9)
    assert outcome.error == ""
    assert outcome.wall_time >= 0.0


def test_a_typed_error_keeps_its_words_and_its_log() -> None:
    (outcome,) = perform(batches([("no convergence", None)])[0])
    assert outcome.status == "no convergence"
    assert outcome.error == "no operating point\n  look at node x"
    assert outcome.log == ("stderr x",)
    assert outcome.result is None


@pytest.mark.parametrize(("word", "text"), [("divide", "ZeroDivisionError"), ("exit", "gave up")])
def test_any_other_error_keeps_its_traceback(word: str, text: str) -> None:
    before, bad, after = perform(batches([("square", 2), (word, 0), ("square", 4)], 3)[0])
    assert (before.result, after.result) == (4, 16)
    assert bad.status == "fault"
    assert text in bad.error
    assert "stubs.py" in bad.error


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (SimulatorCrashError("x"), "crash"),
        (SimulatorMemoryError("x"), "memory"),
        (EvolutionError("x"), "evolution error"),
        (SimulationError("x"), "simulation error"),
        (DeckError("x"), "input error"),
        (MissingDependencyError("x"), "missing dependency"),
        (MemoryError("x"), "memory"),
        (CosimError("x"), "fault"),
    ],
)
def test_each_error_has_its_status(error: Exception, status: str) -> None:
    assert status_of(error) == status


def test_an_interrupt_is_no_outcome() -> None:
    def interrupt() -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        attempt(1, interrupt)


def broken_work(batch: Batch) -> tuple[Outcome, ...]:
    """Fail as a whole wherever the run 2 is in the batch."""
    if any(task.number == 2 for task in batch.tasks):
        raise ValueError("the deck does not load")
    return run_each(stub, batch)


def test_work_that_fails_as_a_whole_is_done_task_by_task() -> None:
    batch = Batch(broken_work, batches([("square", k) for k in range(1, 4)], 3)[0].tasks)
    outcomes = perform(batch)
    assert [outcome.status for outcome in outcomes] == ["done", "fault", "done"]
    assert "the deck does not load" in outcomes[1].error


def test_work_that_forgets_a_run_is_a_fault() -> None:
    batch = Batch(count_wrong, batches([("square", 1), ("square", 2)], 2)[0].tasks)
    outcomes = perform(batch)
    assert [(outcome.number, outcome.status) for outcome in outcomes] == [
        (1, "fault"),
        (2, "fault"),
    ]
    assert "gave outcomes of the runs []" in outcomes[0].error


def test_a_batch_and_its_outcomes_pickle() -> None:
    batch = batches([("square", 3), ("no convergence", None)], 2)[0]
    again = pickle.loads(pickle.dumps(batch))
    assert again.tasks == batch.tasks
    assert isinstance(again.work, partial)
    outcomes = perform(again)
    assert pickle.loads(pickle.dumps(outcomes)) == outcomes


@settings(derandomize=True, deadline=None)
@given(count=st.integers(0, 60), parts=st.integers(1, 12))
def test_the_slices_share_the_plan_out(count: int, parts: int) -> None:
    plan = batches([("square", k) for k in range(count)], 2)
    shares = [list(take_slice(plan, part, parts)) for part in range(1, parts + 1)]
    assert sorted(b.tasks[0].number for share in shares for b in share) == [
        batch.tasks[0].number for batch in plan
    ]
    sizes = [len(share) for share in shares]
    assert max(sizes) - min(sizes) <= 1


def test_a_slice_counts_groups_of_the_whole_plan() -> None:
    plan = batches([("square", k) for k in range(12)], 2)
    share = [task.number for batch in take_slice(plan, 2, 3) for task in batch.tasks]
    assert share == [3, 4, 9, 10]


@pytest.mark.parametrize(("text", "wanted"), [("3/64", (3, 64)), ("1/1", (1, 1))])
def test_a_slice_is_read(text: str, wanted: tuple[int, int]) -> None:
    assert parse_slice(text) == wanted


@pytest.mark.parametrize("text", ["0/4", "5/4", "3", "3/", "/4", "-1/4", "1/4/2", "a/b", "٣/٤", ""])
def test_a_wrong_slice_says_what_is_wanted(text: str) -> None:
    with pytest.raises(InputError, match=r"write it as 3/64|between 1 and the second"):
        parse_slice(text)
