"""Files of other programs, read whole, with errors of the package."""

import codecs
import re
from pathlib import Path

from cosim.errors import InputError, MissingFileError, WaveformError


def read_bytes(path: Path) -> bytes:
    """Read a file.

    Parameters
    ----------
    path : Path
        A regular file.

    Returns
    -------
    bytes
        Its content.

    Raises
    ------
    MissingFileError, InputError, WaveformError
        If there is no such file, it cannot be read, or it is empty.
    """
    try:
        if not path.exists():
            raise MissingFileError("there is no such file", file=str(path))
        if not path.is_file():
            raise InputError(f"{path}: wanted a file, got a folder or a device")
        data = path.read_bytes()
    except InputError:
        raise
    except (OSError, ValueError) as error:  # A NUL in the path is a ValueError.
        raise InputError(f"{path}: the file cannot be read: {error}") from None
    if not data or data.isspace():
        raise WaveformError(f"{path}: the file is empty")
    return data


def read_text(path: Path) -> str:
    """Read a text file of any origin.

    Parameters
    ----------
    path : Path
        UTF-8 with or without a byte order mark, UTF-16 with one, else Latin-1.

    Returns
    -------
    str
        The text with "\\n" at the end of lines.

    Raises
    ------
    MissingFileError, InputError, WaveformError
        If there is no such file, it cannot be read, or it is empty or binary.
    """
    data = read_bytes(path)
    if data.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        text = data.decode("utf-16", errors="replace")
    else:
        if data.find(b"\x00") >= 0 or re.search(rb"[\x01-\x08\x0e-\x1f\x7f]", data[:4096]):
            raise WaveformError(
                f"{path}: wanted a text file with columns of numbers, got a binary file",
                hint="save as CSV; a raw file of ngspice is read as one when its name ends in .raw",
            )
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = data.decode("latin-1")
    if not text or text.isspace():
        raise WaveformError(f"{path}: the file is empty")
    return text.replace("\r\n", "\n").replace("\r", "\n") if "\r" in text else text


def shorten(text: str, length: int = 60) -> str:
    """Cut a text for a message.

    Parameters
    ----------
    text : str
        Any text.
    length : int
        Most characters.

    Returns
    -------
    str
        The text, with "..." for what was cut.
    """
    return text if len(text) <= length else text[: length - 3] + "..."
