"""The commands of sweeps: `qcosim sweep`, `merge`, `verify` and `rerun`, and sweeps in others."""

import json
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console

from cosim.command_options import (
    ArchivePath,
    JsonFlag,
    PlotOption,
    TestbenchPath,
    check_output,
)
from cosim.errors import ArchiveError, InputError

if TYPE_CHECKING:
    from cosim.sweep.engine import Engine

WorkersOption = Annotated[
    int | None,
    typer.Option(metavar="N", help="Processes of this computer; default: one per processor."),
]
SchedulerOption = Annotated[
    str | None,
    typer.Option(metavar="ADDRESS", help="Dask scheduler, tcp://host:8786, or its .json file."),
]
LimitOption = Annotated[
    float | None,
    typer.Option(metavar="NUMBER", help="Limit for the yield, in place of the testbench's."),
]
MetricOption = Annotated[
    str | None,
    typer.Option(metavar="COLUMN", help="Column that is judged: leakage, pulse.amplitude, ..."),
]
MovedTestbench = Annotated[
    Path | None,
    typer.Option("--testbench", metavar="FILE.toml", help="Where the testbench is now."),
]


def sweep(
    testbench: TestbenchPath,
    archive: Annotated[Path, typer.Option(metavar="FILE.h5", help="Where the runs are kept.")],
    workers: WorkersOption = None,
    scheduler: SchedulerOption = None,
    resume: Annotated[
        bool, typer.Option("--resume", help="Go on with the archive if it is there.")
    ] = False,
    retry_failed: Annotated[
        bool, typer.Option("--retry-failed", help="With --resume: run what failed again.")
    ] = False,
    share: Annotated[
        str | None,
        typer.Option(
            "--slice", metavar="K/N", help="Run the K-th of N shares into an archive of its own."
        ),
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Run the sweep of a testbench into one archive: corners, grids, Monte Carlo."""
    from cosim.sweep.batches import parse_slice
    from cosim.sweep.run import run_sweep
    from cosim.sweep.shares import share_path
    from cosim.sweep_progress import shown_progress
    from cosim.sweep_show import show_sweep

    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    if retry_failed and not resume:
        raise InputError("--retry-failed goes with --resume")
    part = (1, 1) if share is None else parse_slice(share)
    target = share_path(archive, *part)
    console = Console(stderr=True, highlight=False)
    try:
        with shown_progress(console) as show:
            state = run_sweep(
                testbench,
                target,
                engine=_engine(workers, scheduler),
                resume=resume,
                retry_failed=retry_failed,
                part=part,
                on_progress=show,
            )
    except KeyboardInterrupt:
        typer.echo(f"what was reported is in {target}; --resume goes on with it", err=True)
        raise
    show_sweep(target, json_output=json_output, plot=plot, table=False)
    if state.notice:
        console.print(f"notice: {state.notice}", style="yellow")
    if part[1] > 1:
        console.print(f"when all {part[1]} shares are there: qcosim merge {archive}")
    if not state.finished and state.planned:
        raise typer.Exit(3)


def merge(
    archive: ArchivePath,
    others: Annotated[
        list[Path] | None,
        typer.Argument(metavar="OTHER.h5...", help="Archives of shares; default: those beside."),
    ] = None,
) -> None:
    """Put the shares of a sweep together, or the parts of one that was interrupted."""
    from cosim import archive as store
    from cosim.sweep.keeping import kept_whole
    from cosim.sweep.repetition import read_record
    from cosim.sweep.shares import shares_beside
    from cosim.sweep_show import show_sweep

    given = tuple(others) if others else shares_beside(archive)
    if not given and not archive.exists():
        raise ArchiveError(
            f"{archive}: there is neither such an archive nor shares of it beside it",
            hint="name the archives to merge: qcosim merge ALL.h5 ONE.h5 TWO.h5",
        )
    count = store.merge(archive, given) if given else 0
    parts = store.consolidate(archive, kept_whole(archive))
    there, planned = len(store.run_numbers(archive)), read_record(archive).runs
    of = f" of {len(given)} archives" if given else ""
    typer.echo(f"{count} new runs{of}, {parts} parts merged", err=True)
    show_sweep(archive, json_output=False, plot=None, table=False)
    if there < planned:
        typer.echo(
            f"{planned - there} of {planned} runs are missing: a share is not there yet, or "
            "was cut short",
            err=True,
        )


def verify(
    archive: ArchivePath,
    repeat: Annotated[
        int, typer.Option(metavar="N", min=0, help="Run N of the finished runs again and compare.")
    ] = 0,
    seed: Annotated[int, typer.Option(help="Of the choice of these runs.")] = 1,
    testbench: MovedTestbench = None,
    json_output: JsonFlag = False,
) -> None:
    """Check an archive: its files, the checksum of every run, and a sample run again."""
    from cosim import archive as store
    from cosim.result import as_plain
    from cosim.sweep.repetition import repeat_sample

    found = store.verify(archive)
    repeated = repeat_sample(archive, repeat, seed=seed, testbench=testbench) if repeat else ()
    if json_output:
        again = [{**as_plain(item), "same": item.same} for item in repeated]
        typer.echo(json.dumps({**as_plain(found), "repeated": again}, indent=2))
    else:
        for line in found.damaged:
            typer.echo(f"damaged: {line}")
        for item in repeated:
            verdict = "the same" if item.same else "NOT THE SAME"
            typer.echo(
                f"run {item.number} made again: {verdict}, "
                + (
                    f"it failed: {item.error}"
                    if item.error
                    else f"{item.what} differ by {item.difference:.1e} "
                    f"(allowed: {item.allowed:.1e})"
                )
            )
        typer.echo(
            f"{found.rows} runs and {found.records} whole records are intact"
            if not found.damaged
            else f"{len(found.damaged)} faults"
        )
    if found.damaged or not all(item.same for item in repeated):
        raise typer.Exit(1)


def rerun(
    archive: ArchivePath,
    number: Annotated[int, typer.Argument(metavar="N", help="Number of the run, from 1.")],
    into: Annotated[
        Path | None,
        typer.Option("--archive", metavar="FILE.h5", help="Add the result to this other archive."),
    ] = None,
    plot: PlotOption = None,
    testbench: MovedTestbench = None,
    json_output: JsonFlag = False,
) -> None:
    """Make one run of a sweep again, alone, with all that a single run gives."""
    from cosim.dispatch import save
    from cosim.result_figures import plot_result
    from cosim.result_show import numbers_of, table_of
    from cosim.sweep.repetition import rerun as run_again

    check_output(into, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    if into is not None:
        check_run_archive(into)
    result = run_again(archive, number, testbench=testbench)
    if json_output:
        typer.echo(json.dumps(numbers_of(result), indent=2))
    else:
        Console(highlight=False).print(table_of(result))
    if into is not None:
        typer.echo(f"archived as run {save(result, into)} of {into}", err=True)
    if plot is not None:
        plot_result(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def check_run_archive(path: Path) -> None:
    """Refuse an archive that a single run cannot be added to, before the run is made.

    Parameters
    ----------
    path : Path
        The archive, which need not exist.

    Raises
    ------
    ArchiveError
        If there is something else, or a sweep, whose numbers are those of its plan.
    """
    from cosim.archive import read_plan, run_numbers

    if path.exists():
        run_numbers(path)
        if read_plan(path, {}) is not None:
            raise ArchiveError(
                f"{path} holds a sweep, and a single run is none of its runs",
                hint="give another archive",
            )


def _engine(workers: int | None, scheduler: str | None) -> "Engine":
    from cosim.sweep.cluster import scheduler_engine
    from cosim.sweep.local import local_engine

    if scheduler is None:
        return local_engine(workers)
    if workers is not None:
        raise InputError("give --workers or --scheduler, not both: a scheduler has its own workers")
    return scheduler_engine(scheduler)


COMMANDS = (
    (sweep, "qcosim sweep examples/sweep_corners.toml --archive sweep.h5 --workers 4"),
    (merge, "qcosim merge sweep.h5"),
    (verify, "qcosim verify sweep.h5 --repeat 3"),
    (rerun, "qcosim rerun sweep.h5 17 --plot run17.png"),
)
"""The commands and an example of each."""
