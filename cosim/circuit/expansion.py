"""Includes and library sections: one flat list of lines, read from the named folders only."""

import difflib
import hashlib
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from cosim.circuit.deck import DataFile, DeckFile, SourceLine, shortened, where
from cosim.circuit.source import Source, card_arguments, read_bytes, read_source
from cosim.errors import (
    DeckError,
    ForbiddenDeckError,
    MissingFileError,
    UnknownNameError,
    near_names,
)

Sections = Mapping[str, str | Mapping[str, str]]
"""Library file -> section to read, or section that the deck names -> section to read."""

_DEEPEST = 60  # files inside one another
# A few short files that include one another many times would fill any memory or take for ever.
_MOST_LINES = 4_000_000
_MOST_FILES = 10_000


@dataclass(frozen=True, slots=True)
class Places:
    """Where a deck may read.

    Parameters
    ----------
    folder : str
        The deck's own folder; empty when there is none.
    include_paths : tuple of str
        Further folders.
    """

    folder: str
    include_paths: tuple[str, ...]

    def roots(self) -> tuple[str, ...]:
        """The folders with symbolic links resolved."""
        named = (self.folder, *self.include_paths) if self.folder else self.include_paths
        return tuple(os.path.realpath(place) for place in named)

    def find(self, name: str, line: SourceLine, chain: str = "") -> str:
        """Find a file that a line names.

        Parameters
        ----------
        name : str
            File name as written; "~" and "$VARIABLE" are expanded.
        line : SourceLine
            The line that names it: its own folder is searched first, then the deck's folder,
            then the include paths.
        chain : str
            Tail of the message that tells by which way the line was reached.

        Returns
        -------
        str
            Path of an existing file below one of the folders.

        Raises
        ------
        MissingFileError
            If there is no such file.
        ForbiddenDeckError
            If it lies elsewhere.
        """
        expanded = os.path.expanduser(os.path.expandvars(name))
        folders = unique_folders(os.path.dirname(line.file), self.folder, *self.include_paths)
        found = _existing(expanded, folders)
        if found is None and "\\" in expanded:
            found = _existing(expanded.replace("\\", "/"), folders)
        if found is None:
            raise _not_found(name, expanded, folders, line, chain)
        real = os.path.realpath(found)
        if not any(_below(real, root) for root in self.roots()):
            raise ForbiddenDeckError(
                f"'{shortened(name)}'{'' if name == real else f' is {real} and'} lies outside of "
                f"the deck's folder and the include paths{chain}",
                hint="If it may be read, add its folder to include_paths: "
                + self._common_folder(real, line.file),
                file=line.file,
                line=line.line,
            )
        return found

    def _common_folder(self, real: str, named_in: str) -> str:
        """Give the folder to name: a kit's own, one level up, where its parts name one another."""
        folder = os.path.dirname(real)
        above = os.path.commonpath([folder, os.path.realpath(named_in)])
        kits = {os.path.dirname(os.path.realpath(place)) for place in self.include_paths}
        return above if above in kits and above != os.sep else folder


def unique_folders(*folders: str) -> tuple[str, ...]:
    """Give the folders once each, empty ones left out.

    Parameters
    ----------
    *folders : str
        The folders.

    Returns
    -------
    tuple of str
    """
    return tuple(dict.fromkeys(folder for folder in folders if folder))


def _below(path: str, root: str) -> bool:
    return path == root or path.startswith(root.rstrip(os.sep) + os.sep)


def _existing(name: str, folders: Sequence[str]) -> str | None:
    if "\0" in name:
        return None
    places = [name] if os.path.isabs(name) else [os.path.join(folder, name) for folder in folders]
    found = [os.path.normpath(place) for place in places if os.path.exists(place)]
    return found[0] if found else None


def _not_found(
    name: str, expanded: str, folders: Sequence[str], line: SourceLine, chain: str
) -> MissingFileError:
    hint = ""
    if "$" in expanded:
        hint = f"'{shortened(name)}' holds a variable that is not set in the environment."
    elif folders and not os.path.isabs(expanded):
        looked = [os.path.dirname(os.path.join(folder, expanded)) for folder in folders]
        present = {entry for folder in looked for entry in _entries(folder)}
        near = difflib.get_close_matches(os.path.basename(expanded), sorted(present), n=3)
        hint = "Looked in " + ", ".join(unique_folders(*looked)) + "."
        if near:
            hint += " Near names there: " + ", ".join(f"'{entry}'" for entry in near) + "."
    return MissingFileError(
        f"file '{shortened(name)}' not found{chain}", hint=hint, file=line.file, line=line.line
    )


