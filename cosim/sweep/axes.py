"""What a sweep moves: its corners, the axes of its grid, what is drawn and what is perturbed."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from cosim.circuit.deck import Deck
from cosim.config import numbered
from cosim.decks import altered_deck, read_deck
from cosim.errors import CosimError, TestbenchError
from cosim.keys import NumberKey, flattened, nominal, number_key, with_number, with_setting
from cosim.sweep.identity import Files, files_of
from cosim.sweep.samples import Variation, read_step, read_variation
from cosim.sweep.table import GridTable, SweepTable
from cosim.testbench import Bench


@dataclass(frozen=True, slots=True)
class Corner:
    """A corner with all that is read once for it.

    Parameters
    ----------
    name : str
        Its name; empty for the testbench itself.
    bench : Bench
        With the corner's settings and without [sweep].
    deck : Deck or None
        As read, nothing altered; None when a waveform is imported.
    files : Files
        What the testbench reads.
    flat : mapping
        The testbench, flat.
    moved : frozenset of str
        Keys of `flat` that the corner has set to another value than the testbench.
    """

    name: str
    bench: Bench
    deck: Deck | None
    files: Files
    flat: Mapping[str, Any]
    moved: frozenset[str]


@dataclass(frozen=True, slots=True)
class Axis:
    """One axis of the grid.

    Parameters
    ----------
    key : NumberKey
        The number.
    values : tuple of float
        In SI units, no two of them equal.
    """

    key: NumberKey
    values: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Perturbation:
    """One number that is moved down and up alone.

    Parameters
    ----------
    key : NumberKey
        The number.
    step : float
        In SI units, or a part of the nominal value.
    relative : bool
        Which of the two.
    """

    key: NumberKey
    step: float
    relative: bool

    def moved(self, center: float, sign: int) -> float:
        """Give the value below (-1) or above (+1) the nominal one."""
        return center + sign * self.step * (abs(center) if self.relative else 1.0)


def read_corners(bench: Bench, table: SweepTable) -> tuple[Corner, ...]:
    """Apply the corners of a sweep to a testbench and read their decks.

    Parameters
    ----------
    bench : Bench
        The testbench.
    table : SweepTable
        Its table [sweep].

    Returns
    -------
    tuple of Corner
        The testbench itself where there are none.

    Raises
    ------
    TestbenchError
        If a key or value is wrong, or two corners are the same.
    DeckError
        If a deck cannot be read, or a parameter, section or instance does not exist.
    """
    bench = replace(bench, studies={})
    decks: dict[tuple[Any, ...], Deck] = {}
    if not table.corners:
        return (_corner("", bench, {}, decks),)
    base = flattened(bench)
    found: list[Corner] = []
    for entry in table.corners:
        where = f"{bench.source or 'the testbench'}, table [sweep.corners.{entry.name}]"
        moved = bench
        for path, raw in entry.settings:
            moved = with_setting(moved, path, raw, where)
        try:
            corner = _corner(entry.name, moved, base, decks)
        except CosimError as error:
            error.args = (f"{where}: {error.message}",)
            raise
        for other in found:
            if (other.flat, other.files) == (corner.flat, corner.files):
                raise TestbenchError(f"{where}: the same as the corner '{other.name}'")
        found.append(corner)
    return tuple(found)


def _corner(
    name: str, bench: Bench, base: Mapping[str, Any], decks: dict[tuple[Any, ...], Deck]
) -> Corner:
    deck = None
    if bench.netlist is not None:
        table = bench.netlist
        read_by = (table.file, repr(table.sections), table.include_paths, table.compatibility)
        if read_by not in decks:
            decks[read_by] = read_deck(bench)
        deck = decks[read_by]
        altered_deck(bench, deck)  # For its errors: names that do not exist.
    flat = flattened(bench)
    moved = frozenset(path for path, value in flat.items() if base.get(path) != value)
    return Corner(name, bench, deck, files_of(bench, deck), flat, moved if name else frozenset())


def read_axes(corners: tuple[Corner, ...], table: SweepTable) -> tuple[Axis, ...]:
    """Read the axes of the grid.

    Parameters
    ----------
    corners : tuple of Corner
        From `read_corners`.
    table : SweepTable
        The table [sweep].

    Returns
    -------
    tuple of Axis

    Raises
    ------
    TestbenchError
        If a key or value is wrong, a value stands twice, or a corner sets the number too.
    """
    axes = []
    for number, entry in enumerate(table.grid, start=1):
        where = _place(corners, "grid", number)
        key = _key(corners, entry.key, where)
        _refuse_corner_key(corners, key, where)
        values = _axis_values(entry, key, where)
        if len(set(values)) < len(values):
            raise TestbenchError(f"{where}: a value of '{key.path}' stands there twice")
        for value in values:
            for corner in corners:
                with_number(corner.bench, key, value)  # For its errors.
        axes.append(Axis(key, values))
    _refuse_twins((axis.key for axis in axes), _place(corners, "grid", 1))
    return tuple(axes)


def _axis_values(entry: GridTable, key: NumberKey, where: str) -> tuple[float, ...]:
    if entry.values is not None:
        return tuple(
            key.read(value, f"{where}, key 'values.{at}'") for at, value in enumerate(entry.values)
        )
    start = key.read(entry.start, f"{where}, key 'start'")
    stop = key.read(entry.stop, f"{where}, key 'stop'")
    assert entry.count is not None  # The table has seen to it.
    if entry.spacing == "log":
        if not start * stop > 0.0:
            raise TestbenchError(
                f"{where}: a logarithmic axis needs two ends of one sign, got {start:g} and "
                f"{stop:g}"
            )
        values = np.geomspace(start, stop, entry.count)
    else:
        values = np.linspace(start, stop, entry.count)
    if key.whole:
        values = np.round(values)
    return tuple(key.checked(value) for value in values.tolist())


def read_variations(
    corners: tuple[Corner, ...], axes: tuple[Axis, ...], table: SweepTable
) -> tuple[Variation, ...]:
    """Read what a Monte Carlo draws.

    Parameters
    ----------
    corners : tuple of Corner
        From `read_corners`.
    axes : tuple of Axis
        From `read_axes`.
    table : SweepTable
        The table [sweep].

    Returns
    -------
    tuple of Variation

    Raises
    ------
    TestbenchError
        If a key or value is wrong, or a distribution has no center, or one that would undo what
        a corner or the grid says.
    """
    found: list[Variation] = []
    entries = table.monte_carlo.vary if table.monte_carlo is not None else ()
    for number, entry in enumerate(entries, start=1):
        where = _place(corners, "monte_carlo.vary", number)
        key = _key(corners, entry.key, where)
        variation = read_variation(entry, key, where)
        name = "median" if entry.distribution == "lognormal" else "mean"
        if variation.center is not None:
            _refuse_corner_key(corners, key, where)
            if any(axis.key.path == key.path for axis in axes):
                raise TestbenchError(
                    f"{where}: '{key.path}' stands in [[sweep.grid]] too",
                    hint=f"take a normal or lognormal distribution and leave '{name}' out: it is "
                    "then drawn around each value of the grid",
                )
        else:
            _check_centers(corners, axes, key, where, name)
        found.append(variation)
    _refuse_twins((item.key for item in found), _place(corners, "monte_carlo.vary", 1))
    return tuple(found)


def read_perturbations(
    corners: tuple[Corner, ...], axes: tuple[Axis, ...], table: SweepTable
) -> tuple[Perturbation, ...]:
    """Read what is moved one at a time.

    Parameters
    ----------
    corners : tuple of Corner
        From `read_corners`.
    axes : tuple of Axis
        From `read_axes`.
    table : SweepTable
        The table [sweep].

    Returns
    -------
    tuple of Perturbation

    Raises
    ------
    TestbenchError
        If a key or value is wrong, or the number has no nominal value, or is an axis of the grid.
    """
    found: list[Perturbation] = []
    for number, entry in enumerate(table.one_at_a_time, start=1):
        where = _place(corners, "one_at_a_time", number)
        key = _key(corners, entry.key, where)
        if any(axis.key.path == key.path for axis in axes):
            raise TestbenchError(f"{where}: '{key.path}' stands in [[sweep.grid]] too")
        centers = _check_centers(corners, axes, key, where, "")
        if entry.relative is not None:
            if 0.0 in centers:
                raise TestbenchError(
                    f"{where}: '{key.path}' is 0, so that a relative step moves nothing",
                    hint="give 'step'",
                )
            moved = Perturbation(key, entry.relative, True)
        else:
            moved = Perturbation(key, read_step(key, entry.step, f"{where}, key 'step'"), False)
        for corner, center in zip(corners, centers, strict=True):
            for sign in (-1, 1):
                with_number(corner.bench, key, moved.moved(center, sign))  # For its errors.
        found.append(moved)
    _refuse_twins((item.key for item in found), _place(corners, "one_at_a_time", 1))
    return tuple(found)


def _check_centers(
    corners: tuple[Corner, ...], axes: tuple[Axis, ...], key: NumberKey, where: str, name: str
) -> list[float]:
    """Give the nominal values of a number, one per corner; an axis of the grid gives its first."""
    centers = []
    for corner in corners:
        center = nominal(corner.bench, corner.deck, key)
        for axis in axes:
            if axis.key.path == key.path:
                center = axis.values[0]
        if center is None:
            raise TestbenchError(
                f"{where}: neither the testbench nor the deck says a nominal value of '{key.path}'",
                hint=f"give '{name}'" if name else "give it in the testbench",
            )
        if name == "median" and center <= 0.0:
            raise TestbenchError(
                f"{where}: a lognormal distribution needs a value above zero, and '{key.path}' is "
                f"{center:g}"
            )
        centers.append(center)
    return centers


def _key(corners: tuple[Corner, ...], text: str, where: str) -> NumberKey:
    """Find a number in all corners, whose decks may differ."""
    for corner in corners[1:]:
        number_key(corner.bench, corner.deck, text, where)
    return number_key(corners[0].bench, corners[0].deck, text, where)


def _place(corners: tuple[Corner, ...], name: str, number: int) -> str:
    return numbered(corners[0].bench.source or "the testbench", f"sweep.{name}", number)


def _refuse_corner_key(corners: tuple[Corner, ...], key: NumberKey, where: str) -> None:
    for corner in corners:
        if key.path in corner.moved:
            raise TestbenchError(
                f"{where}: the corner '{corner.name}' sets '{key.path}' too, which would undo it"
            )


def _refuse_twins(keys: Iterable[NumberKey], where: str) -> None:
    """Two spellings may mean one number."""
    seen: set[str] = set()
    for key in keys:
        if key.path in seen:
            raise TestbenchError(f"{where}: '{key.path}' stands there twice")
        seen.add(key.path)
