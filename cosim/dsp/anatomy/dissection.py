"""Taking a pulse apart: which ideal shape it is of, and the numbers of its imperfections."""

import math
from dataclasses import dataclass, replace

import numpy as np

from cosim.dsp.anatomy.lines import LEAST, above, find_decay, find_lines
from cosim.dsp.anatomy.parts import (
    GROUPS,
    Anatomy,
    Spur,
    actual_shape,
    compose,
    neutral_numbers,
    phase_of,
)
from cosim.dsp.anatomy.refinement import refine
from cosim.dsp.anatomy.shapes import FAMILIES, Grid, Shape, sample_shape
from cosim.dsp.carrier import find_burst, phase_slope, plateau_amplitude
from cosim.errors import InputError
from cosim.waveform import ComplexArray, Envelope, FloatArray

# Part of the peak below which a sample is outside of the pulse.
OUTSIDE = 1e-3
# A pulse with this part of its duration as a plateau has one that can droop.
_LEAST_PLATEAU = 0.3
# Edges shorter than this many carrier periods are jumps, for no filter shows them shorter.
_JUMP = 1.0
# A quadrature of a smaller weight is none.
_LEAST_WEIGHT = 0.02
# Samples outside of a pulse that tell a leaking carrier.
_LEAST_SAMPLES = 8
# Multiples of the converter's clock that are looked at on each side.
_HARMONICS = 2
# Decays of more than this part of the pulse are no imperfections.
_MOST = 0.3
# What goes on after the pulse, by what shows on its plateau.
_TAILS = {
    "settling_re": "tail_re",
    "settling_im": "tail_im",
    **{name: name.replace("_on_", "_off_") for name in GROUPS["ringing"] if "_on_" in name},
}
_SHAPE = ("centre", "duration", "rise", "fall", "weight")
_POSITIVE = ("duration", "rise", "fall", "settling_time", "ringing_time", "level")


@dataclass(frozen=True, slots=True)
class Wanted:
    """What is known of the ideal pulse.

    Parameters
    ----------
    family : str
        One of `cosim.dsp.anatomy.shapes.FAMILIES`, or "auto".
    drag : bool or None
        Whether it has a DRAG quadrature; None leaves that to the fit.
    duration, edge, weight : float or None
        Between the half heights in s, whole length of each edge in s, weight of the DRAG
        quadrature; None takes them from the fit.
    step_rate : float or None
        Clock of the converter in Hz.
    baseband_frequency : float
        Wanted tone minus local oscillator in Hz; 0 where the carrier itself is wanted.
    """

    family: str = "auto"
    drag: bool | None = None
    duration: float | None = None
    edge: float | None = None
    weight: float | None = None
    step_rate: float | None = None
    baseband_frequency: float = 0.0


def dissect(grid: Grid, iq: ComplexArray, wanted: Wanted, *, offset: float = 0.0) -> Anatomy:
    """Take a pulse apart.

    Parameters
    ----------
    grid : Grid
        Over the window of the gate.
    iq : ndarray of complex, shape (n,)
        The envelope there, in the frame of the frequency that is wanted.
    wanted : Wanted
        What is known of the ideal pulse.
    offset : float
        Where the carrier is expected in this frame, in Hz.

    Returns
    -------
    Anatomy
        Ideal pulse and all parts make `iq` again, to rounding.

    Raises
    ------
    WaveformError
        If the envelope is zero.
    InputError
        If the family is none.
    """
    if wanted.family not in (*FAMILIES, "auto"):
        raise InputError(f"ideal pulse: wanted one of {FAMILIES} or auto, got {wanted.family!r}")
    work = _Work(grid, iq, wanted, offset)
    numbers, shape = _outline(work)
    found = actual_shape(numbers, shape)
    size = sample_shape(found, grid).size
    numbers |= _leakage(work, numbers, size)
    plateau = _plateau(grid, found)
    spurs = _clock_lines(work, numbers)
    names = _further_names(work, numbers)
    if plateau is None:
        # Everything at once: nothing but the shape itself tells one thing from the other.
        free = _scales(work, numbers, [*_outline_names(work, shape), *names])
        free |= _spur_scales(numbers, spurs, frequencies=False)
        numbers = _fit(work, numbers, shape, free, spurs)
    else:
        names = ["level", "phase", "frequency", "droop", *names]
        numbers, spurs = _by_plateau(work, numbers, shape, spurs, names, plateau)
    numbers = _with_area(work, numbers, shape, spurs)
    made = compose(numbers, grid, shape, spurs, wanted.baseband_frequency)
    rest = iq - made
    steps = np.zeros_like(rest)
    if wanted.step_rate is not None:
        steps = above(rest, grid.step, 0.5 * wanted.step_rate)
    return Anatomy(
        grid=grid,
        ideal=_ideal(wanted, numbers, shape),
        numbers=numbers,
        spurs=spurs,
        baseband_frequency=wanted.baseband_frequency,
        steps=steps,
        rest=rest - steps,
    )


