"""What `qcosim show` prints of a sweep, and what `qcosim export` writes of its table."""

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import typer
from rich.console import Console

from cosim import archive as store
from cosim.command_options import check_output
from cosim.errors import ArchiveError, InputError
from cosim.result import as_columns, as_plain
from cosim.result_figures import plot_result
from cosim.result_show import numbers_of, table_of
from cosim.sweep.batches import DONE
from cosim.sweep.columns import TRIM
from cosim.sweep.csv_export import write_csv
from cosim.sweep.goal import Goal, make_goal
from cosim.sweep.keeping import metric_of
from cosim.sweep.record import SWEEP_KINDS, FailedRun, SweepRecord
from cosim.sweep.repetition import read_record
from cosim.sweep.statistics import SweepSummary, summarise
from cosim.sweep.trim_comparison import TrimPart, compare_trims
from cosim.sweep_figures import plot_sweep
from cosim.sweep_terminal import describe_inputs, summary_table
from cosim.terminal import failure_table, record_table, row_table
from cosim.trim_terminal import trim_parts

MOST_MESSAGES = 5  # of failed runs that are printed


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

    record = read_record(path)
    own = metric_of(record)
    bound = limit if limit is not None else record.limit if metric in (None, own) else math.nan
    columns, units = store.read_table(path), store.read_units(path)
    judged = dict(columns)
    if columns and DONE not in columns["status"]:
        # Where no run has a result, the table has no column of it either.
        judged.setdefault(metric or own, np.full(len(columns["id"]), math.nan))
    goal = make_goal(metric or own, bound)
    trims = _trims_of(record, judged, goal, units)
    if trims:
        # Dies that are trimmed and dies that are not are not counted together.
        summary = trims[-1].summary
    else:
        summary = summarise(judged, record.inputs, goal, planned=record.runs, units=units)
    if json_output:
        numbers = summary_numbers(summary)
        if trims:
            numbers["trims"] = as_plain(trims)
        if table:
            numbers["table"] = as_columns(columns)
        typer.echo(json.dumps(numbers, indent=2))
    else:
        console = Console(highlight=False)
        console.print(f"[bold]{record.title or path}[/bold]")
        console.print(summary_table(summary, trim_parts(trims, units) if trims else ()))
        for line in failures(columns):
            console.print(line, markup=False, style="red")
    if plot is not None:
        plot_sweep(judged, units, summary, plot)
        typer.echo(f"figure in {plot}", err=True)


def _trims_of(
    record: SweepRecord,
    table: Mapping[str, npt.NDArray[Any]],
    goal: Goal,
    units: Mapping[str, str],
) -> tuple[TrimPart, ...]:
    """Give the runs by their trims; empty where the sweep trims nothing."""
    if TRIM not in record.inputs:
        return ()
    content = json.loads(record.content)["trim"]
    modes = content["runs"]
    planned = dict.fromkeys(modes, record.runs // len(modes))
    return compare_trims(table, record.inputs, goal, content["knobs"], planned, units=units)


def summary_numbers(summary: SweepSummary) -> dict[str, Any]:
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
    numbers: dict[str, Any] = as_plain(summary)
    return numbers


def failures(table: Mapping[str, npt.NDArray[Any]]) -> list[str]:
    """Tell why runs failed: each message once, the most frequent first.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.

    Returns
    -------
    list of str
        With the number of a run that it belongs to.
    """
    found: dict[str, list[int]] = {}
    errors = table.get("error", np.array([]))
    for number, status, error in zip(
        table.get("id", []), table.get("status", []), errors, strict=False
    ):
        if status != DONE:
            first = str(error).splitlines()[:1] or [""]
            found.setdefault(f"{status}: {first[0]}", []).append(int(number))
    ranked = sorted(found.items(), key=lambda pair: -len(pair[1]))
    lines = [
        f"failed, {len(numbers)} x, run {numbers[0]} for one: {text}"
        for text, numbers in ranked[:MOST_MESSAGES]
    ]
    left = len(ranked) - MOST_MESSAGES
    return lines + [f"and {left} more messages: --json has them"] * (left > 0)


def show_sweep_run(
    path: Path, number: int, *, json_output: bool, log: bool, plot: Path | None
) -> None:
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
    plot : Path or None
        File of a figure; only of a run that was kept whole.

    Raises
    ------
    ArchiveError
        If the run is not there, or not kept as it is asked for.
    """
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
    units = store.read_units(path)
    whole = None if isinstance(record, FailedRun) else record
    if plot is not None and whole is None:
        raise ArchiveError(
            f"{path}: run {number} was not kept whole, so that there is nothing to draw",
            hint=f"qcosim rerun {path} {number} --plot {plot} makes it again",
        )
    if log:
        if record is None:
            raise ArchiveError(
                f"{path}: of run {number} the row is kept and no log",
                hint=f"qcosim rerun {path} {number} makes it again",
            )
        lines = record.log if isinstance(record, FailedRun) else record.run.log
        typer.echo(json.dumps(lines) if json_output else "\n".join(lines))
    elif json_output:
        numbers = {} if whole is None else numbers_of(whole)
        typer.echo(json.dumps({**row, **numbers}, indent=2))
    elif whole is not None:
        inputs = {name: row[name] for name in read_record(path).inputs}
        place = describe_inputs(inputs, units)
        console.print(f"run {number}: {place}, seed {row['seed']}", markup=False)
        console.print(table_of(whole))
        console.print(record_table(whole))
        if plot is not None:
            plot_result(whole, plot)
            typer.echo(f"figure in {plot}", err=True)
    elif isinstance(record, FailedRun):
        console.print(failure_table(row, units, record))
    else:
        console.print(row_table(row, units))
        typer.echo(f"the run as a whole: qcosim rerun {path} {number}", err=True)


def export_sweep(path: Path, deck: Path | None, csv: Path | None, envelope: Path | None) -> None:
    """Write the table of a sweep's runs for spreadsheets.

    Parameters
    ----------
    path : Path
        The archive.
    deck, csv, envelope : Path or None
        Where to; only `csv` is possible without a run.

    Raises
    ------
    InputError
        If something else is asked for.
    """
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
    return read_record(path).testbench
