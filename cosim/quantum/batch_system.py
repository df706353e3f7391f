"""A system and its controls for the batches where one ladder of levels is not enough: pairs."""

import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.errors import InputError
from cosim.quantum.batch_drive import MOST_TURN, fourth_order
from cosim.quantum.kernel import IndexArray
from cosim.waveform import ComplexArray

# A pair of transmons of three levels each; superoperators have the fourth power of elements.
MOST_STATES = 9
# Largest part of a Hamiltonian that may fail to be Hermitian, over its norm: rounding.
HERMITIAN_TOLERANCE = 1e-12


@dataclass(frozen=True, slots=True)
class BatchSystem:
    """A small system with any number of controls, in a frame of the user's choice.

    H/hbar = static + sum_k (c_k operators[k] + c_k^* operators[k]^dag)/2, so that a real control
    of a Hermitian operator stands in H as c_k operators[k]. A qubit with a drive and a detuning is
    operators = (a, a^dag a) with c = (rate, detuning) of `BatchDrive`.

    Parameters
    ----------
    static : array_like, shape (states, states)
        What does not change, Hermitian, in rad/s; 2 to 9 states.
    operators : sequence of array_like, each of shape (states, states)
        At least one; without unit where the controls are in rad/s.
    collapse : sequence of array_like, each of shape (states, states)
        Collapse operators in sqrt(1/s).

    Raises
    ------
    InputError
        If a shape does not fit, a number is not finite, or `static` is not Hermitian.
    """

    static: ComplexArray
    operators: tuple[ComplexArray, ...]
    collapse: tuple[ComplexArray, ...] = ()

    def __post_init__(self) -> None:
        static = _matrix("static", self.static)
        states = static.shape[0]
        if static.shape != (states, states) or not 2 <= states <= MOST_STATES:
            raise InputError(
                f"batch system: wanted a square static part of 2 to {MOST_STATES} states, got "
                f"shape {static.shape}"
            )
        if np.abs(static - static.conj().T).max() > HERMITIAN_TOLERANCE * np.abs(static).max():
            raise InputError("batch system: the static part is not Hermitian")
        if len(self.operators) == 0:
            raise InputError("batch system: wanted at least one operator to control")
        for name in ("operators", "collapse"):
            found = tuple(
                _matrix(f"{name}[{k}]", item) for k, item in enumerate(getattr(self, name))
            )
            for k, matrix in enumerate(found):
                if matrix.shape != static.shape:
                    raise InputError(
                        f"batch system: {name}[{k}] must have the shape {static.shape} of the "
                        f"static part, got {matrix.shape}"
                    )
            object.__setattr__(self, name, found)
        object.__setattr__(self, "static", static)

    @property
    def levels(self) -> int:
        """Number of states."""
        return int(self.static.shape[0])

    def without_collapse(self) -> "BatchSystem":
        """The same system without its collapse operators."""
        return BatchSystem(self.static, self.operators)

    def dissipator(self) -> ComplexArray:
        """Give the column-stacking superoperator of the loss in 1/s.

        Returns
        -------
        ndarray, shape (states**2, states**2)
            sum_c conj(c) kron c - (1 kron c^dag c + (c^dag c)^T kron 1)/2, the Lindblad form.
        """
        one = np.eye(self.levels)
        total = np.zeros((self.levels**2, self.levels**2), dtype=np.complex128)
        for c in self.collapse:
            square = c.conj().T @ c
            total += np.kron(c.conj(), c)
            total -= (np.kron(one, square) + np.kron(square.T, one)) / 2
        return total

    def hamiltonian(self, controls: ComplexArray) -> ComplexArray:
        """Give H/hbar for constant controls.

        Parameters
        ----------
        controls : ndarray, shape (controls,)
            In rad/s.

        Returns
        -------
        ndarray, shape (states, states)
            In rad/s.
        """
        half = np.tensordot(controls, np.array(self.operators), axes=1) / 2
        return np.asarray(self.static + half + half.conj().T)


