"""Oracle: what the command is asked for being done, and the declared result read back."""

import json
import math
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tomli_w
from matplotlib.image import imread
from rich.console import Console
from typer.testing import CliRunner

from cosim.cli import app
from cosim.dsp.predistortion import filter_samples
from cosim.errors import InputError
from cosim.study_archive import load_study, save_study
from cosim.train.result import TrainResult
from cosim.train.study import run_train
from cosim.train_figures import plot_train
from cosim.train_terminal import train_table
from tests.train.lines import LOW_PASS, MIXED, POINTS, bench

pytestmark = pytest.mark.ngspice


def write_bench(folder: Path, train: dict[str, Any]) -> Path:
    (folder / "line.cir").write_text(LOW_PASS, encoding="utf-8")
    tables = {
        "title": "a line with one pole",
        "netlist": {"file": "line.cir", "max_step": "100 ps"},
        "stimulus": [{"source": "vin", "points": POINTS}],
        "drive": {"i": "v(out)", "termination": "in deck", "carrier": "5 GHz"},
        "qubit": {"kind": "spin", "frequency": "5 GHz", "rabi_per_volt": "1 MHz/V"},
        "gate": {"target": "z90"},
        "accuracy": {"floor": False},
        "train": train,
    }
    path = folder / "line.toml"
    path.write_text(tomli_w.dumps(tables), encoding="utf-8")
    return path


TRAIN: dict[str, Any] = {
    "spacing": "20 ns",
    "pattern": "110100",
    "shift_per_volt": "-70 MHz/V",
    "step": "60 ns",
    "predistortion": {"taps": 16, "rate": "1 GHz", "full_scale": "3 V"},
}


def test_a_command_does_all_that_it_is_asked_for(tmp_path: Path) -> None:
    path = write_bench(tmp_path, TRAIN)
    archive, taps, figure = (tmp_path / name for name in ("a.h5", "taps.csv", "a.png"))
    asked = ["train", str(path), "--json", "--archive", str(archive)]
    done = CliRunner().invoke(app, [*asked, "--taps", str(taps), "--plot", str(figure)])
    assert done.exit_code == 0, done.output
    numbers = json.loads(done.stdout)
    assert numbers["kind"] == "shift"
    assert numbers["factors"] == [1.0, 1.0, 0.0, 1.0, 0.0, 0.0]
    assert numbers["netlist_runs"] == 5  # train, one pulse, train with filter, two steps
    assert len(numbers["before"]["infidelity"]) == 6
    assert numbers["predistortion"]["after"]["residual"] < numbers["before"]["residual"]
    assert "envelope" not in numbers["before"]
    # The taps are those of the result, to the last digit.
    text = taps.read_text(encoding="utf-8").splitlines()
    assert text[0] == "# rate: 1000000000 Hz"
    assert text[2] == "tap,delay (s),weight (1)"
    rows = np.array([[float(cell) for cell in line.split(",")] for line in text[3:]])
    assert rows[:, 2].tolist() == numbers["predistortion"]["taps"]
    assert rows[:, 1] == pytest.approx(np.arange(16) * 1e-9, abs=1e-18)
    # And they make the peak that is told from the samples of the pulse.
    pulse = np.interp(np.arange(40) * 1e-9, [2e-9, 4e-9, 12e-9, 14e-9], [0.0, 0.5, 0.5, 0.0])
    alone = np.abs(filter_samples(pulse, rows[:, 2])).max() / 0.5
    assert alone <= numbers["predistortion"]["peak_after"] + 1e-12
    height, width, _ = imread(figure).shape
    assert min(height, width) > 500
    again = load_study(archive)
    assert isinstance(again, TrainResult)
    assert again.before.turn.tolist() == numbers["before"]["turn"]
    assert again.before.envelope.iq.size > 1000
    shown = CliRunner().invoke(app, ["show", str(archive), "--run", "1", "--json"])
    assert json.loads(shown.stdout)["before"] == numbers["before"]


def test_tables_tell_of_a_driven_train(tmp_path: Path) -> None:
    driven = bench(
        tmp_path,
        MIXED,
        {"spacing": "20.3 ns", "pattern": [1, -0.5, 0, 0]},
        drive={"probe": "v(out)", "termination": "in deck", "carrier": "1 GHz"},
        netlist={"file": "line.cir", "steps_per_period": 64},
        qubit={
            "kind": "spin",
            "frequency": "1 GHz",
            "rabi_per_volt": "50 MHz/V",
            "detuning": "1 kHz",
        },
        gate={"target": "x90"},
        accuracy={"floor": False},
    )
    result = run_train(driven)
    out = StringIO()
    Console(file=out, width=200).print(train_table(result))
    text = out.getvalue()
    for words in (
        "target x90, 4 slots of 20.3 ns with 2 pulses, a line that drives the qubit",
        "not a whole number: its phase within the pulse differs from slot to slot",
        "is 1299.2 time steps, not a whole number",
        "the qubit lies 1 kHz from the carrier",
        "without `floor` in [accuracy] nothing tells the memory",
    ):
        assert words in text, words
    assert math.isnan(result.before.numerical_floor)
    tail = result.before.tail
    assert tail is not None
    assert tail.settling is not None
    # What the mixer gives behind the pulse decays with the pole before it.
    assert tail.settling.time_constants[0] == pytest.approx(4e-9, rel=0.02, abs=0.0)
    assert save_study(result, tmp_path / "b.h5") == 1
    again = load_study(tmp_path / "b.h5")
    assert isinstance(again, TrainResult)
    assert again.predistortion is None
    assert again.before.infidelity.tolist() == result.before.infidelity.tolist()
    assert again.warnings == result.warnings
    plot_train(result, tmp_path / "b.png")
    height, width, _ = imread(tmp_path / "b.png").shape
    assert min(height, width) > 500


def test_taps_need_a_filter(tmp_path: Path) -> None:
    train = {name: value for name, value in TRAIN.items() if name != "predistortion"}
    path = write_bench(tmp_path, train)
    done = CliRunner().invoke(app, ["train", str(path), "--taps", str(tmp_path / "t.csv")])
    assert isinstance(done.exception, InputError)
    assert "--taps writes the filter" in str(done.exception)
