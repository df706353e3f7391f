"""Oracle: common practice that BSIM cards are extracted for -40 to 125 degrees Celsius."""

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import deck_from_text, prepare

KIT = """.subckt nch d g s b
m1 d g s b nch_mac
.model nch_mac.1 nmos level = 54 version=4.5
.model nch_mac.2 nmos level = 54 version=4.5
.ends
.subckt pch d g s b
m1 d g s b pch_mac
.model pch_mac pmos version=4.5 level=5.4e1
.ends
.subckt unused d g s b
m1 d g s b other
.model other nmos level=54
.ends
"""
USED = "x1 out in 0 0 nch\nx2 out in 0 0 pch\nx3 out in 0 0 nch\n"


def notices(body: str, temperature: float | None) -> tuple[str, ...]:
    deck = deck_from_text(f"title\nv1 in 0 1\nr1 in out 1k\n{body}.end\n")
    request = TransientRequest(stop=1e-9, step=1e-12, temperature=temperature, saves=("v(out)",))
    return prepare(deck, request).notices


@pytest.mark.parametrize("temperature", [233.15, -40 + 273.15, 300.0, 398.15, 125 + 273.15, None])
def test_nothing_is_said_within_the_range(temperature: float | None) -> None:
    assert notices(KIT + USED, temperature) == ()


@pytest.mark.parametrize("temperature", [20.0, 77.0, 233.1, 398.2, 450.0])
def test_one_warning_names_the_models_and_the_temperature(temperature: float) -> None:
    (said,) = notices(KIT + USED, temperature)
    assert said.startswith("circuit:6: MOS models nch_mac, pch_mac are extrapolated")
    assert f" {temperature:g} K" in said
    assert "-40 to 125 degrees Celsius (233.15 to 398.15 K) unless their tnom" in said


def test_the_decks_own_temperature_counts_as_well() -> None:
    (said,) = notices(KIT + USED + ".temp -196\n", None)
    assert "extrapolated to 77.15 K" in said


def test_below_20_k_one_warning_says_the_worse() -> None:
    (said,) = notices(KIT + USED, 4.2)
    assert "nch_mac, pch_mac are uncalibrated at 4.2 K" in said
    assert "extracted" not in said


@pytest.mark.parametrize("level", [8, 49, 14, 54, 10, 58])
def test_each_level_of_bsim_is_meant(level: int) -> None:
    body = f"m1 out in 0 0 m\n.model m nmos(vth0=0.4 LEVEL={level})\n"
    assert "MOS models m are extrapolated" in notices(body, 100.0)[0]
    assert notices(body, 300.0) == ()


@pytest.mark.parametrize("card", ["nmos level=1", "nmos", "pmos(level=3)", "vdmos"])
def test_models_of_hand_calculation_claim_no_range(card: str) -> None:
    body = f"m1 out in 0 0 m\n.model m {card}\n"
    assert notices(body, 100.0) == ()
    assert notices(body, 300.0) == ()
    assert "MOS models m are uncalibrated" in notices(body, 4.2)[0]


@pytest.mark.parametrize(
    "body",
    [
        "m1 out in 0 0 m\n.model m nmos level=54 tnom=-223.15\n",
        "m1 out in 0 0 m\n.model m nmos(level=54 tnom = {t-200})\n.param t=-23.15\n",
        "m1 out in 0 0 m\n.model m nmos level=54\n.options tnom=-223.15\n",
    ],
)
def test_a_card_that_was_fitted_in_the_cold_says_so_by_tnom(body: str) -> None:
    assert notices(body, 50.0) == ()
    assert notices(body, 77.0) == ()
    assert notices(body, 300.0) == ()
    assert "extrapolated to 45 K" in notices(body, 45.0)[0]
    assert "uncalibrated at 4.2 K" in notices(body, 4.2)[0]
    assert notices(body.replace("-223.15", "-268.95").replace("-23.15", "-68.95"), 4.2) == ()


def test_many_models_are_counted() -> None:
    body = "".join(f"m{k} out in 0 0 n{k}\n.model n{k} nmos level=54\n" for k in range(8))
    assert "MOS models n0, n1, n2 and 5 more are extrapolated" in notices(body, 77.0)[0]
