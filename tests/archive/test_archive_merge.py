"""Oracle: the rule of a merge, and that a merge in a child process is that in memory."""

from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest

from cosim.archive import (
    append,
    compact,
    consolidate,
    consolidation,
    create,
    merge,
    merging,
    read,
    read_plan,
    read_series,
    read_table,
    record_numbers,
    run_numbers,
    verify,
    write,
    write_rows,
)
from cosim.archive.files import list_parts
from cosim.errors import ArchiveError
from tests.archive.sweep_rows import DECK, PLAN, TYPES, check_rows, record, row


def archive(path: Path, *numbers: int) -> Path:
    """Write an archive of some runs in parts of two."""
    create(path, PLAN)
    for first in range(0, len(numbers), 2):
        write_rows(path, [row(number, whole=number % 3 == 0) for number in numbers[first:][:2]])
    return path


def content(path: Path) -> dict[str, str]:
    """Give all that is in a file, attributes included, but for addresses."""
    found: dict[str, str] = {}

    def visit(name: str, item: object) -> None:
        if isinstance(item, h5py.Dataset):
            found[name] = f"{item.dtype} {item.shape} {np.array(item[()]).tolist()}"
        for key, value in item.attrs.items():
            if key not in ("DIMENSION_LIST", "REFERENCE_LIST"):
                found[f"{name}@{key}"] = str(np.array(value).tolist())

    with h5py.File(path) as file:
        file.visititems(visit)
    return found


@pytest.mark.parametrize("child", [False, pytest.param(True, marks=pytest.mark.full)])
def test_merge_of_a_job_array(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, child: bool) -> None:
    if child:
        monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    slices = [archive(tmp_path / f"{k}.h5", *range(k, 20, 3)) for k in (1, 2, 3)]
    consolidate(slices[1])
    before = [content(path) for path in slices]
    path = tmp_path / "all.h5"
    assert merge(path, slices) == 19
    assert run_numbers(path) == tuple(range(1, 20))
    assert list_parts(path) == ()
    check_rows(path, set(range(1, 20)))
    assert record_numbers(path) == tuple(range(3, 20, 3))
    assert verify(path).damaged == ()
    assert read_plan(path, TYPES).title == PLAN.title
    assert [content(path) for path in slices] == before
    for one in slices:
        table = dict(zip(*[read_table(one)[name] for name in ("id", "checksum")], strict=True))
        merged = dict(zip(*[read_table(path)[name] for name in ("id", "checksum")], strict=True))
        assert table.items() <= merged.items()
    # Again: nothing comes in that is there already.
    assert merge(path, slices) == 0


def test_which_of_two_runs_holds(tmp_path: Path) -> None:
    early, late = "2026-03-01T10:00:00+00:00", "2026-03-02T10:00:00+00:00"
    ours, theirs = tmp_path / "ours.h5", tmp_path / "theirs.h5"
    create(ours, PLAN)
    create(theirs, PLAN)
    # A part of ours that comes last holds within our archive, whatever theirs has.
    write_rows(ours, [row(6, start=late)])
    write_rows(
        ours,
        [
            row(1, status="failed", start=late),
            row(2, start=early),
            row(3, start=early),
            row(4, start=late, whole=True),
            row(5, status="failed", start=early),
            row(6, status="failed", start=early),
            row(7, start=early),
        ],
    )
    write_rows(
        theirs,
        [
            row(1, start=early),
            row(2, status="failed", start=late),
            row(3, start=late, whole=True),
            row(4, start=early, whole=True),
            row(5, status="timeout", start=late),
            row(6, start=early),
            row(7, start=early),
            row(8, start=early),
        ],
    )
    assert merge(ours, [theirs]) == 5
    table = read_table(ours)
    assert table["status"].tolist() == ["done"] * 4 + ["timeout"] + ["done"] * 3
    assert table["start_time"].tolist() == [early, early, late, late, late, early, early, early]
    assert record_numbers(ours) == (3, 4)
    assert read_series(ours, 5) == {}
    assert verify(ours).damaged == ()


def test_what_is_not_merged(tmp_path: Path) -> None:
    path = archive(tmp_path / "a.h5", 1)
    other = tmp_path / "b.h5"
    create(other, replace(PLAN, title="other"))
    single = tmp_path / "c.h5"
    write(single, record(1))
    before = content(path)
    for others, message in (
        ([other], "planned otherwise"),
        ([single], "has no plan"),
        ([path], "each once"),
        ([], "each once"),
        ([tmp_path / "missing.h5"], "no such archive"),
    ):
        with pytest.raises(ArchiveError, match=message) as caught:
            merge(path, others)
        assert caught.value.hint
    assert content(path) == before
    assert len(list_parts(path)) == 1
    with pytest.raises(ArchiveError, match="no such archive"):
        merge(tmp_path / "new.h5", [tmp_path / "missing.h5"])
    assert not (tmp_path / "new.h5").exists()


@pytest.mark.full
def test_a_child_writes_what_is_written_in_memory(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    numbers = (3, 1, 2, 9, 7, 8, 12)
    one, other = (archive(tmp_path / name, *numbers) for name in ("a.h5", "b.h5"))
    append(one, record(13))
    append(other, record(13))
    assert consolidate(one, {3, 12, 13}) == 4
    monkeypatch.setattr(consolidation, "_IN_MEMORY", 0)
    assert consolidate(other, {3, 12, 13}) == 4
    assert content(one) == content(other)
    assert record_numbers(one) == (3, 12, 13)
    assert read(other, TYPES, 13).deck == DECK
    check_rows(other, set(numbers))
    assert consolidate(other) == 0


@pytest.mark.full
def test_in_small_pieces_as_in_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Few files open, a block of one column, and of two rows of series at a time."""
    numbers = [7 * n % 41 + 1 for n in range(41)]
    one, other = (archive(tmp_path / name, *numbers) for name in ("a.h5", "b.h5"))
    consolidate(one)
    for name, value in (("_OPEN_FILES", 2), ("_CELLS", 50), ("_SAMPLES", 80), ("_CHUNK", 80)):
        monkeypatch.setattr(merging, name, value)
    consolidate(other)
    assert content(one) == content(other)
    check_rows(other, set(numbers))


def test_records_that_are_not_kept_leave_their_texts(tmp_path: Path) -> None:
    path = archive(tmp_path / "a.h5", 1, 3, 6)
    assert consolidate(path, ()) == 2
    assert record_numbers(path) == ()
    check_rows(path, {1, 3, 6})
    with h5py.File(path) as file:
        # The plan's own.
        assert len(file["texts"]) == 1
    write_rows(path, [row(9, whole=True)])
    compact(path)
    assert consolidate(path, range(8)) == 1
    assert record_numbers(path) == ()
    assert verify(path).damaged == ()
