"""Oracle: a bit that the test itself flips in a file must be found, and only there."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from cosim.archive import (
    Verification,
    compact,
    consolidate,
    create,
    run_numbers,
    verify,
    write,
    write_rows,
)
from cosim.archive.files import list_parts
from cosim.errors import ArchiveError
from tests.archive.sweep_rows import PLAN, record, row


@pytest.fixture(params=["part", "merged part", "consolidated"])
def swept(request: pytest.FixtureRequest, tmp_path: Path) -> tuple[Path, Path]:
    """An archive of three runs, one of them whole, and the file that holds them."""
    path = tmp_path / "a.h5"
    create(path, PLAN)
    write_rows(path, [row(1), row(2, whole=True), row(3, status="failed")])
    if request.param == "part":
        return path, list_parts(path)[0]
    write_rows(path, [row(1)])
    if request.param == "merged part":
        compact(path)
        return path, list_parts(path)[0]
    consolidate(path)
    return path, path


def flip(file: Path, name: str, at: int) -> None:
    """Flip a bit of a dataset's bytes, past HDF5's own checks."""
    with h5py.File(file) as opened:
        dataset = opened[name].id
        if dataset.get_offset() is None:
            chunk = dataset.get_chunk_info(0)
            start, size = chunk.byte_offset, chunk.size
        else:
            start, size = dataset.get_offset(), dataset.get_storage_size()
    content = bytearray(file.read_bytes())
    content[start + at % size] ^= 1 << (at % 8)
    file.write_bytes(content)


def test_nothing_is_found_where_nothing_was_done(swept: tuple[Path, Path]) -> None:
    assert verify(swept[0]) == Verification(3, 1, ())


@pytest.mark.parametrize(
    "name",
    [
        "id",
        "locked",
        *(pytest.param(n, marks=pytest.mark.full) for n in ("wall_time", "frequency", "gain")),
    ],
)
def test_a_flipped_bit_in_a_number_of_a_row(swept: tuple[Path, Path], name: str) -> None:
    path, file = swept
    content = file.read_bytes()
    with h5py.File(file) as opened:
        dataset = opened["table"][name]
        size = dataset.id.get_storage_size()
        failed = dataset[2]
        width = size // 3
    for at in range(size):
        flip(file, f"table/{name}", at)
        found = verify(path).damaged
        file.write_bytes(content)
        if at // width == 2 and failed != failed and not found:
            # Another of the many NaN, which stands for "no such value" like the one before.
            continue
        assert any("the row or a series of run" in what for what in found), (name, at)
        if name != "id":
            assert len(found) == 1
            assert f"run {at // width + 1}" in found[0]


@pytest.mark.parametrize("name", ["kind", "status", "start_time", "corner", "checksum"])
def test_a_changed_text_of_a_row(swept: tuple[Path, Path], name: str) -> None:
    path, file = swept
    with h5py.File(file, "r+") as opened:
        text = opened["table"][name].asstr()[1]
        opened["table"][name][1] = chr(ord(text[0]) ^ 1) + text[1:]
    assert verify(path).damaged == (f"{file}: the row or a series of run 2",)


@pytest.mark.parametrize(
    "name",
    [pytest.param("values", marks=pytest.mark.full), "start", "step", "carrier_frequency"],
)
def test_a_flipped_bit_in_a_series(swept: tuple[Path, Path], name: str) -> None:
    path, file = swept
    content = file.read_bytes()
    with h5py.File(file) as opened:
        size = opened["series/envelope/40"][name].id.get_storage_size()
    for at in range(0, size, 7):
        flip(file, f"series/envelope/40/{name}", at)
        assert len(verify(path).damaged) == 1, at
        file.write_bytes(content)


def flip_plain(group: Any) -> None:
    group["voltage"][700] = np.nextafter(group["voltage"][700], 2.0)


def flip_scale(group: Any) -> None:
    group["time"][3] *= 1.0 + 1e-15


def flip_text(group: Any) -> None:
    group["labels"][0] = "ona"


def flip_deck(group: Any) -> None:
    group["deck"][()] = group["deck"].asstr()[()].replace("deck", "dick", 1)


def change_unit(group: Any) -> None:
    group["voltage"].attrs["units"] = "mV"


def change_status(group: Any) -> None:
    group.attrs["status"] = "dona"


def drop_member(group: Any) -> None:
    del group["labels"]


@pytest.mark.parametrize(
    "change",
    [flip_plain, flip_scale, flip_text, flip_deck, change_unit, change_status, drop_member],
)
def test_a_change_in_a_record(swept: tuple[Path, Path], change: Callable[[Any], None]) -> None:
    path, file = swept
    with h5py.File(file, "r+") as opened:
        change(opened["runs/000002"])
    found = verify(path).damaged
    # The plan has the same deck; in one file, it is the same text.
    assert f"{file}: the record of run 2" in found
    assert len(found) == (2 if change is flip_deck and file == path else 1)


def test_a_flipped_bit_in_packed_samples(swept: tuple[Path, Path]) -> None:
    path, file = swept
    flip(file, "runs/000002/voltage", 2000)
    found = verify(path)
    assert len(found.damaged) == 1
    assert "damaged" in found.damaged[0]


def test_a_change_of_the_plan(swept: tuple[Path, Path]) -> None:
    path, _ = swept
    flip(path, "plan/frequencies", 9)
    assert verify(path).damaged == (f"{path}: the plan",)


def test_a_part_that_is_cut_short(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    create(path, PLAN)
    write_rows(path, [row(1)])
    bad = write_rows(path, [row(2)])
    bad.write_bytes(bad.read_bytes()[:-100])
    found = verify(path)
    assert found.rows == 1
    assert len(found.damaged) == 1
    assert str(bad) in found.damaged[0]
    with pytest.raises(ArchiveError):
        run_numbers(path)


def test_a_lost_column_and_a_lost_series(swept: tuple[Path, Path]) -> None:
    path, file = swept
    with h5py.File(file, "r+") as opened:
        del opened["table/gain"]
    assert len(verify(path).damaged) == 2
    with h5py.File(file, "r+") as opened:
        del opened["series/envelope"]
    assert len(verify(path).damaged) == 2


def test_runs_without_checksums_are_read(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, record(1))
    assert verify(path) == Verification(1, 1, ())
    flip(path, "runs/000001/voltage", 2000)
    assert "damaged" in verify(path).damaged[0]
    with pytest.raises(ArchiveError, match="no such archive"):
        verify(tmp_path / "b.h5")
