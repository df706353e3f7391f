"""What a deck says about its own run: `.tran`, `.temp` and `.options`."""

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

from cosim.circuit.cards import (
    FLAG_OPTIONS,
    SHOWING_OPTIONS,
    VALUE_OPTIONS,
    assignments,
    card_word,
    masked,
)
from cosim.circuit.deck import Deck, SourceLine, TransientCard, shortened, unique, where
from cosim.circuit.expression import Parameters, spice_number
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.errors import DeckError

CELSIUS = 273.15  # K at 0 degrees Celsius, exact by definition
_KELVIN_SUSPECT = 25.0
_OPTION_WORD = re.compile(r"[^\s,=]+")


def with_settings(deck: Deck) -> Deck:
    """Read `tran` and `temperature` anew from the deck's lines.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    Deck
        The deck with both fields as its cards and parameters say, and the notices on them.

    Raises
    ------
    DeckError
        If a `.tran` has fewer than two times, or the temperature is below absolute zero.
    """
    structure = structure_of(deck.lines)
    notices: list[str] = []
    tran = _transient(structure, notices)
    temperature = _temperature(structure, notices)
    return replace(
        deck, tran=tran, temperature=temperature, notices=unique((*deck.notices, *notices))
    )


def _cards(structure: Structure, card: str) -> list[SourceLine]:
    lines = (structure.lines[index] for index in structure.settings)
    return [line for line in lines if card_word(line.text) == card]


def _values(text: str) -> list[str]:
    """Cut a card's arguments at spaces and commas outside of braces and quotes."""
    covered = masked(text)
    return [text[m.start() : m.end()] for m in re.finditer(r"[^\s,]+", covered)][1:]


def number_of(text: str, parameters: Parameters) -> float | None:
    """Give the value of a number or of an expression in braces or quotes.

    Parameters
    ----------
    text : str
        The number or expression.
    parameters : Parameters
        Values of the deck's parameters.

    Returns
    -------
    float or None
        None when the value cannot be told.
    """
    if text[:1] in ("{", "'", '"', "("):
        return parameters.value(text)
    return spice_number(text)


def _transient(structure: Structure, notices: list[str]) -> TransientCard | None:
    cards = _cards(structure, ".tran")
    if not cards:
        return None
    line = cards[0]
    if len(cards) > 1:
        notices.append(f"{where(cards[1])}: a second .tran is left out")
    written = _values(line.text)
    words = [word for word in written if word.lower() not in ("uic", "steadystate")]
    uic = any(word.lower() == "uic" for word in written)
    if len(words) < 2:
        raise DeckError(
            f".tran needs a step and a stop time, got '{shortened(line.text)}'",
            file=line.file,
            line=line.line,
        )
    values = [number_of(word, structure.parameters) for word in words[:4]]
    step, stop = values[0], values[1]
    start = values[2] if len(values) > 2 else 0.0
    max_step = values[3] if len(values) > 3 else None
    if step is None or stop is None or start is None or (len(values) > 3 and max_step is None):
        notices.append(
            f"{where(line)}: the times of '{shortened(line.text)}' cannot be told before the "
            "run, so they give no defaults"
        )
        return None
    return TransientCard(step, stop, start, max_step, uic)


def written_temperature(structure: Structure, notices: list[str]) -> tuple[str, SourceLine] | None:
    """Find the temperature that is in force: ngspice lets `.temp` win over `.options temp`.

    Parameters
    ----------
    structure : Structure
        The deck's structure.
    notices : list of str
        Gets a notice when a card gives several temperatures.

    Returns
    -------
    tuple of (str, SourceLine) or None
        The temperature in degrees Celsius as written, and its card.

    Raises
    ------
    DeckError
        If a `.temp` has no value.
    """
    written: tuple[str, SourceLine] | None = None
    for line in _cards(structure, ".options"):
        for item in assignments(line.text):
            if item.name == "temp":
                written = item.value, line
    for line in _cards(structure, ".temp"):
        words = _values(line.text)
        if not words:
            raise DeckError(".temp without a value", file=line.file, line=line.line)
        if len(words) > 1:
            notices.append(
                f"{where(line)}: .temp gives {len(words)} temperatures, the first is taken"
            )
        written = words[0], line
    return written


