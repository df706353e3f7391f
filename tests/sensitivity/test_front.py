"""Oracle: what is asked for being shown, drawn and archived, and the declared result."""

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

from cosim.cli import app
from cosim.errors import InputError
from cosim.sensitivity.result import SensitivityItem, SensitivityResult
from cosim.sensitivity_figures import plot_sensitivity
from cosim.sensitivity_terminal import sensitivity_table
from tests.calibration.pulses import bench


def item(key: str, cost: float, **changes: object) -> SensitivityItem:
    base = SensitivityItem(
        key=key,
        unit="1",
        value=93.0,
        tolerance=0.93,
        step=0.93,
        first=1e-7,
        first_error=1e-8,
        second=1e-4,
        second_error=1e-6,
        cost_low=cost,
        cost_high=-cost,
        bound=1e-9,
        status="resolved",
        turn=np.zeros(3),
        simulated=True,
    )
    return replace(base, **changes)  # type: ignore[arg-type]


def made(**changes: object) -> SensitivityResult:
    base = SensitivityResult(
        title="a study",
        metric="as_simulated",
        value=4.9e-4,
        numerical_floor=6.7e-6,
        noise=1e-7,
        items=(
            item("netlist.parameters.amp", 4.7e-5),
            item("qubit.detuning", 1e-6, unit="Hz", value=0.0, tolerance=1e4, first=1e-9),
            item("netlist.parameters.faint", 1e-12, status="not resolved"),
            item("netlist.parameters.idle", 0.0, status="no effect"),
            item("qubit.t2", math.nan, cost_high=math.nan, status="failed"),
        ),
        netlist_runs=9,
        warnings=("'qubit.t2' could not be moved",),
        started="2026-01-01T00:00:00+00:00",
        wall_time=1.0,
        testbench="",
    )
    return replace(base, **changes)  # type: ignore[arg-type]


def test_the_table_fits_a_terminal_and_says_what_matters() -> None:
    console = Console(width=80, record=True, file=StringIO())
    console.print(sensitivity_table(made()))
    text = console.export_text()
    for words in (
        "infidelity as simulated 4.900e-04 ± 6.7e-06, 9 netlist runs",
        "93 ± 1 %  +4.7e-05  -4.7e-05",
        "0 Hz ± 10 kHz",
        "< 1e-08",  # a derivative below its error
        "not res.",
        "no effect: idle",
        "warning: 'qubit.t2'",
        "Design estimate",
    ):
        assert words in text
    assert "…" not in text
    assert "nan" not in text


def test_the_figure_draws_what_has_an_effect(tmp_path: Path) -> None:
    plot_sensitivity(made(), tmp_path / "a.png")
    # Two bars: the third is below what can be seen beside the first.
    assert imread(tmp_path / "a.png").shape[0] == 150 * (1.6 + 0.5 * 2)
    with pytest.raises(InputError, match="nothing to draw"):
        plot_sensitivity(made(items=made().items[3:]), tmp_path / "b.png")


@pytest.mark.ngspice
def test_the_command_prints_archives_and_draws(tmp_path: Path) -> None:
    study = {"keys": ["netlist.parameters.level", "netlist.parameters.idle"]}
    made = bench(tmp_path, sensitivity=study, accuracy={"floor": False})
    path = tmp_path / "bench.toml"
    path.write_text(made.to_toml(), encoding="utf-8")
    runner = CliRunner()
    words = ["sensitivity", str(path), "--plot", str(tmp_path / "a.png")]
    done = runner.invoke(app, [*words, "--archive", str(tmp_path / "a.h5"), "--json"])
    assert done.exit_code == 0, done.output
    numbers = json.loads(done.stdout)
    assert [entry["key"] for entry in numbers["items"]] == study["keys"]
    assert [entry["status"] for entry in numbers["items"]] == ["resolved", "no effect"]
    assert (tmp_path / "a.png").stat().st_size > 1000
    shown = runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1"])
    assert "no effect: idle" in shown.stdout
    again = runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1", "--json"])
    assert json.loads(again.stdout) == numbers
