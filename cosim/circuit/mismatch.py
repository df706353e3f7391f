"""The MOS transistors of a deck with their gate areas, and shifts of single ones.

A threshold shift of BSIM3 and BSIM4 devices is their `delvto`, a current factor their `mulu0`.
Other levels have neither, so that a source in series with the gate takes the shift, and the width
takes the factor: overlap and gate capacitances follow it as well, junctions do not. Both are
signed like the threshold itself: a positive shift makes an n-channel device conduct less and a
p-channel one more (measured on ngspice 39, all levels). They are not the same to all digits, since
the mobility of BSIM cards falls with the threshold too.
"""

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

from cosim.circuit.cards import assignments, card_word, number_text, word_spans
from cosim.circuit.copies import Edit, edited_lines
from cosim.circuit.deck import Deck, SourceLine, shortened
from cosim.circuit.expression import Parameters, spice_number, strip_quotes
from cosim.circuit.hierarchy import Structure, declared_parameters, structure_of
from cosim.circuit.lookup import own_nodes
from cosim.circuit.scope import Scope, element_of
from cosim.circuit.settings import number_of
from cosim.errors import DeckError, InputError, near_names

_LEVEL = re.compile(r"(?<![\w.])level\s*=\s*([^\s,()]+)", re.IGNORECASE)
# BSIM3 and BSIM4, as ngspice numbers them.
_WITH_SHIFTS = frozenset({8, 49, 14, 54})


@dataclass(frozen=True, slots=True)
class Mosfet:
    """One MOS transistor of the flattened deck.

    Parameters
    ----------
    path : str
        Its instance in lower case, "x1.m3".
    model : str
        Its model, without the bin.
    width, length : float
        Drawn size of one unit in m, `.option scale` included.
    multiplier : float
        Number of units in parallel.
    """

    path: str
    model: str
    width: float
    length: float
    multiplier: float

    @property
    def area(self) -> float:
        """The gate's whole area in m^2."""
        return self.width * self.length * self.multiplier


@dataclass(frozen=True, slots=True)
class Shift:
    """What distinguishes one transistor from its card.

    Parameters
    ----------
    threshold : float
        Added to the threshold voltage, with its sign, in V.
    current_factor : float
        Factor of the current, without unit.

    Raises
    ------
    InputError
        If a value is not finite, or the factor not positive.
    """

    threshold: float = 0.0
    current_factor: float = 1.0

    def __post_init__(self) -> None:
        if not math.isfinite(self.threshold):
            raise InputError(f"a threshold shift must be finite, got {self.threshold!r} V")
        if not (math.isfinite(self.current_factor) and self.current_factor > 0.0):
            raise InputError(
                f"a current factor must be positive and finite, got {self.current_factor!r}"
            )


def mosfets(deck: Deck) -> tuple[Mosfet, ...]:
    """Give the MOS transistors of a deck, flattened, also those inside a kit's subcircuits.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    tuple of Mosfet
        Sizes are worked out through the hierarchy and its parameters. The multiplier of a
        subcircuit instance takes the place of the devices' own, as ngspice 39 has it (measured).
        Power transistors (model type vdmos) have no size and are left out.

    Raises
    ------
    DeckError
        If the size of a device cannot be told before the run, or a subcircuit instance with a
        multiplier holds another one.
    """
    structure = structure_of(deck.lines)
    walk = _Walk(structure, _scale(structure))
    found: dict[str, Mosfet] = {}
    for device, line in walk.devices(structure.root, "", structure.parameters, None):
        known = found.setdefault(device.path, device)
        if known != device:
            raise DeckError(
                f"'{shortened(device.path)}' stands in several branches of an .if with several "
                "sizes, and which of them is there is not told before the run",
                file=line.file,
                line=line.line,
            )
    return tuple(found.values())


