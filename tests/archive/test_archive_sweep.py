"""Oracle: rows that are functions of their number come back, to xarray and h5py as well."""

import hashlib
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray

from cosim.archive import (
    Row,
    RunInfo,
    Series,
    append,
    cells_of,
    compact,
    consolidate,
    consolidation,
    create,
    read,
    read_plan,
    read_series,
    read_table,
    read_units,
    record_numbers,
    run_numbers,
    sweeps,
    verify,
    write,
    write_part,
    write_rows,
)
from cosim.archive.files import list_parts
from cosim.archive.layout import NumberedRun
from cosim.errors import ArchiveError
from tests.archive.sweep_rows import DECK, PLAN, TYPES, Record, check_rows, record, row


@pytest.fixture
def path(tmp_path: Path) -> Path:
    path = tmp_path / "sweep.h5"
    create(path, PLAN)
    return path


def write_some(path: Path) -> None:
    """Publish three parts: out of order, with failed rows, with records, and one row again."""
    write_rows(path, [row(4, whole=True), row(2, status="timeout"), row(1)])
    write_rows(path, [row(7), row(6, status="failed", whole=True)])
    write_rows(path, [row(2), row(3)])


@pytest.fixture(params=["parts", "compact", "consolidated"])
def swept(request: pytest.FixtureRequest, path: Path) -> Path:
    write_some(path)
    if request.param == "compact":
        assert compact(path) == 2
        assert len(list_parts(path)) == 1
    elif request.param == "consolidated":
        assert consolidate(path) == 3
        assert not list_parts(path)
    return path


def test_rows_come_back(swept: Path) -> None:
    assert run_numbers(swept) == (1, 2, 3, 4, 6, 7)
    assert record_numbers(swept) == (4, 6)
    check_rows(swept, {1, 2, 3, 4, 7})
    table = read_table(swept)
    assert table["status"].tolist() == ["done"] * 4 + ["failed", "done"]
    assert table["kind"].tolist() == ["Record"] * 4 + ["", "Record"]
    assert np.isnan(table["gain"][4])
    assert read_series(swept, 6) == {}
    assert read_units(swept)["frequency"] == "Hz"
    assert read_units(swept)["wall_time"] == "s"
    assert verify(swept) == type(verify(swept))(6, 2, ())


def test_some_columns_of_the_table(swept: Path) -> None:
    table = read_table(swept, ("gain", "status"))
    assert set(table) == {"id", "gain", "status"}
    with pytest.raises(ArchiveError, match="no column 'gian'") as caught:
        read_table(swept, ("gian",))
    assert "gain" in caught.value.hint


def test_a_run_of_which_the_row_alone_is_kept(swept: Path) -> None:
    with pytest.raises(ArchiveError, match="of run 3 only its row") as caught:
        read(swept, TYPES, 3)
    assert f"qcosim rerun {swept} 3" in caught.value.hint
    with pytest.raises(ArchiveError, match="no run 5"):
        read_series(swept, 5)


def test_xarray_opens_table_series_and_record(swept: Path) -> None:
    for file in (swept, *list_parts(swept)):
        with h5py.File(file) as opened:
            if "table" not in opened:
                continue
        with xarray.open_dataset(file, engine="h5netcdf", group="table") as table:
            assert table["frequency"].dims == ("id",)
            assert table["frequency"].attrs["units"] == "Hz"
            numbers = table["id"].values.tolist()
            assert table["corner"].values.tolist() == ["ss" if n % 2 else "ff" for n in numbers]
        with xarray.open_dataset(file, engine="h5netcdf", group="series/envelope/40") as series:
            assert series["values"].dims == ("id", "sample")
            assert series["values"].attrs["units"] == "V"
            assert series["carrier_frequency"].attrs["units"] == "Hz"
            assert series["step"].dims == ("id",)
            for number in series["id"].values.tolist():
                assert float(series["start"].sel(id=number)) == 1e-9 * number
        with h5py.File(file) as opened:
            names = list(opened["runs"])
        for name in names:
            with xarray.open_dataset(file, engine="h5netcdf", group=f"runs/{name}") as whole:
                assert whole["voltage"].dims == ("time",)
                assert whole["deck"].item() == DECK


