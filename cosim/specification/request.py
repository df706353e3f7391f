"""The table [specify] of a gate: the target, the ideal pulse, and which blocks there are."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from cosim.config import Quantity, read_table
from cosim.errors import InputError, TestbenchError, near_names
from cosim.schema import PositiveTime
from cosim.specification.blocks import (
    AmplitudeNoiseTable,
    AmplitudeTable,
    Block,
    CarrierTable,
    DacBitsTable,
    DacRateTable,
    FlickerNoiseTable,
    ImageTable,
    LeakageTable,
    PhaseNoiseTable,
    PhaseTable,
    SpursTable,
    TimingTable,
    WidebandTable,
)
from cosim.units import parse_quantity


@dataclass(frozen=True, slots=True)
class BlockKind:
    """A block that may be specified.

    Parameters
    ----------
    label : str
        For people.
    table : type
        Its table.
    unit : str
        Unit of its 'value'.
    scale : "linear", "square", "decibel", "bits" or "inverse"
        How the value follows from the error x that the block leaves: x itself, its square, in
        decibels, as a number of bits of which x is the step over the whole range, or 1/x.
    """

    label: str
    table: type[Any]
    unit: str
    scale: Literal["linear", "square", "decibel", "bits", "inverse"]

    def error(self, value: float) -> float:
        """Give the error x that belongs to a value in the block's unit."""
        return _FORWARD[self.scale](value)

    def value(self, error: float) -> float:
        """Give the value in the block's unit that belongs to an error x, above 0."""
        return _BACK[self.scale](error)


_FORWARD: Mapping[str, Callable[[float], float]] = {
    "linear": float,
    "square": math.sqrt,
    "decibel": lambda value: 10.0 ** (value / 20.0),
    "bits": lambda value: 2.0**-value,
    "inverse": lambda value: 1.0 / value,
}
_BACK: Mapping[str, Callable[[float], float]] = {
    "linear": float,
    "square": lambda error: error**2,
    "decibel": lambda error: 20.0 * math.log10(error),
    "bits": lambda error: -math.log2(error),
    "inverse": lambda error: 1.0 / error,
}

BLOCKS: Mapping[str, BlockKind] = {
    "amplitude": BlockKind("amplitude", AmplitudeTable, "1", "linear"),
    "phase": BlockKind("phase error", PhaseTable, "rad", "linear"),
    "carrier": BlockKind("carrier frequency", CarrierTable, "Hz", "linear"),
    "timing": BlockKind("duration", TimingTable, "s", "linear"),
    "jitter": BlockKind("jitter of an edge", TimingTable, "s", "linear"),
    "image": BlockKind("image", ImageTable, "dBc", "decibel"),
    "leakage": BlockKind("carrier leakage", LeakageTable, "dBc", "decibel"),
    "amplitude_noise": BlockKind("amplitude noise", AmplitudeNoiseTable, "1/Hz", "square"),
    "flicker_noise": BlockKind("1/f of amplitude", FlickerNoiseTable, "1/Hz", "square"),
    "phase_noise": BlockKind("phase noise", PhaseNoiseTable, "dBc/Hz", "decibel"),
    "spurs": BlockKind("spur", SpursTable, "dBc", "decibel"),
    "wideband": BlockKind("noise at the qubit", WidebandTable, "V^2/Hz", "square"),
    "dac_bits": BlockKind("bits of the DAC", DacBitsTable, "1", "bits"),
    "dac_rate": BlockKind("rate of the DAC", DacRateTable, "Hz", "inverse"),
}


@dataclass(frozen=True, slots=True)
class PulseTable:
    """Table [specify.pulse]: the ideal pulse.

    Parameters
    ----------
    shape : "square", "raised cosine" or "gaussian"
        Of the envelope.
    duration : float
        From its start to its end, edges included, in s.
    edge : float or None
        Of a raised cosine: rise time, and fall time, in s; default: half of the duration.
    sigma : float or None
        Of a Gaussian, in s; default: a quarter of the duration. It begins and ends at zero.
    drag : float
        Q = drag (dI/dt)/alpha of a transmon; 0.5 or 1 are common.
    carrier : float or "qubit"
        In Hz; "qubit" calibrates it.
    """

    shape: Literal["square", "raised cosine", "gaussian"]
    duration: PositiveTime
    edge: PositiveTime | None = None
    sigma: PositiveTime | None = None
    drag: float = 0.0
    carrier: Annotated[float | str, Quantity("Hz", above=0.0, words=("qubit",))] = "qubit"

    def __post_init__(self) -> None:
        for name, shape in (("edge", "raised cosine"), ("sigma", "gaussian")):
            if getattr(self, name) is not None and self.shape != shape:
                raise InputError(f"key '{name}' goes with shape = \"{shape}\"")
        if self.edge is not None and self.edge > 0.5 * self.duration * (1.0 + 1e-9):
            raise InputError(
                f"key 'edge': wanted at most half of the duration, {self.duration / 2:g} s, got "
                f"{self.edge:g} s"
            )
        if self.sigma is not None and not self.duration / 20 <= self.sigma <= self.duration:
            raise InputError(
                f"key 'sigma': wanted a twentieth of the duration to all of it, got {self.sigma:g}"
            )
        if self.drag != 0.0 and self.shape == "square":
            raise InputError("key 'drag': a square pulse has no slope to make a quadrature of")


