"""Oracle: rules on lines, told by hand for each deck; which of them hold is measured elsewhere."""

import math
from dataclasses import replace

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.likeness import Kin, kindred
from cosim.circuit.values import exact_text
from cosim.circuit.waves import SourceWords, agreement, source_words
from tests.circuit.conftest import prepared_lines

REQUEST = TransientRequest(stop=1e-9, step=1e-12)


def deck(*body: str, seed: int = 1, mode: str = "", data: bytes = b"") -> PreparedDeck:
    commands = ([f"set ngbehavior={mode}"] if mode else []) + [f"setseed {seed}"]
    files = {"w.txt": data} if data else {}
    return prepared_lines(body, {"v(o)": "o"}, 1e-9, 1e-12, commands=commands, data=files)


def ways(*decks: PreparedDeck) -> list[Kin]:
    return kindred(decks, [REQUEST] * len(decks))


def way(*decks: PreparedDeck) -> str:
    """ "fresh", "reset", "alter", or "both" of the latter, for decks that are all alike or not."""
    found = ways(*decks)
    if len(found) > 1:
        assert all(not kin.parameters and not kin.sources for kin in found)
        return "fresh"
    (kin,) = found
    return {(True, False): "reset", (False, True): "alter", (True, True): "both"}.get(
        (bool(kin.parameters), bool(kin.sources)), "fresh"
    )


def pair(*body: str, first: str = "1", second: str = "2") -> str:
    """The way for a body in which "#" stands for the number that differs."""
    return way(*(deck(*(line.replace("#", text) for line in body)) for text in (first, second)))


RC = ("r1 i o 1k", "c1 o 0 1p")
SINE = "v1 i 0 sin(0 1 1g)"


@pytest.mark.parametrize(
    "body",
    [
        (".param a=#", SINE, "r1 i o {a}", "c1 o 0 1p"),
        (".param a=# b={2*a}", SINE, "r1 i o {b}", "c1 o 0 1p"),
        (".param A=#", SINE, "r1 i o {a}", "c1 o 0 1p"),
        (".param a=#", ".subckt s x y g=1", "r1 x y {g*a}", ".ends", SINE, "x1 i o s", "c1 o 0 1p"),
        (".param a=#", SINE, *RC, ".model d d(is={a})", "d1 o 0 d"),
        (".param a=#", "v1 i 0 dc {a} ac 1", *RC),  # A source that is not read goes this way.
        (".param a=#", "v1 i 0 sin(0 a 1g)", *RC),
        (".param a=#", ".func f(x) {a*x}", SINE, "r1 i o {f(2)}", "c1 o 0 1p"),
        (".param a=#", ".ic v(o)={a}", SINE, *RC),
        (".param a=#", SINE, *RC, "x1 i o s g={a}", ".subckt s x y g=1", "r1 x y {g}", ".ends"),
        (".param a=# r={agauss(1k,a,1)}", SINE, "r1 i o {r}", "c1 o 0 1p"),
        (".param a=#", SINE, *RC, "b1 p 0 v=a*v(i)"),
    ],
    ids=lambda body: body[0] + " " + body[1],
)
def test_numbers_of_parameters_are_a_family(body: tuple[str, ...]) -> None:
    assert pair(*body) == "reset"


@pytest.mark.parametrize(
    "body",
    [
        (".param a=#", "v1 i 0 {a}", *RC),
        (".param a=#", "v1 i 0 dc {a}", *RC),
        (".param vdd=#", "v1 vdd 0 {vdd}", "r1 vdd o 1k", "c1 o vdd 1p"),  # a node of that name
        (".param a=# b={2*a}", "v1 i 0 pulse(0 {b} 1n 1p 1p 1n)", *RC),
        (".param a=#", ".func f(x) {a*x}", "v1 i 0 sin(0 {f(2)} 1g)", *RC),
        (".param a=#", "v1 i 0 sin(0 1 1g)", "i1 0 o exp(0 {a} 1n 1n)", *RC),
        (".param is=#", "v1 i 0 {is}", *RC, "d1 o 0 d", ".model d d(is=1e-14 n = 1)"),
        (".param a=#", "v1 vdd 0 {a}", ".subckt s vdd o", "r1 vdd o 1k", ".ends", "x1 vdd o s"),
    ],
    ids=lambda body: body[0] + " " + body[1],
)
def test_parameters_of_sources_alone_are_altered(body: tuple[str, ...]) -> None:
    assert pair(*body) == "both"