def test_a_long_text_is_kept_once_in_each_file(swept: Path) -> None:
    name = hashlib.sha256(DECK.encode()).hexdigest()
    for file in (swept, *list_parts(swept)):
        with h5py.File(file) as opened:
            if not len(opened["runs"]):
                continue
            assert list(opened["texts"]) == [name]
            for number in opened["runs"]:
                assert opened["runs"][number]["deck"] == opened["texts"][name]
    with h5py.File(swept) as opened:
        assert opened["plan/deck"] == opened["texts"][name]
        assert opened["plan/deck"].asstr()[()] == DECK


def test_checksums_do_not_depend_on_the_file(path: Path) -> None:
    write_some(path)
    before = read_table(path)["checksum"].tolist()
    assert all(len(text) == 32 for text in before)
    compact(path)
    assert read_table(path)["checksum"].tolist() == before
    consolidate(path)
    assert read_table(path)["checksum"].tolist() == before
    with h5py.File(path) as file:
        kept = file["runs/000004"].attrs["checksum"]
    write_rows(path, [row(9)])
    consolidate(path)
    with h5py.File(path) as file:
        assert file["runs/000004"].attrs["checksum"] == kept


MIXED = [
    {"a": 1, "b": 2**60 + 1, "c": True, "d": 0.1},
    {"a": 2.5, "b": 7, "c": "text", "d": 3},
    {"a": "1e3", "b": 0.5, "d": False},
    {"b": "nan", "c": -0.0, "d": float("inf"), "e": float("nan"), "f": ""},
    {"a": -(2**53), "b": 2**53 + 1, "c": "True", "d": 2**70},
]


def test_checksums_hold_where_columns_change_their_type(path: Path) -> None:
    # Together in one part, each alone, and joined by a merge: the same cells in other types.
    rows = [Row(number, "R", cells=cells) for number, cells in enumerate(MIXED, 1)]
    write_rows(path, rows)
    together = read_table(path)
    assert verify(path).damaged == ()
    for one in rows:
        write_rows(path, [one])
    apart = read_table(path)
    assert apart["checksum"].tolist() == together["checksum"].tolist()
    consolidate(path)
    assert verify(path).damaged == ()
    assert read_table(path)["checksum"].tolist() == together["checksum"].tolist()
    assert read_table(path)["b"].tolist()[0] == str(2**60 + 1)
    assert len(set(together["checksum"])) == len(MIXED)


def test_plan(path: Path, tmp_path: Path) -> None:
    found = read_plan(path, TYPES)
    assert found.title == PLAN.title
    np.testing.assert_array_equal(found.frequencies, PLAN.frequencies)
    assert run_numbers(path) == ()
    assert read_table(path) == {}
    with pytest.raises(ArchiveError, match="exists already"):
        create(path, PLAN)
    with pytest.raises(ArchiveError, match="dataclass"):
        create(tmp_path / "b.h5", {"a": 1})
    with pytest.raises(ArchiveError, match="holds a sweep"):
        write(path, record(1))
    single = tmp_path / "single.h5"
    write(single, record(1))
    assert read_plan(single, TYPES) is None


def test_parts_without_their_archive_are_no_new_sweep(path: Path) -> None:
    write_rows(path, [row(1)])
    path.unlink()
    with pytest.raises(ArchiveError, match="exists already"):
        create(path, PLAN)
    with pytest.raises(ArchiveError, match="its parts are in"):
        write_rows(path, [row(2)])


def test_whole_runs_and_rows_in_one_archive(path: Path) -> None:
    write_rows(path, [row(1)])
    write_part(path, [NumberedRun(2, record(2))])
    assert append(path, record(3)) == 3
    write_rows(path, [row(4, whole=True)])
    consolidate(path)
    assert record_numbers(path) == (2, 3, 4)
    check_rows(path, {1, 4})
    assert verify(path).damaged == ()
    assert read_table(path)["checksum"].tolist()[1:3] == ["", ""]


def test_a_row_takes_the_place_of_the_whole_run_before_it(path: Path) -> None:
    write_rows(path, [row(1, whole=True), row(2, whole=True)])
    write_rows(path, [row(1)])
    assert record_numbers(path) == (2,)
    consolidate(path)
    assert record_numbers(path) == (2,)


