"""Numbers and parameter expressions of a deck, as far as their value can be told without ngspice.

The bridge needs the value of few expressions: those of `.tran`, `.temp` and of the `.if`
conditions that decide which part of a deck is there. All others are left to ngspice. An
expression with anything else in it (random functions, node voltages) has no value here.
"""

import math
import re
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager

_SUFFIXES = {
    "t": 1e12, "g": 1e9, "meg": 1e6, "k": 1e3, "m": 1e-3, "u": 1e-6, "n": 1e-9, "p": 1e-12,
    "f": 1e-15, "a": 1e-18, "mil": 25.4e-6,
}  # fmt: skip
# Measured on ngspice 39: in braces and quotes "5a" is 5, and "1mil" is 1e-3.
_SUFFIXES_IN_EXPRESSION = {**_SUFFIXES, "a": 1.0, "mil": 1e-3}
_NUMBER = re.compile(
    r"((?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?)(meg|mil|[tgkmunpfa])?[a-z_°\u03a9\u2126]*", re.I
)
_TOKEN = re.compile(
    r"\s*(?:(?P<number>(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?[a-z_]*)|(?P<name>[a-z_][\w.]*)"
    r"|(?P<operator>\*\*|==|!=|<>|<=|>=|&&|\|\||[-+*/^%<>!?:(),]))",
    re.I,
)
# Precedence, left association of powers and the value of a negative base were measured on
# ngspice 39: -2^2 = -4, 2^3^2 = 64, (-2)**3 = 8, pow(-2,3) = -8, pwr(-2,3) = 8.
_BINARY: dict[str, tuple[int, Callable[[float, float], float]]] = {
    "||": (1, lambda a, b: float(bool(a) or bool(b))),
    "&&": (2, lambda a, b: float(bool(a) and bool(b))),
    "==": (3, lambda a, b: float(a == b)),
    "!=": (3, lambda a, b: float(a != b)),
    "<>": (3, lambda a, b: float(a != b)),
    "<": (4, lambda a, b: float(a < b)),
    ">": (4, lambda a, b: float(a > b)),
    "<=": (4, lambda a, b: float(a <= b)),
    ">=": (4, lambda a, b: float(a >= b)),
    "+": (5, lambda a, b: a + b),
    "-": (5, lambda a, b: a - b),
    "*": (6, lambda a, b: a * b),
    "/": (6, lambda a, b: a / b),
    "%": (6, math.fmod),
    "^": (8, lambda a, b: abs(a) ** b),
    "**": (8, lambda a, b: abs(a) ** b),
}
_FUNCTIONS: dict[str, tuple[int, Callable[..., float]]] = {
    "abs": (1, abs),
    "sqrt": (1, math.sqrt),
    "exp": (1, math.exp),
    "ln": (1, math.log),
    "log": (1, math.log),
    "log10": (1, math.log10),
    "sin": (1, math.sin),
    "cos": (1, math.cos),
    "tan": (1, math.tan),
    "asin": (1, math.asin),
    "acos": (1, math.acos),
    "atan": (1, math.atan),
    "sinh": (1, math.sinh),
    "cosh": (1, math.cosh),
    "tanh": (1, math.tanh),
    "int": (1, math.trunc),
    "nint": (1, round),
    "floor": (1, math.floor),
    "ceil": (1, math.ceil),
    "sgn": (1, lambda a: float((a > 0) - (a < 0))),
    "min": (2, min),
    "max": (2, max),
    "pow": (2, math.pow),
    "pwr": (2, lambda a, b: abs(a) ** b),
    "ternary_fcn": (3, lambda c, a, b: a if c else b),
}
_UNARY_LEVEL = 7
# Calls of Python that one value may nest, in parentheses and from parameter to parameter; Python
# itself allows a thousand for all that runs. Forty parameters in a chain take 320.
_DEEPEST = 500


class _NoValueError(Exception):
    """The value cannot be told."""


def spice_number(text: str, *, in_expression: bool = False) -> float | None:
    """Read a number with an optional SPICE suffix ("1meg", "2.5u", "10kOhm").

    Parameters
    ----------
    text : str
        The number.
    in_expression : bool
        Whether it stands in braces or quotes, where ngspice knows fewer suffixes.

    Returns
    -------
    float or None
        Its value, or None when the text is not a plain number.
    """
    text = text.strip()
    sign = -1.0 if text.startswith("-") else 1.0
    match = _NUMBER.fullmatch(text[1:] if text[:1] in ("-", "+") else text)
    if match is None:
        return None
    suffixes = _SUFFIXES_IN_EXPRESSION if in_expression else _SUFFIXES
    return sign * float(match[1]) * suffixes.get((match[2] or "").lower(), 1.0)


class _Depth:
    """Counts the calls that one value nests, over all expressions that it leads through."""

    def __init__(self) -> None:
        self._calls = 0

    @contextmanager
    def of(self, calls: int) -> Iterator[None]:
        """Count some calls for as long as a block lasts."""
        if self._calls + calls > _DEEPEST:
            raise _NoValueError
        self._calls += calls
        try:
            yield
        finally:
            self._calls -= calls


