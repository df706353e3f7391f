"""What the plateau of a pulse shows: level, phase, droop, decays and lines."""

import math

import numpy as np

from cosim.dsp.anatomy.fitting import OUTSIDE, Work, fit_numbers, scales_of, spur_scales
from cosim.dsp.anatomy.leaking import find_leakage
from cosim.dsp.anatomy.lines import APART, LEAST, find_decay, find_lines
from cosim.dsp.anatomy.outline import outline_names
from cosim.dsp.anatomy.parts import GROUPS, Spur, actual_shape, compose, phase_of
from cosim.dsp.anatomy.shapes import Grid, Shape, sample_shape
from cosim.waveform import ComplexArray, FloatArray

# A pulse with this part of its duration as a plateau has one that can droop.
_LEAST_PLATEAU = 0.3
# Samples of a plateau at least.
_LEAST_SAMPLES = 8
# Decays of more than this part of the pulse are no imperfections.
_MOST = 0.3
# What goes on after the pulse, by what shows on its plateau.
_TAILS = {
    "settling_re": "tail_re",
    "settling_im": "tail_im",
    **{name: name.replace("_on_", "_off_") for name in GROUPS["ringing"] if "_on_" in name},
}
_BESIDE = (*GROUPS["carrier leakage"], *GROUPS["leakage change"])
_SHAPE = ("centre", "duration", "rise", "fall", "weight")


def plateau_of(grid: Grid, shape: Shape) -> slice | None:
    """Give the samples of the plateau, an edge's length away from the edges.

    Parameters
    ----------
    grid : Grid
    shape : Shape

    Returns
    -------
    slice or None
        None for a pulse without one.
    """
    if shape.family == "gaussian":
        return None
    start = shape.start + 0.5 * shape.rise + min(shape.rise, 0.05 * shape.duration)
    stop = shape.stop - 0.5 * shape.fall - min(shape.fall, 0.05 * shape.duration)
    if stop - start < _LEAST_PLATEAU * shape.duration:
        return None
    first, last = np.searchsorted(grid.t, (start, stop))
    return slice(int(first), int(last)) if last - first >= _LEAST_SAMPLES else None


def fit_by_plateau(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    names: list[str],
    plateau: slice,
) -> tuple[dict[str, float], tuple[Spur, ...]]:
    """Fit what the plateau shows, then tails, then edges.

    What edges do to the phase is neither an offset of the carrier nor a drift.

    Parameters
    ----------
    work : Work
    numbers : dict of float
        From the outline.
    shape : Shape
        Whose family the pulse is of.
    spurs : tuple of Spur
        At multiples of the clock.
    names : list of str
        Numbers that are free on the plateau.
    plateau : slice
        From `plateau_of`.

    Returns
    -------
    numbers : dict of float
    spurs : tuple of Spur
        With those that were found.
    """
    found = actual_shape(numbers, shape)
    size = sample_shape(found, work.grid).size
    weights = np.where(size < OUTSIDE, 1.0, 0.0)
    weights[plateau] = 1.0
    free = scales_of(work, numbers, names) | spur_scales(numbers, spurs, frequencies=False)
    numbers = fit_numbers(work, numbers, shape, free, spurs, weights)
    plain = numbers, free, spurs
    tails: list[str] = []
    # Twice, for what is small shows only when what is large has been found.
    for search in (_settling, _lines, _settling, _lines):
        left = _left_over(work, numbers, shape, spurs, plateau)
        if float(np.abs(left).max()) < LEAST:
            break
        begin, more, beside = search(work, numbers, shape, spurs, plateau, left)
        if not more and len(beside) == len(spurs):
            continue
        wider = free | scales_of(work, begin, more)
        wider |= spur_scales(begin, beside[len(spurs) :], frequencies=True)
        trial = fit_numbers(work, begin, shape, wider, beside, weights)
        if _plausible(work, trial, found, beside):
            numbers, spurs = trial, _not_small(trial, beside)
            dropped = {name for spur in beside if spur not in spurs for name in spur.all_numbers}
            free = {name: scale for name, scale in wider.items() if name not in dropped}
            tails += [_TAILS[name] for name in more if name in _TAILS]
    if len(free) > len(plain[1]):
        numbers = _again(work, numbers, shape, spurs, free, weights, tails)
        if not _plausible(work, numbers, found, spurs):
            numbers, free, spurs = plain
    return _with_edges(work, numbers, shape, spurs), _not_small(numbers, spurs)


