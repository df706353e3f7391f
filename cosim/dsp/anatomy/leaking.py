"""The carrier beside a pulse."""

import math

import numpy as np

from cosim.dsp.anatomy.fitting import OUTSIDE, Work
from cosim.dsp.anatomy.parts import Spur, phase_of
from cosim.dsp.anatomy.shapes import Shape, sample_shape
from cosim.waveform import ComplexArray, FloatArray

# Samples outside of a pulse that tell a leaking carrier.
_LEAST_SAMPLES = 8


def find_leakage(
    work: Work, numbers: dict[str, float], shape: Shape, spurs: tuple[Spur, ...] = ()
) -> dict[str, float]:
    """Find what leaks of the carrier before and after the pulse, tails of the pulse left aside.

    Parameters
    ----------
    work : Work
    numbers : dict of float
    shape : Shape
        As they say.
    spurs : tuple of Spur
        Those that are always there are no leakage.

    Returns
    -------
    dict of float
        Mean and change; empty where there is nothing beside the pulse.
    """
    t = work.grid.t
    turn = np.exp(2j * math.pi * (numbers["frequency"] - work.wanted.baseband_frequency) * t)
    size = sample_shape(shape, work.grid).size
    # The foot of a Gaussian reaches far.
    pulse = numbers["level"] * size * np.exp(1j * phase_of(numbers, work.grid, shape, size))
    left = work.iq - pulse
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
            level = _beside_tail(t[there], part, level, numbers["settling_time"])
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


def _beside_tail(t: FloatArray, part: ComplexArray, level: complex, time: float) -> complex:
    """Give the constant beside a tail that ends after the record does, if one explains it all."""
    columns = np.column_stack((np.ones(t.size), np.exp(-(t - t[0]) / time))).astype(np.complex128)
    constant = np.linalg.lstsq(columns, part, rcond=None)[0]
    missed = float(np.sum(np.abs(part - columns @ constant) ** 2))
    all_explained = missed < 0.1 * float(np.sum(np.abs(part - level) ** 2))
    return complex(constant[0]) if all_explained else level
