"""What ngspice takes where an element leaves a value out, or gives one that it does not keep."""

import re
from collections.abc import Iterator

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.cards import masked, number_text, words
from cosim.circuit.deck import Deck, SourceLine, where
from cosim.circuit.expression import spice_number
from cosim.circuit.hierarchy import Structure, declared_parameters
from cosim.circuit.scope import Scope, value_place

_WAVEFORM = re.compile(r"(?<![\w.])(pulse|sin|exp|sffm|am)(?![\w.])\s*\(?", re.IGNORECASE)
# Place of a value, from 0 -> its name. Measured on ngspice 39: a value that is left out or zero
# becomes TSTEP, the output step of the .tran card, or a frequency of 1/TSTOP. The width and the
# period of a PULSE become TSTOP, which no run outlasts.
_STEP_VALUES = {
    "pulse": {3: "rise time", 4: "fall time"},
    "exp": {2: "rise delay", 3: "rise time", 4: "fall delay", 5: "fall time"},
}
_STOP_VALUES = {
    "sin": {2: "frequency"},
    "sffm": {2: "carrier frequency", 4: "signal frequency"},
    "am": {2: "modulating frequency"},
}
# Most resistors of a large deck; this look at them takes a tenth of the time.
_SURELY_A_VALUE = re.compile(r"\S+\s+\S+\s+\S+\s+(?:0?\.0*)?[1-9]")
_NAME = re.compile(r"(?<![\w.])[a-z_][\w.]*", re.IGNORECASE)


def output_step(deck: Deck, request: TransientRequest) -> float:
    """Give the output step of a run, ngspice's TSTEP: it moves no grid, but shapes some sources.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : TransientRequest
        Its `output_step` counts where the deck has no `.tran` that can be read, and then its step.

    Returns
    -------
    float
        In s.
    """
    if deck.tran is not None and deck.tran.step > 0:
        return deck.tran.step
    return request.step if request.output_step is None else request.output_step


def notices_on_times(deck: Deck, request: TransientRequest, structure: Structure) -> list[str]:
    """Say which sources follow from times that are not those of the deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : TransientRequest
        The run.
    structure : Structure
        The deck's structure.

    Returns
    -------
    list of str
        With file and line.
    """
    own_step = deck.tran is not None and deck.tran.step > 0
    own_stop = deck.tran is not None and abs(deck.tran.stop - request.stop) <= 1e-9 * request.stop
    found: list[str] = []
    for scope, index in _used_elements(structure):
        line = structure.lines[index]
        if line.text[0] not in "vViI" or (own_step and own_stop):
            continue
        name, keyword, given = _waveform(scope, line, structure)
        left_out = [] if own_step else _left_out(_STEP_VALUES.get(keyword, {}), given)
        if left_out:
            step = number_text(output_step(deck, request))
            found.append(
                f"{where(line)}: {name} leaves out its {left_out}; ngspice takes the step of the "
                f".tran card, and as the deck has none that can be read, {step} s"
            )
        left_out = [] if own_stop else _left_out(_STOP_VALUES.get(keyword, {}), given)
        if left_out:
            own = f"{number_text(deck.tran.stop)} s" if deck.tran is not None else "not known"
            found.append(
                f"{where(line)}: {name} leaves out its {left_out}; ngspice takes one over the "
                f"stop time, which is {number_text(request.stop)} s here and {own} in the deck"
            )
    return found


def _waveform(scope: Scope, line: SourceLine, structure: Structure) -> tuple[str, str, list[bool]]:
    """Give a source's name, its waveform, and which of the waveform's values are zero."""
    name, *_ = words(line.text) or ("",)
    covered = masked(line.text)
    match = _WAVEFORM.search(covered)
    if match is None or len(covered[: match.start()].split()) < 3:  # A node may be named "sin".
        return name, "", []
    stop = covered.find(")", match.end()) if match[0].endswith("(") else -1
    text = line.text[match.end() : stop if stop >= 0 else len(line.text)]
    return name, match[1].lower(), [_is_zero(scope, word, structure) for word in words(text)]


def _left_out(places: dict[int, str], given: list[bool]) -> str:
    names = [name for place, name in places.items() if place >= len(given) or given[place]]
    return " and ".join(names)


def zero_resistors(structure: Structure) -> tuple[int, ...]:
    """Find the resistors of 0 ohm, for which ngspice takes 1 mOhm without a word.

    Parameters
    ----------
    structure : Structure
        The deck's structure.

    Returns
    -------
    tuple of int
        Indices of their lines, as far as their values can be told: those that depend on a
        subcircuit's own parameters cannot.
    """
    found = []
    for scope, index in _used_elements(structure):
        text = structure.lines[index].text
        if text[0] in "rR" and not _SURELY_A_VALUE.match(text):
            start, stop = value_place(scope, text)
            if start < stop and _is_zero(scope, text[start:stop], structure):
                found.append(index)
    return tuple(found)


def _is_zero(scope: Scope, text: str, structure: Structure) -> bool:
    """Whether a number, a parameter or an expression is zero, where the top level decides it."""
    number = spice_number(text)
    if number is not None:
        return number == 0.0
    if structure.parameters.value(text) != 0.0:
        return False
    names = {name.lower() for name in _NAME.findall(text)}
    inside: Scope | None = scope
    while inside is not None and inside is not structure.root:
        if names & set(declared_parameters(structure, inside)):
            return False
        inside = inside.parent
    return True


def _used_elements(structure: Structure) -> Iterator[tuple[Scope, int]]:
    """Give the elements of the top level and of all definitions that are used, once each."""
    for scope in structure.used:
        for indices in scope.elements.values():
            for index in indices:
                if index not in scope.uncertain:
                    yield scope, index
