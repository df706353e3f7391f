"""The tables [[noise]] that add a voltage: at the probe, along the line, by the deck's devices."""

import math
from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np

from cosim.config import Key, Quantity
from cosim.dsp.noise.density import Outside, SpectralDensity, density_from_points
from cosim.dsp.noise.thermal import Attenuator, line_power_density, wave_voltage_density
from cosim.errors import InputError
from cosim.noise_keys import check_levels, check_one, density_law
from cosim.schema import PositiveFrequency, Temperature


@dataclass(frozen=True, slots=True)
class ProbeNoise:
    """A table [[noise]] with acts_on = "probe": a voltage is added there, around the carrier.

    Parameters
    ----------
    acts_on : "probe"
        What fluctuates.
    name : str
        For messages and results.
    white : float or None
        One-sided spectral density in V^2/Hz at the carrier, the same to both sides of it.
    points : tuple of (float, float)
        Offset from the carrier in Hz and density in V^2/Hz, the same to both sides.
    below, above
        As in `DetuningNoise`.
    """

    acts_on: Literal["probe"]
    name: str = ""
    white: Annotated[float, Quantity("V^2/Hz")] | None = None
    points: tuple[tuple[PositiveFrequency, Annotated[float, Quantity("V^2/Hz")]], ...] = ()
    below: Outside = "error"
    above: Outside = "error"

    def __post_init__(self) -> None:
        check_one(
            {"'white'": self.white is not None, "'points'": bool(self.points)},
            "'white' or 'points'",
        )
        check_levels(self.white, None, 0.0, math.inf)
        self.density(0.0)

    @property
    def spread(self) -> float:
        """Nothing of it is constant during a gate."""
        return 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """Density of each quadrature at offsets from the carrier in V^2/Hz.

        v = I cos - Q sin with I and Q independent: each has twice the density of v.
        """
        del carrier
        if self.points:
            f, levels = zip(*self.points, strict=True)
            values = [2.0 * level for level in levels]
            return density_from_points(f, values, "V", below=self.below, above=self.above)
        return density_law("V", 2.0, self.white, None, 0.0, 0.0, math.inf)


@dataclass(frozen=True, slots=True)
class LineNoise:
    """A table [[noise]] with acts_on = "line": the attenuators of the line and their stages.

    Each attenuator of power ratio A passes 1/A of what arrives and adds (1 - 1/A) h f n(f, T): the
    Planck part only, since the zero point belongs to T1.

    Parameters
    ----------
    acts_on : "line"
        What fluctuates.
    stages : tuple of (float, float)
        Attenuation in dB and temperature in K, from the probe to the qubit; together they are the
        attenuation of [drive].
    name : str
        For messages and results.
    source : float
        Temperature in K of the matched source at the probe; 0 where its noise is told apart.
    impedance : float
        Of the line in ohm.
    """

    acts_on: Literal["line"]
    stages: tuple[tuple[Annotated[float, Quantity("dB", least=0.0)], Temperature], ...]
    name: str = ""
    source: Annotated[float, Quantity("K", least=0.0)] = 0.0
    impedance: Annotated[float, Quantity("ohm", above=0.0)] = 50.0

    def __post_init__(self) -> None:
        if not self.stages:
            raise InputError('key \'stages\': wanted at least one, such as [["20 dB", "4 K"]]')

    @property
    def spread(self) -> float:
        """Nothing of it is constant during a gate."""
        return 0.0

    @property
    def attenuation(self) -> float:
        """Attenuation of all stages in dB."""
        return sum(decibels for decibels, _ in self.stages)

    def density(self, carrier: float) -> SpectralDensity | None:
        """Density of each quadrature around a carrier in Hz, referred to the probe, in V^2/Hz."""
        stages = [Attenuator(10.0 ** (decibels / 10.0), kelvin) for decibels, kelvin in self.stages]
        power = line_power_density([carrier], self.source, stages) if carrier else np.zeros(1)
        at_qubit = float(wave_voltage_density(power, self.impedance)[0])
        referred = at_qubit * 10.0 ** (self.attenuation / 10.0)
        return density_law("V", 2.0, referred, None, 0.0, 0.0, math.inf)


@dataclass(frozen=True, slots=True)
class NetlistNoise:
    """A table [[noise]] with acts_on = "probe" and from = "netlist": the deck's own noise there.

    Currents that are made from a seed are injected at every device, along the run: a circuit that
    is switched or modulated has no noise around one operating point.

    Parameters
    ----------
    acts_on : "probe"
        What fluctuates.
    origin : "netlist"
        The key `from`.
    name : str
        For messages and results.
    seeds : int
        Noisy runs of the circuit, at least 2.
    resistor_temperature, channel_temperature, series_temperature : float or None
        Noise temperature in K of resistors, of channels, and of series resistances of transistors
        and diodes; None: the device temperature, which decks with cards fitted at 4 K have warmer.
    gamma : float
        Excess factor of channels.
    by_device : bool
        Whether each device is injected alone as well, in a run of its own.
    """

    acts_on: Literal["probe"]
    origin: Annotated[Literal["netlist"], Key("from")]
    name: str = ""
    seeds: int = 8
    resistor_temperature: Temperature | None = None
    channel_temperature: Temperature | None = None
    series_temperature: Temperature | None = None
    gamma: float = 2.0 / 3.0
    by_device: bool = False

    def __post_init__(self) -> None:
        if not 2 <= self.seeds <= 100_000:
            raise InputError(f"key 'seeds': wanted 2 to 100000, got {self.seeds}")
        if not self.gamma > 0.0:
            raise InputError(f"key 'gamma': wanted more than 0, got {self.gamma:g}")

    @property
    def spread(self) -> float:
        """Nothing of it is constant during a gate."""
        return 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """It has none: the noise of a switched circuit is not stationary."""
        del carrier
        return None
