"""Reading one file of a deck: bytes to text to logical lines, comments and command blocks gone.

Logical lines are kept per file in a bounded cache, so that a process kit is read once in a
process. The rules on comments and continuations are ngspice's own, found by experiment.
"""

import hashlib
import os
import re
import stat
import threading
import time
from collections import OrderedDict
from dataclasses import dataclass

from cosim.circuit.deck import DeckFile, SourceLine, shortened
from cosim.errors import DeckError, ForbiddenDeckError, MissingFileError, UnsupportedDeckError

LARGEST_FILE = 64 * 2**20  # byte; the largest process kits seen hold about 10 MB per file.
_CACHED_FILES = 256
# A file that changes again within the clock tick of the file system (4 ms is common) keeps its
# time, so that one that has just been written is not kept.
_YOUNGEST_KEPT = 100_000_000  # ns
_CACHED_CHARACTERS = 256 * 2**20

_SPACE = " \t\r\f\v"
# ngspice cuts at ";" and "//" anywhere, and at "$" after a space, a tab or a comma.
_COMMENT = re.compile(r";|//|(?<=[ \t,])\$")
_COMMENT_PSPICE = re.compile(r";|//")
_COMMENT_PATH = re.compile(r";|(?<=[ \t])\$(?=[ \t]|$)")
# What stands for a space, and the micro sign, which ngspice reads as "u".
_TRANSLATION = str.maketrans({"\t": " ", "\f": " ", "\v": " ", "\xa0": " ", "µ": "u", "μ": "u"})
_READABLE = re.compile(r"[*+.$;]|[A-Za-z]\S*\s+\S")
_ENCRYPTED = re.compile(r"\**\s*\$?(\$ENCRYPTED|\$CDNENCSTART)", re.IGNORECASE)
_CARD_WITH_PATH = (".inc", ".lib")
ENCRYPTED_CARD = ".encrypted"
"""Card that stands for an encrypted region; no ngspice card bears this name."""


@dataclass(frozen=True, slots=True)
class Source:
    """One file as logical lines.

    Parameters
    ----------
    file : DeckFile
        The file as written.
    title : str
        Its first physical line.
    lines : tuple of SourceLine
        Logical lines; from the second physical line on when the file is a deck.
    marks : tuple of int
        Indices of the lines that are `.include`, `.lib` or `.endl` cards.
    sections : dict of str to (int, int)
        Library section in lower case -> first index and end index of its lines.
    notices : tuple of str
        Command blocks that were left out.
    """

    file: DeckFile
    title: str
    lines: tuple[SourceLine, ...]
    marks: tuple[int, ...]
    sections: dict[str, tuple[int, int]]
    notices: tuple[str, ...]


_Key = tuple[str, bool, bool, int, int, int, int]
_cache: OrderedDict[_Key, Source] = OrderedDict()
_lock = threading.Lock()


def read_source(path: str, *, is_deck: bool, pspice: bool = False) -> Source:
    """Read a file of a deck, or take it from the cache when it has not changed.

    Parameters
    ----------
    path : str
        The file.
    is_deck : bool
        Whether its first line is a title.
    pspice : bool
        Whether "$" starts no comment, as in ngspice's "ps" mode.

    Returns
    -------
    Source

    Raises
    ------
    MissingFileError
        If the file is not there.
    ForbiddenDeckError
        If it is no regular file, or larger than `LARGEST_FILE`.
    UnsupportedDeckError
        If it is binary.
    """
    try:
        status = os.stat(path)
    except (OSError, ValueError) as error:
        raise _missing(path, error) from error
    key = (path, is_deck, pspice, status.st_mtime_ns, status.st_size, status.st_ino, status.st_dev)
    with _lock:
        source = _cache.get(key)
        if source is not None:
            _cache.move_to_end(key)
            return source
    content = read_bytes(path)
    file = DeckFile(path, decode(content), hashlib.sha256(content).hexdigest())
    source = split_source(file, is_deck=is_deck, pspice=pspice)
    if time.time_ns() - status.st_mtime_ns < _YOUNGEST_KEPT:
        return source
    with _lock:
        _cache[key] = source
        kept = sum(entry[4] for entry in _cache)
        while len(_cache) > _CACHED_FILES or (kept > _CACHED_CHARACTERS and len(_cache) > 1):
            kept -= _cache.popitem(last=False)[0][4]
    return source


