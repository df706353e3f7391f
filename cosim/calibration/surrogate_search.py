"""The search for readouts: a quadratic through the logarithms of the errors seen so far.

An assignment error has no vector behind it that would be linear in the knobs. One run at the start
and two for each knob give the first quadratic; every further run goes to its minimum within a
distance of the best, and is taken into it.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from scipy.optimize import minimize

from cosim.calibration.points import Point, Runner
from cosim.calibration.table import CalibrateTable, Knob
from cosim.errors import InputError, TestbenchError
from cosim.waveform import FloatArray

# The first steps, as a part of the distance of the bounds: an error is flat around its optimum, and
# falls over a decade between bounds.
FIRST_STEP = 0.15
# Relative gain that a further run must promise: a hundredth of what such an error is known to.
GAIN = 1e-3
# A part of the distance of the bounds below which it is not worth looking closer.
LEAST_TRUST = 2e-3
# Distance at which the best is compared with its neighbours, in parts of the range.
NEAR = 0.05
# Errors below this are not told apart.
LEAST_ERROR = 1e-15
# Relative change of the error over the whole of a knob that counts as none: rounding.
NOTHING = 1e-9


@dataclass(frozen=True, slots=True)
class Surrogate:
    """ln(error) around the best run: value + gradient d + d^T hessian d/2, in parts of the range.

    Parameters
    ----------
    centre : Point
        The best run.
    value : float
        At the centre.
    gradient : ndarray, shape (n,)
    hessian : ndarray, shape (n, n)
    """

    centre: Point
    value: float
    gradient: FloatArray
    hessian: FloatArray

    def predict(self, place: FloatArray) -> float:
        """Give ln(error) at a place of shape (n,)."""
        move = place - np.array(self.centre.place)
        return float(self.value + self.gradient @ move + 0.5 * move @ self.hessian @ move)

    def lowest(self, low: FloatArray, high: FloatArray, starts: Sequence[FloatArray]) -> FloatArray:
        """Give the place of the least error between bounds, from the best of several starts."""
        bounds = list(zip(low.tolist(), high.tolist(), strict=True))
        found = []
        for start in starts:
            ended = minimize(
                self.predict,
                np.clip(start, low, high),
                jac=self._slope,
                method="L-BFGS-B",
                bounds=bounds,
            )
            found.append(np.clip(ended.x, low, high))
        return min(found, key=self.predict)

    def _slope(self, place: FloatArray) -> FloatArray:
        return np.asarray(self.gradient + self.hessian @ (place - np.array(self.centre.place)))


@dataclass(frozen=True, slots=True)
class Surveyed:
    """Where the search has ended.

    Parameters
    ----------
    start, best : Point
        The first run, and the best.
    surrogate : Surrogate
        Around the best.
    complete : bool
        False where the runs were used up before.
    """

    start: Point
    best: Point
    surrogate: Surrogate
    complete: bool


def search_by_surrogate(
    runner: Runner, table: CalibrateTable, knobs: Sequence[Knob], reserve: int
) -> Surveyed:
    """Look for the best values of a readout's knobs.

    Parameters
    ----------
    runner : Runner
        Runs the readout.
    table : CalibrateTable
        With the most runs.
    knobs : sequence of Knob
        What may be turned.
    reserve : int
        Runs to be left for afterwards.

    Returns
    -------
    Surveyed

    Raises
    ------
    InputError
        If a knob does nothing, the runs are too few, or the testbench cannot be used.
    SimulationError
        If one of the first runs cannot be simulated.
    """
    most = table.max_runs - reserve
    if most < 2 * len(knobs) + 2:
        raise TestbenchError(
            f"table [calibrate], key 'max_runs': {len(knobs)} knobs of a readout take at least "
            f"{2 * len(knobs) + 2 + reserve} runs, got {table.max_runs}"
        )
    origin = np.array([knob.place(knob.start) for knob in knobs])
    (start,) = runner.run([tuple(origin.tolist())], "start")
    around = _around(origin, knobs)
    runner.run(around, "difference")
    _refuse_idle(runner.history, knobs)
    trust = reach = 2.0 * FIRST_STEP
    while True:
        surrogate = fitted(runner.history, reach)
        best = surrogate.centre
        place = _aim(surrogate, knobs, trust)
        promised = surrogate.value - surrogate.predict(place)
        if promised < GAIN or trust < LEAST_TRUST or _seen(runner, place):
            beside = _beside(runner, best, knobs)
            if not beside:
                return Surveyed(start, best, surrogate, True)
            if len(runner.history) + len(beside) > most:
                return Surveyed(start, best, surrogate, False)
            runner.run(beside, "neighbour")
            trust = reach = 2.0 * NEAR
            continue
        if len(runner.history) >= most:
            return Surveyed(start, best, surrogate, False)
        (point,) = runner.run([tuple(place.tolist())], "step")
        if not point.value < best.value:
            length = float(np.abs(place - np.array(best.place)).max())
            trust = 0.5 * min(length, trust)


def fitted(points: Sequence[Point], reach: float) -> Surrogate:
    """Fit the quadratic to runs, those near the best with the most weight.

    Parameters
    ----------
    points : sequence of Point
        All runs; those that failed have no part in it.
    reach : float
        Distance from the best, in parts of the range, at which a run has half of the weight.

    Returns
    -------
    Surrogate
        What the runs leave open is as small as they allow.
    """
    good = [point for point in points if not point.fault]
    best = min(good, key=lambda point: point.value)
    moves = np.array([point.place for point in good]) - np.array(best.place)
    values = np.log([max(point.value, LEAST_ERROR) for point in good])
    n = moves.shape[1]
    pairs = [(i, j) for i in range(n) for j in range(i, n)]
    squares = [moves[:, i] * moves[:, j] * (0.5 if i == j else 1.0) for i, j in pairs]
    columns = np.column_stack([moves, *squares])
    near = 1.0 / (1.0 + (np.abs(moves).max(axis=1) / reach) ** 2)
    found, *_ = np.linalg.lstsq(near[:, None] * columns, near * (values - values.min()), rcond=1e-9)
    hessian = np.zeros((n, n))
    for (i, j), value in zip(pairs, found[n:], strict=True):
        hessian[i, j] = hessian[j, i] = value
    return Surrogate(best, float(values.min()), found[:n], hessian)


def _around(origin: FloatArray, knobs: Sequence[Knob]) -> list[tuple[float, ...]]:
    """Give two places for each knob: on both sides of the start, or both on one at a bound."""
    found = []
    for at, knob in enumerate(knobs):
        step = max(FIRST_STEP, knob.grid)
        offsets = [-step, step]
        if origin[at] - step < 0.0:
            offsets = [step, 2.0 * step]
        elif origin[at] + step > 1.0:
            offsets = [-step, -2.0 * step]
        for offset in offsets:
            place = origin.copy()
            part = min(max(float(origin[at]) + offset, 0.0), 1.0)
            place[at] = _nearest(knob, part)
            found.append(tuple(place.tolist()))
    return list(dict.fromkeys(found))


def _nearest(knob: Knob, part: float) -> float:
    return min(knob.neighbours(part), key=lambda near: abs(near - part))


def _aim(surrogate: Surrogate, knobs: Sequence[Knob], trust: float) -> FloatArray:
    centre = np.array(surrogate.centre.place)
    low, high = np.maximum(centre - trust, 0.0), np.minimum(centre + trust, 1.0)
    corners = [np.array(corner) for corner in product(*zip(low, high, strict=True))]
    relaxed = surrogate.lowest(low, high, [centre, *corners])
    settable = product(
        *(knob.neighbours(float(part)) for knob, part in zip(knobs, relaxed, strict=True))
    )
    return min((np.array(place) for place in settable), key=surrogate.predict)


def _beside(runner: Runner, best: Point, knobs: Sequence[Knob]) -> list[tuple[float, ...]]:
    """Give places near the best on both sides of each knob, where nothing has been run yet.

    What was fitted to runs far away is no proof of an optimum, and no slope at a bound.
    """
    centre = np.array(best.place)
    moves = np.array([point.place for point in runner.history]) - centre
    found = []
    for at, knob in enumerate(knobs):
        step = max(NEAR, knob.grid)
        for side in (-step, step):
            part = _nearest(knob, float(centre[at]) + side)
            if not 0.0 <= part <= 1.0 or abs(part - centre[at]) < 1e-9:
                continue
            along = moves[:, at] * math.copysign(1.0, side)
            others = np.abs(np.delete(moves, at, axis=1)).max(axis=1, initial=0.0)
            if not np.any((along > 1e-9) & (along < 1.5 * step) & (others < along)):
                found.append((*best.place[:at], part, *best.place[at + 1 :]))
    return found


def _seen(runner: Runner, place: FloatArray) -> bool:
    return any(np.abs(place - point.place).max() < 1e-6 for point in runner.history)


def _refuse_idle(history: Sequence[Point], knobs: Sequence[Knob]) -> None:
    start = history[0]
    for at, knob in enumerate(knobs):
        moved = [point for point in history if point.place[at] != start.place[at]]
        changes = [abs(point.value - start.value) for point in moved]
        if max(changes, default=0.0) <= NOTHING * start.value:
            raise InputError(
                f"the knob '{knob.key.path}' does nothing: the assignment error of "
                f"{start.value:.3e} stays the same",
                hint="take it out of [calibrate], or look whether the deck uses it",
            )
