"""The tables [[stimulus]]: what drives the deck's sources in place of their own values."""

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from cosim.circuit.netlist import Deck, DeckFile
from cosim.circuit.stimulus import sampling_error, with_stimuli
from cosim.config import Level, numbered, read_table
from cosim.dsp.patterns import EdgeShape, clocked_words, from_points, repeat_pattern
from cosim.errors import InputError, TestbenchError
from cosim.formats.columns import read_columns
from cosim.schema import PositiveFrequency, PositiveTime, Time
from cosim.waveform import Waveform

# Part of a stimulus' range that may be lost between two time points without a notice: an edge of
# two and a half steps.
COARSE = 0.1


@dataclass(frozen=True, slots=True)
class FileStimulus:
    """One source driven by a column of a text file.

    Parameters
    ----------
    source : str
        The source: "vin", "x1.vin".
    file : str
        Text file with columns, relative to the testbench.
    time, value : str or None
        Names of the columns; default: the first, and the only other one.
    time_unit, unit : str or None
        Units of the columns, such as "ns" and "mV", where the file names none.
    """

    source: str
    file: str
    time: str | None = None
    value: str | None = None
    time_unit: str | None = None
    unit: str | None = None

    def __post_init__(self) -> None:
        _unit_of((self.source,))

    @property
    def driven(self) -> tuple[str, ...]:
        """Names of the sources."""
        return (self.source,)


@dataclass(frozen=True, slots=True)
class PointsStimulus:
    """One source driven along straight lines through points.

    Parameters
    ----------
    source : str
        The source: "vin", "x1.vin".
    points : tuple of (float, Level)
        Time in s, rising, and value.
    """

    source: str
    points: tuple[tuple[Time, Level], ...]

    def __post_init__(self) -> None:
        self.waveforms(0.0)

    @property
    def driven(self) -> tuple[str, ...]:
        """Names of the sources."""
        return (self.source,)

    def waveforms(self, stop: float) -> dict[str, Waveform]:
        """Give the waveform by its source; the time in s at which the run ends does not matter."""
        unit = _unit_of(self.driven, *(level for _, level in self.points))
        points = [(time, level.value) for time, level in self.points]
        return {self.source: from_points(points, unit=unit)}


@dataclass(frozen=True, slots=True)
class PatternStimulus:
    """One source that plays a pattern of bits.

    Parameters
    ----------
    source : str
        The source: "vin", "x1.vin".
    pattern : str
        Bits in the order of time, "0110".
    period : float
        Duration of one bit in s.
    low, high : Level
        Levels of 0 and 1.
    edge : float
        Duration of a change of level in s; it begins where its bit begins.
    start : float
        Time in s at which the first bit begins; before, its level holds.
    repeat : bool
        Whether the pattern goes on to the end of the run; else the last level holds.
    shape : "linear" or "smooth"
        Straight edges, or a raised cosine.
    """

    source: str
    pattern: str
    period: PositiveTime
    low: Level
    high: Level
    edge: PositiveTime
    start: Time = 0.0
    repeat: bool = False
    shape: EdgeShape = "linear"

    def __post_init__(self) -> None:
        self.waveforms(self.start)

    @property
    def driven(self) -> tuple[str, ...]:
        """Names of the sources."""
        return (self.source,)

    def waveforms(self, stop: float) -> dict[str, Waveform]:
        """Give the waveform by its source, for a run that ends at a time in s."""
        wave = repeat_pattern(
            self.pattern,
            self.period,
            low=self.low.value,
            high=self.high.value,
            edge=self.edge,
            start=self.start,
            stop=stop if self.repeat else None,
            shape=self.shape,
            unit=_unit_of(self.driven, self.low, self.high),
        )
        return {self.source: wave}


@dataclass(frozen=True, slots=True)
class WordsStimulus:
    """The sources of a bus that plays words, one per clock period.

    Parameters
    ----------
    sources : tuple of str
        The source of each line, the least significant bit first.
    words : tuple of int
        Unsigned words in the order of time.
    clock : float
        Words per second in Hz.
    low, high : Level
        Levels of 0 and 1.
    edge, start, repeat, shape
        As in `PatternStimulus`, for all lines.
    """

    sources: tuple[str, ...]
    words: tuple[int, ...]
    clock: PositiveFrequency
    low: Level
    high: Level
    edge: PositiveTime
    start: Time = 0.0
    repeat: bool = False
    shape: EdgeShape = "linear"

    def __post_init__(self) -> None:
        self.waveforms(self.start)

    @property
    def driven(self) -> tuple[str, ...]:
        """Names of the sources."""
        return self.sources

    def waveforms(self, stop: float) -> dict[str, Waveform]:
        """Give the waveforms by their sources, for a run that ends at a time in s."""
        waves = clocked_words(
            self.words,
            self.clock,
            len(self.sources),
            low=self.low.value,
            high=self.high.value,
            edge=self.edge,
            start=self.start,
            stop=stop if self.repeat else None,
            shape=self.shape,
            unit=_unit_of(self.sources, self.low, self.high),
        )
        return dict(zip(self.sources, waves, strict=True))


Stimulus = FileStimulus | PointsStimulus | PatternStimulus | WordsStimulus

_KINDS: dict[str, type[Stimulus]] = {
    "file": FileStimulus,
    "points": PointsStimulus,
    "pattern": PatternStimulus,
    "words": WordsStimulus,
}