def read_bytes(path: str) -> bytes:
    """Read a regular file of bounded size; nothing else is ever opened for reading.

    Parameters
    ----------
    path : str
        The file.

    Returns
    -------
    bytes

    Raises
    ------
    MissingFileError
        If the file cannot be opened.
    ForbiddenDeckError
        If it is a folder, a device or a pipe, or larger than `LARGEST_FILE`.
    """
    try:
        _check_status(path, os.stat(path))
        # Looked at again once open, as the name may point elsewhere by then. Without O_NONBLOCK
        # a pipe without a writer would stop the program here.
        handle = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_NOCTTY | os.O_CLOEXEC)
    except (OSError, ValueError) as error:
        if isinstance(error, DeckError):
            raise
        raise _missing(path, error) from error
    try:
        _check_status(path, os.fstat(handle))
        with open(handle, "rb", closefd=False) as stream:
            return stream.read(LARGEST_FILE)
    finally:
        os.close(handle)


def _check_status(path: str, status: os.stat_result) -> None:
    if not stat.S_ISREG(status.st_mode):
        raise ForbiddenDeckError(
            "a deck is made of regular files, but this is a folder, a device or a pipe", file=path
        )
    if status.st_size > LARGEST_FILE:
        raise ForbiddenDeckError(
            f"the file holds {status.st_size} byte, at most {LARGEST_FILE} are read",
            hint="Split the file, or include only the part that the deck needs.",
            file=path,
        )


def _missing(path: str, error: Exception) -> MissingFileError:
    return MissingFileError(
        f"the file cannot be read: {getattr(error, 'strerror', None) or error}", file=path
    )


def decode(content: bytes) -> str:
    """Decode a deck file.

    Parameters
    ----------
    content : bytes
        Its bytes.

    Returns
    -------
    str
        UTF-8 with or without a mark, UTF-16 with a mark, else Latin-1.
    """
    if content.startswith((b"\xff\xfe", b"\xfe\xff")):
        return content.decode("utf-16", errors="replace")
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError:
        return content.decode("latin-1")


def split_source(file: DeckFile, *, is_deck: bool, pspice: bool = False) -> Source:
    """Cut a file into logical lines.

    Parameters
    ----------
    file : DeckFile
        The file.
    is_deck : bool
        Whether its first line is a title.
    pspice : bool
        Whether "$" starts no comment.

    Returns
    -------
    Source

    Raises
    ------
    UnsupportedDeckError
        If the file is binary or a command script.
    """
    if "\0" in file.text:
        raise UnsupportedDeckError(
            "the file holds NUL characters: it is binary or encrypted",
            hint="Export a waveform from the program that can read it, and run on that waveform.",
            file=file.path,
        )
    physical = file.text.split("\n")
    title = physical[0].strip(_SPACE) if is_deck else ""
    if title.lower().startswith("*ng_script"):
        raise UnsupportedDeckError(
            "the file is a script of ngspice commands, not a deck", file=file.path, line=1
        )
    splitter = _Splitter(file.path, pspice)
    for number in range(1 if is_deck else 0, len(physical)):
        if not splitter.take(physical[number], number + 1):
            break
    splitter.finish()
    lines = tuple(splitter.lines)
    marks = tuple(
        index
        for index, line in enumerate(lines)
        if line.text[0] == "."
        and (line.text[:4].lower() in _CARD_WITH_PATH or line.text[:5].lower() == ".endl")
    )
    return Source(file, title, lines, marks, _sections(lines, marks), tuple(splitter.notices))


def card_arguments(text: str) -> list[str]:
    """Give the arguments of a `.include`, `.lib` or `.endl` card.

    Parameters
    ----------
    text : str
        The card's line.

    Returns
    -------
    list of str
        Quotes are taken off.
    """
    found = re.findall(r'"([^"]*)"|\'([^\']*)\'|([^\s"\']+)', text.partition(" ")[2])
    return [first or second or third for first, second, third in found]


def _sections(lines: tuple[SourceLine, ...], marks: tuple[int, ...]) -> dict[str, tuple[int, int]]:
    sections: dict[str, tuple[int, int]] = {}
    name, start = "", -1
    for index in marks:
        card = lines[index].text[:5].lower()
        arguments = card_arguments(lines[index].text)
        if card == ".endl":
            if start >= 0:
                sections.setdefault(name, (start, index))  # ngspice takes the first of two.
            start = -1
        elif card[:4] == ".lib" and len(arguments) == 1 and start < 0:
            name, start = arguments[0].lower(), index + 1
    return sections


