"""Oracle: what is asked for being shown, drawn and archived, and texts read by hand."""

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
from cosim.drift.reading import read_density, read_rate, read_time, read_walk
from cosim.drift.result import DriftResult, DriftSource
from cosim.drift_figures import plot_drift
from cosim.drift_terminal import drift_table, format_time
from cosim.errors import InputError, UnitError
from cosim.units import parse_quantity
from tests.drift.pulses import drifting


def volts(text: str) -> float:
    return parse_quantity(text, "V")


def test_texts_of_drift() -> None:
    assert read_rate("0.3 mV/min", volts) == pytest.approx(5e-6, rel=1e-12, abs=0.0)
    assert read_rate("-36 mV/h", volts) == pytest.approx(-1e-5, rel=1e-12, abs=0.0)
    assert read_rate("1e-9 /day", float) == pytest.approx(1e-9 / 86400.0, rel=1e-12, abs=0.0)
    assert read_walk("2 uV/sqrt(s)", volts) == 2e-6
    assert read_density("2 uV/sqrt(Hz)", volts) == pytest.approx(4e-12, rel=1e-12, abs=0.0)
    assert read_density("4 mV^2/Hz", volts) == pytest.approx(4e-6, rel=1e-12, abs=0.0)
    assert read_density("1e-14 1/Hz", float) == 1e-14
    assert [read_time(text) for text in ("10 ms", "2 min", "8 h", "1 day")] == [
        0.01,
        120.0,
        28800.0,
        86400.0,
    ]
    for text in ("5", "5 fortnights", "-1 h", 5):
        with pytest.raises(UnitError):
            read_time(text)


def source(name: str, size: float) -> DriftSource:
    return DriftSource(
        name=name,
        keys=("drive.attenuation", "netlist.parameters.leakage_i"),
        unit="K",
        trim_error=0.05,
        shift=0.247,
        deviation=1.03,
        cost=size,
        alone=np.geomspace(1e-3, 1.0, 41) * size,
    )


def made(**changes: object) -> DriftResult:
    time = np.geomspace(10.0, 86400.0, 41)
    mean = 1.5e-4 + 1e-9 * time
    base = DriftResult(
        title="a drift",
        metric="calibrated",
        trimmed=1.5e-4,
        numerical_floor=2e-10,
        right_after=1.51e-4,
        limit=2e-4,
        interval_end=42649.0,
        interval_average=math.inf,
        trim_duration=5.0,
        duty_lost_end=1.17e-4,
        duty_lost_average=0.0,
        told_at=42649.0,
        dominant="rack",
        time=time,
        mean=mean,
        average=0.99 * mean,
        low=0.9 * mean,
        median=0.97 * mean,
        high=1.4 * mean,
        sources=(source("rack", 2e-5), source("nothing", -1e-12)),
        model_error=0.018,
        netlist_runs=10,
        warnings=("told",),
        started="2026-01-01T00:00:00+00:00",
        wall_time=1.0,
        testbench="",
    )
    return replace(base, **changes)  # type: ignore[arg-type]


def printed(result: DriftResult) -> str:
    console = Console(width=80, record=True, file=StringIO())
    console.print(drift_table(result))
    return console.export_text()


def test_the_table_fits_a_terminal_and_says_what_matters() -> None:
    text = printed(made())
    for words in (
        "1.500e-04 ± 2.0e-10",
        "11.85 h by the mean at its end; trims take 0.012 %",
        "over 1 day by the mean over it ",
        "0.247 K ± 1.03 K    +2.00e-05",
        "dominated by        rack",
        "warning: told",
    ):
        assert words in text
    assert "…" not in text
    nothing = made(
        limit=math.nan,
        interval_end=math.nan,
        interval_average=math.nan,
        trim_duration=math.nan,
        duty_lost_end=math.nan,
        duty_lost_average=math.nan,
        numerical_floor=math.nan,
    )
    assert "nan" not in printed(nothing)
    assert "trim every" not in printed(nothing)


def test_only_what_a_trim_and_a_source_have_is_told() -> None:
    steady = replace(source("rack", 2e-5), trim_error=0.0, deviation=0.0)
    text = printed(made(sources=(steady,)))
    assert "trim's own errors" not in text
    assert "0.247 K " in text
    assert "0.247 K ±" not in text
    assert "trim's own errors" in printed(made(sources=(replace(steady, trim_error=0.1),)))


def test_long_times_are_told_in_long_units() -> None:
    values = (1e-5, 59.0, 90.0, 7200.0, 172800.0)
    assert [format_time(value) for value in values] == ["10 µs", "59 s", "1.5 min", "2 h", "2 day"]


@pytest.mark.full
def test_the_figure_draws_with_and_without_a_limit(tmp_path: Path) -> None:
    plot_drift(made(), tmp_path / "a.png")
    assert imread(tmp_path / "a.png").shape[:2] == (690, 1440)
    nan = math.nan
    none = made(limit=nan, interval_end=nan, interval_average=nan, time=np.linspace(0.1, 0.5, 41))
    plot_drift(none, tmp_path / "b.png")
    plot_drift(made(sources=(source("nothing", -1e-12),)), tmp_path / "c.png")
    with pytest.raises(InputError, match="cannot be written"):
        plot_drift(made(), tmp_path / "no" / "a.png")


@pytest.mark.ngspice
def test_the_command_prints_archives_and_draws(tmp_path: Path) -> None:
    sources = (
        {"key": "detuning", "flicker": "1e9 Hz^2/Hz", "name": "qubit"},
        {"key": "carrier", "sidebands": [["1 Hz", "-30 dBc/Hz"], ["10 Hz", "-60 dBc/Hz"]]},
    )
    path = tmp_path / "bench.toml"
    path.write_text(drifting(tmp_path, *sources, limit=1e-2).to_toml(), encoding="utf-8")
    runner = CliRunner()
    words = ["drift", str(path), "--plot", str(tmp_path / "a.png")]
    done = runner.invoke(app, [*words, "--archive", str(tmp_path / "a.h5"), "--json"])
    assert done.exit_code == 0, done.output
    numbers = json.loads(done.stdout)
    assert {entry["name"] for entry in numbers["sources"]} == {"qubit", "carrier"}
    assert numbers["interval_end"] is None  # beyond the horizon
    assert (tmp_path / "a.png").stat().st_size > 1000
    again = runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1", "--json"])
    assert json.loads(again.stdout) == numbers
    assert (
        "dominated by" in runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--run", "1"]).stdout
    )
    drawn = runner.invoke(
        app, ["show", str(tmp_path / "a.h5"), "--run", "1", "--plot", str(tmp_path / "b.png")]
    )
    assert drawn.exit_code == 0, drawn.output
    assert (tmp_path / "b.png").read_bytes() == (tmp_path / "a.png").read_bytes()
    assert runner.invoke(app, ["show", str(tmp_path / "a.h5"), "--log"]).exit_code == 1
