"""Oracle: ngspice's own sizes of devices, and the same device with an altered model card."""

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import Deck
from cosim.circuit.mismatch import Mosfet, Shift, mosfets, with_mismatch
from cosim.circuit.netlist import deck_from_text
from cosim.circuit.simulator import simulate
from cosim.errors import DeckError, InputError, UnknownNameError

LEVEL1 = ".model n1 nmos level=1 vto={vto} kp=200u gamma=0.3 lambda=0.05\n"
BSIM4 = ".model n1 nmos level=54 version=4.8.0 vth0={vto} toxe=2n u0={u0}\n"
BSIM3 = ".model n1 nmos level=49 version=3.3.0 vth0={vto} tox=2n u0={u0}\n"
PMOS = {
    1: ".model p1 pmos level=1 vto={vto} kp=90u gamma=0.3\n",
    54: ".model p1 pmos level=54 version=4.8.0 vth0={vto} toxe=2n u0=0.02\n",
}

HIERARCHY = """a hierarchy of sizes
.option scale=1u
.param wn=2 ratio={wn/4}
.func double(x) {2*x}
.model n1 nmos level=1 vto=0.4
.model n1b nmos level=14
.subckt unit d g w=1 l=0.5
.param own={w+1}
m1 d g 0 0 n1 w={w} l={l}
m2 d g 0 0 n1 w='own*2' l={double(l)} m=3
.ends
.subckt pair d g wide=5
xa d g unit w={wide} l=0.25
xb d g unit w={wide*ratio} m=4
m9 d g 0 0 n1 w={wide} l=1
.ends
vd d 0 1
vg g 0 0.8
m0 d g 0 0 n1 w={wn} l=0.5 m={2*wn}
x1 d g pair
x2 d g pair wide={3*wn}
x3 d g unit w={ratio} m={1+wn}
.end
"""


def values(deck: Deck, *saves: str) -> list[float]:
    """Vectors of the operating point, which two steps of a transient keep."""
    result = simulate(deck, TransientRequest(stop=2e-9, step=1e-9, saves=saves))
    return [float(result.vectors[save][-1]) for save in saves]


def one_device(card: str, vto: float = 0.4, u0: float = 0.04, extra: str = "") -> Deck:
    card = card.format(vto=vto, u0=u0)
    lines = f"{card}vd d 0 0.6\nvg g 0 0.7\nm1 d g 0 0 n1 w=2u l=0.2u {extra}\n"
    return deck_from_text(f"one device\n{lines}.end\n")


@pytest.mark.ngspice
def test_sizes_are_those_of_ngspice() -> None:
    deck = deck_from_text(HIERARCHY)
    found = {device.path: device for device in mosfets(deck)}
    assert len(found) == 13
    for path, device in found.items():
        name = f"m.{path}" if "." in path else path
        # A device inside an instance takes the instance's multiplier in place of its own; every
        # edit copies the definitions, so that no other instance has a say in it.
        deck = with_mismatch(deck_from_text(HIERARCHY), {path: Shift(0.0, 1.0)})
        got = values(deck, f"@{name}[w]", f"@{name}[l]", f"@{name}[m]")
        want = [device.width, device.length, device.multiplier]
        # ngspice keeps these numbers as doubles: a few roundings of the expressions differ.
        assert got == pytest.approx(want, rel=1e-12), path
    assert found["x2.xb.m2"].area == pytest.approx(2 * (6 * 0.5 + 1) * 2 * 0.5 * 4 * 1e-12)


