"""Subcircuits, instances, nodes and models of a deck, told from its lines.

Which branch of an `.if` is there is worked out where the condition depends on top-level
parameters alone; elsewhere all branches count, so that nothing that may exist is refused.
"""

import re
import threading
from collections import OrderedDict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from cosim.circuit.cards import (
    assignments,
    card_word,
    leading_words,
    model_card,
    words,
)
from cosim.circuit.deck import SourceLine, shortened
from cosim.circuit.expression import Parameters
from cosim.circuit.scope import FIXED_NODES, MODEL_PLACE, Element, Scope, element_of
from cosim.errors import DeckError, UnknownNameError, near_names

_DEEPEST = 100  # levels of subcircuits


@dataclass(slots=True, eq=False)
class Structure:
    """The scopes of a deck.

    Parameters
    ----------
    lines : tuple of SourceLine
        The deck's lines, to which all indices refer.
    root : Scope
        The top level.
    global_nodes : frozenset of str
        Nodes of `.global` cards.
    parameters : Parameters
        Values of the top-level parameters.
    settings : tuple of int
        Indices of the `.tran`, `.temp` and `.options` cards that are in force.
    devices : dict of str to SourceLine
        Element letter -> the first element of that kind that is used.
    transistors : dict of int to str
        Index of a model card that MOS transistors use -> the model's name, without its bin.
    used : list of Scope
        The top level and the definitions that are used, once each.
    """

    lines: tuple[SourceLine, ...]
    root: Scope
    global_nodes: frozenset[str]
    parameters: Parameters
    settings: tuple[int, ...]
    devices: dict[str, SourceLine] = field(default_factory=dict)
    transistors: dict[int, str] = field(default_factory=dict)
    used: list[Scope] = field(default_factory=list)


_recent: OrderedDict[int, Structure] = OrderedDict()
_lock = threading.Lock()
_MOST_RECENT = 4


def structure_of(lines: tuple[SourceLine, ...]) -> Structure:
    """Find the scopes of a deck's lines and check what can be told of them.

    Parameters
    ----------
    lines : tuple of SourceLine
        The lines.

    Returns
    -------
    Structure

    Raises
    ------
    DeckError
        If `.subckt` and `.ends` or `.if` and `.endif` do not match, or an instance has a wrong
        number of nodes, or a subcircuit holds itself.
    UnknownNameError
        If a subcircuit or model does not exist.
    """
    with _lock:
        known = _recent.get(id(lines))
    if known is not None and known.lines is lines:  # The kept reference keeps the id valid.
        return known
    structure = _Builder(lines).build()
    _check(structure)
    with _lock:
        _recent[id(lines)] = structure
        while len(_recent) > _MOST_RECENT:
            _recent.popitem(last=False)
    return structure


def top_level_parameters(lines: Sequence[SourceLine]) -> Parameters:
    """Collect `.param`, `.csparam` and `.func` definitions outside of subcircuits.

    Parameters
    ----------
    lines : sequence of SourceLine
        The deck's lines.

    Returns
    -------
    Parameters
        The last of two definitions counts, as in ngspice.
    """
    expressions: dict[str, str] = {}
    functions: dict[str, tuple[tuple[str, ...], str]] = {}
    for _, line, card in top_level_cards(lines):
        if card in (".param", ".csparam"):
            for item in assignments(line.text):
                name, bracket, names = item.name.partition("(")
                if bracket:
                    functions[name] = _arguments(names), item.value
                else:
                    expressions[name] = item.value
        elif card == ".func":
            match = re.match(r"\.func\s+(\w+)\s*\(([^()]*)\)\s*=?\s*(.*)", line.text, re.I)
            if match:
                functions[match[1].lower()] = _arguments(match[2]), match[3]
    return Parameters(expressions, functions)


def _arguments(text: str) -> tuple[str, ...]:
    return tuple(name.strip().lower() for name in text.rstrip(")").split(","))


