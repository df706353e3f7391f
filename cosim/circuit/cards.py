"""The words of a deck: which cards and element letters there are, and how a line is cut up."""

import re
from dataclasses import dataclass
from functools import lru_cache
from itertools import islice

CIRCUIT_CARDS = frozenset(
    {
        ".param", ".csparam", ".func", ".subckt", ".ends", ".model", ".ic", ".nodeset", ".global",
        ".if", ".elseif", ".else", ".endif",
    }
)  # fmt: skip
"""Cards that are sent as they stand."""

SETTING_CARDS = frozenset({".options", ".temp", ".tran"})
"""Cards that the preparation replaces by its own."""

OUTPUT_CARDS = frozenset(
    {
        ".print", ".plot", ".four", ".fourier", ".meas", ".measure", ".save", ".probe", ".width",
        ".graph", ".view", ".iplot", ".backanno", ".prot", ".protect", ".unprot", ".unprotect",
        ".endc", ".end",
    }
)  # fmt: skip
"""Cards that say what to show; a run of the bridge shows nothing, so they are dropped."""

ANALYSIS_CARDS = frozenset(
    {".ac", ".dc", ".op", ".noise", ".disto", ".pz", ".sens", ".tf", ".pss", ".sp"}
)
"""Analyses other than the transient one."""

REPEATING_CARDS = frozenset({".step", ".alter", ".data", ".mc", ".wcase", ".del"})
"""Cards of other simulators that ask for many runs."""

_ALIASES = {".macro": ".subckt", ".eom": ".ends", ".elif": ".elseif"}
_CARD = re.compile(r"\.[A-Za-z_0-9]*")

MODELS_WITH_FILE = {
    "filesource": "file",
    "d_source": "input_file",
    "d_state": "state_file",
    "table2d": "file",
    "table3d": "file",
}
"""A-device model types that read a data file -> the parameter that names it."""

DEVICE_MODELS = frozenset(
    {
        "r", "res", "c", "cap", "l", "ind", "d", "npn", "pnp", "lpnp", "njf", "pjf", "nmf", "pmf",
        "nhfet", "phfet", "nmos", "pmos", "vdmos", "nsoi", "psoi", "sw", "csw", "vswitch",
        "iswitch", "urc", "ltra", "txl", "cpl",
    }
)  # fmt: skip
CODE_MODELS = frozenset(
    {
        "climit", "divide", "d_dt", "gain", "hyst", "ilimit", "int", "limit", "mult",
        "multi_input_pwl", "oneshot", "pwl", "pwlts", "sine", "slew", "square", "summer", "s_xfer",
        "triangle", "delay", "adc_bridge", "dac_bridge", "bidi_bridge", "d_and", "d_buffer",
        "d_dff", "d_dlatch", "d_fdiv", "d_genlut", "d_inverter", "d_jkff", "d_lut", "d_nand",
        "d_nor", "d_open_c", "d_open_e", "d_or", "d_osc", "d_pulldown", "d_pullup", "d_pwm",
        "d_ram", "d_srff", "d_srlatch", "d_tff", "d_tristate", "d_xnor", "d_xor", "aswitch",
        "pswitch", "capacitoric", "cmeter", "core", "inductoric", "lcouple", "lmeter",
        "memristor", "potentiometer", "sidiode", "zener", "d_to_real", "real_delay", "real_gain",
        "real_to_v", "spice2poly",
    }
)  # fmt: skip

VALUE_OPTIONS = frozenset(
    {
        "tnom", "gmin", "gshunt", "rshunt", "chgtol", "pivtol", "pivrel", "itl1", "itl2", "itl3",
        "itl4", "itl5", "itl6", "srcsteps", "gminsteps", "gminfactor", "defm", "defl", "defw",
        "defad", "defas", "scale", "xmu", "maxopalter", "maxevtiter", "ramptime", "convlimit",
        "convstep", "convabsstep", "minbreak", "indverbosity", "bypass",
    }
)  # fmt: skip
"""Options with a value that a deck may set."""

FLAG_OPTIONS = frozenset(
    {"noopiter", "trytocompact", "badmos3", "oldlimit", "noopalter", "klu", "sparse"}
)
"""Options without a value that a deck may set."""

SHOWING_OPTIONS = frozenset(
    {
        "acct", "list", "node", "nodes", "nomod", "nopage", "opts", "numdgt", "post", "probe",
        "ingold", "brief", "savecurrents", "keepopinfo", "noacct", "noinit", "warn", "width",
        "limpts", "cptime", "measdgt", "nowarn", "reportnodes", "autostop", "seedinfo", "accurate",
    }
)  # fmt: skip
"""Options about printing; dropped without a word."""


