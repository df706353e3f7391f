"""The tables of the blocks of a gate that may be specified, [specify.amplitude] and its like."""

import math
from dataclasses import dataclass
from typing import Annotated

from cosim.config import NameOrTable, Quantity
from cosim.errors import InputError
from cosim.schema import Frequency, PositiveFrequency, PositiveTime, Resistance, Temperature

Duration = Annotated[float, Quantity("s", least=0.0)]
Below = Annotated[float, Quantity("dBc", least=-300.0, most=0.0)]
Mask = tuple[tuple[PositiveFrequency, Annotated[float, Quantity("dBc/Hz")]], ...]


@dataclass(frozen=True, slots=True)
class PowerTable:
    """What a block costs in power: P = a (x/at)^-n, x its limit as the error that it leaves.

    Parameters
    ----------
    a : float
        Power in W of a block that just meets `at`.
    n : float
        How steeply it rises with a tighter limit, above 0: an amplitude twice as small takes 2^n
        times the power.
    at : float or str
        The limit at which the block takes `a`, in the unit of the block's own 'value'.
    """

    a: Annotated[float, Quantity("W")]
    n: float
    at: float | str

    def __post_init__(self) -> None:
        if not 0.0 < self.a < math.inf:
            raise InputError(f"wanted a power 'a' above 0 W, got {self.a:g} W")
        if not 0.0 < self.n < math.inf:
            raise InputError(
                f"wanted an exponent 'n' above 0, got {self.n:g}",
                hint="P = a (x/at)^-n: a tighter limit must take more power, or the least power is "
                "that of the tightest limit",
            )


