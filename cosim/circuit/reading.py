"""From the flat list of lines to those of the circuit: cards that only show, analyse or command
are sorted out here, and each that changes what is simulated leaves a notice.
"""

import re
from collections.abc import Sequence
from dataclasses import replace

from cosim.circuit.cards import (
    ANALYSIS_CARDS,
    CIRCUIT_CARDS,
    MODELS_WITH_FILE,
    OUTPUT_CARDS,
    REPEATING_CARDS,
    SETTING_CARDS,
    card_word,
    masked,
    model_card,
    with_usual_word,
)
from cosim.circuit.deck import DataFile, SourceLine, shortened, where
from cosim.circuit.expansion import Places, read_data_file
from cosim.circuit.source import ENCRYPTED_CARD
from cosim.errors import DeckError, UnsupportedDeckError, near_names

_FILE_PARAMETER = re.compile(
    r"(?<!\w)(file|input_file|state_file)(\s*=\s*|\s+)(\"[^\"]*\"|'[^']*'|[^\s,()]+)", re.I
)
_NOISE_SOURCE = re.compile(r"(?<![\w.])(trnoise|trrandom)(?![\w.])", re.I)
# Possessive, so that a line of brackets takes no more than one pass.
_NAME_AND_NODES = re.compile(r"[^\s,(]++[\s,(]++[^\s,]++[\s,]++\S+")
# "r1 in out = 2k", which ngspice reads as "r1 in out 2k".
_VALUE_AFTER_SIGN = re.compile(r"^([^\s,(=]++[\s,(]++[^\s,=]++[\s,]++[^\s,=]++)[\s,]*=\s*")
_NEXT_KEYWORD = re.compile(r"(?<![\w.])(dc|ac|distof1|distof2)(?![\w.])", re.I)
_VERILOG_CARDS = frozenset({".hdl", ".va", ".verilog", ".osdi", ".pre_osdi"})
_WAVEFORM_HINT = "Export the waveform from a simulator that can read it, and run on that waveform."
# Measured on ngspice 39: lines that start with these are passed over without a word.
_PASSED_OVER = frozenset('!%&():=?[],"')
_LOOKS_LIKE_CIRCUIT = re.compile(
    r"\.(inc|lib|param|model|subckt|opt|tran|temp|global)"
    r"|[rclvi]\w*\s+\S+\s+\S+\s+(dc\s+)?[\d.]+(e-?\d+)?[a-z]*\s*$",
    re.IGNORECASE,
)