@dataclass(frozen=True, slots=True)
class _Work:
    grid: Grid
    iq: ComplexArray
    wanted: Wanted
    offset: float


def _fit(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    free: dict[str, float],
    spurs: tuple[Spur, ...] = (),
    weights: FloatArray | float = 1.0,
) -> dict[str, float]:
    def model(trial):  # type: ignore[no-untyped-def]
        return compose(trial, work.grid, shape, spurs, work.wanted.baseband_frequency)

    return refine(model, work.iq, numbers, free, weights=weights, positive=_POSITIVE)


def _outline(work: _Work) -> tuple[dict[str, float], Shape]:
    """Find the family, and level, phase, times and quadrature."""
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


def _outline_of(work: _Work, family: str) -> tuple[dict[str, float], Shape]:
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
    free = _scales(work, numbers, _outline_names(work, shape))
    return _fit(work, numbers, shape, free), shape


def _half(inside: slice) -> int:
    return int(inside.stop - inside.start) // 2


def _missed(work: _Work, numbers: dict[str, float], shape: Shape) -> float:
    rest = work.iq - compose(numbers, work.grid, shape)
    return float(np.vdot(rest, rest).real)


def _with_weight(work: _Work) -> bool:
    if work.grid.anharmonicity == 0.0 or work.wanted.drag is False:
        return False
    return work.wanted.weight is None or work.wanted.weight != 0.0


def _outline_names(work: _Work, shape: Shape) -> list[str]:
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


def _names_on_plateau(work: _Work) -> list[str]:
    return ["level", "phase", "frequency"]


def _further_names(work: _Work, numbers: dict[str, float]) -> list[str]:
    names = ["drift"]
    if work.wanted.baseband_frequency != 0.0:
        names += GROUPS["image"]
        if not numbers["leakage_re"] and not numbers["leakage_im"]:
            names += GROUPS["carrier leakage"]
    return names


def _plateau(grid: Grid, shape: Shape) -> slice | None:
    """Give the samples of the plateau, an edge's length away from the edges; None without one."""
    if shape.family == "gaussian":
        return None
    start = shape.start + 0.5 * shape.rise + min(shape.rise, 0.05 * shape.duration)
    stop = shape.stop - 0.5 * shape.fall - min(shape.fall, 0.05 * shape.duration)
    if stop - start < _LEAST_PLATEAU * shape.duration:
        return None
    first, last = np.searchsorted(grid.t, (start, stop))
    return slice(int(first), int(last)) if last - first >= _LEAST_SAMPLES else None


def _leakage(
    work: _Work, numbers: dict[str, float], size: FloatArray, spurs: tuple[Spur, ...] = ()
) -> dict[str, float]:
    """Find what leaks of the carrier before and after the pulse, tails of the pulse left aside."""
    t = work.grid.t
    turn = np.exp(2j * math.pi * (numbers["frequency"] - work.wanted.baseband_frequency) * t)
    left = work.iq.copy()
    for spur in spurs:
        if not spur.modulated:
            amplitude = complex(*(numbers[name] for name in spur.numbers))
            left -= amplitude * np.exp(2j * math.pi * numbers[f"{spur.name}_frequency"] * t)
    found = []
    for side in (t < numbers["centre"], t > numbers["centre"]):
        there = (size < OUTSIDE) & side
        if np.count_nonzero(there) < _LEAST_SAMPLES:
            continue
        part = left[there] / turn[there]
        level = complex(np.median(part.real), np.median(part.imag))
        if numbers["settling_re"] and side[-1]:
            # A tail that ends after the record does is told from a carrier by its time constant.
            fade = np.exp(-(t[there] - t[there][0]) / numbers["settling_time"]) / turn[there]
            columns = np.column_stack((np.ones(fade.size), fade))
            level = complex(np.linalg.lstsq(columns, part, rcond=None)[0][0])
        found.append(level)
    if not found:
        return {}
    mean, change = sum(found) / len(found), found[-1] - found[0]
    return {
        "leakage_re": mean.real,
        "leakage_im": mean.imag,
        "leakage_change_re": change.real,
        "leakage_change_im": change.imag,
    }


