"""The commands of the studies, each of which is a table of the testbench."""

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from rich.console import Console

from cosim.command_options import JsonFlag, PlotOption, TestbenchPath, check_output
from cosim.errors import InputError

if TYPE_CHECKING:
    from cosim.study_archive import StudyResult


def calibrate(
    testbench: TestbenchPath,
    write: Annotated[
        Path | None,
        typer.Option(metavar="FILE.toml", help="Write the testbench with the trim applied."),
    ] = None,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the calibration to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Solve for the knobs named in \\[calibrate] by running the netlist again: a trim."""
    from cosim.calibration.result import CalibrationRun
    from cosim.calibration.trim import calibrate as run_calibration
    from cosim.calibration.trim import moved, trimmed
    from cosim.calibration_figures import plot_calibration
    from cosim.calibration_terminal import run_line
    from cosim.study_archive import save_study
    from cosim.testbench import load_testbench

    check_output(write, ".toml")
    check_output(archive, ".h5")
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
    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if write is not None:
        written = trimmed(moved(bench, write.absolute().parent), result).to_toml()
        write.write_text(written, encoding="utf-8")
        typer.echo(f"trimmed testbench in {write}", err=True)
    if plot is not None:
        plot_calibration(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def budget(
    source: Annotated[
        Path,
        typer.Argument(
            metavar="TESTBENCH.toml|ARCHIVE.h5",
            help="A testbench, which is run, or an archive, of which nothing is simulated again.",
        ),
    ],
    run: Annotated[int | None, typer.Option(help="Run of the archive; default: the last.")] = None,
    fidelity: Annotated[
        str | None,
        typer.Option(help="as_simulated, free_frame or calibrated, in place of \\[budget]."),
    ] = None,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the budget to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Take the waveform apart: what each imperfection costs, alone and removed."""
    from cosim.budget.study import budget_of, run_budget
    from cosim.dispatch import load
    from cosim.result import gate_result
    from cosim.study_archive import load_study, save_study
    from cosim.testbench import gate_bench, load_testbench

    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    if source.suffix.lower() == ".h5":
        archived = load_study(source, run) or load(source, run=run)
        result = budget_of(gate_result(archived), fidelity=fidelity)
    elif run is not None:
        raise InputError(f"--run goes with an archive, and {source} is a testbench")
    else:
        result = run_budget(gate_bench(load_testbench(source)), fidelity=fidelity)
    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        from cosim.budget_figures import plot_budget

        plot_budget(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def specify(
    testbench: TestbenchPath,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the specification to this archive.")
    ] = None,
    csv: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write the masks as columns.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Say what each block must meet for the target in \\[specify], of a gate or a readout."""
    from cosim.specification.gate_specification import specify_gate
    from cosim.specification.readout_specification import specify_readout
    from cosim.specification_figures import plot_readout_specification, plot_specification
    from cosim.specification_terminal import write_masks
    from cosim.study_archive import save_study
    from cosim.testbench import DesignBench, ReadoutBench, load_testbench

    check_output(archive, ".h5")
    check_output(csv, ".csv")
    check_output(plot, ".png", ".pdf", ".svg")
    bench = load_testbench(testbench)
    of_readout = isinstance(bench, ReadoutBench) or (
        isinstance(bench, DesignBench) and bench.readout is not None
    )
    if csv is not None and of_readout:
        raise InputError("--csv writes masks, and a readout has none")
    if of_readout:
        readout = specify_readout(bench)
        show_study(readout, json_output)
    else:
        gate = specify_gate(bench)
        show_study(gate, json_output)
    if archive is not None:
        number = save_study(readout if of_readout else gate, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if csv is not None:
        typer.echo(f"{write_masks(gate, csv)} rows in {csv}", err=True)
    if plot is not None:
        if of_readout:
            plot_readout_specification(readout, plot)
        else:
            plot_specification(gate, plot)
        typer.echo(f"figure in {plot}", err=True)


def sensitivity(
    testbench: TestbenchPath,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the sensitivities to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Rank the numbers of a testbench and its deck by what moving each of them does."""
    from cosim.sensitivity.study import run_sensitivity
    from cosim.sensitivity_figures import plot_sensitivity
    from cosim.study_archive import save_study
    from cosim.testbench import load_testbench

    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    result = run_sensitivity(load_testbench(testbench), progress=_tell)
    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        plot_sensitivity(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def drift(
    testbench: TestbenchPath,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the study to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Find how long a trim lasts with the sources of drift in \\[drift]."""
    from cosim.drift.study import run_drift
    from cosim.drift_figures import plot_drift
    from cosim.study_archive import save_study
    from cosim.testbench import gate_bench, load_testbench

    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    result = run_drift(gate_bench(load_testbench(testbench)), progress=_tell)
    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        plot_drift(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def _tell(line: str) -> None:
    """Say how far a study is, on a terminal."""
    if sys.stderr.isatty():
        typer.echo(line, err=True)


def train(
    testbench: TestbenchPath,
    taps: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write the filter's taps as columns.")
    ] = None,
    archive: Annotated[
        Path | None, typer.Option(metavar="FILE.h5", help="Add the train to this archive.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Play a train of pulses: what each leaves to the next, and a filter against it."""
    from cosim.study_archive import save_study
    from cosim.testbench import load_testbench
    from cosim.train.study import run_train
    from cosim.train_figures import plot_train
    from cosim.train_terminal import write_taps

    check_output(taps, ".csv")
    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")
    bench = load_testbench(testbench)
    if taps is not None and "predistortion" not in bench.studies.get("train", {}):
        raise InputError("--taps writes the filter of [train.predistortion], and there is none")

    def report(what: str) -> None:
        if sys.stderr.isatty():
            typer.echo(what, err=True)

    result = run_train(bench, progress=report)
    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if taps is not None:
        typer.echo(f"{write_taps(result, taps)} taps in {taps}", err=True)
    if plot is not None:
        plot_train(result, plot)
        typer.echo(f"figure in {plot}", err=True)


def show_study(result: "StudyResult", json_output: bool, *, log: bool = False) -> None:
    """Print the result of a study, as a table or as numbers for machines.

    Parameters
    ----------
    result : BudgetResult or that of another study
    json_output : bool
    log : bool
        Print the simulator's log of its run instead.
    """
    from cosim.budget.result import BudgetResult, budget_numbers
    from cosim.budget_terminal import budget_parts
    from cosim.calibration.result import CalibrationResult, calibration_numbers
    from cosim.calibration_terminal import calibration_table
    from cosim.drift.result import DriftResult
    from cosim.drift_terminal import drift_table
    from cosim.result import as_plain
    from cosim.sensitivity.result import SensitivityResult
    from cosim.sensitivity_terminal import sensitivity_table
    from cosim.specification.result import GateSpecification
    from cosim.specification_terminal import readout_specification_table, specification_table
    from cosim.train.result import TrainResult, train_numbers
    from cosim.train_terminal import train_table

    if isinstance(result, TrainResult):
        if log:
            raise InputError("a train keeps no log of its runs")
        if json_output:
            typer.echo(json.dumps(train_numbers(result), indent=2))
        else:
            Console(highlight=False).print(train_table(result))
    elif isinstance(result, SensitivityResult | DriftResult):
        if log:
            raise InputError("a study of many runs keeps no log of them")
        if json_output:
            typer.echo(json.dumps(as_plain(result), indent=2))
        elif isinstance(result, DriftResult):
            Console(highlight=False).print(drift_table(result))
        else:
            Console(highlight=False).print(sensitivity_table(result))
    elif isinstance(result, CalibrationResult):
        if log:
            raise InputError("a calibration keeps no log of its runs; run the trimmed testbench")
        if json_output:
            typer.echo(json.dumps(calibration_numbers(result), indent=2))
        else:
            Console(highlight=False).print(calibration_table(result))
    elif not isinstance(result, BudgetResult):
        if log:
            raise InputError("a specification ran no simulator, so that there is no log")
        if json_output:
            typer.echo(json.dumps(as_plain(result), indent=2))
        elif isinstance(result, GateSpecification):
            Console(highlight=False).print(specification_table(result))
        else:
            Console(highlight=False).print(readout_specification_table(result))
    elif log:
        typer.echo(json.dumps(result.run.log) if json_output else "\n".join(result.run.log))
    elif json_output:
        typer.echo(json.dumps(budget_numbers(result), indent=2))
    else:
        Console(highlight=False).print(budget_parts(result))


# What `cli.py` registers: each command with the example of its help.
STUDY_COMMANDS: tuple[tuple[Callable[..., None], str], ...] = (
    (budget, "qcosim budget examples/x180_noise.toml --plot budget.png"),
    (calibrate, "qcosim calibrate examples/calibrate_modulator.toml --plot trim.png"),
    (drift, "qcosim drift examples/drift_x180.toml --plot drift.png"),
    (sensitivity, "qcosim sensitivity examples/x90_baseband.toml --plot tornado.png"),
    (specify, "qcosim specify examples/specify_x180.toml --plot specification.png"),
    (train, "qcosim train examples/train_flux.toml --plot train.png --taps taps.csv"),
)
