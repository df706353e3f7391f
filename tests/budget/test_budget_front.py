"""Oracle: the result itself, through the archive, the command line and the figure."""

import json
import math
import sys
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

import cosim
from cosim.budget.result import BudgetResult, budget_numbers
from cosim.budget.study import budget_of
from cosim.budget_figures import plot_budget
from cosim.budget_terminal import budget_parts
from cosim.cli import main
from cosim.errors import ArchiveError, InputError
from cosim.study_archive import load_study, save_study
from cosim.waveform import ComplexArray, FloatArray
from tests.budget.pulses import LEVEL, along, bench_of, flat_top, played


def faulty(t: FloatArray) -> ComplexArray:
    spur = 0.01 * np.exp(2j * math.pi * 60e6 * t)
    pulse = 1.02 * LEVEL * flat_top(t) * (1.0 + spur - 0.01 * along(t))
    return pulse * np.exp(0.03j) + 0.002 * LEVEL


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An archive with the run of a gate, 1, and its budget, 2."""
    path = tmp_path_factory.mktemp("budget") / "gate.h5"
    bench = bench_of(qubit={"t1": "1 ms"}, budget={"fidelity": "as_simulated"})
    run = played(faulty, bench)
    assert cosim.save(run, path) == 1
    assert save_study(budget_of(run, bench), path) == 2
    return path


@pytest.fixture(scope="module")
def result(archive: Path) -> BudgetResult:
    found = load_study(archive)
    assert found is not None
    return found


def command(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], *words: str
) -> tuple[int, str, str]:
    monkeypatch.setattr(sys, "argv", ["qcosim", *words])
    with pytest.raises(SystemExit) as end:
        main()
    out, err = capsys.readouterr()
    return int(end.value.code or 0), out, err


@pytest.mark.full
def test_an_archived_run_is_not_simulated_again(
    archive: Path, result: BudgetResult, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("cosim.gate.capture_probe", None)
    run = cosim.load(archive, run=1)
    assert isinstance(run, cosim.GateResult)
    again = budget_of(run)
    assert budget_numbers(again) | {"wall_time": 0} == budget_numbers(result) | {"wall_time": 0}
    assert np.array_equal(again.real.iq, result.real.iq)


def test_the_archive_tells_gates_and_budgets_apart(archive: Path, result: BudgetResult) -> None:
    assert load_study(archive, 1) is None
    again = load_study(archive, 2)
    assert again is not None
    # As plain numbers, where what does not exist is equal to itself.
    assert budget_numbers(again) == budget_numbers(result)
    with pytest.raises(ArchiveError):
        load_study(archive.with_name("none.h5"))


def test_json(
    archive: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    code, out, _ = command(monkeypatch, capsys, "budget", str(archive), "--run", "1", "--json")
    assert code == 0
    numbers = json.loads(out)
    assert numbers["fidelity"] == "as_simulated"
    for found in numbers["items"]:
        assert {"name", "value", "unit", "alone", "removed", "absorbed"} <= set(found)
    counted = sum(found["alone"] for found in numbers["items"] if found["counted"])
    assert counted + numbers["interaction"] == pytest.approx(numbers["total_infidelity"], rel=1e-9)
    by_name = {found["name"]: found for found in numbers["items"]}
    assert by_name["mean amplitude"]["value"] == pytest.approx(0.02, rel=0.02)
    assert by_name["mean amplitude"]["absorbed"] is True
    (spur,) = numbers["spurs"]
    assert spur["offset"] == pytest.approx(60e6, rel=1e-3)
    assert spur["level"] == pytest.approx(-40.0, abs=0.1)
    # Another fidelity on request.
    words = ("budget", str(archive), "--run", "1", "--json", "--fidelity", "free_frame")
    code, out, _ = command(monkeypatch, capsys, *words)
    assert json.loads(out)["fidelity"] == "free_frame"


def test_show(
    archive: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    code, out, _ = command(monkeypatch, capsys, "show", str(archive), "--run", "2")
    assert code == 0
    assert "Change first" in out
    code, out, _ = command(monkeypatch, capsys, "show", str(archive), "--run", "2", "--json")
    assert json.loads(out)["fidelity"] == "as_simulated"
    code, out, _ = command(monkeypatch, capsys, "show", str(archive), "--run", "1")
    assert "process fidelity" in out
    code, _, err = command(monkeypatch, capsys, "budget", str(archive))
    assert code == 2
    assert "this takes the result of a gate, got a BudgetResult" in err
    assert "--run" in err


def test_wrong_words(
    archive: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    code, _, err = command(monkeypatch, capsys, "budget", "bench.toml", "--run", "1")
    assert code == 2
    assert "--run goes with an archive" in err
    words = ("budget", str(archive), "--run", "1", "--fidelity", "best")
    code, _, err = command(monkeypatch, capsys, *words)
    assert code == 2
    assert "wanted one of as_simulated" in err


def test_the_table_fits_a_terminal_and_is_ranked(result: BudgetResult) -> None:
    console = Console(width=80, record=True, highlight=False, file=None)
    with console.capture() as caught:
        console.print(budget_parts(result))
    text = caught.get()
    assert "…" not in text
    assert max(len(line) for line in text.splitlines()) <= 80
    lines = text.splitlines()
    (head,) = (place for place, line in enumerate(lines) if "absorbed by" in line)
    (total,) = (place for place, line in enumerate(lines) if line.startswith("total"))
    assert head + 4 < total
    assert lines[head + 1].startswith(("phase", "mean amplitude"))
    assert "Change first" in text
    assert "Design estimate" in text
    assert "spur 1" in text


@pytest.mark.full
def test_figure(result: BudgetResult, tmp_path: Path) -> None:
    plot_budget(result, tmp_path / "budget.png")
    assert (tmp_path / "budget.png").stat().st_size > 20_000
    with pytest.raises(InputError, match="cannot be written"):
        plot_budget(result, tmp_path / "none" / "budget.png")