class CardReader:
    """Sorts a deck's lines.

    Parameters
    ----------
    title : str
        First line of the deck.
    places : Places
        Where data files may be read.
    path : str
        The deck's path.
    """

    def __init__(self, title: str, places: Places, path: str) -> None:
        self.title = title
        self.lines: list[SourceLine] = []
        self.notices: list[str] = []
        self.joined: list[str] = []
        self._places = places
        self._path = path
        self._end: SourceLine | None = None
        self._data: dict[str, DataFile] = {}
        if card_word(title) == ".title":
            self._set_title(title)
        elif _LOOKS_LIKE_CIRCUIT.match(title):
            self.notices.append(
                f"{path}:1: the first line is the title, so '{shortened(title)}' is not "
                "part of the circuit"
            )

    @property
    def data_files(self) -> tuple[DataFile, ...]:
        """Data files of the A-devices, once each."""
        return tuple(self._data.values())

    def read(self, lines: Sequence[SourceLine]) -> None:
        """Sort all lines into `lines` and `notices`.

        Raises
        ------
        DeckError
            If a line is none that ngspice knows.
        UnsupportedDeckError
            If it belongs to an encrypted or Verilog-A model.
        """
        for line in lines:
            first = line.text[0]
            if first == ".":
                self._card(line)
            elif first.isalpha():
                self._element(line)
            elif first == "+":
                self._continue(line)
            elif first in _PASSED_OVER:
                self.notices.append(
                    f"{where(line)}: ngspice passes over lines that start with '{first}'; left out"
                )
            else:
                raise DeckError(
                    f"'{line.text[:40]}' starts with no element's letter",
                    hint="Start a comment with '*'.",
                    file=line.file,
                    line=line.line,
                )

    def _keep(self, text: str, line: SourceLine) -> None:
        if self._end is not None:
            self.notices.append(
                f"{where(line)}: ngspice also reads what stands after the .end of line "
                f"{self._end.line}, so these lines count"
            )
            self._end = None
        # The host fills in its scratch folder where this very text stands.
        text = text.replace("{scratch}", "{ scratch}")
        self.lines.append(line if text == line.text else SourceLine(text, line.file, line.line))

    def _continue(self, line: SourceLine) -> None:
        """Join a continuation at the start of an included file to the line before the include."""
        if self.lines:
            last = self.lines.pop()
            text = f"{last.text} {line.text[1:].strip()}"
            self.lines.append(SourceLine(text, last.file, last.line))
            if last.file != line.file:
                self.joined += [last.file, line.file]

    def _element(self, line: SourceLine) -> None:
        text = line.text
        if text[0] in "vViI" and _NOISE_SOURCE.search(text):
            text = self._without_noise(line)
        elif text[0] in "xX":
            text = _without_commas(text)
        if "=" in text and text[0] in "rRcClLvViI":
            text = _VALUE_AFTER_SIGN.sub(r"\1 ", text)
        self._keep(text, line)

    def _without_noise(self, line: SourceLine) -> str:
        """Take a random waveform off a source: ngspice cannot seed it."""
        text = line.text
        nodes = _NAME_AND_NODES.match(text)
        start = nodes.end() if nodes else len(text)  # A node may be named like the waveform.
        match = _NOISE_SOURCE.search(text, start)
        while match:
            rest = masked(text[match.end() :])
            bracket = re.match(r"\s*\([^()]*\)", rest)
            following = _NEXT_KEYWORD.search(rest)
            stop = bracket.end() if bracket else following.start() if following else len(rest)
            self.notices.append(
                f"{where(line)}: {match[1].lower()} left out: it cannot be seeded and is no part "
                "of a clean run; noise is added by the testbench"
            )
            text = text[: match.start()] + text[match.end() + stop :]
            match = _NOISE_SOURCE.search(text, start)
        return text.strip()

    def _card(self, line: SourceLine) -> None:
        card = card_word(line.text)
        if card in CIRCUIT_CARDS:
            self._circuit_card(card, line)
        elif card in SETTING_CARDS:
            self._keep(with_usual_word(line.text), line)
        elif card in OUTPUT_CARDS:
            if card == ".end" and line.file == self._path:
                self._end = line
        elif card == ".title":
            self._set_title(line.text)
        elif card in ANALYSIS_CARDS:
            self.notices.append(
                f"{where(line)}: {card} left out: only the transient analysis is run"
            )
        else:
            raise self._refusal(card, line)

    def _set_title(self, text: str) -> None:
        self.title = text[len(".title") :].strip()

    def _circuit_card(self, card: str, line: SourceLine) -> None:
        text = with_usual_word(line.text)
        if card in (".param", ".csparam", ".subckt"):
            text = _without_commas(text)
        self._keep(text, line)
        if card == ".model" and model_card(text)[1] in MODELS_WITH_FILE:
            # Only now, as `_keep` hides the host's mark where a deck happens to hold it.
            kept = self.lines[-1]
            self.lines[-1] = replace(kept, text=self._with_data_file(kept.text, line))

    def _with_data_file(self, text: str, line: SourceLine) -> str:
        name, kind = model_card(text)
        wanted = MODELS_WITH_FILE[kind]
        matches = [m for m in _FILE_PARAMETER.finditer(text) if m[1].lower() == wanted]
        if len(matches) != 1:
            raise DeckError(
                f"model '{shortened(name)}' of type {kind} must name its file once, with "
                f'{wanted}="..."',
                file=line.file,
                line=line.line,
            )
        match = matches[0]
        file = read_data_file(match[3].strip("\"'"), line, self._places, len(self._data) + 1)
        file = self._data.setdefault(file.path, file)
        return f'{text[: match.start()]}{wanted}="{{scratch}}/{file.name}"{text[match.end() :]}'

    def _refusal(self, card: str, line: SourceLine) -> DeckError:
        if card == ENCRYPTED_CARD:
            return UnsupportedDeckError(
                "an encrypted model begins here, which ngspice cannot read",
                hint=_WAVEFORM_HINT,
                file=line.file,
                line=line.line,
            )
        if card in _VERILOG_CARDS:
            return UnsupportedDeckError(
                f"{card} loads a Verilog-A model, which this ngspice cannot",
                hint=_WAVEFORM_HINT,
                file=line.file,
                line=line.line,
            )
        if card in REPEATING_CARDS:
            return UnsupportedDeckError(
                f"{card} asks for several runs, which ngspice decks cannot",
                hint="Delete it; a sweep of the testbench runs the deck for many values.",
                file=line.file,
                line=line.line,
            )
        known = CIRCUIT_CARDS | SETTING_CARDS | ANALYSIS_CARDS | {".include", ".lib", ".save"}
        return UnsupportedDeckError(
            f"ngspice knows no card '{shortened(card)}'",
            hint=near_names(card, known),
            file=line.file,
            line=line.line,
        )


def _without_commas(text: str) -> str:
    """Turn commas between words into spaces: between two parameters ngspice 39 never ends."""
    if "," not in text:
        return text
    pairs = zip(masked(text), text, strict=True)
    return "".join(" " if covered == "," else char for covered, char in pairs)
