"""The parts of a deck's noise: which device, and what kind of contribution.

ngspice 39 names the vectors of a noise analysis, measured,

    onoise_r.x1.r1, onoise_r.x1.r1_thermal, onoise_r.x1.r1_1overf     resistors
    onoise_d1_id, _rs, _1overf; onoise_q1_ib, _ic, _rb, _rc, _re, _1overf
    onoise_m1_id, _rd, _rs, _1overf; onoise_j1 alike                  MOS level 1 to 3, JFETs
    onoise.m1.id, .rd, .rs, .rg, .igs, .rbpb, .corl, .1overf ...       BSIM3 and BSIM4
    onoise_s1                                                         switches

The vector without an ending is the sum of the device's parts.
"""

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np

from cosim.circuit.deck import Deck
from cosim.circuit.hierarchy import structure_of
from cosim.circuit.settings import CELSIUS, written_temperature
from cosim.errors import InputError
from cosim.waveform import FloatArray

THERMAL, CHANNEL, SERIES, SHOT, FLICKER = "thermal", "channel", "series", "shot", "flicker"
PARTS = (THERMAL, CHANNEL, SERIES, SHOT, FLICKER)
"""Kinds of contributions, the first three of which follow a noise temperature."""

_USUAL_TEMPERATURE = 27.0 + CELSIUS  # What ngspice takes without any card.
_START = "onoise"
_FIELD_EFFECT = frozenset("mjz")
_RESISTANCES = (
    "rs", "rd", "rg", "rb", "rc", "re", "rbps", "rbpd", "rbpb", "rbsb", "rbdb",
)  # fmt: skip
_ENDINGS = {
    "r": ("thermal", "1overf"),
    "d": ("id", "rs", "1overf"),
    "q": ("ic", "ib", "rc", "rb", "re", "1overf"),
    "j": ("id", "rs", "rd", "1overf"),
    "z": ("id", "rs", "rd", "1overf"),
    "m": ("id", "igs", "igd", "igb", "corl", "1overf", *_RESISTANCES),
    "s": ("",),
    "w": ("",),
}


@dataclass(frozen=True, slots=True)
class NoiseTemperatures:
    """Temperatures of the noise, per kind of contribution, apart from that of the devices.

    Parameters
    ----------
    resistor : float or None
        Of resistors (and of switches) in K; None: the device temperature.
    channel : float or None
        Of the channels of field-effect transistors in K; None: the device temperature.
    series : float or None
        Of the series resistances of transistors and diodes in K; None: the device temperature.

    Raises
    ------
    InputError
        If a temperature is negative or not finite.
    """

    resistor: float | None = field(default=None, metadata={"unit": "K"})
    channel: float | None = field(default=None, metadata={"unit": "K"})
    series: float | None = field(default=None, metadata={"unit": "K"})

    def __post_init__(self) -> None:
        for name in ("resistor", "channel", "series"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value >= 0):
                raise InputError(
                    f"NoiseTemperatures.{name} must be finite and at least 0 K, got {value!r}"
                )

    def of(self, part: str) -> float | None:
        """Give the temperature of a part in K.

        Parameters
        ----------
        part : str
            One of `PARTS`.

        Returns
        -------
        float or None
            None for the device temperature, and for shot and 1/f noise, which have none.
        """
        return {THERMAL: self.resistor, CHANNEL: self.channel, SERIES: self.series}.get(part)


def part_of(letter: str, ending: str) -> str:
    """Say what kind of contribution a vector's ending stands for.

    Parameters
    ----------
    letter : str
        The device's element letter.
    ending : str
        "thermal", "id", "rs" and the like; "" for a switch.

    Returns
    -------
    str
        One of `PARTS`.
    """
    if ending == "1overf":
        return FLICKER
    if ending in _RESISTANCES:
        return SERIES
    if ending in ("id", "corl") and letter in _FIELD_EFFECT:
        return CHANNEL
    return THERMAL if letter in "rsw" else SHOT


def part_vectors(names: Iterable[tuple[str, str]]) -> dict[str, tuple[str, str]]:
    """Give the vectors in which ngspice may have the parts of devices.

    Parameters
    ----------
    names : iterable of (str, str)
        Name in ngspice ("m.x1.m1") and element letter of each device.

    Returns
    -------
    dict of str to (str, str)
        Vector -> device and part. Of MOS transistors both spellings are there, one of which a run
        gives; and endings that only some models have.
    """
    found: dict[str, tuple[str, str]] = {}
    for name, letter in names:
        for ending in _ENDINGS.get(letter, ()):
            for separator in "_." if letter == "m" else "_":
                vector = f"{_START}{separator}{name}" + (f"{separator}{ending}" if ending else "")
                found[vector] = (name, part_of(letter, ending))
    return found


def factors(
    temperatures: NoiseTemperatures, simulated: float, parts: Iterable[str]
) -> Mapping[str, float]:
    """Give the factor from the simulated device temperature to the noise temperature.

    Parameters
    ----------
    temperatures : NoiseTemperatures
        Noise temperatures in K.
    simulated : float
        Device temperature in K.
    parts : iterable of str
        Some of `PARTS`.

    Returns
    -------
    mapping of str to float
        Part -> T_noise/T_simulated; 1 for shot and 1/f noise.
    """
    wanted = {part: temperatures.of(part) for part in parts}
    return {part: 1.0 if kelvin is None else kelvin / simulated for part, kelvin in wanted.items()}


def device_temperature(deck: Deck, requested: float | None) -> float:
    """Give the device temperature of a run.

    Parameters
    ----------
    deck : Deck
        The deck.
    requested : float or None
        What the request says, in K; None: the deck's own, or 300.15 K.

    Returns
    -------
    float
        In K.

    Raises
    ------
    InputError
        If the deck's own is an expression that only ngspice can work out.
    """
    if requested is not None:
        return requested
    if deck.temperature is not None:
        return deck.temperature
    written = written_temperature(structure_of(deck.lines), [])
    if written is None:
        return _USUAL_TEMPERATURE
    raise InputError(
        f"the device temperature is written as '{written[0]}', which only ngspice can work out",
        hint="Give the device temperature with the request.",
    )


def band_power(frequency: FloatArray, density: FloatArray) -> float:
    """Integrate a spectral density over its grid, as a power law from point to point.

    Parameters
    ----------
    frequency : ndarray, shape (n,)
        In Hz, rising, positive.
    density : ndarray, shape (n,)
        In V^2/Hz, not negative.

    Returns
    -------
    float
        In V^2. Where a density is zero its neighbourhood is integrated along straight lines.
    """
    low, high = density[:-1], density[1:]
    straight = (low + high) / 2 * np.diff(frequency)
    positive = (low > 0) & (high > 0)
    span = np.log(frequency[1:] / frequency[:-1])
    rise = np.log(np.where(positive, high, 1.0) / np.where(positive, low, 1.0)) + span
    # The integral of a power law is the logarithmic mean of f S(f) times the logarithm's span.
    small = np.abs(rise) < 1e-8
    mean = np.where(small, 1.0, np.expm1(rise) / np.where(small, 1.0, rise))
    return float(np.sum(np.where(positive, low * frequency[:-1] * span * mean, straight)))
