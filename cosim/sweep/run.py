"""A sweep from its plan to its archive: sent to an engine, written as it comes in, resumed."""

import contextlib
import fcntl
import heapq
import math
import os
import time
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from functools import partial
from itertools import chain, groupby
from pathlib import Path

from cosim import archive
from cosim.archive import Row
from cosim.errors import ArchiveError
from cosim.sweep.batches import DONE, Batch, Outcome, Task, take_slice
from cosim.sweep.columns import EACH, FROZEN
from cosim.sweep.engine import Engine, run_batches
from cosim.sweep.goal import make_goal
from cosim.sweep.keeping import keep_of, kept_whole, metric_of, read_ranks
from cosim.sweep.local import local_engine
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planning import make_sweep
from cosim.sweep.record import SWEEP_KINDS, SweepRecord, check_same_plan, make_sweep_record
from cosim.sweep.trims import Trims, find_trim
from cosim.sweep.work import ALL, Shared, failed_row, run_batch
from cosim.testbench import Bench, load_testbench

FLUSH_INTERVAL = 2.0  # s: what is lost at most when the process is killed
FLUSH_ROWS = 256
LARGEST_BATCH = 16
LARGEST_FAMILY = 256  # runs that share a waveform; of more, it is simulated once for each so many
# A readout takes seconds and shares no load of its deck with another, so that a batch gains nothing
# but loses more with its worker; judging what is shared takes a second or so too.
LARGEST_READOUT_BATCH = 1
LARGEST_READOUT_FAMILY = 16
BATCHES_PER_SLOT = 4  # few enough runs in a batch that the slots end at about the same time


@dataclass(frozen=True, slots=True)
class SweepState:
    """How far a sweep has come.

    Parameters
    ----------
    planned : int
        Runs of the plan, or of the share of it that this call was to make.
    finished : int
        Those in the archive with a result.
    failed : dict of int
        Status -> those in the archive without one.
    made : int
        Those that this call has made.
    elapsed : float
        Its wall-clock time in s.
    rate : float
        Runs per second since the first ones were written; 0 before.
    slots : int
        Batches that the engine can run at a time; 0 where no worker has come yet.
    notice : str
        What the reader must know of the archive; mostly empty.
    """

    planned: int
    finished: int = 0
    failed: dict[str, int] = field(default_factory=dict)
    made: int = 0
    elapsed: float = 0.0
    rate: float = 0.0
    slots: int = 1
    notice: str = ""

    @property
    def missing(self) -> int:
        """Runs that are not in the archive."""
        return self.planned - self.finished - sum(self.failed.values())


def run_sweep(
    bench: Bench | str | os.PathLike[str],
    path: str | os.PathLike[str],
    *,
    engine: Engine | None = None,
    resume: bool = False,
    retry_failed: bool = False,
    part: tuple[int, int] = (1, 1),
    on_progress: Callable[[SweepState], None] = lambda state: None,
) -> SweepState:
    """Run the sweep of a testbench into an archive; none of its runs is lost.

    Parameters
    ----------
    bench : Bench or path
        A testbench, of gates or of readouts, with a table [sweep], or its TOML file.
    path : path
        The archive, NAME.h5. While the sweep runs its results stand in NAME.h5.parts beside it
        and can be read at any time.
    engine : Engine or None
        Who runs it; None for one process per processor of this computer.
    resume : bool
        Go on with an archive that was begun, if it is there: what it holds is not run again.
    retry_failed : bool
        On resuming, run again what failed.
    part : tuple of int
        Which share of how many, (3, 64): for jobs that divide a sweep among themselves.
    on_progress : callable
        Called now and then with the state, in which only what has been written counts.

    Returns
    -------
    SweepState
        The state at the end.

    Raises
    ------
    ArchiveError
        If the archive exists and is not to be resumed, was begun with another plan, is being
        written by another sweep, or cannot be written: all that was reported is readable then.
    InputError
        If the testbench, its sweep or its deck is wrong.
    SimulationError
        If the engine fails; a run that fails is a row of the archive, and no error.
    """
    bench = bench if isinstance(bench, Bench) else load_testbench(bench)
    plan = make_sweep(bench)
    record = make_sweep_record(plan, bench)
    target = Path(path)
    with _alone(target):
        if target.exists() or target.with_name(target.name + ".parts").exists():
            _check_archive(target, record, resume)
        else:
            archive.create(target, record)
        engine = local_engine() if engine is None else engine
        desk = _Desk(plan, record, target, on_progress)
        return desk.run(engine, part, retry_failed)