def _not_small(numbers: dict[str, float], spurs: tuple[Spur, ...]) -> tuple[Spur, ...]:
    """Leave out lines that the fit has no use for."""
    least = 0.5 * LEAST * numbers["level"]
    return tuple(
        spur
        for spur in spurs
        if spur.clock or abs(complex(*(numbers[name] for name in spur.numbers))) > least
    )


def _with_edges(
    work: Work, numbers: dict[str, float], shape: Shape, spurs: tuple[Spur, ...]
) -> dict[str, float]:
    edges = [name for name in _SHAPE if name in outline_names(work, shape)]
    return fit_numbers(work, numbers, shape, scales_of(work, numbers, edges), spurs)


def _again(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    free: dict[str, float],
    weights: FloatArray,
    tails: list[str],
) -> dict[str, float]:
    """Fit once more with what was found: leakage, plateau, tails, edges, and the plateau again."""
    for _ in range(2):
        if any(not spur.modulated and not spur.clock for spur in spurs):
            # A line that is always there hides the carrier where that is alone.
            free = free | scales_of(work, numbers, [*_BESIDE])
        else:
            numbers = numbers | find_leakage(work, numbers, actual_shape(numbers, shape), spurs)
        numbers = fit_numbers(work, numbers, shape, free, spurs, weights)
        numbers = _with_tails(work, numbers, shape, spurs, tails)
        numbers = _with_edges(work, numbers, shape, spurs)
    return numbers


