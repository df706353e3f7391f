"""The allow-list: what a line must look like to be sent to ngspice.

A deck can run commands, write files and read files in more ways than can be forbidden one by
one. So the lines that are sent, and no others, are held against a list of what is allowed:
cards, options, element letters and model types. Everything else is refused.
"""

import re
from collections.abc import Sequence
from functools import lru_cache

from cosim.circuit.cards import (
    CIRCUIT_CARDS,
    CODE_MODELS,
    DEVICE_MODELS,
    FLAG_OPTIONS,
    LONGEST_KEPT,
    MODELS_WITH_FILE,
    VALUE_OPTIONS,
    card_word,
    model_card,
)
from cosim.circuit.deck import SourceLine, shortened
from cosim.errors import (
    DeckError,
    ForbiddenDeckError,
    UnsupportedDeckError,
    near_names,
)

_CARDS = CIRCUIT_CARDS | {".options", ".temp", ".save", ".tran", ".noise", ".end"}
_LETTERS = frozenset("abcdefghijklmopqrstuvwxyz")
_OWN_OPTIONS = frozenset({"reltol", "vntol", "abstol", "method", "trtol", "xtrtol"})
_FLAGS = FLAG_OPTIONS | {"sqrnoise"}  # A deck's own one is left out when its cards are filtered.
_OPTION = re.compile(r"([a-z_]\w*)\s*(?:=\s*(\{[^{}]*\}|'[^']*'|[-+\w.]+))?\s*,?\s*", re.I)
# ngspice takes "=" for a space, so that a file can also be named without it.
_FILE = re.compile(
    r"(?<!\w)(?:input_|state_)?file(?!\w)\s*=?\s*(\"[^\"]*\"[^\s,)]*|[^\s,)]*)", re.IGNORECASE
)
_SCRATCH_FILE = re.compile(r"\"\{scratch\}/[a-z0-9_]+(\.[a-z0-9]+)?\"")
_EXTERNAL = re.compile(r"(?<![\w.])external(?![\w.])", re.I)
_POINTS_FROM_FILE = re.compile(r"(?<![\w.])pwl\s*\(?\s*file(?![\w.])", re.I)


def check_line(line: SourceLine) -> None:
    """Hold one line against the allow-list.

    Parameters
    ----------
    line : SourceLine
        A line that is to be sent, other than the title.

    Raises
    ------
    ForbiddenDeckError
        If it holds a control character, or would run, read or write something.
    UnsupportedDeckError
        If ngspice does not know its card, element or model type.
    """
    fault = _fault(line.text)
    if fault is not None:
        kind, message, hint = fault
        raise kind(message, hint=hint, file=line.file, line=line.line)


def check_lines(lines: Sequence[SourceLine]) -> None:
    """Hold all lines against the allow-list.

    Parameters
    ----------
    lines : sequence of SourceLine
        The lines that are to be sent, other than the title.

    Raises
    ------
    ForbiddenDeckError, UnsupportedDeckError
        As `check_line`.
    """
    for line in lines:
        if _fault(line.text) is not None:
            check_line(line)


_Fault = tuple[type[DeckError], str, str]


def _fault(text: str) -> _Fault | None:
    """Say what is wrong with a line; the same text always has the same answer."""
    return _short_fault(text) if len(text) <= LONGEST_KEPT else _any_fault(text)


def _any_fault(text: str) -> _Fault | None:
    if not text or not text.isprintable():
        bad = next((char for char in text if not char.isprintable()), "")
        return ForbiddenDeckError, f"a line holds the character {bad!r}", "Delete it."
    if "`" in text:
        return ForbiddenDeckError, "a line holds a backquote", "Delete it."
    if text[0] == ".":
        return _card_fault(text)
    letter = text[0].lower()
    if letter == "n":
        return (
            UnsupportedDeckError,
            "N elements are compiled Verilog-A models, which this ngspice cannot load",
            "Export the waveform from a simulator that can, and run on that waveform.",
        )
    if letter not in _LETTERS:
        return UnsupportedDeckError, f"'{shortened(text)}' starts with no element's letter", ""
    if letter in "vi" and _EXTERNAL.search(text):
        return (
            ForbiddenDeckError,
            "a source with 'external' waits for values from the host and ends the simulator",
            "Give the source a waveform of its own.",
        )
    if letter in "vi" and _POINTS_FROM_FILE.search(text):
        return (
            UnsupportedDeckError,
            "this ngspice reads no PWL points from a file",
            "Use an A-device with a 'filesource' model.",
        )
    return None


_short_fault = lru_cache(maxsize=2**17)(_any_fault)


def _card_fault(text: str) -> _Fault | None:
    card = card_word(text)
    if card not in _CARDS:
        return (
            UnsupportedDeckError,
            f"card '{shortened(card)}' is not sent",
            near_names(card, _CARDS),
        )
    if card == ".model":
        return _model_fault(text)
    if card == ".options":
        return _options_fault(text)
    return None


def _model_fault(text: str) -> _Fault | None:
    name, kind = (shortened(word) for word in model_card(text))
    if kind in MODELS_WITH_FILE:
        named = _FILE.findall(text)
        if named and all(_SCRATCH_FILE.fullmatch(item) for item in named):
            return None
        return ForbiddenDeckError, f"model '{name}' reads a file that was not resolved", ""
    if kind in DEVICE_MODELS or kind in CODE_MODELS:
        return None
    if kind in ("numd", "nbjt", "numos"):
        return (
            ForbiddenDeckError,
            f"model '{name}' is a numerical device (CIDER), whose cards name files to write",
            "Use a compact model.",
        )
    return (
        UnsupportedDeckError,
        f"model '{name}' has the type '{kind}', which this ngspice does not know",
        near_names(kind, DEVICE_MODELS | CODE_MODELS | set(MODELS_WITH_FILE)),
    )


def _options_fault(text: str) -> _Fault | None:
    at = text.find(" ") + 1 or len(text)
    while at < len(text):
        match = _OPTION.match(text, at)
        if match is None:
            return ForbiddenDeckError, f"options '{shortened(text[at:])}' cannot be read", ""
        name = match[1].lower()
        known = name in _FLAGS or name in VALUE_OPTIONS or name in _OWN_OPTIONS
        if not known or (match[2] is None) != (name in _FLAGS):
            return ForbiddenDeckError, f"option '{shortened(name)}' is not sent", ""
        at = match.end()
    return None
