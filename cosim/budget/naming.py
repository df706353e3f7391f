"""The numbers of imperfections as people name them: value, unit and a note."""

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from cosim.dsp.anatomy.parts import Anatomy, actual_shape
from cosim.dsp.anatomy.shapes import TEN_TO_NINETY, sample_shape
from cosim.units import format_quantity

# An edge is where the shape is farther than this from 0 and from 1.
_EDGE = 1e-3
# A level of nothing.
_NOTHING = 1e-12


@dataclass(frozen=True, slots=True)
class Measure:
    """How large an imperfection is.

    Parameters
    ----------
    value : float
        In `unit`.
    unit : str
    note : str
        Further numbers.
    """

    value: float
    unit: str
    note: str = ""


def measures(anatomy: Anatomy, level: float, phase: float) -> dict[str, Measure]:
    """Name what a pulse was taken apart into.

    Parameters
    ----------
    anatomy : Anatomy
    level, phase : float
        Amplitude and phase of the ideal pulse.

    Returns
    -------
    dict of Measure
        By the names of `Anatomy.parts`, without those that have no meaning for this pulse.
    """
    n, ideal = anatomy.numbers, anatomy.ideal
    found = {
        "mean amplitude": Measure(n["level"] / level - 1.0, "1"),
        "duration": Measure(
            n["duration"] - ideal.duration, "s", f"{_seconds(n['duration'])} at half height"
        ),
        "droop": Measure(n["droop"], "1", "over the duration"),
        "settling": _settling(n),
        "ringing": _ringing(n),
        "carrier frequency": Measure(n["frequency"], "Hz"),
        "phase": Measure(math.remainder(n["phase"] - phase, 2.0 * math.pi), "rad", "at t = 0"),
        "phase drift": Measure(n["drift"], "rad", "ends against middle"),
        "carrier leakage": _leakage(n),
        "leakage change": Measure(
            decibels(abs(_complex(n, "leakage_change")) / n["level"]), "dBc", "after less before"
        ),
    }
    if ideal.family != "gaussian":
        for name in ("rise", "fall"):
            wanted = getattr(ideal, name)
            found[name] = Measure(
                TEN_TO_NINETY * (n[name] - wanted),
                "s",
                f"{_seconds(TEN_TO_NINETY * n[name])} from 10 to 90 %",
            )
    if anatomy.grid.anharmonicity != 0.0 and (n["weight"] or ideal.weight):
        found["quadrature"] = Measure(n["weight"] - ideal.weight, "1", f"weight {n['weight']:.4g}")
    if anatomy.baseband_frequency != 0.0:
        found["image"] = _image(n)
    found |= _lines(anatomy)
    rest = _share(anatomy.rest, n["level"])
    edges = f"rms; {_at_edges(anatomy):.0%} of its power at the edges"
    found["residual"] = Measure(decibels(rest), "dBc", edges)
    return found


def decibels(ratio: float) -> float:
    """Give a ratio of amplitudes in dB.

    Parameters
    ----------
    ratio : float

    Returns
    -------
    float
        Minus infinity for nothing.
    """
    return 20.0 * math.log10(ratio) if ratio > _NOTHING else -math.inf


def _settling(n: Mapping[str, float]) -> Measure:
    value = _complex(n, "settling")
    if not value:
        return Measure(0.0, "1", "none found")
    sign = -1.0 if value.real < 0.0 else 1.0
    tail = abs(_complex(n, "tail"))
    return Measure(
        sign * abs(value), "1", f"time constant {_seconds(n['settling_time'])}, tail {tail:.2e}"
    )


def _ringing(n: Mapping[str, float]) -> Measure:
    value = abs(_complex(n, "ringing_on_up")) + abs(_complex(n, "ringing_on_down"))
    if not value:
        return Measure(0.0, "1", "none found")
    frequency = format_quantity(n["ringing_frequency"], "Hz")
    return Measure(value, "1", f"{frequency}, time constant {_seconds(n['ringing_time'])}")


def _leakage(n: Mapping[str, float]) -> Measure:
    mean, change = _complex(n, "leakage"), _complex(n, "leakage_change")
    before, after = (decibels(abs(mean + sign * change) / n["level"]) for sign in (-0.5, 0.5))
    note = f"{_level(before)} before, {_level(after)} after"
    return Measure(decibels(abs(mean) / n["level"]), "dBc", note)


def _image(n: Mapping[str, float]) -> Measure:
    """Give the image, and the imbalance of an upper-sideband mixer that makes it.

    With G = g exp(i p) of the Q path over the I path the image over the conjugate of the wanted
    tone is (1 - G)/(1 + conj(G)), the oscillator's phase being zero.
    """
    ratio = _complex(n, "image")
    # (1 - x - iy) = (a + ib)(1 + x - iy), two equations for x and y.
    a, b = ratio.real, ratio.imag
    matrix = np.array([[1.0 + a, b], [b, 1.0 - a]])
    x, y = np.linalg.solve(matrix, np.array([1.0 - a, -b]))
    gain, angle = math.hypot(x, y), math.degrees(math.atan2(y, x))
    note = f"gain imbalance {gain:.5f}, phase imbalance {angle:.3f}°, LO phase taken as 0"
    return Measure(decibels(abs(ratio)), "dBc", note)


def _lines(anatomy: Anatomy) -> dict[str, Measure]:
    n, found = anatomy.numbers, {}
    clock = 0.0
    for spur in anatomy.spurs:
        level = abs(_complex(n, spur.name)) / n["level"]
        if spur.clock:
            clock = math.hypot(clock, level)
            continue
        offset = format_quantity(n[f"{spur.name}_frequency"], "Hz", 5)
        there = "with the pulse" if spur.modulated else "always there"
        found[spur.name] = Measure(decibels(level), "dBc", f"at {offset}, {there}")
    if any(spur.clock for spur in anatomy.spurs):
        found["clock feed-through"] = Measure(decibels(clock), "dBc")
    if np.any(anatomy.steps):
        steps = _share(anatomy.steps, n["level"])
        found["DAC steps"] = Measure(decibels(steps), "dBc", "rms beyond half the clock")
    return found


def _at_edges(anatomy: Anatomy) -> float:
    """Give the part of what is left that lies where the shape rises and falls."""
    power = np.abs(anatomy.rest) ** 2
    size = sample_shape(actual_shape(anatomy.numbers, anatomy.ideal), anatomy.grid).size
    steep = (size > _EDGE) & (size < 1.0 - _EDGE)
    return float(power[steep].sum() / max(float(power.sum()), 1e-300))


def _share(part: np.ndarray, level: float) -> float:
    return float(np.sqrt(np.mean(np.abs(part) ** 2))) / level


def _complex(n: Mapping[str, float], name: str) -> complex:
    return complex(n[f"{name}_re"], n[f"{name}_im"])


def _level(value: float) -> str:
    return "nothing" if math.isinf(value) else f"{value:.1f} dBc"


def _seconds(value: float) -> str:
    return format_quantity(value, "s", 4)
