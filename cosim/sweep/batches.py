"""What an engine carries: batches of runs that share a deck, and what became of each run."""

import time
import traceback
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from functools import partial
from itertools import islice
from math import nan
from typing import Any, TypeVar

from cosim.errors import (
    ConvergenceError,
    CosimError,
    EvolutionError,
    InputError,
    MissingDependencyError,
    SimulationError,
    SimulatorCrashError,
    SimulatorMemoryError,
    SimulatorTimeoutError,
    WaveformError,
)

T = TypeVar("T")

DONE = "done"
FAULT = "fault"
WORKER_DIED = "worker_died"

# From the special to the general: the first class that fits gives the status.
_STATUSES: tuple[tuple[type[BaseException], str], ...] = (
    (ConvergenceError, "no convergence"),
    (SimulatorTimeoutError, "timeout"),
    (SimulatorCrashError, "crash"),
    (SimulatorMemoryError, "memory"),
    (EvolutionError, "evolution error"),
    (SimulationError, "simulation error"),
    (WaveformError, "no usable pulse"),
    (InputError, "input error"),
    (MissingDependencyError, "missing dependency"),
    (MemoryError, "memory"),
)


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one run.

    Parameters
    ----------
    number : int
        Run number.
    status : str
        "done"; "no convergence", "timeout", "crash", "memory", "evolution error", "simulation
        error", "no usable pulse", "input error", "missing dependency" after the typed error of
        that kind; "fault" after any other; "worker_died" when the run ended its worker twice.
    result : any
        What the run gave; None unless it is done.
    error : str
        The error's message; of a fault the traceback; empty when done.
    log : tuple of str
        Lines of the simulator's log that belong to the error.
    wall_time : float
        Wall-clock time of the run in s; NaN when its worker died.
    """

    number: int
    status: str
    result: Any = None
    error: str = ""
    log: tuple[str, ...] = ()
    wall_time: float = nan


@dataclass(frozen=True, slots=True)
class Task:
    """One run to be made.

    Parameters
    ----------
    number : int
        Run number, which no other task of the sweep has.
    arguments : any
        What sets this run apart from the others of its batch; pickles.
    """

    number: int
    arguments: Any = None


@dataclass(frozen=True, slots=True)
class Batch:
    """Runs that go to a worker together.

    Parameters
    ----------
    work : callable
        Takes the batch and gives one outcome per task, in any order. A function at the top of a
        module, or a `functools.partial` of one, so that it pickles.
    tasks : tuple of Task
        The runs, at least one. Any of them may be sent alone, in a batch of one.
    shared : any
        What the tasks have in common, such as the deck; it travels once per batch.
    """

    work: "Callable[[Batch], Iterable[Outcome]]"
    tasks: tuple[Task, ...]
    shared: Any = None

    def split(self) -> "tuple[Batch, ...]":
        """Give each task a batch of its own."""
        return tuple(replace(self, tasks=(task,)) for task in self.tasks)


def status_of(error: BaseException) -> str:
    """Name what an error means for a run.

    Parameters
    ----------
    error : exception
        What the run raised.

    Returns
    -------
    str
        A status of `Outcome`.
    """
    for kind, status in _STATUSES:
        if isinstance(error, kind):
            return status
    return FAULT


def failed(number: int, error: BaseException, wall_time: float = nan) -> Outcome:
    """Make the outcome of a run that raised an error.

    Parameters
    ----------
    number : int
        Run number.
    error : exception
        What it raised.
    wall_time : float
        Time in s that it took.

    Returns
    -------
    Outcome
        With the message and log of a typed error, or with the traceback of another.
    """
    if isinstance(error, CosimError):
        text, log = str(error), error.log
    else:
        text, log = "".join(traceback.format_exception(error)), ()
    return Outcome(number, status_of(error), error=text, log=log, wall_time=wall_time)


def attempt(number: int, run: Callable[[], object]) -> Outcome:
    """Make one run; whatever it raises becomes its outcome.

    Parameters
    ----------
    number : int
        Run number.
    run : callable
        Makes the run and gives its result.

    Returns
    -------
    Outcome
        Status "done" with the result, or the status of the error.
    """
    began = time.perf_counter()
    try:
        result = run()
    # A library that calls sys.exit has failed; it must not end the worker.
    except (Exception, SystemExit) as error:
        return failed(number, error, time.perf_counter() - began)
    return Outcome(number, DONE, result, wall_time=time.perf_counter() - began)


def run_each(run: Callable[[Any, Any], object], batch: Batch) -> tuple[Outcome, ...]:
    """Make the runs of a batch one after the other: `partial(run_each, run)` is a batch's work.

    Parameters
    ----------
    run : callable
        Takes `batch.shared` and a task's arguments and gives the result.
    batch : Batch
        The runs.

    Returns
    -------
    tuple of Outcome
        In the order of the tasks.
    """
    return tuple(
        attempt(task.number, partial(run, batch.shared, task.arguments)) for task in batch.tasks
    )


def perform(batch: Batch) -> tuple[Outcome, ...]:
    """Do a batch's work, in the worker; a batch whose work itself fails is done task by task.

    Parameters
    ----------
    batch : Batch
        The runs.

    Returns
    -------
    tuple of Outcome
        Exactly one for each task.
    """
    began = time.perf_counter()
    try:
        return _one_for_each(batch, batch.work(batch))
    except (Exception, SystemExit) as error:
        if len(batch.tasks) == 1:
            return (failed(batch.tasks[0].number, error, time.perf_counter() - began),)
        return tuple(outcome for single in batch.split() for outcome in perform(single))


def _one_for_each(batch: Batch, outcomes: Iterable[Outcome]) -> tuple[Outcome, ...]:
    known = tuple(outcomes)
    wanted = sorted(task.number for task in batch.tasks)
    got = sorted(outcome.number for outcome in known)
    if got != wanted:
        raise RuntimeError(f"the work on the runs {wanted} gave outcomes of the runs {got}")
    return known


def take_slice(groups: Iterable[T], part: int, parts: int) -> Iterator[T]:
    """Take every n-th group of runs, for jobs that share a plan out among themselves.

    The rule counts groups of the whole plan, so that it gives every job the same share whatever
    has been finished meanwhile: slice first, then leave out what is there.

    Parameters
    ----------
    groups : iterable
        All groups or batches of the plan, in its order.
    part : int
        Which share, from 1.
    parts : int
        How many shares there are.

    Returns
    -------
    iterator
        The groups part, part + parts, part + 2 parts, ..., counted from 1.

    Raises
    ------
    InputError
        If there is no such share.
    """
    if not 1 <= part <= parts:
        raise InputError(
            f"slice {part}/{parts}: the first number must lie between 1 and the second",
            hint="3/64 is the third of 64 shares",
        )
    return islice(groups, part - 1, None, parts)


def parse_slice(text: str) -> tuple[int, int]:
    """Read a share as a user writes it.

    Parameters
    ----------
    text : str
        "3/64".

    Returns
    -------
    tuple of int
        Part and parts, (3, 64).

    Raises
    ------
    InputError
        If the text is something else, or there is no such share.
    """
    part, _, parts = text.partition("/")
    # isdecimal alone would let other scripts' digits pass.
    if not (text.isascii() and part.isdecimal() and parts.isdecimal()):
        raise InputError(f"slice {text!r}: wanted two whole numbers", hint="write it as 3/64")
    take_slice((), int(part), int(parts))
    return int(part), int(parts)
