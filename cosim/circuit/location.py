"""From ngspice's words back to the author's file and line."""

import re
from collections.abc import Sequence

# "Error on line 5 or its substitute:", "Netlist line no. 4:", "Model issue on line 6 :".
_NUMBER = re.compile(r"\bline (?:no\. )?(\d+)")
# "r.x1.r1: resistance to low", "k1: coupling to", "in line b1", "check node mid", "Check line ...".
_ELEMENT = (
    re.compile(r"^(?:Warning: |Fatal error: )?([a-z][\w.#$+!<>\[\]-]*):\s", re.IGNORECASE),
    re.compile(r"\bin line (\S+)$"),
    re.compile(r"\binstance: x?(\S+?)\)?(?:\s|$)"),
    re.compile(r"\bInstance: (\S+)"),
)
_QUOTED = re.compile(r"(?:unknown subckt:|[Cc]heck line)\s+(\S.*)$")
_NAME = re.compile(r"\[([^\]\s]+)\]|'([^'\s]+)'|\"([^\"\s]+)\"|\bnode - (\S+?),|file (\S+)")


def locate(lines: Sequence[str], words: Sequence[str]) -> int | None:
    """Find the sent line that a message of ngspice speaks of.

    Parameters
    ----------
    lines : sequence of str
        The deck as sent.
    words : sequence of str
        The message's lines; often a line number or a quoted line, sometimes only a name.

    Returns
    -------
    int or None
        Index into `lines`; None when the message names nothing that can be found.
    """
    heads = [_head(line) for line in lines]
    for text, following in zip(words, [*words[1:], ""], strict=True):
        number = _NUMBER.search(text)
        if number and 1 <= int(number[1]) <= len(lines):
            index = int(number[1]) - 1
            # Where ngspice rewrote the deck its number is off, and the line that it quotes counts.
            quoted = _head(following)
            if quoted not in heads or heads[index] == quoted:
                return index
    for text in words:
        name = _QUOTED.search(text)
        if name:
            found = _quoted_line(lines, name[1])
            if found is not None:
                return found
        for pattern in _ELEMENT:
            match = pattern.search(text)
            found = _element(lines, match[1]) if match else None
            if found is not None:
                return found
    for text in words:
        found = _quoted_line(lines, text)
        if found is not None:
            return found
    for text in words:
        for match in _NAME.finditer(text):
            found = _mention(lines, next(filter(None, match.groups())))
            if found is not None:
                return found
    return None


def _head(line: str) -> str:
    words = line.split(None, 1)
    return words[0].lower() if words else ""


def _quoted_line(lines: Sequence[str], text: str) -> int | None:
    """Find a line that ngspice quotes, as it was sent or with its flattened element name."""
    wanted = " ".join(text.lower().split())
    for index, line in enumerate(lines[1:], start=1):
        if " ".join(line.lower().split()) == wanted:
            return index
    return _element(lines, _head(text)) if len(wanted.split()) > 2 else None


def _element(lines: Sequence[str], name: str) -> int | None:
    """Find the line of an element by its flattened name, "r.x1.x2.r5" or "x1.x2"."""
    path = name.lower().split(".")
    if len(path) > 1 and len(path[0]) == 1 and path[-1][:1] == path[0]:
        path = path[1:]  # ngspice puts the device's letter in front of a flattened name.
    scopes = _scopes(lines)
    scope = ""
    for depth, part in enumerate(path, start=1):
        found = next(
            (i for i, line in enumerate(lines) if scopes[i] == scope and i and _head(line) == part),
            None,
        )
        if found is None or depth == len(path):
            return found
        scope = _subcircuit(lines[found])
    return None


def _scopes(lines: Sequence[str]) -> list[str]:
    """Name of the subcircuit that each line stands in; "" at the top."""
    stack: list[str] = []
    scopes = []
    for line in lines:
        words = line.lower().split(None, 2)
        if words and words[0] == ".ends" and stack:
            stack.pop()
        scopes.append(stack[-1] if stack else "")
        if len(words) > 1 and words[0] == ".subckt":
            stack.append(words[1])
    return scopes


def _subcircuit(line: str) -> str:
    """Name of the subcircuit that an X line calls: the last word before the parameters."""
    words = re.sub(r"\s*=\s*", "=", line.lower()).split()
    plain = [word for word in words if "=" not in word and word != "params:"]
    return plain[-1]


def _mention(lines: Sequence[str], name: str) -> int | None:
    """Find the first line that holds a name as a word of its own."""
    word = re.compile(rf"(?<![\w.]){re.escape(name)}(?![\w.])", re.IGNORECASE)
    return next((i for i, line in enumerate(lines) if i and word.search(line)), None)