def with_mismatch(deck: Deck, shifts: Mapping[str, Shift]) -> Deck:
    """Shift single MOS transistors, all others of the same kind unchanged.

    Parameters
    ----------
    deck : Deck
        The deck.
    shifts : mapping of str to Shift
        Transistor ("m1", "x1.m3") in any case -> its shift.

    Returns
    -------
    Deck
        The definitions on the way to a transistor are copied under names of their own.

    Raises
    ------
    UnknownNameError
        If a transistor does not exist.
    DeckError
        If a name that a series source needs is taken, or a device has no width to scale or a
        level that cannot be told.
    InputError
        If a name is no MOS transistor.
    """
    if not shifts:
        return deck
    edits = {path: _shifted(path, shift) for path, shift in shifts.items()}
    return replace(deck, lines=edited_lines(deck, edits))


def _scale(structure: Structure) -> float:
    """Give `.option scale`, by which ngspice multiplies all lengths of the deck."""
    scale = 1.0
    for index in structure.settings:
        line = structure.lines[index]
        if card_word(line.text) == ".options":
            for item in assignments(line.text):
                value = number_of(item.value, structure.parameters)
                if item.name == "scale" and value is not None:
                    scale = value
    return scale


class _Walk:
    """Goes through the instances of a deck with the parameters that each of them sees."""

    def __init__(self, structure: Structure, scale: float) -> None:
        self.structure = structure
        self.scale = scale
        self.defaults: dict[Scope, dict[str, str]] = {}

    def devices(
        self, scope: Scope, prefix: str, parameters: Parameters, multiplier: float | None
    ) -> Iterator[tuple[Mosfet, SourceLine]]:
        for name, indices in scope.elements.items():
            for index in indices if name[0] in "mx" else ():
                line = self.structure.lines[index]
                element = element_of(scope, line.text)
                if name[0] == "m":
                    if scope.model(element.reference) != "vdmos":
                        model, path = element.reference, prefix + name
                        yield self._device(path, model, line, parameters, multiplier), line
                    continue
                definition = scope.subcircuit(element.reference)
                if definition is not None:
                    if multiplier is not None:
                        raise DeckError(
                            f"'{shortened(prefix[:-1])}' has a multiplier and holds a subcircuit "
                            f"'{name}', which ngspice 39 multiplies in some decks only",
                            hint="multiply the devices themselves, by a parameter",
                            file=line.file,
                            line=line.line,
                        )
                    inner, units = self._inside(definition, line, parameters, multiplier)
                    yield from self.devices(definition, f"{prefix}{name}.", inner, units)

    def _device(
        self,
        path: str,
        model: str,
        line: SourceLine,
        parameters: Parameters,
        multiplier: float | None,
    ) -> Mosfet:
        given = {item.name: _value(item.value, parameters) for item in assignments(line.text)}
        sizes = []
        for key, what in (("w", "width"), ("l", "length")):
            size = given.get(key)
            if size is None or not size > 0.0:
                raise DeckError(
                    f"the {what} of '{shortened(path)}' cannot be told before the run",
                    hint=f"give {key} as a number, or by parameters without random functions",
                    file=line.file,
                    line=line.line,
                )
            sizes.append(size * self.scale)
        units = given.get("m", 1.0) if multiplier is None else multiplier
        if units is None or not units > 0.0:
            raise DeckError(
                f"the multiplier of '{shortened(path)}' cannot be told before the run",
                file=line.file,
                line=line.line,
            )
        return Mosfet(path, model, sizes[0], sizes[1], units)

    def _inside(
        self, definition: Scope, line: SourceLine, parameters: Parameters, multiplier: float | None
    ) -> tuple[Parameters, float | None]:
        """Give what an instance's inside sees: its parameters, and the multiplier from outside."""
        if definition not in self.defaults:
            self.defaults[definition] = self._defaults(definition)
        local = dict(self.defaults[definition])
        for item in assignments(line.text):
            value = _value(item.value, parameters)
            # What has no value here must not fall back to the default.
            written = "no_value()" if value is None else number_text(value)
            if item.name in local or item.name != "m":
                local[item.name] = written
            elif multiplier is None:
                multiplier = math.nan if value is None else value
        return parameters.inside(local), multiplier

    def _defaults(self, definition: Scope) -> dict[str, str]:
        names = declared_parameters(self.structure, definition)
        found: dict[str, str] = {}
        depth = 0
        for line in self.structure.lines[definition.first : definition.stop]:
            card = card_word(line.text)
            depth += (card == ".subckt") - (card == ".ends")
            if depth == 1 and card in (".subckt", ".param"):
                for item in assignments(line.text):
                    if item.name in names:
                        found[item.name] = item.value
        return found


