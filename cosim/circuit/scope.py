"""Scopes and elements: what a subcircuit holds, and how an element line is cut up."""

import re
from dataclasses import dataclass, field

from cosim.circuit.cards import assignments, leading_words, word_spans, words

GROUND = frozenset({"0", "gnd"})

# Letter -> number of nodes that must be there.
FIXED_NODES = {
    "r": 2, "c": 2, "l": 2, "v": 2, "i": 2, "b": 2, "e": 2, "f": 2, "g": 2, "h": 2, "d": 2,
    "j": 3, "z": 3, "q": 3, "m": 3, "s": 4, "t": 4, "o": 4, "y": 4, "u": 3, "w": 2, "k": 0,
}  # fmt: skip
MODEL_PLACE = {"d": 3, "j": 4, "z": 4, "q": 4, "m": 5, "s": 5, "o": 5, "y": 5, "u": 4, "w": 4}
_MOST_EXTRA_NODES = {"d": 1, "q": 2, "m": 3}
_IN_EXPRESSION = re.compile(r"(?<![\w.])v\s*\(\s*([^\s,()]+)\s*(?:,\s*([^\s,()]+)\s*)?\)", re.I)
_PORT = re.compile(r"(?:%\w+\s*)?\[[^\[\]]*\]|%\w+\s*\([^()]*\)|%\w+|[^\s\[\]()%]+")
_MOST_DIGITS = 6  # of a number of controlling nodes; Python refuses to read 5000
_EVENT_ONLY = frozenset({"d_to_real", "real_delay", "real_gain"})
_ANALOG_PORT = {"adc_bridge": 0, "bidi_bridge": 0, "dac_bridge": -1, "real_to_v": -1}


@dataclass(slots=True, eq=False)
class Scope:
    """A subcircuit definition, or the top level (empty name).

    Parameters
    ----------
    name : str
        Name in lower case.
    ports : tuple of str
        Its nodes in lower case.
    parameters : tuple of str
        Parameters that its header declares.
    parent : Scope or None
        The scope in which it is defined.
    first, stop : int
        Index of its header and one past its `.ends`.
    elements : dict of str to list of int
        Element in lower case -> indices of its lines; more than one where branches of an `.if`
        hold the same name.
    uncertain : set of int
        Indices of elements of which cannot be told whether they are there.
    models : dict of str to str
        Model -> type; a binned model "nch.1" also counts as "nch".
    cards : dict of str to int
        Model -> index of its (first) card.
    inner : dict of str to Scope
        Definitions inside this one.
    nodes : frozenset of str or None
        Filled in when the nodes are first asked for.
    """

    name: str
    ports: tuple[str, ...]
    parameters: tuple[str, ...]
    parent: "Scope | None"
    first: int
    stop: int
    elements: dict[str, list[int]] = field(default_factory=dict)
    uncertain: set[int] = field(default_factory=set)
    models: dict[str, str] = field(default_factory=dict)
    cards: dict[str, int] = field(default_factory=dict)
    inner: dict[str, "Scope"] = field(default_factory=dict)
    nodes: frozenset[str] | None = None

    def subcircuit(self, name: str) -> "Scope | None":
        """Find a definition by its name, from here outwards."""
        scope: Scope | None = self
        while scope is not None:
            if name in scope.inner:
                return scope.inner[name]
            scope = scope.parent
        return None

    def model(self, name: str) -> str | None:
        """Find a model's type by its name, from here outwards."""
        scope: Scope | None = self
        while scope is not None:
            if name in scope.models:
                return scope.models[name]
            scope = scope.parent
        return None

    def card(self, name: str) -> int | None:
        """Find the index of a model's card by its name, from here outwards."""
        scope: Scope | None = self
        while scope is not None:
            if name in scope.cards:
                return scope.cards[name]
            scope = scope.parent
        return None

    def visible_models(self) -> set[str]:
        """Names of all models that can be used here."""
        return set(self.models) | (self.parent.visible_models() if self.parent else set())

    def visible_subcircuits(self) -> set[str]:
        """Names of all subcircuits that can be used here."""
        return set(self.inner) | (self.parent.visible_subcircuits() if self.parent else set())


@dataclass(frozen=True, slots=True)
class Element:
    """An element line cut up.

    Parameters
    ----------
    name, letter : str
        Name in lower case, and its first letter.
    nodes : tuple of str
        Nodes in lower case.
    reference : str
        The word that names its model or subcircuit; "" when it needs none.
    """

    name: str
    letter: str
    nodes: tuple[str, ...]
    reference: str


