"""Oracle: which files and keys each test changes, and a sweep that was made in one go."""

import os
import shutil
from collections.abc import Sequence
from pathlib import Path

import pytest

import cosim
from cosim import archive
from cosim.errors import ArchiveError
from cosim.sweep import run as run_module
from cosim.sweep import work
from cosim.sweep.run import SweepState, run_sweep
from tests.sweep.benches import (
    DECK,
    FAILING,
    FILTER,
    GRID,
    HERE,
    LEVELS,
    differing,
    rows,
    write_bench,
)

pytestmark = pytest.mark.ngspice


class Interrupted(Exception):
    """Ends a sweep from its progress."""


def run_a_part(toml: Path, path: Path, runs: int) -> None:
    """Run until so many runs are published."""

    def stop(state: SweepState) -> None:
        if state.finished + sum(state.failed.values()) >= runs:
            raise Interrupted

    with pytest.raises(Interrupted):
        run_sweep(toml, path, engine=HERE, on_progress=stop, resume=path.exists())


@pytest.fixture
def small_parts(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(run_module, "FLUSH_ROWS", 1)
    monkeypatch.setattr(run_module, "LARGEST_BATCH", 1)


@pytest.mark.usefixtures("small_parts")
@pytest.mark.parametrize("runs", [pytest.param(1, marks=pytest.mark.full), 4])
def test_a_resumed_sweep_is_as_one_made_in_one_go(tmp_path: Path, runs: int) -> None:
    toml = write_bench(tmp_path, LEVELS)
    run_sweep(toml, tmp_path / "whole.h5", engine=HERE)
    path = tmp_path / "a.h5"
    run_a_part(toml, path, runs)
    begun = len(rows(path))
    # What stood in the executor when it was interrupted may have come in too.
    assert runs <= begun < 6
    state = run_sweep(toml, path, engine=HERE, resume=True)
    assert (state.made, state.finished, state.missing) == (6 - begun, 6, 0)
    assert differing(rows(path), rows(tmp_path / "whole.h5")) == []
    assert archive.record_numbers(path) == archive.record_numbers(tmp_path / "whole.h5")
    assert len(archive.record_numbers(path)) == 2


def test_a_complete_sweep_makes_no_run(tmp_path: Path) -> None:
    toml, path = write_bench(tmp_path, FAILING), tmp_path / "a.h5"
    run_sweep(toml, path, engine=HERE)
    before = rows(path)
    state = run_sweep(toml, path, engine=HERE, resume=True)
    assert (state.made, state.finished, state.failed) == (0, 3, {"no convergence": 1})
    assert differing(rows(path), before) == []
    again = run_sweep(toml, path, engine=HERE, resume=True, retry_failed=True)
    assert (again.made, again.finished, again.failed) == (1, 3, {"no convergence": 1})
    assert differing(rows(path), before) == []


def test_a_run_that_took_too_long_is_retried_with_more_time(tmp_path: Path) -> None:
    toml, path = (
        write_bench(tmp_path, GRID, ("[drive]", 'time_limit = "1 us"\n[drive]')),
        (tmp_path / "a.h5"),
    )
    assert run_sweep(toml, path, engine=HERE).failed == {"timeout": 6}
    write_bench(tmp_path, GRID, ("[drive]", 'time_limit = "1 min"\n[drive]'))
    state = run_sweep(toml, path, engine=HERE, resume=True, retry_failed=True)
    assert (state.made, state.finished, state.failed) == (6, 6, {})
    assert {row["status"] for row in rows(path)} == {"done"}


def test_an_archive_is_not_resumed_unless_asked(tmp_path: Path) -> None:
    toml, path = write_bench(tmp_path, LEVELS), tmp_path / "a.h5"
    run_sweep(toml, path, engine=HERE, part=(1, 6))
    with pytest.raises(ArchiveError, match=r"a\.h5 exists") as caught:
        run_sweep(toml, path, engine=HERE)
    assert "--resume" in caught.value.hint


@pytest.fixture(scope="module")
def one_of_six(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("one_of_six")
    run_sweep(write_bench(folder, GRID), folder / "a.h5", engine=HERE, part=(1, 2))
    return folder


@pytest.mark.parametrize(
    ("sweep", "change", "deck", "parts", "name"),
    [
        (GRID, (), DECK.replace("0.12 ", "0.121 "), FILTER, "deck.cir"),
        (GRID, (), DECK, FILTER.replace("50", "51"), "filter.inc"),
        (GRID, ("100 MHz/V", "101 MHz/V"), DECK, FILTER, "testbench.qubit.rabi_per_volt"),
        (GRID, ('"x90"', '"y90"'), DECK, FILTER, "testbench.gate.target"),
        (GRID.replace("0.13]", "0.14]"), (), DECK, FILTER, "sweep.grid"),
        (GRID + '[[sweep.grid]]\nkey="qubit.t1"\nvalues=["1 s"]\n', (), DECK, FILTER, "sweep.grid"),
    ],
    ids=["deck", "include", "number", "text", "values", "axis"],
)
def test_what_changed_is_named_and_not_mixed_in(
    tmp_path: Path,
    one_of_six: Path,
    sweep: str,
    change: tuple[str, str] | tuple[()],
    deck: str,
    parts: str,
    name: str,
) -> None:
    folder = tmp_path / "copy"
    shutil.copytree(one_of_six, folder)
    before = (folder / "a.h5").read_bytes()
    write_bench(folder, sweep, *([change] if change else []), deck=deck)
    (folder / "filter.inc").write_text(parts)
    with pytest.raises(ArchiveError, match="begun with another testbench or deck") as caught:
        run_sweep(folder / "bench.toml", folder / "a.h5", engine=HERE, resume=True)
    assert name in caught.value.message
    assert (folder / "a.h5").read_bytes() == before


@pytest.mark.parametrize(
    ("sweep", "changes"),
    [
        (GRID, [("a burst", "another title")]),
        (GRID.replace("keep = 2", "keep = 1").replace("1e-3", "2e-3"), []),
        (GRID, [("steps_per_period", 'confidential = ["kit"]\nsteps_per_period')]),
        (GRID, [('[gate]\ntarget = "x90"\n', ""), ("[qubit]", "[gate]\ntarget='x90'\n[qubit]")]),
        (GRID, []),
    ],
    ids=["title", "report", "confidential", "order", "place"],
)
def test_what_bears_on_no_run_may_change(
    tmp_path: Path, one_of_six: Path, sweep: str, changes: list[tuple[str, str]]
) -> None:
    # The folder is another one in each case.
    folder = tmp_path / "copy"
    shutil.copytree(one_of_six, folder)
    (folder / "kit").mkdir()
    write_bench(folder, sweep, *changes)
    state = run_sweep(folder / "bench.toml", folder / "a.h5", engine=HERE, resume=True)
    assert (state.made, state.finished) == (3, 6)


@pytest.mark.full
def test_a_stimulus_that_changes_while_the_sweep_runs_fails_its_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    lines = ["t,v", *(f"{k}e-9,1" for k in range(26))]
    (tmp_path / "gain.csv").write_text("\n".join(lines))
    text = (tmp_path / "gain.csv").read_bytes()
    table = """[[stimulus]]
source = "vg"
file = "gain.csv"
unit = "V"
time_unit = "s"
[drive]"""
    deck = DECK.replace("x1 in", "vg g 0 1\nrg g 0 1k\nx1 in")
    toml = write_bench(
        tmp_path, LEVELS, ("[drive]", table), deck=deck.replace("{level}*", "{level}*v(g)*")
    )
    original = work.simulate_groups
    calls = []

    def change_then_simulate(plan: object, groups: Sequence[object], trims: object) -> object:
        calls.append(len(groups))
        if len(calls) == 2:
            (tmp_path / "gain.csv").write_bytes(text + b"\n26e-9,1\n")
        return original(plan, groups, trims)  # type: ignore[arg-type]

    monkeypatch.setattr(work, "simulate_groups", change_then_simulate)
    path = tmp_path / "a.h5"
    state = run_sweep(toml, path, engine=HERE)
    assert (state.finished, state.failed) == (2, {"input error": 4})
    assert "changed while the sweep was running: stimulus.1" in rows(path)[3]["error"]
    (tmp_path / "gain.csv").write_bytes(text)
    again = run_sweep(toml, path, engine=HERE, resume=True, retry_failed=True)
    assert (again.made, again.finished, again.failed) == (4, 6, {})


@pytest.mark.full
def test_two_sweeps_do_not_write_one_archive(tmp_path: Path) -> None:
    toml, path = write_bench(tmp_path, LEVELS), tmp_path / "a.h5"
    tried = []

    def start_another(state: SweepState) -> None:
        # Twice, since the first refusal must not open the door for the second.
        for _ in range(2):
            with pytest.raises(ArchiveError, match="another sweep is writing"):
                run_sweep(toml, path, engine=HERE, resume=True)
            tried.append(state.made)

    state = run_sweep(toml, path, engine=HERE, on_progress=start_another)
    assert tried
    assert state.finished == 6
    assert sorted(os.listdir(tmp_path)) == ["a.h5", "bench.toml", "deck.cir", "filter.inc"]


@pytest.mark.parametrize("resume", [False, True])
def test_what_is_no_archive_of_a_sweep_is_left_alone(tmp_path: Path, resume: bool) -> None:
    toml = write_bench(tmp_path, LEVELS)
    (tmp_path / "folder.h5").mkdir()
    (tmp_path / "text.h5").write_text("no archive")
    single = write_bench(tmp_path, "", name="single.toml")
    cosim.save(cosim.run(single), tmp_path / "single.h5")
    before = (tmp_path / "single.h5").read_bytes()
    for name in ("folder.h5", "text.h5", "single.h5", "no/folder.h5"):
        with pytest.raises(ArchiveError, match=name):
            run_sweep(toml, tmp_path / name, engine=HERE, resume=resume)
    assert (tmp_path / "single.h5").read_bytes() == before
    assert (tmp_path / "text.h5").read_text() == "no archive"


def test_a_sweep_whose_every_run_fails(tmp_path: Path) -> None:
    toml = write_bench(tmp_path, FAILING.replace("[1000, 999, 9, 998]", "[8, 9]"))
    path = tmp_path / "a.h5"
    state = run_sweep(toml, path, engine=HERE)
    assert (state.finished, state.failed, state.missing) == (0, {"no convergence": 2}, 0)
    assert state.notice == ""
    assert not (tmp_path / "a.h5.parts").exists()
    assert archive.record_numbers(path) == (1, 2)
    state = run_sweep(toml, path, engine=HERE, resume=True, retry_failed=True)
    assert (state.made, state.failed) == (2, {"no convergence": 2})