def _value(text: str, parameters: Parameters) -> float | None:
    """Give the value of a number, an expression, or a parameter that stands bare."""
    value = number_of(text, parameters)
    return parameters.value(text) if value is None else value


def _shifted(path: str, shift: Shift) -> Edit:
    def edit(structure: Structure, scope: Scope, line: SourceLine) -> tuple[SourceLine, ...]:
        element = element_of(scope, line.text)
        if element.letter != "m":
            raise InputError(
                f"'{shortened(path)}' is no MOS transistor: '{shortened(line.text)}'",
                hint=near_names(path, [name for name in scope.elements if name[0] == "m"]),
            )
        text = line.text
        if _level(structure, scope, element.reference, line) in _WITH_SHIFTS:
            if shift.threshold != 0.0:
                text = _with_term(text, "delvto", "+", shift.threshold)
            if shift.current_factor != 1.0:
                text = _with_term(text, "mulu0", "*", shift.current_factor)
            return (replace(line, text=text),)
        if shift.current_factor != 1.0:
            if all(item.name != "w" for item in assignments(text)):
                raise DeckError(
                    f"'{shortened(path)}' gives no width, which a current factor scales",
                    file=line.file,
                    line=line.line,
                )
            text = _with_term(text, "w", "*", shift.current_factor)
        if shift.threshold == 0.0:
            return (replace(line, text=text),)
        return _with_gate_source(structure, scope, replace(line, text=text), shift.threshold)

    return edit


def _level(structure: Structure, scope: Scope, model: str, line: SourceLine) -> float:
    card = scope.card(model)
    found = _LEVEL.search(structure.lines[card].text) if card is not None else None
    level = number_of(found[1], structure.parameters) if found else 1.0
    if card is None or level is None:
        raise DeckError(
            f"the level of model '{shortened(model)}' cannot be told before the run",
            file=line.file,
            line=line.line,
        )
    return level


def _with_term(text: str, name: str, operator: str, value: float) -> str:
    """Add to, or multiply, a device's parameter; what it has already stays."""
    for item in assignments(text):
        if item.name == name:
            old = spice_number(item.value)
            if old is None:
                new = f"{{({strip_quotes(item.value)}){operator}({number_text(value)})}}"
            else:
                new = number_text(old + value if operator == "+" else old * value)
            return text[: item.value_start] + new + text[item.stop :]
    return f"{text} {name}={number_text(value)}"


def _with_gate_source(
    structure: Structure, scope: Scope, line: SourceLine, threshold: float
) -> tuple[SourceLine, ...]:
    """Put a source between the gate's node and the gate, which then lies lower by the shift."""
    name = element_of(scope, line.text).name
    source, node = f"vmismatch_{name}", f"mismatch_{name}"
    nodes = own_nodes(structure, scope) | set(scope.ports) | structure.global_nodes
    if source in scope.elements or node in nodes:
        raise DeckError(
            f"'{name}' cannot get a threshold shift: the name '{node}' is taken",
            file=line.file,
            line=line.line,
        )
    start, stop = word_spans(line.text)[2]
    gate = line.text[start:stop]
    text = line.text[:start] + node + line.text[stop:]
    added = f"{source} {gate} {node} dc {number_text(threshold)}"
    return (replace(line, text=text), SourceLine(added, line.file, line.line))
