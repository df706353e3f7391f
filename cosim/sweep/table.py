"""The table [sweep] of a testbench: corners, grids, Monte Carlo, mismatch, perturbations, trims."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, fields
from typing import Annotated, Any, Literal

from cosim.config import Quantity, check_keys, numbered, read_table
from cosim.errors import InputError, TestbenchError
from cosim.sweep.goal import ASSIGNMENT_ERROR
from cosim.testbench import Bench, ReadoutBench

Raw = float | int | str
"""A number or a text with a unit: which unit is due, the key beside it says."""

# What a sweep may do about the knobs of [calibrate]; the first is the default.
TRIMS = ("none", "frozen", "each", "both")

# A corner's shorthands -> what they stand for.
SHORTHANDS = {
    "sections": "netlist.sections",
    "parameters": "netlist.parameters",
    "instances": "netlist.instances",
    "temperature": "netlist.temperature",
}


@dataclass(frozen=True, slots=True)
class GridTable:
    """Table [[sweep.grid]]: one axis over a number.

    Parameters
    ----------
    key : str
        Dotted key of the number: "qubit.detuning", "netlist.parameters.vdd".
    values : tuple of number or str
        The values themselves.
    start, stop : number or str
        In place of `values`: first and last value.
    count : int or None
        How many, at least 2, both ends counted.
    spacing : "linear" or "log"
        Equal steps, or equal ratios.
    """

    key: str
    values: tuple[Raw, ...] | None = None
    start: Raw | None = None
    stop: Raw | None = None
    count: int | None = None
    spacing: Literal["linear", "log"] = "linear"

    def __post_init__(self) -> None:
        span = (self.start, self.stop, self.count)
        if self.values is not None:
            if any(part is not None for part in span) or self.spacing != "linear":
                raise InputError("give 'values', or 'start', 'stop' and 'count', not both")
            if not self.values:
                raise InputError("key 'values': wanted at least one value")
        elif any(part is None for part in span):
            raise InputError("give 'values', or 'start', 'stop' and 'count'")
        if self.count is not None and self.count < 2:
            raise InputError(f"key 'count': wanted at least 2, got {self.count}")


@dataclass(frozen=True, slots=True)
class VaryTable:
    """Table [[sweep.monte_carlo.vary]]: one number that is drawn.

    Parameters
    ----------
    key : str
        Dotted key of the number.
    distribution : "normal", "uniform" or "lognormal"
        Its distribution.
    mean, sigma : number or str
        Of a normal one, both in the number's unit; the mean is the value in the testbench, or of
        the deck, when it is left out. Of a lognormal one sigma is that of the logarithm.
    median : number or str or None
        Of a lognormal one, with the same default.
    low, high : number or str
        Of a uniform one.
    """

    key: str
    distribution: Literal["normal", "uniform", "lognormal"]
    mean: Raw | None = None
    sigma: Raw | None = None
    median: Raw | None = None
    low: Raw | None = None
    high: Raw | None = None

    def __post_init__(self) -> None:
        needed, further = {
            "normal": (("sigma",), ("mean",)),
            "uniform": (("low", "high"), ()),
            "lognormal": (("sigma",), ("median",)),
        }[self.distribution]
        for name in ("mean", "sigma", "median", "low", "high"):
            given = getattr(self, name) is not None
            if given and name not in (*needed, *further):
                raise InputError(f"a {self.distribution} distribution has no key '{name}'")
            if not given and name in needed:
                raise InputError(f"the key '{name}' is missing")


@dataclass(frozen=True, slots=True)
class MonteCarloTable:
    """Table [sweep.monte_carlo]: samples.

    Parameters
    ----------
    runs : int
        Number of samples at each point of the corners and grids.
    seed : int
        Of all that is drawn.
    method : "random", "latin hypercube" or "sobol"
        How the numbers of `vary` are drawn; mismatch is random in all of them.
    vary : tuple of VaryTable
        The numbers that are drawn.
    """

    runs: int
    seed: int = 1
    method: Literal["random", "latin hypercube", "sobol"] = "random"
    vary: tuple[VaryTable, ...] = ()

    def __post_init__(self) -> None:
        if self.runs < 1:
            raise InputError(f"key 'runs': wanted at least 1, got {self.runs}")
        if not 0 <= self.seed < 2**63:
            raise InputError(f"key 'seed': wanted 0 to 2**63 - 1, got {self.seed}")


@dataclass(frozen=True, slots=True)
class MismatchTable:
    """Table [sweep.mismatch]: every MOS transistor of the deck gets a shift of its own.

    The standard deviation of the difference between two equal transistors is A/sqrt(W L), with
    the whole gate area of each: M. J. M. Pelgrom et al., "Matching properties of MOS
    transistors", IEEE J. Solid-State Circuits 24, 1433 (1989), without the term of distance. One
    transistor of a pair gets 1/sqrt(2) of it.

    Parameters
    ----------
    threshold : float
        A of the threshold voltage in V m: "3.5 mV um".
    current_factor : float
        A of the relative current factor in m: "1 % um".
    per : "pair" or "device"
        What the two were extracted from: the difference of a pair, as publications have it, or
        one transistor against the nominal one.
    """

    threshold: Annotated[float, Quantity("V m", least=0.0)] = 0.0
    current_factor: Annotated[float, Quantity("1 m", least=0.0)] = 0.0
    per: Literal["pair", "device"] = "pair"

    def __post_init__(self) -> None:
        if self.threshold == self.current_factor == 0.0:
            raise InputError("give 'threshold', 'current_factor' or both, above zero")


@dataclass(frozen=True, slots=True)
class PerturbationTable:
    """Table [[sweep.one_at_a_time]]: one number moved down and up while all others stay.

    Parameters
    ----------
    key : str
        Dotted key of the number.
    step : number or str or None
        How far, in the number's unit.
    relative : float or None
        In place of `step`: as a part of the nominal value.
    """

    key: str
    step: Raw | None = None
    relative: float | None = None

    def __post_init__(self) -> None:
        if (self.step is None) == (self.relative is None):
            raise InputError("give 'step' or 'relative', one of them")
        if self.relative is not None and not 0.0 < self.relative < 1.0:
            raise InputError(f"key 'relative': wanted more than 0 and below 1, got {self.relative}")


@dataclass(frozen=True, slots=True)
class CornerTable:
    """Table [sweep.corners.NAME]: settings that go together.

    Parameters
    ----------
    name : str
        Its name.
    settings : tuple of (str, object)
        Dotted key, and what the file says there: a number, a text or a table.
    """

    name: str
    settings: tuple[tuple[str, object], ...]


@dataclass(frozen=True, slots=True)
class ReportTable:
    """Keys of [sweep] itself: what is judged, and what is kept besides the table of runs.

    Parameters
    ----------
    fidelity : "as_simulated", "free_frame", "calibrated" or "assignment_error"
        Which of the three fidelities ranks the runs of a gate; the last of a readout.
    limit : float or None
        Of the infidelity 1 - F_avg, or of the assignment error, for the yield.
    keep : int or "all"
        How many of the worst runs keep their raw waveforms.
    """

    fidelity: Literal["as_simulated", "free_frame", "calibrated", "assignment_error"]
    limit: float | None = None
    keep: int | Literal["all"] = 3

    def __post_init__(self) -> None:
        if self.limit is not None and not 0.0 < self.limit < 1.0:
            raise InputError(
                "key 'limit': wanted an infidelity, or an assignment error, between 0 and 1, got "
                f"{self.limit:g}"
            )
        if self.keep != "all" and self.keep < 0:
            raise InputError(f"key 'keep': wanted a number from 0, or \"all\", got {self.keep}")


@dataclass(frozen=True, slots=True)
class SweepTable:
    """The table [sweep].

    Parameters
    ----------
    corners : tuple of CornerTable
        Named corners; without any the testbench itself is the only one.
    grid : tuple of GridTable
        Axes, of which all combinations are run.
    monte_carlo : MonteCarloTable or None
        Samples at each of these points.
    mismatch : MismatchTable or None
        Drawn anew for each sample.
    one_at_a_time : tuple of PerturbationTable
        In place of samples: the nominal point, and two more for each of these.
    trim : "none", "frozen", "each" or "both"
        Whether the knobs of [calibrate] are set: to what one calibration of the testbench itself
        has found, to what the calibration of each die finds, or runs of both kinds.
    trim_at : tuple of (str, object)
        Dotted key, and what the file says: the conditions of these calibrations where they are
        not those of the testbench or the corner.
    report : ReportTable
        What is judged and kept; it bears on no run.
    """

    report: ReportTable
    corners: tuple[CornerTable, ...] = ()
    grid: tuple[GridTable, ...] = ()
    monte_carlo: MonteCarloTable | None = None
    mismatch: MismatchTable | None = None
    one_at_a_time: tuple[PerturbationTable, ...] = ()
    trim: str = "none"
    trim_at: tuple[tuple[str, object], ...] = ()


def read_sweep(bench: Bench) -> SweepTable:
    """Read the table [sweep] of a testbench.

    Parameters
    ----------
    bench : Bench
        The testbench.

    Returns
    -------
    SweepTable
        What the keys name is not looked up yet.

    Raises
    ------
    TestbenchError
        On an unknown or missing key, or a value of the wrong kind.
    """
    file = bench.source or "the testbench"
    table = bench.studies.get("sweep", {})
    names = ["corners", "grid", "monte_carlo", "mismatch", "one_at_a_time"]
    own = [item.name for item in fields(ReportTable)]
    check_keys(table, [*names, "trim", "trim_at", *own], f"{file}, table [sweep]")
    if not any(table.get(name) for name in names):
        raise TestbenchError(
            f"{file} has no table [sweep] that says what to run",
            hint='for instance [[sweep.grid]] with key = "qubit.detuning" and values = ["0 Hz", '
            '"100 kHz"]',
        )
    found = SweepTable(
        corners=_corners(table.get("corners", {}), bench, f"{file}, table [sweep.corners"),
        grid=_array(table, "grid", GridTable, file),
        monte_carlo=_monte_carlo(table["monte_carlo"], file) if "monte_carlo" in table else None,
        mismatch=(
            read_table(table["mismatch"], MismatchTable, file=file, name="sweep.mismatch")
            if "mismatch" in table
            else None
        ),
        one_at_a_time=_array(table, "one_at_a_time", PerturbationTable, file),
        trim=_trim(table.get("trim", TRIMS[0]), f"{file}, table [sweep]"),
        trim_at=tuple(_dotted(table.get("trim_at", {}), f"{file}, table [sweep.trim_at]")),
        report=_report({name: table[name] for name in own if name in table}, bench, file),
    )
    if found.mismatch is not None and found.monte_carlo is None:
        raise TestbenchError(
            f"{file}, table [sweep.mismatch]: mismatch is drawn per sample, and there is none",
            hint="add [sweep.monte_carlo] with runs = 100",
        )
    if found.one_at_a_time and found.monte_carlo is not None:
        raise TestbenchError(
            f"{file}: [sweep.monte_carlo] and [[sweep.one_at_a_time]] move the same "
            "point in two ways; give one of them"
        )
    if found.one_at_a_time and found.trim != TRIMS[0]:
        raise TestbenchError(
            f"{file}, table [sweep], key 'trim': with [[sweep.one_at_a_time]] it is not said "
            "whether a die is trimmed before or after a number is moved",
            hint="move it by [[sweep.grid]], which comes after the trim, or by a corner, which "
            "comes before",
        )
    if found.trim_at and found.trim == TRIMS[0]:
        raise TestbenchError(
            f"{file}, table [sweep]: 'trim_at' says where the trim is made, and there is none",
            hint='add trim = "each" or "both"',
        )
    return found


def _trim(word: object, where: str) -> str:
    if word not in TRIMS:
        raise TestbenchError(
            f"{where}, key 'trim': wanted {', '.join(repr(name) for name in TRIMS)}, got {word!r}"
        )
    return str(word)


def _dotted(table: object, where: str, prefix: str = "") -> Iterator[tuple[str, object]]:
    """Give keys and values; a key without quotes around its dots is a table within a table."""
    if not isinstance(table, Mapping):
        raise TestbenchError(f"{where}: wanted a table, got {table!r}")
    for key, value in table.items():
        if isinstance(value, Mapping):
            yield from _dotted(value, where, f"{prefix}{key}.")
        else:
            yield f"{prefix}{key}", value


def _array(
    parent: Mapping[str, Any], key: str, cls: type[Any], file: str, prefix: str = "sweep"
) -> Any:
    tables = parent.get(key, [])
    name = f"{prefix}.{key}"
    if not isinstance(tables, list | tuple):
        raise TestbenchError(f"{file}: wanted tables [[{name}]], with two brackets, got {tables!r}")
    found = tuple(
        read_table(table, cls, file=file, name=name, number=number)
        for number, table in enumerate(tables, start=1)
    )
    seen: set[str] = set()
    for number, item in enumerate(found, start=1):
        if item.key in seen:
            raise TestbenchError(f"{numbered(file, name, number)}: '{item.key}' stands there twice")
        seen.add(item.key)
    return found


def _monte_carlo(table: object, file: str) -> MonteCarloTable:
    if isinstance(table, Mapping):
        vary = _array(table, "vary", VaryTable, file, "sweep.monte_carlo")
        table = {**table, "vary": list(vary)}
    return read_table(table, MonteCarloTable, file=file, name="sweep.monte_carlo")


def _report(table: Mapping[str, Any], bench: Bench, file: str) -> ReportTable:
    readout = isinstance(bench, ReadoutBench)
    default = ASSIGNMENT_ERROR if readout else "free_frame"
    report: ReportTable = read_table(
        {"fidelity": default, **table}, ReportTable, file=file, name="sweep"
    )
    if readout != (report.fidelity == ASSIGNMENT_ERROR):
        kind = "readout, which is ranked by its assignment error" if readout else "gate"
        raise TestbenchError(
            f"{file}, table [sweep], key 'fidelity': '{report.fidelity}' is not one of a {kind}",
            hint="leave it out",
        )
    return report


def _corners(tables: object, bench: Bench, where: str) -> tuple[CornerTable, ...]:
    population = f"{'readout' if isinstance(bench, ReadoutBench) else 'qubit'}.thermal_population"
    shorthands = {**SHORTHANDS, "thermal_population": population}
    if not isinstance(tables, Mapping):
        raise TestbenchError(f"{where}]: wanted tables [sweep.corners.NAME], got {tables!r}")
    found = []
    for name, table in tables.items():
        if not isinstance(table, Mapping):
            raise TestbenchError(f"{where}.{name}]: wanted a table, got {table!r}")
        settings: list[tuple[str, object]] = []
        for key, value in table.items():
            if key in shorthands:
                settings.append((shorthands[key], value))
            elif "." not in key and isinstance(value, Mapping):
                # qubit.t1 = "1 ms" without quotes around the key is a table within a table.
                settings.extend((f"{key}.{inner}", item) for inner, item in value.items())
            else:
                settings.append((key, value))
        found.append(CornerTable(name, tuple(settings)))
    return tuple(found)
