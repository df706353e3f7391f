"""Taking a pulse apart: which ideal shape it is of, and the numbers of its imperfections."""

from dataclasses import replace

import numpy as np

from cosim.dsp.anatomy.fitting import Wanted, Work, fit_numbers, scales_of, spur_scales
from cosim.dsp.anatomy.leaking import find_leakage
from cosim.dsp.anatomy.lines import above
from cosim.dsp.anatomy.outline import find_outline, outline_names
from cosim.dsp.anatomy.parts import GROUPS, Anatomy, Spur, actual_shape, compose, phase_of
from cosim.dsp.anatomy.plateau import fit_beside, fit_by_plateau, plateau_of
from cosim.dsp.anatomy.shapes import FAMILIES, Grid, Shape, sample_shape
from cosim.errors import InputError
from cosim.waveform import ComplexArray

# Multiples of the converter's clock that are looked at on each side.
_HARMONICS = 2


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
    work = Work(grid, iq, wanted, offset)
    numbers, shape = find_outline(work)
    found = actual_shape(numbers, shape)
    numbers |= find_leakage(work, numbers, found)
    plateau = plateau_of(grid, found)
    spurs = _clock_lines(work, numbers)
    names = _further_names(work, numbers)
    if plateau is None:
        # Everything at once: nothing but the shape itself tells one thing from the other.
        free = scales_of(work, numbers, [*outline_names(work, shape), *names])
        free |= spur_scales(numbers, spurs, frequencies=False)
        numbers = fit_numbers(work, numbers, shape, free, spurs)
        numbers, spurs = fit_beside(work, numbers, shape, spurs, free)
    else:
        names = ["level", "phase", "frequency", "droop", *names]
        numbers, spurs = fit_by_plateau(work, numbers, shape, spurs, names, plateau)
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


def _further_names(work: Work, numbers: dict[str, float]) -> list[str]:
    names = ["drift"]
    if work.wanted.baseband_frequency != 0.0:
        names += GROUPS["image"]
        if not numbers["leakage_re"] and not numbers["leakage_im"]:
            names += GROUPS["carrier leakage"]
    return names


def _clock_lines(work: Work, numbers: dict[str, float]) -> tuple[Spur, ...]:
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


def _with_area(
    work: Work, numbers: dict[str, float], shape: Shape, spurs: tuple[Spur, ...]
) -> dict[str, float]:
    """Move the level so that what is left has no area: it does not turn a qubit too far."""
    grid = work.grid
    found = actual_shape(numbers, shape)
    size = sample_shape(found, grid).size
    rest = work.iq - compose(numbers, grid, shape, spurs, work.wanted.baseband_frequency)
    turned = rest * np.exp(-1j * phase_of(numbers, grid, found, size))
    ratio = float(turned.real.sum()) / (numbers["level"] * float(size.sum()))
    return numbers | {"level": numbers["level"] * (1.0 + ratio)}


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