Power = Annotated[PowerTable | None, NameOrTable(PowerTable)]


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockTable:
    """What the table of every block has.

    Parameters
    ----------
    weight : float
        Part of the infidelity that the block gets beside the others.
    power : PowerTable or None
        What it costs in power.
    """

    weight: float = 1.0
    power: Power = None

    def __post_init__(self) -> None:
        if not 0.0 < self.weight < math.inf:
            raise InputError(f"key 'weight': wanted more than 0, got {self.weight:g}")
        if isinstance(self.power, str):
            raise InputError(
                f"key 'power': wanted a table, got {self.power!r}",
                hint='power = { a = "1 mW", n = 2, at = ... }',
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeTable(BlockTable):
    """Table [specify.amplitude]: how far the amplitude may be off.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given limit, a ratio.
    """

    value: Annotated[float, Quantity("1", above=0.0, most=1.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseTable(BlockTable):
    """Table [specify.phase]: how far the phase of the carrier may be off.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given limit in rad.
    """

    value: Annotated[float, Quantity("rad", above=0.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class CarrierTable(BlockTable):
    """Table [specify.carrier]: how far the carrier's frequency may be off.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given limit in Hz.
    """

    value: PositiveFrequency | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TimingTable(BlockTable):
    """Table [specify.timing]: how far the duration may be off, or (jitter) each of its edges.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given limit in s; of jitter the standard deviation of an edge.
    """

    value: PositiveTime | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ImageTable(BlockTable):
    """Table [specify.image]: what the modulator makes of the mirrored signal.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given level of the image in dBc.
    intermediate_frequency : float
        Qubit less oscillator in Hz: the image lies twice as far away. 0: direct conversion, where
        it falls on the signal.
    """

    value: Below | None = None
    intermediate_frequency: Frequency = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class LeakageTable(BlockTable):
    """Table [specify.leakage]: the carrier that is there without a signal.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given level in dBc of the pulse's peak, that is minus the extinction.
    before, after : float
        Time in s before and after the pulse in which it acts too.
    """

    value: Below | None = None
    before: Duration = 0.0
    after: Duration = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeNoiseTable(BlockTable):
    """Table [specify.amplitude_noise]: white noise of the relative amplitude.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given one-sided density in 1/Hz.
    """

    value: Annotated[float, Quantity("1/Hz", above=0.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class FlickerNoiseTable(BlockTable):
    """Table [specify.flicker_noise]: 1/f noise of the relative amplitude.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    low : float
        Lowest frequency in Hz that counts: one over the time since the last calibration.
    value : float or None
        Given one-sided density at 1 Hz in 1/Hz.
    """

    low: PositiveFrequency
    value: Annotated[float, Quantity("1/Hz", above=0.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PhaseNoiseTable(BlockTable):
    """Table [specify.phase_noise]: L(f), a shape whose level is sought.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    low : float
        Lowest offset in Hz that counts: one over the time since the phase was last referred to.
    offset : float
        Offset in Hz at which the level is told.
    corner : float
        Half-bandwidth f0/(2 Q) in Hz of a Leeson shape, below which L falls as 1/f^2.
    flicker_corner : float
        Below it in Hz the shape is steeper by 1/f.
    high : float
        Highest offset in Hz that counts; where the oscillator is the reference, a floor without an
        end would cost without end.
    points : tuple of (float, float)
        In place of these two: offset in Hz and L in dBc/Hz of a shape, straight lines between them
        on logarithmic axes, held above the last and extended below the first.
    value : float or None
        Given level at `offset` in dBc/Hz.
    """

    low: PositiveFrequency
    offset: PositiveFrequency = 1e6
    corner: PositiveFrequency = 1e6
    flicker_corner: Annotated[float, Quantity("Hz", least=0.0)] = 0.0
    high: PositiveFrequency = math.inf
    points: Mask = ()
    value: Annotated[float, Quantity("dBc/Hz")] | None = None

    def __post_init__(self) -> None:
        BlockTable.__post_init__(self)
        if not self.low < self.high:
            raise InputError(f"key 'low': wanted less than 'high', got {self.low:g} Hz")
        if self.points:
            offsets = [offset for offset, _ in self.points]
            if len(offsets) < 2 or sorted(set(offsets)) != offsets:
                raise InputError("key 'points': wanted at least two offsets that rise")
            if not offsets[0] <= self.offset <= offsets[-1]:
                raise InputError(
                    f"key 'offset': wanted one between the points, {offsets[0]:g} to "
                    f"{offsets[-1]:g} Hz, got {self.offset:g} Hz"
                )


@dataclass(frozen=True, slots=True, kw_only=True)
class SpursTable(BlockTable):
    """Table [specify.spurs]: one unwanted tone of a phase that is not known.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    offsets : tuple of float
        Offsets from the carrier in Hz at which the mask is worked out; default: a few around the
        pulse's own bandwidth and, of a transmon, its second transition.
    value : float or None
        Given level in dBc of the pulse's peak, at the offset where it harms most.
    """

    offsets: tuple[Frequency, ...] = ()
    value: Below | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class WidebandTable(BlockTable):
    """Table [specify.wideband]: noise that reaches the qubit beside the signal.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    source : float
        Temperature in K of the matched source at the warm end of the line.
    temperature : float
        Temperature in K of the attenuator between source and qubit.
    impedance : float
        Of the line in ohm.
    value : float or None
        Given one-sided density of the incident wave at the qubit in V^2/Hz.
    """

    source: Temperature = 300.0
    temperature: Temperature = 0.02
    impedance: Resistance = 50.0
    value: Annotated[float, Quantity("V^2/Hz", above=0.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class DacBitsTable(BlockTable):
    """Table [specify.dac_bits]: the rounding of the converters of I and Q.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    rate : float
        Of the converters in Hz.
    headroom : float
        Positive full scale over the pulse's peak, at least 1.
    value : int or None
        Given number of bits.
    """

    rate: PositiveFrequency
    headroom: float = 1.0
    value: int | None = None

    def __post_init__(self) -> None:
        BlockTable.__post_init__(self)
        if not 1.0 <= self.headroom < math.inf:
            raise InputError(f"key 'headroom': wanted at least 1, got {self.headroom:g}")
        if self.value is not None and not 1 <= self.value <= 32:
            raise InputError(f"key 'value': wanted 1 to 32 bits, got {self.value}")


@dataclass(frozen=True, slots=True, kw_only=True)
class DacRateTable(BlockTable):
    """Table [specify.dac_rate]: the staircase that converters make of the pulse.

    Parameters
    ----------
    weight, power
        As in `BlockTable`.
    value : float or None
        Given rate in Hz.
    """

    value: PositiveFrequency | None = None


Block = (
    AmplitudeTable
    | PhaseTable
    | CarrierTable
    | TimingTable
    | ImageTable
    | LeakageTable
    | AmplitudeNoiseTable
    | FlickerNoiseTable
    | PhaseNoiseTable
    | SpursTable
    | WidebandTable
    | DacBitsTable
    | DacRateTable
)
