"""Finding nodes and devices by their hierarchical names, and the vectors that ngspice saves."""

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import islice

from cosim.circuit.deck import Deck, shortened
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.scope import GROUND, Scope, element_of
from cosim.errors import DeckError, ProbeError, UnknownNameError, near_names

_MOST_NODES = 1_000_000
_MOST_OFFERED = 2000
_BRANCH_LETTERS = frozenset("vleh")
_CURRENT = {
    "r": "i", "c": "i", "g": "i", "f": "i", "s": "i", "w": "i", "d": "id", "m": "id", "j": "id",
    "z": "id", "q": "ic", "i": "current",
}  # fmt: skip
_SAVE = re.compile(r"([vi])\s*\((.*)\)", re.DOTALL)
_PARAMETER = re.compile(r"@([^\s@]+)\[(\w+)\]")


def own_nodes(structure: Structure, scope: Scope) -> frozenset[str]:
    """Give the nodes that the elements of one scope name.

    Parameters
    ----------
    structure : Structure
        The deck's structure.
    scope : Scope
        The scope.

    Returns
    -------
    frozenset of str
        Names in lower case without a prefix, ground left out.
    """
    if scope.nodes is None:
        found: set[str] = set()
        for indices in scope.elements.values():
            for index in indices:
                found.update(element_of(scope, structure.lines[index].text).nodes)
        scope.nodes = frozenset(found - GROUND)
    return scope.nodes


def node_names(deck: Deck) -> frozenset[str]:
    """Give the nodes of a deck, flattened.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    frozenset of str
        Names in lower case as ngspice has them ("out", "x1.x2.mid"), ground left out.

    Raises
    ------
    DeckError
        If the deck's structure is wrong, or it has more than a million nodes.
    """
    structure = structure_of(deck.lines)
    names: set[str] = set()

    def add(scope: Scope, prefix: str) -> None:
        skip = structure.global_nodes | set(scope.ports)
        inner = own_nodes(structure, scope)
        if not prefix:
            names.update(inner)
        else:
            names.update(prefix + name for name in inner - skip)
            names.update(inner & structure.global_nodes)
        if len(names) > _MOST_NODES:
            raise DeckError(f"the deck has more than {_MOST_NODES} nodes", file=deck.path)
        for name, definition in instances(structure, scope):
            add(definition, f"{prefix}{name}.")

    add(structure.root, "")
    return frozenset(names)


def instances(structure: Structure, scope: Scope) -> list[tuple[str, Scope]]:
    """Give the subcircuit instances of a scope.

    Parameters
    ----------
    structure : Structure
        The deck's structure.
    scope : Scope
        The scope.

    Returns
    -------
    list of (str, Scope)
        Name and definition of each.
    """
    found = []
    for name, indices in scope.elements.items():
        if name[0] != "x":
            continue
        for index in indices:
            element = element_of(scope, structure.lines[index].text)
            definition = scope.subcircuit(element.reference)
            if definition is not None:
                found.append((name, definition))
    return found


def find_node(deck: Deck, name: str) -> str:
    """Find a node by its hierarchical name.

    Parameters
    ----------
    deck : Deck
        The deck.
    name : str
        Node name, in any case: "out", "x1.x2.mid"; a subcircuit's port seen from inside counts.

    Returns
    -------
    str
        The node as ngspice has it; the outer net for a port, "0" for ground.

    Raises
    ------
    UnknownNameError
        If there is no such node.
    DeckError
        If it is a port of an instance that branches of an `.if` tie to different nets.
    """
    structure = structure_of(deck.lines)
    found: dict[str, dict[str, None]] = {}
    deepest, missing = _Frame(structure.root, "", {}), ""
    for frame, rest in _ways(structure, name.strip().lower()):
        node = frame.net(structure, rest)
        known = rest in GROUND or rest in structure.global_nodes or rest in frame.outer
        if known or rest in own_nodes(structure, frame.scope):
            found.setdefault(frame.prefix, {})[node] = None
        if len(frame.prefix) >= len(deepest.prefix):
            deepest, missing = frame, rest
    if not found:
        raise UnknownNameError(
            f"node '{shortened(deepest.prefix + missing)}' does not exist",
            hint=near_names(deepest.prefix + missing, deepest.names(structure)),
            file=deck.path,
        )
    prefix, nodes = next(iter(found.items()))
    if len(nodes) > 1:
        raise DeckError(
            f"node '{shortened(name)}' is {' or '.join(nodes)}: '{prefix[:-1]}' stands in several "
            "branches of an .if inside a subcircuit, and which of them is there is not told before "
            "the run",
            hint=f"Name the net itself: {' or '.join(nodes)}.",
            file=deck.path,
        )
    return next(iter(nodes))


