"""Altered copies of a deck: parameters, single instances, terminations."""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import replace

from cosim.circuit.cards import assignments, masked, number_text, word_spans
from cosim.circuit.copies import Edit, edited_lines
from cosim.circuit.deck import Deck, SourceLine, shortened
from cosim.circuit.hierarchy import (
    Structure,
    declared_parameters,
    structure_of,
    top_level_cards,
)
from cosim.circuit.lookup import find_node
from cosim.circuit.scope import VALUE_NAMES, Scope, element_of, value_place
from cosim.circuit.settings import with_settings
from cosim.errors import InputError, UnknownNameError, near_names

_WAVEFORMS = frozenset(
    {
        "pulse", "sin", "exp", "pwl", "sffm", "am", "trnoise", "trrandom", "external", "ac",
        "distof1", "distof2", "portnum", "z0",
    }
)  # fmt: skip
"""Words of a source before which its DC value may be put."""


def with_parameters(deck: Deck, parameters: Mapping[str, float]) -> Deck:
    """Set top-level parameters of a deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    parameters : mapping of str to float
        Name of a `.param` or `.csparam` in any case -> value in the deck's units.

    Returns
    -------
    Deck
        Every top-level assignment of these names has the new value; what is worked out from
        them follows, and so do `tran` and `temperature`.

    Raises
    ------
    UnknownNameError
        If the deck has no such parameter at its top level.
    InputError
        If a value is not finite.
    """
    if not parameters:
        return deck
    wanted = {name.strip().lower(): _finite(name, value) for name, value in parameters.items()}
    lines = list(deck.lines)
    known: set[str] = set()
    for index, line, card in top_level_cards(deck.lines):
        if card not in (".param", ".csparam"):
            continue
        found = assignments(line.text)
        known.update(item.name for item in found if "(" not in item.name)
        text = line.text
        for item in reversed(found):
            if item.name in wanted:
                value = number_text(wanted[item.name])
                text = text[: item.value_start] + value + text[item.stop :]
        if text != line.text:
            lines[index] = SourceLine(text, line.file, line.line)
    for name in wanted:
        if name not in known:
            raise UnknownNameError(
                f"the deck has no top-level parameter '{shortened(name)}'",
                hint=near_names(name, known),
                file=deck.path,
            )
    return with_settings(replace(deck, lines=tuple(lines)))


def _finite(name: str, value: float) -> float:
    if isinstance(value, bool | str) or not math.isfinite(value):
        raise InputError(f"'{shortened(name)}' must be a finite number, got {value!r}")
    return float(value)


def with_terminations(deck: Deck, nodes: Sequence[str], resistance: float) -> Deck:
    """Tie nodes to ground with resistors.

    Parameters
    ----------
    deck : Deck
        The deck.
    nodes : sequence of str
        Node names in any case, hierarchical ones with dots.
    resistance : float
        Each resistor in ohm.

    Returns
    -------
    Deck
        With one resistor per node; its name collides with none of the deck. It makes no noise.

    Raises
    ------
    UnknownNameError
        If a node does not exist.
    InputError
        If the resistance is not positive and finite, or a node is the ground.
    """
    if not (math.isfinite(resistance) and resistance > 0):
        raise InputError(f"a termination must be positive and finite, got {resistance!r} ohm")
    taken = structure_of(deck.lines).root.elements
    # A matched line at the probe: what the line itself radiates runs into the circuit, not along
    # with the circuit's own wave, so that the resistor that stands for it is silent.
    load = f"{number_text(resistance)} noisy=0"
    added: list[SourceLine] = []
    number = 0
    for node in dict.fromkeys(find_node(deck, name) for name in nodes):
        if node == "0":
            raise InputError("the ground needs no termination")
        number += 1
        while f"rtermination{number}" in taken:
            number += 1
        added.append(SourceLine(f"rtermination{number} {node} 0 {load}", "", 0))
    return replace(deck, lines=(*deck.lines, *added))


def with_instances(deck: Deck, instances: Mapping[str, Mapping[str, float]]) -> Deck:
    """Set parameters of single instances, all others of the same kind unchanged.

    Parameters
    ----------
    deck : Deck
        The deck.
    instances : mapping of str to mapping of str to float
        Instance ("x1.xdac", or a device inside, "x1.m3") -> parameter -> value. The value of a
        resistor, capacitor, inductor or DC source is its parameter "value".

    Returns
    -------
    Deck
        The definitions on the way to an instance are copied under names of their own.

    Raises
    ------
    UnknownNameError
        If an instance does not exist, or its subcircuit declares no such parameter.
    InputError
        If a value is not finite.
    """
    if not instances:
        return deck
    edits: dict[str, Edit] = {}
    for path, parameters in instances.items():
        values = {name: _finite(f"{path}.{name}", value) for name, value in parameters.items()}
        edits[path] = _setter({name.strip().lower(): value for name, value in values.items()})
    return with_settings(replace(deck, lines=edited_lines(deck, edits)))


def _setter(parameters: Mapping[str, float]) -> Edit:
    def edit(structure: Structure, scope: Scope, line: SourceLine) -> tuple[SourceLine, ...]:
        text = line.text
        for name, value in parameters.items():
            text = _with_parameter(structure, scope, line, text, name, value)
        return (SourceLine(text, line.file, line.line),)

    return edit


def _with_parameter(
    structure: Structure, scope: Scope, line: SourceLine, text: str, parameter: str, value: float
) -> str:
    element = element_of(scope, line.text)
    if element.letter == "x":
        definition = scope.subcircuit(element.reference)
        declared = declared_parameters(structure, definition) if definition else ()
        if parameter not in declared and parameter != "m":
            raise UnknownNameError(
                f"subcircuit '{definition.name if definition else '?'}' of '{element.name}' "
                f"declares no parameter '{parameter}'",
                hint=near_names(parameter, declared),
                file=line.file,
                line=line.line,
            )
    value_names = VALUE_NAMES.get(element.letter, ())
    same = value_names if parameter in value_names else (parameter,)
    for item in assignments(text):
        if item.name in same:
            return text[: item.value_start] + number_text(value) + text[item.stop :]
    if parameter in value_names:
        return _with_value(scope, text, value)
    return f"{text} {parameter}={number_text(value)}"


def _with_value(scope: Scope, text: str, value: float) -> str:
    """Replace the value in an element's fourth place, or the one after "dc" or a model's name."""
    number = number_text(value)
    if text[0] not in "vViI":
        start, stop = value_place(scope, text)
    else:
        match = re.search(r"(?<![\w.])dc(?:\s*=\s*|\s+)([^\s,]+)", masked(text), re.IGNORECASE)
        spans = [match.span(1)] if match else word_spans(text)[3:4]
        start, stop = spans[0] if spans else (len(text), len(text))
        if text[start:stop].lower() in _WAVEFORMS:
            stop = start
    if start < stop:
        return text[:start] + number + text[stop:]
    return " ".join(part for part in (text[:start].rstrip(), number, text[start:].strip()) if part)
