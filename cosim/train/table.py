"""The table [train], and its table [train.predistortion]."""

import math
from dataclasses import dataclass
from typing import Annotated

from cosim.config import Level, Quantity, read_table
from cosim.dsp.trains import MOST_ORDER, covering_bits, random_bits
from cosim.errors import InputError, TestbenchError
from cosim.schema import PositiveFrequency, PositiveTime, Time
from cosim.testbench import Testbench

NAME = "train"
PREDISTORTION = "predistortion"
# All pairs of slots are compared; so many take seconds.
MOST_SLOTS = 1000
MOST_TAPS = 512
# Behind the steps of a converter's samples a filter can hold its response to this part of its rate.
DEFAULT_BANDWIDTH = 0.3
DEFAULT_EDGE = 0.1

_LENGTHS = ("pattern", "count", "random", "order")


@dataclass(frozen=True, slots=True)
class TrainTable:
    """The table [train] without its pre-distortion.

    Parameters
    ----------
    spacing : float
        Length of a slot in s.
    pattern : str, tuple of float or None
        A pulse (1) or none (0) in each slot, "1101"; or a factor of the pulse for each.
    count : int or None
        In its place: so many pulses, one in each slot.
    random : int or None
        In its place: so many slots, each with a pulse or without, by chance.
    order : int or None
        In its place: a train in which each slot meets every history of so many slots before it.
    seed : int
        Of `random`.
    sources : tuple of str
        Sources that play the pulse, each of which has a [[stimulus]]; default: all that have.
    shift_per_volt : float or None
        In Hz/V: the probe is a line that shifts the qubit's frequency, in place of driving it.
    step : float or None
        Length in s of a step whose settling is measured, too.
    """

    spacing: PositiveTime
    pattern: str | tuple[float | int, ...] | None = None
    count: int | None = None
    random: int | None = None
    order: int | None = None
    seed: int = 1
    sources: tuple[str, ...] = ()
    shift_per_volt: Annotated[float, Quantity("Hz/V")] | None = None
    step: PositiveTime | None = None

    def __post_init__(self) -> None:
        given = [name for name in _LENGTHS if getattr(self, name) is not None]
        if len(given) != 1:
            got = " and ".join(f"'{name}'" for name in given) or "none"
            raise InputError(
                f"wanted one of the keys 'pattern', 'count', 'random' and 'order', got {got}"
            )
        if self.shift_per_volt == 0.0:
            raise InputError("key 'shift_per_volt': wanted a shift other than zero")
        if not 0 <= self.seed < 2**63:
            raise InputError(f"key 'seed': wanted 0 to 2**63 - 1, got {self.seed}")
        if self.order is not None and not 1 <= self.order <= MOST_ORDER:
            raise InputError(f"key 'order': wanted 1 to {MOST_ORDER}, got {self.order}")
        number = self.count if self.count is not None else self.random
        if number is not None and not 2 <= number <= MOST_SLOTS:
            raise InputError(f"wanted 2 to {MOST_SLOTS} slots, got {number}")
        factors = self.factors()
        if not 2 <= len(factors) <= MOST_SLOTS:
            raise InputError(f"wanted 2 to {MOST_SLOTS} slots, got {len(factors)}")
        if not any(factors):
            raise InputError("the train has no pulse in any of its slots")

    def factors(self) -> tuple[float, ...]:
        """Give the factor of the pulse in each slot.

        Returns
        -------
        tuple of float
            0 where there is none.

        Raises
        ------
        InputError
            If the pattern holds anything but 0 and 1, or a factor is not finite.
        """
        if self.count is not None:
            return (1.0,) * self.count
        if self.random is not None:
            return tuple(map(float, random_bits(self.random, self.seed)))
        if self.order is not None:
            return tuple(map(float, covering_bits(self.order)))
        pattern = self.pattern or ()
        for place, symbol in enumerate(pattern, start=1):
            if isinstance(symbol, str) and symbol not in "01":
                raise InputError(f"key 'pattern': slot {place} must be 0 or 1, got '{symbol}'")
            if not isinstance(symbol, str) and not math.isfinite(symbol):
                raise InputError(f"key 'pattern': slot {place} is not finite: {symbol!r}")
        return tuple(float(symbol) for symbol in pattern)