@dataclass(frozen=True, slots=True)
class SpecifyTable:
    """What stands in [specify] itself.

    Parameters
    ----------
    target : float
        Infidelity 1 - F_avg that everything together may cost.
    allocate : "weights" or "power"
        How it is shared: by the weights (all alike by default), or so that the power is least.
    frame : "qubit" or "oscillator"
        What the carrier's frequency and phase noise are measured against: the qubit's own frame,
        or the oscillator itself, as where later pulses and the readout use the same one.
    samples : int
        Seeded samples of all noise together in the verification.
    seed : int
        Their seed.
    """

    target: float
    allocate: Literal["weights", "power"] = "weights"
    frame: Literal["qubit", "oscillator"] = "qubit"
    samples: int = 256
    seed: int = 1

    def __post_init__(self) -> None:
        if not 1e-9 <= self.target <= 0.1:
            raise InputError(
                f"key 'target': wanted an infidelity of 1e-9 to 0.1, got {self.target:g}"
            )
        if not 64 <= self.samples <= 100_000:
            raise InputError(f"key 'samples': wanted 64 to 100000, got {self.samples}")
        if not 0 <= self.seed < 2**63:
            raise InputError(f"key 'seed': wanted 0 to 2**63 - 1, got {self.seed}")


@dataclass(frozen=True, slots=True)
class Request:
    """All of [specify].

    Parameters
    ----------
    table : SpecifyTable
        What stands in it directly.
    pulse : PulseTable
        Its pulse.
    blocks : mapping of str to Block
        The tables of the blocks, in the order of `BLOCKS`; what has none is taken as perfect.
    powers : mapping of str to (float, float, float)
        Of those with a power law: a in W, n, and the error x at which it takes a.
    """

    table: SpecifyTable
    pulse: PulseTable
    blocks: Mapping[str, Block]
    powers: Mapping[str, tuple[float, float, float]]


def read_request(raw: Mapping[str, Any], file: str) -> Request:
    """Read the table [specify] of a gate.

    Parameters
    ----------
    raw : mapping
        As tomllib gives it.
    file : str
        The testbench, for messages.

    Returns
    -------
    Request
        In SI units.

    Raises
    ------
    TestbenchError
        If a key or a value is wrong, there is no pulse or no block, a power law has the wrong sign,
        or one is missing where the power is to be least.
    """
    where = f"{file}, table [specify]"
    own = ("target", "allocate", "frame", "samples", "seed")
    for name in raw:
        if name not in (*own, "pulse", *BLOCKS):
            raise TestbenchError(
                f"{where}: unknown key '{name}'; {near_names(name, [*own, 'pulse', *BLOCKS])}"
            )
    table = read_table(
        {name: raw[name] for name in own if name in raw}, SpecifyTable, file=file, name="specify"
    )
    if "pulse" not in raw:
        raise TestbenchError(f"{file}: the table [specify.pulse] is missing")
    pulse = read_table(raw["pulse"], PulseTable, file=file, name="specify.pulse")
    blocks: dict[str, Block] = {
        name: read_table(raw[name], kind.table, file=file, name=f"specify.{name}")
        for name, kind in BLOCKS.items()
        if name in raw
    }
    if not blocks:
        raise TestbenchError(
            f"{where}: wanted a table for each block that is to be specified, got none",
            hint="such as [specify.amplitude] or [specify.jitter]; a table may be empty",
        )
    powers = {name: _power(name, block, file) for name, block in blocks.items() if block.power}
    open_ones = [name for name, block in blocks.items() if block.value is None]
    missing = [name for name in open_ones if name not in powers]
    if table.allocate == "power" and missing:
        raise TestbenchError(
            f'{where}: allocate = "power" wants a power law of each block that is not given, and '
            f"[specify.{missing[0]}] has none",
            hint="power = { a = \"1 mW\", n = 2, at = ... }, or a 'value' that is kept",
        )
    return Request(table, pulse, blocks, powers)


def _power(name: str, block: Block, file: str) -> tuple[float, float, float]:
    kind, power = BLOCKS[name], block.power
    assert power is not None
    try:
        at = parse_quantity(power.at, kind.unit)
        reference = kind.error(at)
    except (InputError, ValueError, ZeroDivisionError) as error:
        raise TestbenchError(
            f"{file}, table [specify.{name}], key 'power.at': {getattr(error, 'message', error)}"
        ) from None
    if not 0.0 < reference < math.inf:
        raise TestbenchError(
            f"{file}, table [specify.{name}], key 'power.at': wanted a positive {kind.label}, got "
            f"{power.at!r}"
        )
    return power.a, power.n, reference
