"""Rows of a made-up sweep, each a function of its number, for the tests of the archive."""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from cosim.archive import Row, RunInfo, Series, read, read_series, read_table, record_numbers

UNITS = {"frequency": "Hz", "gain": "1"}
# Over the length from which on a text is kept once for all runs.
DECK = "a deck that many runs have in common\n" * 40


@dataclass(frozen=True, slots=True)
class Plan:
    title: str
    deck: str
    frequencies: np.ndarray = field(metadata={"unit": "Hz"})


@dataclass(frozen=True, slots=True)
class Record:
    time: np.ndarray = field(metadata={"unit": "s", "axes": ("time",)})
    voltage: np.ndarray = field(metadata={"unit": "V", "axes": ("time",)})
    deck: str = DECK
    labels: tuple[str, ...] = ("one", "two")


TYPES = {"Plan": Plan, "Record": Record}
PLAN = Plan("corners", DECK, np.linspace(1e9, 2e9, 5))


def samples(number: int, length: int = 40) -> np.ndarray:
    """Give the envelope of a run."""
    grid = np.arange(length) / length
    return np.exp(2j * np.pi * number * grid) * number


def record(number: int) -> Record:
    """Give the record of a run."""
    time = np.arange(1500) * 1e-12
    return Record(time, np.sin(1e9 * number * time))


def row(number: int, whole: bool = False, status: str = "done", start: str = "") -> Row:
    """Give the row of a run."""
    done = status == "done"
    cells = {
        "frequency": 1e9 + number,
        "gain": number,
        "corner": "ss" if number % 2 else "ff",
        "locked": number % 3 == 0,
    }
    envelope = Series(1e-9 * number, 0.5e-9, samples(number), "V", 5e9)
    return Row(
        number,
        "Record" if done else "",
        RunInfo(status, start or f"2026-03-01T10:00:{number % 60:02d}+00:00", 0.25 * number),
        cells if done else {"corner": cells["corner"]},
        UNITS,
        {"envelope": envelope} if done else {},
        record(number) if whole else None,
    )


def check_rows(path: Path, numbers: set[int]) -> None:
    """Check the data of some runs against what was written, and all records that there are."""
    table = read_table(path)
    place = {number: index for index, number in enumerate(table.get("id", ()))}
    for number in numbers:
        index, expected = place[number], row(number)
        for name, value in expected.cells.items():
            assert table[name][index] == value, name
        assert table["wall_time"][index] == expected.info.wall_time
        assert table["start_time"][index] == expected.info.start_time
        found = read_series(path, number)["envelope"]
        np.testing.assert_array_equal(found.values, samples(number).astype(np.complex64))
        assert found.grid == expected.series["envelope"].grid
        assert found.unit == "V"
    for number in record_numbers(path):
        kept, expected_record = read(path, TYPES, number), record(number)
        np.testing.assert_array_equal(kept.voltage, expected_record.voltage)
        assert kept.deck == DECK
