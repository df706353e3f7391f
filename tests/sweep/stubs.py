"""Runs that take no simulator: they sleep, fail, or end their own process."""

import os
import signal
import sys
import threading
import time
from collections.abc import Iterable
from functools import partial
from typing import Any

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.simulator import simulate_prepared
from cosim.errors import ConvergenceError, SimulatorTimeoutError
from cosim.sweep.batches import Batch, Outcome, Task, run_each
from cosim.sweep.engine import Engine, run_batches


def stub(shared: Any, arguments: Any) -> Any:
    """Do what the arguments say: a word and a value."""
    word, value = arguments
    match word:
        case "square":
            return value * value
        case "sleep":
            time.sleep(value)
        case "where":
            return os.getpid(), {name: os.environ.get(name) for name in value}
        case "no convergence":
            raise ConvergenceError("no operating point", hint="look at node x", log=["stderr x"])
        case "timeout":
            raise SimulatorTimeoutError("the limit of 1 s ran out")
        case "divide":
            return 1 / value
        case "exit":
            sys.exit("a library gave up")
        case "kill":
            os.kill(os.getpid(), signal.SIGKILL)
        case "leave":
            os._exit(3)
        case "kill once":
            with open(value, "a", encoding="utf-8") as file:
                file.write("x")
            if os.path.getsize(value) == 1:
                os._exit(1)
        case "mark":
            with open(value, "a", encoding="utf-8") as file:
                file.write("x")
            time.sleep(6.0)
        case "unpicklable":
            return lambda: None
        case "divider":
            return halve(value)
        case _:
            raise AssertionError(word)
    return word


def halve(volts: float) -> float:
    """A real run of ngspice: a divider by two."""
    circuit = ("* t", f"v1 in 0 {volts!r}", "r1 in out 1k", "r2 out 0 1k", ".save v(out)")
    lines = (*circuit, ".tran 1e-11 1e-9 0 1e-11", ".end")
    deck = PreparedDeck(
        lines=lines,
        origins=(("", 0),) * len(lines),
        keys={"v(out)": "out"},
        commands=(),
        data={},
        notices=(),
    )
    result = simulate_prepared(deck, TransientRequest(stop=1e-9, step=1e-11))
    return float(result.vectors["v(out)"][-1])


def count_wrong(batch: Batch) -> tuple[Outcome, ...]:
    """Work that forgets its last run."""
    return run_each(stub, batch)[:-1]


def batches(orders: Iterable[object], size: int = 1) -> list[Batch]:
    """Cut orders into batches; the runs are numbered from 1."""
    tasks = [Task(number, order) for number, order in enumerate(orders, 1)]
    work = partial(run_each, stub)
    return [Batch(work, tuple(tasks[k : k + size])) for k in range(0, len(tasks), size)]


def sweep(plan: list[Batch], engine: Engine) -> dict[int, Outcome]:
    """Run a plan; every run is reported exactly once."""
    seen: dict[int, Outcome] = {}
    caller = threading.get_ident()

    def note(outcome: Outcome) -> None:
        assert threading.get_ident() == caller
        assert outcome.number not in seen
        seen[outcome.number] = outcome

    run_batches(plan, engine, on_result=note)
    assert sorted(seen) == sorted(task.number for batch in plan for task in batch.tasks)
    return seen
