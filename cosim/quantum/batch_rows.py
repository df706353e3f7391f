"""How the rows of a batch are solved: a qubit's, and those of a system with controls."""

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Protocol, TypeVar

import numpy as np

from cosim.errors import InputError
from cosim.quantum import batch_kernel, system_kernel
from cosim.quantum.batch_drive import MOST_TURN, BatchDrive
from cosim.quantum.batch_plan import (
    Grid,
    RowSizes,
    growth,
    lay_panels,
    panel_exponents,
    qubit_sizes,
    qubit_tables,
)
from cosim.quantum.batch_runs import BoolArray, compose_rows, constant_channel, group_rows
from cosim.quantum.batch_system import BatchControls, BatchSystem, check_system, operator_spread
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.kernel import IndexArray
from cosim.quantum.qubit import Qubit
from cosim.waveform import ComplexArray, FloatArray

Values = TypeVar("Values", ComplexArray, FloatArray)

MOST_LEVELS = 6


class Rows(Protocol):
    """Rows of a batch of whatever kind, with the drives that belong to them."""

    @property
    def batch(self) -> int:
        """Number of rows."""
        ...

    @property
    def row_bytes(self) -> int:
        """Working memory of a row in bytes, about."""
        ...

    @property
    def exact(self) -> bool:
        """Whether there are no steps whose halving could show an error."""
        ...

    def take(self, begin: int, end: int) -> "Rows":
        """Give some rows."""
        ...

    def unitaries(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows without loss, with the steps halved `level` times."""
        ...

    def channels(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows with loss, with the steps halved `level` times."""
        ...


def rows_of(system: Qubit | BatchSystem, drive: BatchDrive | BatchControls) -> Rows:
    """Put a system and its drives together.

    Parameters
    ----------
    system : Qubit or BatchSystem
    drive : BatchDrive for a Qubit, or BatchControls for a BatchSystem

    Returns
    -------
    Rows

    Raises
    ------
    InputError
        If they do not belong together, there are too many levels, or a step turns too far.
    """
    if isinstance(system, Qubit) and isinstance(drive, BatchDrive):
        _check_qubit(system, drive)
        return QubitRows(system, drive)
    if isinstance(system, BatchSystem) and isinstance(drive, BatchControls):
        check_system(system, drive)
        return SystemRows(system, drive)
    raise InputError(
        f"batch: wanted a Qubit with a BatchDrive or a BatchSystem with BatchControls, got "
        f"{type(system).__name__} with {type(drive).__name__}"
    )


@dataclass(frozen=True, slots=True)
class QubitRows:
    """Rows of a qubit under drives.

    Parameters
    ----------
    qubit : Qubit
    drive : BatchDrive
    """

    qubit: Qubit
    drive: BatchDrive

    @property
    def batch(self) -> int:
        """Number of rows."""
        return self.drive.batch

    @property
    def row_bytes(self) -> int:
        """Working memory of a row in bytes, about."""
        return 200 * self.drive.samples + 64 * self.qubit.levels**4

    @property
    def exact(self) -> bool:
        """Whether there are no steps whose halving could show an error."""
        return self.qubit.lossless and self.drive.order == 1

    def take(self, begin: int, end: int) -> "QubitRows":
        """Give some rows, from `begin` to before `end`."""
        return QubitRows(self.qubit, self.drive.take(begin, end))

    def unitaries(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows without loss; shape (m, levels, levels)."""
        rate, detuning, step = self.drive.slices(rows, level)
        ladder = np.sqrt(np.arange(1.0, self.qubit.levels))
        energies = anharmonic_energies(self.qubit)

        def run(some: IndexArray) -> ComplexArray:
            return np.asarray(
                batch_kernel.unitary_rows(rate, detuning, some, step, ladder, energies)
            )

        out = np.empty((rows.size, self.qubit.levels, self.qubit.levels), dtype=np.complex128)
        _share(run, np.arange(rows.size), workers, out)
        return out

    def channels(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows with loss; shape (m, levels**2, levels**2)."""
        if self.qubit.lossless:
            return _unitary_channels(self.unitaries(rows, level, workers))
        rate, detuning, step = self.drive.slices(rows, level)
        grid = Grid(self.drive.step, self.drive.samples, self.drive.order)
        sizes = qubit_sizes(self.qubit, *self.drive.pick(rows))
        ladder = np.sqrt(np.arange(1.0, self.qubit.levels))
        energies = anharmonic_energies(self.qubit)

        def between(rows: IndexArray, begin: int, end: int, exponent: int) -> ComplexArray:
            panels = lay_panels(_part(grid, begin, end), exponent, level, sizes.decay)
            tables = qubit_tables(self.qubit, panels.times)
            rates, offsets = _columns(rate, grid, begin, end), _columns(detuning, grid, begin, end)

            def run(some: IndexArray) -> ComplexArray:
                return np.asarray(
                    batch_kernel.channel_rows(
                        rates,
                        offsets,
                        some,
                        step,
                        panels.parts,
                        panels.kick,
                        tables,
                        ladder,
                        energies,
                    )
                )

            size = self.qubit.levels**2
            out = np.empty((rows.size, size, size), dtype=np.complex128)
            _share(lambda some: run(rows[some]), np.arange(rows.size), workers, out)
            return out

        def within(rows: IndexArray, begin: int, end: int) -> ComplexArray:
            return self._held(rate, detuning, rows, begin, end)

        equal = _goes_on(rate, detuning) if grid.order == 1 else np.zeros((1, 1), dtype=np.bool_)
        return _pieced(rows.size, self.qubit.levels, grid, sizes, level, equal, between, within)

    def _held(
        self, rate: ComplexArray, detuning: FloatArray, rows: IndexArray, begin: int, end: int
    ) -> ComplexArray:
        """Solve runs in which the rate is zero, or rate and detuning are constant."""
        drive = rate[rows if rate.shape[0] > 1 else np.zeros_like(rows), begin]
        offsets = detuning[rows if detuning.shape[0] > 1 else np.zeros_like(rows)]
        offset = offsets[:, begin if offsets.shape[1] > 1 else 0]
        time = self.drive.step * (end - begin)
        if offsets.shape[1] > 1:
            turns = self.drive.step * offsets[:, begin:end].sum(axis=1)
        else:
            turns = time * offset
        # Without a drive the detuning commutes with all the rest: one exponential for all.
        idle = drive == 0
        n = np.arange(self.qubit.levels)
        # Column-stacked: rho_ij stands in row i + levels j and turns by (i - j) times the angle.
        difference = (n[None, :] - n[:, None]).reshape(-1)
        keys = np.stack([drive.real, drive.imag, np.where(idle, 0.0, offset)], axis=1)
        kinds, which = np.unique(keys, axis=0, return_inverse=True)
        a, number = self.qubit.annihilation(), self.qubit.number()
        operators = self.qubit.collapse_operators()
        static = np.diag(anharmonic_energies(self.qubit)).astype(np.complex128)
        system = BatchSystem(static, (a, number), tuple(operators))
        loss = system.dissipator()
        found = np.array(
            [
                constant_channel(system.hamiltonian(np.array([x + 1j * y, delta])), loss, time)
                for x, y, delta in kinds
            ]
        )
        out = found[which.reshape(-1)]
        phase = np.exp(-1j * turns[:, None] * difference)
        return np.asarray(np.where(idle[:, None, None], phase[:, :, None] * out, out))


@dataclass(frozen=True, slots=True)
class SystemRows:
    """Rows of a system under controls.

    Parameters
    ----------
    system : BatchSystem
    drive : BatchControls
    """

    system: BatchSystem
    drive: BatchControls

    @property
    def batch(self) -> int:
        """Number of rows."""
        return self.drive.batch

    @property
    def row_bytes(self) -> int:
        """Working memory of a row in bytes, about."""
        samples = self.drive.samples * (1 + len(self.system.operators))
        return 100 * samples + 64 * self.system.levels**4

    @property
    def exact(self) -> bool:
        """Whether there are no steps whose halving could show an error."""
        return not self.system.collapse and self.drive.order == 1

    def take(self, begin: int, end: int) -> "SystemRows":
        """Give some rows, from `begin` to before `end`."""
        return SystemRows(self.system, self.drive.take(begin, end))

    def unitaries(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows without loss; shape (m, states, states)."""
        controls, step = self.drive.slices(rows, level)
        operators = np.array(self.system.operators)

        def run(some: IndexArray) -> ComplexArray:
            return np.asarray(
                system_kernel.system_unitary_rows(
                    self.system.static, operators, controls, some, step
                )
            )

        out = np.empty((rows.size, *self.system.static.shape), dtype=np.complex128)
        _share(run, np.arange(rows.size), workers, out)
        return out

    def channels(self, rows: IndexArray, level: int, workers: int) -> ComplexArray:
        """Solve rows with loss; shape (m, states**2, states**2)."""
        if not self.system.collapse:
            return _unitary_channels(self.unitaries(rows, level, workers))
        controls, step = self.drive.slices(rows, level)
        operators = np.array(self.system.operators)
        loss = self.system.dissipator()
        grid = Grid(self.drive.step, self.drive.samples, self.drive.order)
        # Not halved: the size of the samples alone decides.
        sizes = self._sizes(self.drive.slices(rows, 0)[0], loss)

        def between(rows: IndexArray, begin: int, end: int, exponent: int) -> ComplexArray:
            panels = lay_panels(_part(grid, begin, end), exponent, level, sizes.decay)
            growths = np.array([growth(loss * time) for time in panels.times])
            part = _columns(controls, grid, begin, end)

            def run(some: IndexArray) -> ComplexArray:
                return np.asarray(
                    system_kernel.system_channel_rows(
                        self.system.static,
                        operators,
                        part,
                        rows[some],
                        step,
                        panels.parts,
                        panels.kick,
                        growths,
                    )
                )

            out = np.empty((rows.size, *loss.shape), dtype=np.complex128)
            _share(run, np.arange(rows.size), workers, out)
            return out

        def within(rows: IndexArray, begin: int, end: int) -> ComplexArray:
            kinds, which = np.unique(controls[rows, begin], axis=0, return_inverse=True)
            time = step * (end - begin)
            found = [constant_channel(self.system.hamiltonian(c), loss, time) for c in kinds]
            return np.asarray(np.array(found)[which.reshape(-1)])

        if grid.order == 1:
            equal = (controls[:, 1:] == controls[:, :-1]).all(axis=2)
        else:
            equal = np.zeros((1, 1), dtype=np.bool_)
        return _pieced(rows.size, self.system.levels, grid, sizes, level, equal, between, within)

    def _sizes(self, controls: ComplexArray, loss: ComplexArray) -> RowSizes:
        spreads = np.array([operator_spread(operator) for operator in self.system.operators])
        turning = np.abs(controls) @ spreads
        jumps = np.abs(np.diff(controls, axis=1)) @ spreads
        fast = float(np.ptp(np.linalg.eigvalsh(self.system.static)))
        largest = turning.max(axis=1)
        return RowSizes(
            float(np.linalg.norm(loss, 2)),
            largest,
            np.full(largest.shape, fast),
            largest,
            np.sqrt((jumps**2).sum(axis=1)),
        )


def _pieced(
    count: int,
    states: int,
    grid: Grid,
    sizes: RowSizes,
    level: int,
    equal: BoolArray,
    between: Callable[[IndexArray, int, int, int], ComplexArray],
    within: Callable[[IndexArray, int, int], ComplexArray],
) -> ComplexArray:
    """Solve lossy rows: runs of equal slices by `within`, panels on the rest by `between`.

    Each row's pieces and panels are its own; those that have them in common go together.
    """
    exponents = np.broadcast_to(panel_exponents(sizes, grid), (count,))
    if grid.order == 1 and level > 0:
        # Panels over whole slices all miss what happens within a slice, so that halving them
        # would not show it: the first halving goes within the slices.
        exponents = np.minimum(exponents, 0)
    exponents = exponents - level
    out = np.empty((count, states**2, states**2), dtype=np.complex128)
    for alike, cuts in group_rows(equal, count):
        for exponent in np.unique(exponents[alike]):
            rows = alike[exponents[alike] == exponent]
            total: ComplexArray | None = None
            for begin, end, run in cuts:
                if run:
                    part = within(rows, begin, end)
                else:
                    stop = end if grid.order == 1 else grid.samples
                    part = between(rows, begin, stop, int(exponent))
                total = part if total is None else compose_rows(part, total)
            out[rows] = total
    return out


def _part(grid: Grid, begin: int, end: int) -> Grid:
    return Grid(grid.step, end - begin, grid.order)


def _columns(values: Values, grid: Grid, begin: int, end: int) -> Values:
    """Cut slices out, as one block of memory; those that are constant stay as they are."""
    if grid.order == 4 or values.shape[1] == 1 or end - begin == grid.samples:
        return values
    return np.ascontiguousarray(values[:, begin:end])


def _goes_on(rate: ComplexArray, detuning: FloatArray) -> BoolArray:
    """Tell of each slice but the first whether it goes on as the one before.

    Without a drive the detunings may change.
    """
    same = rate[:, 1:] == rate[:, :-1]
    if detuning.shape[1] > 1 and same.any():
        same = same & ((detuning[:, 1:] == detuning[:, :-1]) | (rate[:, 1:] == 0))
    return np.asarray(same)


def _unitary_channels(u: ComplexArray) -> ComplexArray:
    """Give conj(u) kron u, row by row."""
    size = u.shape[1] ** 2
    product = u.conj()[:, :, None, :, None] * u[:, None, :, None, :]
    return product.reshape(u.shape[0], size, size)


def _share(
    run: Callable[[IndexArray], ComplexArray], rows: IndexArray, workers: int, out: ComplexArray
) -> None:
    """Write the rows' results into `out`, with the rows shared among threads."""
    if workers == 1 or rows.size < 2:
        out[rows] = run(rows)
        return
    parts = np.array_split(rows, min(workers, rows.size))
    with ThreadPoolExecutor(len(parts)) as pool:
        for part, values in zip(parts, pool.map(run, parts), strict=True):
            out[part] = values


def _check_qubit(qubit: Qubit, drive: BatchDrive) -> None:
    if qubit.levels > MOST_LEVELS:
        raise InputError(
            f"batch: wanted a qubit of 2 to {MOST_LEVELS} levels, got {qubit.levels}",
            hint="keep fewer levels with `Qubit.with_levels`",
        )
    turn = float(np.ptp(anharmonic_energies(qubit))) * drive.step
    if turn > MOST_TURN:
        raise InputError(
            f"batch: the anharmonic levels turn by {turn:.3g} rad in a step of {drive.step:.3g} s, "
            f"at most {MOST_TURN:g} are made",
            hint="cut the time into more samples",
        )
