"""A pulse to be taken apart, and the fit of its numbers."""

from collections.abc import Mapping
from dataclasses import dataclass

from cosim.dsp.anatomy.parts import GROUPS, Spur, compose
from cosim.dsp.anatomy.refinement import refine
from cosim.dsp.anatomy.shapes import Grid, Shape
from cosim.waveform import ComplexArray, FloatArray

# Part of the peak below which a sample is outside of the pulse.
OUTSIDE = 1e-3

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


@dataclass(frozen=True, slots=True)
class Work:
    """A pulse to be taken apart.

    Parameters
    ----------
    grid : Grid
    iq : ndarray of complex, shape (n,)
        In the frame of the frequency that is wanted.
    wanted : Wanted
        What is known of the ideal pulse.
    offset : float
        Where the carrier is expected, in Hz.
    """

    grid: Grid
    iq: ComplexArray
    wanted: Wanted
    offset: float


def fit_numbers(
    work: Work,
    numbers: dict[str, float],
    shape: Shape,
    free: dict[str, float],
    spurs: tuple[Spur, ...] = (),
    weights: FloatArray | float = 1.0,
) -> dict[str, float]:
    """Fit some numbers of a pulse.

    Parameters
    ----------
    work : Work
    numbers : dict of float
        Where to begin.
    shape : Shape
        Whose family the pulse is of.
    free : dict of float
        Those that are free, with their scales.
    spurs : tuple of Spur
    weights : ndarray, shape (n,)
        Of the samples; one for all by default.

    Returns
    -------
    dict of float
        All numbers.
    """

    def model(trial: Mapping[str, float]) -> ComplexArray:
        return compose(trial, work.grid, shape, spurs, work.wanted.baseband_frequency)

    return refine(model, work.iq, numbers, free, weights=weights, positive=_POSITIVE)


def scales_of(work: Work, numbers: dict[str, float], names: list[str]) -> dict[str, float]:
    """Give a change of each number that matters.

    Parameters
    ----------
    work : Work
    numbers : dict of float
    names : list of str
        Which numbers.

    Returns
    -------
    dict of float
    """
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


def spur_scales(
    numbers: dict[str, float], spurs: tuple[Spur, ...], *, frequencies: bool
) -> dict[str, float]:
    """Give a change of each number of some lines that matters.

    Parameters
    ----------
    numbers : dict of float
    spurs : tuple of Spur
    frequencies : bool
        Whether their frequencies are free, too.

    Returns
    -------
    dict of float
    """
    free = {name: 0.01 * numbers["level"] for spur in spurs for name in spur.numbers}
    if frequencies:
        turn = 0.01 / numbers["duration"]
        free |= {f"{spur.name}_frequency": turn for spur in spurs}
    return free