def top_level_cards(lines: Sequence[SourceLine]) -> Iterator[tuple[int, SourceLine, str]]:
    """Give the dot cards outside of subcircuits.

    Parameters
    ----------
    lines : sequence of SourceLine
        The deck's lines.

    Yields
    ------
    tuple of (int, SourceLine, str)
        Index, line, and card in its usual spelling.
    """
    depth = 0
    for index, line in enumerate(lines):
        if line.text[0] == ".":
            card = card_word(line.text)
            if card == ".subckt":
                depth += 1
            elif card == ".ends":
                depth -= 1
            elif depth == 0:
                yield index, line, card


def declared_parameters(structure: Structure, scope: Scope) -> tuple[str, ...]:
    """Give the parameters that an instance of a subcircuit may set.

    Parameters
    ----------
    structure : Structure
        The deck's structure.
    scope : Scope
        The subcircuit.

    Returns
    -------
    tuple of str
        Those of its header, and those of `.param` cards in its body: ngspice takes both.
    """
    names = list(scope.parameters)
    depth = 0
    for line in structure.lines[scope.first : scope.stop]:
        card = card_word(line.text)
        depth += (card == ".subckt") - (card == ".ends")
        if card == ".param" and depth == 1:
            names.extend(item.name for item in assignments(line.text) if "(" not in item.name)
    return tuple(names)


@dataclass(slots=True)
class _Branch:
    """One `.if` that is open: the value of the branch (None: cannot be told), what went before."""

    value: bool | None
    taken: bool | None
    line: SourceLine


class _Builder:
    def __init__(self, lines: tuple[SourceLine, ...]) -> None:
        self.lines = lines
        self.parameters = top_level_parameters(lines)
        self.root = Scope("", (), (), None, 0, len(lines))
        self.scope = self.root
        self.global_nodes: set[str] = set()
        self.settings: list[int] = []
        self.branches: list[_Branch] = []

    def build(self) -> Structure:
        for index, line in enumerate(self.lines):
            if line.text[0] == ".":
                self._card(index, line)
            elif self._state() is not False:
                name = line.text.split(None, 1)[0].lower()
                self.scope.elements.setdefault(name, []).append(index)
                if self._state() is None:
                    self.scope.uncertain.add(index)
        if self.scope is not self.root:
            header = self.lines[self.scope.first]
            raise DeckError(
                f"subcircuit '{shortened(self.scope.name)}' has no .ends",
                file=header.file,
                line=header.line,
            )
        if self.branches:
            start = self.branches[-1].line
            raise DeckError(".if without .endif", file=start.file, line=start.line)
        return Structure(
            self.lines,
            self.root,
            frozenset(self.global_nodes),
            self.parameters,
            tuple(self.settings),
        )

    def _state(self) -> bool | None:
        """Whether the present line is there: yes, no, or cannot be told."""
        values = [branch.value for branch in self.branches]
        return False if False in values else None if None in values else True

    def _card(self, index: int, line: SourceLine) -> None:
        card = card_word(line.text)
        if card in (".if", ".elseif", ".else", ".endif"):
            self._condition(card, line)
        elif card == ".subckt":
            self._open(index, line)
        elif card == ".ends":
            if self.scope.parent is None:
                raise DeckError(".ends without .subckt", file=line.file, line=line.line)
            self.scope.stop = index + 1
            self.scope = self.scope.parent
        elif self._state() is False:
            return
        elif card == ".model":
            name, kind = model_card(line.text)
            stem, dot, bin_number = name.rpartition(".")
            for known in (name, stem) if dot and bin_number.isdigit() else (name,):
                self.scope.models.setdefault(known, kind)
                self.scope.cards.setdefault(known, index)
        elif card == ".global":
            self.global_nodes.update(words(line.text)[1:])
        elif card in (".tran", ".temp", ".options"):
            self.settings.append(index)

    def _condition(self, card: str, line: SourceLine) -> None:
        if card == ".if":
            value = self._value(line)
            self.branches.append(_Branch(value, value, line))
            return
        if not self.branches:
            raise DeckError(f"{card} without .if", file=line.file, line=line.line)
        if card == ".endif":
            self.branches.pop()
            return
        branch = self.branches[-1]
        value = True if card == ".else" else self._value(line)
        before = branch.taken
        if before is True:
            branch.value = False
        elif before is None:
            branch.value = None if value is not False else False
        else:
            branch.value, branch.taken = value, value

    def _value(self, line: SourceLine) -> bool | None:
        if self.scope is not self.root:
            return None  # It may depend on the parameters of each instance.
        text = re.sub(r"^\.\w+", "", line.text)
        value = self.parameters.value(text)
        return None if value is None else bool(value)

    def _open(self, index: int, line: SourceLine) -> None:
        found = leading_words(line.text)
        if len(found) < 2:
            raise DeckError(".subckt without a name", file=line.file, line=line.line)
        declared = tuple(item.name for item in assignments(line.text))
        scope = Scope(found[1], found[2:], declared, self.scope, index, -1)
        if self._state() is not False:
            self.scope.inner.setdefault(found[1], scope)  # ngspice takes the first of two.
        self.scope = scope