def _ways(structure: Structure, name: str) -> "Iterator[tuple[_Frame, str]]":
    """Give every instance that a hierarchical name may lead into, and the name from there on.

    An instance may hold dots in its own name, and stand in several branches of an `.if`.
    """
    todo = [(_Frame(structure.root, "", {}), name)]
    for frame, rest in todo:  # It grows while it is gone through.
        yield frame, rest
        parts = rest.split(".")
        for count in range(1, len(parts)) if rest[:1] == "x" else ():
            inner = frame.enter(structure, ".".join(parts[:count]))
            todo.extend((item, ".".join(parts[count:])) for item in inner)


@dataclass(frozen=True, slots=True)
class _Frame:
    """One instance: its definition, the prefix of its names, and where its ports are tied to."""

    scope: Scope
    prefix: str
    outer: dict[str, str]

    def net(self, structure: Structure, node: str) -> str:
        """Give ngspice's name of a node of this instance."""
        if node in GROUND:
            return "0"
        if node in structure.global_nodes:
            return node
        return self.outer.get(node, self.prefix + node)

    def enter(self, structure: Structure, name: str) -> "list[_Frame]":
        """Go into a subcircuit instance; several where branches of an `.if` tie it differently."""
        found: list[_Frame] = []
        for index in self.scope.elements.get(name, ()):
            element = element_of(self.scope, structure.lines[index].text)
            definition = self.scope.subcircuit(element.reference)
            if name[0] == "x" and definition is not None:
                nets = [self.net(structure, node) for node in element.nodes]
                ports = dict(zip(definition.ports, nets, strict=False))
                frame = _Frame(definition, f"{self.prefix}{name}.", ports)
                if frame not in found:
                    found.append(frame)
        return found

    def names(self, structure: Structure) -> list[str]:
        """Names to offer when one was not found here."""
        known = list(islice(own_nodes(structure, self.scope) | set(self.outer), _MOST_OFFERED))
        inner: list[str] = []
        for name, definition in islice(instances(structure, self.scope), 50):
            nodes = islice(own_nodes(structure, definition), 50)
            inner.extend(f"{name}.{node}" for node in nodes)
        return [self.prefix + name for name in known + inner]


@dataclass(frozen=True, slots=True)
class Device:
    """A device.

    Parameters
    ----------
    name : str
        Its name in ngspice, "l.x1.l3".
    letter : str
        Its element letter.
    text : str
        Its line.
    """

    name: str
    letter: str
    text: str


def find_device(deck: Deck, name: str) -> Device:
    """Find a device by its hierarchical name.

    Parameters
    ----------
    deck : Deck
        The deck.
    name : str
        "l1", "x1.l3", or as ngspice has it, "l.x1.l3".

    Returns
    -------
    Device

    Raises
    ------
    UnknownNameError
        If there is no such device.
    """
    structure = structure_of(deck.lines)
    wanted = name.strip().lower()
    spellings = [wanted]
    head, _, tail = wanted.partition(".")
    if len(head) == 1 and "." in tail and tail.rpartition(".")[2][:1] == head:
        spellings.append(tail)  # ngspice puts the device's letter in front of a flattened name.
    deepest, missing = _Frame(structure.root, "", {}), ""
    for spelling in spellings:
        for frame, rest in _ways(structure, spelling):
            if indices := frame.scope.elements.get(rest):
                flat = f"{rest[0]}.{frame.prefix}{rest}" if frame.prefix else rest
                return Device(flat, rest[0], structure.lines[indices[0]].text)
            if len(frame.prefix) >= len(deepest.prefix):
                deepest, missing = frame, rest
    part, dot, _ = missing.partition(".")
    what = f"instance '{deepest.prefix}{part}'" if dot else f"device '{wanted}'"
    names = [item for item, _ in instances(structure, deepest.scope)] if dot else None
    listed = islice(deepest.scope.elements if names is None else names, _MOST_OFFERED)
    raise UnknownNameError(
        f"{shortened(what)} does not exist",
        hint=near_names(deepest.prefix + part, [deepest.prefix + item for item in listed]),
        file=deck.path,
    )


