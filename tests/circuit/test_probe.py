"""Oracle: the linear combination written out in numpy."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.circuit.probe import evaluate_probe, parse_probe
from cosim.errors import CosimError, ProbeError


@pytest.mark.parametrize(
    ("text", "terms", "unit", "nodes"),
    [
        ("v(out)", [(1, "v(out)")], "V", ["out"]),
        ("OUT", [(1, "v(out)")], "V", ["out"]),
        ("v(rf_p) - v(rf_n)", [(1, "v(rf_p)"), (-1, "v(rf_n)")], "V", ["rf_p", "rf_n"]),
        ("V(A,B)", [(1, "v(a)"), (-1, "v(b)")], "V", ["a", "b"]),
        ("v( a , b )", [(1, "v(a)"), (-1, "v(b)")], "V", ["a", "b"]),
        ("v(a,0)", [(1, "v(a)")], "V", ["a"]),
        ("v(gnd,a)", [(-1, "v(a)")], "V", ["a"]),
        ("0.5*v(out)", [(0.5, "v(out)")], "V", ["out"]),
        ("v(out)/2", [(0.5, "v(out)")], "V", ["out"]),
        ("-(a - 2*b)/4", [(-0.25, "v(a)"), (0.5, "v(b)")], "V", ["a", "b"]),
        ("2*3*a", [(6, "v(a)")], "V", ["a"]),
        ("1e-3*v(a)", [(1e-3, "v(a)")], "V", ["a"]),
        ("a + a", [(2, "v(a)")], "V", ["a"]),
        ("a + b - b", [(1, "v(a)")], "V", ["a"]),
        ("1*a + 2 - 2", [(1, "v(a)")], "V", ["a"]),
        ("i(l1)", [(1, "i(l1)")], "A", []),
        ("I(X1.L3) - 2*i(v2)", [(1, "i(x1.l3)"), (-2, "i(v2)")], "A", []),
        ("v(x1.x2.out)", [(1, "v(x1.x2.out)")], "V", ["x1.x2.out"]),
        ("v(net<3>)", [(1, "v(net<3>)")], "V", ["net<3>"]),
        ("net<3> - bus[2]", [(1, "v(net<3>)"), (-1, "v(bus[2])")], "V", ["net<3>", "bus[2]"]),
        ("v(out+) - v(out-)", [(1, "v(out+)"), (-1, "v(out-)")], "V", ["out+", "out-"]),
        ("v(vdd!)", [(1, "v(vdd!)")], "V", ["vdd!"]),
        ("v(3)", [(1, "v(3)")], "V", ["3"]),
        ("2*v(3)", [(2, "v(3)")], "V", ["3"]),
        ("3a", [(1, "v(3a)")], "V", ["3a"]),
        ("@m.x1.m1[id]", [(1, "@m.x1.m1[id]")], "A", []),
        ("@m1[VGS]", [(1, "@m1[vgs]")], "V", []),
        ("2*@d1[id] + i(v1)", [(2, "@d1[id]"), (1, "i(v1)")], "A", []),
        ("v", [(1, "v(v)")], "V", ["v"]),
    ],
)
def test_probes(text: str, terms: list[tuple[float, str]], unit: str, nodes: list[str]) -> None:
    probe = parse_probe(text)
    assert probe.text == text
    assert list(probe.terms) == terms
    assert probe.unit == unit
    assert list(probe.nodes) == nodes


@pytest.mark.parametrize(
    ("text", "position"),
    [
        ("v(out", 1), ("v()", 1), ("v(a,b,c)", 1), ("i(a,b)", 1), ("v(a) v(b)", 6), ("a +", 4),
        ("a * b", 6), ("a / b", 6), ("1 / a", 6), ("a / 0", 6), ("(a", 3), ("a)", 2), ("", 1),
        ("a ^ 2", 3), ("db(a)", 3), ("v(a b)", 1), ("*a", 1), ("a,b", 2), ("@m1", 1),
    ],
)  # fmt: skip
def test_the_position_of_a_fault_is_told(text: str, position: int) -> None:
    with pytest.raises(ProbeError, match=f"at position {position}:"):
        parse_probe(text)


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("v(a) + i(l1)", "mixes"), ("1", "without a node"), ("2*3", "without a node"),
        ("a + 1", "without a node"), ("v(0)", "always zero"), ("a - a", "always zero"),
        ("v(gnd,0)", "always zero"), ("0*a", "always zero"), ("@m1[gm]", "neither"),
        ("(" * 100 + "a" + ")" * 100, "too many"), ("-" * 100 + "a", "too many"),
    ],
)  # fmt: skip
def test_what_is_no_signal_is_refused(text: str, word: str) -> None:
    with pytest.raises(ProbeError, match=word):
        parse_probe(text)


def test_evaluation_is_the_combination() -> None:
    rng = np.random.default_rng(5)
    a, b, c = rng.normal(size=(3, 50))
    vectors = {"v(a)": a, "v(b)": b, "v(x1.c)": c}
    probe = parse_probe("0.5*(v(a) - 3*v(b))/2 - v(x1.c, a)")
    # Rounding of a handful of products.
    np.testing.assert_allclose(
        evaluate_probe(probe, vectors), 0.25 * (a - 3 * b) - (c - a), rtol=0, atol=1e-14
    )
    assert evaluate_probe(parse_probe("a"), vectors) is not a
    with pytest.raises(ProbeError, match=r"v\(d\)"):
        evaluate_probe(parse_probe("a + d"), vectors)


@settings(derandomize=True, deadline=None)
@given(st.text(alphabet="vi(),ab@[]d0123.e+-*/ <>", max_size=30))
def test_any_text_is_a_probe_or_an_error(text: str) -> None:
    try:
        probe = parse_probe(text)
    except CosimError:
        return
    vectors = {name: np.ones(3) for _, name in probe.terms}
    total = sum(weight for weight, _ in probe.terms)
    # Rounding of at most thirty terms whose weights may be large.
    scale = sum(abs(weight) for weight, _ in probe.terms)
    np.testing.assert_allclose(evaluate_probe(probe, vectors), total, rtol=0, atol=1e-13 * scale)