def _scales(work: _Work, numbers: dict[str, float], names: list[str]) -> dict[str, float]:
    """Give a change of each number that matters."""
    level, step = numbers["level"], work.grid.step
    turn = 0.01 / numbers["duration"]
    own = {
        "level": 0.01 * level,
        "frequency": turn,
        "centre": 0.1 * step,
        "duration": 0.1 * step,
        "rise": 0.1 * step,
        "fall": 0.1 * step,
        "settling_time": 0.1 * numbers["settling_time"],
        "ringing_time": 0.1 * numbers["ringing_time"],
        "ringing_frequency": turn,
    }
    volts = (*GROUPS["carrier leakage"], *GROUPS["leakage change"])
    return {name: own.get(name, 0.01 * level if name in volts else 0.01) for name in names}


def _clock_lines(work: _Work, numbers: dict[str, float]) -> tuple[Spur, ...]:
    rate = work.wanted.step_rate
    if rate is None:
        return ()
    span = float(work.grid.t[-1] - work.grid.t[0])
    lines = []
    for order in (sign * k for k in range(1, _HARMONICS + 1) for sign in (1, -1)):
        # Within the demodulator's flat band, and told apart from the pulse.
        if abs(order) * rate < 0.5 / work.grid.step / 4.0 and rate * span > 4.0:
            spur = Spur(f"clock {order:+d}", modulated=False, clock=True)
            numbers |= dict.fromkeys(spur.numbers, 0.0)
            numbers[f"{spur.name}_frequency"] = order * rate
            lines.append(spur)
    return tuple(lines)


def _spur_scales(
    numbers: dict[str, float], spurs: tuple[Spur, ...], *, frequencies: bool
) -> dict[str, float]:
    free = {name: 0.01 * numbers["level"] for spur in spurs for name in spur.numbers}
    if frequencies:
        turn = 0.01 / numbers["duration"]
        free |= {f"{spur.name}_frequency": turn for spur in spurs}
    return free


def _by_plateau(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    names: list[str],
    plateau: slice,
) -> tuple[dict[str, float], tuple[Spur, ...]]:
    """Fit what the plateau shows, then tails, then edges.

    What edges do to the phase is neither an offset of the carrier nor a drift.
    """
    found = actual_shape(numbers, shape)
    size = sample_shape(found, work.grid).size
    weights = np.where(size < OUTSIDE, 1.0, 0.0)
    weights[plateau] = 1.0
    free = _scales(work, numbers, names) | _spur_scales(numbers, spurs, frequencies=False)
    numbers = _fit(work, numbers, shape, free, spurs, weights)
    tails: list[str] = []
    for search in (_settling, _lines):
        left = _left_over(work, numbers, shape, spurs, plateau)
        if float(np.abs(left).max()) < LEAST:
            break
        begin, more, beside = search(work, numbers, shape, spurs, plateau, left)
        if not more and len(beside) == len(spurs):
            continue
        wider = free | _scales(work, begin, more)
        wider |= _spur_scales(begin, beside[len(spurs) :], frequencies=True)
        trial = _fit(work, begin, shape, wider, beside, weights)
        if _plausible(work, trial, found):
            numbers, free, spurs = trial, wider, beside
            tails += [_TAILS[name] for name in more if name in _TAILS]
    edges = [name for name in _SHAPE if name in _outline_names(work, shape)]
    for _ in range(2 if tails or spurs else 1):
        if tails or spurs:
            numbers |= _leakage(work, numbers, size, spurs)
            numbers = _fit(work, numbers, shape, free, spurs, weights)
            numbers = _with_tails(work, numbers, shape, spurs, tails)
        numbers = _fit(work, numbers, shape, _scales(work, numbers, edges), spurs)
    return numbers, spurs


def _with_tails(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    tails: list[str],
) -> dict[str, float]:
    """Fit what goes on after the pulse, with the time constants of its plateau."""
    if not tails:
        return numbers
    found = actual_shape(numbers, shape)
    begin = found.stop + 0.5 * found.fall + 2.0 * work.grid.step
    after = np.where(work.grid.t > begin, 1.0, 0.0)
    trial = _fit(work, numbers, shape, _scales(work, numbers, tails), spurs, after)
    return trial if max(abs(trial[name]) for name in tails) < _MOST else numbers


