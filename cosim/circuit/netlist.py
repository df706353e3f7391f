"""Decks as their authors wrote them: the door to loading, altering, looking up and preparing.

`load_deck` reads a deck with its includes; the `with_*` functions give altered copies;
`node_names` and `resolve_saves` look names up; `prepare` gives the exact list of lines that is
sent. None of them starts ngspice.
"""

import hashlib
import os
import re
from collections.abc import Sequence

from cosim.circuit.alteration import with_instances, with_parameters, with_terminations
from cosim.circuit.deck import (
    Deck,
    DeckFile,
    PreparedDeck,
    SourceLine,
    TransientCard,
    shortened,
    unique,
)
from cosim.circuit.expansion import Expansion, Places, Sections
from cosim.circuit.lookup import node_names, resolve_saves
from cosim.circuit.preparation import prepare
from cosim.circuit.reading import CardReader
from cosim.circuit.settings import with_settings
from cosim.circuit.source import Source, read_source, split_source
from cosim.errors import DeckError

__all__ = [
    "Deck",
    "DeckFile",
    "PreparedDeck",
    "SourceLine",
    "TransientCard",
    "deck_from_text",
    "load_deck",
    "node_names",
    "prepare",
    "resolve_saves",
    "with_instances",
    "with_parameters",
    "with_terminations",
]

_COMPATIBILITY = re.compile(r"(?:all|spe|ps|hs|lt|ki|ll|s3|eg|mc|xs|a)+")


def load_deck(
    path: str | os.PathLike[str],
    *,
    include_paths: Sequence[str | os.PathLike[str]] = (),
    sections: Sections | None = None,
    compatibility: str | None = None,
) -> Deck:
    """Read an ngspice deck as its author wrote it, with everything that it includes.

    Parameters
    ----------
    path : path
        The deck. Files under its folder may be included.
    include_paths : sequence of path
        Further folders whose files may be included.
    sections : mapping of str to str, or to mapping of str to str, optional
        Library file, as the deck names it or by its last part -> section to read instead of
        the one that the deck names; where it reads several, a mapping from those to others.
    compatibility : str, optional
        ngspice's `ngbehavior`: "hsa", "psa", "lta" and the like.

    Returns
    -------
    Deck

    Raises
    ------
    MissingFileError
        If the deck or an include is not there.
    ForbiddenDeckError
        If a file outside of these folders, or no regular file, is named.
    UnsupportedDeckError
        If the deck holds encrypted or Verilog-A models or unknown cards.
    UnknownNameError
        If a section, subcircuit or model does not exist.
    DeckError
        If the deck is wrong otherwise.
    """
    name = _checked_path(path)
    mode = _checked_mode(compatibility)
    source = read_source(name, is_deck=True, pspice="ps" in mode)
    folder = os.path.dirname(os.path.abspath(name))
    return _deck(source, folder, include_paths, sections, mode)


def deck_from_text(
    text: str,
    *,
    name: str = "circuit",
    folder: str | os.PathLike[str] | None = None,
    include_paths: Sequence[str | os.PathLike[str]] = (),
    sections: Sections | None = None,
    compatibility: str | None = None,
) -> Deck:
    """Read a deck from a text: a title line first, as in a file.

    Parameters
    ----------
    text : str
        The deck; `str(circuit)` of a PySpice circuit is one.
    name : str
        Name of the deck in messages.
    folder : path, optional
        Folder under which files may be included; without it only `include_paths` count.
    include_paths, sections, compatibility
        As in `load_deck`.

    Returns
    -------
    Deck

    Raises
    ------
    DeckError
        As `load_deck`.
    """
    mode = _checked_mode(compatibility)
    name = _checked_path(name)
    content = text.encode("utf-8", errors="replace")
    file = DeckFile(name, text, hashlib.sha256(content).hexdigest())
    source = split_source(file, is_deck=True, pspice="ps" in mode)
    place = os.path.abspath(_checked_path(folder)) if folder is not None else ""
    return _deck(source, place, include_paths, sections, mode)


def _checked_path(path: str | os.PathLike[str]) -> str:
    """Refuse a text that no file can be named: it would end in errors of Python itself."""
    name = os.fspath(path)
    try:
        wrong = b"\0" in os.fsencode(name)
    except UnicodeEncodeError:
        wrong = True
    if wrong:
        raise DeckError(
            f"{shortened(repr(name))} is no path: it holds a NUL or half of a character pair"
        )
    return name


def _checked_mode(compatibility: str | None) -> str:
    mode = (compatibility or "").strip().lower()
    if mode and not _COMPATIBILITY.fullmatch(mode):
        raise DeckError(
            f"compatibility mode '{shortened(compatibility or '')}' is not known",
            hint="ngspice has 'all', 'spe', and 'ps', 'hs', 'lt', 'ki', each also with 'a' behind.",
        )
    return mode


def _deck(
    source: Source,
    folder: str,
    include_paths: Sequence[str | os.PathLike[str]],
    sections: Sections | None,
    mode: str,
) -> Deck:
    further = tuple(os.path.abspath(os.path.expanduser(_checked_path(p))) for p in include_paths)
    for place in further:
        if not os.path.isdir(place):
            raise DeckError(f"include path {place} is not a folder", file=source.file.path)
    expansion = Expansion(Places(folder, further), sections or {}, pspice="ps" in mode)
    expansion.add_source(source, ((os.path.realpath(source.file.path), ""),))
    expansion.check_sections(source.file.path)
    reader = CardReader(source.title, expansion.places, source.file.path)
    reader.read(expansion.lines)
    deck = Deck(
        path=source.file.path,
        title=reader.title,
        lines=tuple(reader.lines),
        files=tuple(expansion.files.values()),
        data_files=tuple(reader.data_files),
        notices=unique((*expansion.notices, *reader.notices)),
        tran=None,
        temperature=None,
        compatibility=mode or None,
        joined=unique(reader.joined),
    )
    return with_settings(deck)
