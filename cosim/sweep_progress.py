"""How far a sweep is: a bar on a terminal, plain lines elsewhere."""

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from cosim.sweep.run import SweepState

LINE_INTERVAL = 10.0  # s between two plain lines
SIGN_OF_LIFE = 60.0  # s after which a line comes even if nothing has been finished


@contextmanager
def shown_progress(console: Console) -> Iterator[Callable[[SweepState], None]]:
    """Show the state of a sweep as it goes.

    Parameters
    ----------
    console : rich.console.Console
        Where to.

    Yields
    ------
    callable
        To be called with each `SweepState`.
    """
    if not console.is_terminal:
        yield _Lines(console).show
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
    )
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("starting")

        def show(state: SweepState) -> None:
            done = state.planned - state.missing
            bar.update(task, total=state.planned, completed=done, description=_rate(state))

        yield show


class _Lines:
    """A line now and then, and one at the end."""

    def __init__(self, console: Console) -> None:
        self.console = console
        self.said = -SIGN_OF_LIFE
        self.missing: int | None = None

    def show(self, state: SweepState) -> None:
        now = time.monotonic()
        news = state.missing != self.missing
        if not (state.missing == 0 and news):
            if now < self.said + (LINE_INTERVAL if news else SIGN_OF_LIFE):
                return
        self.said, self.missing = now, state.missing
        # Whoever read the lines may have gone; the sweep goes on.
        with suppress(OSError):
            print(progress_line(state), file=self.console.file, flush=True)


def progress_line(state: SweepState) -> str:
    """Write the state of a sweep as one line.

    Parameters
    ----------
    state : SweepState
        The state.

    Returns
    -------
    str
        For instance "120 of 600 runs, 2 failed, 4.1 runs/s, 2 min left".
    """
    done = state.planned - state.missing
    return f"{done} of {state.planned} runs, {_rate(state)}"


def _rate(state: SweepState) -> str:
    failed = sum(state.failed.values())
    words = [f"{failed} failed"]
    if not state.slots and state.missing:
        words.append("no worker has come yet")
    if state.rate > 0.0:
        rate = state.rate
        words.append(f"{rate:.2g} runs/s" if rate < 10.0 else f"{rate:.0f} runs/s")
        if state.missing:
            words.append(f"{_duration(state.missing / rate)} left")
    return ", ".join(words)


def _duration(seconds: float) -> str:
    for size, name in ((86400.0, "d"), (3600.0, "h"), (60.0, "min")):
        if seconds >= 1.5 * size:
            return (
                f"{seconds / size:.1f} {name}"
                if seconds < 10 * size
                else f"{seconds / size:.0f} {name}"
            )
    return f"{seconds:.0f} s"
