"""The commands of the studies, each of which is a table of the testbench."""

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from cosim.command_options import JsonFlag, PlotOption, TestbenchPath, check_output
from cosim.errors import InputError


def calibrate(
    testbench: TestbenchPath,
    write: Annotated[
        Path | None,
        typer.Option(metavar="FILE.toml", help="Write the testbench with the trim applied."),
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Solve for the knobs named in \\[calibrate] by running the netlist again: a trim."""
    from cosim.calibration.result import CalibrationRun, calibration_numbers
    from cosim.calibration.trim import calibrate as run_calibration
    from cosim.calibration.trim import moved, trimmed
    from cosim.calibration_figures import plot_calibration
    from cosim.calibration_terminal import calibration_table, run_line
    from cosim.testbench import load_testbench

    check_output(write, ".toml")
    check_output(plot, ".png", ".pdf", ".svg")
    if write is not None and write.exists() and write.samefile(testbench):
        raise InputError(f"--write {write} would take the place of the testbench itself")
    bench = load_testbench(testbench)
    told: list[CalibrationRun] = []

    def report(run: CalibrationRun) -> None:
        told.append(run)
        if sys.stderr.isatty():
            typer.echo(run_line(run, len(told)), err=True)

    result = run_calibration(bench, progress=report)
    if json_output:
        typer.echo(json.dumps(calibration_numbers(result), indent=2))
    else:
        Console(highlight=False).print(calibration_table(result))
    if write is not None:
        written = trimmed(moved(bench, write.absolute().parent), result).to_toml()
        write.write_text(written, encoding="utf-8")
        typer.echo(f"trimmed testbench in {write}", err=True)
    if plot is not None:
        plot_calibration(result, plot)
        typer.echo(f"figure in {plot}", err=True)


# What `cli.py` registers: each command with the example of its help.
STUDY_COMMANDS: tuple[tuple[Callable[..., None], str], ...] = (
    (calibrate, "qcosim calibrate examples/calibrate_modulator.toml --plot trim.png"),
)
