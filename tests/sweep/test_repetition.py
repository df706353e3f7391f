"""Oracle: the rows that the sweep wrote, and marks in invented files, looked for in every byte."""

import shutil
import tomllib
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest

import cosim
from cosim import archive
from cosim.errors import ArchiveError, CosimError, InputError, SimulationError
from cosim.sweep.record import SWEEP_KINDS, FailedRun, SweepRecord
from cosim.sweep.repetition import archived_plan, read_record, repeat_sample, rerun
from cosim.sweep.run import run_sweep
from cosim.testbench import load_testbench, make_testbench
from tests.sweep.benches import (
    BENCH,
    DECK,
    FAILING,
    FILTER,
    GRID,
    HERE,
    MISMATCH,
    MOS_DECK,
    rows,
    write_bench,
)

pytestmark = pytest.mark.ngspice


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("swept")
    run_sweep(write_bench(folder, FAILING), folder / "a.h5", engine=HERE)
    return folder


@pytest.fixture
def own(swept: Path, tmp_path: Path) -> Path:
    """A copy in a folder of its own; the archive still names the first folder."""
    shutil.copytree(swept, tmp_path / "own")
    return tmp_path / "own"


def check_repeated(path: Path, number: int) -> None:
    row = rows(path)[number - 1]
    result = rerun(path, number)
    cells, _ = archive.cells_of(result)
    for name, value in cells.items():
        assert row[name] == value or (row[name] != row[name] and value != value), name


def test_a_run_made_again_gives_its_row(swept: Path) -> None:
    check_repeated(swept / "a.h5", 2)


@pytest.mark.full
def test_a_run_with_corners_and_mismatch_made_again_gives_its_row(tmp_path: Path) -> None:
    run_sweep(write_bench(tmp_path, MISMATCH, deck=MOS_DECK), tmp_path / "a.h5", engine=HERE)
    for number in (2, 6):
        check_repeated(tmp_path / "a.h5", number)


def test_a_failed_run_made_again_fails_again(swept: Path) -> None:
    with pytest.raises(SimulationError, match="no solution at t = 9e-09"):
        rerun(swept / "a.h5", 3)


