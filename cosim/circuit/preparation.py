"""The exact list of lines that ngspice gets for one run."""

import re
from collections.abc import Sequence
from dataclasses import dataclass

from cosim.circuit.analysis import Tolerances, TransientRequest
from cosim.circuit.cards import SETTING_CARDS, assignments, card_word, number_text
from cosim.circuit.deck import Deck, PreparedDeck, SourceLine, unique, where
from cosim.circuit.defaults import notices_on_times, output_step, zero_resistors
from cosim.circuit.expression import spice_number
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.lookup import resolve_saves, save_expression
from cosim.circuit.safety import check_lines
from cosim.circuit.settings import (
    CELSIUS,
    filtered_options,
    gathered,
    number_of,
    written_temperature,
)
from cosim.errors import DeckError

_COLDEST_JUNCTION = 20.0  # K; below it, measured, ngspice's diode and BJT do not converge.
_COLDEST_CARD, _HOTTEST_CARD = -40.0, 125.0  # degrees Celsius
# BSIM3, BSIM4 and BSIM-SOI, as ngspice numbers them.
_BSIM_LEVELS = frozenset({8, 49, 14, 54, 10, 55, 56, 57, 58})
_LEVEL = re.compile(r"(?<![\w.])level\s*=?\s*([^\s,()]+)", re.IGNORECASE)
_TNOM = re.compile(r"(?<![\w.])tnom\s*=?\s*(\{[^{}]*\}|'[^']*'|[^\s,()]+)", re.IGNORECASE)
_USUAL_TNOM = 27.0  # degrees Celsius
_NAMES_SHOWN = 3
_FIXED_GRID = 1e6  # trtol and xtrtol: error control never moves a step.


def prepare(deck: Deck, request: TransientRequest) -> PreparedDeck:
    """Write the list of lines for one transient run.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : TransientRequest
        Times in s, temperature in K, tolerances, vectors to save.

    Returns
    -------
    PreparedDeck
        The deck's circuit, with the bridge's title, options, temperature, analysis and saves.

    Raises
    ------
    ForbiddenDeckError
        If a line would run a command, or read or write a file.
    UnsupportedDeckError
        If ngspice does not know a line, or the deck has diodes or bipolar transistors below 20 K.
    UnknownNameError
        If a node or device to save does not exist.
    ProbeError
        If a save expression cannot be read.
    """
    structure = structure_of(deck.lines)
    keys = resolve_saves(deck, request.saves)
    cards: list[str] = []
    if keys:
        items = unique(save_expression(vector) for vector in keys.values())
        cards.append(".save " + " ".join(items))
    cards.append(_transient_text(request, output_step(deck, request)))
    return assembled(
        deck,
        Analysis("transient", tuple(cards), keys, "tran", "time"),
        own_options(request.tolerances),
        request.temperature,
        request.seed,
        notices_on_times(deck, request, structure),
    )


@dataclass(frozen=True, slots=True)
class Analysis:
    """The analysis of a run, as ngspice is asked for it.

    Parameters
    ----------
    name : str
        "transient" or "noise".
    cards : tuple of str
        Its card, and what it saves.
    keys, plots, axis
        As in `PreparedDeck`.
    """

    name: str
    cards: tuple[str, ...]
    keys: dict[str, str]
    plots: str
    axis: str


def own_options(tolerances: Tolerances) -> dict[str, float | str]:
    """Give the options that the bridge sets itself in every run.

    Parameters
    ----------
    tolerances : Tolerances
        Newton tolerances.

    Returns
    -------
    dict
        Option -> value, which is empty where the option is a flag.
    """
    return {
        "reltol": tolerances.reltol,
        "vntol": tolerances.vntol,
        "abstol": tolerances.abstol,
        "method": "trap",
        "trtol": _FIXED_GRID,
        "xtrtol": _FIXED_GRID,
    }