def test_real_series_and_several_lengths(path: Path) -> None:
    real = np.linspace(-1.0, 1.0, 7)
    rows = [
        Row(1, "R", series={"v": Series(0.0, 1.0, real, "V"), "i": Series(0.0, 1.0, real, "A")}),
        Row(2, "R", series={"v": Series(0.0, 1.0, real[:3], "V")}),
        Row(3, "R", series={"v": Series(0.0, 1.0, real * 1j, "V")}),
    ]
    for one in rows:
        write_rows(path, [one])
    consolidate(path)
    assert verify(path).damaged == ()
    assert set(read_series(path, 1)) == {"v", "i"}
    np.testing.assert_array_equal(read_series(path, 1)["i"].values, real.astype(np.float32))
    np.testing.assert_array_equal(read_series(path, 2)["v"].values, real[:3].astype(np.float32))
    np.testing.assert_array_equal(
        read_series(path, 3)["v"].values, (1j * real).astype(np.complex64)
    )


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ([], "at least one row"),
        ([row(1), row(1)], "stands twice"),
        ([Row(1, "R", run=5)], "must be an instance of a dataclass"),
        ([Row(1, "R", cells={"a": "\0"})], "HDF5 refused"),
        ([Row(1, "R", series={"v": Series(0.0, 1.0, np.zeros((2, 2)), "V")})], "shape"),
        ([Row(1, "R", series={"v": Series(0.0, 1.0, np.zeros(0), "V")})], "shape"),
        ([Row(1, "R", series={"v": Series(0.0, 1.0, np.full(2, 1e39), "V")})], "3.4e38"),
    ],
)
def test_what_is_refused(path: Path, rows: list[Row], message: str) -> None:
    with pytest.raises(ArchiveError, match=message) as caught:
        write_rows(path, rows)
    assert caught.value.hint
    assert list_parts(path) == ()


def test_rows_that_cannot_be() -> None:
    with pytest.raises(ArchiveError, match="start at 1"):
        Row(0, "R")
    with pytest.raises(ArchiveError, match="must not be called 'status'"):
        Row(1, "R", cells={"status": "done"})


def test_cells_are_the_columns_of_a_whole_run(path: Path) -> None:
    write_part(path, [NumberedRun(1, row(3), RunInfo("done", "", 1.0))])
    cells, units = cells_of(row(3))
    table = read_table(path)
    expected = {name for name in table if name not in ("id", "status", "start_time", "wall_time")}
    assert set(cells) | {"kind"} == expected
    assert {name: table[name][0] for name in cells} == cells
    assert {name: read_units(path)[name] for name in cells} == units


@pytest.mark.full
def test_parts_are_merged_when_there_are_many(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sweeps, "_MANY_PARTS", 5)
    most = 0
    for number in range(1, 26):
        write_rows(path, [row(number)])
        # Out of its turn, and again: what was written last holds, whatever was merged since.
        write_rows(path, [row(1000), row(max(1, number - 5), whole=number % 7 == 0)])
        most = max(most, len(list_parts(path)))
    assert most <= 10
    assert run_numbers(path) == (*range(1, 26), 1000)
    check_rows(path, {*range(1, 26), 1000})
    assert record_numbers(path) == tuple(number - 5 for number in range(7, 26, 7))
    assert verify(path).damaged == ()


def test_parts_of_some_size_stay_apart(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    parts = [write_rows(path, [row(number)]) for number in range(1, 7)]
    size = parts[0].stat().st_size
    monkeypatch.setattr(consolidation, "_MERGED_PART", int(2.5 * size))
    assert compact(path) == 3
    assert len(list_parts(path)) == 3
    monkeypatch.setattr(consolidation, "_SMALL_PART", size // 2)
    write_rows(path, [row(7)])
    write_rows(path, [row(8)])
    assert compact(path) == 0
    check_rows(path, set(range(1, 9)))


def test_a_clock_that_was_set_back(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    write_rows(path, [row(1, status="failed")])
    monkeypatch.setattr("cosim.archive.files.time.time_ns", lambda: 5)
    write_rows(path, [row(1)])
    check_rows(path, {1})


def test_the_record_type_is_what_it_was(swept: Path) -> None:
    assert isinstance(read(swept, TYPES, 4), Record)
    assert read(swept, {}, 4)["kind"] == "Record"