class _Splitter:
    """Joins physical lines to logical ones; one per file."""

    def __init__(self, path: str, pspice: bool) -> None:
        self.path = path
        self.lines: list[SourceLine] = []
        self.notices: list[str] = []
        self._comment = _COMMENT_PSPICE if pspice else _COMMENT
        self._pieces: list[str] = []  # of the logical line that may still be continued
        self._first = 0
        self._glue = False  # The last line ended with two backslashes.
        self._commands: list[str] | None = None  # of the command block that is open
        self._block = 0
        self._hidden: list[tuple[str, int]] | None = None  # lines between .prot and .unprot

    def take(self, raw: str, number: int) -> bool:
        """Take one physical line; False when ngspice would read no further."""
        line = raw.strip(_SPACE)
        if not line:
            return True
        first = line[0]
        if self._commands is not None:
            self._inside_block(line)
        elif self._hidden is not None and not line.lower().startswith(".unprot"):
            self._hidden.append((line, number))
        elif first == "*" or first == "$" or line.startswith("//"):
            self._comment_line(line, number)
        elif first == ";":
            pass
        elif first == "@":
            self.notices.append(
                f"{self.path}:{number}: a line that starts with '@' ends the file for ngspice; "
                "the rest is left out"
            )
            return False
        else:
            self._text(line, number)
        return True

    def _comment_line(self, line: str, number: int) -> None:
        if _ENCRYPTED.match(line):
            self._close()
            self.lines.append(SourceLine(ENCRYPTED_CARD, self.path, number))
        elif line.startswith("*#"):
            self.notices.append(
                f"{self.path}:{number}: command comment left out, it is never run: "
                f"{_words([line[2:]])}"
            )

    def _text(self, line: str, number: int) -> None:
        glued, self._glue = self._glue, line.endswith("\\\\")
        if self._glue:
            line = line[:-2]
        card = line[:8].lower() if line[:1] == "." and not glued else ""
        if ";" in line or "$" in line or "//" in line:
            rule = _COMMENT_PATH if card[:4] in _CARD_WITH_PATH else self._comment
            found = rule.search(line)
            if found:
                line = line[: found.start()]
        if not (line.isascii() and line.isprintable()):
            line = line.translate(_TRANSLATION)
        line = line.strip()
        if line.startswith("+") or glued:
            if not self._pieces:
                self._first = number
            elif line.startswith("+"):
                line = line[1:].strip()
            self._pieces.append(line)
            return
        self._close()
        if card == ".control":
            self._commands, self._block = [], number
        elif card[:5] == ".prot":
            self._hidden = []
        elif card[:7] == ".unprot":
            self._reveal(number)
        elif line:
            self._pieces, self._first = [line], number

    def _inside_block(self, line: str) -> None:
        assert self._commands is not None
        if line.lower().startswith(".endc"):
            self._end_block("")
        elif line[0] not in "*$;+":
            self._commands.append(line)

    def _end_block(self, remark: str) -> None:
        assert self._commands is not None
        words = _words(self._commands) or "empty"
        self.notices.append(
            f"{self.path}:{self._block}: .control block left out, it is never run: {words}{remark}"
        )
        self._commands = None

    def _reveal(self, number: int) -> None:
        hidden, self._hidden = self._hidden or [], None
        if all(_READABLE.match(line) and line.isprintable() for line, _ in hidden):
            for line, at in hidden:
                self.take(line, at)
        else:
            self.lines.append(SourceLine(ENCRYPTED_CARD, self.path, number))

    def _close(self) -> None:
        if self._pieces:
            text = " ".join(self._pieces) if len(self._pieces) > 1 else self._pieces[0]
            self.lines.append(SourceLine(text, self.path, self._first))
            self._pieces = []

    def finish(self) -> None:
        """Close what is still open at the end of the file."""
        if self._hidden is not None:
            self._reveal(0)
        if self._commands is not None:
            self._end_block(
                "; without .endc, so that everything to the end of the file is left out"
            )
        self._close()


def _words(commands: list[str], most: int = 12) -> str:
    words = [shortened(line.split(None, 1)[0]) for line in commands if line.split()]
    names = list(dict.fromkeys(words))
    return ", ".join(names[:most]) + (", ..." if len(names) > most else "")
