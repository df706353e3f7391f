"""Uniformly sampled vectors of runs, stacked by name and length: /series/<name>/<n>/values."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from math import nan
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from cosim.archive.checksums import series_digest
from cosim.archive.datasets import create_dataset
from cosim.archive.layout import member_key, member_name
from cosim.errors import ArchiveError

SERIES = "series"
# What a run has along with the values of a series, with its unit.
GRID = {"start": "s", "step": "s", "carrier_frequency": "Hz"}


@dataclass(frozen=True, slots=True)
class Series:
    """A uniformly sampled vector that belongs to a run.

    Parameters
    ----------
    start : float
        Time of the first sample in s.
    step : float
        Time between samples in s.
    values : ndarray of complex or float, shape (n,)
        The samples. An archive keeps them as complex64 or float32, so to a relative 6e-8: well
        below what a circuit simulator's tolerances leave, at half the space.
    unit : str
        Unit of the values.
    carrier_frequency : float
        Carrier of an envelope in Hz; NaN where there is none.
    """

    start: float
    step: float
    values: npt.NDArray[Any]
    unit: str
    carrier_frequency: float = nan

    @property
    def grid(self) -> tuple[float, float, float]:
        """Start (s), step (s) and carrier frequency (Hz)."""
        return self.start, self.step, self.carrier_frequency


@dataclass(frozen=True, slots=True)
class Stack:
    """Series of one name and length, of many runs.

    Parameters
    ----------
    numbers : ndarray of int64, shape (runs,)
        The runs.
    grid : ndarray, shape (runs, 3)
        Start (s), step (s) and carrier frequency (Hz).
    values : ndarray of complex64 or float32, shape (runs, n)
        The samples.
    unit : str
        Unit of the values; "mixed" where the runs differ.
    """

    numbers: npt.NDArray[np.int64]
    grid: npt.NDArray[np.float64]
    values: npt.NDArray[Any]
    unit: str

    def digests(self, name: str) -> list[bytes]:
        """Give the digest of each run's series of this name."""
        grids = [(start, step, carrier) for start, step, carrier in self.grid.tolist()]
        return [series_digest(name, *pair) for pair in zip(grids, self.values, strict=True)]


def stacks_of(
    rows: Sequence[tuple[int, Mapping[str, Series]]],
) -> dict[tuple[str, int], Stack]:
    """Stack the series of runs.

    Parameters
    ----------
    rows : sequence of tuples
        Number and series by name of each run.

    Returns
    -------
    dict of Stack
        By name and length.

    Raises
    ------
    ArchiveError
        If the values of a series are no vector of numbers, or do not fit 32 bits.
    """
    found: dict[tuple[str, int], list[tuple[int, Series]]] = {}
    for number, series in rows:
        for name, one in series.items():
            _check(number, name, one)
            found.setdefault((name, one.values.size), []).append((number, one))
    stacks = {}
    for (name, length), entries in sorted(found.items()):
        complexes = any(one.values.dtype.kind == "c" for _, one in entries)
        values = np.empty((len(entries), length), np.complex64 if complexes else np.float32)
        with np.errstate(over="ignore"):
            for row, (_, one) in enumerate(entries):
                values[row] = one.values
        units = {one.unit for _, one in entries}
        stacks[name, length] = Stack(
            np.array([number for number, _ in entries], dtype=np.int64),
            np.array([one.grid for _, one in entries], dtype=np.float64),
            values,
            units.pop() if len(units) == 1 else "mixed",
        )
        _check_range(name, stacks[name, length], entries)
    return stacks


def _check(number: int, name: str, series: Series) -> None:
    values = series.values
    if values.ndim != 1 or not values.size or values.dtype.kind not in "fc":
        raise ArchiveError(
            f"run {number}: the series '{name}' has type {values.dtype} and shape {values.shape}",
            hint="wanted float or complex, of shape (n,) with n >= 1",
        )


def _check_range(name: str, stack: Stack, entries: Sequence[tuple[int, Series]]) -> None:
    wrong = ~np.isfinite(stack.values).all(axis=1)
    for row in np.flatnonzero(wrong):
        number, series = entries[int(row)]
        if np.any(np.isfinite(series.values) & ~np.isfinite(stack.values[row])):
            raise ArchiveError(
                f"run {number}: the series '{name}' holds values beyond 3.4e38, which is all that "
                "32 bits can hold",
                hint="give it in a larger unit",
            )


