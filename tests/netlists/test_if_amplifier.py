"""Oracle: the curve of a bipolar pair in closed form, and `ngspice -b` small-signal runs.

Difference i of the currents of a pair with the tail current I over the input v:
v = 2 V_T artanh(i/I) + i (r_e + r_b/beta), V_T = k T/q (P. R. Gray et al., Analysis and Design of
Analog Integrated Circuits, the emitter-coupled pair; recalled from memory).
"""

from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from scipy.constants import elementary_charge
from scipy.constants import k as BOLTZMANN
from scipy.interpolate import CubicSpline

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import load_deck, with_parameters
from cosim.circuit.noise import NoiseRequest, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_temperature import at_noise_temperatures
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray
from tests import sources
from tests.netlists.small_signal import ac_analysis
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

NETLISTS = Path(__file__).parents[2] / "netlists"
FOLDER = NETLISTS / "if_amplifier"
DECK = FOLDER / "if_amplifier.cir"
THERMAL = BOLTZMANN * 50.0 / elementary_charge
PROBES = {"in": "v(in) - v(ref)", "first": "v(c1p) - v(c1n)", "out": "v(out_p) - v(out_n)"}


def record(
    parameters: Mapping[str, float], stop: float, step: float
) -> tuple[FloatArray, dict[str, FloatArray], float]:
    """Times, the differences of `PROBES`, and the supply's mean current."""
    sides = {name: tuple(text.split(" - ")) for name, text in PROBES.items()}
    saves = (*(side for pair in sides.values() for side in pair), "i(vsup)")
    request = TransientRequest(stop=stop, step=step, saves=saves)
    result = simulate(with_parameters(load_deck(DECK), parameters), request)
    assert result.warnings == ()
    v = result.vectors
    found = {name: v[high] - v[low] for name, (high, low) in sides.items()}
    return result.time, found, -float(np.mean(v["i(vsup)"]))


def amplitude(level: float) -> float:
    """Peak of the fundamental at the output for an EMF at 100 MHz, after 30 ns."""
    t, v, _ = record({"amp_in": level}, 50e-9, 50e-12)
    grid = 50e-9 - 50e-12 * np.arange(400)
    samples = CubicSpline(t, v["out"])(grid)
    return float(2 * abs(np.mean(samples * np.exp(-2j * np.pi * 1e8 * grid))))


def test_first_pair_follows_the_curve_of_its_junctions(validate: Validate) -> None:
    # A slow sine from -60 mV to 60 mV at the pair traces the static curve.
    t, v, _ = record({"amp_in": 0.12, "f_in": 1e5}, 10e-6, 5e-9)
    even = CubicSpline(t, v["first"])(np.arange(2000) * 5e-9)
    rails = (np.max(even) - np.min(even)) / 2
    for share in (0.3, 0.6, 0.9):
        rising = t < 2.5e-6
        place = np.interp(share * rails, v["first"][rising], v["in"][rising])
        # Emitter 1.2 ohm and base some 8 ohm over the gain of 400, a fourth for the area of 4; the
        # currents are the collectors'.
        resistance = (1.2 + 8 / 400) / 4
        expected = 2 * THERMAL * np.arctanh(share) + share * rails / 120.0 * resistance
        quantity = f"input of the IF amplifier's pair at {share:.0%} of its limit"
        # The card's knee current bends the exponential by 1 mA/(4 x 60 mA) = 0.4 %, the output
        # conductance moves the limit itself by 0.1 V/80 V over the swing; measured 0.2 to 0.4 %.
        validate(quantity, sources.GRAY, expected, float(place), "V", rel=8e-3, digits=4)


def test_it_limits() -> None:
    small = amplitude(1e-5) / 1e-5
    # Design numbers of NOTES.md: gain, and the level at the output behind the limit.
    assert 20 * np.log10(small) == pytest.approx(42.7, abs=0.3)
    levels = [amplitude(level) for level in (3e-3, 10e-3, 30e-3)]
    # Fundamental of a square wave: 4/pi of the plateau of 0.19 V. Edges of finite slope take from
    # it, the overshoot of the emitter followers adds 2 %.
    for level in levels[1:]:
        assert level == pytest.approx(4 / np.pi * 0.192, rel=3e-2)
    assert levels[2] / levels[0] < 1.15
    # Between the two: what a tanh with the same slope and limit would give, by its own average.
    angle = 2 * np.pi * np.arange(4096) / 4096
    drive = 1e-3 * small / 0.192
    ideal = 2 * 0.192 * np.mean(np.tanh(drive * np.sin(angle)) * np.sin(angle))
    # Two pairs in series are no tanh: the first one bends a little at 1 mV already.
    assert amplitude(1e-3) == pytest.approx(ideal, rel=6e-2)


def test_gain_band_and_noise(tmp_path: Path) -> None:
    deck = load_deck(DECK)
    f, v = ac_analysis(deck, tmp_path, (1e7, 4e9, 400), ("out_p", "out_n"))
    gain = np.abs(v["out_p"] - v["out_n"])
    assert gain[0] == pytest.approx(amplitude(1e-5) / 1e-5, rel=1e-2)  # 0.7 % lower at 100 MHz.
    edge = float(np.interp(-gain[0] / np.sqrt(2), -gain, f))
    assert edge == pytest.approx(1.38e9, rel=0.05)
    request = NoiseRequest("v(out_p,out_n)", "vin", 1e7, 1e9, 20, by_device=True)
    result = simulate_noise(deck, request)
    assert result.warnings == ()
    assert np.interp(1e8, result.frequency, result.output_density / result.input_density) == (
        pytest.approx(np.interp(1e8, f, gain) ** 2, rel=1e-3)
    )  # One linear circuit; the two grids are read off by straight lines.
    cold = at_noise_temperatures(result, NoiseTemperatures(4.0, 4.0, 4.0))
    added = cold.output_density - cold.by_device["r0"]["thermal"]
    square = result.output_density / result.input_density
    kelvin = np.interp(1e8, cold.frequency, added / square / (4 * BOLTZMANN * 50.0))
    # The design number of NOTES.md.
    assert kelvin == pytest.approx(52.0, rel=0.01)


def test_supply_current_is_what_the_mirror_sets() -> None:
    _, _, current = record({}, 10e-9, 50e-12)
    # Tails of 1, 4 and twice 0.5 mA and the mirror's 0.5 mA. The mirror loses the base currents of
    # 65 units (3 %), its larger devices stand at a lower voltage (2 %).
    assert current == pytest.approx(6.5e-3, rel=0.05)


@pytest.mark.parametrize(("section", "supply"), [("ss", 2.4), ("ff", 2.7)])
def test_corners(section: str, supply: float, tmp_path: Path) -> None:
    deck = with_parameters(load_deck(DECK, sections={"models.lib": section}), {"vdd": supply})
    _, v = ac_analysis(deck, tmp_path, (1e7, 1e8, 3), ("out_p", "out_n"))
    gain = 20 * np.log10(np.abs(v["out_p"] - v["out_n"])[0])
    # Transconductance follows the current, which the mirror keeps.
    assert gain == pytest.approx(42.7, abs=1.0)


def test_cards_are_those_of_the_low_noise_amplifier() -> None:
    ours = (FOLDER / "models.lib").read_text()
    assert ours == (NETLISTS / "low_noise_amplifier" / "models.lib").read_text()
