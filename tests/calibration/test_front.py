"""Oracle: what the testbench asks for being done, and the declared result."""

import json
import math
from dataclasses import replace
from io import StringIO
from pathlib import Path

import numpy as np
import pytest
from matplotlib.image import imread
from rich.console import Console
from typer.testing import CliRunner

import cosim
from cosim.calibration.result import CalibrationResult, CalibrationRun, KnobResult, Limits
from cosim.calibration_figures import plot_calibration
from cosim.calibration_terminal import calibration_table, run_line
from cosim.cli import app
from cosim.errors import InputError
from tests.calibration.pulses import LEVEL, PHASE, bench


def knob_result(key: str = "netlist.parameters.code", unit: str = "1") -> KnobResult:
    return KnobResult(
        key, unit, 85.0, 89.0, 60.0, 89.0, True, 1.0, "high", -1e-5, 5e-5, 1.25e-5, 0.894, 0.05
    )


def made(**changes: object) -> CalibrationResult:
    """A result as it may come out; nothing has run for it."""
    base = CalibrationResult(
        title="a trim",
        metric="as_simulated",
        leakage_weight=0.0,
        before=1.2e-2,
        after=4.9e-4,
        numerical_floor=6.7e-6,
        before_error_bar=1.9e-4,
        leakage_before=2e-5,
        leakage_after=3e-5,
        turn_before=np.array([-0.09, 0.17, -0.17]),
        turn_after=np.array([-0.005, 0.0, 0.001]),
        turn_unreached=np.array([0.0, 5e-4, 5e-4]),
        knobs=(knob_result(), replace(knob_result("qubit.detuning", "Hz"), bound="")),
        cost=1e-5,
        limits=Limits(4e-6, 1e-6, 5e-7, 4.845e-4),
        limited_by="rest",
        runs=3,
        netlist_runs=3,
        complete=True,
        history=(
            CalibrationRun("start", np.array([85.0, 0.0]), 1.2e-2, True),
            CalibrationRun("difference", np.array([86.0, 0.0]), 1.1e-2, True),
            CalibrationRun("step", np.array([99.0, 0.0]), math.inf, True, "no convergence"),
            CalibrationRun("step", np.array([89.0, 1.0]), 4.9e-4, True),
            CalibrationRun("floor", np.array([89.0, 1.0]), 4.9e-4, True),
        ),
        warnings=("the bounds exclude the optimum",),
        started="2026-01-01T00:00:00+00:00",
        wall_time=1.0,
        testbench="",
    )
    return replace(base, **changes)  # type: ignore[arg-type]


def printed(result: CalibrationResult, width: int = 80) -> str:
    console = Console(width=width, record=True, file=StringIO())
    console.print(calibration_table(result))
    return console.export_text()


def test_the_table_fits_a_terminal_and_says_what_matters() -> None:
    text = printed(made())
    for words in (
        "1.200e-02  4.900e-04",
        "± 1.9e-04  ± 6.7e-06",
        "-5.1566°",
        "89 (high)",
        "decoherence and noise",
        "warning: the bounds exclude the optimum",
        "Design estimate",
    ):
        assert words in text
    assert "…" not in text


def test_a_readout_has_no_turns_and_no_decoherence() -> None:
    nan = np.full(3, math.nan)
    text = printed(
        made(
            metric="assignment_error",
            leakage_before=math.nan,
            leakage_after=math.nan,
            turn_before=nan,
            turn_after=nan,
            turn_unreached=nan,
            limits=Limits(0.0, 0.0, 0.0, 4.9e-4),
            before_error_bar=math.nan,
        )
    )
    assert "assignment error" in text
    assert "what no knob moves" in text
    assert "about x" not in text
    assert "nan" not in text


def test_a_run_is_told_in_a_line() -> None:
    runs = made().history
    assert run_line(runs[0], 1) == "run 1 (start): 85, 0: 1.2000e-02"
    assert run_line(runs[2], 3) == "run 3 (step): 99, 0: failed"


@pytest.mark.parametrize(
    "count", [2, *(pytest.param(count, marks=pytest.mark.full) for count in (1, 5))]
)
def test_the_figure_draws_any_number_of_knobs(tmp_path: Path, count: int) -> None:
    knobs = tuple(replace(knob_result(f"qubit.k{at}"), stiffness=5e-5 * at) for at in range(count))
    plot_calibration(made(knobs=knobs, numerical_floor=math.nan), tmp_path / "a.png")
    assert imread(tmp_path / "a.png").shape[0] == 150 * (3.6 + 3.0 * math.ceil(count / 3))
    with pytest.raises(InputError, match="cannot be written"):
        plot_calibration(made(), tmp_path / "no" / "a.png")


@pytest.mark.ngspice
def test_the_command_prints_writes_and_draws(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text(bench(tmp_path, LEVEL, PHASE).to_toml(), encoding="utf-8")
    runner = CliRunner()
    words = ["calibrate", str(path), "--plot", str(tmp_path / "a.png")]
    words += ["--archive", str(tmp_path / "a.h5")]
    done = runner.invoke(app, [*words, "--write", str(tmp_path / "b.toml"), "--json"])
    assert done.exit_code == 0, done.output
    numbers = json.loads(done.stdout)
    assert [item["key"] for item in numbers["knobs"]] == [LEVEL["key"], PHASE["key"]]
    assert len(numbers["history"]) == numbers["runs"] == numbers["netlist_runs"]
    assert set(numbers["limits"]) == {"resolution", "bounds", "unreached", "rest"}
    written = cosim.load_testbench(tmp_path / "b.toml")
    assert written.netlist.parameters["level"] == numbers["knobs"][0]["found"]
    assert (tmp_path / "a.png").stat().st_size > 10_000
    shown = runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1", "--json"])
    assert json.loads(shown.stdout) == numbers
    shown = runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1"])
    assert "infidelity as simulated, 2 knobs" in shown.stdout


def test_what_cannot_be_written_is_refused_before_a_run(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text(bench(tmp_path, LEVEL).to_toml(), encoding="utf-8")
    runner = CliRunner()
    for option, name, words in (
        ("--write", "b.txt", "ends in .toml"),
        ("--write", "bench.toml", "take the place"),
        ("--plot", "a.doc", "ends in .png"),
    ):
        done = runner.invoke(app, ["calibrate", str(path), option, str(tmp_path / name)])
        assert done.exit_code != 0
        assert words in str(done.exception)
