"""The command line: `qcosim check`, `run`, `sweep`, `show` and their like.

Results go to standard output, everything else to standard error. Exit codes: 0 done, 1 a fault
of the program, 2 the input is wrong, 3 the simulation failed, 130 interrupted.
"""

import atexit
import importlib.metadata
import io
import json
import os
import signal
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, NoReturn

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

from cosim.command_options import (
    ArchivePath,
    JsonFlag,
    PlotOption,
    TestbenchPath,
    check_output,
)
from cosim.errors import CosimError, InputError, MissingDependencyError, SimulationError
from cosim.study_cli import STUDY_COMMANDS, draw_study, show_study, show_study_log
from cosim.sweep_cli import (
    COMMANDS,
    LimitOption,
    MetricOption,
    check_run_archive,
)

if TYPE_CHECKING:
    from cosim.decision_result import DecisionResult
    from cosim.readout_result import ReadoutResult
    from cosim.result import GateResult
    from cosim.testbench import Bench

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode="rich",
    help="From circuit netlists to qubit dynamics: what a drive circuit does to a qubit.",
)


def _print_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"qcosim {importlib.metadata.version('qcosim')}")
        raise typer.Exit


@app.callback()
def _common(
    debug: Annotated[bool, typer.Option("--debug", help="Show tracebacks.")] = False,
    version: Annotated[
        bool,
        typer.Option("--version", callback=_print_version, is_eager=True, help="Show the version."),
    ] = False,
) -> None:
    # `main` has read --debug already, and --version has ended the program.
    del debug, version


@app.command(epilog="Example: qcosim check examples/x90_spin.toml")
def check(
    testbench: TestbenchPath,
    probe: Annotated[
        bool,
        typer.Option("--probe", help="Run 200 points and estimate time, memory and disk space."),
    ] = False,
    deck: Annotated[
        bool,
        typer.Option(
            "--deck",
            help="Print the deck as it will be sent; of a sweep that of its first run.",
        ),
    ] = False,
    json_output: JsonFlag = False,
) -> None:
    """Validate a testbench, its deck and the environment; nothing long is run."""
    from cosim.checks import check_testbench
    from cosim.terminal import check_table

    findings, lines = check_testbench(testbench, probe=probe)
    if json_output:
        typer.echo(json.dumps({item.name: item.value for item in findings}, indent=2))
        return
    Console(highlight=False).print(check_table(findings))
    if deck:
        typer.echo("\n".join(("", *lines)))


