"""Send batches of runs to an executor, see to workers that die, hand on what comes back.

The seam is `concurrent.futures.Executor`; there is no scheduler here. An `Engine` says how to get
an executor and how its lost workers show. `cosim.sweep.local` and `cosim.sweep.cluster` make
engines; any other executor will do as well.
"""

from collections import Counter, deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import AbstractContextManager, ExitStack
from dataclasses import dataclass
from pickle import PicklingError
from queue import Empty, SimpleQueue

from cosim.errors import SimulationError
from cosim.sweep.batches import WORKER_DIED, Batch, Outcome, failed, perform

# Enough that a worker never waits for the parent, and few enough that little is lost with it.
PER_SLOT = 2

PAUSE = 0.5  # s of waiting after which the caller gets a turn

RESUME_HINT = "see the scheduler's log; resume the sweep for what has not been reported"

_Done = tuple[Outcome, ...]


@dataclass(frozen=True, slots=True)
class Engine:
    """How to get an executor, and how its lost workers show.

    Parameters
    ----------
    open : callable
        Gives a context manager of a `concurrent.futures.Executor`. Left without an error it
        finishes what runs; left with one it ends its workers at once. An executor is such a
        context manager itself, although a plain one never ends a run.
    slots : callable
        How many batches the open executor can run at a time; asked again and again, since workers
        may join and leave.
    lost : callable
        Whether an error of a future means that the worker has died. A `BrokenExecutor` always
        does, and then a new executor is opened.
    retries : int
        How often a run is sent again after its worker died while it was the only one on its way.
        0 where the executor itself repeats it.
    """

    open: Callable[[], AbstractContextManager[Executor]]
    slots: Callable[[], int]
    lost: Callable[[BaseException], bool] = lambda error: False
    retries: int = 1


def run_batches(
    batches: Iterable[Batch],
    engine: Engine,
    *,
    on_result: Callable[[Outcome], None],
    on_pause: Callable[[], None] = lambda: None,
) -> None:
    """Run all batches; every run ends in exactly one outcome, whatever happens to it.

    When a worker dies, the batches on their way are run again one task at a time with nothing
    beside them, so that the run which did it can be named: its outcome is "worker_died". On an
    interrupt the workers end, what has arrived is handed on, and KeyboardInterrupt comes out.

    Parameters
    ----------
    batches : iterable of Batch
        Taken one by one as there is room for them.
    engine : Engine
        From `local_engine`, `scheduler_engine` or `queue_engine`, or one of your own.
    on_result : callable
        Called with each outcome in the caller's thread, in the order in which they come. An error
        that it raises ends the sweep and comes out.
    on_pause : callable
        Called in the same thread when all that has come in is handed on, and every half second
        while nothing comes.

    Raises
    ------
    SimulationError
        If the executor cannot be had, or drops runs without saying why.
    """
    desk = _Desk(engine, on_result, on_pause)
    try:
        desk.run(iter(batches))
    except KeyboardInterrupt:
        desk.report_arrived()
        raise


class _Desk:
    """The state of one call of `run_batches`."""

    def __init__(
        self,
        engine: Engine,
        on_result: Callable[[Outcome], None],
        on_pause: Callable[[], None],
    ) -> None:
        self.engine = engine
        self.on_result = on_result
        self.on_pause = on_pause
        self.flying: dict[Future[_Done], Batch] = {}
        self.landed: SimpleQueue[Future[_Done]] = SimpleQueue()
        self.again: deque[Batch] = deque()  # To be sent before any new batch.
        self.suspects: deque[Batch] = deque()  # Of one task each, to be sent alone.
        self.alone = False  # Whether what is on its way is a suspect.
        self.deaths: Counter[int] = Counter()
        self.arrived: deque[Outcome] = deque()

    def run(self, waiting: Iterator[Batch]) -> None:
        while self.run_on_one_executor(waiting):
            pass

    def run_on_one_executor(self, waiting: Iterator[Batch]) -> bool:
        """Run until all is done, or until the executor is broken, which gives True."""
        broken = False
        with ExitStack() as stack:
            executor = stack.enter_context(self.engine.open())
            while True:
                # All that a broken executor had has to land before another one can start.
                if not broken:
                    broken = self.feed(executor, waiting)
                if not self.flying:
                    return broken
                broken |= self.collect(self.next_landed())
                while self.landed.qsize():
                    broken |= self.collect(self.landed.get())
                self.report()
                self.on_pause()

    def feed(self, executor: Executor, waiting: Iterator[Batch]) -> bool:
        """Send what there is room for; gives True if the executor turned out to be broken."""
        if self.suspects:
            return not self.flying and self.send(executor, self.suspects.popleft(), alone=True)
        if self.flying and self.alone:
            return False
        room = PER_SLOT * max(1, self.engine.slots())
        while len(self.flying) < room:
            batch = self.again.popleft() if self.again else next(waiting, None)
            if batch is None:
                return False
            if self.send(executor, batch, alone=False):
                return True
        return False

    def send(self, executor: Executor, batch: Batch, *, alone: bool) -> bool:
        self.alone = alone
        try:
            future = executor.submit(perform, batch)
        except BrokenExecutor:
            # A worker died while nothing of ours was to blame; this batch has not been sent.
            (self.suspects if alone else self.again).appendleft(batch)
            return True
        except (TypeError, AttributeError, PicklingError) as error:
            # Some executors pickle here. The fault then lands like one from a worker.
            future = Future()
            future.set_exception(error)
        except Exception as error:
            raise SimulationError(
                f"the executor takes no more runs: {error}", hint=RESUME_HINT
            ) from error
        self.flying[future] = batch
        future.add_done_callback(self.landed.put)
        return False

    def next_landed(self) -> "Future[_Done]":
        while True:
            try:
                return self.landed.get(timeout=PAUSE)
            except Empty:
                self.on_pause()

    def collect(self, future: "Future[_Done]") -> bool:
        """Take what a future brings; gives True if its executor is broken."""
        batch = self.flying.pop(future)
        if future.cancelled():
            raise SimulationError(
                f"the executor dropped {len(batch.tasks)} runs on their way, from run "
                f"{batch.tasks[0].number} on: it was closed, or the connection to it was lost",
                hint=RESUME_HINT,
            )
        error = future.exception()
        if error is None:
            self.arrived.extend(future.result())
            return False
        broken = isinstance(error, BrokenExecutor)
        if broken or self.engine.lost(error):
            self.suspect(batch, error)
        elif len(batch.tasks) > 1:
            # Something in it does not pickle, on the way there or back.
            self.again.extend(batch.split())
        else:
            self.arrived.append(failed(batch.tasks[0].number, error))
        return broken

    def suspect(self, batch: Batch, error: BaseException) -> None:
        if not self.alone:
            self.suspects.extend(batch.split())
            return
        number = batch.tasks[0].number
        self.deaths[number] += 1
        if self.deaths[number] <= self.engine.retries:
            self.suspects.appendleft(batch)
            return
        del self.deaths[number]
        text = f"the worker's process died during this run and no other ({error})"
        self.arrived.append(Outcome(number, WORKER_DIED, error=text))

    def report(self) -> None:
        while self.arrived:
            self.on_result(self.arrived.popleft())

    def report_arrived(self) -> None:
        """Hand on what had come in when the sweep was interrupted."""
        while True:
            self.report()
            try:
                future = self.landed.get_nowait()
            except Empty:
                return
            if not future.cancelled() and future.exception() is None:
                self.arrived.extend(future.result())
