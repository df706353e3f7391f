"""The search for gates: Gauss-Newton on the error vector, within the bounds.

One run at the start and one for each knob give the first linear model, as one family of decks;
every further run goes where the model, kept up by Broyden's rule, puts the best that can be set.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from cosim.calibration.model import Model
from cosim.calibration.points import Point, Runner
from cosim.calibration.table import CalibrateTable, Knob
from cosim.errors import InputError
from cosim.waveform import FloatArray

# The first step of a knob, as a part of the distance of its bounds.
FIRST_STEP = 0.02
# Changes of the vector that suit a difference: ngspice's own tolerances move it by some 1e-5, and
# beyond a quarter it is bent. Outside of these the knob is tried once more, for a change of AIM.
WEAK, STRONG, AIM = 3e-4, 0.25, 0.02
# A knob that moves the vector by less than this, from the start to its farther bound, costs 1e-9 at
# most: below any numerical floor, so that it cannot be told from a knob that does nothing.
NOTHING = 3e-5
# Above this infidelity the square of the vector is no longer the cost.
FAR = 0.25
# What a step must promise to be worth a run: absolute, and as a part of the cost.
GAIN, RELATIVE_GAIN = 1e-9, 1e-5
# A part of the distance of the bounds below which it is not worth looking closer.
LEAST_TRUST = 1e-4
# Steps of a trim that cost less than this part of what is left are not tried one by one.
FINE = 0.01


@dataclass(frozen=True, slots=True)
class Found:
    """Where a search has ended.

    Parameters
    ----------
    start, best : Point
        The first run, and the best.
    model : Model
        Around the best.
    complete : bool
        False where the runs were used up before.
    """

    start: Point
    best: Point
    model: Model
    complete: bool


def search_by_vector(
    runner: Runner, table: CalibrateTable, knobs: Sequence[Knob], reserve: int
) -> Found:
    """Look for the best values of a gate's knobs.

    Parameters
    ----------
    runner : Runner
        Runs the gate.
    table : CalibrateTable
        With the most runs.
    knobs : sequence of Knob
        What may be turned.
    reserve : int
        Runs to be left for afterwards.

    Returns
    -------
    Found

    Raises
    ------
    InputError
        If a knob does nothing, or the testbench cannot be used.
    SimulationError
        If the start or a difference cannot be simulated.
    """
    most = table.max_runs - reserve
    model = _first_model(runner, knobs, most)
    start = runner.history[0]
    model = _recentred(model, min(runner.history, key=lambda point: point.value))
    trust = 1.0
    complete = True
    while True:
        model, trust, settled = _descend(runner, knobs, model, trust, most)
        if not settled:
            complete = False
            break
        near = _unverified(runner, knobs, model)
        if not near:
            break
        if len(runner.history) + len(near) > most:
            complete = False
            break
        points = runner.run(near, "neighbour")
        for point in points:
            model = _learnt(model, point)
        better = min(points, key=lambda point: point.value)
        if better.value >= model.centre.value:
            break
        model, trust = _recentred(model, better), 1.0
    return Found(start, model.centre, model, complete)


def tolerance(value: float) -> float:
    """Give the gain that a further run must promise.

    Parameters
    ----------
    value : float
        Cost at hand.

    Returns
    -------
    float
    """
    return GAIN + RELATIVE_GAIN * abs(value)


def _first_model(runner: Runner, knobs: Sequence[Knob], most: int) -> Model:
    origin = tuple(knob.place(knob.start) for knob in knobs)
    tried = [_aside(knobs, origin, at, FIRST_STEP) for at in range(len(knobs))]
    # All in one family: the first is the start.
    start, *points = runner.run([origin, *tried], "start")
    runner.history[1:] = points = [replace(point, purpose="difference") for point in points]
    again: dict[int, tuple[float, ...]] = {}
    for at, point in enumerate(points):
        change = _change(start, point)
        if not WEAK <= change <= STRONG and len(runner.history) + len(again) < most:
            step = abs(point.place[at] - origin[at])
            factor = AIM / change if change > AIM / 1e4 else np.inf
            place = _aside(knobs, origin, at, min(step * factor, 1.0))
            if place != point.place:
                again[at] = place
    second = dict(zip(again, runner.run(list(again.values()), "difference"), strict=True))
    points = [second.get(at, point) for at, point in enumerate(points)]
    _refuse_idle(start, points, knobs)
    moves = np.array([point.place[at] - origin[at] for at, point in enumerate(points)])
    jacobian = np.column_stack([point.vector - start.vector for point in points]) / moves
    slope = np.array([point.rest - start.rest for point in points]) / moves
    return Model(start, jacobian, slope if start.value < FAR else np.zeros(len(knobs)))


def _aside(
    knobs: Sequence[Knob], origin: tuple[float, ...], at: int, step: float
) -> tuple[float, ...]:
    """Move one knob by a step, or the least it can be set to, towards its farther bound."""
    knob, here = knobs[at], origin[at]
    sign = 1.0 if here <= 0.5 else -1.0
    there = min(max(here + sign * max(step, knob.grid), 0.0), 1.0)
    near = [place for place in knob.neighbours(there) if abs(place - here) > 1e-12]
    if near:
        there = min(near, key=lambda place: abs(place - there))
    return (*origin[:at], there, *origin[at + 1 :])


def _change(start: Point, point: Point) -> float:
    """Give how far the vector, or the root of what is not in it, has moved."""
    moved = float(np.linalg.norm(point.vector - start.vector))
    return max(moved, math.sqrt(abs(point.rest - start.rest)))


def _refuse_idle(start: Point, points: Sequence[Point], knobs: Sequence[Knob]) -> None:
    for at, (knob, point) in enumerate(zip(knobs, points, strict=True)):
        step = abs(point.place[at] - start.place[at])
        reach = max(start.place[at], 1.0 - start.place[at])
        # What is not in the vector grows with the step, and not with its square.
        if _change(start, point) * reach / step < NOTHING:
            raise InputError(
                f"the knob '{knob.key.path}' does nothing: from {knob.at(start.place[at]):g} to "
                f"{knob.at(point.place[at]):g} the metric changes by "
                f"{abs(point.value - start.value):.1e}, which is below any numerical floor",
                hint="take it out of [calibrate], or look whether the deck uses it",
            )


def _learnt(model: Model, point: Point) -> Model:
    """Take in a run; where the square of the vector is not the cost, the rest means nothing."""
    if point.fault:
        return model
    found = model.learnt(point)
    if max(point.value, model.centre.value) > FAR:
        found = replace(found, slope=model.slope)
    return found


def _recentred(model: Model, point: Point) -> Model:
    slope = model.slope if model.centre.value < FAR else np.zeros_like(model.slope)
    return replace(model, centre=point, slope=slope)


def _descend(
    runner: Runner, knobs: Sequence[Knob], model: Model, trust: float, most: int
) -> tuple[Model, float, bool]:
    """Go where the model puts the best, until it promises no more; False if runs are used up."""
    while True:
        low, high = _box(model.place, trust)
        place = model.settable(knobs, low, high)
        promised = model.centre.value - model.predict(place)
        if promised < tolerance(model.centre.value) or trust < LEAST_TRUST:
            return model, trust, True
        if _seen(runner, place):
            trust *= 0.5  # It has failed, or was worse than the model says.
            continue
        if len(runner.history) >= most:
            return model, trust, False
        (point,) = runner.run([tuple(place.tolist())], "step")
        length = float(np.abs(place - model.place).max())
        model = _learnt(model, point)
        if point.value < model.centre.value:
            model = _recentred(model, point)
        else:
            trust = 0.5 * min(length, trust)


def _box(place: FloatArray, trust: float) -> tuple[FloatArray, FloatArray]:
    return np.maximum(place - trust, 0.0), np.minimum(place + trust, 1.0)


def _seen(runner: Runner, place: FloatArray) -> bool:
    return any(np.abs(place - point.place).max() < 1e-9 for point in runner.history)


def _unverified(runner: Runner, knobs: Sequence[Knob], model: Model) -> list[tuple[float, ...]]:
    """Give the neighbours of the best, one step of one knob away, that have not been run.

    The other knobs stand where the model puts their best beside that step. Of fine steps the model
    is sure enough.
    """
    low, high = np.zeros(len(knobs)), np.ones(len(knobs))
    least = tolerance(model.centre.value)
    fine = max(least, FINE * model.centre.value)
    found: list[tuple[float, ...]] = []
    for at, knob in enumerate(knobs):
        if not knob.step or model.stiffness()[at] * knob.grid**2 < fine:
            continue
        for side in (-1.0, 1.0):
            part = float(model.place[at]) + side * knob.grid
            if not -1e-9 <= part <= 1.0 + 1e-9:
                continue
            held = np.full(len(knobs), np.nan)
            held[at] = min(max(part, 0.0), 1.0)
            place = model.settable(knobs, low, high, held)
            known = [*(point.place for point in runner.history), *found]
            off = [model.jacobian @ (place - np.array(other)) for other in known]
            if all(float(miss @ miss) >= least for miss in off):
                found.append(tuple(place.tolist()))
    return found
