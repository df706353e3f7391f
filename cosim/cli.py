"""The command line: `qcosim check`, `run` and `show`.

Results go to standard output, everything else to standard error. Exit codes: 0 done, 1 a fault
of the program, 2 the input is wrong, 3 the simulation failed, 130 interrupted.
"""

import importlib.metadata
import io
import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

from cosim.errors import CosimError, InputError, MissingDependencyError, SimulationError

if TYPE_CHECKING:
    from cosim.testbench import Testbench

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode="rich",
    help="From circuit netlists to qubit dynamics: what a drive circuit does to a qubit.",
)

TestbenchPath = Annotated[Path, typer.Argument(metavar="TESTBENCH.toml", help="The testbench.")]
ArchivePath = Annotated[Path, typer.Argument(metavar="ARCHIVE.h5", help="The archive.")]
JsonFlag = Annotated[bool, typer.Option("--json", help="Print numbers for machines, no table.")]


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
    json_output: JsonFlag = False,
) -> None:
    """Validate a testbench, its deck and the environment; nothing long is run."""
    from cosim.checks import check_testbench
    from cosim.terminal import check_table

    findings = check_testbench(testbench, probe=probe)
    if json_output:
        typer.echo(json.dumps({item.name: item.value for item in findings}, indent=2))
    else:
        Console(highlight=False).print(check_table(findings))


@app.command(epilog="Example: qcosim run examples/x90_spin.toml --archive x90.h5 --plot x90.png")
def run(
    testbench: TestbenchPath,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the result to this archive.")
    ] = None,
    plot: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Write a figure (png, pdf or svg).")
    ] = None,
    json_output: JsonFlag = False,
    floor: Annotated[
        bool | None,
        typer.Option(
            "--floor/--no-floor", help="Run twice for error bars, whatever the testbench says."
        ),
    ] = None,
) -> None:
    """Run a testbench from the netlist to the fidelity."""
    from dataclasses import replace

    from cosim.archive import run_numbers
    from cosim.dispatch import run as run_testbench
    from cosim.dispatch import save
    from cosim.result import as_numbers
    from cosim.terminal import result_table
    from cosim.testbench import load_testbench

    _check_output(archive, ".h5")
    _check_output(plot, ".png", ".pdf", ".svg")
    if archive is not None and archive.exists():
        run_numbers(archive)  # Refuses what is no archive, before an hour of simulation.
    bench = load_testbench(testbench)
    if floor is not None:
        bench = replace(bench, accuracy=replace(bench.accuracy, floor=floor))
    with _progress(bench) as report:
        result = run_testbench(bench, progress=report)
    # Numbers first: what goes wrong with a file must not take them away.
    if json_output:
        typer.echo(json.dumps(as_numbers(result), indent=2))
    else:
        Console(highlight=False).print(result_table(result))
    if archive is not None:
        number = save(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        from cosim.figures import plot_gate

        plot_gate(result, plot)
        typer.echo(f"figure in {plot}", err=True)


@app.command(epilog="Example: qcosim show x90.h5 --run 1 --log")
def show(
    archive: ArchivePath,
    run: Annotated[int | None, typer.Option(help="Show this run in detail.")] = None,
    log: Annotated[
        bool, typer.Option("--log", help="Print the simulator's log of the run.")
    ] = False,
    json_output: JsonFlag = False,
) -> None:
    """Show what is in an archive."""
    from cosim.archive import read_table
    from cosim.dispatch import load
    from cosim.result import as_columns, as_numbers
    from cosim.terminal import record_table, result_table, runs_table

    console = Console(highlight=False)
    if run is None and not log:
        table = read_table(archive)
        if json_output:
            typer.echo(json.dumps(as_columns(table), indent=2))
        else:
            console.print(runs_table(table))
        return
    result = load(archive, run=run)
    if log:
        typer.echo(json.dumps(result.run.log) if json_output else "\n".join(result.run.log))
    elif json_output:
        typer.echo(json.dumps(as_numbers(result), indent=2))
    else:
        console.print(result_table(result))
        console.print(record_table(result))


@app.command(epilog="Example: qcosim export x90.h5 --run 1 --deck x90_deck")
def export(
    archive: ArchivePath,
    run: Annotated[int | None, typer.Option(help="Which run; default: the last.")] = None,
    deck: Annotated[
        Path | None,
        typer.Option(metavar="DIR", help="Write the exact deck, to be repeated by ngspice -b."),
    ] = None,
    csv: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write the waveforms as columns.")
    ] = None,
    envelope: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write I and Q as columns.")
    ] = None,
) -> None:
    """Write what is in an archived run as files that other programs read."""
    from cosim.dispatch import load
    from cosim.exporting import export_csv, export_deck, export_envelope

    if deck is csv is envelope is None:
        raise InputError("say what to export: --deck DIR, --csv FILE or --envelope FILE")
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

    found = compare_runs(load(first, run=run), load(second, run=with_run))
    if json_output:
        typer.echo(json.dumps(as_plain(found), indent=2))
    else:
        Console(highlight=False).print(comparison_table(found))


def _check_output(path: Path | None, *endings: str) -> None:
    # A run may take an hour; a name that cannot be written is told before it.
    if path is None:
        return
    if path.suffix.lower() not in endings:
        raise InputError(f"'{path}': wanted a name that ends in {' or '.join(endings)}")
    folder = path.absolute().parent
    if not folder.is_dir():
        raise InputError(f"'{path}': the folder {folder} does not exist")
    if not os.access(folder, os.W_OK):
        raise InputError(f"'{path}': the folder {folder} cannot be written to")


@contextmanager
def _progress(bench: "Testbench") -> Iterator[Callable[[float], None] | None]:
    """Show the simulated time on a terminal; keep quiet elsewhere."""
    console = Console(stderr=True)
    if not console.is_terminal:
        yield None
        return
    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as bar:
        stop = bench.netlist.stop if bench.netlist is not None else None
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
        typer.echo("interrupted", err=True)
        sys.exit(130)
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


def _exit_code(error: CosimError) -> int:
    if isinstance(error, SimulationError):
        return 3
    return 2 if isinstance(error, (InputError, MissingDependencyError)) else 1