def read_stimuli(tables: object, *, file: str) -> tuple[Stimulus, ...]:
    """Read the tables [[stimulus]] of a testbench.

    Parameters
    ----------
    tables : list of mapping
        The tables as tomllib gives them.
    file : str
        The testbench, for messages.

    Returns
    -------
    tuple of Stimulus
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        If a table does not say what it plays, is wrong, or names a source that has one already.
    """
    if not isinstance(tables, Sequence) or isinstance(tables, str):
        raise TestbenchError(
            f"{file}: wanted tables [[stimulus]], with two brackets, got {tables!r}"
        )
    found: list[Stimulus] = []
    owners: dict[str, int] = {}
    for number, table in enumerate(tables, start=1):
        where = numbered(file, "stimulus", number)
        stimulus = read_table(table, _kind(table, where), file=file, name="stimulus", number=number)
        for source in stimulus.driven:
            if source.lower() in owners:
                raise TestbenchError(
                    f"{where}: the source '{source}' has a stimulus already, in number "
                    f"{owners[source.lower()]}"
                )
            owners[source.lower()] = number
        found.append(stimulus)
    return tuple(found)


def apply_stimuli(
    deck: Deck, stimuli: Sequence[Stimulus], *, folder: Path, stop: float, step: float
) -> tuple[Deck, tuple[str, ...]]:
    """Let the sources of a deck follow a testbench's stimuli.

    Parameters
    ----------
    deck : Deck
        The deck.
    stimuli : sequence of Stimulus
        From `read_stimuli`.
    folder : Path
        Folder that their files are relative to.
    stop, step : float
        End and time step of the run in s.

    Returns
    -------
    Deck
        With the stimuli, and their files among those that were read.
    tuple of str
        Notices about edges that the time step does not resolve.

    Raises
    ------
    UnknownNameError
        If a source does not exist.
    InputError
        If a name is no independent source, or a file cannot be read or has the wrong unit.
    """
    waves: dict[str, Waveform] = {}
    files: dict[str, DeckFile] = {}
    for stimulus in stimuli:
        waves |= stimulus_waves(stimulus, folder=folder, stop=stop)
        if isinstance(stimulus, FileStimulus):
            path = _path(stimulus, folder)
            digest = hashlib.sha256(path.read_bytes()).hexdigest()
            files[stimulus.source] = DeckFile(str(path), "", digest)
    notices = tuple(notice for name, wave in waves.items() for notice in _coarse(name, wave, step))
    return with_stimuli(deck, waves, files=files), notices


def stimulus_waves(stimulus: Stimulus, *, folder: Path, stop: float) -> dict[str, Waveform]:
    """Give what one table [[stimulus]] plays.

    Parameters
    ----------
    stimulus : Stimulus
        From `read_stimuli`.
    folder : Path
        Folder that its file is relative to.
    stop : float
        End of the run in s.

    Returns
    -------
    dict of Waveform
        By source.

    Raises
    ------
    InputError
        If a file cannot be read or has the wrong unit.
    """
    if isinstance(stimulus, FileStimulus):
        return {stimulus.source: _from_file(stimulus, _path(stimulus, folder))}
    return stimulus.waveforms(stop)


def _path(stimulus: FileStimulus, folder: Path) -> Path:
    return folder / Path(stimulus.file).expanduser()


def _kind(table: Any, where: str) -> type[Stimulus]:
    if not isinstance(table, Mapping):
        raise TestbenchError(f"{where}: wanted a table, got {table!r}")
    given = [key for key in _KINDS if key in table]
    if len(given) != 1:
        got = " and ".join(f"'{key}'" for key in given) or "none"
        raise TestbenchError(
            f"{where}: wanted one of the keys 'file', 'points', 'pattern' and 'words', got {got}"
        )
    return _KINDS[given[0]]


def _unit_of(sources: Sequence[str], *levels: Level) -> str:
    """Give the unit that sources take, and hold levels against it."""
    if not sources:
        raise InputError("key 'sources': wanted at least one source")
    unit = ""
    for source in sources:
        letter = source.strip().rpartition(".")[2][:1].lower()
        due = {"v": "V", "i": "A"}.get(letter)
        if due is None:
            raise InputError(
                f"wanted a voltage or current source, such as 'vin' or 'x1.iin', got '{source}'"
            )
        if unit not in ("", due):
            raise InputError(
                f"'{source}' takes {due} and '{sources[0]}' takes {unit}; one table drives one kind"
            )
        unit = due
    for level in levels:
        if level.unit != unit:
            raise InputError(
                f"'{sources[0]}' takes values in {unit}, got {level.value:g} {level.unit}"
            )
    return unit


def _from_file(stimulus: FileStimulus, path: Path) -> Waveform:
    values = () if stimulus.value is None else (stimulus.value,)
    columns = read_columns(
        path,
        time=stimulus.time,
        values=values,
        time_unit=stimulus.time_unit,
        unit=stimulus.unit,
    )
    if len(columns) != 1:
        names = ", ".join(f"'{name}'" for name in columns)
        raise InputError(
            f"table [[stimulus]] for '{stimulus.source}': {path} has several columns: {names}",
            hint="say which one is meant with the key 'value'",
        )
    return next(iter(columns.values()))


def _coarse(name: str, wave: Waveform, step: float) -> tuple[str, ...]:
    span = float(np.ptp(wave.v))
    lost = sampling_error(wave, step)
    if lost <= COARSE * span:
        return ()
    return (
        f"the time step of {step * 1e12:.4g} ps is long for the stimulus of '{name}': between two "
        f"time points it departs by up to {100.0 * lost / span:.0f} % of its range from a straight "
        "line; a smaller step or a longer edge resolves it",
    )