def element_of(scope: Scope, text: str) -> Element:
    """Cut up an element line.

    Parameters
    ----------
    scope : Scope
        Where it stands: models tell how many nodes a transistor has.
    text : str
        The line.

    Returns
    -------
    Element
        Nodes in lower case, in their order; those of controlling voltages come last.
    """
    found = leading_words(text)
    name = found[0] if found else text.split(None, 1)[0].lower()
    letter = name[0]
    if letter == "x":
        return Element(name, letter, found[1:-1], found[-1] if len(found) > 1 else "")
    if letter == "a":
        return _code_model(scope, name, text)
    if letter == "p":
        return Element(name, letter, found[1:-1], found[-1] if len(found) > 1 else "")
    everything = words(text)
    count = FIXED_NODES.get(letter, 0)
    if letter == "m" and len(everything) > 4 and scope.model(everything[4]) == "vdmos":
        return Element(name, letter, everything[1:4], everything[4])
    nodes = everything[1 : 1 + count]
    reference = ""
    if letter in MODEL_PLACE:
        place = MODEL_PLACE[letter]
        most = place + _MOST_EXTRA_NODES.get(letter, 0)
        reference = everything[place] if len(everything) > place else ""
        if letter != "w":  # Its third word is the source whose current it senses.
            nodes = everything[1:place]
            for at in range(place, min(most, len(everything) - 1) + 1):
                if scope.model(everything[at]) is not None:
                    reference, nodes = everything[at], everything[1:at]
                    break
    elif letter in "eg":
        nodes += _controlling_nodes(everything)
    if letter in "begrcl":
        mentioned = [node for pair in _IN_EXPRESSION.findall(text) for node in pair if node]
        nodes += tuple(node.lower() for node in mentioned)
    return Element(name, letter, nodes, reference)


def _controlling_nodes(found: tuple[str, ...]) -> tuple[str, ...]:
    if len(found) > 4 and found[3] == "poly":
        count = int(found[4]) if found[4].isdecimal() and len(found[4]) <= _MOST_DIGITS else 0
        return found[5 : 5 + 2 * count]
    keyword = len(found) > 3 and found[3] in ("value", "vol", "cur", "table", "laplace", "freq")
    if keyword or "=" in found[3:5]:
        return ()
    return found[3:5]


def _code_model(scope: Scope, name: str, text: str) -> Element:
    """Cut up an A-device; nodes that carry events are not in the plot and are left out."""
    ports = [port.lower() for port in _PORT.findall(text)][1:]
    reference = ports.pop() if ports else ""
    kind = scope.model(reference) or ""
    if kind in _EVENT_ONLY or (kind.startswith("d_") and kind != "d_dt"):
        ports = []
    elif kind in _ANALOG_PORT and ports:
        ports = [ports[_ANALOG_PORT[kind]]]
    nodes: list[str] = []
    for port in ports:
        if port.startswith("%vnam"):
            continue
        for word in re.findall(r"[^\s\[\](),~]+", re.sub(r"%\w+", " ", port)):
            if word != "null":
                nodes.append(word)
    return Element(name, "a", tuple(nodes), reference)


VALUE_NAMES = {
    "r": ("value", "r", "resistance"),
    "c": ("value", "c", "capacitance"),
    "l": ("value", "l", "inductance"),
    "v": ("value", "dc"),
    "i": ("value", "dc"),
}
"""Element letter -> names under which its value in the fourth place can be given."""


def value_place(scope: Scope, text: str) -> tuple[int, int]:
    """Find the value of a resistor, capacitor or inductor.

    Parameters
    ----------
    scope : Scope
        Where it stands: a model's name may come before the value.
    text : str
        The line.

    Returns
    -------
    tuple of (int, int)
        Index of its first character and of what follows it; equal where there is none and one
        may be put in.
    """
    found = assignments(text)
    for item in found:
        if item.name in VALUE_NAMES[text[0].lower()]:
            return item.value_start, item.stop
    spans = word_spans(text[: found[0].start] if found else text)
    if len(spans) > 3 and scope.model(text[slice(*spans[3])].lower()) is not None:
        return spans[4] if len(spans) > 4 else (spans[3][0], spans[3][0])
    if len(spans) > 3:
        return spans[3]
    end = spans[2][1] if len(spans) == 3 else len(text)
    return end, end
