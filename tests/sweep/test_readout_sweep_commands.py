"""Oracle: the table of the archive, JSON's own parser, the limit and the words that the README
promises, and the dark pixels of a figure."""

import csv
import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from matplotlib.image import imread

import cosim
from cosim import cli
from cosim.sweep import local
from tests.sweep.benches import HERE, rows
from tests.sweep.readout_benches import write_swept

pytestmark = pytest.mark.ngspice

# Two corners of the netlist, each with three samples of what needs no further simulation.
SWEEP: dict[str, Any] = {
    "limit": 0.0108,
    "keep": 1,
    "corners": {
        "low": {"parameters": {"gain": 15}},
        "high": {"parameters": {"gain": 30}},
    },
    "monte_carlo": {
        "runs": 3,
        "seed": 4,
        "vary": [{"key": "readout.t1", "distribution": "lognormal", "sigma": 0.5}],
    },
}
Cli = Callable[..., tuple[int, str, str]]


def call(*words: object) -> int:
    """Run the command in this process; gives its exit code."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(local, "local_engine", lambda workers=None: HERE)
        patch.setattr(sys, "argv", ["qcosim", *map(str, words)])
        with pytest.raises(SystemExit) as end:
            cli.main()
    return int(end.value.code or 0)


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("swept")
    toml = write_swept(folder, SWEEP)
    assert call("sweep", toml, "--archive", folder / "a.h5") == 0
    return folder / "a.h5"


@pytest.fixture
def qcosim(capfd: pytest.CaptureFixture[str]) -> Cli:
    def run(*words: object) -> tuple[int, str, str]:
        capfd.readouterr()
        code = call(*words)
        out, err = capfd.readouterr()
        return code, out, err

    return run


def parsed(text: str) -> dict[str, Any]:
    """Read strict JSON, which has no NaN."""

    def refuse(word: str) -> None:
        raise AssertionError(word)

    found: dict[str, Any] = json.loads(text, parse_constant=refuse)
    return found


def test_check_counts_runs_and_simulations(swept: Path, qcosim: Cli) -> None:
    toml = swept.with_name("bench.toml")
    code, out, _ = qcosim("check", toml, "--json")
    numbers = parsed(out)
    assert (code, numbers["runs"], numbers["waveforms"]) == (0, 6, 2)
    assert numbers["transients"] == 7  # Two states, two decays, and three of small signals.
    for name in ("time", "memory", "disk"):
        assert numbers[name] > 0.0
    code, out, _ = qcosim("check", toml, "--deck")
    assert "6 runs (2 corners x 3 samples), 2 of the circuit" in " ".join(out.split())
    assert "vin emf 0 pwl" in out.lower() or "e1 amp 0 in 0" in out.lower()


def test_show_judges_the_assignment_error(swept: Path, qcosim: Cli) -> None:
    errors = {row["id"]: row["assignment_error"] for row in rows(swept)}
    code, out, _ = qcosim("show", swept)
    assert code == 0
    for words in (
        "assignment error",
        "at most 0.0108",
        "Clopper-Pearson",
        "samples good everywhere",
    ):
        assert words in out
    for corner in ("low", "high"):
        assert corner in out
    numbers = parsed(qcosim("show", swept, "--json")[1])
    assert (numbers["planned"], numbers["finished"], numbers["failed"], numbers["missing"]) == (
        6,
        6,
        0,
        0,
    )
    assert numbers["limit_yield"]["passed"] == sum(error <= 0.0108 for error in errors.values())
    assert 0 < numbers["limit_yield"]["passed"] < 6
    worst = max(errors, key=lambda number: errors[number])
    assert numbers["worst"][0]["id"] == worst
    assert numbers["table"]["assignment_error"] == [errors[k] for k in numbers["table"]["id"]]
    strict = parsed(qcosim("show", swept, "--json", "--limit", "1e-4")[1])
    assert strict["limit_yield"]["passed"] == 0
    other = parsed(qcosim("show", swept, "--json", "--metric", "residual_photons")[1])
    assert other["metric"] == "residual photons"
    assert other["limit_yield"] is None


def test_a_metric_that_there_is_not_is_named(swept: Path, qcosim: Cli) -> None:
    code, _, err = qcosim("show", swept, "--metric", "asignment_error")
    assert code == 2
    assert "no column 'asignment_error'" in err
    assert "did you mean 'assignment_error'" in err
    code, _, err = qcosim("show", swept, "--metric", "leakage")
    assert code == 2
    assert "no column 'leakage'" in err


@pytest.mark.full
def test_runs_one_by_one(swept: Path, qcosim: Cli, tmp_path: Path) -> None:
    errors = {row["id"]: row["assignment_error"] for row in rows(swept)}
    worst = max(errors, key=lambda number: errors[number])
    other = next(number for number in errors if number != worst)
    figure = tmp_path / "run.png"
    code, out, _ = qcosim("show", swept, "--run", worst, "--plot", figure)
    assert code == 0
    assert f"{errors[worst]:.4e}" in out
    assert "prepared 1" in out
    assert (imread(figure)[..., :3] < 0.5).any()
    numbers = parsed(qcosim("show", swept, "--run", worst, "--json")[1])
    assert numbers["assignment_error"] == errors[worst]
    assert numbers["assignment_matrix"][0][1] > 0.0
    code, out, err = qcosim("show", swept, "--run", other)
    assert code == 0
    assert f"{errors[other]:.8g}" in out
    assert "qcosim rerun" in err
    code, _, err = qcosim("show", swept, "--run", other, "--plot", figure)
    assert code == 2
    assert "was not kept whole" in err
    code, out, _ = qcosim(
        "rerun", swept, other, "--json", "--archive", tmp_path / "one.h5", "--plot", figure
    )
    assert code == 0
    assert parsed(out)["assignment_error"] == errors[other]
    again = cosim.load(tmp_path / "one.h5")
    assert isinstance(again, cosim.ReadoutResult)
    assert again.assignment_error == errors[other]


def test_verify_and_export(swept: Path, qcosim: Cli, tmp_path: Path) -> None:
    code, out, _ = qcosim("verify", swept, "--repeat", "1")
    assert code == 0
    assert "the same, assignment errors differ by 0.0e+00" in out
    assert "6 runs and 1 whole records are intact" in out
    code, _, _ = qcosim("export", swept, "--csv", tmp_path / "runs.csv")
    assert code == 0
    with (tmp_path / "runs.csv").open(newline="") as file:
        lines = list(csv.DictReader(file))
    found = [float(line["assignment_error"]) for line in lines]
    assert found == [row["assignment_error"] for row in rows(swept)]
    t1 = [float(line["readout.t1 (s)"]) for line in lines]
    assert t1 == [row["readout.t1"] for row in rows(swept)]


def test_the_figure_of_a_sweep(swept: Path, qcosim: Cli, tmp_path: Path) -> None:
    figure = tmp_path / "sweep.png"
    code, _, err = qcosim("show", swept, "--plot", figure)
    assert code == 0
    assert f"figure in {figure}" in err
    assert (imread(figure)[..., :3] < 0.5).any()


@pytest.mark.full
def test_slices_are_merged(swept: Path, qcosim: Cli, tmp_path: Path) -> None:
    toml, path = swept.with_name("bench.toml"), tmp_path / "b.h5"
    for part in ("1/2", "2/2"):
        code, _, _ = qcosim("sweep", toml, "--archive", path, "--slice", part)
        assert code == 0
    code, out, err = qcosim("merge", path)
    assert code == 0
    assert "6 new runs of 2 archives" in err
    assert "6 of 6 planned runs, 6 judged" in out
    assert [row["assignment_error"] for row in rows(path)] == [
        row["assignment_error"] for row in rows(swept)
    ]