def write_stack(file: Any, name: str, stack: Stack) -> None:
    """Write a whole stack into an open file, as it is.

    Parameters
    ----------
    file : h5py.File
        The open file.
    name : str
        Name of the series.
    stack : Stack
        The series.
    """
    group = stack_group(file, name, stack.values.shape[1])
    values = create_dataset(group, "values", stack.values, stack.unit)
    write_scales(group, values, stack.numbers, stack.grid)


def stack_group(file: Any, name: str, length: int) -> Any:
    """Make the group of a stack.

    Parameters
    ----------
    file : h5py.File
        The open file.
    name : str
        Name of the series.
    length : int
        Number of samples.

    Returns
    -------
    h5py.Group
        /series/<name>/<length>.
    """
    return file.require_group(SERIES).require_group(member_name(name)).create_group(str(length))


def write_scales(
    group: Any,
    values: Any,
    numbers: npt.NDArray[np.int64],
    grid: npt.NDArray[np.float64],
) -> None:
    """Write all of a stack but its values, and tie them together.

    Parameters
    ----------
    group : h5py.Group
        The group of the stack.
    values : h5py.h5d.DatasetID
        Its values, shape (runs, n).
    numbers : ndarray of int64, shape (runs,)
        The runs.
    grid : ndarray, shape (runs, 3)
        Start, step and carrier frequency.
    """
    samples = np.arange(values.shape[1], dtype=np.int64)
    runs = create_dataset(group, "id", numbers, "1")
    sample = create_dataset(group, "sample", samples, "1")
    h5py.h5ds.set_scale(runs, b"id")
    h5py.h5ds.set_scale(sample, b"sample")
    h5py.h5ds.attach_scale(values, runs, 0)
    h5py.h5ds.attach_scale(values, sample, 1)
    for index, (name, unit) in enumerate(GRID.items()):
        column = np.ascontiguousarray(grid[:, index])
        dataset = create_dataset(group, name, column, unit)
        h5py.h5ds.attach_scale(dataset, runs, 0)


def stack_groups(file: Any) -> Iterator[tuple[str, int, Any]]:
    """Walk the stacks of an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.

    Yields
    ------
    tuple of str, int, h5py.Group
        Name of the series, length and group.
    """
    if SERIES not in file:
        return
    for link in file[SERIES]:
        for length in file[SERIES][link]:
            yield member_key(link), int(length), file[SERIES][link][length]


def load_grid(group: Any) -> npt.NDArray[np.float64]:
    """Read start, step and carrier frequency of the runs of a stack.

    Parameters
    ----------
    group : h5py.Group
        The group of the stack.

    Returns
    -------
    ndarray, shape (runs, 3)
        In s, s and Hz.
    """
    return np.stack([group[name][()] for name in GRID], axis=1)


def load_rows(group: Any, rows: npt.NDArray[np.intp]) -> npt.NDArray[Any]:
    """Read the values of some rows of a stack.

    Parameters
    ----------
    group : h5py.Group
        The group of the stack.
    rows : ndarray of int, shape (k,)
        Which ones.

    Returns
    -------
    ndarray of complex64 or float32, shape (k, n)
        In the order of `rows`.
    """
    values = group["values"]
    if not rows.size:
        return np.empty((0, values.shape[1]), values.dtype)
    first, last = int(rows.min()), int(rows.max())
    if last - first < 2 * rows.size:
        block: npt.NDArray[Any] = values[first : last + 1][rows - first]
        return block
    found = np.empty((rows.size, values.shape[1]), values.dtype)
    for place, row in enumerate(rows.tolist()):
        values.read_direct(found, np.s_[row], np.s_[place])
    return found


def load_series(file: Any, number: int) -> dict[str, Series]:
    """Read the series of one run in an open file.

    Parameters
    ----------
    file : h5py.File
        The open file.
    number : int
        Run number.

    Returns
    -------
    dict of str to Series
        By name.
    """
    found = {}
    for name, _, group in stack_groups(file):
        for row in np.flatnonzero(group["id"][()] == number).tolist():
            grid = [float(group[key][row]) for key in GRID]
            unit = str(group["values"].attrs["units"])
            found[name] = Series(grid[0], grid[1], group["values"][row], unit, grid[2])
    return found