@dataclass(frozen=True, slots=True)
class BatchControls:
    """Controls of a batch for a `BatchSystem`, on one uniform grid.

    Parameters
    ----------
    step : float
        Time between samples in s.
    controls : sequence of array_like, each of shape (), (n,), (batch, 1) or (batch, n)
        The c_k of `BatchSystem` in rad/s, real or complex, broadcast against (batch, n) by numpy's
        rules: what a row has of its own in all its time, a detuning or a coupling, is a column.
    order : int
        1 or 4, as in `BatchDrive`.

    Raises
    ------
    InputError
        If the shapes do not go together, a number is not finite, or step or order are out of
        range.
    """

    step: float
    controls: tuple[ComplexArray, ...]
    order: int = 1
    batch: int = field(init=False)
    samples: int = field(init=False)

    def __post_init__(self) -> None:
        if not (math.isfinite(self.step) and self.step > 0):
            raise InputError(f"batch controls: wanted a step > 0 in s, got {self.step!r}")
        if self.order not in (1, 4):
            raise InputError(f"batch controls: wanted order 1 or 4, got {self.order!r}")
        shapes = [np.shape(values) for values in self.controls]
        try:
            whole = np.broadcast_shapes((1, 1), *shapes)
        except ValueError:
            whole = ()
        if len(whole) != 2 or 0 in whole or not shapes:
            raise InputError(
                f"batch controls: wanted arrays of shape (), (n,), (batch, 1) or (batch, n) that "
                f"go together, got shapes {shapes}",
                hint="constant values of the rows stand in a column: values[:, None]",
            )
        found = tuple(
            np.ascontiguousarray(np.atleast_2d(values), dtype=np.complex128)
            for values in self.controls
        )
        for k, values in enumerate(found):
            if not np.isfinite(values).all():
                row, column = np.argwhere(~np.isfinite(values))[0]
                raise InputError(
                    f"batch controls: control {k} is not finite in row {row}, sample {column}"
                )
        if self.order == 4 and (whole[1] < 5 or whole[1] % 2 == 0):
            raise InputError(
                f"batch controls: order 4 wants an odd number of samples, at least 5 (edges and "
                f"middles of the steps), got {whole[1]}",
                hint="add or leave out a sample",
            )
        object.__setattr__(self, "controls", found)
        object.__setattr__(self, "batch", int(whole[0]))
        object.__setattr__(self, "samples", int(whole[1]))

    @property
    def duration(self) -> float:
        """Length of the evolution in s."""
        return self.step * (self.samples if self.order == 1 else self.samples - 1)

    def take(self, begin: int, end: int) -> "BatchControls":
        """Give some rows.

        Parameters
        ----------
        begin, end : int
            First row, and the one after the last.

        Returns
        -------
        BatchControls
        """
        if end - begin == self.batch:
            return self
        cut = tuple(c[begin:end] if c.shape[0] > 1 else c for c in self.controls)
        # A column of all rows that is cut to one row still has its samples in the others.
        return BatchControls(self.step, cut, self.order)

    def slices(self, rows: IndexArray, level: int) -> tuple[ComplexArray, float]:
        """Give the constant slices of some rows.

        Parameters
        ----------
        rows : ndarray of int64, shape (m,)
            Rising indices of rows.
        level : int
            How often the steps of order 4 are halved; of no effect for order 1.

        Returns
        -------
        controls : ndarray, shape (m, slices, controls)
            In rad/s.
        step : float
            Length of a slice in s.
        """
        sliced = []
        for values in self.controls:
            whole = np.broadcast_to(values, (self.batch, self.samples))[rows]
            sliced.append(fourth_order(whole, level) if self.order == 4 else whole)
        step = self.step if self.order == 1 else self.step / 2**level
        return np.stack(sliced, axis=-1), float(step)


def check_system(system: BatchSystem, drive: BatchControls) -> None:
    """See that the controls fit the system and do not turn too far in a step.

    Parameters
    ----------
    system : BatchSystem
    drive : BatchControls

    Raises
    ------
    InputError
        If they do not.
    """
    if len(drive.controls) != len(system.operators):
        raise InputError(
            f"batch: wanted a control for each of {len(system.operators)} operators, got "
            f"{len(drive.controls)}"
        )
    turns = {"static part": float(np.ptp(np.linalg.eigvalsh(system.static)))}
    for k, (operator, values) in enumerate(zip(system.operators, drive.controls, strict=True)):
        turns[f"control {k}"] = operator_spread(operator) * float(np.abs(values).max())
    for name, rate in turns.items():
        if rate * drive.step > MOST_TURN:
            raise InputError(
                f"batch: the {name} comes up to {rate:.3g} rad/s, which turns by "
                f"{rate * drive.step:.3g} rad in a step of {drive.step:.3g} s; at most "
                f"{MOST_TURN:g} are made",
                hint="energies and controls are in rad/s and steps in s: check their units",
            )


def operator_spread(operator: ComplexArray) -> float:
    """Bound the distance of the eigenvalues of (c O + c^* O^dag)/2 for abs(c) = 1.

    Parameters
    ----------
    operator : ndarray, shape (states, states)

    Returns
    -------
    float
        Twice the largest singular value.
    """
    return 2 * float(np.linalg.norm(operator, 2))


def _matrix(name: str, operator: npt.ArrayLike) -> ComplexArray:
    matrix = np.ascontiguousarray(operator, dtype=np.complex128)
    if not np.isfinite(matrix).all():
        raise InputError(f"batch system: {name} is not finite")
    return matrix