class Parameters:
    """The values of top-level parameters, worked out when they are asked for.

    Parameters
    ----------
    expressions : mapping of str to str
        Parameter name in lower case -> the text of its value, without quotes or braces.
    functions : mapping of str to (tuple of str, str)
        Name in lower case -> names of the arguments, text of the body.
    outer : Parameters or None
        Where names are looked up that are not among these; None at the top level.
    """

    def __init__(
        self,
        expressions: Mapping[str, str],
        functions: Mapping[str, tuple[tuple[str, ...], str]],
        outer: "Parameters | None" = None,
    ) -> None:
        self.expressions = expressions
        self._functions = functions
        self._outer = outer
        self._known: dict[str, float | None] = {}
        self._depth: _Depth = _Depth() if outer is None else outer._depth

    def inside(self, expressions: Mapping[str, str]) -> "Parameters":
        """Give the parameters of a subcircuit instance, which also sees those around it."""
        return Parameters(expressions, self._functions, self)

    def value(self, text: str) -> float | None:
        """Work out an expression; None when its value cannot be told."""
        try:
            result = self._evaluate(strip_quotes(text), {})
        except (_NoValueError, ArithmeticError, ValueError):
            return None
        return float(result) if math.isfinite(result) else None

    def _evaluate(self, text: str, local: Mapping[str, float]) -> float:
        with self._depth.of(4):
            return _Reader(text, lambda n: self._name(n, local), self._call, self._depth).read()

    def _name(self, name: str, local: Mapping[str, float]) -> float:
        if name in local:
            return local[name]
        if name not in self._known:
            if name not in self.expressions:
                if self._outer is None:
                    raise _NoValueError
                return self._outer._name(name, {})
            self._known[name] = None  # A parameter that needs itself has no value.
            try:
                self._known[name] = self._evaluate(strip_quotes(self.expressions[name]), {})
            except (_NoValueError, ArithmeticError, ValueError):
                self._known[name] = None
        known = self._known[name]
        if known is None:
            raise _NoValueError
        return known

    def _call(self, name: str, arguments: list[float]) -> float:
        if name in self._functions:
            names, body = self._functions[name]
            if len(names) != len(arguments):
                raise _NoValueError
            return self._evaluate(strip_quotes(body), dict(zip(names, arguments, strict=True)))
        count, function = _FUNCTIONS.get(name, (-1, abs))
        if count != len(arguments):
            raise _NoValueError
        return float(function(*arguments))


def strip_quotes(text: str) -> str:
    """Take one pair of braces or quotes off an expression.

    Parameters
    ----------
    text : str
        The expression.

    Returns
    -------
    str
    """
    text = text.strip()
    if len(text) >= 2 and (text[0], text[-1]) in (("{", "}"), ("'", "'"), ('"', '"')):
        return text[1:-1].strip()
    return text


class _Reader:
    """A precedence-climbing reader that works out the value as it goes."""

    def __init__(
        self,
        text: str,
        name: Callable[[str], float],
        call: Callable[[str, list[float]], float],
        depth: _Depth,
    ) -> None:
        self._tokens = _tokens(text)
        self._at = 0
        self._name = name
        self._call = call
        self._depth = depth

    def read(self) -> float:
        value = self._ternary()
        if self._at != len(self._tokens):
            raise _NoValueError
        return value

    def _peek(self) -> tuple[str, str]:
        return self._tokens[self._at] if self._at < len(self._tokens) else ("end", "")

    def _take(self, text: str) -> None:
        if self._peek() != ("operator", text):
            raise _NoValueError
        self._at += 1

    def _ternary(self) -> float:
        with self._depth.of(1):
            value = self._binary(0)
            if self._peek() == ("operator", "?"):
                self._at += 1
                first = self._ternary()
                self._take(":")
                second = self._ternary()
                value = first if value else second
            return value

    def _binary(self, lowest: int) -> float:
        with self._depth.of(2):  # With the call of `_unary`, which has no other way in.
            value = self._unary()
            while True:
                kind, text = self._peek()
                level, function = _BINARY.get(text, (-1, max)) if kind == "operator" else (-1, max)
                if level < max(lowest, 0):
                    return value
                self._at += 1
                value = function(value, self._binary(level + 1))

    def _unary(self) -> float:
        kind, text = self._peek()
        self._at += 1
        if kind == "number":
            number = spice_number(text, in_expression=True)
            if number is None:
                raise _NoValueError
            return number
        if kind == "name":
            if self._peek() != ("operator", "("):
                return self._name(text.lower())
            self._at += 1
            arguments = [self._ternary()]
            while self._peek() == ("operator", ","):
                self._at += 1
                arguments.append(self._ternary())
            self._take(")")
            return self._call(text.lower(), arguments)
        if text == "(":
            value = self._ternary()
            self._take(")")
            return value
        if text in ("-", "+", "!"):
            value = self._binary(_UNARY_LEVEL)
            return -value if text == "-" else value if text == "+" else float(not value)
        raise _NoValueError


def _tokens(text: str) -> list[tuple[str, str]]:
    found: list[tuple[str, str]] = []
    at = 0
    text = text.rstrip()
    while at < len(text):
        match = _TOKEN.match(text, at)
        if match is None:
            raise _NoValueError
        found.append((str(match.lastgroup), match[str(match.lastgroup)]))
        at = match.end()
    return found