@app.command(epilog="Example: qcosim run examples/x90_spin.toml --archive x90.h5 --plot x90.png")
def run(
    testbench: TestbenchPath,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the result to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
    floor: Annotated[
        bool | None,
        typer.Option(
            "--floor/--no-floor", help="Run twice for error bars, whatever the testbench says."
        ),
    ] = None,
) -> None:
    """Run a testbench from the netlist to the fidelity, or to the assignment error."""
    from dataclasses import replace

    from cosim.dispatch import run as run_testbench
    from cosim.dispatch import save
    from cosim.testbench import load_testbench

    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    if archive is not None:
        check_run_archive(archive)
    bench = load_testbench(testbench)
    if floor is not None:
        bench = replace(bench, accuracy=replace(bench.accuracy, floor=floor))
    with _progress(bench) as report:
        result = run_testbench(bench, progress=report)
    # Numbers first: what goes wrong with a file must not take them away.
    _print_result(result, json_output)
    if archive is not None:
        number = save(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        _plot_result(result, plot)


@app.command(epilog="Example: qcosim show x90.h5 --run 1 --log")
def show(
    archive: ArchivePath,
    run: Annotated[int | None, typer.Option(help="Show this run in detail.")] = None,
    log: Annotated[
        bool, typer.Option("--log", help="Print the simulator's log of the run.")
    ] = False,
    limit: LimitOption = None,
    metric: MetricOption = None,
    plot: PlotOption = None,
    testbench: Annotated[
        bool, typer.Option("--testbench", help="Print the testbench of a sweep.")
    ] = False,
    json_output: JsonFlag = False,
) -> None:
    """Show what is in an archive: its runs, one of them, or what a sweep tells."""
    from cosim.archive import read_plan, read_table
    from cosim.dispatch import load
    from cosim.result import as_columns
    from cosim.study_archive import load_study
    from cosim.sweep_show import show_sweep, show_sweep_run, testbench_text
    from cosim.terminal import record_table, runs_table

    check_output(plot, ".png", ".pdf", ".svg")
    console = Console(highlight=False)
    if read_plan(archive, {}) is not None:
        if run is not None:
            show_sweep_run(archive, run, json_output=json_output, log=log, plot=plot)
        elif testbench:
            typer.echo(testbench_text(archive), nl=False)
        elif log:
            raise InputError("say which run's log: --run N")
        else:
            show_sweep(
                archive, json_output=json_output, plot=plot, limit=limit, metric=metric, table=True
            )
        return
    if limit is not None or metric is not None or testbench:
        raise InputError(
            f"{archive} holds single runs and no sweep, which alone has --limit, --metric and "
            "--testbench"
        )
    if plot is not None and (run is None or log):
        raise InputError(f"say which run of {archive} to draw: --run N")
    if run is None and not log:
        table = read_table(archive)
        if json_output:
            typer.echo(json.dumps(as_columns(table), indent=2))
        else:
            console.print(runs_table(table))
        return
    study = load_study(archive, run)
    if study is not None and log:
        show_study_log(study, json_output)
        return
    if study is not None:
        show_study(study, json_output)
        if plot is not None:
            draw_study(study, plot)
        return
    result = load(archive, run=run)
    if log:
        typer.echo(json.dumps(result.run.log) if json_output else "\n".join(result.run.log))
    else:
        _print_result(result, json_output)
        if not json_output:
            console.print(record_table(result))
        if plot is not None:
            _plot_result(result, plot)


@app.command(epilog="Example: qcosim export x90.h5 --run 1 --deck x90_deck")
def export(
    archive: ArchivePath,
    run: Annotated[int | None, typer.Option(help="Which run; default: the last.")] = None,
    deck: Annotated[
        Path | None,
        typer.Option(metavar="DIR", help="Write the exact deck, to be repeated by ngspice -b."),
    ] = None,
    csv: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE.csv",
            help="Write the waveforms as columns; of a sweep without --run the table of runs.",
        ),
    ] = None,
    envelope: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write I and Q as columns.")
    ] = None,
) -> None:
    """Write what is in an archived run as files that other programs read."""
    from cosim.archive import read_plan
    from cosim.dispatch import load
    from cosim.exporting import export_csv, export_deck, export_envelope

    if deck is csv is envelope is None:
        raise InputError("say what to export: --deck DIR, --csv FILE or --envelope FILE")
    if run is None and read_plan(archive, {}) is not None:
        from cosim.sweep_show import export_sweep

        export_sweep(archive, deck, csv, envelope)
        return
    _refuse_failed(archive, run)
    result = load(archive, run=run)
    if deck is not None:
        export_deck(result, deck)
        typer.echo(f"repeat the run with: cd {deck} && ngspice -b -r out.raw deck.cir", err=True)
    if csv is not None:
        typer.echo(f"{export_csv(result, csv)} rows in {csv}", err=True)
    if envelope is not None:
        typer.echo(f"{export_envelope(result, envelope)} rows in {envelope}", err=True)


@app.command(epilog="Example: qcosim compare before.h5 after.h5")
def compare(
    first: ArchivePath,
    second: ArchivePath,
    run: Annotated[int | None, typer.Option(help="Run of the first; default: the last.")] = None,
    with_run: Annotated[
        int | None, typer.Option("--with", help="Run of the second; default: the last.")
    ] = None,
    json_output: JsonFlag = False,
) -> None:
    """Compare two archived runs: numbers, waveforms, and what went into them."""
    from cosim.comparison import compare_runs
    from cosim.dispatch import load
    from cosim.result import as_plain
    from cosim.terminal import comparison_table

    _refuse_failed(first, run)
    _refuse_failed(second, with_run)
    found = compare_runs(load(first, run=run), load(second, run=with_run))
    if json_output:
        typer.echo(json.dumps(as_plain(found), indent=2))
    else:
        Console(highlight=False).print(comparison_table(found))


