"""The outline of a pulse: its family, and where its edges lie."""

import math
from dataclasses import replace

import numpy as np

from cosim.dsp.anatomy.fitting import Work, fit_numbers, scales_of
from cosim.dsp.anatomy.parts import compose, neutral_numbers
from cosim.dsp.anatomy.shapes import Shape
from cosim.dsp.carrier import find_burst, phase_slope, plateau_amplitude
from cosim.waveform import Envelope

# Edges shorter than this many carrier periods are jumps, for no filter shows them shorter.
_JUMP = 1.0
# A quadrature of a smaller weight is none.
_LEAST_WEIGHT = 0.02


def find_outline(work: Work) -> tuple[dict[str, float], Shape]:
    """Find the family of a pulse, and its level, phase, times and quadrature.

    Parameters
    ----------
    work : Work

    Returns
    -------
    numbers : dict of float
    shape : Shape
        Of the family; its times are those from which the fit began.

    Raises
    ------
    WaveformError
        If the envelope is zero.
    """
    family = work.wanted.family
    numbers, shape = _outline_of(work, "flat-top" if family == "auto" else family)
    if family == "auto" and numbers["rise"] + numbers["fall"] > numbers["duration"]:
        other = _outline_of(work, "gaussian")
        if _missed(work, *other) < _missed(work, numbers, shape):
            numbers, shape = other
    if family == "auto" and shape.family == "flat-top":
        period = work.grid.offsets[-1] / 8.6
        longest, duration = max(numbers["rise"], numbers["fall"]), numbers["duration"]
        if longest < _JUMP * period:
            shape = replace(shape, family="square")
        elif numbers["rise"] + numbers["fall"] > 1.9 * duration:
            shape = replace(shape, family="raised cosine")
    if work.wanted.drag is None and work.wanted.weight is None:
        if abs(numbers["weight"]) < _LEAST_WEIGHT:
            numbers["weight"] = 0.0
    return numbers, shape


def _outline_of(work: Work, family: str) -> tuple[dict[str, float], Shape]:
    grid = work.grid
    envelope = Envelope(float(grid.t[0]), grid.step, work.iq, 1.0)
    burst = find_burst(envelope)
    level = plateau_amplitude(envelope, burst)
    size = np.abs(work.iq)
    start, stop = (
        float(grid.t[burst.first]),
        float(grid.t[burst.last]),
    )
    shape = Shape(family, 0.5 * (start + stop), max(stop - start, 2.0 * grid.step))
    inside = slice(burst.first, burst.last + 1)
    edges = [
        float(np.count_nonzero((part > 0.1 * level) & (part < 0.9 * level))) * grid.step / 0.59
        for part in (size[: inside.start + _half(inside)], size[inside.stop - _half(inside) :])
    ]
    least = 2.0 * grid.step
    rise, fall = (min(max(length, least), 2.0 * shape.duration) for length in edges)
    if family == "raised cosine":
        rise = fall = shape.duration
    shape = replace(shape, rise=rise, fall=fall, weight=work.wanted.weight or 0.0)
    slope = 0.0
    if family == "gaussian" or _with_weight(work):
        # A quadrature that is odd in time looks like an offset of the carrier.
        slope = work.offset
    else:
        slope, _ = phase_slope(envelope, burst)
    turned = work.iq * np.exp(-2j * math.pi * slope * grid.t)
    numbers = neutral_numbers(shape, level, float(np.angle(turned[inside].sum())))
    numbers["frequency"] = slope
    free = scales_of(work, numbers, outline_names(work, shape))
    return fit_numbers(work, numbers, shape, free), shape


def _half(inside: slice) -> int:
    return int(inside.stop - inside.start) // 2


def _missed(work: Work, numbers: dict[str, float], shape: Shape) -> float:
    rest = work.iq - compose(numbers, work.grid, shape)
    return float(np.vdot(rest, rest).real)


def _with_weight(work: Work) -> bool:
    if work.grid.anharmonicity == 0.0 or work.wanted.drag is False:
        return False
    return work.wanted.weight is None or work.wanted.weight != 0.0


def outline_names(work: Work, shape: Shape) -> list[str]:
    """Name the numbers of an outline that are free.

    Parameters
    ----------
    work : Work
    shape : Shape

    Returns
    -------
    list of str
    """
    names = ["level", "phase", "centre", "duration"]
    if shape.family != "gaussian":
        names += ["rise", "fall"]
    weighted = _with_weight(work)
    if weighted and (work.wanted.weight is None or shape.family != "gaussian"):
        names.append("weight")
    # The slope of the phase of a Gaussian and its DRAG quadrature are the same thing, and of other
    # pulses without a plateau almost: one of the two must be known.
    if not weighted or work.wanted.weight is not None:
        names.append("frequency")
    return names
