"""Oracle: ngspice's own evaluation of the same expressions, as values of resistors."""

import math
import re
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.circuit.expression import Parameters, spice_number
from tests.circuit.batch import run_batch

# Each has a value above zero, as ngspice replaces a resistor of zero by 1 mOhm.
EXPRESSIONS = [
    "1k", "2.5meg", "3E-3", ".5u*1e6", "1+2*3", "(1+2)*3", "8/4/2", "2^3^2", "2**3**2", "(-2)**3",
    "(-2)^2", "104-2^2", "-2^2+9", "7%4", "7.5%2", "pow(2,-1)", "pow(-2,3)+10", "pwr(-2,3)",
    "sqrt(2)", "exp(1)", "ln(10)", "log(10)", "log10(1000)", "abs(-3)", "sgn(-3)+5", "int(1.7)",
    "int(-1.7)+5", "nint(1.6)", "floor(1.7)", "floor(-1.2)+5", "ceil(1.2)", "min(1,2)", "max(1,2)",
    "sin(1)", "cos(1)", "tan(1)", "asin(0.5)", "acos(0.5)", "atan(1)", "sinh(1)", "cosh(1)",
    "tanh(1)", "1==1 ? 5 : 6", "1!=1 ? 5 : 6", "2>1 ? (1>2 ? 3 : 4) : 5", "2>=2 ? 5 : 6",
    "1<>2 ? 5 : 6", "1&&0 ? 5 : 6", "1||0 ? 5 : 6", "!0 + 1", "!1 + 1", "ternary_fcn(0,5,6)", "aa",
    "AA*bb", "double(3)", "double(double(bb))", "sum(1,2)+aa", "2+-1", "2--1", "-(-3)", "1e3m",
    "3mil", "5volt", "5a", "5a*1e3", "2as+1", "2kohm", "1 + 2 > 2 ? 5 : 6", "1<2==1 ? 5 : 6",
]  # fmt: skip


@pytest.mark.ngspice
def test_values_are_those_of_ngspice(tmp_path: Path) -> None:
    lines = ["t", ".param aa=2 bb='aa*3'", ".func double(x) {x*2}", ".param sum(x,y)='x+y'"]
    lines += [f"r{k} a 0 {{{text}}}" for k, text in enumerate(EXPRESSIONS)]
    lines += ["v1 a 0 1", ".control", "op", "set numdgt=15"]
    lines += [f"print @r{k}[resistance]" for k in range(len(EXPRESSIONS))]
    (tmp_path / "deck.cir").write_text("\n".join([*lines, ".endc", ".end", ""]), encoding="utf-8")
    log = run_batch("deck.cir", tmp_path)
    found = dict(re.findall(r"@r(\d+)\[resistance\] = (\S+)", log))
    assert len(found) == len(EXPRESSIONS), log
    parameters = Parameters(
        {"aa": "2", "bb": "'aa*3'"},
        {"double": (("x",), "{x*2}"), "sum": (("x", "y"), "'x+y'")},
    )
    for k, text in enumerate(EXPRESSIONS):
        # ngspice passes values on as text of 17 digits and prints 15.
        assert parameters.value(f"{{{text}}}") == pytest.approx(float(found[str(k)]), rel=1e-14), (
            text
        )


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1", 1.0), ("-1.5", -1.5), ("+2", 2.0), ("1k", 1e3), ("1K", 1e3), ("1meg", 1e6),
        ("1MEGohm", 1e6), ("1m", 1e-3), ("1MHz", 1e-3), ("2.5u", 2.5e-6), ("3n", 3e-9),
        ("4p", 4e-12), ("5f", 5e-15), ("6a", 6e-18), ("7g", 7e9), ("8t", 8e12), ("1e-9", 1e-9),
        (".5", 0.5), ("1.", 1.0), ("10s", 10.0), ("1e", 1.0), ("1k\u03a9", 1e3), ("2mil", 50.8e-6),
    ],
)  # fmt: skip
def test_suffixes(text: str, value: float) -> None:
    # L. W. Nagel, SPICE2: A Computer Program to Simulate Semiconductor Circuits, 1975, on the
    # input format; "a" for 1e-18 is ngspice's (recalled from memory); a mil is 25.4 um.
    assert spice_number(text) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize("text", ["", "a", "1+1", "{1}", "--1", "1 2", "e9", "0x10", "nan", "inf"])
def test_what_is_no_number(text: str) -> None:
    assert spice_number(text) is None


@pytest.mark.parametrize(
    "text",
    [
        "", "x", "1/0", "1+", "(1", "1)", "agauss(1,2,3)", "v(out)", "f(1)", "double(1,2)", "1 2",
        "sqrt(-1)", "ln(0)", "10^1000", "1;2", "time", "loop", "a?b", "(" * 500 + "1" + ")" * 500,
        "-" * 500 + "1", "recursive(1)", "1e999", "5 : 6",
    ],
)  # fmt: skip
def test_what_has_no_value(text: str) -> None:
    parameters = Parameters(
        {"loop": "pool+1", "pool": "loop"},
        {"double": (("x",), "x*2"), "recursive": (("x",), "recursive(x)")},
    )
    assert parameters.value(text) is None


@pytest.mark.parametrize(
    ("brackets", "wanted"), [(0, 40.0), (1, 40.0), (2, None), (35, None), (1000, None)]
)
def test_a_chain_of_parameters_never_exhausts_the_stack(
    brackets: int, wanted: float | None
) -> None:
    chain = {
        f"p{k}": "{" + "(" * brackets + f"p{k + 1}+1" + ")" * brackets + "}" for k in range(39)
    }
    parameters = Parameters({**chain, "p39": "1"}, {})
    assert parameters.value("{p0}") == wanted


@settings(derandomize=True, deadline=None)
@given(st.text(alphabet="0123456789.ekmu+-*/^%()<>=!&|?:, abxy", max_size=40))
def test_any_text_has_a_finite_value_or_none(text: str) -> None:
    value = Parameters({"a": "2", "x": "a*b", "b": "x"}, {"y": (("a",), "a+1")}).value(text)
    assert value is None or math.isfinite(value)


@settings(derandomize=True, deadline=None)
@given(st.floats(allow_nan=False, allow_infinity=False, min_value=0))
def test_numbers_as_the_bridge_writes_them_are_read_back(value: float) -> None:
    assert spice_number(repr(value)) == value