def assembled(
    deck: Deck,
    analysis: Analysis,
    own: dict[str, float | str],
    temperature: float | None,
    seed: int,
    further: Sequence[str] = (),
) -> PreparedDeck:
    """Put a deck's circuit and an analysis together.

    Parameters
    ----------
    deck : Deck
        The deck; its own analyses, saves and settings that the run sets stay out.
    analysis : Analysis
        The analysis.
    own : dict
        Options of the run -> value, empty for a flag.
    temperature : float or None
        Device temperature in K; None: the deck's own, or 300.15 K.
    seed : int
        Seed of ngspice's own random functions.
    further : sequence of str
        Notices beyond those of the deck, its options and its temperature.

    Returns
    -------
    PreparedDeck

    Raises
    ------
    ForbiddenDeckError
        If a line would run a command, or read or write a file.
    DeckError
        If the deck has diodes or bipolar transistors below 20 K.
    """
    structure = structure_of(deck.lines)
    notices: list[str] = []
    left_out: list[tuple[SourceLine, str]] = []
    body: list[SourceLine] = [_own_line(_options_text(own))]
    empty = set(zero_resistors(structure))
    zeros: list[int] = []
    in_force = set(structure.settings)
    body.extend(_temperature_cards(deck, temperature, structure, notices))
    for index, line in enumerate(deck.lines):
        card = card_word(line.text)
        if card not in SETTING_CARDS:
            body.append(line)
            if index in empty:
                zeros.append(len(body))  # The title comes first.
        elif card == ".options" and index in in_force:
            filtered = filtered_options(line, own)
            left_out.extend((line, text) for text in filtered.left_out)
            if filtered.line.text:
                body.append(filtered.line)
    notices.extend(gathered(left_out))
    notices.extend(further)
    body.extend(_own_line(card) for card in (*analysis.cards, ".end"))
    check_lines(body)
    mode = _flat_mode(deck.compatibility)
    if mode != (deck.compatibility or "") and ("ps" in mode or "lt" in mode):
        # Measured on ngspice 39: of fourteen constructs the "a" changes three in "ps" and none in
        # "hs", "ki" and "spe"; that "lt" translates lines too is recalled from memory.
        notices.append(
            f"compatibility mode '{deck.compatibility}' is sent as '{mode}': one list without "
            f"includes is sent, so ngspice reads all lines in the dialect, where in mode "
            f"'{deck.compatibility}' it translates the lines of included files only"
        )
    return PreparedDeck(
        lines=(f"{analysis.name} run", *(line.text for line in body)),
        origins=(("", 0), *((line.file, line.line) for line in body)),
        keys=analysis.keys,
        commands=(*((f"set ngbehavior={mode}",) if mode else ()), f"setseed {seed}"),
        data={file.name: file.content for file in deck.data_files},
        notices=unique((*deck.notices, *notices)),
        zeros=tuple(zeros),
        plots=analysis.plots,
        axis=analysis.axis,
    )


def _own_line(text: str) -> SourceLine:
    return SourceLine(text, "", 0)


def _options_text(own: dict[str, float | str]) -> str:
    return ".options " + " ".join(
        name if value == "" else f"{name}={value if isinstance(value, str) else number_text(value)}"
        for name, value in own.items()
    )


def _transient_text(request: TransientRequest, output: float) -> str:
    times = (number_text(t) for t in (output, request.stop, request.start, request.step))
    return f".tran {' '.join(times)}" + (" uic" if request.initial == "uic" else "")


def _flat_mode(compatibility: str | None) -> str:
    """Give the mode that applies to the whole list.

    Without the "a" behind, ngspice applies its dialects to included files only, and the list
    that is sent includes none.
    """
    mode = compatibility or ""
    return (
        mode + "a" if mode and mode != "spe" and not mode.endswith("a") and mode != "all" else mode
    )


