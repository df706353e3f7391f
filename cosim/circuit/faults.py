"""What ngspice's log means: an error with the author's file and line, or named warnings."""

import itertools
import re
from collections.abc import Sequence
from typing import NoReturn

from cosim.circuit.client import INSTALL_HINT
from cosim.circuit.deck import PreparedDeck, shortened
from cosim.circuit.location import locate
from cosim.errors import (
    ConvergenceError,
    DeckError,
    MissingDependencyError,
    MissingFileError,
    UnknownNameError,
    UnsupportedDeckError,
)

LOG_SHOWN = 12  # lines of the log that an error carries
WARNINGS_SHOWN = 50  # a kit's model checks can repeat a warning for each of its devices

_FATAL = re.compile(
    r"simulation\(s\) aborted|simulation interrupted|simulation not started|circuit not parsed"
    r"|aren't any circuits loaded|cannot recover|^stderr (?:Error|Fatal)"
    r"|^stdout [*\s]*error[*\s]*$|^stdout error\(",  # code models, which then go on
    re.IGNORECASE,
)
# An argument out of range is reported for each rejected Newton try as well; the run recovers from
# it or says in another line that it did not.
_RANGE = re.compile(r"out of range for \w+", re.IGNORECASE)
_NO_FILE = re.compile(
    r"could not (?:find|open) (?:include|library) file|library file \S+ not found|cannot open file"
    r"|failed to open state file|error reading data file|unable to open file",
    re.IGNORECASE,
)
_NO_CONVERGENCE = re.compile(r"timestep too small|iteration limit|no convergence", re.IGNORECASE)
_NO_NAME = re.compile(
    r"can't find model|could not find a valid modelname|unknown subckt|undefined parameter"
    r"|unable to find definition of model|non-existant|no data saved",
    re.IGNORECASE,
)
_NO_DEVICE = re.compile(r"unknown device type", re.IGNORECASE)
_COMPLAINT = re.compile(
    r"(?:Instance:|Error|Fatal|Warning|Netlist line|Undefined|MIF|Too (?:few|many))", re.IGNORECASE
)
_ECHO = re.compile(
    r"circuit not parsed|circuits loaded|simulation\(s\) aborted|doAnalyses|detached"
)
_TIME = re.compile(r"timestep too small; time = ([-+.\deE]+)", re.IGNORECASE)
_SINGULAR = re.compile(r"singular matrix:\s+check node\s+(\S+)", re.IGNORECASE)
_WARNING = re.compile(r"\bwarning\b|unrecognized parameter|set to 1 mOhm", re.IGNORECASE)
# "Checking parameters for BSIM 4.5 model xb.xn:nch.8", and then its warnings, for each device.
_CHECK = re.compile(r"Checking parameters for .* model (?:\S*:)?(\S+)$")
_REMARK = re.compile(r"warning:\s*", re.IGNORECASE)
REMARKS_SHOWN = 4  # of one card
_SCALE = re.compile(r"\.options .*?(?<![\w.])scale=(\S+)", re.IGNORECASE)
_STEPPING = re.compile(
    r"Starting dynamic gmin stepping|Starting true gmin stepping|Starting source stepping"
    r"|Transient op started"
)
_STEPPING_DETAIL = re.compile(
    r"gmin (?:step|increment)|source step|Trying gmin|Transient op|Supplies reduced"
)


def clean(log: Sequence[str]) -> tuple[str, ...]:
    """Take the names of the streams off ngspice's lines.

    Parameters
    ----------
    log : sequence of str
        Lines as they came, with "stdout " or "stderr " in front.

    Returns
    -------
    tuple of str
        The lines without it.
    """
    return tuple(re.sub(r"^(?:stdout|stderr) ", "", line).strip() for line in log)