def resolve_saves(deck: Deck, saves: Sequence[str]) -> dict[str, str]:
    """Give the name in ngspice's plot of each vector that is asked for.

    Parameters
    ----------
    deck : Deck
        The deck.
    saves : sequence of str
        "v(node)", "i(device)" or "@device[parameter]", hierarchical names with dots. The current
        of a device without a branch of its own is read from the device: i(r1) is @r1[i].

    Returns
    -------
    dict of str
        Expression in lower case -> name of the vector in ngspice's plot.

    Raises
    ------
    UnknownNameError
        If a node or device does not exist.
    ProbeError
        If an expression cannot be read, or a device has no current that ngspice saves.
    """
    return {save.strip().lower(): _vector(deck, save.strip().lower()) for save in saves}


def _vector(deck: Deck, save: str) -> str:
    match = _SAVE.fullmatch(save)
    if match and match[1] == "v":
        node = find_node(deck, match[2])
        if node == "0":
            raise ProbeError(f"'{shortened(save)}' is the ground, which is 0 V and not saved")
        # ngspice names the vector of a node that starts with a digit "V(3)".
        return f"V({node})" if node[0] in "0123456789" else node
    if match:
        return _current(_current_carrier(deck, match[2]), save)
    match = _PARAMETER.fullmatch(save)
    if match:
        return f"@{find_device(deck, match[1]).name}[{match[2]}]"
    raise ProbeError(
        f"'{shortened(save)}' is nothing that ngspice saves",
        hint="Write v(node), i(device) or @device[parameter].",
    )


def stimulus_meter(name: str) -> str:
    """Give the 0 V source that carries the current of a current source with a stimulus.

    Parameters
    ----------
    name : str
        The current source without the instance it is in, "iin".

    Returns
    -------
    str
        Name of the source in series, in the same scope.
    """
    return f"vstimulus_{name}"


def _current_carrier(deck: Deck, name: str) -> Device:
    """Find the device whose current is asked for, or what carries it under a stimulus."""
    try:
        return find_device(deck, name)
    except UnknownNameError:
        path, dot, last = name.strip().lower().removeprefix("i.").rpartition(".")
        try:
            return find_device(deck, f"{path}{dot}{stimulus_meter(last)}")
        except UnknownNameError:
            pass
        raise


def _current(device: Device, save: str) -> str:
    behavioural = re.search(r"(?<![\w.])[vi]\s*\(", device.text, re.IGNORECASE)
    polynomial = re.search(r"\bpoly\b", device.text, re.IGNORECASE)
    if device.letter == "b":
        voltage = re.search(r"(?<![\w.])v\s*=", device.text, re.IGNORECASE)
        return f"{device.name}#branch" if voltage else f"@{device.name}[i]"
    if not polynomial:
        if device.letter in _BRANCH_LETTERS and not (device.letter == "l" and behavioural):
            return f"{device.name}#branch"
        if device.letter in _CURRENT and not (device.letter in "rcl" and behavioural):
            return f"@{device.name}[{_CURRENT[device.letter]}]"
    raise ProbeError(
        f"ngspice saves no current for '{shortened(save)}'",
        hint="Put a source of 0 V in series in the deck and probe its current.",
    )


def save_expression(vector: str) -> str:
    """Give the `.save` item for the name of a vector.

    Parameters
    ----------
    vector : str
        Name in ngspice's plot.

    Returns
    -------
    str
        "v(out)", "i(l.x1.l3)" or "@r1[i]".
    """
    if vector.endswith("#branch"):
        return f"i({vector.removesuffix('#branch')})"
    if vector.startswith("@"):
        return vector
    return vector.lower() if vector.startswith("V(") else f"v({vector})"
