"""Probes: linear combinations of node voltages or of device currents, read from text."""

import re
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from cosim.circuit.deck import shortened
from cosim.errors import ProbeError
from cosim.waveform import FloatArray

_GROUND = frozenset({"0", "gnd"})
_NUMBER = re.compile(r"(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?", re.IGNORECASE)
_CALL = re.compile(r"([vi])\s*\(", re.IGNORECASE)
_PARAMETER = re.compile(r"@[^\s\[\]]+\[[^\[\]]+\]")
_BARE = re.compile(r"[^\s(),*/+\-@]+")
_CURRENT_PARAMETERS = re.compile(r"i|current|i[a-z]{1,2}|i[dbcges]\w*|c[dbg]")
_DEEPEST = 40
_LONGEST = 1_000_000  # characters
_HINT = "Write for example 'v(rf_p) - v(rf_n)', 'v(a,b)', '0.5*v(out)' or 'i(l1)'."


@dataclass(frozen=True, slots=True)
class Probe:
    """A linear combination of saved vectors.

    Parameters
    ----------
    text : str
        The probe as written.
    terms : tuple of (float, str)
        Weight and save expression: "v(node)", "i(device)" or "@device[parameter]".
    unit : str
        "V" or "A".
    nodes : tuple of str
        Nodes that it touches, in lower case, ground left out.
    """

    text: str
    terms: tuple[tuple[float, str], ...]
    unit: str
    nodes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _Value:
    """A part of an expression: a number, or a sum of weighted vectors."""

    constant: float
    terms: tuple[tuple[float, str], ...]
    touched: tuple[str, ...] = ()

    @property
    def is_number(self) -> bool:
        return not self.touched and not self.terms

    def scaled(self, factor: float) -> "_Value":
        terms = tuple((weight * factor, name) for weight, name in self.terms)
        return _Value(self.constant * factor, terms, self.touched)


def parse_probe(text: str) -> Probe:
    """Read a probe.

    Parameters
    ----------
    text : str
        Sums and differences of "v(node)", "v(a,b)", "i(device)", "@device[parameter]" or a bare
        node name, multiplied or divided by numbers; parentheses are allowed. Case does not
        matter.

    Returns
    -------
    Probe

    Raises
    ------
    ProbeError
        If the text cannot be read (with the position), is longer than a million characters,
        is not linear, has a constant part, has nothing but the ground in it, or mixes voltages
        and currents.
    """
    if len(text) > _LONGEST:
        raise ProbeError(
            f"probe '{shortened(text)}' is longer than {_LONGEST} characters", hint=_HINT
        )
    value = _Reader(text).read()
    if value.is_number or value.constant != 0.0:
        raise ProbeError(
            f"probe '{shortened(text)}' has a part without a node or device", hint=_HINT
        )
    weights: dict[str, float] = {}
    for weight, name in value.terms:
        weights[name] = weights.get(name, 0.0) + weight
    terms = tuple((weight, name) for name, weight in weights.items() if weight != 0.0)
    if not terms:
        raise ProbeError(f"probe '{shortened(text)}' is always zero", hint=_HINT)
    units = {_unit(name, text) for _, name in terms}
    if len(units) > 1:
        raise ProbeError(f"probe '{shortened(text)}' mixes voltages and currents", hint=_HINT)
    nodes = tuple(dict.fromkeys(name[2:-1] for _, name in terms if name.startswith("v(")))
    return Probe(text, terms, units.pop(), nodes)


def _unit(name: str, text: str) -> str:
    if name.startswith("v("):
        return "V"
    if name.startswith("i("):
        return "A"
    parameter = name[name.rindex("[") + 1 : -1]
    if _CURRENT_PARAMETERS.fullmatch(parameter):
        return "A"
    if parameter.startswith("v"):
        return "V"
    raise ProbeError(
        f"'{shortened(name)}' in probe '{shortened(text)}' is neither a voltage nor a current"
    )


def evaluate_probe(probe: Probe, vectors: Mapping[str, FloatArray]) -> FloatArray:
    """Add up a probe's vectors.

    Parameters
    ----------
    probe : Probe
        The probe.
    vectors : mapping of str to ndarray of shape (n,)
        Save expression in lower case -> values in V or A.

    Returns
    -------
    ndarray, shape (n,)
        Values in the probe's unit.

    Raises
    ------
    ProbeError
        If a vector of the probe is not there.
    """
    missing = [name for _, name in probe.terms if name not in vectors]
    if missing:
        raise ProbeError(
            f"probe '{shortened(probe.text)}' needs {shortened(', '.join(missing))}, which the "
            "run did not save"
        )
    total = np.zeros_like(vectors[probe.terms[0][1]], dtype=np.float64)
    for weight, name in probe.terms:
        total += weight * vectors[name]
    return total


