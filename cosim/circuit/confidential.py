"""What a record keeps of a deck when some of its files are confidential: path and SHA-256.

Process kits come under agreements that forbid copies. Files below a named folder are kept without
their text, the deck as sent without the lines that come from them, and of the simulator's words
only those that cannot quote a line of a deck.
"""

import os
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import groupby

from cosim.circuit.analysis import TransientResult
from cosim.circuit.deck import DataFile, Deck, DeckFile, unique
from cosim.errors import DeckError

# Lines of ngspice's log that tell of the run, not of a line of the deck.
_OF_THE_RUN = re.compile(
    r"Note: (?:No )?compatibility mode|Circuit: |option SCALE: |Doing analysis at TEMP"
    r"|Initial Transient Solution|No\. of Data Rows|Reference value|Reducing trtol"
    r"|Checking parameters for |(?:Note|Warning): (?:Starting|Transient op|singular matrix|.*"
    r"(?:gmin|source) stepping)|Trying gmin|Using ",
    re.IGNORECASE,
)
_HARMLESS = re.compile(r"singular matrix at node |the operating point was found by ")
_HARMLESS_WHERE_PUBLIC = re.compile(r"ngspice takes 1 mOhm ")
_PLACE = re.compile(r"(.+?):\d+: ")


@dataclass(frozen=True, slots=True)
class Roots:
    """Folders whose files are confidential.

    Parameters
    ----------
    folders : tuple of str
        The folders, by name and with symbolic links resolved.
    """

    folders: tuple[str, ...] = ()

    def cover(self, path: str) -> bool:
        """Tell whether a file lies below one of the folders, by its name or by where it leads.

        Parameters
        ----------
        path : str
            The file; empty for lines that the bridge adds.

        Returns
        -------
        bool
        """
        if not path or not self.folders:
            return False
        places = (os.path.abspath(path), os.path.realpath(path))
        return any(
            os.path.commonpath([place, folder]) == folder
            for folder in self.folders
            for place in places
        )


def confidential_roots(folders: Sequence[str]) -> Roots:
    """Look at the folders whose files are confidential.

    Parameters
    ----------
    folders : sequence of str
        The folders.

    Returns
    -------
    Roots

    Raises
    ------
    DeckError
        If one is not there: a folder with a wrong name would protect nothing.
    """
    named: list[str] = []
    for folder in folders:
        if not os.path.isdir(folder):
            raise DeckError(f"confidential folder {os.path.abspath(folder)} is not a folder")
        named += [os.path.abspath(folder), os.path.realpath(folder)]
    return Roots(unique(named))


def check_roots(deck: Deck, roots: Roots) -> tuple[str, ...]:
    """Look whether the confidential lines of a deck can be told from the others.

    Parameters
    ----------
    deck : Deck
        The deck.
    roots : Roots
        Confidential folders.

    Returns
    -------
    tuple of str
        A notice when the deck reads no confidential file.

    Raises
    ------
    DeckError
        If a line of a confidential file goes on in another file, or the other way round.
    """
    for path in deck.joined:
        if roots.cover(path):
            raise DeckError(
                "a line goes on in another file, so that what is confidential cannot be told apart",
                hint="write the line and its continuation ('+') into one file",
                file=path,
            )
    if roots.folders and not any(roots.cover(file.path) for file in deck.files):
        return (f"no file of the deck lies in a confidential folder: {', '.join(roots.folders)}",)
    return ()


def kept_files(files: Sequence[DeckFile], roots: Roots) -> tuple[DeckFile, ...]:
    """Take the text off confidential files.

    Parameters
    ----------
    files : sequence of DeckFile
        Every file that was read.
    roots : Roots
        Confidential folders.

    Returns
    -------
    tuple of DeckFile
        Confidential ones with path and SHA-256 only.
    """
    return tuple(
        DeckFile(file.path, "", file.sha256) if roots.cover(file.path) else file for file in files
    )


def withhold(result: TransientResult, deck: Deck, roots: Roots) -> TransientResult:
    """Take out of a run's record what stands in confidential files.

    Parameters
    ----------
    result : TransientResult
        The run.
    deck : Deck
        Its deck.
    roots : Roots
        Confidential folders; without any the result is as it was.

    Returns
    -------
    TransientResult
        The deck as sent without the lines that come from confidential files: a comment says how
        many lines of which file with which SHA-256 stood there. Of their data files a like text is
        kept; of the log and of the simulator's warnings only what cannot quote them.
    """
    if not roots.folders:
        return result
    return replace(
        result,
        deck=kept_lines(result.deck, result.origins, deck.files, roots),
        data=_kept_data(result.data, deck.data_files, roots),
        log=kept_log(result.log, roots),
        warnings=_kept_warnings(result, roots),
        remarks=(),
        origins=(),
    )


def kept_lines(
    lines: Sequence[str],
    origins: Sequence[tuple[str, int]],
    files: Sequence[DeckFile],
    roots: Roots,
) -> tuple[str, ...]:
    """Take the lines that come from confidential files out of a deck as it is sent.

    Parameters
    ----------
    lines : sequence of str
        The deck.
    origins : sequence of (str, int)
        File and line of each.
    files : sequence of DeckFile
        Every file that was read.
    roots : Roots
        Confidential folders.

    Returns
    -------
    tuple of str
        A comment says how many lines of which file with which SHA-256 stood there.
    """
    sums = {file.path: file.sha256 for file in files}
    covered = {path: roots.cover(path) for path in {path for path, _ in origins}}
    kept: list[str] = []
    pairs = zip(lines, (path for path, _ in origins), strict=True)
    for path, run in groupby(pairs, key=lambda pair: pair[1]):
        texts = [text for text, _ in run]
        if covered[path]:
            texts = [f"* {len(texts)} lines of {path} (SHA-256 {sums[path]}) are left out here"]
        kept += texts
    return tuple(kept)


def _kept_data(data: dict[str, bytes], files: Sequence[DataFile], roots: Roots) -> dict[str, bytes]:
    left_out = {
        file.name: f"* {file.path} (SHA-256 {file.sha256}) is left out here\n".encode()
        for file in files
        if roots.cover(file.path)
    }
    return {name: left_out.get(name, content) for name, content in data.items()}


def kept_log(log: Sequence[str], roots: Roots) -> tuple[str, ...]:
    """Take out of a log what may quote a confidential file.

    Parameters
    ----------
    log : sequence of str
        Lines of the simulator's log.
    roots : Roots
        Confidential folders; without any the log is as it was.

    Returns
    -------
    tuple of str
        The lines that tell of the run, and how many were left out.
    """
    if not roots.folders:
        return tuple(log)
    kept = [line for line in log if not line or _OF_THE_RUN.match(line)]
    if len(kept) < len(log):
        kept.append(f"({len(log) - len(kept)} lines that may quote confidential files left out)")
    return tuple(kept)


def _kept_warnings(result: TransientResult, roots: Roots) -> tuple[str, ...]:
    said = set(result.remarks)
    return unique(_kept_remark(text, roots) if text in said else text for text in result.warnings)


def _kept_remark(text: str, roots: Roots) -> str:
    place = _PLACE.match(text)
    public = place is not None and not roots.cover(place[1])
    words = text[place.end() :] if place else text
    if _HARMLESS.match(words) or (public and _HARMLESS_WHERE_PUBLIC.match(words)):
        return text
    return (
        f"{place[0] if place else ''}a warning of ngspice is left out, since it may quote a "
        "confidential file; it shows in a run without the key 'confidential'"
    )