@pytest.mark.ngspice
class TestShiftsAgainstCards:
    def test_level_1_takes_a_gate_source_and_its_width(self) -> None:
        plain = one_device(LEVEL1)
        (want,) = values(one_device(LEVEL1, vto=0.4123), "i(vd)")
        (got,) = values(with_mismatch(plain, {"m1": Shift(0.0123)}), "i(vd)")
        # The same equation; the operating point is iterated to reltol = 1e-4 of a quadratic
        # function, which Newton's method ends far below.
        assert got == pytest.approx(want, rel=1e-6)
        (before,) = values(plain, "i(vd)")
        (got,) = values(with_mismatch(plain, {"M1": Shift(0.0, 1.07)}), "i(vd)")
        assert got == pytest.approx(1.07 * before, rel=1e-6)

    @pytest.mark.parametrize("card", [BSIM3, BSIM4], ids=["BSIM3", "BSIM4"])
    def test_bsim_takes_its_own_parameters(self, card: str) -> None:
        shifted = with_mismatch(one_device(card), {"m1": Shift(0.0123, 1.07)})
        assert "mismatch" not in "".join(line.text for line in shifted.lines)
        (got,) = values(shifted, "i(vd)")
        (want,) = values(one_device(card, vto=0.4123, u0=0.04 * 1.07), "i(vd)")
        (before,) = values(one_device(card), "i(vd)")
        assert got == pytest.approx(want, rel=1e-6)
        assert abs(got / before - 1.0) > 1e-3

    @pytest.mark.parametrize("level", [1, 54])
    def test_a_positive_shift_lets_a_p_channel_device_conduct_more(self, level: int) -> None:
        def deck(vto: float) -> Deck:
            lines = "vs s 0 1\nvg g 0 0.3\nvd d 0 0.2\nm1 d g s s p1 w=2u l=0.2u\n"
            return deck_from_text(f"p\n{PMOS[level].format(vto=vto)}{lines}.end\n")

        (want,) = values(deck(-0.39), "i(vd)")
        (got,) = values(with_mismatch(deck(-0.4), {"m1": Shift(0.01)}), "i(vd)")
        (before,) = values(deck(-0.4), "i(vd)")
        assert got == pytest.approx(want, rel=1e-6)
        assert got > 1.01 * before > 0.0

    def test_what_the_device_has_already_stays(self) -> None:
        both = one_device(BSIM4, extra="delvto={2*5m} mulu0=1.02")
        (want,) = values(one_device(BSIM4, vto=0.42, u0=0.04 * 1.02 * 1.05), "i(vd)")
        (got,) = values(with_mismatch(both, {"m1": Shift(0.01, 1.05)}), "i(vd)")
        assert got == pytest.approx(want, rel=1e-6)

    @pytest.mark.parametrize("card", [LEVEL1, BSIM4], ids=["level 1", "BSIM4"])
    def test_only_the_named_instances_change(self, card: str) -> None:
        text = f"""cells
{card.format(vto=0.4, u0=0.04)}.subckt cell d g
m1 d g 0 0 n1 w=2u l=0.2u
m2 d g 0 0 n1 w=2u l=0.2u
.ends
.subckt twin d1 d2 g
xa d1 g cell
xb d2 g cell
.ends
vg g 0 0.7
va a 0 0.6
vb b 0 0.6
vc c 0 0.6
vd d 0 0.6
x1 a b g twin
x2 c d g twin
.end
"""
        deck = deck_from_text(text)
        shifts = {"x1.xb.m1": Shift(0.02), "x2.xa.m2": Shift(-0.03, 1.1), "x1.xb.m2": Shift(0.01)}
        names = ("i(va)", "i(vb)", "i(vc)", "i(vd)")
        a, b, c, d = values(with_mismatch(deck, shifts), *names)
        plain = values(deck, *names)
        singles = {v: values(one_device(card, vto=0.4 + v), "i(vd)")[0] for v in (0, 0.01, 0.02)}
        assert a == d == plain[0]
        assert b == pytest.approx(singles[0.02] + singles[0.01], rel=1e-6)
        assert abs(c) > 1.05 * abs(plain[2])


class TestFaults:
    deck = deck_from_text(HIERARCHY)

    def test_unknown_names(self) -> None:
        with pytest.raises(UnknownNameError, match=r"'x1.xa.m3' does not exist"):
            with_mismatch(self.deck, {"x1.xa.m3": Shift(0.01)})
        with pytest.raises(InputError, match="'vd' is no MOS transistor"):
            with_mismatch(self.deck, {"vd": Shift(0.01)})

    @pytest.mark.parametrize("size", ["l=1u", "w={agauss(1,1,3)} l=1u", "w=0 l=1u", "w={q} l=1u"])
    def test_a_size_that_cannot_be_told(self, size: str) -> None:
        text = f"t\n.model n1 nmos\nvd d 0 1\nm1 d d 0 0 n1 {size}\n.end\n"
        with pytest.raises(DeckError, match=r"circuit:4: the width of 'm1' cannot be told"):
            mosfets(deck_from_text(text))

    def test_a_value_without_a_number_does_not_fall_back_to_the_default(self) -> None:
        text = (
            "t\n.model n1 nmos\nvd d 0 1\nx1 d cell w={agauss(1,1,3)}\n"
            ".subckt cell d w=1u\nm1 d d 0 0 n1 w={w} l=1u\n.ends\n.end\n"
        )
        with pytest.raises(DeckError, match=r"the width of 'x1.m1'"):
            mosfets(deck_from_text(text))

    def test_a_multiplier_over_two_levels(self) -> None:
        text = HIERARCHY.replace("x1 d g pair", "x1 d g pair m=2")
        with pytest.raises(DeckError, match="'x1' has a multiplier and holds a subcircuit 'xa'"):
            mosfets(deck_from_text(text))

    def test_a_name_that_is_taken(self) -> None:
        text = "t\n.model n1 nmos\nvd d mismatch_m1 1\nm1 d d 0 0 n1 w=1u l=1u\n.end\n"
        with pytest.raises(DeckError, match="'mismatch_m1' is taken"):
            with_mismatch(deck_from_text(text), {"m1": Shift(0.01)})

    def test_a_current_factor_needs_a_width(self) -> None:
        text = "t\n.model n1 nmos\nvd d 0 1\nm1 d d 0 0 n1\n.end\n"
        with pytest.raises(DeckError, match="gives no width"):
            with_mismatch(deck_from_text(text), {"m1": Shift(0.0, 1.1)})

    @pytest.mark.parametrize("shift", [(float("nan"), 1.0), (0.0, 0.0), (0.0, -1.0)])
    def test_impossible_shifts(self, shift: tuple[float, float]) -> None:
        with pytest.raises(InputError, match="must be"):
            Shift(*shift)


def test_power_transistors_are_left_out_and_branches_are_told() -> None:
    text = """branches
.param big=1
.model n1 nmos
.model pw vdmos
vd d 0 1
m0 d d 0 pw
.if (big)
m1 d d 0 0 n1 w=4u l=1u
.else
m1 d d 0 0 n1 w=1u l=1u
.endif
.end
"""
    assert mosfets(deck_from_text(text)) == (Mosfet("m1", "n1", 4e-6, 1e-6, 1.0),)