def _left_over(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    part: slice,
) -> ComplexArray:
    """Give what is left of the plateau over the pulse."""
    found = actual_shape(numbers, shape)
    size = sample_shape(found, work.grid).size
    carrier = numbers["level"] * np.exp(1j * phase_of(numbers, work.grid, found, size))
    made = compose(numbers, work.grid, shape, spurs, work.wanted.baseband_frequency)
    return np.asarray(((work.iq - made) / carrier)[part])


def _plausible(work: _Work, numbers: dict[str, float], shape: Shape) -> bool:
    """Tell whether decays are small, and longer than what the edges can hide."""
    least = 2.0 * work.grid.step
    size = max(abs(numbers[name]) for name in (*GROUPS["settling"], *GROUPS["ringing"]))
    times = numbers["settling_time"], numbers["ringing_time"]
    return size < _MOST and min(times) > least and max(times) < 2.0 * shape.duration


def _settling(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    part: slice,
    left: ComplexArray,
) -> tuple[dict[str, float], list[str], tuple[Spur, ...]]:
    found = actual_shape(numbers, shape)
    time = find_decay(work.grid.t[part], left, found.start, found.duration)
    if time is None:
        return numbers, [], spurs
    begin = numbers | {"settling_time": time}
    return begin, ["settling_re", "settling_im", "settling_time"], spurs


def _lines(
    work: _Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    part: slice,
    left: ComplexArray,
) -> tuple[dict[str, float], list[str], tuple[Spur, ...]]:
    size = sample_shape(actual_shape(numbers, shape), work.grid).size
    begin, names = dict(numbers), list[str]()
    added: list[Spur] = []
    for line in find_lines(work.grid.t[part], left):
        if math.isfinite(line.decay_time):
            begin |= {"ringing_frequency": line.frequency, "ringing_time": line.decay_time}
            names += [name for name in GROUPS["ringing"] if "_on_" in name]
            names += ["ringing_frequency", "ringing_time"]
            continue
        amplitude = line.amplitude * numbers["level"] * np.exp(1j * numbers["phase"])
        frequency = line.frequency + numbers["frequency"]
        tone = amplitude * np.exp(2j * math.pi * frequency * work.grid.t)
        spur = Spur(f"spur {len(added) + 1}", _comes_and_goes(work, size, tone))
        values = (float(amplitude.real), float(amplitude.imag))
        begin |= dict(zip(spur.numbers, values, strict=True))
        begin[f"{spur.name}_frequency"] = frequency
        added.append(spur)
    return begin, names, (*spurs, *added)


def _comes_and_goes(work: _Work, size: FloatArray, tone: ComplexArray) -> bool:
    """Tell whether a line is there during the pulse only: it explains nothing outside of it."""
    middle = int(np.argmax(size))
    with_it = without = 0.0
    for side in (slice(0, middle), slice(middle, None)):
        there = (size < OUTSIDE)[side]
        for taken, sign in ((work.iq[side][there], 0), ((work.iq - tone)[side][there], 1)):
            power = float(np.sum(np.abs(taken - taken.mean()) ** 2)) if taken.size else 0.0
            with_it, without = with_it + power * (1 - sign), without + power * sign
    return not without < 0.5 * with_it


def _with_area(
    work: _Work, numbers: dict[str, float], shape: Shape, spurs: tuple[Spur, ...]
) -> dict[str, float]:
    """Move level and phase so that what is left has no area: it does not turn a qubit by itself."""
    grid = work.grid
    found = actual_shape(numbers, shape)
    size = sample_shape(found, grid).size
    rest = work.iq - compose(numbers, grid, shape, spurs, work.wanted.baseband_frequency)
    turned = rest * np.exp(-1j * phase_of(numbers, grid, found, size))
    ratio = 1.0 + complex(turned.sum()) / (numbers["level"] * float(size.sum()))
    return numbers | {
        "level": numbers["level"] * abs(ratio),
        "phase": numbers["phase"] + float(np.angle(ratio)),
    }


def _ideal(wanted: Wanted, numbers: dict[str, float], shape: Shape) -> Shape:
    """Give the shape that is wanted; what is not known of it is what was found."""
    found = actual_shape(numbers, shape)
    duration = found.duration if wanted.duration is None else wanted.duration
    weight = found.weight if wanted.weight is None else wanted.weight
    rise, fall = found.rise, found.fall
    if shape.family == "square":
        rise = fall = 0.0
    elif shape.family == "raised cosine":
        rise = fall = duration
    elif wanted.edge is not None:
        rise = fall = wanted.edge
    return replace(found, duration=duration, rise=rise, fall=fall, weight=weight)