def _with_tails(
    work: Work,
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
    trial = fit_numbers(work, numbers, shape, scales_of(work, numbers, tails), spurs, after)
    return trial if max(abs(trial[name]) for name in tails) < _MOST else numbers


def _left_over(
    work: Work,
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


def _plausible(
    work: Work, numbers: dict[str, float], shape: Shape, spurs: tuple[Spur, ...]
) -> bool:
    """Tell whether decays and lines are small, and told from the edges, droop and one another."""
    least = 2.0 * work.grid.step
    size = max(abs(numbers[name]) for name in (*GROUPS["settling"], *GROUPS["ringing"]))
    lines = [abs(complex(*(numbers[name] for name in spur.numbers))) for spur in spurs]
    size = max([size, *(line / numbers["level"] for line in lines)])
    settling, ringing = numbers["settling_time"], numbers["ringing_time"]
    slow = settling < 0.3 * shape.duration and ringing < 2.0 * shape.duration
    return size < _MOST and min(settling, ringing) > least and slow


def _settling(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    part: slice,
    left: ComplexArray,
) -> tuple[dict[str, float], list[str], tuple[Spur, ...]]:
    found = actual_shape(numbers, shape)
    if numbers["settling_re"]:
        return numbers, [], spurs
    time = find_decay(work.grid.t[part], left, found.start, found.duration)
    if time is None:
        return numbers, [], spurs
    begin = numbers | {"settling_time": time}
    return begin, ["settling_re", "settling_im", "settling_time"], spurs


def _lines(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    part: slice,
    left: ComplexArray,
) -> tuple[dict[str, float], list[str], tuple[Spur, ...]]:
    size = sample_shape(actual_shape(numbers, shape), work.grid).size
    begin, names = dict(numbers), list[str]()
    added: list[Spur] = []
    span = float(work.grid.t[part][-1] - work.grid.t[part][0])
    rings = any(numbers[name] for name in GROUPS["ringing"])
    count = sum(not spur.clock for spur in spurs)
    named = _named_frequencies(work, numbers)
    # What leaks stands still when it is turned back.
    leaks = numbers["frequency"] - work.wanted.baseband_frequency
    back = np.exp(-2j * math.pi * leaks * work.grid.t)
    beside = work.iq - compose(numbers, work.grid, shape, spurs, work.wanted.baseband_frequency)
    for line in find_lines(work.grid.t[part], left):
        if math.isfinite(line.decay_time):
            if rings:
                continue
            begin |= {"ringing_frequency": line.frequency, "ringing_time": line.decay_time}
            names += [name for name in GROUPS["ringing"] if "_on_" in name]
            names += ["ringing_frequency", "ringing_time"]
            continue
        amplitude = line.amplitude * numbers["level"] * np.exp(1j * numbers["phase"])
        frequency = line.frequency + numbers["frequency"]
        known = [numbers[f"{spur.name}_frequency"] for spur in spurs if not spur.clock] + named
        if any(abs(frequency - other) * span < APART for other in known):
            # What is left of a line that was found, of the image or of the oscillator is no line.
            continue
        tone = amplitude * np.exp(2j * math.pi * frequency * work.grid.t)
        modulated = _comes_and_goes(beside * back, size, tone * back)
        if not modulated:
            beside = beside - tone
        spur = Spur(f"spur {count + len(added) + 1}", modulated)
        values = (float(amplitude.real), float(amplitude.imag))
        begin |= dict(zip(spur.numbers, values, strict=True))
        begin[f"{spur.name}_frequency"] = frequency
        added.append(spur)
    return begin, names, (*spurs, *added)


def fit_beside(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    spurs: tuple[Spur, ...],
    free: dict[str, float],
) -> tuple[dict[str, float], tuple[Spur, ...]]:
    """Find lines that are there beside a pulse without a plateau, and fit everything once more.

    Parameters
    ----------
    work : Work
    numbers : dict of float
        Fitted already.
    shape : Shape
        Whose family the pulse is of.
    spurs : tuple of Spur
        At multiples of the clock.
    free : dict of float
        Numbers that are free, with their scales.

    Returns
    -------
    numbers : dict of float
    spurs : tuple of Spur
        With those that were found; one that comes and goes with such a pulse is not told from its
        shape.
    """
    found = actual_shape(numbers, shape)
    whole = slice(0, work.grid.t.size)
    left = _left_over(work, numbers, shape, spurs, whole)
    begin, _, beside = _lines(work, numbers, shape, spurs, whole, left)
    steady = tuple(spur for spur in beside[len(spurs) :] if not spur.modulated)
    if not steady:
        return numbers, spurs
    wider = free | spur_scales(begin, steady, frequencies=True)
    wider |= scales_of(work, begin, [*_BESIDE])
    trial = fit_numbers(work, begin, shape, wider, (*spurs, *steady))
    if not _plausible(work, trial, found, steady):
        return numbers, spurs
    return trial, (*spurs, *steady)


def _named_frequencies(work: Work, numbers: dict[str, float]) -> list[float]:
    """Give where image and leaking oscillator of a sideband lie, which are no lines beside them."""
    baseband = work.wanted.baseband_frequency
    if baseband == 0.0:
        return []
    return [numbers["frequency"] - baseband, numbers["frequency"] - 2.0 * baseband]


def _comes_and_goes(left: ComplexArray, size: FloatArray, tone: ComplexArray) -> bool:
    """Tell whether a line is there during the pulse only: it explains nothing outside of it.

    A carrier that leaks is a constant in `left` on each side of the pulse, of any size.
    """
    middle = int(np.argmax(size))
    with_it = without = 0.0
    for side in (slice(0, middle), slice(middle, None)):
        there = (size < OUTSIDE)[side]
        for taken, sign in ((left[side][there], 0), ((left - tone)[side][there], 1)):
            power = float(np.sum(np.abs(taken - taken.mean()) ** 2)) if taken.size else 0.0
            with_it, without = with_it + power * (1 - sign), without + power * sign
    return not without < 0.5 * with_it