def card_word(text: str) -> str:
    """Give a line's card in lower case and in its usual spelling.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    str
        ".options" for `.opt`, ".param" for `.parameters`; "" for an element.
    """
    if text[:1] != ".":
        return ""
    match = _CARD.match(text)
    return _usual(match[0]) if match else "."


@lru_cache(maxsize=1024)
def _usual(word: str) -> str:
    word = word.lower()
    if word.startswith(".opt"):
        return ".options"
    if word.startswith(".param"):
        return ".param"
    return _ALIASES.get(word, word)


def with_usual_word(text: str) -> str:
    """Give a card line with its card in the usual spelling.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    str
        ".subckt a b" for ".MACRO a b".
    """
    match = _CARD.match(text)
    return _usual(match[0]) + text[match.end() :] if match else text


@dataclass(frozen=True, slots=True)
class Assignment:
    """One "name = value" of a line.

    Parameters
    ----------
    name : str
        Name in lower case; a function keeps its arguments, "f(x)".
    value : str
        Value as written.
    start : int
        Index of the name in the text.
    value_start, stop : int
        Index of the value, and of what follows it.
    """

    name: str
    value: str
    start: int
    value_start: int
    stop: int


_ASSIGNMENT = re.compile(r"(?<![\w.=<>!])([A-Za-z_][\w.]*(?:\(_*\))?)\s*=(?!=)\s*([^\s,=][^\s,]*)")
_CLOSING = {"{": "}", "(": ")", "'": "'", '"': '"', "[": "]"}


def masked(text: str) -> str:
    """Cover everything inside braces, brackets, parentheses and quotes with "_".

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    str
        As long as the text; the brackets themselves stay.
    """
    if not any(bracket in text for bracket in "{('\"["):
        return text
    out: list[str] = []
    stack: list[str] = []
    for char in text:
        if stack and char == stack[-1]:
            stack.pop()
            out.append("_" if stack else char)
        elif char in _CLOSING and not (stack and stack[-1] in "'\""):
            out.append("_" if stack else char)
            stack.append(_CLOSING[char])
        else:
            out.append("_" if stack else char)
    return "".join(out)


def assignments(text: str) -> tuple[Assignment, ...]:
    """Find the assignments of a line, those inside braces, parentheses and quotes left out.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    tuple of Assignment
        Names in lower case; a function keeps its arguments in the name ("f(x)").
    """
    return tuple(
        Assignment(
            text[match.start(1) : match.end(1)].lower(),
            text[match.start(2) : match.end(2)],
            match.start(1),
            match.start(2),
            match.end(2),
        )
        for match in _ASSIGNMENT.finditer(masked(text))
    )


LONGEST_KEPT = 500  # characters; longer lines are not kept in caches, so that these stay small
_WORD = re.compile(r"\{[^{}]*\}|'[^']*'|\"[^\"]*\"|[^\s(),={}'\"]+|=")


def words(text: str) -> tuple[str, ...]:
    """Cut an element or `.subckt` line into words; parentheses and commas are space.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    tuple of str
        Words in lower case, "=" among them; what stands in braces or quotes is one word.
    """
    return _short_words(text) if len(text) <= LONGEST_KEPT else _cut(text)


def word_spans(text: str) -> list[tuple[int, int]]:
    """Give the places of the words of an element line, as `words` gives them.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    list of (int, int)
        Index of each word's first character and of what follows it.
    """
    return [match.span() for match in _WORD.finditer(text)]


def _cut(text: str) -> tuple[str, ...]:
    return tuple(_WORD.findall(text.lower()))


_short_words = lru_cache(maxsize=2**16)(_cut)


def leading_words(text: str) -> tuple[str, ...]:
    """Give the words before the first assignment (and before "params:").

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    tuple of str
        Words in lower case, as `words` gives them.
    """
    found = words(text)
    if "=" in found:
        found = found[: found.index("=") - 1]
    if "params:" in found:
        found = found[: found.index("params:")]
    return found


def model_card(text: str) -> tuple[str, str]:
    """Give name and type of a `.model` line.

    Parameters
    ----------
    text : str
        A logical line.

    Returns
    -------
    tuple of (str, str)
        Both in lower case, "" where the line lacks one; "ako:base type" has the type "type".
    """
    found = [match[0].lower() for match in islice(_WORD.finditer(text), 4)]
    name = found[1] if len(found) > 1 else ""
    kinds = [word for word in found[2:4] if not word.startswith("ako:")]
    return name, kinds[0] if kinds else ""


def number_text(value: float) -> str:
    """Write a number so that ngspice reads the same double.

    Parameters
    ----------
    value : float
        A finite number.

    Returns
    -------
    str
        The shortest text that gives the number back.
    """
    return repr(float(value))