def raise_for_log(prepared: PreparedDeck, log: Sequence[str], models: bool) -> None:
    """Raise what a log says that makes a run worthless.

    Parameters
    ----------
    prepared : PreparedDeck
        The deck as sent, for its origins.
    log : sequence of str
        Lines as they came, with the stream's name in front.
    models : bool
        Whether ngspice found its start file, which loads the code models of A devices.

    Raises
    ------
    MissingFileError, UnknownNameError, UnsupportedDeckError, DeckError
        If the deck is at fault; with the author's file and line.
    ConvergenceError
        With the simulated time in s.
    MissingDependencyError
        If the deck uses code models and they are not installed.
    """
    words = clean(log)
    lost = [place for place, line in enumerate(words) if _NO_FILE.search(line)]
    if lost:
        # After a data file that is not there the run may go on, on memory that nobody set.
        near = range(max(0, lost[0] - 2), lost[0] + 1)
        first = next((place for place in near if words[place].startswith("Instance:")), lost[0])
        cause = words[first : lost[0] + 1]
        _raise_deck(MissingFileError, prepared, cause, "a file that the deck reads is not there")
    if not any(_FATAL.search(line) and not _RANGE.search(line) for line in log):
        return
    if any(_NO_CONVERGENCE.search(line) for line in words):
        _raise_convergence(prepared, words)
    said = _complaint(words)
    text = " ".join(said)
    if "definition of model" in text and not models:
        raise MissingDependencyError(
            f"the deck uses a code model, and ngspice's code models are not installed: {text}",
            hint=INSTALL_HINT,
            log=said,
        )
    if _NO_DEVICE.search(text):
        hint = "Verilog-A (OSDI) devices do not run in this ngspice; import their waveform instead"
        _raise_deck(UnsupportedDeckError, prepared, said, "an unknown kind of device", hint)
    if "no data saved" in text:
        saves = ", ".join(prepared.keys)
        raise UnknownNameError(f"none of the requested vectors exists: {saves}", log=said)
    if "valid modelname" in text:
        _raise_deck(UnknownNameError, prepared, said, "no model card fits", _bin_hint(prepared))
    if _NO_NAME.search(text):
        _raise_deck(UnknownNameError, prepared, said, "a name that the deck uses does not exist")
    _raise_deck(DeckError, prepared, said, "ngspice does not accept the deck")


def findings(prepared: PreparedDeck, log: Sequence[str]) -> tuple[str, ...]:
    """Collect what belongs on a result that counts.

    Parameters
    ----------
    prepared : PreparedDeck
        The deck as sent, for its origins.
    log : sequence of str
        Lines as they came, with the stream's name in front.

    Returns
    -------
    tuple of str
        Each warning once, with the author's file and line where it names one.

    Raises
    ------
    DeckError
        If a resistor has no value: ngspice takes 1 mOhm, and that is a wrong number.
    """
    words = clean(log)
    found: dict[str, None] = {}
    for node in dict.fromkeys(match[1] for line in words if (match := _SINGULAR.search(line))):
        found[f"singular matrix at node {node}: has it a path for direct current to ground?"] = None
    steps = [match[0] for line in words if (match := _STEPPING.search(line))]
    if steps:
        way = steps[-1].removeprefix("Starting ").replace("Transient op started", "a ramp in time")
        found[f"the operating point was found by {way} only; is it the wanted one?"] = None
    for line, element in itertools.pairwise(words):
        if match := _RANGE.search(line):
            found[f"ngspice rejected trial steps: an argument {match[0]} {element}"] = None
    for index in prepared.zeros:
        file, number = prepared.origins[index]
        line = shortened(prepared.lines[index])
        found[f"{_place(file, number)}ngspice takes 1 mOhm for the 0 ohm of {line!r}"] = None
    for text in _card_checks(prepared, words):
        found[text] = None
    place = 0
    while place < len(words):
        if _CHECK.match(words[place]):
            place += 1 + _remarks(words, place + 1)
            continue
        said = list(words[place : place + 1 + _continuation(words[place])])
        place += len(said)
        line = said[0]
        if not _WARNING.search(line) or _STEPPING_DETAIL.search(line) or _SINGULAR.search(line):
            continue
        file, number, text = _origin(prepared, said)
        if "set to 1 mOhm" in line and text and len(text.split()) < 4:
            _raise_deck(DeckError, prepared, said, "a resistor without a value")
        found[f"{_place(file, number)}{' '.join(map(shortened, said))}"] = None
    listed = list(found)
    if len(listed) > WARNINGS_SHOWN:
        rest = len(listed) - WARNINGS_SHOWN
        listed = [*listed[:WARNINGS_SHOWN], f"{rest} further warnings stand in the log"]
    return tuple(listed)


def _remarks(words: Sequence[str], start: int) -> int:
    """Count the warnings from a line on that follow one another."""
    return sum(1 for _ in itertools.takewhile(_REMARK.match, words[start:]))


