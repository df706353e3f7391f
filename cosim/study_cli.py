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

StudyArchive = Annotated[
    Path | None,
    typer.Option("--archive", metavar="FILE.h5", help="Add the result to this archive."),
]


def calibrate(
    testbench: TestbenchPath,
    write: Annotated[
        Path | None,
        typer.Option(metavar="FILE.toml", help="Write the testbench with the trim applied."),
    ] = None,
    archive: StudyArchive = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Solve for the knobs named in \\[calibrate] by running the netlist again: a trim."""
    from cosim.calibration.result import CalibrationRun
    from cosim.calibration.trim import calibrate as run_calibration
    from cosim.calibration.trim import moved, trimmed
    from cosim.calibration_terminal import run_line
    from cosim.testbench import load_testbench

    check_output(write, ".toml")
    _check_outputs(archive, plot)
    if write is not None and write.exists() and write.samefile(testbench):
        raise InputError(f"--write {write} would take the place of the testbench itself")
    bench = load_testbench(testbench)
    told: list[CalibrationRun] = []

    def report(run: CalibrationRun) -> None:
        told.append(run)
        _tell(run_line(run, len(told)))

    result = run_calibration(bench, progress=report)
    _give(result, json_output, archive, plot)
    if write is not None:
        written = trimmed(moved(bench, write.absolute().parent), result).to_toml()
        write.write_text(written, encoding="utf-8")
        typer.echo(f"trimmed testbench in {write}", err=True)


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
    archive: StudyArchive = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Take the waveform apart: what each imperfection costs, alone and removed."""
    from cosim.budget.study import budget_of, run_budget
    from cosim.dispatch import load
    from cosim.result import gate_result
    from cosim.study_archive import load_study
    from cosim.testbench import gate_bench, load_testbench

    _check_outputs(archive, plot)
    if source.suffix.lower() == ".h5":
        archived = load_study(source, run) or load(source, run=run)
        result = budget_of(gate_result(archived), fidelity=fidelity)
    elif run is not None:
        raise InputError(f"--run goes with an archive, and {source} is a testbench")
    else:
        result = run_budget(gate_bench(load_testbench(source)), fidelity=fidelity)
    _give(result, json_output, archive, plot)


def specify(
    testbench: TestbenchPath,
    archive: StudyArchive = None,
    csv: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write the masks as columns.")
    ] = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Say what each block must meet for the target in \\[specify], of a gate or a readout."""
    from cosim.specification.gate_specification import specify_gate
    from cosim.specification.readout_specification import specify_readout
    from cosim.specification_terminal import write_masks
    from cosim.testbench import DesignBench, ReadoutBench, load_testbench

    _check_outputs(archive, plot)
    check_output(csv, ".csv")
    bench = load_testbench(testbench)
    of_readout = isinstance(bench, ReadoutBench) or (
        isinstance(bench, DesignBench) and bench.readout is not None
    )
    if csv is not None and of_readout:
        raise InputError("--csv writes masks, and a readout has none")
    if of_readout:
        _give(specify_readout(bench), json_output, archive, plot)
        return
    result = specify_gate(bench)
    _give(result, json_output, archive, plot)
    if csv is not None:
        typer.echo(f"{write_masks(result, csv)} rows in {csv}", err=True)


def sensitivity(
    testbench: TestbenchPath,
    archive: StudyArchive = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Rank the numbers of a testbench and its deck by what moving each of them does."""
    from cosim.sensitivity.study import run_sensitivity
    from cosim.testbench import load_testbench

    _check_outputs(archive, plot)
    result = run_sensitivity(load_testbench(testbench), progress=_tell)
    _give(result, json_output, archive, plot)


def drift(
    testbench: TestbenchPath,
    archive: StudyArchive = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Find how long a trim lasts with the sources of drift in \\[drift]."""
    from cosim.drift.study import run_drift
    from cosim.testbench import gate_bench, load_testbench

    _check_outputs(archive, plot)
    result = run_drift(gate_bench(load_testbench(testbench)), progress=_tell)
    _give(result, json_output, archive, plot)


def train(
    testbench: TestbenchPath,
    taps: Annotated[
        Path | None, typer.Option(metavar="FILE.csv", help="Write the filter's taps as columns.")
    ] = None,
    archive: StudyArchive = None,
    plot: PlotOption = None,
    json_output: JsonFlag = False,
) -> None:
    """Play a train of pulses: what each leaves to the next, and a filter against it."""
    from cosim.testbench import load_testbench
    from cosim.train.study import run_train
    from cosim.train_terminal import write_taps

    check_output(taps, ".csv")
    _check_outputs(archive, plot)
    bench = load_testbench(testbench)
    if taps is not None and "predistortion" not in bench.studies.get("train", {}):
        raise InputError("--taps writes the filter of [train.predistortion], and there is none")

    result = run_train(bench, progress=_tell)
    _give(result, json_output, archive, plot)
    if taps is not None:
        typer.echo(f"{write_taps(result, taps)} taps in {taps}", err=True)


def _tell(line: str) -> None:
    """Say how far a study is, on a terminal."""
    if sys.stderr.isatty():
        typer.echo(line, err=True)


def _check_outputs(archive: Path | None, plot: Path | None) -> None:
    check_output(archive, ".h5")
    check_output(plot, ".png", ".pdf", ".svg")


def _give(
    result: "StudyResult", json_output: bool, archive: Path | None, plot: Path | None
) -> None:
    """Print a result, keep it and draw it, as far as each was asked for."""
    from cosim.study_archive import save_study

    show_study(result, json_output)
    if archive is not None:
        number = save_study(result, archive)
        typer.echo(f"archived as run {number} of {archive}", err=True)
    if plot is not None:
        draw_study(result, plot)


def show_study(result: "StudyResult", json_output: bool) -> None:
    """Print the result of a study, as a table or as numbers for machines."""
    from cosim.study_show import study_numbers, study_table

    if json_output:
        typer.echo(json.dumps(study_numbers(result), indent=2))
    else:
        Console(highlight=False).print(study_table(result))


def show_study_log(result: "StudyResult", json_output: bool) -> None:
    """Print the simulator's log of a study that rests on one run."""
    from cosim.budget.result import BudgetResult

    if not isinstance(result, BudgetResult):
        raise InputError("a study of many runs, or of none, keeps no log of them")
    typer.echo(json.dumps(result.run.log) if json_output else "\n".join(result.run.log))


def draw_study(result: "StudyResult", path: Path) -> None:
    """Draw the result of a study."""
    from cosim.study_figures import plot_study

    plot_study(result, path)
    typer.echo(f"figure in {path}", err=True)


# What `cli.py` registers: each command with the example of its help.
STUDY_COMMANDS: tuple[tuple[Callable[..., None], str], ...] = (
    (budget, "qcosim budget examples/x180_noise.toml --plot budget.png"),
    (calibrate, "qcosim calibrate examples/calibrate_modulator.toml --plot trim.png"),
    (drift, "qcosim drift examples/drift_x180.toml --plot drift.png"),
    (sensitivity, "qcosim sensitivity examples/x90_baseband.toml --plot tornado.png"),
    (specify, "qcosim specify examples/specify_x180.toml --plot specification.png"),
    (train, "qcosim train examples/train_flux.toml --plot train.png --taps taps.csv"),
)
