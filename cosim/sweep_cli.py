"""The commands of sweeps: `qcosim sweep`, `merge`, `verify` and `rerun`, and sweeps in others."""

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

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
    from cosim.sweep.statistics import SweepSummary

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
    from cosim.sweep.run import kept_whole
    from cosim.sweep.shares import shares_beside

    given = tuple(others) if others else shares_beside(archive)
    if not given and not archive.exists():
        raise ArchiveError(
            f"{archive}: there is neither such an archive nor shares of it beside it",
            hint="name the archives to merge: qcosim merge ALL.h5 ONE.h5 TWO.h5",
        )
    count = store.merge(archive, given) if given else 0
    parts = store.consolidate(archive, kept_whole(archive))
    typer.echo(f"{count} runs from {len(given)} archives, {parts} parts merged", err=True)
    show_sweep(archive, json_output=False, plot=None, table=False)


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
                    else f"fidelities differ by {item.difference:.1e} (allowed: {item.allowed:.1e})"
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
    from cosim.figures import plot_gate
    from cosim.result import as_numbers
    from cosim.sweep.repetition import rerun as run_again
    from cosim.terminal import result_table

    check_output(into, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    if into is not None:
        check_run_archive(into)
    result = run_again(archive, number, testbench=testbench)
    if json_output:
        typer.echo(json.dumps(as_numbers(result), indent=2))
    else:
        Console(highlight=False).print(result_table(result))
    if into is not None:
        typer.echo(f"archived as run {save(result, into)} of {into}", err=True)
    if plot is not None:
        plot_gate(result, plot)
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


def show_sweep(
    path: Path,
    *,
    json_output: bool,
    plot: Path | None,
    table: bool,
    limit: float | None = None,
    metric: str | None = None,
) -> None:
    """Print what a sweep tells.

    Parameters
    ----------
    path : Path
        Its archive.
    json_output : bool
        Numbers for machines.
    plot : Path or None
        File of a figure.
    table : bool
        Whether to give the table of all runs too, to machines.
    limit, metric : float, str or None
        In place of what the testbench says.
    """
    import numpy as np

    from cosim import archive as store
    from cosim.result import as_columns
    from cosim.sweep.batches import DONE
    from cosim.sweep.goal import make_goal
    from cosim.sweep.repetition import read_record
    from cosim.sweep.statistics import summarise
    from cosim.sweep_figures import plot_sweep
    from cosim.sweep_terminal import summary_table

    record = read_record(path)
    own = f"{record.fidelity}.average_gate_fidelity"
    bound = limit if limit is not None else record.limit if metric in (None, own) else math.nan
    columns, units = store.read_table(path), store.read_units(path)
    judged = dict(columns)
    if columns and DONE not in columns["status"]:
        # Where no run has a result, the table has no column of it either.
        judged.setdefault(metric or own, np.full(len(columns["id"]), math.nan))
    summary = summarise(
        judged,
        record.inputs,
        make_goal(metric or own, bound),
        planned=record.runs,
        units=units,
    )
    if json_output:
        numbers = summary_numbers(summary)
        if table:
            numbers["table"] = as_columns(columns)
        typer.echo(json.dumps(numbers, indent=2))
    else:
        console = Console(highlight=False)
        console.print(f"[bold]{record.title or path}[/bold]")
        console.print(summary_table(summary))
    if plot is not None:
        plot_sweep(judged, units, summary, plot)
        typer.echo(f"figure in {plot}", err=True)


def summary_numbers(summary: "SweepSummary") -> dict[str, Any]:
    """Turn a summary into plain numbers for machines.

    Parameters
    ----------
    summary : SweepSummary
        From `cosim.sweep.statistics.summarise`.

    Returns
    -------
    dict
        Its fields; a number that does not exist is None.
    """
    from cosim.result import as_plain

    numbers: dict[str, Any] = as_plain(summary)
    return numbers


def show_sweep_run(path: Path, number: int, *, json_output: bool, log: bool) -> None:
    """Print one run of a sweep: whole where it was kept so, else its row.

    Parameters
    ----------
    path : Path
        The archive.
    number : int
        Number of the run, from 1.
    json_output : bool
        Numbers for machines.
    log : bool
        Only the simulator's log.
    """
    from cosim import archive as store
    from cosim.result import GateResult, as_numbers, as_plain
    from cosim.sweep.record import SWEEP_KINDS, FailedRun
    from cosim.terminal import failure_table, record_table, result_table, row_table

    console = Console(highlight=False)
    table = store.read_table(path)
    at = [k for k, found in enumerate(table.get("id", [])) if found == number]
    if not at:
        raise ArchiveError(
            f"{path}: run {number} is not in the archive", hint="qcosim show ARCHIVE.h5 --json"
        )
    row = {
        name: as_plain(column[at[0]].item() if hasattr(column[at[0]], "item") else column[at[0]])
        for name, column in table.items()
    }
    record = store.read(path, SWEEP_KINDS, number) if number in store.record_numbers(path) else None
    if log:
        if record is None:
            raise ArchiveError(
                f"{path}: of run {number} the row is kept and no log",
                hint=f"qcosim rerun {path} {number} makes it again",
            )
        lines = record.log if isinstance(record, FailedRun) else record.run.log
        typer.echo(json.dumps(lines) if json_output else "\n".join(lines))
    elif json_output:
        whole = as_numbers(record) if isinstance(record, GateResult) else {}
        typer.echo(json.dumps({**row, **whole}, indent=2))
    elif isinstance(record, GateResult):
        console.print(result_table(record))
        console.print(record_table(record))
    elif isinstance(record, FailedRun):
        console.print(failure_table(row, record))
    else:
        console.print(row_table(row, store.read_units(path)))
        typer.echo(f"the run as a whole: qcosim rerun {path} {number}", err=True)


def export_sweep(path: Path, deck: Path | None, csv: Path | None, envelope: Path | None) -> None:
    """Write the table of a sweep's runs for spreadsheets.

    Parameters
    ----------
    path : Path
        The archive.
    deck, csv, envelope : Path or None
        Where to; only `csv` is possible without a run.
    """
    from cosim import archive as store
    from cosim.sweep.csv_export import write_csv

    if csv is None or deck is not None or envelope is not None:
        raise InputError("of a sweep say which run: --run N; or --csv FILE for the table of runs")
    check_output(csv, ".csv")
    table = store.read_table(path)
    write_csv(table, store.read_units(path), csv)
    typer.echo(f"{len(table.get('id', []))} runs in {csv}", err=True)


def testbench_text(path: Path) -> str:
    """Give the testbench that a sweep was begun with.

    Parameters
    ----------
    path : Path
        The archive.

    Returns
    -------
    str
        As TOML.
    """
    from cosim.sweep.repetition import read_record

    return read_record(path).testbench


COMMANDS = (
    (sweep, "qcosim sweep examples/sweep_corners.toml --archive sweep.h5 --workers 4"),
    (merge, "qcosim merge sweep.h5"),
    (verify, "qcosim verify sweep.h5 --repeat 3"),
    (rerun, "qcosim rerun sweep.h5 17 --plot run17.png"),
)
"""The commands and an example of each."""
