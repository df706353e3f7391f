"""What a deck is: lines with their origin, files as written, and the list that is sent."""

from collections.abc import Iterable
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class SourceLine:
    """One logical line: continuations joined, comments gone.

    Parameters
    ----------
    text : str
        The line, without leading and trailing space.
    file : str
        File in which it stands; empty for lines that the bridge adds.
    line : int
        Number of its first physical line, from 1; 0 for lines that the bridge adds.
    """

    text: str
    file: str
    line: int


@dataclass(frozen=True, slots=True)
class DeckFile:
    """A file that was read, as its author wrote it.

    Parameters
    ----------
    path : str
        Path under which it was found.
    text : str
        Its text, decoded as UTF-8 or, failing that, Latin-1.
    sha256 : str
        SHA-256 of its bytes, in hexadecimal.
    """

    path: str
    text: str
    sha256: str


@dataclass(frozen=True, slots=True)
class DataFile:
    """A data file of an A-device.

    Parameters
    ----------
    path : str
        Path under which it was found; empty for samples that the bridge makes.
    name : str
        Lower-case name under which it is put into the simulator's scratch folder.
    content : bytes
        What is put there: its bytes, or the samples of a stimulus that was read from it.
    sha256 : str
        SHA-256 of the file's bytes, in hexadecimal.
    """

    path: str
    name: str
    content: bytes
    sha256: str


@dataclass(frozen=True, slots=True)
class TransientCard:
    """The deck's own `.tran`.

    Parameters
    ----------
    step : float
        Step of the output in s.
    stop, start : float
        Last and first time in s.
    max_step : float or None
        Largest step in s; None when the card leaves it out.
    uic : bool
        Whether the run starts from the deck's initial conditions.
    """

    step: float = field(metadata={"unit": "s"})
    stop: float = field(metadata={"unit": "s"})
    start: float = field(metadata={"unit": "s"})
    max_step: float | None = field(metadata={"unit": "s"})
    uic: bool


@dataclass(frozen=True, slots=True)
class Deck:
    """A deck with its includes, ready to be altered and prepared.

    Parameters
    ----------
    path : str
        Path of the deck, or the name given to `deck_from_text`.
    title : str
        Title as the author wrote it; it is not sent.
    lines : tuple of SourceLine
        Circuit, `.param`, `.options`, `.tran` and `.temp` lines. Comments, output cards, other
        analyses and command blocks are gone; `prepare` replaces the analysis and the settings.
    files : tuple of DeckFile
        Every file that was read, the deck first.
    data_files : tuple of DataFile
        Data files of A-devices.
    notices : tuple of str
        What was left out or read otherwise than written, with file and line.
    tran : TransientCard or None
        The deck's `.tran`, or None when there is none whose values can be told.
    temperature : float or None
        Device temperature in K from `.temp` or `.options temp`, or None.
    compatibility : str or None
        ngspice compatibility mode ("hsa", "psa", ...), or None.
    joined : tuple of str
        Files of lines that go on in another file: such a line counts as the first file's.
    """

    path: str
    title: str
    lines: tuple[SourceLine, ...]
    files: tuple[DeckFile, ...]
    data_files: tuple[DataFile, ...]
    notices: tuple[str, ...]
    tran: TransientCard | None
    temperature: float | None = field(metadata={"unit": "K"})
    compatibility: str | None
    joined: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PreparedDeck:
    """The exact list of lines that ngspice gets.

    Parameters
    ----------
    lines : tuple of str
        Title, options, circuit, `.save`, the analysis and `.end`. A line with a data file holds
        "{scratch}/name"; the host fills in its scratch folder.
    origins : tuple of (str, int)
        File and line of each line; ("", 0) for the bridge's own.
    keys : dict of str
        Save expression as requested, in lower case -> name of the vector in ngspice's plot.
    commands : tuple of str
        ngspice commands to give before the deck is loaded.
    data : dict of bytes
        Name in the scratch folder -> content.
    notices : tuple of str
        The deck's notices and those of the preparation.
    zeros : tuple of int
        Indices of the lines of resistors of 0 ohm, as far as can be told.
    plots : str
        What the names of the analysis's plots in ngspice begin with: "tran" or "noise".
    axis : str
        The vector over which the others stand: "time" or "frequency".
    """

    lines: tuple[str, ...]
    origins: tuple[tuple[str, int], ...]
    keys: dict[str, str]
    commands: tuple[str, ...]
    data: dict[str, bytes]
    notices: tuple[str, ...]
    zeros: tuple[int, ...] = ()
    plots: str = "tran"
    axis: str = "time"


def where(line: SourceLine) -> str:
    """Give the place of a line.

    Parameters
    ----------
    line : SourceLine
        The line.

    Returns
    -------
    str
        "file:line".
    """
    return f"{line.file}:{line.line}"


def shortened(text: str, most: int = 120) -> str:
    """Cut a text that is quoted in a message.

    Parameters
    ----------
    text : str
        The text.
    most : int
        Number of characters to keep.

    Returns
    -------
    str
        The text, or its head and how long it is.
    """
    if len(text) <= most:
        return text
    return f"{text[:most]}... ({len(text)} characters)"


def unique(items: Iterable[str]) -> tuple[str, ...]:
    """Give the items once each, in the order of their first appearance.

    Parameters
    ----------
    items : iterable of str
        The items.

    Returns
    -------
    tuple of str
    """
    return tuple(dict.fromkeys(items))
