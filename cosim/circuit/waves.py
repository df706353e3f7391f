"""Independent sources as a deck writes them, and how long two of them agree.

Only what is certain is read: numbers, and expressions in braces or quotes. A source that says
anything else (AC values, noise, bare names) has no reading here.
"""

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from cosim.circuit.cards import words
from cosim.circuit.expression import spice_number

_FUNCTIONS = frozenset({"pulse", "sin", "exp", "pwl"})
_NODES = 2


@dataclass(frozen=True, slots=True)
class SourceWords:
    """The words of an independent source.

    Parameters
    ----------
    name : str
        In lower case.
    constant : str or None
        Text of the DC value; None where there is none.
    function : str
        "pulse", "sin", "exp", "pwl", or "" for a DC source.
    values : tuple of str
        Texts of the function's values.
    """

    name: str
    constant: str | None
    function: str
    values: tuple[str, ...]

    @property
    def shape(self) -> tuple[str, bool, str, int]:
        """What two sources must share so that one becomes the other by its values alone."""
        return self.name, self.constant is not None, self.function, len(self.values)

    @property
    def texts(self) -> tuple[str, ...]:
        """All texts of values, the DC value first."""
        return (*(() if self.constant is None else (self.constant,)), *self.values)


def source_words(text: str) -> SourceWords | None:
    """Read the line of an independent source.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    SourceWords or None
        None where the line holds anything but a DC value and one function of plain values.
    """
    found = list(words(text))
    if len(found) <= _NODES + 1 or found[0][0] not in "vi" or "=" in found[: _NODES + 1]:
        return None
    rest = found[_NODES + 1 :]
    constant = None
    if rest[0] == "dc":
        rest = rest[2:] if rest[1:2] == ["="] else rest[1:]
        if not rest or not _is_value(rest[0]):
            return None
    if _is_value(rest[0]):
        constant, rest = rest[0], rest[1:]
    if not rest:
        return SourceWords(found[0], constant, "", ())
    function, values = rest[0], tuple(rest[1:])
    if function not in _FUNCTIONS or not values or not all(map(_is_value, values)):
        return None
    return SourceWords(found[0], constant, function, values)


def _is_value(word: str) -> bool:
    # ngspice reads "5a" and "1mil" in braces otherwise than outside.
    if word[0] in "{'":
        return word[-1] == {"{": "}", "'": "'"}[word[0]]
    return spice_number(word) is not None and not re.search(r"(?:\d|\.)(?:a|mil)", word)


def agreement(source: SourceWords, first: Sequence[float], second: Sequence[float]) -> float:
    """Tell until when two sources of one shape have the same value and the same break points.

    A source sets ngspice's break points ahead of time, so that sources whose times differ anywhere
    do not share their first steps.

    Parameters
    ----------
    source : SourceWords
        Their shape.
    first, second : sequence of float
        Their values in the order of `SourceWords.texts`, in V or A, Hz, s and degrees.

    Returns
    -------
    float
        Time in s; infinite for equal sources, 0 where it cannot be told.
    """
    offset = 0 if source.constant is None else 1
    differing = [k - offset for k, (a, b) in enumerate(zip(first, second, strict=True)) if a != b]
    if not differing:
        return math.inf
    values = first[offset:]
    if source.function == "pwl":
        # Times stand in even places; two corners before the first other value it is still equal.
        if any(k < 0 or k % 2 == 0 for k in differing) or differing[0] < 3:
            return 0.0
        return max(0.0, float(values[differing[0] - 3]))
    # The level after the delay, and where the delay stands; of a sine the value before its delay
    # depends on the amplitude too unless the phase is zero.
    delay = {"pulse": 2, "exp": 2, "sin": 3}.get(source.function, len(values))
    phase = values[5] if source.function == "sin" and len(values) > 5 else 0.0
    if differing != [1] or delay >= len(values) or phase != 0.0:
        return 0.0
    return max(0.0, float(values[delay]))
