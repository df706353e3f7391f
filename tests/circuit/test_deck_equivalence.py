"""Oracle: `ngspice -b` on the deck as its author wrote it, number by number."""

from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.netlist import deck_from_text, load_deck
from tests.circuit.batch import OPTIONS, ROUNDING, WRITING, copy_decks, original, output

pytestmark = pytest.mark.ngspice


@pytest.mark.parametrize(
    ("name", "mode"),
    [
        ("lines", ""),
        ("includes", ""),
        ("parameters", ""),
        ("hierarchy", ""),
        ("devices", ""),
        ("code_models", ""),
        ("start", ""),
        ("kit_user", ""),
        ("random", ""),  # The deck's own `seed=7` and the seed of the run draw the same numbers.
        ("dialect", "psa"),
    ],
)
def test_prepared_deck_gives_the_waveform_of_the_original(
    tmp_path: Path, name: str, mode: str
) -> None:
    folder = copy_decks(tmp_path)
    wanted = original(f"{name}.cir", folder, mode)
    deck = load_deck(folder / f"{name}.cir", compatibility=mode or None)
    assert deck.tran is not None
    assert deck.tran.step == pytest.approx(2e-12, rel=1e-12)  # rounding of the suffix alone
    assert deck.tran.uic == (name == "start")
    got = output(deck, initial="uic" if deck.tran.uic else "op")
    assert np.ptp(wanted) > 0.01  # The waveform moves; a dead circuit would prove nothing.
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


@pytest.mark.parametrize(
    "encode",
    [
        lambda text: text.replace("\n", "\r\n").encode(),
        lambda text: b"\xef\xbb\xbf" + text.encode(),
        lambda text: text.replace("* a comment", "* \u00e4\u00f6\u00fc").encode("latin-1"),
        lambda text: text.replace("1k//ohm", "1000000000\u00b5").encode("latin-1"),
        lambda text: text.replace("1k//ohm", "1000000000\u00b5").encode(),
        lambda text: text.replace("1k//ohm", "1k\u03a9").encode(),
        lambda text: text.removesuffix(".end\n").encode(),
        lambda text: text.removesuffix("\n.end\n").encode(),
        lambda text: text.upper().replace("OUT.TXT V(OUT)", "out.txt v(out)").encode(),
    ],
    ids=["crlf", "bom", "latin-1", "micro", "micro-utf8", "ohm", "no-end", "no-newline", "upper"],
)
def test_encodings_and_line_ends_change_nothing(tmp_path: Path, encode: object) -> None:
    folder = copy_decks(tmp_path)
    wanted = original("lines.cir", folder)
    text = (folder / "lines.cir").read_text(encoding="utf-8")
    assert callable(encode)
    (folder / "lines.cir").write_bytes(encode(text))
    got = output(load_deck(folder / "lines.cir"))
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)


