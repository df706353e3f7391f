"""What a calibration has come to: how well each knob has to be set, and what limits the rest."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cosim.calibration.model import Model
from cosim.calibration.points import Point
from cosim.calibration.result import KnobResult, Limits
from cosim.calibration.surrogate_search import GAIN, Surrogate
from cosim.calibration.table import Knob
from cosim.calibration.vector_search import tolerance
from cosim.quantum.coherent_error import ROOT
from cosim.waveform import FloatArray

# How far beyond the bounds a model is asked, in parts of their distance: what is linear goes on.
BEYOND = 1.0
BEYOND_CURVE = 0.1
# A place this close to a bound, in parts of the distance of the bounds, stands at it.
AT_BOUND = 1e-9

AXES = ("x", "y", "z")


@dataclass(frozen=True, slots=True)
class Judgement:
    """What is known of the metric around the best values.

    Parameters
    ----------
    best : Point
        The best run.
    gradient : ndarray, shape (n,)
        Slope of the metric there, in parts of the distance of each knob's bounds.
    stiffness : ndarray, shape (n,)
        What a knob off by d alone costs over d^2.
    limits : Limits
        What is left.
    optimum : ndarray, shape (n,)
        Where the best would be without bounds, as far as the model is asked.
    alike : tuple of int
        Knobs that do the same.
    promised : float
        Gain that counts as one.
    unreached : ndarray, shape (m,)
        Error vector that is left there; of no length for a readout.
    """

    best: Point
    gradient: FloatArray
    stiffness: FloatArray
    limits: Limits
    optimum: FloatArray
    alike: tuple[int, ...]
    promised: float
    unreached: FloatArray


def judge_gate(model: Model) -> Judgement:
    """Judge where the search for a gate has ended.

    Parameters
    ----------
    model : Model
        Around the best.

    Returns
    -------
    Judgement
    """
    best = model.centre
    count = len(best.place)
    zeros, ones, free = np.zeros(count), np.ones(count), np.full(count, np.nan)
    inside = model.lowest(zeros, ones, free)
    beyond = model.lowest(zeros - BEYOND, ones + BEYOND, free)
    unreached = best.vector + model.jacobian @ (beyond - model.place)
    coherent = float(unreached @ unreached)
    limits = Limits(
        resolution=best.value - model.predict(inside),
        bounds=model.predict(inside) - model.predict(beyond),
        unreached=coherent,
        rest=model.predict(beyond) - coherent,
    )
    return Judgement(
        best,
        model.gradient(),
        model.stiffness(),
        limits,
        beyond,
        model.alike(),
        tolerance(best.value),
        unreached,
    )


def judge_readout(surrogate: Surrogate) -> Judgement:
    """Judge where the search for a readout has ended.

    Parameters
    ----------
    surrogate : Surrogate
        Around the best.

    Returns
    -------
    Judgement
    """
    best = surrogate.centre
    centre = np.array(best.place)
    zeros, ones = np.zeros(centre.size), np.ones(centre.size)
    inside = surrogate.lowest(zeros, ones, [centre])
    beyond = surrogate.lowest(zeros - BEYOND_CURVE, ones + BEYOND_CURVE, [inside])
    # A search ends with a gain that is not worth a run: what is closer than that is at the best.
    near = [max(0.0, surrogate.value - surrogate.predict(place)) for place in (inside, beyond)]
    gains = [best.value * -math.expm1(-gain) for gain in near]
    limits = Limits(
        resolution=gains[0],
        bounds=max(0.0, gains[1] - gains[0]),
        unreached=0.0,
        rest=best.value - max(gains),
    )
    return Judgement(
        best,
        best.value * surrogate.gradient,
        best.value * np.maximum(0.0, 0.5 * np.diag(surrogate.hessian)),
        limits,
        beyond,
        (),
        GAIN * best.value,
        np.zeros(0),
    )


def limiting(limits: Limits, value: float, error_bar: float) -> str:
    """Name what limits the metric.

    Parameters
    ----------
    limits : Limits
        What is left.
    value, error_bar : float
        The metric and its numerical floor, which may be NaN.

    Returns
    -------
    str
    """
    if value <= error_bar:
        return "numerical floor"
    parts = {
        "resolution": limits.resolution,
        "bounds": limits.bounds,
        "unreached": limits.unreached,
        "rest": limits.rest,
    }
    return max(parts, key=lambda name: parts[name])


def knob_results(
    knobs: Sequence[Knob], judgement: Judgement, cost: float, shift: FloatArray
) -> tuple[KnobResult, ...]:
    """Say of each knob where it stands and how well it has to be set.

    Parameters
    ----------
    knobs : sequence of Knob
        The n knobs.
    judgement : Judgement
        Where the search has ended.
    cost : float
        What the resolution that is needed is told for.
    shift : ndarray, shape (n,)
        What the trim owes to the simulator, in parts of the range.

    Returns
    -------
    tuple of KnobResult
    """
    found = []
    for at, knob in enumerate(knobs):
        stiffness = float(judgement.stiffness[at]) / knob.range**2
        place = judgement.best.place[at]
        found.append(
            KnobResult(
                key=knob.key.path,
                unit=knob.unit,
                start=knob.start,
                found=knob.at(place),
                low=knob.low,
                high=knob.high,
                integer=knob.integer,
                resolution=knob.step,
                bound=_bound(knob, place, float(judgement.optimum[at]), judgement),
                slope=float(judgement.gradient[at]) / knob.range,
                stiffness=stiffness,
                resolution_cost=stiffness * (0.5 * knob.step) ** 2,
                resolution_needed=2.0 * math.sqrt(cost / stiffness) if stiffness else math.inf,
                shift=float(shift[at]) * knob.range,
            )
        )
    return tuple(found)


def _bound(knob: Knob, place: float, optimum: float, judgement: Judgement) -> str:
    """Tell whether a knob stands at a bound, or its last step, beyond which the best lies."""
    if judgement.limits.bounds <= judgement.promised:
        return ""
    last = knob.neighbours(1.0)[-1]
    if place <= AT_BOUND and optimum < -AT_BOUND:
        return "low"
    return "high" if place >= last - AT_BOUND and optimum > 1.0 + AT_BOUND else ""


def numerical_shift(model: Model, again: FloatArray) -> FloatArray:
    """Give how far the best moves when the circuit is run at half the step.

    Parameters
    ----------
    model : Model
        Around the best.
    again : ndarray, shape (m,)
        Error vector of the run at half the step.

    Returns
    -------
    ndarray, shape (n,)
        In parts of the range; NaN where knobs do the same.
    """
    if model.alike():
        return np.full(len(model.centre.place), np.nan)
    moved, *_ = np.linalg.lstsq(model.jacobian, model.centre.vector - again, rcond=None)
    return np.asarray(moved)


def turn_of(vector: FloatArray) -> FloatArray:
    """Give the coherent error of a vector as a small turn before the ideal gate.

    Parameters
    ----------
    vector : ndarray, shape (m,)
        From `cosim.quantum.coherent_error`; of no length for a readout.

    Returns
    -------
    ndarray, shape (3,)
        About x, y and z in rad; NaN for a readout.
    """
    if vector.size < len(AXES):
        return np.full(len(AXES), np.nan)
    sines = vector[: len(AXES)] / ROOT
    length = float(np.linalg.norm(sines))
    # The vector holds the sine of half the angle.
    return np.asarray(2.0 * sines * (math.asin(min(1.0, length)) / length if length else 1.0))