def _check(structure: Structure) -> None:
    """Check the references of all scopes that are used."""
    done: set[Scope] = set()

    def visit(scope: Scope, way: tuple[Scope, ...]) -> None:
        if scope in done:
            return
        if scope in way or len(way) > _DEEPEST:
            header = structure.lines[scope.first]
            names = " > ".join(item.name for item in (*way[1:], scope))
            problem = "a subcircuit holds itself" if scope in way else "too many levels"
            raise DeckError(f"{problem}: {shortened(names)}", file=header.file, line=header.line)
        for index in (index for found in scope.elements.values() for index in found):
            line = structure.lines[index]
            element = element_of(scope, line.text)
            structure.devices.setdefault(element.letter, line)
            card = scope.card(element.reference) if element.letter == "m" else None
            if card is not None:
                structure.transistors.setdefault(card, element.reference)
            definition = _check_element(scope, element, line, index in scope.uncertain)
            if definition is not None:
                visit(definition, (*way, scope))
        done.add(scope)
        structure.used.append(scope)

    visit(structure.root, ())


def _check_element(
    scope: Scope, element: Element, line: SourceLine, uncertain: bool
) -> Scope | None:
    """Check one element; give the definition that an X element uses."""
    if element.letter == "x":
        definition = scope.subcircuit(element.reference)
        if definition is None:
            if uncertain:
                return None
            raise UnknownNameError(
                f"subcircuit '{shortened(element.reference)}' of '{shortened(element.name)}' is "
                "not defined",
                hint=near_names(element.reference, scope.visible_subcircuits()),
                file=line.file,
                line=line.line,
            )
        if len(definition.ports) != len(element.nodes):
            raise DeckError(
                f"'{shortened(element.name)}' gives {len(element.nodes)} nodes to subcircuit "
                f"'{shortened(definition.name)}', which has {len(definition.ports)}: "
                f"{shortened(' '.join(definition.ports))}",
                file=line.file,
                line=line.line,
            )
        return definition
    wanted = FIXED_NODES.get(element.letter, 0)
    if len(leading_words(line.text)) - 1 < wanted:
        raise DeckError(
            f"'{shortened(element.name)}' needs {wanted} nodes: '{shortened(line.text)}'",
            file=line.file,
            line=line.line,
        )
    needs_model = element.letter in MODEL_PLACE or element.letter in "ap"
    if not needs_model or uncertain or element.reference[:1] in ("{", "'", '"'):
        return None
    if scope.model(element.reference) is None:
        raise UnknownNameError(
            f"model '{shortened(element.reference)}' of '{shortened(element.name)}' is not defined",
            hint=near_names(element.reference, scope.visible_models()),
            file=line.file,
            line=line.line,
        )
    return None
