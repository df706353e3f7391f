"""The tables [[noise]] that add a voltage: at the probe, along the line, by the deck's devices."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
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

    Parameters
    ----------
    acts_on : "probe"
        What fluctuates.
    origin : "netlist"
        The key `from`.
    name : str
        For messages and results.
    method : "auto", "injection", "stationary" or "frozen"
        "injection": currents made from a seed, at every device along the run, since a circuit that
        is switched or modulated has no noise around one operating point. "stationary": the
        simulator's small-signal noise around the sources' mean values in the gate's window, refused
        where a leading device's bias changes there. "auto": the latter where it holds, else the
        former. "frozen": an estimate from the sources at one instant, which converts no noise from
        one frequency to another, and has no 1/f noise.
    instant : float or None
        Of "frozen", in s; None: the middle of the gate's window.
    seeds : int
        Noisy runs of the circuit of "injection", at least 2.
    resistor_temperature, channel_temperature, series_temperature : float or None
        Noise temperature in K of resistors, of channels, and of series resistances of transistors
        and diodes; None: the device temperature, which decks with cards fitted at 4 K have warmer.
    gamma : float or None
        Excess factor of channels, which only "injection" takes; None: that of the simulator's
        models, 2/3 of level 1 to 3.
    gammas : mapping of str to float
        The same of single devices, or of all of a model.
    by_device : bool
        Whether "injection" injects each device alone as well, in a run for each seed.
    """

    acts_on: Literal["probe"]
    origin: Annotated[Literal["netlist"], Key("from")]
    name: str = ""
    method: Literal["auto", "injection", "stationary", "frozen"] = "auto"
    instant: Annotated[float, Quantity("s", least=0.0)] | None = None
    seeds: int = 8
    resistor_temperature: Temperature | None = None
    channel_temperature: Temperature | None = None
    series_temperature: Temperature | None = None
    gamma: float | None = None
    gammas: Mapping[str, float] = field(default_factory=dict)
    by_device: bool = False

    def __post_init__(self) -> None:
        if not 2 <= self.seeds <= 100_000:
            raise InputError(f"key 'seeds': wanted 2 to 100000, got {self.seeds}")
        if self.gamma is not None and not self.gamma > 0.0:
            raise InputError(f"key 'gamma': wanted more than 0, got {self.gamma:g}")
        for name, value in self.gammas.items():
            if not 0.0 < value < math.inf:
                raise InputError(f"key 'gammas.{name}': wanted more than 0, got {value:g}")
        if self.instant is not None and self.method != "frozen":
            raise InputError("key 'instant' goes with method = \"frozen\"")
        around_a_point = self.method in ("stationary", "frozen")
        if around_a_point and (self.channels_given or self.by_device):
            raise InputError(
                f"'gamma', 'gammas' and 'by_device' go with injection, not with method = "
                f'"{self.method}"',
                hint="The simulator's small-signal noise has its models' own excess factors, and "
                "each device's part without a run of its own.",
            )

    @property
    def channels_given(self) -> bool:
        """Whether excess factors are given, which the simulator's own noise does not take."""
        return self.gamma is not None or bool(self.gammas)

    @property
    def spread(self) -> float:
        """Nothing of it is constant during a gate."""
        return 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """It has none before the circuit is known."""
        del carrier
        return None