def _print_result(result: "GateResult | ReadoutResult | DecisionResult", json_output: bool) -> None:
    from cosim.result_show import numbers_of, table_of

    if json_output:
        typer.echo(json.dumps(numbers_of(result), indent=2))
    else:
        Console(highlight=False).print(table_of(result))


def _plot_result(result: "GateResult | ReadoutResult | DecisionResult", path: Path) -> None:
    from cosim.result_figures import plot_result

    plot_result(result, path)
    typer.echo(f"figure in {path}", err=True)


def _refuse_failed(archive: Path, run: int | None) -> None:
    """Say of a run without a result that it has none."""
    from cosim.archive import read_table

    table = read_table(archive, columns=("id", "status")) if run is not None else {}
    for number, status in zip(table.get("id", ()), table.get("status", ()), strict=True):
        if number == run and status != "done":
            raise InputError(
                f"{archive}: run {run} has no result: {status}",
                hint=f"`qcosim show {archive} --run {run}` tells more",
            )


_FURTHER: tuple[tuple[Callable[..., None], str], ...] = (*COMMANDS, *STUDY_COMMANDS)
for _command, _example in _FURTHER:
    app.command(epilog=f"Example: {_example}")(_command)


@contextmanager
def _progress(bench: "Bench") -> Iterator[Callable[[float], None] | None]:
    """Show the simulated time on a terminal; keep quiet elsewhere."""
    from cosim.testbench import Testbench

    console = Console(stderr=True)
    if not console.is_terminal:
        yield None
        return
    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as bar:
        # How many runs a readout takes is known at its end only.
        netlist = bench.netlist if isinstance(bench, Testbench) else None
        stop = None if netlist is None else netlist.stop
        task = bar.add_task("simulating", total=stop)

        def report(time: float) -> None:
            bar.update(task, completed=time, description=f"simulated {time * 1e9:.1f} ns")

        yield report


def main() -> None:
    """Run the command line and turn errors into messages and exit codes."""
    # The option may stand before or behind the command.
    debug = "--debug" in sys.argv[1:]
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            # A terminal that knows no degree sign still gets its numbers.
            stream.reconfigure(errors="replace")
    try:
        app(args=[word for word in sys.argv[1:] if word != "--debug"])
    except BrokenPipeError:
        # The reader of the output has gone; there is nobody to tell.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except KeyboardInterrupt:
        _leave_interrupted()
    except SystemExit as end:
        if end.code == 130:
            _leave_interrupted()
        raise
    except CosimError as error:
        if debug:
            raise
        typer.echo(f"error: {error}", err=True)
        for line in error.log[-12:]:
            typer.echo(f"  | {line}", err=True)
        sys.exit(_exit_code(error))
    except Exception as error:
        if debug:
            raise
        typer.echo(f"fault of the program: {type(error).__name__}: {error}", err=True)
        typer.echo("  run it again with --debug for the traceback", err=True)
        sys.exit(1)


def _leave_interrupted() -> NoReturn:
    # A second Ctrl-C while the program ends must not change its exit code. Python gives up its own
    # handlers near its end, but leaves a signal ignored; from the start, that would be inherited.
    signal.signal(signal.SIGINT, lambda *_: None)
    atexit.register(signal.signal, signal.SIGINT, signal.SIG_IGN)
    typer.echo("interrupted", err=True)
    sys.exit(130)


def _exit_code(error: CosimError) -> int:
    if isinstance(error, SimulationError):
        return 3
    return 2 if isinstance(error, (InputError, MissingDependencyError)) else 1