@pytest.mark.parametrize(
    "body",
    [
        # Lines after .end count for ngspice.
        "v1 in 0 1\nr1 in out 1k\nr2 out 0 1k\n.end\nc1 out 0 1p\nv2 x 0 1\nr3 x 0 1\n",
        # The last of two parameters counts, also where an .if stands around it.
        ".param c=1\n.if (c==1)\n.param rr=1k\n.else\n.param rr=3k\n.endif\nv1 in 0 sin(0 1 1g)\n"
        "r1 in out 1k\nr2 out 0 {rr}\n",
        # The first of two definitions counts.
        "v1 in 0 sin(0 1 1g)\nr1 in out 1k\nx1 out s\n.subckt s a\nr1 a 0 3k\n.ends\n"
        ".subckt s a\nr1 a 0 1k\n.ends\n",
        # A node that only an expression names exists.
        "v1 in 0 sin(0 1 1g)\nr1 in out 1k\nr2 out 0 1k\nb1 x 0 v={v(in)*v(out)}\nr3 x 0 1k\n",
        # A subcircuit without nodes, and one whose name is a node's.
        ".global p\nv1 in 0 sin(0 1 1g)\nr1 in out 1k\nxa s\n.subckt s\nr1 p 0 1k\n.ends\n"
        "r2 out p 1k\n",
        # Continuation at the top of an included file.
        "v1 in 0 sin(0 1 1g)\nr1 in out\n.include rest.inc\nr2 out 0 1k\n",
        # An .end in an included file ends nothing.
        "v1 in 0 sin(0 1 1g)\nr1 in out 1k\n.include end.inc\n",
        # A sign before the value.
        "v1 in 0 sin(0 1 1g)\ni1 0 out = 1m\nr1 in out = 1k\nr2 out 0 =1k\nc1 out 0=1p\n",
        # .prot without encryption hides nothing from ngspice.
        "v1 in 0 sin(0 1 1g)\nr1 in out 1k\n.prot\nr2 out 0 1k\n.unprot\n",
        # A parameter in the text that the host fills in.
        ".param scratch=1k\nv1 in 0 sin(0 1 1g)\nr1 in out {scratch}\nr2 out 0 {scratch}\n",
        # Temperatures: .temp wins over .options, whichever comes last.
        ".temp 127\n.options temp=50\nv1 in 0 sin(0 1 1g)\nr1 in out 1k tc1=1m\nr2 out 0 1k\n",
        ".param t=100\n.temp {t+27}\nv1 in 0 sin(0 1 1g)\nr1 in out 1k\nr2 out 0 '10*temper'\n",
        # Lengths in um: the scale holds for the whole deck, and the last of two counts.
        "v1 in 0 sin(0.9 0.9 1g)\nr1 in out 1k\nm1 out in 0 0 mm w=10 l=1\nx1 out 0 kit\n"
        ".model mm nmos level=1 kp=50u lambda=0.1 tox=5n\n.options scale=2u post parser\n"
        ".subckt kit a b w=3\nm1 a a b b mm w={w} l=1 ad={w*2} pd={w}\n.ends\n"
        ".include scale.inc\n",
        # A VDMOS has three nodes, and two thermal ones at will.
        "v1 in 0 sin(0 1 1g)\nr1 in out 1k\nm1 out in 0 vm\nm2 out in 0 tj tc vm thermal\n"
        "r2 tj 0 1\nr3 tc 0 1\n.model vm vdmos vto=0.5\n",
        # A parenthesis that is never closed.
        "v1 in 0 sin(0 1 1g\nr1 in out 1k\nr2 out 0 1k\n",
        # Values in units, as the programs that write decks give them.
        "v1 in 0 DC 0V AC 1V SIN(0V 1V 1GigHz 0s 0Hz)\nr1 in out 1kOhm\nc1 out 0 1pF\n",
    ],
)  # fmt: skip
def test_corner_cases_are_read_as_ngspice_reads_them(tmp_path: Path, body: str) -> None:
    (tmp_path / "rest.inc").write_text("+ 1k\n", encoding="utf-8")
    (tmp_path / "end.inc").write_text("r2 out 0 1k\n.end\nr3 out 0 2k\n", encoding="utf-8")
    (tmp_path / "scale.inc").write_text(".option scale=1.0u\n.options parser scale=1.0u\n" * 2)
    text = f"title\n{OPTIONS}\n{body}{WRITING}"
    (tmp_path / "deck.cir").write_text(text, encoding="utf-8")
    wanted = original("deck.cir", tmp_path)
    got = output(load_deck(tmp_path / "deck.cir"))
    np.testing.assert_allclose(got, wanted, rtol=0, atol=ROUNDING)
    again = output(deck_from_text(text, folder=tmp_path))
    np.testing.assert_array_equal(again, got)


def test_a_circuit_of_pyspice_is_a_deck() -> None:
    from PySpice.Spice.Netlist import Circuit

    circuit = Circuit("low-pass")
    circuit.SinusoidalVoltageSource("in", "in", circuit.gnd, amplitude=1, frequency=1e9)
    circuit.R(1, "in", "out", 1e3)
    circuit.C(1, "out", circuit.gnd, 1e-13)
    deck = deck_from_text(str(circuit))
    assert deck.title == "low-pass"
    got = output(deck)
    # Closed form of the steady state after several time constants of 0.1 ns: A. S. Sedra and
    # K. C. Smith, Microelectronic Circuits, low-pass of one time constant.
    gain = 1.0 / np.hypot(1.0, 2 * np.pi * 1e9 * 1e-10)
    # 2 ps of a 1 ns period: a sampled peak is at most (pi * 0.002)^2 / 2 = 2e-5 too low, the
    # trapezoidal rule bends by (w h)^2/12 = 1.3e-5.
    assert np.max(got[got.size // 2 :]) == pytest.approx(gain, rel=1e-4)


def test_different_seeds_draw_different_mismatch(tmp_path: Path) -> None:
    deck = load_deck(copy_decks(tmp_path) / "random.cir")
    first, same, other = (output(deck, seed=seed) for seed in (3, 3, 4))
    np.testing.assert_array_equal(first, same)
    assert np.max(np.abs(first - other)) > 1e-4
