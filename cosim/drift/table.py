"""The table [drift], and its sources as processes that move numbers of the testbench."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Literal, TypeVar

from cosim.calibration.table import GATE_METRICS, needs_circuit
from cosim.circuit.deck import Deck
from cosim.config import Quantity, numbered, read_table
from cosim.drift.reading import (
    Read,
    read_density,
    read_deviation,
    read_rate,
    read_time,
    read_walk,
)
from cosim.drift.structure import (
    Flicker,
    Fluctuation,
    Motion,
    RandomWalk,
    Shaped,
    from_allan,
)
from cosim.dsp.noise.oscillator import frequency_noise_density, phase_noise_density
from cosim.errors import InputError, TestbenchError, UnitError, near_names
from cosim.keys import NumberKey, known_keys, nominal, number_key
from cosim.sensitivity.table import unit_of
from cosim.testbench import Testbench
from cosim.units import parse_parameter, parse_quantity

NAME = "drift"
SOURCES = "drift.source"
CARRIER, DETUNING, TEMPERATURE = "carrier", "detuning", "temperature"
_WORDS = (CARRIER, DETUNING, TEMPERATURE)
_KINDS = ("rate", "random_walk", "flicker", "allan", "sidebands", "per_kelvin", "trim_error")
# Noise that is faster than a trim is averaged by it, and belongs to [[noise]]; in Hz.
DEFAULT_HIGH = 1.0

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class SourceTable:
    """One table [[drift.source]]: what moves after a trim, and how.

    Parameters
    ----------
    key : str
        Dotted key of a number of the testbench or of a parameter of its deck; or "carrier", the
        oscillator's frequency, "detuning", the qubit's, or "temperature", of which others follow.
    name : str
        For results; default: the key.
    rate : str or None
        Linear drift: "0.2 mV/h"; of the carrier also as a part of it, "1e-10 /day".
    random_walk : str or None
        "3 Hz/sqrt(s)".
    flicker : str or None
        Density at 1 Hz of 1/f noise: "10 uV/sqrt(Hz)", "4 Hz^2/Hz".
    allan : tuple of (kind, time, deviation)
        Allan deviations, each with its kind of noise of the frequency: "white", "flicker" or
        "random walk".
    sidebands : tuple of (offset, level)
        Of the carrier: L(f) in dBc/Hz at offsets, straight on below the first.
    per_kelvin : str or None
        How it follows the temperature: "0.3 mV" per kelvin.
    trim_error : str or None
        Standard deviation right after the trim.
    low, high : float or None
        Band of noise in Hz; default: from zero to 1/trim_duration, or 1 Hz without one.
    """

    key: str
    name: str = ""
    rate: str | None = None
    random_walk: str | None = None
    flicker: str | None = None
    allan: tuple[
        tuple[Literal["white", "flicker", "random walk"], str, int | float | str], ...
    ] = ()
    sidebands: tuple[tuple[str, str], ...] = ()
    per_kelvin: int | float | str | None = None
    trim_error: int | float | str | None = None
    low: Annotated[float, Quantity("Hz", least=0.0)] = 0.0
    high: Annotated[float | None, Quantity("Hz", above=0.0)] = None

    def __post_init__(self) -> None:
        if not any(getattr(self, name) not in (None, ()) for name in _KINDS):
            raise InputError(f"wanted one of {', '.join(_KINDS)}: how does '{self.key}' move?")


@dataclass(frozen=True, slots=True)
class DriftTable:
    """The table [drift] without its sources.

    Parameters
    ----------
    horizon : str
        Longest time since a trim that is looked at: "8 h".
    metric : str
        Which infidelity: "as_simulated", "free_frame" or "calibrated"; frame and scale are those
        of the trim and stay.
    limit : float or None
        The mean infidelity that must not be exceeded.
    trim_duration : str or None
        How long a trim takes, for the duty that it costs.
    first : str or None
        Shortest time that is shown; default: a ten-thousandth of the horizon.
    """

    horizon: str
    metric: Literal["as_simulated", "free_frame", "calibrated"] = "as_simulated"
    limit: Annotated[float | None, Quantity("1", above=0.0, most=1.0)] = None
    trim_duration: str | None = None
    first: str | None = None


@dataclass(frozen=True, slots=True)
class Times:
    """The times of a study, in s.

    Parameters
    ----------
    first, horizon : float
        Between which it looks.
    trim : float
        How long a trim takes; NaN if nothing is said.
    """

    first: float
    horizon: float
    trim: float


@dataclass(frozen=True, slots=True)
class Process:
    """Something that moves by itself, and the numbers that it moves.

    Parameters
    ----------
    name : str
        For results.
    unit : str
        Of its moves; "1" for a plain number.
    motion : Motion
        How it moves.
    moves : tuple of (NumberKey, float, float)
        Number, its value at the trim, and how far it goes for a move of 1.
    """

    name: str
    unit: str
    motion: Motion
    moves: tuple[tuple[NumberKey, float, float], ...]

    @property
    def simulated(self) -> bool:
        """Whether the circuit has to run again for it."""
        return any(needs_circuit(key) for key, _, _ in self.moves)


def read_drift(
    bench: Testbench, deck: Deck | None, carrier_frequency: float
) -> tuple[DriftTable, Times, tuple[Process, ...]]:
    """Read the table [drift] of a testbench, and find what its sources move.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck as read; None when it imports a waveform.
    carrier_frequency : float
        In Hz, of which the carrier's fractional drift is a part.

    Returns
    -------
    DriftTable
        What is asked for.
    Times
        Since the trim.
    tuple of Process
        Independent of one another.

    Raises
    ------
    TestbenchError
        If there is no such table or no source, or a key, unit or value is wrong.
    """
    file = bench.source or "the testbench"
    where = f"{file}, table [{NAME}]"
    if NAME not in bench.studies:
        raise TestbenchError(
            f"{file} has no table [{NAME}]",
            hint='add it with horizon = "8 h" and one [[drift.source]] for what moves',
        )
    given = dict(bench.studies[NAME])
    rows = given.pop("source", [])
    table = read_table(given, DriftTable, file=file, name=NAME)
    assert table.metric in GATE_METRICS
    if not isinstance(rows, list) or not rows:
        raise TestbenchError(
            f"{where}: wanted tables [[{SOURCES}]], with two brackets, got {rows!r}",
            hint='each names what moves: key = "detuning", random_walk = "3 Hz/sqrt(s)"',
        )
    times = _times(table, where)
    sources = [
        read_table(row, SourceTable, file=file, name=SOURCES, number=at)
        for at, row in enumerate(rows, start=1)
    ]
    high = DEFAULT_HIGH if math.isnan(times.trim) else 1.0 / times.trim
    processes, following = [], []
    warm = None
    for at, source in enumerate(sources, start=1):
        here = numbered(file, SOURCES, at)
        if source.key == TEMPERATURE:
            if warm is not None or source.per_kelvin is not None:
                raise TestbenchError(f"{here}: one source says how the temperature moves, got two")
            warm = source, _motion(source, _kelvin, high, here)
            continue
        key, sign, read = _moved(bench, deck, source.key, carrier_frequency, here)
        value = nominal(bench, deck, key)
        if value is None:
            raise TestbenchError(f"{here}: '{source.key}' has no value that could move")
        if source.per_kelvin is not None:
            step = _read(read, _as_text(source.per_kelvin), here, "per_kelvin")
            following.append((key, value, sign * step))
        motion = _motion(source, read, high, here)
        if motion != Motion():
            name = source.name or source.key
            processes.append(Process(name, unit_of(key), motion, ((key, value, sign),)))
    if (warm is None) != (not following):
        raise TestbenchError(
            f"{where}: what follows the temperature (per_kelvin) and how the temperature moves "
            f"(key = '{TEMPERATURE}') go together, and one of the two is missing"
        )
    if warm is not None:
        name = warm[0].name or TEMPERATURE
        processes.append(Process(name, "K", warm[1], tuple(following)))
    _refuse_twins(processes, where)
    return table, times, tuple(processes)


def _times(table: DriftTable, where: str) -> Times:
    horizon = _read(read_time, table.horizon, where, "horizon")
    trim, first = math.nan, horizon / 1e4
    if table.trim_duration is not None:
        trim = _read(read_time, table.trim_duration, where, "trim_duration")
    if table.first is not None:
        first = _read(read_time, table.first, where, "first")
    if first >= horizon:
        raise TestbenchError(
            f"{where}, key 'first': must lie before the horizon of {horizon:g} s, got {first:g} s"
        )
    return Times(first, horizon, trim)


def _moved(
    bench: Testbench, deck: Deck | None, text: str, carrier_frequency: float, where: str
) -> tuple[NumberKey, float, Read]:
    """Give the number that a source moves, with which sign, and what reads its texts."""
    if text in (CARRIER, DETUNING):
        if bench.qubit.kind == "operators":
            raise TestbenchError(f"{where}: a system given by operators cannot be detuned")
        key = number_key(bench, deck, "qubit.detuning", where)
        # The frame is the oscillator's: that it is high by x is a qubit that is low by x.
        if text == CARRIER:
            return key, -1.0, lambda raw: _of_carrier(raw, carrier_frequency)
        return key, 1.0, lambda raw: parse_quantity(raw, "Hz")
    if "." not in text:
        names = [*_WORDS, *known_keys(bench, deck)]
        raise TestbenchError(
            f"{where}, key 'key': there is no number '{text}'; {near_names(text, names)}"
        )
    key = number_key(bench, deck, text, where)
    if key.whole:
        raise TestbenchError(f"{where}: '{key.path}' is an integer and cannot drift")
    return key, 1.0, lambda raw: _of_key(raw, key)


def _of_carrier(raw: str, frequency: float) -> float:
    try:
        return float(raw) * frequency
    except ValueError:
        return parse_quantity(raw, "Hz")


def _of_key(raw: str, key: NumberKey) -> float:
    if "degC" in raw:
        raise UnitError(f"{raw!r} is a difference of temperatures", hint="give it in K")
    if key.table == "netlist" and key.field in ("parameters", "instances"):
        return parse_parameter(raw)
    if key.quantity is None or key.quantity.unit == "1":
        try:
            return float(raw)
        except ValueError:
            raise UnitError(f"'{key.path}' is a plain number, got {raw!r}") from None
    return parse_quantity(raw, key.quantity.unit)


def _kelvin(raw: str) -> float:
    if "degC" in raw:
        raise UnitError(f"{raw!r} is a difference of temperatures", hint="give it in K")
    return parse_quantity(raw, "K")


def _motion(source: SourceTable, read: Read, high: float, where: str) -> Motion:
    high = high if source.high is None else source.high
    if high <= source.low:
        raise TestbenchError(
            f"{where}: 'high' must be above 'low', got {source.low:g} and {high:g} Hz"
        )
    found: list[Fluctuation] = []
    if source.random_walk is not None:
        level = _read(lambda raw: read_walk(raw, read), source.random_walk, where, "random_walk")
        found.append(RandomWalk(level))
    if source.flicker is not None:
        level = _read(lambda raw: read_density(raw, read), source.flicker, where, "flicker")
        found.append(Flicker(level, source.low, high))
    for kind, time, deviation in source.allan:
        size = _read(lambda raw: read_deviation(raw, read), deviation, where, "allan")
        found.append(from_allan(kind, size, _read(read_time, time, where, "allan"), high))
    if source.sidebands:
        found.append(_sidebands(source, high, where))
    rate = 0.0
    if source.rate is not None:
        rate = _read(lambda raw: read_rate(raw, read), source.rate, where, "rate")
    error = 0.0
    if source.trim_error is not None:
        error = _read(lambda raw: read_deviation(raw, read), source.trim_error, where, "trim_error")
    return Motion(rate, error, tuple(found))


def _sidebands(source: SourceTable, high: float, where: str) -> Fluctuation:
    if source.key != CARRIER:
        raise TestbenchError(f"{where}, key 'sidebands': they are those of the 'carrier'")
    pairs = [
        (
            _read(lambda raw: parse_quantity(raw, "Hz"), offset, where, "sidebands"),
            _read(lambda raw: parse_quantity(raw, "dBc/Hz"), level, where, "sidebands"),
        )
        for offset, level in source.sidebands
    ]
    try:
        phase = phase_noise_density(
            [f for f, _ in pairs], [level for _, level in pairs], below="extend", above="hold"
        )
    except InputError as error:
        raise TestbenchError(f"{where}, key 'sidebands': {error.message}") from None
    density = frequency_noise_density(phase).scaled(1.0 / (2.0 * math.pi) ** 2, "Hz")
    steep = max(getattr(term, "exponent", 0.0) for term in density.terms[:1])
    if source.low == 0.0 and steep >= 3.0:
        raise TestbenchError(
            f"{where}, key 'sidebands': below {pairs[0][0]:g} Hz the frequency's density would go "
            f"on as 1/f^{steep:.3g}, which has no end",
            hint="say where it ends: low = ...",
        )
    return Shaped(density, source.low, high)


def _read(read: Callable[[Any], T], raw: Any, where: str, key: str) -> T:
    try:
        return read(raw)
    except UnitError as error:
        raise TestbenchError(f"{where}, key '{key}': {error.message}", hint=error.hint) from None


def _as_text(raw: object) -> str:
    return raw if isinstance(raw, str) else repr(raw)


def _refuse_twins(processes: Sequence[Process], where: str) -> None:
    names = [process.name for process in processes]
    twice = [name for at, name in enumerate(names) if name in names[:at]]
    if twice:
        raise TestbenchError(
            f"{where}: there are two sources '{twice[0]}'", hint="give them a name each"
        )
