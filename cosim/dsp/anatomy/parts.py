"""The imperfections of a pulse as numbers, and the envelope that they make together.

The real envelope, in the frame of the frequency that is wanted, is

    level S(t) (1 + droop + settling + ringing) exp(i (phase + 2 pi frequency t + drift))

with its image, a leaking carrier, spurs, steps of a converter and what is left. A number at its
ideal value is an imperfection undone, so that the same function gives the ideal pulse, the ideal
one with one imperfection, and the real one without it.
"""

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace

import numpy as np

from cosim.dsp.anatomy.shapes import Grid, Shape, ShapeSamples, sample_shape
from cosim.waveform import ComplexArray, FloatArray

SIDES = ("up", "down")

# Imperfection -> its numbers; spurs are added one by one.
GROUPS: Mapping[str, tuple[str, ...]] = {
    "mean amplitude": ("level",),
    "duration": ("duration",),
    "rise": ("rise",),
    "fall": ("fall",),
    "quadrature": ("weight",),
    "droop": ("droop",),
    "settling": ("settling_re", "settling_im", "tail_re", "tail_im"),
    "ringing": tuple(
        f"ringing_{place}_{side}_{part}"
        for place in ("on", "off")
        for side in SIDES
        for part in ("re", "im")
    ),
    "carrier frequency": ("frequency",),
    "phase": ("phase",),
    "phase drift": ("drift",),
    "image": ("image_re", "image_im"),
    "carrier leakage": ("leakage_re", "leakage_im"),
    "leakage change": ("leakage_change_re", "leakage_change_im"),
}

# Times and frequencies that only go with the numbers above.
COMPANIONS = ("centre", "settling_time", "ringing_frequency", "ringing_time")
# Drift and droop are told over the duration; beyond this part of it they stay as they are there.
_REACH = 0.75


@dataclass(frozen=True, slots=True)
class Spur:
    """A line beside the carrier.

    Parameters
    ----------
    name : str
        Of its numbers: name_re, name_im and name_frequency.
    modulated : bool
        Whether it comes and goes with the pulse.
    clock : bool
        Whether it lies at a multiple of the converter's clock.
    """

    name: str
    modulated: bool
    clock: bool = False

    @property
    def numbers(self) -> tuple[str, str]:
        """Names of its real and imaginary part, those of its amplitude at t = 0."""
        return f"{self.name}_re", f"{self.name}_im"

    @property
    def all_numbers(self) -> tuple[str, str, str]:
        """The same, and that of its frequency."""
        return (*self.numbers, f"{self.name}_frequency")


@dataclass(frozen=True, slots=True)
class Anatomy:
    """A pulse taken apart.

    Parameters
    ----------
    grid : Grid
    ideal : Shape
        Of the pulse that is wanted.
    numbers : mapping of float
        The numbers of the imperfections; see the head of this module.
    spurs : tuple of Spur
    baseband_frequency : float
        Wanted tone minus local oscillator in Hz.
    steps, rest : ndarray of complex, shape (n,)
        Steps of a converter, and what is left, in the envelope's unit.
    """

    grid: Grid
    ideal: Shape
    numbers: Mapping[str, float]
    spurs: tuple[Spur, ...]
    baseband_frequency: float
    steps: ComplexArray
    rest: ComplexArray

    @property
    def parts(self) -> tuple[str, ...]:
        """Names of all imperfections, in the order in which they go together."""
        lines = [spur.name for spur in self.spurs if not spur.clock]
        return (*GROUPS, *lines, "clock feed-through", "DAC steps", "residual")

    def envelope(self, level: float, phase: float, parts: Collection[str]) -> ComplexArray:
        """Give the ideal pulse with some of the imperfections.

        Parameters
        ----------
        level, phase : float
            Amplitude of the ideal pulse in the envelope's unit, and its phase in rad.
        parts : collection of str
            Names of imperfections; none for the ideal pulse, `parts` for the real one.

        Returns
        -------
        ndarray of complex, shape (n,)
        """
        numbers = dict(self.numbers)
        wanted = {
            "level": level,
            "duration": self.ideal.duration,
            "rise": self.ideal.rise,
            "fall": self.ideal.fall,
            "weight": self.ideal.weight,
            "phase": numbers["phase"],
        }
        undone = [name for part, names in GROUPS.items() if part not in parts for name in names]
        for spur in self.spurs:
            if ("clock feed-through" if spur.clock else spur.name) not in parts:
                undone += spur.numbers
        numbers |= {name: wanted.get(name, 0.0) for name in undone}
        made = compose(numbers, self.grid, self.ideal, self.spurs, self.baseband_frequency)
        if "DAC steps" in parts:
            made = made + self.steps
        if "residual" in parts:
            made = made + self.rest
        if "phase" not in parts:
            # What is added to the pulse turns with it, as behind one oscillator.
            made = made * np.exp(1j * (phase - numbers["phase"]))
        return made


def neutral_numbers(shape: Shape, level: float, phase: float) -> dict[str, float]:
    """Give the numbers of a pulse without imperfections.

    Parameters
    ----------
    shape : Shape
    level, phase : float
        Amplitude, and phase in rad.

    Returns
    -------
    dict of float
    """
    numbers = dict.fromkeys((name for names in GROUPS.values() for name in names), 0.0)
    return numbers | {
        "level": level,
        "phase": phase,
        "centre": shape.centre,
        "duration": shape.duration,
        "rise": shape.rise,
        "fall": shape.fall,
        "weight": shape.weight,
        "settling_time": shape.duration / 10.0,
        "ringing_frequency": 10.0 / shape.duration,
        "ringing_time": shape.duration / 10.0,
    }


