"""Oracles: the free decay of a steady field, and the decay through a resonator, closed forms."""

import math
from pathlib import Path
from typing import Any

import pytest

from cosim.errors import InputError, TestbenchError
from cosim.readout_aftermath import Aftermath, find_aftermath
from cosim.readout_input import make_answers
from tests.readout.benches import bench

TURN = 2.0 * math.pi
# g**2 (n + 1)/(Delta + n alpha) is -10, -40/3 and -15 MHz: the three levels pull by 10, -10 + 40/3
# and -40/3 + 15 MHz.
QUBIT = {"qubit_frequency": "5 GHz", "coupling": "100 MHz", "anharmonicity": "-500 MHz"}
CHI, CHI_2 = -10.0 / 3.0, -5.0  # MHz


def aftermath(folder: Path, t1: str | None = None, **resonator: Any) -> Aftermath:
    made = bench(
        folder,
        netlist={"stop": "1.45 us"},
        resonator={"start": "0 ns", "length": "1.4 us", **resonator},
        readout={"window": ["1 us", "1.4 us"], "t1": t1},
    )
    assert made.resonator is not None
    answers = make_answers(made.resonator, made.readout, 1.45e-6)
    return find_aftermath(made.resonator, answers, made.readout.t1, 1.45e-6)


def test_photons_left_shift_the_qubit(tmp_path: Path) -> None:
    """A field of 5 photons that decays for 50 ns; each photon shifts the qubit by 2 chi."""
    found = aftermath(tmp_path)
    kappa, chi, wait = TURN * 5e6, TURN * 1e6, 50e-9
    photons = 5.0 * math.exp(-kappa * wait)
    # The edge of the pulse is one or two steps of 1/50 of the field's time long, second order.
    close = 2e-3
    assert found.residual_photons == pytest.approx(photons, rel=close)
    # A readout leaves one of the states, and the next gate finds that state's field.
    assert found.residual_stark_shift == pytest.approx(2.0 * chi * photons / TURN, rel=close)
    assert found.wait == pytest.approx(math.log(photons / 0.01) / kappa, rel=close)
    assert math.isnan(found.purcell_time)
    assert found.warnings == ()


def test_the_decay_through_the_resonator(tmp_path: Path) -> None:
    chi = f"{CHI} MHz"
    alone = 1.0 / (TURN * 5e6 * 0.1**2)
    bare = aftermath(tmp_path, "3 us", photons=0.01, chi=chi, **QUBIT)
    assert bare.purcell_time == pytest.approx(alone, rel=1e-9)
    assert bare.warnings == ()
    (warning,) = aftermath(tmp_path, "4 us", photons=0.01, chi=chi, **QUBIT).warnings
    assert warning == "'t1' is 4 µs, and through the resonator alone the qubit decays in 3.183 µs"
    (warning,) = aftermath(tmp_path, photons=0.01, chi=chi, **QUBIT).warnings
    assert warning.startswith("no 't1' is given, and through the resonator alone")
    # Behind a filter of quality 30 it takes 2 Q |Delta|/omega_q times as long.
    filtered = aftermath(tmp_path, "30 us", photons=0.01, chi=chi, filter_quality=30.0, **QUBIT)
    assert filtered.purcell_time == pytest.approx(alone * 60.0 * 1.0 / 5.0, rel=1e-9)
    assert filtered.warnings == ()


def test_the_shift_of_a_leaked_state_is_judged(tmp_path: Path) -> None:
    shifts = {"photons": 0.01, "chi": f"{CHI} MHz", **QUBIT}
    assert aftermath(tmp_path, "1 us", chi_2=f"{CHI_2} MHz", **shifts).warnings == ()
    (warning,) = aftermath(tmp_path, "1 us", chi_2="-2 MHz", **shifts).warnings
    assert warning.startswith("chi_2 is -2 MHz, and coupling, detuning and anharmonicity make -5 M")


@pytest.mark.parametrize(
    ("words", "more"),
    [
        ("'filter_quality' goes with", {"filter_quality": 30.0}),
        ("wanted more than 0, got -1", {"filter_quality": -1.0, **QUBIT}),
    ],
)
def test_a_filter_that_cannot_be(tmp_path: Path, words: str, more: dict[str, Any]) -> None:
    with pytest.raises((InputError, TestbenchError), match=words):
        aftermath(tmp_path, **more)
