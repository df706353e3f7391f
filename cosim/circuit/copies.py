"""Editing single instances: the definitions on the way to one are copied under other names."""

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

from cosim.circuit.cards import assignments, masked
from cosim.circuit.deck import Deck, SourceLine, shortened
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.scope import Scope, element_of
from cosim.errors import UnknownNameError, near_names

Edit = Callable[[Structure, Scope, SourceLine], tuple[SourceLine, ...]]
"""Gives the lines that stand in place of an element's line in a scope; the element's comes first.

An element that is edited inside as well, a subcircuit instance, must give one line only.
"""


def edited_lines(deck: Deck, edits: Mapping[str, Edit]) -> tuple[SourceLine, ...]:
    """Edit single instances, all others of the same kind unchanged.

    Parameters
    ----------
    deck : Deck
        The deck.
    edits : mapping of str to Edit
        Instance or device ("x1.xdac", "x1.m3") in any case -> what is put in its place.

    Returns
    -------
    tuple of SourceLine
        The deck's lines, edited; the definitions on the way to an instance are copied.

    Raises
    ------
    UnknownNameError
        If an instance does not exist.
    """
    structure = structure_of(deck.lines)
    tree = _Wish()
    for path, edit in edits.items():
        at = tree
        for part in _parts(structure, path.strip().lower()):
            at = at.inner.setdefault(part, _Wish())
        at.edits.append(edit)
    change = _Change(structure, deck.path)
    change.apply(structure.root, tree, "")
    return change.render(0, len(deck.lines))


def _parts(structure: Structure, path: str) -> list[str]:
    """Cut a path at its dots, but for those that belong to the name of an element."""
    scope: Scope | None = structure.root
    parts: list[str] = []
    rest = path.split(".")
    while rest and scope is not None:
        heads = (".".join(rest[:count]) for count in range(1, len(rest) + 1))
        name = next((head for head in heads if head in scope.elements), None)
        if name is None:
            break
        line = structure.lines[scope.elements[name][0]]
        scope = scope.subcircuit(element_of(scope, line.text).reference)
        parts.append(name)
        rest = rest[name.count(".") + 1 :]
    return parts + rest


@dataclass(slots=True)
class _Wish:
    """Edits wanted for an instance, and for what is inside it."""

    edits: list[Edit] = field(default_factory=list)
    inner: dict[str, "_Wish"] = field(default_factory=dict)


class _Change:
    """Replaced and inserted lines, by index in the deck."""

    def __init__(self, structure: Structure, path: str) -> None:
        self.structure = structure
        self.path = path
        self.replaced: dict[int, tuple[SourceLine, ...]] = {}
        self.inserted: dict[int, list[SourceLine]] = {}
        self.copies = 0

    def render(self, start: int, stop: int) -> tuple[SourceLine, ...]:
        lines: list[SourceLine] = []
        for index in range(start, stop):
            lines.extend(self.inserted.get(index, ()))
            lines.extend(self.replaced.get(index, (self.structure.lines[index],)))
        return tuple(lines)

    def apply(self, scope: Scope, wish: _Wish, prefix: str) -> None:
        """Alter the elements of a scope in place."""
        for name, inner in wish.inner.items():
            if name not in scope.elements:
                raise UnknownNameError(
                    f"instance '{shortened(prefix + name)}' does not exist",
                    hint=near_names(prefix + name, [prefix + item for item in scope.elements]),
                    file=self.path,
                )
            for index in scope.elements[name]:
                line, *further = self._edited(scope, self.structure.lines[index], inner.edits)
                if inner.inner:
                    text = self._with_copy(scope, f"{prefix}{name}", line, inner)
                    line = replace(line, text=text)
                self.replaced[index] = (line, *further)

    def _edited(self, scope: Scope, line: SourceLine, edits: list[Edit]) -> tuple[SourceLine, ...]:
        further: list[SourceLine] = []
        for edit in edits:
            line, *added = edit(self.structure, scope, line)
            further.extend(added)
        return (line, *further)

    def _with_copy(self, scope: Scope, path: str, line: SourceLine, wish: _Wish) -> str:
        """Copy the definition that an instance uses, alter the copy, and use it."""
        definition = scope.subcircuit(element_of(scope, line.text).reference)
        if definition is None:
            raise UnknownNameError(
                f"'{path}' is a device and holds no '{next(iter(wish.inner))}'",
                file=line.file,
                line=line.line,
            )
        self.copies += 1
        copy_name = f"{definition.name}_copy{self.copies}"
        while scope.subcircuit(copy_name) is not None:
            self.copies += 1
            copy_name = f"{definition.name}_copy{self.copies}"
        inner = _Change(self.structure, self.path)
        inner.copies = self.copies
        inner.apply(definition, wish, f"{path}.")
        self.copies = inner.copies
        copied = list(inner.render(definition.first, definition.stop))
        header = copied[0]
        copied[0] = replace(header, text=_with_word(header.text, definition.name, copy_name))
        copied[-1] = replace(copied[-1], text=".ends")
        for index, lines in inner.inserted.items():
            if not definition.first < index < definition.stop:
                self.inserted.setdefault(index, []).extend(lines)
        self.inserted.setdefault(definition.first, []).extend(copied)
        return _with_word(line.text, definition.name, copy_name, last=True)


def _with_word(text: str, word: str, new: str, *, last: bool = False) -> str:
    """Replace a subcircuit's name: the second word of a header, the last one of an instance."""
    head = text
    assigned = assignments(text)
    if assigned:
        head = text[: assigned[0].start]
    pattern = re.compile(rf"(?<![^\s(),]){re.escape(word)}(?![^\s(),])", re.IGNORECASE)
    found = list(pattern.finditer(masked(head) if not last else head))
    match = found[-1] if last else found[0]
    return text[: match.start()] + new + text[match.end() :]
