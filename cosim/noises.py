"""The tables [[noise]] of a testbench: what fluctuates, and how strongly."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from cosim.config import Quantity, numbered, read_table
from cosim.dsp.noise.density import Outside, SpectralDensity, density_from_points
from cosim.dsp.noise.oscillator import (
    amplitude_noise_density,
    jitter_density,
    phase_noise_density,
)
from cosim.errors import InputError, TestbenchError, near_names
from cosim.noise_keys import check_levels, check_one, density_law
from cosim.schema import Frequency, PositiveFrequency, PositiveTime
from cosim.voltage_noises import LineNoise, NetlistNoise, ProbeNoise

Sidebands = tuple[tuple[PositiveFrequency, Annotated[float, Quantity("dBc/Hz")]], ...]


@dataclass(frozen=True, slots=True)
class DetuningNoise:
    """A table [[noise]] with acts_on = "detuning": the qubit's frequency fluctuates.

    Parameters
    ----------
    acts_on : "detuning"
        What fluctuates.
    name : str
        For messages and results.
    t2_star : float or None
        Constant during a gate, of standard deviation sqrt(2)/T2* rad/s, in s.
    deviation : float or None
        Constant during a gate, of this standard deviation in Hz.
    white, flicker : float or None
        One-sided spectral density in Hz^2/Hz: constant, and at 1 Hz of one that falls as
        f^-exponent; their sum where both are given.
    exponent : float
        1 for 1/f noise.
    low, high : float
        Band in Hz outside of which there is none.
    points : tuple of (float, float)
        Frequency in Hz and density in Hz^2/Hz, a power law between each two.
    below, above : "error", "zero", "hold" or "extend"
        What holds outside of the points.
    """

    acts_on: Literal["detuning"]
    name: str = ""
    t2_star: PositiveTime | None = None
    deviation: Annotated[float, Quantity("Hz", above=0.0)] | None = None
    white: Annotated[float, Quantity("Hz^2/Hz")] | None = None
    flicker: Annotated[float, Quantity("Hz^2/Hz")] | None = None
    exponent: float = 1.0
    low: Frequency = 0.0
    high: Frequency = math.inf
    points: tuple[tuple[PositiveFrequency, Annotated[float, Quantity("Hz^2/Hz")]], ...] = ()
    below: Outside = "error"
    above: Outside = "error"

    def __post_init__(self) -> None:
        law = self.white is not None or self.flicker is not None
        given = {
            "'t2_star'": self.t2_star is not None,
            "'deviation'": self.deviation is not None,
            "'white' or 'flicker'": law,
            "'points'": bool(self.points),
        }
        check_one(given, "'t2_star', 'deviation', 'white' and 'flicker', or 'points'")
        check_levels(self.white, self.flicker, self.low, self.high)
        self.density(0.0)

    @property
    def spread(self) -> float:
        """Standard deviation in rad/s of what is constant during a gate; 0 without."""
        if self.t2_star is not None:
            return math.sqrt(2.0) / self.t2_star
        return 2.0 * math.pi * self.deviation if self.deviation is not None else 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """Density of the detuning in (rad/s)^2/Hz; None for what is constant during a gate."""
        del carrier
        factor = (2.0 * math.pi) ** 2
        if self.points:
            f, s = zip(*self.points, strict=True)
            values = [factor * level for level in s]
            return density_from_points(f, values, "rad/s", below=self.below, above=self.above)
        if self.white is None and self.flicker is None:
            return None
        law = (self.white, self.flicker, self.exponent, self.low, self.high)
        return density_law("rad/s", factor, *law)


@dataclass(frozen=True, slots=True)
class AmplitudeNoise:
    """A table [[noise]] with acts_on = "amplitude": the drive's relative amplitude fluctuates.

    Parameters
    ----------
    acts_on : "amplitude"
        What fluctuates.
    name : str
        For messages and results.
    deviation : float or None
        Constant during a gate, of this relative standard deviation.
    white, flicker, exponent, low, high
        As in `DetuningNoise`, in 1/Hz.
    points, below, above
        As in `DetuningNoise`, in 1/Hz.
    sidebands : tuple of (float, float)
        Offset from the carrier in Hz and single-sideband amplitude noise in dBc/Hz.
    """

    acts_on: Literal["amplitude"]
    name: str = ""
    deviation: float | None = None
    white: Annotated[float, Quantity("1/Hz")] | None = None
    flicker: Annotated[float, Quantity("1/Hz")] | None = None
    exponent: float = 1.0
    low: Frequency = 0.0
    high: Frequency = math.inf
    points: tuple[tuple[PositiveFrequency, Annotated[float, Quantity("1/Hz")]], ...] = ()
    sidebands: Sidebands = ()
    below: Outside = "error"
    above: Outside = "error"

    def __post_init__(self) -> None:
        given = {
            "'deviation'": self.deviation is not None,
            "'white' or 'flicker'": self.white is not None or self.flicker is not None,
            "'points'": bool(self.points),
            "'sidebands'": bool(self.sidebands),
        }
        check_one(given, "'deviation', 'white' and 'flicker', 'points', or 'sidebands'")
        if self.deviation is not None and not self.deviation > 0.0:
            raise InputError(f"key 'deviation': wanted more than 0, got {self.deviation:g}")
        check_levels(self.white, self.flicker, self.low, self.high)
        self.density(0.0)

    @property
    def spread(self) -> float:
        """Relative standard deviation of what is constant during a gate; 0 without."""
        return self.deviation or 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """Density of the relative amplitude in 1/Hz; None for what is constant during a gate."""
        del carrier
        outside: dict[str, Outside] = {"below": self.below, "above": self.above}
        if self.sidebands:
            f, levels = zip(*self.sidebands, strict=True)
            return amplitude_noise_density(f, levels, **outside)
        if self.points:
            f, levels = zip(*self.points, strict=True)
            return density_from_points(f, levels, "1", **outside)
        if self.white is None and self.flicker is None:
            return None
        return density_law("1", 1.0, self.white, self.flicker, self.exponent, self.low, self.high)


@dataclass(frozen=True, slots=True)
class PhaseNoise:
    """A table [[noise]] with acts_on = "phase": the carrier's phase fluctuates.

    Parameters
    ----------
    acts_on : "phase"
        What fluctuates.
    name : str
        For messages and results.
    deviation : float or None
        Constant during a gate, of this standard deviation in rad.
    white, flicker, exponent, low, high
        As in `DetuningNoise`, in rad^2/Hz.
    points, below, above
        As in `DetuningNoise`, in rad^2/Hz.
    sidebands : tuple of (float, float)
        Offset from the carrier in Hz and L(f) in dBc/Hz.
    jitter : float or None
        Standard deviation of the time of an edge of the clock in s, independent from edge to edge.
    clock : float or None
        Rate of these edges in Hz.
    """

    acts_on: Literal["phase"]
    name: str = ""
    deviation: Annotated[float, Quantity("rad", above=0.0)] | None = None
    white: Annotated[float, Quantity("rad^2/Hz")] | None = None
    flicker: Annotated[float, Quantity("rad^2/Hz")] | None = None
    exponent: float = 1.0
    low: Frequency = 0.0
    high: Frequency = math.inf
    points: tuple[tuple[PositiveFrequency, Annotated[float, Quantity("rad^2/Hz")]], ...] = ()
    sidebands: Sidebands = ()
    jitter: PositiveTime | None = None
    clock: PositiveFrequency | None = None
    below: Outside = "error"
    above: Outside = "error"

    def __post_init__(self) -> None:
        given = {
            "'deviation'": self.deviation is not None,
            "'white' or 'flicker'": self.white is not None or self.flicker is not None,
            "'points'": bool(self.points),
            "'sidebands'": bool(self.sidebands),
            "'jitter'": self.jitter is not None,
        }
        check_one(given, "'deviation', 'white' and 'flicker', 'points', 'sidebands' or 'jitter'")
        if (self.jitter is None) != (self.clock is None):
            raise InputError("'jitter' and 'clock' go together")
        check_levels(self.white, self.flicker, self.low, self.high)
        self.density(1.0)

    @property
    def spread(self) -> float:
        """Standard deviation in rad of what is constant during a gate; 0 without."""
        return self.deviation or 0.0

    def density(self, carrier: float) -> SpectralDensity | None:
        """Density of the phase in rad^2/Hz, for a carrier in Hz; None for a constant one."""
        outside: dict[str, Outside] = {"below": self.below, "above": self.above}
        if self.jitter is not None and self.clock is not None:
            return jitter_density(self.jitter, carrier, self.clock)
        if self.sidebands:
            f, levels = zip(*self.sidebands, strict=True)
            return phase_noise_density(f, levels, **outside)
        if self.points:
            f, levels = zip(*self.points, strict=True)
            return density_from_points(f, levels, "rad", **outside)
        if self.white is None and self.flicker is None:
            return None
        return density_law("rad", 1.0, self.white, self.flicker, self.exponent, self.low, self.high)


Noise = DetuningNoise | AmplitudeNoise | PhaseNoise | ProbeNoise | LineNoise | NetlistNoise

# Those that add a voltage around the carrier.
VOLTAGES = (ProbeNoise, LineNoise)

KINDS: dict[str, type[Any]] = {
    "detuning": DetuningNoise,
    "amplitude": AmplitudeNoise,
    "phase": PhaseNoise,
    "probe": ProbeNoise,
    "line": LineNoise,
}


def read_noises(tables: object, *, file: str) -> tuple[Noise, ...]:
    """Read the tables [[noise]] of a testbench.

    Parameters
    ----------
    tables : list of mapping
        The tables as tomllib gives them.
    file : str
        The testbench, for messages.

    Returns
    -------
    tuple of Noise
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        If a table does not say what it acts on, gives no data or too much, or a density is
        negative or unordered.
    """
    if not isinstance(tables, Sequence) or isinstance(tables, str):
        raise TestbenchError(f"{file}: wanted tables [[noise]], with two brackets, got {tables!r}")
    found: list[Noise] = []
    for number, table in enumerate(tables, start=1):
        where = numbered(file, "noise", number)
        acts_on = table.get("acts_on") if isinstance(table, Mapping) else None
        if acts_on not in KINDS:
            got = "it is missing" if acts_on is None else f"got {acts_on!r}"
            hint = near_names(str(acts_on), KINDS)
            raise TestbenchError(f"{where}, key 'acts_on': {got}", hint=hint)
        cls = NetlistNoise if "from" in table else KINDS[acts_on]
        found.append(read_table(table, cls, file=file, name="noise", number=number))
    return tuple(found)
