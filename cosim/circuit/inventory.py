"""The devices of a deck that make noise: what they are, and between which nets they stand."""

import re
from collections.abc import Iterator
from dataclasses import dataclass

from cosim.circuit.cards import assignments
from cosim.circuit.deck import Deck
from cosim.circuit.expression import spice_number
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.lookup import find_node, instances
from cosim.circuit.scope import Element, Scope, element_of
from cosim.errors import DeckError

KINDS = {"r": "resistor", "m": "mos", "j": "jfet", "d": "diode", "q": "bipolar"}
_OTHERS = {"s": "a switch", "w": "a switch", "z": "a MESFET"}
_MOST_DEVICES = 20_000
_BEHAVIOURAL = re.compile(r"(?<![\w.])[vi]\s*\(", re.IGNORECASE)
_BENDING = re.compile(r"(?<![\w.])([vi]\s*\(|poly\b|table\b)", re.IGNORECASE)
_SERIES = {"m": ("rd", "rs", "rsh", "rg"), "j": ("rd", "rs"), "d": ("rs",), "q": ("rb", "rc", "re")}


@dataclass(frozen=True, slots=True)
class NoisyDevice:
    """A device that makes noise.

    Parameters
    ----------
    name : str
        Its name in ngspice: "r1", "m.x1.m1".
    kind : str
        "resistor", "mos", "jfet", "diode" or "bipolar".
    nodes : tuple of str
        The nets of its terminals as ngspice has them, in the order of its line; "0" for ground.
    model : str
        Its model's name in lower case; "" where it has none.
    card : str
        The line of its model; "" where it has none.
    """

    name: str
    kind: str
    nodes: tuple[str, ...]
    model: str
    card: str


@dataclass(frozen=True, slots=True)
class Inventory:
    """What makes noise in a deck.

    Parameters
    ----------
    devices : tuple of NoisyDevice
        In the order of the deck, instances after the elements of their scope.
    left_out : tuple of str
        What makes noise and is none of them, with the reason: "s1: a switch".
    """

    devices: tuple[NoisyDevice, ...]
    left_out: tuple[str, ...]


def noisy_devices(deck: Deck) -> Inventory:
    """Find the devices of a deck that make noise.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    Inventory
        Resistors (those with `noisy=0` are silent and not in it), MOS and junction field-effect
        transistors, diodes and bipolar transistors, through all instances. Left out are switches,
        MESFETs, resistors that are an expression of voltages, and elements in a branch of an `.if`
        of which cannot be told whether it is there; transistors and diodes with series resistances
        are in it, and what their resistances add is named as left out.

    Raises
    ------
    DeckError
        If the deck's structure is wrong, or it has more than 20000 such devices.
    """
    structure = structure_of(deck.lines)
    devices: list[NoisyDevice] = []
    left_out: list[str] = []
    for prefix, scope, element, index in _elements(structure, structure.root, ""):
        name = _flat(prefix, element)
        text = structure.lines[index].text
        if element.letter in _OTHERS:
            left_out.append(f"{name}: {_OTHERS[element.letter]}")
        if element.letter not in KINDS or _is_silent(text):
            continue
        if index in scope.uncertain:
            left_out.append(f"{name}: in a branch of an .if that is not told before the run")
            continue
        if element.letter == "r" and _BEHAVIOURAL.search(text):
            left_out.append(f"{name}: a resistor that is an expression, silent in ngspice too")
            continue
        place = scope.card(element.reference) if element.reference else None
        card = structure.lines[place].text if place is not None else ""
        series = _series(element.letter, card)
        if series:
            left_out.append(f"{name}: its series resistances {', '.join(series)}")
        count = 2 if element.letter in "rd" else len(element.nodes)
        nodes = tuple(find_node(deck, prefix + node) for node in element.nodes[:count])
        devices.append(NoisyDevice(name, KINDS[element.letter], nodes, element.reference, card))
        if len(devices) > _MOST_DEVICES:
            raise DeckError(f"more than {_MOST_DEVICES} devices make noise", file=deck.path)
    return Inventory(tuple(devices), tuple(left_out))


