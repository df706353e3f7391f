"""Oracle: the same plan on one engine in this process, compared bit by bit."""

import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from cosim import archive
from cosim.errors import ArchiveError
from cosim.sweep import run as run_module
from cosim.sweep.cluster import scheduler_engine
from cosim.sweep.engine import Engine
from cosim.sweep.keeping import kept_whole
from cosim.sweep.local import local_engine
from cosim.sweep.run import run_sweep
from cosim.sweep.shares import share_path, shares_beside
from tests.sweep.benches import (
    FAILING,
    GRID,
    HERE,
    LEVELS,
    differing,
    envelopes,
    rows,
    write_bench,
)
from tests.sweep.dask_processes import scheduler

pytestmark = pytest.mark.ngspice

ROOT = Path(__file__).parents[2]
# Two waveforms with three qubits each, and one more that fails.
PLAN = GRID + ('[[sweep.grid]]\nkey = "netlist.parameters.fail"\nvalues = [1000, 9]\n')


@pytest.fixture(scope="module")
def alone(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("alone")
    run_sweep(write_bench(folder, PLAN), folder / "alone.h5", engine=HERE)
    return folder / "alone.h5"


def check_same(path: Path, other: Path) -> None:
    assert differing(rows(path), rows(other)) == []
    mine, theirs = envelopes(path), envelopes(other)
    assert sorted(mine) == sorted(theirs)
    assert all((mine[number] == theirs[number]).all() for number in mine)
    assert archive.record_numbers(path) == archive.record_numbers(other)


def test_the_plan_of_these_tests_has_results_and_failures(alone: Path) -> None:
    assert sorted(row["status"] for row in rows(alone)) == ["done"] * 6 + ["no convergence"] * 6


@pytest.mark.parametrize(
    "size", [1, *(pytest.param(size, marks=pytest.mark.full) for size in (2, 3, 16)), 5]
)
def test_the_size_of_batches_changes_no_number(
    tmp_path: Path, alone: Path, monkeypatch: pytest.MonkeyPatch, size: int
) -> None:
    monkeypatch.setattr(run_module, "BATCHES_PER_SLOT", 1)
    monkeypatch.setattr(run_module, "LARGEST_BATCH", size)
    monkeypatch.setattr(run_module, "LARGEST_FAMILY", size)
    path = tmp_path / "a.h5"
    # The messages of failures name the folder of the deck.
    run_sweep(alone.with_name("bench.toml"), path, engine=HERE)
    check_same(path, alone)


@pytest.mark.full
@pytest.mark.parametrize("workers", [1, 2])
def test_processes_change_no_number(tmp_path: Path, alone: Path, workers: int) -> None:
    path = tmp_path / "a.h5"
    # The messages of failures name the folder of the deck.
    run_sweep(alone.with_name("bench.toml"), path, engine=local_engine(workers))
    check_same(path, alone)


@pytest.mark.full
def test_a_cluster_changes_no_number(tmp_path: Path, alone: Path) -> None:
    path = tmp_path / "a.h5"
    with scheduler(tmp_path, workers=2) as address:
        run_sweep(alone.with_name("bench.toml"), path, engine=scheduler_engine(address))
    check_same(path, alone)


@pytest.mark.full
def test_three_shares_merged_are_the_whole(tmp_path: Path) -> None:
    toml, path = write_bench(tmp_path, LEVELS), tmp_path / "all.h5"
    run_sweep(toml, tmp_path / "whole.h5", engine=HERE)
    counts = []
    for part in (3, 1, 2):
        share = share_path(path, part, 3)
        state = run_sweep(toml, share, engine=HERE, part=(part, 3))
        counts.append((state.planned, state.finished, state.missing))
        resumed = run_sweep(toml, share, engine=HERE, part=(part, 3), resume=True)
        assert (resumed.made, resumed.missing) == (0, 0)
    assert counts == [(2, 2, 0)] * 3
    assert [item.name for item in shares_beside(path)] == [
        "all.1-of-3.h5", "all.2-of-3.h5", "all.3-of-3.h5",
    ]  # fmt: skip
    assert archive.merge(path, shares_beside(path)) == 6
    archive.consolidate(path, kept_whole(path))
    check_same(path, tmp_path / "whole.h5")


@pytest.mark.full
def test_archives_that_overlap_are_merged_and_those_of_other_plans_are_not(
    tmp_path: Path,
) -> None:
    toml = write_bench(tmp_path, FAILING)
    run_sweep(toml, tmp_path / "one.h5", engine=HERE, part=(1, 2))
    run_sweep(toml, tmp_path / "whole.h5", engine=HERE)
    archive.merge(tmp_path / "all.h5", [tmp_path / "one.h5", tmp_path / "whole.h5"])
    archive.consolidate(tmp_path / "all.h5", kept_whole(tmp_path / "all.h5"))
    check_same(tmp_path / "all.h5", tmp_path / "whole.h5")
    other = write_bench(tmp_path / "other", FAILING.replace("998", "997"))
    run_sweep(other, tmp_path / "other.h5", engine=HERE, part=(1, 2))
    before = (tmp_path / "all.h5").read_bytes()
    with pytest.raises(ArchiveError, match="planned otherwise"):
        archive.merge(tmp_path / "all.h5", [tmp_path / "other.h5"])
    assert (tmp_path / "all.h5").read_bytes() == before


@pytest.mark.full
def test_shares_of_a_testbench_that_is_named_in_two_ways_are_merged(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    toml = write_bench(tmp_path, GRID)
    run_sweep(toml, tmp_path / "all.1-of-2.h5", engine=HERE, part=(1, 2))
    monkeypatch.chdir(tmp_path)
    run_sweep("bench.toml", "all.2-of-2.h5", engine=HERE, part=(2, 2))
    assert archive.merge(tmp_path / "all.h5", shares_beside(Path("all.h5"))) == 6


@pytest.mark.parametrize("parts", [1, 2, 7, pytest.param(50, marks=pytest.mark.full)])
def test_shares_are_the_same_on_every_engine(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, parts: int
) -> None:
    # No run is made: what counts is which runs each share is to make.
    def nothing(batches: Any, engine: Engine, *, on_result: Any, on_pause: Any) -> None:
        made.extend(task.number for batch in batches for task in batch.tasks)

    monkeypatch.setattr(run_module, "run_batches", nothing)
    toml = write_bench(tmp_path, PLAN)
    shares: list[list[list[int]]] = []
    for slots in (1, 64):
        engine = Engine(open=HERE.open, slots=lambda slots=slots: slots)  # type: ignore[misc]
        shares.append([])
        for part in range(1, parts + 1):
            made: list[int] = []
            path = tmp_path / f"{slots}-{part}.h5"
            run_sweep(toml, path, engine=engine, part=(part, parts))
            shares[-1].append(made)
    assert sorted(number for share in shares[0] for number in share) == list(range(1, 13))
    assert parts == 1 or shares[0] == shares[1]


SCRIPT = """from cosim.sweep.run import run_sweep
{guard}
    state = run_sweep("bench.toml", "a.h5")
    print(state.finished, state.missing)
"""


@pytest.mark.full
@pytest.mark.parametrize("guarded", [True, False])
def test_a_script_that_sweeps(tmp_path: Path, guarded: bool) -> None:
    write_bench(tmp_path, GRID)
    guard = 'if __name__ == "__main__":' if guarded else "if True:"
    (tmp_path / "script.py").write_text(SCRIPT.format(guard=guard))
    done = subprocess.run(
        [sys.executable, "script.py"],
        cwd=tmp_path,
        env=os.environ | {"PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    if guarded:
        assert (done.returncode, done.stdout) == (0, "6 0\n"), done.stderr
    else:
        assert done.returncode == 1
        assert 'sweep below the line `if __name__ == "__main__":`' in done.stderr
        assert done.stdout == ""
        assert rows(tmp_path / "a.h5") == []