def test_sources_themselves_may_differ() -> None:
    assert pair("v1 i 0 pulse(0 # 1n 1p 1p 1n)", *RC) == "alter"
    assert pair("v1 i 0 dc #", ".param r=1k", *RC) == "alter"


@pytest.mark.parametrize(
    "body",
    [
        (SINE, "r1 i o #", "c1 o 0 1p"),  # not a parameter
        (".param a={#}", SINE, "r1 i o {a}"),  # not a plain number
        (".param a=#", ".param a=3", SINE, "r1 i o {a}"),  # set twice
        (".param a=# a=3", SINE, "r1 i o {a}"),
        (".param a=#", ".subckt s x y a=5", "r1 x y {a}", ".ends", SINE, "x1 i o s"),
        (".param a=#", ".subckt s x y", ".param a=5", "r1 x y {a}", ".ends", SINE, "x1 i o s"),
        (".subckt s x y", ".param a=#", "r1 x y {a}", ".ends", SINE, "x1 i o s"),
        (".param a=#", ".if (a==1)", "r1 i o 1k", ".else", "r1 i o 2k", ".endif", SINE),
        (".param b=1", ".if (b==1)", ".param a=#", ".endif", SINE, "r1 i o {a}"),
        (".param a=#", ".options reltol={a}", SINE, "r1 i o {a}"),
        (".param a=# t={a+1}", ".temp {t}", SINE, "r1 i o {a}"),
        (".param a=#", ".csparam b={a}", SINE, "r1 i o {a}"),
        (".csparam a=#", SINE, "r1 i o {a}"),
        (".param a=#", "v1 i 0 dc 0 trnoise(1m 1n 0 0)", "r1 i o {a}"),
        (".param a=#", "v1 i 0 dc 0 trrandom(1 1n 0 1)", "r1 i o {a}"),
        ("v1 i 0 dc # ac 1", *RC),
        ("v1 i 0 sin(0 # 1g)", "v2 o 0 dc # ac 1", *RC),  # One of two is not read.
        ("v1 i 0 sin(0 # 1g)", ".subckt s x", "v1 x 0 #", ".ends", "x1 o s", *RC),
        (".temp #", SINE, *RC),
    ],
    ids=lambda body: body[0] + " " + body[1],
)
def test_whatever_is_not_certain_runs_fresh(body: tuple[str, ...]) -> None:
    assert pair(*body) == "fresh"


def test_an_analysis_that_follows_from_the_parameter_runs_fresh() -> None:
    def one(text: str) -> PreparedDeck:
        body = [f".param a={text}", SINE, "r1 i o {a}"]
        return prepared_lines(body, {}, 1e-9, 1e-12, tran=".tran {a} 1n 0 1p")

    assert way(one("1p"), one("2p")) == "fresh"


@pytest.mark.parametrize("text", ["-2", "2.5e-3", "2u", "+3", ".5", "2meg"])
def test_plain_numbers(text: str) -> None:
    assert pair(".param a=#", SINE, "r1 i o {a}", second=text) == "reset"


@pytest.mark.parametrize("text", ["5a", "1mil", "{2}", "'2'", "b", "2*3"])
def test_numbers_that_are_not_plain(text: str) -> None:
    assert pair(".param a=#", SINE, "r1 i o {a}", second=text) == "fresh"


def test_decks_that_differ_in_more_are_no_family() -> None:
    body = (".param a=1", SINE, "r1 i o {a}")
    other = (".param a=2", SINE, "r1 i o {a}")
    assert way(deck(*body), deck(*other, "c2 o 0 1p")) == "fresh"
    assert way(deck(*body, mode="hsa"), deck(*other)) == "fresh"
    assert way(deck(*body, mode="hsa"), deck(*other, mode="hsa")) == "reset"
    assert way(deck(*body, mode="psa"), deck(*other, mode="psa")) == "fresh"
    # Samples are read as a run begins, other files as a deck is loaded.
    for kind, expected in (("filesource", "reset"), ("d_source", "fresh")):
        card = f'.model m {kind}(file="{{scratch}}/w.txt")'
        pair_of = (deck(*body, card, data=b"1"), deck(*other, card, data=b"2"))
        assert way(*pair_of) == expected
    assert way(deck(*body, data=b"1"), deck(*other, data=b"1")) == "reset"
    slower = replace(REQUEST, time_limit=5.0)
    found = kindred([deck(*body), deck(*other)], [REQUEST, slower])
    assert [kin.members for kin in found] == [(0,), (1,)]