def actual_shape(numbers: Mapping[str, float], family: Shape) -> Shape:
    """Give the shape that some numbers say.

    Parameters
    ----------
    numbers : mapping of float
    family : Shape
        Whose family it is.

    Returns
    -------
    Shape
    """
    return replace(
        family,
        centre=numbers["centre"],
        duration=numbers["duration"],
        rise=numbers["rise"],
        fall=numbers["fall"],
        weight=numbers["weight"],
    )


def compose(
    numbers: Mapping[str, float],
    grid: Grid,
    family: Shape,
    spurs: Collection[Spur] = (),
    baseband_frequency: float = 0.0,
) -> ComplexArray:
    """Make the envelope that some numbers say.

    Parameters
    ----------
    numbers : mapping of float
    grid : Grid
    family : Shape
        Whose family the pulse is of.
    spurs : collection of Spur
    baseband_frequency : float
        Wanted tone minus local oscillator in Hz.

    Returns
    -------
    ndarray of complex, shape (n,)
        In the unit of the level, in the frame of the wanted frequency.
    """
    shape = actual_shape(numbers, family)
    samples = sample_shape(shape, grid)
    value, turn = _distorted(numbers, grid, shape, samples)
    offset = numbers["frequency"]
    pulse = numbers["level"] * value * np.exp(1j * turn)
    made = pulse
    oscillator = 2.0 * math.pi * (offset - baseband_frequency) * grid.t
    leak = complex(numbers["leakage_re"], numbers["leakage_im"])
    change = complex(numbers["leakage_change_re"], numbers["leakage_change_im"])
    if leak or change:
        # How it changes during the pulse is not known; during the pulse it is the mean.
        step = 0.5 * (samples.falling + samples.rising - 1.0)
        made = made + (leak + change * step) * np.exp(1j * oscillator)
    image = complex(numbers["image_re"], numbers["image_im"])
    if image:
        made = made + image * pulse.conj() * np.exp(2j * oscillator)
    for spur in spurs:
        amplitude = complex(*(numbers[name] for name in spur.numbers))
        if amplitude:
            tone = np.exp(2j * math.pi * numbers[f"{spur.name}_frequency"] * grid.t)
            made = made + amplitude * tone * (samples.size if spur.modulated else 1.0)
    return np.asarray(made, dtype=np.complex128)


def phase_of(
    numbers: Mapping[str, float], grid: Grid, shape: Shape, size: FloatArray
) -> FloatArray:
    """Give the phase of the pulse: constant, frequency and drift.

    Parameters
    ----------
    numbers : mapping of float
    grid : Grid
    shape : Shape
    size : ndarray, shape (n,)
        The shape's samples.

    Returns
    -------
    ndarray, shape (n,)
        In rad; the drift is the phase at the ends of the duration minus that in its middle, and
        has no mean over the pulse.
    """
    turn = numbers["phase"] + 2.0 * math.pi * numbers["frequency"] * grid.t
    if numbers["drift"]:
        curve = 4.0 * _place(grid, shape) ** 2
        turn = turn + numbers["drift"] * (curve - float(size @ curve / size.sum()))
    return np.asarray(turn)


def _distorted(
    numbers: Mapping[str, float], grid: Grid, shape: Shape, samples: ShapeSamples
) -> tuple[ComplexArray, FloatArray]:
    size = samples.size
    total = float(size.sum())
    factor: ComplexArray = np.ones(size.size, dtype=np.complex128)
    tail: ComplexArray = np.zeros(size.size, dtype=np.complex128)
    if numbers["droop"]:
        place = _place(grid, shape)
        factor += numbers["droop"] * (place - float(size @ place) / total)
    settling = complex(numbers["settling_re"], numbers["settling_im"])
    left = complex(numbers["tail_re"], numbers["tail_im"])
    if settling or left:
        rate = 1.0 / numbers["settling_time"]
        on, off = (_decay(grid, edge, rate) for edge in (shape.start, shape.stop))
        factor += settling * (on - float(size @ on) / total)
        tail += left * off * samples.falling
    waves = [complex(*(numbers[name] for name in pair)) for pair in _ringing_pairs()]
    if any(waves):
        rate = 1.0 / numbers["ringing_time"]
        for begin, (up, down) in ((shape.start, waves[:2]), (shape.stop, waves[2:])):
            decay = _decay(grid, begin, rate)
            angle = 2.0 * math.pi * numbers["ringing_frequency"] * (grid.t - begin)
            wave = decay * (up * np.exp(1j * angle) + down * np.exp(-1j * angle))
            if begin == shape.start:
                factor += wave - complex(size @ wave) / total
            else:
                tail += wave * samples.falling
    return samples.value * factor + tail, phase_of(numbers, grid, shape, size)


def _ringing_pairs() -> list[tuple[str, ...]]:
    names = GROUPS["ringing"]
    return [names[first : first + 2] for first in range(0, len(names), 2)]


def _decay(grid: Grid, begin: float, rate: float) -> FloatArray:
    return np.asarray(np.exp(-np.maximum(grid.t - begin, 0.0) * rate))


def _place(grid: Grid, shape: Shape) -> FloatArray:
    return np.clip((grid.t - shape.centre) / shape.duration, -_REACH, _REACH)