def _entries(folder: str, most: int = 1000) -> list[str]:
    try:
        with os.scandir(folder) as entries:
            return [entry.name for _, entry in zip(range(most), entries, strict=False)]
    except OSError:
        return []


@dataclass(slots=True)
class Expansion:
    """The flat list of lines, as it grows.

    Parameters
    ----------
    places : Places
        Where files may be read.
    sections : mapping of str to str, or to mapping of str to str
        Library file (path as written, or its last part) -> section to take instead of the one
        that the deck names, or of each that it names.
    pspice : bool
        Whether "$" starts no comment, and `.lib FILE` without a section is an include.
    lines : list of SourceLine
        The lines so far.
    notices : list of str
        What was left out or chosen so far.
    files : dict of str to DeckFile
        Path -> each file that was read.
    libraries : set of str
        Last parts of the library files.
    read_sections : dict of str to dict of str to str
        Key of `sections` that found a library -> section that the deck reads from it, in lower
        case -> the section as written.
    entered : int
        How many times a file or section was expanded.
    """

    places: Places
    sections: Sections
    pspice: bool
    lines: list[SourceLine] = field(default_factory=list)
    notices: list[str] = field(default_factory=list)
    files: dict[str, DeckFile] = field(default_factory=dict)
    libraries: set[str] = field(default_factory=set)
    read_sections: dict[str, dict[str, str]] = field(default_factory=dict)
    entered: int = 0

    def add_source(self, source: Source, chain: tuple[tuple[str, str], ...] = ()) -> None:
        """Append a whole file. `chain` holds (file or file and section, place that names it)."""
        if source.file.path not in self.files:
            self.files[source.file.path] = source.file
            self.notices.extend(source.notices)
        self._add(source, 0, len(source.lines), chain)

    def _add(
        self, source: Source, start: int, stop: int, chain: tuple[tuple[str, str], ...]
    ) -> None:
        self.entered += 1
        if len(chain) > _DEEPEST or self.entered > _MOST_FILES:
            raise DeckError(
                f"files include one another more than {_DEEPEST} deep or {_MOST_FILES} times"
                f"{_way(chain)}",
                file=source.file.path,
            )
        at = start
        for index in source.marks:
            if index < at or index >= stop:
                continue
            self._extend(source.lines[at:index])
            at = self._card(source, index, chain)
        self._extend(source.lines[at:stop])

    def _extend(self, lines: Sequence[SourceLine]) -> None:
        self.lines.extend(lines)
        if len(self.lines) > _MOST_LINES:
            raise DeckError(
                f"the deck has more than {_MOST_LINES} lines with its includes",
                file=lines[0].file,
                line=lines[0].line,
            )

    def _card(self, source: Source, index: int, chain: tuple[tuple[str, str], ...]) -> int:
        """Handle an .include, .lib or .endl card; give the index at which to go on."""
        line = source.lines[index]
        arguments = card_arguments(line.text)
        card = line.text[:5].lower()
        if card == ".endl":
            return index + 1
        if not arguments:
            raise DeckError(f"{card[:4]} without a file name", file=line.file, line=line.line)
        if card[:4] == ".inc" or (len(arguments) == 1 and self.pspice):
            self._include(arguments[0], line, chain)
        elif len(arguments) == 1:
            return self._definition(source, index, arguments[0])
        else:
            self._library(arguments[0], arguments[1], line, chain)
        return index + 1

    def _definition(self, source: Source, index: int, name: str) -> int:
        """Skip a section that is defined in a file that is not used as a library."""
        line = source.lines[index]
        start, stop = source.sections.get(name.lower(), (-1, -1))
        if start != index + 1:
            raise DeckError(
                f"'{shortened(line.text)}' names no section, and no .endl closes it",
                hint="Read a library with '.lib FILE SECTION', a whole file with '.include FILE'.",
                file=line.file,
                line=line.line,
            )
        self.notices.append(
            f"{where(line)}: section '{shortened(name)}' is defined here but not used: only "
            "'.lib FILE SECTION' reads a section"
        )
        return stop + 1

    def _include(self, name: str, line: SourceLine, chain: tuple[tuple[str, str], ...]) -> None:
        path = self.places.find(name, line, _way(chain))
        self._notice_of_choice(name, path, line)
        self.add_source(self._read(path, line, chain), self._enter(path, line, chain))

    def _library(
        self, name: str, section: str, line: SourceLine, chain: tuple[tuple[str, str], ...]
    ) -> None:
        path = self.places.find(name, line, _way(chain))
        self._notice_of_choice(name, path, line)
        source = self._read(path, line, chain)
        base = os.path.basename(path)
        self.libraries.add(base)
        inside = bool(chain) and chain[-1][0].partition(" section ")[0] == os.path.realpath(path)
        for key in (name, base):
            if key in self.sections and not inside:
                section = self._chosen(key, section)
                break
        bounds = source.sections.get(section.lower())
        if bounds is None:
            raise UnknownNameError(
                f"{path} has no section '{shortened(section)}'{_way(chain)}",
                hint=near_names(section, source.sections),
                file=line.file,
                line=line.line,
            )
        if source.file.path not in self.files:
            self.files[source.file.path] = source.file
            self.notices.extend(source.notices)
        self._add(source, *bounds, self._enter(path, line, chain, section.lower()))

    def _chosen(self, key: str, section: str) -> str:
        """Give the section to read in place of one that the deck names."""
        self.read_sections.setdefault(key, {}).setdefault(section.lower(), section)
        chosen = self.sections[key]
        if isinstance(chosen, str):
            return chosen
        by_name = {name.lower(): other for name, other in chosen.items()}
        return by_name.get(section.lower(), section)

    def _read(self, path: str, line: SourceLine, chain: tuple[tuple[str, str], ...]) -> Source:
        try:
            return read_source(path, is_deck=False, pspice=self.pspice)
        except DeckError as error:
            error.args = (f"{error.message}, named at {where(line)}{_way(chain)}",)
            raise

    def _enter(
        self, path: str, line: SourceLine, chain: tuple[tuple[str, str], ...], section: str = ""
    ) -> tuple[tuple[str, str], ...]:
        name = os.path.realpath(path) + (f" section {section}" if section else "")
        if any(name == earlier for earlier, _ in chain):
            raise ForbiddenDeckError(
                f"'{name}' includes itself{_way(chain)}",
                file=line.file,
                line=line.line,
            )
        return (*chain, (name, where(line)))

    def _notice_of_choice(self, name: str, path: str, line: SourceLine) -> None:
        """Say so when ngspice, started in the deck's folder, would have taken another file."""
        folder = self.places.folder
        if not folder or os.path.isabs(name):
            return
        other = os.path.normpath(os.path.join(folder, name))
        if os.path.exists(other) and os.path.realpath(other) != os.path.realpath(path):
            self.notices.append(f"{where(line)}: '{name}' is taken from {path}, not from {other}")

    def check_sections(self, deck: str) -> None:
        """Refuse a choice of sections that found no library, or that would stand for several."""
        for key, chosen in self.sections.items():
            if key not in self.read_sections:
                raise UnknownNameError(
                    f"no library '{key}' is read with .lib, so its section cannot be chosen",
                    hint=near_names(key, self.libraries),
                    file=deck,
                )
            found = self.read_sections[key]
            if isinstance(chosen, str) and len(found) > 1:
                first = next(iter(found.values()))
                raise DeckError(
                    f"the deck reads {len(found)} sections of '{key}' "
                    f"({', '.join(found.values())}), and section '{chosen}' cannot stand for all",
                    hint=f'Say which: sections = {{ "{key}" = {{ {first} = "{chosen}" }} }}',
                    file=deck,
                )
            for name in [] if isinstance(chosen, str) else chosen:
                if name.lower() not in found:
                    raise UnknownNameError(
                        f"no section '{name}' of '{key}' is read, so none can stand for it",
                        hint=near_names(name, found.values()),
                        file=deck,
                    )


def _way(chain: tuple[tuple[str, str], ...]) -> str:
    places = [place for _, place in reversed(chain) if place]
    return " (reached from " + ", from ".join(places) + ")" if places else ""


def read_data_file(name: str, line: SourceLine, places: Places, number: int) -> DataFile:
    """Read the data file that an A-device's model names.

    Parameters
    ----------
    name : str
        File name as written.
    line : SourceLine
        The model's line.
    places : Places
        Where files may be read.
    number : int
        Number that makes the scratch name unique.

    Returns
    -------
    DataFile

    Raises
    ------
    DeckError
        As `Places.find` and `read_bytes`.
    """
    path = places.find(name, line)
    content = read_bytes(path)
    # ngspice lower-cases the names of files, so that the scratch name must be in lower case.
    suffix = "".join(
        c for c in Path(path).suffix.lower() if c.isascii() and (c.isalnum() or c == ".")
    )
    return DataFile(
        path, f"data_{number}{suffix[:8]}", content, hashlib.sha256(content).hexdigest()
    )