def test_one_load_has_one_seed_but_reset_gives_it_again() -> None:
    drawn = (".param a=# r={agauss(1k,10,1)}", "v1 i 0 {a}", "r1 i o {r}")
    plain = (".param a=#", "v1 i 0 {a}", "r1 i o 1k")

    def two(body: tuple[str, ...]) -> str:
        decks = (deck(*(line.replace("#", str(n)) for line in body), seed=n) for n in (1, 2))
        return way(*decks)

    assert pair(*drawn) == "both"
    assert two(drawn) == "reset"
    assert two(plain) == "both"
    # A source that draws its value itself.
    assert pair(".param a=# s={agauss(a,1,1)}", "v1 i 0 {s}", *RC) == "reset"


def test_families_are_sorted_out_of_a_mixture() -> None:
    decks = [
        deck(f".param a={a}", SINE, "r1 i o {a}", f"c1 o 0 {c}")
        for a, c in ((1, "1p"), (1, "2p"), (2, "1p"), (2, "2p"), (3, "3p"))
    ]
    assert [kin.members for kin in ways(*decks)] == [(0, 2), (1, 3), (4,)]


def test_words_of_sources() -> None:
    found = source_words("Vin in 0 DC {a+1} PULSE(0 {b} 1n, 1p 1p 1n)")
    assert found == SourceWords("vin", "{a+1}", "pulse", ("0", "{b}", "1n", "1p", "1p", "1n"))
    assert source_words("i1 0 o 1m") == SourceWords("i1", "1m", "", ())
    assert source_words("v1 a 0 dc = 3") == SourceWords("v1", "3", "", ())
    for text in ("v1 a 0", "v1 a 0 ac 1", "v1 a 0 pwl(0 0 1n 1) r=0", "v1 a 0 sffm(0 1 1g)"):
        assert source_words(text) is None


PULSE = source_words("v1 a 0 pulse(0 1 5n 1n 1n 3n)")
SIN = source_words("v1 a 0 sin(0 1 1g 4n 0 0)")
PWL = source_words("v1 a 0 pwl(0 0 1n 1 3n 1 4n 0)")
EXP = source_words("v1 a 0 dc 0 exp(0 1 2n 1n 5n 1n)")


@pytest.mark.parametrize(
    ("source", "first", "second", "until"),
    [
        (PULSE, [0, 1, 5, 1, 1, 3], [0, 2, 5, 1, 1, 3], 5),
        (PULSE, [0, 1, 5, 1, 1, 3], [0, 1, 5, 1, 1, 3], math.inf),
        (PULSE, [0, 1, 5, 1, 1, 3], [0.1, 1, 5, 1, 1, 3], 0),  # other before the pulse
        (PULSE, [0, 1, 5, 1, 1, 3], [0, 1, 6, 1, 1, 3], 0),  # other break points
        (PULSE, [0, 1, 5, 1, 1, 3], [0, 2, 5, 1, 1, 2], 0),
        (SIN, [0, 1, 9, 4, 0, 0], [0, 2, 9, 4, 0, 0], 4),
        (SIN, [0, 1, 9, 4, 0, 30], [0, 2, 9, 4, 0, 30], 0),  # A sine holds its phase's value.
        (SIN, [0, 1, 9, 4, 0, 0], [0, 1, 8, 4, 0, 0], 0),
        (PWL, [0, 0, 1, 1, 3, 1, 4, 0], [0, 0, 1, 1, 3, 2, 4, 0], 1),
        (PWL, [0, 0, 1, 1, 3, 1, 4, 0], [0, 0, 1, 1, 3, 1, 4, 9], 3),
        (PWL, [0, 0, 1, 1, 3, 1, 4, 0], [0, 1, 1, 1, 3, 1, 4, 0], 0),
        (PWL, [0, 0, 1, 1, 3, 1, 4, 0], [0, 0, 1, 1, 3, 1, 5, 0], 0),
        (EXP, [0, 0, 1, 2, 1, 5, 1], [0, 0, 3, 2, 1, 5, 1], 2),
        (EXP, [0, 0, 1, 2, 1, 5, 1], [1, 0, 1, 2, 1, 5, 1], 0),
    ],
)
def test_until_when_sources_agree(
    source: SourceWords, first: list[float], second: list[float], until: float
) -> None:
    assert agreement(source, first, second) == until


def test_exact_text_gives_the_double_back() -> None:
    for value in (0.1, -1.7e-13, 6.2e9, 1 / 3, 5e-324, 1.7976931348623157e308, 0.0):
        mantissa, _, exponent = exact_text(value).partition("*2^")
        assert abs(int(mantissa.strip("()"))) < 2**53
        assert math.ldexp(int(mantissa.strip("()")), int(exponent.strip("()") or 0)) == value
