"""The table [specify] of a readout: the target, and a table for each block."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Annotated, Any

from cosim.config import Quantity, read_table
from cosim.errors import InputError, TestbenchError, near_names
from cosim.schema import PositiveFrequency, PositiveTime


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadoutBlockTable:
    """What the table of every block of a readout has.

    Parameters
    ----------
    weight : float
        Part of the assignment error that the block gets beside the others.
    """

    weight: float = 1.0

    def __post_init__(self) -> None:
        if not 0.0 < self.weight < math.inf:
            raise InputError(f"key 'weight': wanted more than 0, got {self.weight:g}")


@dataclass(frozen=True, slots=True, kw_only=True)
class NoiseTable(ReadoutBlockTable):
    """Table [specify.noise]: what the chain adds at its input, behind the stages of [readout].

    Parameters
    ----------
    weight
        As in `ReadoutBlockTable`.
    value : float or None
        Given noise temperature in K.
    """

    value: Annotated[float, Quantity("K", least=0.0)] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class IntegrationTable(ReadoutBlockTable):
    """Table [specify.integration]: how long the signal is integrated, from the window's start.

    Parameters
    ----------
    weight
        As in `ReadoutBlockTable`.
    value : float or None
        Given length in s. Without the table it is that of [readout].
    """

    value: PositiveTime | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BandwidthTable(ReadoutBlockTable):
    """Table [specify.bandwidth]: a single pole of the chain, to both sides of the carrier.

    Parameters
    ----------
    weight
        As in `ReadoutBlockTable`.
    value : float or None
        Given offset of the -3 dB point in Hz.
    """

    value: PositiveFrequency | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class AdcTable(ReadoutBlockTable):
    """Table [specify.adc]: the converters of I and Q.

    Parameters
    ----------
    weight
        As in `ReadoutBlockTable`.
    rate : float
        In Hz.
    value : int or None
        Given number of bits.
    full_scale : float or None
        Given peak-to-peak range in V; default: the signal and four standard deviations of the
        noise to both sides.
    """

    rate: PositiveFrequency
    value: int | None = None
    full_scale: Annotated[float, Quantity("V", above=0.0)] | None = None

    def __post_init__(self) -> None:
        ReadoutBlockTable.__post_init__(self)
        if self.value is not None and not 1 <= self.value <= 24:
            raise InputError(f"key 'value': wanted 1 to 24 bits, got {self.value}")


@dataclass(frozen=True, slots=True)
class ReadoutTarget:
    """What stands in [specify] itself.

    Parameters
    ----------
    target : float
        Assignment error (P(1|0) + P(0|1))/2 of everything together.
    """

    target: float

    def __post_init__(self) -> None:
        if not 1e-7 <= self.target < 0.5:
            raise InputError(
                f"key 'target': wanted an assignment error of 1e-7 to 0.5, got {self.target:g}"
            )


READOUT_BLOCKS: Mapping[str, type[Any]] = {
    "noise": NoiseTable,
    "integration": IntegrationTable,
    "bandwidth": BandwidthTable,
    "adc": AdcTable,
}


@dataclass(frozen=True, slots=True)
class ReadoutRequest:
    """All of [specify] of a readout.

    Parameters
    ----------
    target : float
        Assignment error.
    noise : NoiseTable or None
        None: an amplifier that adds nothing.
    integration : IntegrationTable or None
        None: over the window of [readout].
    bandwidth : BandwidthTable or None
        None: without an end.
    adc : AdcTable or None
        None: without converters.
    """

    target: float
    noise: NoiseTable | None = None
    integration: IntegrationTable | None = None
    bandwidth: BandwidthTable | None = None
    adc: AdcTable | None = None

    @property
    def weights(self) -> dict[str, float]:
        """Weight of each block whose limit is sought, in the order in which they are worked out."""
        tables = {name: getattr(self, name) for name in READOUT_BLOCKS}
        return {
            name: table.weight
            for name, table in tables.items()
            if table is not None and table.value is None
        }


def read_readout_request(raw: Mapping[str, Any], file: str) -> ReadoutRequest:
    """Read the table [specify] of a readout.

    Parameters
    ----------
    raw : mapping
        As tomllib gives it.
    file : str
        The testbench, for messages.

    Returns
    -------
    ReadoutRequest
        In SI units.

    Raises
    ------
    TestbenchError
        If a key or a value is wrong, or no block is to be specified.
    """
    where = f"{file}, table [specify]"
    for name in raw:
        if name != "target" and name not in READOUT_BLOCKS:
            known = ["target", *READOUT_BLOCKS]
            raise TestbenchError(
                f"{where}: unknown key '{name}'; {near_names(name, known)}",
                hint="with [readout] the blocks are noise, integration, bandwidth and adc",
            )
    own = {name: raw[name] for name in raw if name == "target"}
    target = read_table(own, ReadoutTarget, file=file, name="specify").target
    tables = {
        name: read_table(raw[name], cls, file=file, name=f"specify.{name}")
        for name, cls in READOUT_BLOCKS.items()
        if name in raw
    }
    request = ReadoutRequest(
        target,
        tables.get("noise"),
        tables.get("integration"),
        tables.get("bandwidth"),
        tables.get("adc"),
    )
    if not request.weights:
        raise TestbenchError(
            f"{where}: wanted a table for each block that is to be specified, got none without a "
            "'value'",
            hint="such as [specify.noise] or [specify.adc]; a table may be empty but for a rate",
        )
    return request