@dataclass(frozen=True, slots=True)
class IndependentSource:
    """A voltage or current source of a deck.

    Parameters
    ----------
    path : str
        "vin" or "x1.vin".
    name : str
        Its name in ngspice: "vin", "v.x1.vin".
    nodes : tuple of (str, str)
        The nets of its terminals as ngspice has them; "0" for ground.
    """

    path: str
    name: str
    nodes: tuple[str, str]

    @property
    def saves(self) -> tuple[str, ...]:
        """What a run saves for its value to be known."""
        if self.name[0] == "i":
            return (f"@{self.name}[current]",)
        return tuple(f"v({node})" for node in self.nodes if node != "0")


def independent_sources(deck: Deck) -> tuple[IndependentSource, ...]:
    """Find the voltage and current sources of a deck.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    tuple of IndependentSource
        Through all instances; without those in a branch of an `.if` of which cannot be told
        whether it is there.
    """
    structure = structure_of(deck.lines)
    found = []
    for prefix, scope, element, index in _elements(structure, structure.root, ""):
        if element.letter in "vi" and index not in scope.uncertain:
            first, second = (find_node(deck, prefix + node) for node in element.nodes[:2])
            path = prefix + element.name
            found.append(IndependentSource(path, _flat(prefix, element), (first, second)))
    return tuple(found)


def unobserved_elements(deck: Deck) -> tuple[str, ...]:
    """Find the elements that may change with time and of which no run tells whether they do.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    tuple of str
        Names in ngspice of switches, MESFETs, behavioural and polynomial elements, code models
        (but for those that play a stimulus) and compiled models, through all instances.
    """
    structure = structure_of(deck.lines)
    found = []
    for prefix, _, element, index in _elements(structure, structure.root, ""):
        text = structure.lines[index].text
        plays = element.letter == "a" and element.name.startswith("astimulus_")
        bends = element.letter in "rclefgh" and _BENDING.search(text)
        if bends or (element.letter in "swzbanu" and not plays):
            found.append(_flat(prefix, element))
    return tuple(found)


def device_names(deck: Deck) -> tuple[tuple[str, str], ...]:
    """Give the devices of a deck, flattened.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    tuple of (str, str)
        Name in ngspice ("r1", "m.x1.m1") and element letter of each.
    """
    structure = structure_of(deck.lines)
    return tuple(
        (_flat(prefix, element), element.letter)
        for prefix, _, element, _ in _elements(structure, structure.root, "")
    )


def _flat(prefix: str, element: Element) -> str:
    return f"{element.letter}.{prefix}{element.name}" if prefix else element.name


def _elements(
    structure: Structure, scope: Scope, prefix: str
) -> Iterator[tuple[str, Scope, Element, int]]:
    """Give every element of the flattened deck with the prefix of its name."""
    for indices in scope.elements.values():
        # ngspice takes one of the lines that share a name; which one is uncertain, if there are
        # several, and then all of them are marked so.
        element = element_of(scope, structure.lines[indices[0]].text)
        if element.letter != "x":
            yield prefix, scope, element, indices[0]
    for name, definition in instances(structure, scope):
        yield from _elements(structure, definition, f"{prefix}{name}.")


def _is_silent(text: str) -> bool:
    silent = [item for item in assignments(text) if item.name in ("noisy", "noise")]
    return any(spice_number(item.value) == 0 for item in silent)


def _series(letter: str, card: str) -> list[str]:
    """Name the series resistances that a card has, other than zero."""
    wanted = _SERIES.get(letter, ())
    found = {item.name: item.value for item in assignments(card) if item.name in wanted}
    return [name for name, value in found.items() if spice_number(value) != 0]