def _temperature(structure: Structure, notices: list[str]) -> float | None:
    """Give the device temperature in K."""
    written = written_temperature(structure, notices)
    if written is None:
        return None
    value = number_of(written[0], structure.parameters)
    line = written[1]
    if value is None:
        notices.append(
            f"{where(line)}: the value of '{shortened(line.text)}' cannot be told before the run"
        )
        return None
    if value <= -CELSIUS:
        raise DeckError(
            f"the temperature {value:g} degrees Celsius is not above absolute zero",
            file=line.file,
            line=line.line,
        )
    if 0.0 < value < _KELVIN_SUSPECT:
        notices.append(
            f"{where(line)}: a deck's temperature is in degrees Celsius, so {value:g} means "
            f"{value + CELSIUS:g} K; for {value:g} K write {value - CELSIUS:g}"
        )
    return value + CELSIUS


@dataclass(frozen=True, slots=True)
class OptionCard:
    """What becomes of one `.options` card.

    Parameters
    ----------
    line : SourceLine
        What is sent; its text is empty when nothing is.
    left_out : tuple of str
        What is said about the rest, without the place.
    """

    line: SourceLine
    left_out: tuple[str, ...]


def filtered_options(line: SourceLine, own: dict[str, float | str]) -> OptionCard:
    """Take from an `.options` card what a run of the bridge honours.

    Parameters
    ----------
    line : SourceLine
        The card.
    own : dict
        Options that the run sets itself -> their value.

    Returns
    -------
    OptionCard
        Options that the run sets itself, that ngspice does not know, or that change every deck
        of a process are left out; those that only show are dropped without a word.
    """
    text = line.text
    covered = masked(text)
    kept: list[str] = []
    left_out: list[str] = []
    at = len(".options")
    found = {item.start: item for item in assignments(text)}
    while match := _OPTION_WORD.search(covered, at):
        item = found.get(match.start())
        name = item.name if item else text[match.start() : match.end()].lower()
        at = item.stop if item else match.end()
        written = shortened(text[match.start() : at])
        if name in own or name == "temp":
            if name in own and not _same(item.value if item else "", own[name]):
                left_out.append(f"option {written} left out: the run sets {name}={own[name]}")
        elif item and name in VALUE_OPTIONS:
            kept.append(f"{name}={item.value}")
        elif not item and name in FLAG_OPTIONS:
            kept.append(name)
        elif name == "seed":
            left_out.append(f"option {written} left out: the run has a seed of its own")
        elif name == "cshunt":
            left_out.append(
                "option cshunt left out: ngspice keeps it for later decks; write the capacitors "
                "into the deck"
            )
        elif name not in SHOWING_OPTIONS:
            left_out.append(f"option {written} left out")
    sent = f".options {' '.join(kept)}" if kept else ""
    return OptionCard(SourceLine(sent, line.file, line.line), tuple(left_out))


def gathered(left_out: Sequence[tuple[SourceLine, str]]) -> list[str]:
    """Say each thing once, however often a deck and its process kit repeat it.

    Parameters
    ----------
    left_out : sequence of (SourceLine, str)
        Card, and what is said about it.

    Returns
    -------
    list of str
        Each text with its first place, and the number of the others.
    """
    places: dict[str, list[str]] = {}
    for line, text in left_out:
        places.setdefault(text, []).append(where(line))
    return [
        f"{found[0]}: {text}" + (f" (and in {len(found) - 1} further cards)" if found[1:] else "")
        for text, found in places.items()
    ]


def _same(written: str, own: float | str) -> bool:
    value = spice_number(written)
    return written.lower() == str(own) if value is None else value == own