def _temperature_cards(
    deck: Deck, temperature: float | None, structure: Structure, notices: list[str]
) -> list[SourceLine]:
    """Give the temperature cards, and look whether the models reach there."""
    if temperature is None:
        temperature = deck.temperature
    elif deck.temperature is not None and abs(temperature - deck.temperature) > 1e-9:
        notices.append(
            f"the testbench's device temperature of {temperature:g} K replaces the deck's "
            f"{deck.temperature:g} K"
        )
    if temperature is None:
        # A value that only ngspice can work out stays as written; without one it takes 27 C.
        written = written_temperature(structure, [])
        if written is None:
            return []
        return [SourceLine(f".temp {written[0]}", written[1].file, written[1].line)]
    _check_junctions(structure, temperature)
    notices.extend(_uncalibrated(structure, temperature))
    return [_own_line(f".temp {temperature - CELSIUS:.12g}")]


def _check_junctions(structure: Structure, temperature: float) -> None:
    for letter in ("d", "q"):
        line = structure.devices.get(letter)
        if line is not None and temperature < _COLDEST_JUNCTION:
            raise DeckError(
                f"ngspice's diode and bipolar models do not converge below "
                f"{_COLDEST_JUNCTION:g} K, the device temperature is {temperature:g} K",
                hint="Give the temperature at which the cards were fitted as the device "
                "temperature; the noise temperature is set apart from it.",
                file=line.file,
                line=line.line,
            )


def _uncalibrated(structure: Structure, temperature: float) -> list[str]:
    """Warn of MOS models at a temperature that their cards do not reach, as a rule.

    ngspice says nothing of it. That foundries extract BSIM cards for -40 to 125 degrees Celsius
    is common practice; a card that was fitted elsewhere says so by its tnom. Models of hand
    calculation (level 1 to 3) claim no range, but do not work in the deep cold either.
    """
    celsius = round(temperature - CELSIUS, 6)
    cold = temperature < _COLDEST_JUNCTION
    names: dict[str, SourceLine] = {}
    for index, name in structure.transistors.items():
        card = structure.lines[index]
        tnom = _fitted_at(structure, card.text)
        reached = min(_COLDEST_CARD, tnom) <= celsius <= max(_HOTTEST_CARD, tnom)
        if not reached and (cold or _is_bsim(card.text)):
            names.setdefault(name, card)
    if not names:
        return []
    listed = ", ".join(list(names)[:_NAMES_SHOWN])
    if len(names) > _NAMES_SHOWN:
        listed += f" and {len(names) - _NAMES_SHOWN} more"
    if cold:
        fault = (
            f"uncalibrated at {temperature:g} K: below {_COLDEST_JUNCTION:g} K they converge to "
            "unphysical mobilities unless their cards were fitted there, as tnom would say"
        )
    else:
        fault = (
            f"extrapolated to {temperature:g} K: BSIM cards are commonly extracted for "
            f"{_COLDEST_CARD:g} to {_HOTTEST_CARD:g} degrees Celsius "
            f"({_COLDEST_CARD + CELSIUS:g} to {_HOTTEST_CARD + CELSIUS:g} K) unless their tnom "
            "says otherwise, and ngspice gives no warning"
        )
    return [f"{where(next(iter(names.values())))}: MOS models {listed} are {fault}"]


def _fitted_at(structure: Structure, card: str) -> float:
    """Give a card's own temperature in degrees Celsius: its tnom, the deck's, or ngspice's."""
    found = _TNOM.search(card)
    written = found[1] if found else None
    for index in structure.settings if found is None else ():
        for item in assignments(structure.lines[index].text):
            if item.name == "tnom":
                written = item.value
    value = number_of(written, structure.parameters) if written else None
    return _USUAL_TNOM if value is None else round(value, 6)


def _is_bsim(card: str) -> bool:
    level = _LEVEL.search(card)
    return level is not None and spice_number(level[1]) in _BSIM_LEVELS
