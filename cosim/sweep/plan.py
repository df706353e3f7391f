"""The plan of a sweep: the product of trims, corners, grid and samples, run by run."""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from cosim.circuit.mismatch import Mosfet, mosfets
from cosim.decks import altered_deck
from cosim.errors import TestbenchError, UnitError
from cosim.keys import NumberKey, nominal, with_number
from cosim.sweep.axes import (
    Axis,
    Corner,
    Perturbation,
)
from cosim.sweep.columns import EACH, TRIM
from cosim.sweep.identity import identity_keys, trim_key, with_trim
from cosim.sweep.planned_run import SweepRun
from cosim.sweep.samples import (
    Variation,
    draw_mismatch,
    mismatch_entries,
    sample_seed,
)
from cosim.sweep.table import SweepTable
from cosim.sweep.trimming import Trimming
from cosim.testbench import Bench, ReadoutBench
from cosim.waveform import FloatArray

_SEED = NumberKey("netlist.seed", "netlist", "seed", whole=True)
_MOST_KEPT = 64  # points of the grid and transistor lists that are kept for the next run

Change = tuple[NumberKey, float]


@dataclass(frozen=True, slots=True)
class SweepPlan:
    """All runs of a sweep; none of them is kept.

    Samples are the same at every corner and every point of the grid, so that these differ by
    nothing else.

    Parameters
    ----------
    table : SweepTable
        The table [sweep].
    corners : tuple of Corner
        The slowest axis.
    axes : tuple of Axis
        The grid, the last axis the fastest.
    variations : tuple of Variation
        What is drawn for each sample.
    points : ndarray of float, shape (samples, len(variations))
        The samples in the unit cube.
    perturbations : tuple of Perturbation
        What is moved one at a time in place of samples.
    seeded : bool
        Whether the deck has random functions of its own, which then get a seed per sample.
    trimming : Trimming or None
        What is trimmed before the runs, if anything is.
    """

    table: SweepTable
    corners: tuple[Corner, ...]
    axes: tuple[Axis, ...]
    variations: tuple[Variation, ...]
    points: FloatArray
    perturbations: tuple[Perturbation, ...]
    seeded: bool
    trimming: Trimming | None = None
    _kept: dict[Any, Any] = field(default_factory=dict, compare=False, repr=False)

    @property
    def samples(self) -> int:
        """Runs per point of corners and grid."""
        if self.table.monte_carlo is not None:
            return self.table.monte_carlo.runs
        return 1 + 2 * len(self.perturbations)

    @property
    def is_readout(self) -> bool:
        """Whether its runs are readouts, and not gates."""
        return isinstance(self.corners[0].bench, ReadoutBench)

    @property
    def columns(self) -> tuple[str, ...]:
        """The keys of every run's `values`, in their order."""
        return tuple(self.run(0).values)

    @property
    def units(self) -> dict[str, str]:
        """The units of `columns`; "" for texts, plain numbers and parameters of the deck."""
        keys = [item.key for item in self.axes]
        keys += [item.key for item in self.variations]
        keys += [item.key for item in self.perturbations]
        units = {key.path: key.quantity.unit for key in keys if key.quantity is not None}
        return {name: units.get(name, "") for name in self.columns}

    def __len__(self) -> int:
        return self._untrimmed * (len(self.trimming.modes) if self.trimming is not None else 1)

    @property
    def _untrimmed(self) -> int:
        count = len(self.corners) * self.samples
        for axis in self.axes:
            count *= len(axis.values)
        return count

    def __iter__(self) -> Iterator[SweepRun]:
        return (self.run(number) for number in range(len(self)))

    def run(self, number: int) -> SweepRun:
        """Give one run.

        Parameters
        ----------
        number : int
            From 0 to the number of runs, not included.

        Returns
        -------
        SweepRun

        Raises
        ------
        IndexError
            If there is no such run.
        TestbenchError
            If a drawn value lies outside of the limits of its number.
        """
        corner, grid, sample = self._place(number)
        changes = [*grid, *self._changes(corner, grid, sample)]
        mode = self._mode(number)
        values: dict[str, float | str] = {TRIM: mode} if mode else {}
        values |= {"corner": corner.name} if self.table.corners else {}
        if self.perturbations:
            centers = self._centers(corner, grid)
            values |= {item.key.path: centers[item.key.path] for item in self.perturbations}
            at = (sample - 1) // 2
            values["perturbed"] = self.perturbations[at].key.path if sample else ""
        values |= {key.path: value for key, value in changes}
        if self.table.monte_carlo is not None:
            values["sample"] = sample
        identity, waveform_key, deck_key = self._keys(corner, changes, sample)
        trim = self._trim_key(corner, sample, mode) if mode else ""
        if mode:
            identity, waveform_key = with_trim(identity, waveform_key, mode, trim)
        seed = 1 + int(identity[:16], 16) % (2**31 - 1)
        return SweepRun(number, identity, seed, values, waveform_key, deck_key, mode, trim)

    def _keys(self, corner: Corner, changes: Sequence[Change], sample: int) -> tuple[str, str, str]:
        flat = {**corner.flat, **{key.path: value for key, value in changes}}
        mismatch: dict[str, Any] = {}
        if self.table.monte_carlo is not None:
            flat |= {key.path: value for key, value in self._seed(sample)}
            mismatch = self._mismatch(sample)
        return identity_keys(flat, corner.files, mismatch)

    def _trim_key(self, corner: Corner, sample: int, mode: str) -> str:
        assert self.trimming is not None  # Without it there is no mode.
        at = self.trimming.at
        if mode == EACH:
            identity, *_ = self._keys(corner, [*at, *self._changes(corner, at, sample)], sample)
        else:
            own = self.trimming.nominal
            flat = {**own.flat, **{key.path: value for key, value in at}}
            identity, *_ = identity_keys(flat, own.files, {})
        return trim_key(identity, self.trimming.study)

    def testbench(self, run: SweepRun) -> Bench:
        """Give the testbench of one run, ready to be run.

        Parameters
        ----------
        run : SweepRun
            One of this plan.

        Returns
        -------
        Bench
            With everything set and drawn; without [sweep], and as it is before its trim.

        Raises
        ------
        TestbenchError
            If the values do not go together.
        DeckError
            If the size of a transistor cannot be told.
        """
        return self._bench(*self._place(run.number))

    def trim_bench(self, run: SweepRun) -> Bench:
        """Give the testbench whose calibration gives the trim of a run.

        Parameters
        ----------
        run : SweepRun
            One of a plan that trims.

        Returns
        -------
        Bench
            Of "each" the run's corner and sample, of "frozen" the testbench itself, at the
            conditions of the trim; with [calibrate] and without a check at half the step.

        Raises
        ------
        TestbenchError, DeckError
            As `testbench`.
        """
        assert self.trimming is not None  # The caller has seen to it.
        corner, _, sample = self._place(run.number)
        if run.trim == EACH:
            return self.trimming.ready(self._bench(corner, self.trimming.at, sample))
        bench = self.trimming.nominal.bench
        for key, value in self.trimming.at:
            bench = with_number(bench, key, value)
        return self.trimming.ready(bench)

    def _bench(self, corner: Corner, grid: tuple[Change, ...], sample: int) -> Bench:
        """Give the testbench of a corner and sample at some conditions."""
        changes = [*grid, *self._changes(corner, grid, sample)]
        if self.table.monte_carlo is not None:
            changes += self._seed(sample)
        bench = corner.bench
        for key, value in changes:
            bench = with_number(bench, key, value)
        if self.table.mismatch is None or bench.netlist is None:
            return bench
        assert self.table.monte_carlo is not None  # `read_sweep` has seen to it.
        shifts = draw_mismatch(
            self.table.mismatch,
            self._devices(corner, bench, changes),
            self.table.monte_carlo.seed,
            sample,
        )
        return replace(bench, netlist=replace(bench.netlist, mismatch=mismatch_entries(shifts)))

    def corner(self, run: SweepRun) -> Corner:
        """Give the corner of a run, with its deck as read.

        Parameters
        ----------
        run : SweepRun
            One of this plan.

        Returns
        -------
        Corner
        """
        return self._place(run.number)[0]

    def trim_corner(self, run: SweepRun) -> Corner:
        """Give the corner that the trim of a run is found at; as `corner` where it has none.

        Parameters
        ----------
        run : SweepRun
            One of this plan.

        Returns
        -------
        Corner
        """
        if self.trimming is None or run.trim == EACH:
            return self.corner(run)
        return self.trimming.nominal

    def only(self, numbers: Iterable[int]) -> "SweepPlan":
        """Leave out the decks of other runs: what a worker needs for these.

        Parameters
        ----------
        numbers : iterable of int
            Numbers of runs.

        Returns
        -------
        SweepPlan
            The same plan for these runs; for others it has no deck.
        """
        used = {id(self._place(number)[0]) for number in numbers}
        corners = (
            corner if id(corner) in used else replace(corner, deck=None) for corner in self.corners
        )
        trimming = self.trimming
        if trimming is not None:
            trimming = replace(trimming, nominal=replace(trimming.nominal, deck=None))
        return replace(self, corners=tuple(corners), trimming=trimming, _kept={})

    def groups(self, size: int, numbers: Iterable[int] | None = None) -> Iterator[tuple[int, ...]]:
        """Put runs together that belong into one task.

        Parameters
        ----------
        size : int
            Runs per group at most.
        numbers : iterable of int, optional
            Which runs; default: all.

        Yields
        ------
        tuple of int
            Numbers of runs that share a deck, and are all trimmed alone or none of them; those that
            share a waveform, or a trim of their own, stand side by side, and in one group unless
            they are more than `size`.
        """
        decks: dict[tuple[str, str], dict[str, dict[str, list[int]]]] = {}
        for number in range(len(self)) if numbers is None else numbers:
            run = self.run(number)
            families = decks.setdefault((run.deck_key, run.trim), {})
            waveforms = families.setdefault(run.family, {})
            waveforms.setdefault(run.waveform_key, []).append(number)
        for families in decks.values():
            group: list[int] = []
            for waveforms in families.values():
                members = [number for found in waveforms.values() for number in found]
                if group and len(group) + len(members) > size:
                    yield tuple(group)
                    group = []
                for start in range(0, len(members), size):
                    group += members[start : start + size]
                    if len(group) >= size:
                        yield tuple(group)
                        group = []
            if group:
                yield tuple(group)

    def _place(self, number: int) -> tuple[Corner, tuple[Change, ...], int]:
        """Give corner, values of the grid, and sample of a run."""
        if not 0 <= number < len(self):
            raise IndexError(f"the sweep has {len(self)} runs, there is no number {number}")
        rest, sample = divmod(number % self._untrimmed, self.samples)
        grid: list[Change] = []
        for axis in reversed(self.axes):
            rest, at = divmod(rest, len(axis.values))
            grid.append((axis.key, axis.values[at]))
        return self.corners[rest], tuple(reversed(grid)), sample

    def _mode(self, number: int) -> str:
        """Give the trim of a run, which is the slowest axis; empty without one."""
        return self.trimming.modes[number // self._untrimmed] if self.trimming is not None else ""

    def _changes(self, corner: Corner, grid: tuple[Change, ...], sample: int) -> list[Change]:
        """Give what a sample, or a perturbation, sets."""
        centers = self._centers(corner, grid)
        found: list[Change] = []
        if self.perturbations and sample:
            at, upward = divmod(sample - 1, 2)
            moved = self.perturbations[at]
            value = moved.moved(centers[moved.key.path], 1 if upward else -1)
            found.append((moved.key, value))
        for item, point in zip(self.variations, self.points[sample].tolist(), strict=True):
            found.append((item.key, item.value(point, centers.get(item.key.path))))
        try:
            return [(key, key.checked(value)) for key, value in found]
        except UnitError as error:
            raise TestbenchError(
                f"{corner.bench.source or 'the testbench'}, table [sweep], sample {sample}: "
                f"{error.message}",
                hint="narrow the distribution, or take one that keeps within the limits",
            ) from None

    def _centers(self, corner: Corner, grid: tuple[Change, ...]) -> dict[str, float]:
        """Give the values at a point of the grid of what is drawn or moved around them."""
        keys = [item.key for item in self.perturbations]
        keys += [item.key for item in self.variations if item.center is None]
        if not keys:
            return {}
        point = (corner.name, tuple((key.path, value) for key, value in grid))
        if point not in self._kept:
            bench = corner.bench
            for key, value in grid:
                bench = with_number(bench, key, value)
            found = {key.path: nominal(bench, corner.deck, key) for key in keys}
            self._keep(point, {path: value for path, value in found.items() if value is not None})
        centers: dict[str, float] = self._kept[point]
        return centers

    def _devices(self, corner: Corner, bench: Bench, changes: list[Change]) -> tuple[Mosfet, ...]:
        """Give the transistors, whose sizes may follow from the parameters of the run."""
        of_deck = [(key.path, value) for key, value in changes if key.item]
        point = ("devices", corner.name, tuple(of_deck))
        if point not in self._kept:
            assert corner.deck is not None
            self._keep(point, mosfets(altered_deck(bench, corner.deck)))
        devices: tuple[Mosfet, ...] = self._kept[point]
        return devices

    def _keep(self, point: Any, content: Any) -> None:
        if len(self._kept) >= _MOST_KEPT:
            self._kept.clear()
        self._kept[point] = content

    def _seed(self, sample: int) -> list[Change]:
        assert self.table.monte_carlo is not None
        return [(_SEED, sample_seed(self.table.monte_carlo.seed, sample))] if self.seeded else []

    def _mismatch(self, sample: int) -> dict[str, Any]:
        """Give what the shifts of a sample follow from."""
        if self.table.mismatch is None:
            return {}
        assert self.table.monte_carlo is not None
        table = self.table.mismatch
        return {
            "threshold": table.threshold,
            "current_factor": table.current_factor,
            "per": table.per,
            "seed": self.table.monte_carlo.seed,
            "sample": sample,
        }