def _card_checks(prepared: PreparedDeck, words: Sequence[str]) -> list[str]:
    """Gather what ngspice's check says of each model card, once for all of its devices."""
    checks: dict[str, dict[str, None]] = {}
    for place, line in enumerate(words):
        if match := _CHECK.match(line):
            said = words[place + 1 : place + 1 + _remarks(words, place + 1)]
            of_card = checks.setdefault(match[1], {})
            of_card.update({_REMARK.sub("", text).rstrip("."): None for text in said})
    found = []
    for card, remarks in checks.items():
        if remarks:
            more = len(remarks) - REMARKS_SHOWN
            listed = "; ".join(list(remarks)[:REMARKS_SHOWN]) + (f"; {more} more" * (more > 0))
            at = _place(*_card_place(prepared, card))
            found.append(f"{at}ngspice's check of the card {card}: {listed}")
    return found


def _card_place(prepared: PreparedDeck, name: str) -> tuple[str, int]:
    card = re.compile(rf"\.model\s+{re.escape(name)}(?!\S)", re.IGNORECASE)
    pairs = zip(prepared.lines, prepared.origins, strict=True)
    return next((origin for line, origin in pairs if card.match(line)), ("", 0))


def _place(file: str, line: int) -> str:
    return f"{file}:{line}: " if file else ""


def _continuation(line: str) -> int:
    """Count the lines that belong to a warning and follow it."""
    if "Model issue" in line:
        return 2
    return 1 if re.search(r"from line$|non-existent node|Version not specified", line) else 0


def _complaint(words: Sequence[str]) -> list[str]:
    """Give the lines that say what is wrong, from the first complaint on, without its echoes."""
    first = next((place for place, line in enumerate(words) if _COMPLAINT.match(line)), 0)
    said = [line for line in dict.fromkeys(words[first:]) if line and not _ECHO.search(line)]
    return said[:LOG_SHOWN] or list(words[-LOG_SHOWN:])


def _bin_hint(prepared: PreparedDeck) -> str:
    scales = [match[1] for line in prepared.lines if (match := _SCALE.match(line))]
    hint = "there is no such model of a level that ngspice has, or none of its bins covers w and l"
    if scales:
        hint += (
            f"; the deck's .options scale={scales[-1]} multiplies all lengths, so that 2 um may "
            "have to be given as 2, in the deck as in the testbench"
        )
    return hint


def _origin(prepared: PreparedDeck, said: Sequence[str]) -> tuple[str, int, str]:
    index = locate(prepared.lines, said)
    if index is None:
        return "", 0, ""
    file, line = prepared.origins[index]
    return file, line, prepared.lines[index]


def _raise_deck(
    kind: type[DeckError],
    prepared: PreparedDeck,
    said: Sequence[str],
    what: str,
    hint: str = "",
) -> NoReturn:
    file, line, text = _origin(prepared, said)
    quoted = f": {shortened(text)!r}" if text else ""
    words = "; ".join(shortened(line) for line in said[:6])
    raise kind(f"{what}{quoted} (ngspice: {words})", hint=hint, log=said, file=file, line=line)


def _raise_convergence(prepared: PreparedDeck, words: Sequence[str]) -> NoReturn:
    times = [match[1] for line in words if (match := _TIME.search(line))]
    time = float(times[-1]) if times else 0.0
    place = f"at t = {time:.6g} s" if times else "at the operating point (t = 0)"
    causes = [line for line in words if _NO_CONVERGENCE.search(line)][-1:]
    ranges = [i for i, line in enumerate(words) if _RANGE.search(line)]
    said = list(words[ranges[-1] : ranges[-1] + 2]) if ranges else causes
    if ranges:
        causes.append(" ".join(said))
    nodes = dict.fromkeys(match[1] for line in words if (match := _SINGULAR.search(line)))
    if nodes:
        causes.append("singular matrix, check node " + ", ".join(list(nodes)[:5]))
    file, line, text = _origin(prepared, said)
    element = f" in {shortened(text)!r}" if text else ""
    why = "; ".join(shortened(cause) for cause in causes)
    raise ConvergenceError(
        f"{_place(file, line)}ngspice found no solution {place}{element} ({why})",
        hint="look at the named nodes and elements: a floating node, a loop of sources, a jump "
        "without capacitance; or take initial conditions and initial = 'uic'",
        log=words[-2 * LOG_SHOWN :],
        time=time,
    )
