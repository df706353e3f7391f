"""Oracle: the fields of the runs that were written, and the rules of merging stated here."""

import io
from dataclasses import dataclass, field
from pathlib import Path

import h5py
import numpy as np
import pytest

from cosim.archive import (
    NumberedRun,
    RunInfo,
    append,
    consolidate,
    read,
    read_table,
    read_units,
    run_numbers,
    write,
    write_part,
)
from cosim.archive.publishing import edited
from cosim.archive.table import Column, write_table
from cosim.errors import ArchiveError


@dataclass(frozen=True, slots=True)
class Fidelity:
    average_gate_fidelity: float = field(metadata={"unit": "1"})
    angle: float = field(default=0.25, metadata={"unit": "rad"})


@dataclass(frozen=True, slots=True)
class Gate:
    free_frame: Fidelity
    parameters: dict[str, float] = field(metadata={"unit_from": "unit"})
    seed: int = 1
    locked: bool = True
    deck: str = "one\ntwo"
    target: str = "x90"
    unit: str = "m"
    samples: np.ndarray = field(default_factory=lambda: np.zeros(3))


@dataclass(frozen=True, slots=True)
class Failure:
    reason: str
    time: float = field(metadata={"unit": "s"})


@dataclass(frozen=True, slots=True)
class Timed:
    wall_time: float
    id: int = 99


TYPES = {"Gate": Gate, "Fidelity": Fidelity, "Failure": Failure}


def gate(value: float, **parameters: float) -> Gate:
    return Gate(Fidelity(value), parameters)


def test_scalars_become_columns_with_units(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    info = RunInfo(status="done", start_time="2031-01-02T03:04:05+00:00", wall_time=1.5)
    write(path, Gate(Fidelity(0.999), {"x1/xdac.wn": 2e-6}, seed=2**70), info=info)
    table, units = read_table(path), read_units(path)
    assert {name: values.tolist() for name, values in table.items()} == {
        "id": [1],
        "kind": ["Gate"],
        "status": ["done"],
        "start_time": ["2031-01-02T03:04:05+00:00"],
        "wall_time": [1.5],
        "free_frame.average_gate_fidelity": [0.999],
        "free_frame.angle": [0.25],
        "parameters.x1/xdac.wn": [2e-6],
        "seed": [str(2**70)],
        "locked": [True],
        "target": ["x90"],
        "unit": ["m"],
    }
    assert units["free_frame.angle"] == "rad"
    assert units["parameters.x1/xdac.wn"] == "m"
    assert units["wall_time"] == "s"
    assert units["locked"] == ""


def test_runs_of_two_kinds_share_a_table(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, gate(0.5))
    failed = NumberedRun(2, Failure("no convergence", 3e-9), RunInfo(status="failed"))
    write_part(path, [failed, NumberedRun(3, gate(0.75, w=1e-6))])
    for _ in range(2):
        table, units = read_table(path), read_units(path)
        assert table["status"].tolist() == ["done", "failed", "done"]
        assert table["reason"].tolist() == ["", "no convergence", ""]
        np.testing.assert_array_equal(table["time"], [np.nan, 3e-9, np.nan])
        np.testing.assert_array_equal(table["seed"], [1.0, np.nan, 1.0])
        np.testing.assert_array_equal(table["parameters.w"], [np.nan, np.nan, 1e-6])
        np.testing.assert_array_equal(
            table["free_frame.average_gate_fidelity"], [0.5, np.nan, 0.75]
        )
        assert units["time"] == "s"
        assert units["locked"] == ""
        consolidate(path)


def test_whole_numbers_and_bools_stay_what_they_are(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, Gate(Fidelity(1.0), {}, seed=2**62 + 1))
    append(path, Gate(Fidelity(1.0), {}, seed=5))
    table = read_table(path)
    assert table["seed"].tolist() == [2**62 + 1, 5]
    assert table["locked"].dtype == np.bool_


def test_a_runs_own_wall_time_fills_the_column_but_not_its_id(tmp_path: Path) -> None:
    write(tmp_path / "a.h5", Timed(2.5))
    table = read_table(tmp_path / "a.h5")
    assert (table["wall_time"].tolist(), table["id"].tolist()) == ([2.5], [1])


def test_a_unit_that_differs_between_runs_is_not_claimed(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, Gate(Fidelity(1.0), {"w": 1.0}, unit="m"))
    append(path, Gate(Fidelity(1.0), {"w": 1.0}, unit="ohm"))
    assert read_units(path)["parameters.w"] == "mixed"


def test_the_table_is_read_without_any_run(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, gate(0.5))
    with h5py.File(path, "r+") as file:
        del file["runs"]
    assert read_table(path)["free_frame.average_gate_fidelity"].tolist() == [0.5]
    assert run_numbers(path) == (1,)


def test_the_later_part_holds(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, gate(0.1))
    write_part(path, [NumberedRun(n, gate(0.2)) for n in (1, 2, 7)])
    write_part(path, [NumberedRun(n, gate(0.3)) for n in (2, 3)])
    for merged in (2, 0):
        assert run_numbers(path) == (1, 2, 3, 7)
        values = [read(path, TYPES, n).free_frame.average_gate_fidelity for n in (1, 2, 3, 7)]
        assert values == [0.2, 0.3, 0.3, 0.2]
        assert read_table(path)["free_frame.average_gate_fidelity"].tolist() == values
        assert consolidate(path) == merged
    assert [item.name for item in tmp_path.iterdir()] == ["a.h5"]
    assert append(path, gate(0.4)) == 8
    assert read(path, TYPES).free_frame.average_gate_fidelity == 0.4


def test_append_counts_the_parts(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    assert append(path, gate(0.1)) == 1
    write_part(path, [NumberedRun(5, gate(0.2))])
    assert append(path, gate(0.3)) == 6
    assert run_numbers(path) == (1, 5, 6)


def test_run_numbers_above_six_digits(tmp_path: Path) -> None:
    path = tmp_path / "a.h5"
    write(path, gate(0.1))
    write_part(path, [NumberedRun(n, gate(float(n))) for n in (999_999, 1_000_000)])
    consolidate(path)
    assert run_numbers(path) == (1, 999_999, 1_000_000)
    assert read(path, TYPES).free_frame.average_gate_fidelity == 1e6
    with pytest.raises(ArchiveError, match="start at 1, got 0"):
        NumberedRun(0, gate(0.1))


@pytest.mark.full
def test_thousands_of_columns() -> None:
    # 4,085 is where HDF5's first object format has no more room for a scale's references.
    columns = {"id": Column(np.array([1]), "1")}
    columns |= {f"p{n}": Column(np.array([float(n)]), "V") for n in range(4100)}
    image = io.BytesIO()
    with edited(image, Path("memory")) as file:
        write_table(file, columns)
    with h5py.File(image) as file:
        assert file["table/p4099"][()].tolist() == [4099.0]
        assert file["table/p4099"].dims[0][0].name == "/table/id"