@dataclass(frozen=True, slots=True)
class PredistortionTable:
    """The table [train.predistortion]: a converter, and the filter before it.

    Parameters
    ----------
    taps : int
        Of the filter.
    rate : float
        Samples of the converter per second, in Hz; the slot is a whole number of them.
    full_scale : Level
        Largest voltage or current, of either sign, that the converter gives.
    edge : float or None
        Time in s that a change of the output takes; default: a tenth of a sample.
    bandwidth : float or None
        -3 dB frequency in Hz of the Gaussian filter without delay that the ideal response has;
        default: 0.3 of the rate.
    delay : float or None
        Of the ideal response behind the stimulus, in s; default: that of the least residual.
    regularisation : float
        How much the filter is held to plain delay, over the largest singular value.
    level : float
        Part of the pulse at which the response is measured, in the linear range.
    """

    taps: int
    rate: PositiveFrequency
    full_scale: Level
    edge: PositiveTime | None = None
    bandwidth: PositiveFrequency | None = None
    delay: Time | None = None
    regularisation: Annotated[float, Quantity("1", least=0.0)] = 1e-4
    level: Annotated[float, Quantity("1", above=0.0, most=1.0)] = 0.25

    def __post_init__(self) -> None:
        if not 1 <= self.taps <= MOST_TAPS:
            raise InputError(f"key 'taps': wanted 1 to {MOST_TAPS}, got {self.taps}")
        if self.full_scale.value <= 0.0:
            raise InputError(
                f"key 'full_scale': wanted a positive one, got {self.full_scale.value:g} "
                f"{self.full_scale.unit}"
            )
        if self.edge is not None and self.edge * self.rate > 1.0 + 1e-9:
            raise InputError(
                f"key 'edge': an edge of {self.edge:g} s is longer than the {1 / self.rate:g} s "
                "of one sample"
            )

    @property
    def rise(self) -> float:
        """Time in s that a change of the output takes."""
        return self.edge if self.edge is not None else DEFAULT_EDGE / self.rate

    @property
    def band(self) -> float:
        """-3 dB frequency of the ideal response in Hz."""
        return self.bandwidth if self.bandwidth is not None else DEFAULT_BANDWIDTH * self.rate


def read_train(bench: Testbench) -> tuple[TrainTable, PredistortionTable | None]:
    """Read the table [train] of a testbench.

    Parameters
    ----------
    bench : Testbench
        The testbench.

    Returns
    -------
    TrainTable
        The train.
    PredistortionTable or None
        The filter, where one is asked for.

    Raises
    ------
    TestbenchError
        If there is no such table, or a key or value is wrong.
    """
    file = bench.source or "the testbench"
    if NAME not in bench.studies:
        raise TestbenchError(
            f"{file} has no table [{NAME}]",
            hint='add it with spacing = "50 ns" and count = 8, and a [[stimulus]] for the source '
            "that plays the pulse",
        )
    given = dict(bench.studies[NAME])
    inner = given.pop(PREDISTORTION, None)
    table = read_table(given, TrainTable, file=file, name=NAME)
    if inner is None:
        return table, None
    name = f"{NAME}.{PREDISTORTION}"
    filtering = read_table(inner, PredistortionTable, file=file, name=name)
    samples = table.spacing * filtering.rate
    if abs(samples - round(samples)) > 1e-6 * samples or round(samples) < 1:
        near = [count / table.spacing for count in (math.floor(samples), math.ceil(samples))]
        told = " or ".join(f"{rate * 1e-9:.9g} GHz" for rate in near if rate > 0.0)
        raise TestbenchError(
            f"{file}, table [{name}], key 'rate': a slot of {table.spacing * 1e9:.9g} ns is "
            f"{samples:.9g} samples, wanted a whole number, or each pulse would be sampled "
            "otherwise",
            hint=f"take rate = {told}, or another spacing",
        )
    length = len(table.factors()) * table.spacing
    if filtering.taps / filtering.rate > length:
        raise TestbenchError(
            f"{file}, table [{name}], key 'taps': {filtering.taps} of them last "
            f"{filtering.taps / filtering.rate * 1e9:.9g} ns, longer than the train of "
            f"{length * 1e9:.9g} ns that they are to shape",
            hint="take fewer taps, or a longer train",
        )
    return table, filtering