class _Reader:
    """sum = product {("+"|"-") product}; product = unary {("*"|"/") unary}."""

    def __init__(self, text: str) -> None:
        self._text = text
        self._at = 0
        self._depth = 0

    def read(self) -> _Value:
        value = self._sum()
        if self._peek():
            raise self._fault("expected an operator or the end")
        return value

    def _fault(self, problem: str) -> ProbeError:
        return ProbeError(
            f"probe '{shortened(self._text)}' cannot be read at position {self._at + 1}: {problem}",
            hint=_HINT,
        )

    def _peek(self) -> str:
        while self._at < len(self._text) and self._text[self._at].isspace():
            self._at += 1
        return self._text[self._at : self._at + 1]

    def _sum(self) -> _Value:
        parts = [self._product()]
        while (sign := self._peek()) in ("+", "-") and sign:
            self._at += 1
            parts.append(self._product().scaled(1.0 if sign == "+" else -1.0))
        return _Value(
            sum(part.constant for part in parts),
            tuple(term for part in parts for term in part.terms),
            tuple(name for part in parts for name in part.touched),
        )

    def _product(self) -> _Value:
        value = self._unary()
        factor = 1.0
        while (operator := self._peek()) in ("*", "/") and operator:
            self._at += 1
            other = self._unary()
            if operator == "/":
                if not other.is_number:
                    raise self._fault("only a number may divide")
                if other.constant == 0.0:
                    raise self._fault("division by zero")
                factor *= 1.0 / other.constant
            elif other.is_number:
                factor *= other.constant
            elif value.is_number:
                value, factor = other, factor * value.constant
            else:
                raise self._fault("a product of two signals is not linear")
        return value if factor == 1.0 else value.scaled(factor)

    def _unary(self) -> _Value:
        self._depth += 1
        if self._depth > _DEEPEST:
            raise self._fault("too many signs or parentheses")
        char = self._peek()
        if char in ("+", "-") and char:
            self._at += 1
            value = self._unary().scaled(1.0 if char == "+" else -1.0)
        elif char == "(":
            self._at += 1
            value = self._sum()
            if self._peek() != ")":
                raise self._fault("expected ')'")
            self._at += 1
        else:
            value = self._signal()
        self._depth -= 1
        return value

    def _signal(self) -> _Value:
        if not self._peek():
            raise self._fault("expected a node, a device or a number")
        call = _CALL.match(self._text, self._at)
        if call:
            return self._call(call)
        parameter = _PARAMETER.match(self._text, self._at)
        if parameter:
            self._at = parameter.end()
            return _Value(0.0, ((1.0, parameter[0].lower()),), (parameter[0],))
        bare = _BARE.match(self._text, self._at)
        number = _NUMBER.match(self._text, self._at)
        if number and (not bare or number.end() >= bare.end()):
            self._at = number.end()
            return _Value(float(number[0]), ())
        if bare:
            self._at = bare.end()
            return _voltage(1.0, bare[0])
        raise self._fault(f"unexpected {self._text[self._at]!r}")

    def _call(self, call: re.Match[str]) -> _Value:
        # Node names may hold brackets and operators, so only ")" ends them.
        stop = self._text.find(")", call.end())
        if stop < 0:
            raise self._fault("expected ')'")
        names = [name.strip() for name in self._text[call.end() : stop].split(",")]
        if not all(names) or any(re.search(r"[\s(]", name) for name in names):
            raise self._fault("expected a name between the parentheses")
        if len(names) > (2 if call[1].lower() == "v" else 1):
            raise self._fault("too many names between the parentheses")
        self._at = stop + 1
        if call[1].lower() == "i":
            return _Value(0.0, ((1.0, f"i({names[0].lower()})"),), (names[0],))
        value = _voltage(1.0, names[0])
        if len(names) == 2:
            other = _voltage(-1.0, names[1])
            value = _Value(0.0, value.terms + other.terms, value.touched + other.touched)
        return value


def _voltage(weight: float, node: str) -> _Value:
    name = node.lower()
    return _Value(0.0, () if name in _GROUND else ((weight, f"v({name})"),), (name,))
