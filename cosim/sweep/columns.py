"""The columns of a sweep's table: names of the plan's own, and what they hold."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

CORNER, SAMPLE, PERTURBED, TRIM = "corner", "sample", "perturbed", "trim"
# What the last holds: one calibration for all runs, or one for each die.
FROZEN, EACH = "frozen", "each"

Table = Mapping[str, npt.NDArray[Any]]
IntArray = npt.NDArray[np.int64]


def encode(values: npt.NDArray[Any]) -> tuple[list[Any], IntArray]:
    """Number the different entries of a column.

    Parameters
    ----------
    values : ndarray, shape (runs,)
        Texts or numbers.

    Returns
    -------
    list
        The different entries, in the order of their first appearance for texts, sorted for
        numbers.
    ndarray of int, shape (runs,)
        The place of each run's entry in that list.
    """
    if values.dtype.kind in "fiub":
        different, codes = np.unique(values, return_inverse=True)
        return different.tolist(), codes.astype(np.int64)
    # Sorting objects, as numpy does to find the different ones, takes ten times as long.
    places: dict[str, int] = {}
    numbers = [places.setdefault(str(value), len(places)) for value in values.tolist()]
    return list(places), np.array(numbers, dtype=np.int64)


def grid_points(table: Table, names: Sequence[str]) -> tuple[IntArray, IntArray]:
    """Number the different combinations of some columns.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        The runs, at least one.
    names : sequence of str
        The columns.

    Returns
    -------
    codes : ndarray of int, shape (runs,)
        Number of each run's combination.
    first : ndarray of int, shape (combinations,)
        A run of each combination.
    """
    codes = np.zeros(len(next(iter(table.values()))), dtype=np.int64)
    for name in names:
        different, more = encode(table[name])
        # Renumbered after each column, so that the product never overflows.
        codes = np.unique(codes * len(different) + more, return_inverse=True)[1]
    _, first, codes = np.unique(codes, return_index=True, return_inverse=True)
    return codes.astype(np.int64), first.astype(np.int64)


def plain(value: Any) -> float | str | None:
    """Turn an entry of a column into a plain number or text.

    Parameters
    ----------
    value : object
        The entry.

    Returns
    -------
    float, int, str or None
        None for a number that does not exist, as it is in JSON.
    """
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        return None if math.isnan(value) else float(value)
    return str(value)