def test_a_run_that_was_not_made_yet_is_made(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    run_sweep(write_bench(tmp_path, FAILING), path, engine=HERE, part=(1, 4))
    assert [row["id"] for row in rows(path)] == [1]
    assert rerun(path, 4).free_frame.average_gate_fidelity == pytest.approx(
        # The deck's other branch is the same burst.
        rows(path)[0]["free_frame.average_gate_fidelity"], abs=1e-12
    )  # fmt: skip


@pytest.mark.parametrize("number", [0, 5, -1])
def test_a_run_that_is_not_planned_is_refused(swept: Path, number: int) -> None:
    with pytest.raises(InputError, match="runs 1 to 4"):
        rerun(swept / "a.h5", number)


def test_a_sample_is_the_same(swept: Path) -> None:
    found = repeat_sample(swept / "a.h5", 10)
    assert [item.number for item in found] == [1, 2, 4]
    assert all(item.same and item.difference == 0.0 for item in found)
    assert len(repeat_sample(swept / "a.h5", 1)) == 1
    assert repeat_sample(swept / "a.h5", 0) == ()


@pytest.mark.parametrize("value", [0.5, float("nan")])
@pytest.mark.parametrize("view", ["as_simulated", "calibrated"])
def test_a_row_that_was_tampered_with_is_found(own: Path, value: float, view: str) -> None:
    with h5py.File(own / "a.h5", "r+") as file:
        file[f"table/{view}.average_gate_fidelity"][1] = value
    found = {item.number: item.same for item in repeat_sample(own / "a.h5", 10)}
    assert found == {1: True, 2: False, 4: True}


def test_a_repetition_that_fails_is_not_the_same(own: Path) -> None:
    # The row claims a result for the run that has none.
    with h5py.File(own / "a.h5", "r+") as file:
        file["table/status"][2] = "done"
    (other,) = [item for item in repeat_sample(own / "a.h5", 10) if item.number == 3]
    assert not other.same
    assert "no solution" in other.error


def test_a_folder_that_moved_is_named(own: Path, swept: Path) -> None:
    toml = own / "bench.toml"
    assert len(archived_plan(own / "a.h5", toml)) == 4
    assert rerun(own / "a.h5", 1, testbench=toml).run.testbench
    (own / "deck.cir").write_text(DECK.replace("0.12 ", "0.125 "))
    with pytest.raises(ArchiveError, match=r"changed: .*deck\.cir"):
        rerun(own / "a.h5", 1, testbench=toml)
    # Without it the archive's own folder counts, where nothing has changed.
    rerun(own / "a.h5", 1)


def test_a_deck_that_is_gone_is_named(own: Path, tmp_path: Path) -> None:
    run_sweep(write_bench(tmp_path / "gone", FAILING), tmp_path / "b.h5", engine=HERE, part=(1, 4))
    (tmp_path / "gone" / "deck.cir").unlink()
    with pytest.raises(CosimError, match=r"deck\.cir"):
        rerun(tmp_path / "b.h5", 1)


def test_an_archive_of_single_runs_has_no_plan(tmp_path: Path) -> None:

    single = write_bench(tmp_path, "")
    cosim.save(cosim.run(single), tmp_path / "one.h5")
    for call in (read_record, archived_plan, lambda path: repeat_sample(path, 1)):
        with pytest.raises(ArchiveError, match="holds single runs and no sweep"):
            call(tmp_path / "one.h5")


def test_the_record_of_a_plan_is_read_as_it_was_written(swept: Path) -> None:
    record = read_record(swept / "a.h5")
    assert isinstance(record, SweepRecord)
    assert (record.runs, record.keep, record.fidelity) == (4, "1", "free_frame")
    assert record.inputs == ("netlist.parameters.fail",)
    texts = {Path(file.path).name: file.text for file in record.deck_files}
    assert texts == {"deck.cir": DECK, "filter.inc": FILTER}


@pytest.mark.full
def test_a_circuit_in_python_is_swept(tmp_path: Path) -> None:
    write_bench(tmp_path, GRID)
    bench = replace(
        load_testbench(tmp_path / "bench.toml"),
        circuit=DECK.replace(".include filter.inc\n", FILTER).replace("b 0 0.1p", "b 0 0.11p"),
    )
    bench = replace(bench, netlist=replace(bench.netlist, file="my circuit"))
    state = run_sweep(bench, tmp_path / "a.h5", engine=HERE)
    assert (state.finished, state.missing) == (6, 0)
    assert "0.11p" in read_record(tmp_path / "a.h5").deck_files[0].text
    # It stands in no file: the archive has its text.
    again = rerun(tmp_path / "a.h5", 1)
    fidelity = archive.read_table(tmp_path / "a.h5")["free_frame.average_gate_fidelity"][0]
    assert again.free_frame.average_gate_fidelity == fidelity
    resumed = run_sweep(bench, tmp_path / "a.h5", engine=HERE, resume=True)
    assert (resumed.made, resumed.finished) == (0, 6)


# Numbers and names that stand in the confidential file and nowhere else.
MARKS = ("41.97", "hidden", "0.0987")
KIT = """* kit
.param hidden=41.97
.subckt filter a b
r1 a b {hidden}
c1 b 0 0.0987p
b7 q 0 v=ln(fail-time*1g+hidden*0)
r7 q 0 1k
.ends
"""


@pytest.mark.full
@pytest.mark.parametrize("confidential", [False, True])
def test_nothing_of_a_confidential_file_is_archived(tmp_path: Path, confidential: bool) -> None:
    (tmp_path / "kit").mkdir()
    toml = write_bench(
        tmp_path,
        FAILING.replace("keep = 1", 'keep = "all"'),
        ("steps_per_period", f"confidential = {['kit'] if confidential else []}\nsteps_per_period"),
        deck=DECK.replace("filter.inc", "kit/filter.inc")
        .replace("b2 mark 0 v=ln({fail}-time*1g)\n", "")
        .replace("r2 mark 0 1k\n", ""),
    )
    (tmp_path / "kit" / "filter.inc").write_text(KIT.replace("ln(fail", "ln({fail}"))
    path = tmp_path / "a.h5"
    state = run_sweep(toml, path, engine=HERE)
    assert (state.finished, state.failed) == (3, {"no convergence": 1})
    found = [path.read_bytes()]

    def visit(_: str, item: h5py.Group | h5py.Dataset) -> None:
        found.extend(str(value).encode() for value in item.attrs.values())
        if isinstance(item, h5py.Dataset):
            content = item.asstr()[()] if h5py.check_string_dtype(item.dtype) else item[()]
            found.append(str(content.tolist() if np.ndim(content) else content).encode())
            found.append(np.asarray(item[()]).tobytes() if item.dtype != object else b"")

    with h5py.File(path) as file:
        file.visititems(visit)
    whole = b"\n".join(found)
    seen = [mark for mark in MARKS if mark.encode() in whole]
    assert seen == ([] if confidential else list(MARKS))
    record = archive.read(path, SWEEP_KINDS, 3)
    assert isinstance(record, FailedRun)
    assert record.error.startswith("the message is left out") == confidential
    assert rows(path)[2]["status"] == "no convergence"
    with pytest.raises(SimulationError, match="no solution"):
        rerun(path, 3)


def test_the_text_of_a_testbench_gives_the_same_plan(tmp_path: Path) -> None:

    bench = make_testbench(tomllib.loads(BENCH + GRID), folder=tmp_path)
    again = make_testbench(tomllib.loads(bench.to_toml()), folder=tmp_path)
    assert again == replace(bench, source=again.source)
