"""Oracles: the cable's pole in closed form, `ngspice -b` small signals, deletion of transistors."""

import re
from pathlib import Path

import numpy as np
import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import Deck, deck_from_text, load_deck, with_parameters
from cosim.circuit.simulator import simulate
from cosim.circuit.stimulus import with_stimulus
from cosim.dsp.settling import fit_tail
from cosim.errors import SimulationError
from cosim.waveform import FloatArray, Waveform
from tests.netlists.small_signal import ac_analysis
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

DECK = Path(__file__).parents[2] / "netlists" / "flux_line" / "flux_line.cir"


def step_response(
    level: float, stop: float = 400e-9, deck: Deck | None = None
) -> tuple[FloatArray, FloatArray]:
    """Times from a step of the EMF at 1 ns on, and v(flux) from where it stood."""
    step = Waveform(np.array([0.0, 1e-9, 1.2e-9, stop]), np.array([0.0, 0.0, level, level]))
    played = with_stimulus(deck or load_deck(DECK), "vdac", step)
    result = simulate(played, TransientRequest(stop=stop, step=50e-12, saves=("v(flux)",)))
    assert result.warnings == ()
    v = result.vectors["v(flux)"]
    late = result.time > 1.2e-9
    return result.time[late] - 1.2e-9, (v - v[0])[late]


def test_the_cable_settles_with_its_pole(validate: Validate) -> None:
    t, v = step_response(0.1, deck=with_parameters(load_deck(DECK), {"c_tee": 1e-3}))
    late = t > 15e-9
    found = fit_tail(t[late], v[late, None] / v[-1])
    wanted = 160e-9 * (1.0 / 4.0 + 1.0 / 100.0)
    validate(
        "time constant of a coil beside a resistor in a line of 50 ohm",
        "L/(R parallel to 2 Z0), elementary",
        wanted,
        float(found.time_constants[0]),
        "s",
        rel=0.01,  # The filter's poles stand beside it.
    )
    # Of the last level 4 ohm in 104 are missing at first, which is one delay of the filter later.
    missing = -4.0 / 104.0 * np.exp(2.0 / (2.0 * np.pi * 250e6) / wanted)
    assert found.amplitudes[0, 0] == pytest.approx(missing, rel=0.01)


def test_the_filter_has_its_corner(tmp_path: Path) -> None:
    text = DECK.read_text(encoding="utf-8").replace("vdac emf cm dc 0", "vdac emf cm dc 0 ac 1")
    deck = deck_from_text(text, name="small")
    frequency, volts = ac_analysis(deck, tmp_path, (30e6, 250e6, 23), ("flux",))
    gain = np.abs(volts["flux"])
    assert frequency[-1] == pytest.approx(250e6)
    # The cable's coil passes nothing at both: 3.01 dB, and what the driver's own poles add.
    assert 20.0 * np.log10(gain[0] / gain[-1]) == pytest.approx(3.0103, abs=0.5)


def test_it_bends_at_large_levels() -> None:
    _, small = step_response(0.05, 60e-9)
    _, large = step_response(0.6, 60e-9)
    compressed = 1.0 - large[-1] / (12.0 * small[-1])
    assert 2e-4 < abs(compressed) < 0.1


@pytest.mark.parametrize("name", ["m1", "m2"])
def test_every_transistor_matters(name: str) -> None:
    _, whole = step_response(0.6, 40e-9)
    text = re.sub(rf"(?m)^{name} .*\n", "", DECK.read_text(encoding="utf-8"))
    deck = deck_from_text(text, name="less")
    try:
        _, less = step_response(0.6, 40e-9, deck)
    except (SimulationError, AssertionError):
        return  # There is no operating point without it.
    assert np.abs(less[: whole.size] - whole[: less.size]).max() > 0.1 * np.abs(whole).max()