@contextlib.contextmanager
def _alone(path: Path) -> Iterator[None]:
    """Keep other sweeps off the archive for as long as this one runs."""
    side = path.with_name(f".{path.name}.sweep")
    handle = _take(side, path)
    try:
        yield
    finally:
        # Removed while it is still held: whoever has opened it meanwhile sees that it is gone.
        with contextlib.suppress(OSError):
            os.unlink(side)
        os.close(handle)


def _take(side: Path, path: Path) -> int:
    """Open and lock the file that stands for a running sweep."""
    while True:
        try:
            handle = os.open(side, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
        except OSError as error:
            raise ArchiveError(
                f"{path}: no sweep can be written in {path.absolute().parent}: {error.strerror}",
                hint="choose a folder that exists and that you may write in",
            ) from None
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(handle)
            raise ArchiveError(
                f"{path}: another sweep is writing this archive",
                hint="wait for it; jobs that divide a sweep take --slice, each with its archive",
            ) from None
        except OSError:
            # The file system has no locks: then nothing keeps two sweeps apart.
            return handle
        if os.fstat(handle).st_nlink:
            return handle
        os.close(handle)


def _check_archive(path: Path, record: SweepRecord, resume: bool) -> None:
    if not resume:
        raise ArchiveError(
            f"{path} exists",
            hint="say --resume to go on with it, or give the sweep another archive",
        )
    archived = archive.read_plan(path, SWEEP_KINDS)
    if not isinstance(archived, SweepRecord):
        raise ArchiveError(f"{path} holds single runs and no sweep", hint="give another archive")
    check_same_plan(archived, record, str(path))


class _Desk:
    """The state of one call of `run_sweep`."""

    def __init__(
        self,
        plan: SweepPlan,
        record: SweepRecord,
        path: Path,
        on_progress: Callable[[SweepState], None],
    ) -> None:
        self.plan = plan
        self.record = record
        self.path = path
        self.on_progress = on_progress
        self.keep = keep_of(record)
        self.metric = metric_of(record)
        self.goal = make_goal(self.metric)
        self.worst: list[float] = []  # A heap of the metric of the runs that are kept whole.
        self.done: set[int] = set()  # Numbers that are not to be run again.
        self.finished = 0
        self.failed: Counter[str] = Counter()
        self.made = 0
        self.planned = len(plan)
        self.waiting: list[Row] = []
        self.slots = 1
        self.trims: Trims = {}
        self.began = self.flushed = time.monotonic()
        self.first = (0, self.began)  # Runs of the first writing, and when: starting up is slow.

    def find_finished(self, mine: set[int] | None, retry_failed: bool) -> None:
        """Look what the archive holds already of the share of this call."""
        table = read_ranks(self.path, self.metric)
        if not table:
            return
        values = table.get(self.metric)
        for at, (number, status) in enumerate(
            zip(table["id"].tolist(), table["status"].tolist(), strict=True)
        ):
            if status == DONE:
                self.rank(math.nan if values is None else self.goal.metric(float(values[at])))
            if mine is not None and number not in mine:
                continue
            if status == DONE or not retry_failed:
                self.done.add(number)
                self.count(status)

    def rank(self, loss: float) -> None:
        """Take a finished run into the heap of the worst, if it is one."""
        if self.keep > 0 and not math.isnan(loss):
            heapq.heappush(self.worst, loss)
            if len(self.worst) > self.keep:
                heapq.heappop(self.worst)

    def count(self, status: str) -> None:
        if status == DONE:
            self.finished += 1
        else:
            self.failed[status] += 1

    def run(self, engine: Engine, part: tuple[int, int], retry_failed: bool) -> SweepState:
        mine = None
        if part[1] > 1:
            mine = {number + 1 for number in chain.from_iterable(self.groups(engine, part))}
            self.planned = len(mine)
        self.find_finished(mine, retry_failed)
        self.on_progress(self.state())
        try:
            batches = self.batches(engine, part)
            pause = partial(self.pause, engine)
            run_batches(batches, engine, on_result=self.take, on_pause=pause)
        finally:
            self.flush()
        self.on_progress(self.state())
        return replace(self.state(), notice=self.tidy())

    def groups(self, engine: Engine, part: tuple[int, int]) -> Iterator[tuple[int, ...]]:
        # Jobs that divide the plan must cut it alike, whatever each of them runs on.
        slots = part[1] if part[1] > 1 else max(1, engine.slots())
        size = math.ceil(len(self.plan) / (BATCHES_PER_SLOT * slots))
        most, family = LARGEST_BATCH, LARGEST_FAMILY
        if self.plan.is_readout:
            most, family = LARGEST_READOUT_BATCH, LARGEST_READOUT_FAMILY
        families = self.plan.groups(family)
        cut = partial(self.cut, min(most, size))
        return take_slice(chain.from_iterable(map(cut, families)), *part)

    def cut(self, size: int, group: tuple[int, ...]) -> Iterator[tuple[int, ...]]:
        """Cut a group to a size, though never between runs that share a waveform or a trim."""
        piece: tuple[int, ...] = ()
        # A die's own trim takes longer than its runs: each die is a batch.
        size = 1 if self.plan.run(group[0]).trim == EACH else size
        for _, runs in groupby(group, lambda number: self.plan.run(number).family):
            members = tuple(runs)
            if piece and len(piece) + len(members) > size:
                yield piece
                piece = ()
            piece += members
        if piece:
            yield piece

    def batches(self, engine: Engine, part: tuple[int, int]) -> Iterator[Batch]:
        # Runs when the engine is open, so that it knows its slots.
        for group in self.groups(engine, part):
            numbers = [number for number in group if number + 1 not in self.done]
            if numbers:
                shared = Shared(
                    self.plan.only(numbers),
                    self.metric,
                    self.keep,
                    self.threshold(),
                    self.frozen(numbers[0]),
                )
                yield Batch(run_batch, tuple(Task(number + 1) for number in numbers), shared)

    def frozen(self, number: int) -> Trims:
        """Give the trim that all runs share, found here with the first that needs it."""
        run = self.plan.run(number)
        if run.trim != FROZEN:
            return {}
        if not self.trims:
            self.trims = {run.trim_key: find_trim(self.plan, run)}
        return self.trims

    def threshold(self) -> float:
        """Give the metric from which a run is among the worst, as far as is known."""
        if self.keep == ALL or len(self.worst) < self.keep:
            return -math.inf
        return self.worst[0] if self.worst else math.inf

    def take(self, outcome: Outcome) -> None:
        row = outcome.result if outcome.result is not None else failed_row(self.plan, outcome)
        # The batch's time is known to the engine alone where a run was repeated.
        self.waiting.append(row)
        if len(self.waiting) >= FLUSH_ROWS:
            self.flush()

    def pause(self, engine: Engine) -> None:
        self.slots = engine.slots()
        if self.waiting and time.monotonic() - self.flushed >= FLUSH_INTERVAL:
            self.flush()
        self.on_progress(self.state())

    def flush(self) -> None:
        """Write what has come in; only then it counts."""
        rows = tuple(self.waiting)
        if rows:
            archive.write_rows(self.path, rows)
            # An interrupt in between leaves them to be written once more, which does no harm.
            del self.waiting[: len(rows)]
            for row in rows:
                self.count(row.info.status)
                if row.info.status == DONE:
                    self.rank(self.goal.metric(float(row.cells[self.metric])))
            self.made += len(rows)
            if not self.first[0]:
                self.first = (self.made, time.monotonic())
        self.flushed = time.monotonic()

    def tidy(self) -> str:
        """Merge the parts; give a notice if that does not go: all can be read as it is."""
        try:
            archive.consolidate(self.path, kept_whole(self.path, self.record))
        except ArchiveError as error:
            return f"the parts of the archive were not merged: {error}"
        return ""

    def state(self) -> SweepState:
        now = time.monotonic()
        made, since = self.first
        if self.made > made:
            rate = (self.made - made) / max(self.flushed - since, 1e-3)
        else:
            rate = made / (since - self.began) if made else 0.0
        return SweepState(
            self.planned,
            self.finished,
            dict(self.failed),
            self.made,
            now - self.began,
            rate,
            self.slots,
        )
