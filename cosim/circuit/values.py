"""What the expressions of sources are worth, told by ngspice itself.

A deck of nothing but the parameters that they need, and one source per expression, is loaded for
many decks at once; the names of each deck's parameters get a prefix of their own.
"""

import math
import re
from collections.abc import Callable, Sequence

from cosim.circuit.client import client_of_this_process
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.likeness import card_of, definitions, names_in, needed
from cosim.circuit.waves import SourceWords

_AT_ONCE = 50  # decks
_TIME_LIMIT = 60.0  # s
_MEMORY_LIMIT = 2**31  # byte
_SAVED = 50  # vectors of one `.save` card


def source_values(
    prepared: Sequence[PreparedDeck], sources: Sequence[Sequence[SourceWords]]
) -> list[list[list[float]]]:
    """Work out the values of sources.

    Parameters
    ----------
    prepared : sequence of PreparedDeck
        Decks as sent, alike but for numbers of `.param` cards and for sources.
    sources : sequence of sequence of SourceWords
        Sources of each deck.

    Returns
    -------
    list of list of list of float
        Of each deck, of each source, its values in the order of `SourceWords.texts`, as the double
        that a load of the deck gives; empty where it cannot be told.

    Raises
    ------
    SimulatorCrashError, MissingDependencyError
        If the simulator's host died or does not start.
    """
    found: list[list[list[float]]] = []
    for start in range(0, len(sources), _AT_ONCE):
        part = slice(start, start + _AT_ONCE)
        values = _values(prepared[part], sources[part])
        if not values:
            return []
        found += values
    return found


def exact_text(value: float) -> str:
    """Write a double so that ngspice's `let` gives it exactly.

    Parameters
    ----------
    value : float
        A finite number.

    Returns
    -------
    str
        An integer below 2**53, which ngspice reads without rounding, times a power of two.
    """
    mantissa, exponent = math.frexp(value)
    return f"({int(mantissa * 2**53)})*2^({exponent - 53})" if value else "0"


def _values(
    prepared: Sequence[PreparedDeck], sources: Sequence[Sequence[SourceWords]]
) -> list[list[list[float]]]:
    lines: list[str] = []
    devices: dict[str, str] = {}  # text of a value -> the vector that tells it
    renamed: list[list[list[str]]] = []
    used = names_in(" ".join(text for own in sources for source in own for text in source.texts))
    places = _places(prepared[0].lines, needed(prepared[0].lines, used))
    if places is None:
        return []
    for number, (deck, own) in enumerate(zip(prepared, sources, strict=True)):
        defined = [definitions(deck.lines[index])[item] for index, item in places]
        rename = _renaming([item.name for item in defined], number)
        lines += [rename(item.card) for item in defined]
        renamed.append([[rename(text) for text in source.texts] for source in own])
        for text in (text for texts in renamed[-1] for text in texts):
            devices.setdefault(text, f"vqcosim{len(devices)}")
    vectors = {text: f"@{device}[dc]" for text, device in devices.items()}
    lines += [f"{device} n{device} 0 dc {text}" for text, device in devices.items()]
    keys = list(vectors.values())
    lines += [
        f".save {' '.join(keys[start : start + _SAVED])}" for start in range(0, len(keys), _SAVED)
    ]
    answer = client_of_this_process().run(
        lines=["values of sources", *lines, ".op", ".end"],
        commands=prepared[0].commands,
        plots="op",
        keys=keys,
        data={},
        time_limit=_TIME_LIMIT,
        memory_limit=_MEMORY_LIMIT,
        progress=None,
    )
    told = {name: float(values[0]) for name, values in answer.vectors.items() if values.size == 1}
    if set(told) != set(keys) or not all(map(math.isfinite, told.values())):
        return []
    return [[[told[vectors[text]] for text in texts] for texts in own] for own in renamed]


def _places(lines: Sequence[str], wanted: set[str]) -> list[tuple[int, int]] | None:
    """Give line and place of what defines some names; None where one has not one, at the top."""
    found: dict[str, tuple[int, int]] = {}
    depth = 0
    for index, line in enumerate(lines):
        card = card_of(line)
        depth += (card in (".subckt", ".if")) - (card in (".ends", ".endif"))
        for place, item in enumerate(definitions(line) if card else ()):
            if item.name in wanted:
                if depth or item.name in found or card == ".csparam":
                    return None
                found[item.name] = index, place
    return list(found.values())


def _renaming(defined: Sequence[str], number: int) -> Callable[[str], str]:
    """Give what puts a prefix before all defined names of a text."""
    if not defined:
        return str
    pattern = re.compile(rf"(?<![\w.])({'|'.join(defined)})(?!\w)", re.IGNORECASE)
    return lambda text: pattern.sub(rf"qcosim{number}_\1", text)
