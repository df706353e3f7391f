"""Oracle: `ngspice -b` small-signal runs, the cascade formulas, hot and cold source, Friis.

Scattering matrices come from `.ac` runs outside the package. Gain and noise temperature of the
whole are compared with those of its stages as decks of their own; the noise temperature also with
the Y-factor of a source at two temperatures (D. M. Pozar, Microwave Engineering; recalled from
memory).
"""

import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from scipy.constants import k as BOLTZMANN
from scipy.interpolate import CubicSpline

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.deck import Deck
from cosim.circuit.netlist import deck_from_text, load_deck, with_instances, with_parameters
from cosim.circuit.noise import NoiseRequest, NoiseResult, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_temperature import at_noise_temperatures
from cosim.circuit.simulator import simulate
from cosim.waveform import ComplexArray, FloatArray
from tests import sources
from tests.netlists.small_signal import ac_analysis, scattering_matrix
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

FOLDER = Path(__file__).parents[2] / "netlists" / "low_noise_amplifier"
DECK = FOLDER / "low_noise_amplifier.cir"
TONE = 6e9
STEP = 1 / (80 * TONE)
Z0 = 50.0
COLD = NoiseTemperatures(4.0, 4.0, 4.0)
BAND = (5e9, 7e9, 21)
AROUND = (TONE, 6.1e9, 3)
PORTS = ("rf_in", "out")


def decibel(ratio: ComplexArray | FloatArray | float) -> FloatArray:
    """20 log10 of a magnitude."""
    return np.asarray(20 * np.log10(np.abs(ratio)), dtype=np.float64)


def noise(deck: Deck, temperatures: NoiseTemperatures = COLD) -> NoiseResult:
    """Noise of a deck from 3.8 GHz to 8 GHz by device, with 6 GHz on its grid."""
    request = NoiseRequest("v(out)", "vin", TONE * 10**-0.2, 8e9, 40, by_device=True)
    result = simulate_noise(deck, request)
    assert result.warnings == ()
    return at_noise_temperatures(result, temperatures)


def gain(result: NoiseResult) -> FloatArray:
    """|v(out)/EMF|^2 of a noise analysis."""
    return result.output_density / result.input_density


def noise_temperature(result: NoiseResult, source: float = Z0) -> FloatArray:
    """What all but the source's resistance adds, as a temperature in K of that resistance."""
    added = result.output_density - result.by_device["r0"]["thermal"]
    return np.asarray(added / gain(result) / (4 * BOLTZMANN * source), dtype=np.float64)


def at_tone(frequency: FloatArray, values: FloatArray) -> float:
    """The value at 6 GHz, which is a point of the grid."""
    place = int(np.argmin(np.abs(frequency - TONE)))
    assert frequency[place] == pytest.approx(TONE, rel=1e-6)
    return float(values[place])


def stage(name: str, *, source: str, load: str) -> Deck:
    """One stage of the deck alone, between `port` and `out`, with its source and its load."""
    text = DECK.read_text()
    start, stop = text.index("vin emf"), text.index("\n.options method")
    # The second stage is biased through its own input: no direct current may leave there.
    block = "cblock port rf_in 1u\nrleak1 port 0 1g noisy=0\nrleak2 rf_in 0 1g noisy=0"
    own = f"{source}\n{block}\nx1 rf_in out vdd {name}\n{load}\n"
    return deck_from_text(text[:start] + own + text[stop:], name=name, folder=FOLDER)


MATCHED = f"vin emf 0 dc 0 ac 1\nr0 emf port {Z0}"
LOADED = f"rout out 0 {Z0} noisy=0"


def tone(parameters: Mapping[str, float], *, deck: Deck | None = None) -> dict[str, complex]:
    """Phasors at 6 GHz of the last ten periods of 20 ns, and the supply's mean current."""
    saves = ("v(out)", "v(rf_in)", "i(vsup)")
    loaded = with_parameters(deck or load_deck(DECK), parameters)
    result = simulate(loaded, TransientRequest(stop=20e-9, step=STEP, saves=saves))
    assert result.warnings == ()
    grid = result.time[-1] - STEP * np.arange(800)
    found: dict[str, complex] = {}
    for name in saves[:2]:
        v = CubicSpline(result.time, result.vectors[name])(grid)
        # The source is a sine: its phasor is -1j times its amplitude.
        found[name] = complex(2j * np.mean(v * np.exp(-2j * np.pi * TONE * grid)))
    supply = CubicSpline(result.time, result.vectors["i(vsup)"])(grid)
    found["i(vsup)"] = complex(-np.mean(supply))
    return found


def test_match_gain_and_stability(tmp_path: Path) -> None:
    deck = load_deck(DECK)
    f, s = scattering_matrix(deck, tmp_path, BAND, PORTS, Z0)
    assert np.max(decibel(s[0, 0])) < -15.0  # The design numbers of NOTES.md, as are these:
    assert np.max(decibel(s[1, 1])) < -9.5
    assert at_tone(f, decibel(s[1, 0])) == pytest.approx(37.9, abs=0.1)
    assert np.ptp(decibel(s[1, 0])) < 1.0
    wide = (0.1e9, 40e9, 400)
    _, s = scattering_matrix(deck, tmp_path, wide, PORTS, Z0)
    determinant = s[0, 0] * s[1, 1] - s[0, 1] * s[1, 0]
    through = 2 * np.abs(s[0, 1] * s[1, 0])
    rollett = (1 - np.abs(s[0, 0]) ** 2 - np.abs(s[1, 1]) ** 2 + np.abs(determinant) ** 2) / through
    # Unconditional stability: K > 1 and |determinant| < 1 (J. M. Rollett, IRE Trans. CT-9, 1962).
    assert np.min(rollett) > 1.0
    assert np.max(np.abs(determinant)) < 1.0


def test_gain_of_small_signals_is_that_of_noise_and_transient(tmp_path: Path) -> None:
    deck = load_deck(DECK)
    _, s = scattering_matrix(deck, tmp_path, AROUND, PORTS, Z0)
    ahead, back = complex(s[1, 0][0]), complex(s[0, 0][0])
    result = noise(deck)
    # Both are the same linear algebra; six digits stand in the grid's frequency.
    assert math.sqrt(4 * at_tone(result.frequency, gain(result))) == pytest.approx(
        abs(ahead), rel=1e-5
    )
    phasors = tone({"amp_in": 20e-6})
    # The trapezoidal rule shifts frequencies by (2 pi f h)^2/12 = 5.1e-4 and with them a phase
    # that turns by 2 pi over some 3 GHz; the compression at 20 uV is below 2e-6.
    assert 2 * phasors["v(out)"] / 20e-6 == pytest.approx(ahead, rel=1e-2)
    assert 2 * phasors["v(rf_in)"] / 20e-6 - 1 == pytest.approx(back, abs=5e-3)


def test_stages_cascade_to_the_whole(tmp_path: Path, validate: Validate) -> None:
    whole = scattering_matrix(load_deck(DECK), tmp_path, BAND, PORTS, Z0)[1]
    first, second = (
        scattering_matrix(
            stage(name, source=MATCHED, load=LOADED), tmp_path, BAND, ("port", "out"), Z0
        )[1]
        for name in ("first_stage", "second_stage")
    )
    loop = 1 - first[1, 1] * second[0, 0]
    expected = np.abs(first[1, 0] * second[1, 0] / loop)
    worst = int(np.argmax(np.abs(np.abs(whole[1, 0]) / expected - 1)))
    quantity = "gain |S21| of the low-noise amplifier from its two stages alone"
    source = sources.POZAR + ", cascade S21 = S21a S21b/(1 - S22a S11b)"
    # Bias points agree to the solver's reltol of 1e-3 at most; the raw file holds 15 digits.
    validate(quantity, source, expected[worst], abs(whole[1, 0][worst]), rel=1e-4, digits=7)


def test_noise_temperature_is_that_of_a_hot_and_a_cold_source(validate: Validate) -> None:
    deck = load_deck(DECK)
    at_devices = NoiseTemperatures()
    cold = noise(deck, at_devices)
    hot = noise(with_instances(deck, {"r0": {"dtemp": 240.0}}), at_devices)
    factor = at_tone(cold.frequency, hot.output_density / cold.output_density)
    expected = (290.0 - factor * 50.0) / (factor - 1)
    got = at_tone(cold.frequency, noise_temperature(cold))
    quantity = "noise temperature of the low-noise amplifier at 6 GHz, resistances at 50 K"
    source = sources.POZAR + ", Y-factor (T_hot - Y T_cold)/(Y - 1) of a source at 290 K and 50 K"
    # ngspice's Boltzmann constant is 3.5e-7 below the SI value, Y - 1 is about 4.
    validate(quantity, source, expected, got, "K", rel=1e-5)


def test_noise_temperature_is_the_friis_cascade(tmp_path: Path, validate: Validate) -> None:
    whole = noise(load_deck(DECK))
    total = at_tone(whole.frequency, noise_temperature(whole))
    # The first stage alone, all but open at its output, and the impedance there.
    alone = stage("first_stage", source=MATCHED, load="ropen out 0 1g noisy=0")
    at_output = ("isecondport 0 out dc 0 ac 1",)
    _, open_ = ac_analysis(alone, tmp_path, AROUND, ("out",))
    _, inner = ac_analysis(alone, tmp_path, AROUND, ("out",), extra=at_output, quiet=True)
    impedance = complex(inner["out"][0])
    available = abs(open_["out"][0]) ** 2 * Z0 / impedance.real
    first = noise(alone)
    t_first = at_tone(first.frequency, noise_temperature(first))
    # The second stage alone, fed from this impedance, whose reactance an L or a C makes.
    omega = 2 * math.pi * TONE
    reactance = (
        f"lsource inner port {impedance.imag / omega!r}"
        if impedance.imag > 0
        else f"csource inner port {-1 / (omega * impedance.imag)!r}"
    )
    source = f"vin emf 0 dc 0 ac 1\nr0 emf inner {impedance.real!r}\n{reactance}"
    second = noise(stage("second_stage", source=source, load=LOADED))
    t_second = at_tone(second.frequency, noise_temperature(second, impedance.real))
    quantity = "noise temperature of the low-noise amplifier at 6 GHz, at 4 K, from its stages"
    # Operating points and the Boltzmann constant as above.
    expected = t_first + t_second / available
    validate(quantity, sources.FRIIS, expected, total, "K", rel=1e-4)
    # The design number of NOTES.md; the second stage adds some 0.8 K of it.
    assert total == pytest.approx(5.35, abs=0.1)
    assert total < t_first + 1.0


@pytest.mark.full
def test_compression_is_of_third_order_and_reaches_one_decibel(validate: Validate) -> None:
    small = abs(tone({"amp_in": 20e-6})["v(out)"]) / 20e-6
    lost = {a: 1 - abs(tone({"amp_in": a})["v(out)"]) / (a * small) for a in (0.5e-3, 1e-3)}
    # A third-order nonlinearity takes 3 a3 A^2/(4 a1) of the gain (B. Razavi, RF Microelectronics;
    # recalled from memory): four times as much at twice the amplitude. The fifth order bends it.
    quantity = "growth of the low-noise amplifier's compression with twice the amplitude"
    source = sources.RAZAVI_COMPRESSION
    validate(quantity, source, 4.0, lost[1e-3] / lost[0.5e-3], rel=5e-2)
    levels = np.array([3e-3, 4e-3, 5e-3, 6e-3])
    gains = decibel(np.array([abs(tone({"amp_in": float(a)})["v(out)"]) / a for a in levels]))
    at_point = np.interp(1.0, float(decibel(small)) - gains, levels)
    power = 10 * math.log10((at_point / 2) ** 2 / (2 * Z0) / 1e-3)
    # The design number of NOTES.md in dBm at the input.
    assert power == pytest.approx(-42.0, abs=0.5)


def test_power_is_what_the_mirrors_set() -> None:
    current = tone({})["i(vsup)"].real
    # Collector currents ic1 and ic2 and the mirrors' input currents, a fourth and a fifth of them.
    # The mirrors lose base currents (1 % at a gain of 400) and gain by the Early effect.
    assert 1.8 * current == pytest.approx(1.8 * (1.25 * 2e-3 + 1.2 * 4e-3), rel=3e-2)
    half = tone({"ic1": 1e-3, "ic2": 2e-3})["i(vsup)"].real
    assert half == pytest.approx(current / 2, rel=2e-2)


@pytest.mark.parametrize(("section", "supply"), [("ss", 1.6), ("ff", 2.0)])
def test_corners(section: str, supply: float, tmp_path: Path) -> None:
    deck = with_parameters(load_deck(DECK, sections={"models.lib": section}), {"vdd": supply})
    f, s = scattering_matrix(deck, tmp_path, BAND, PORTS, Z0)
    result = noise(deck)
    # Transit time and capacitances move by 8 % and the current gain by 30 %, which makes the
    # noise of the base current: NOTES.md has 36.9 to 38.8 dB and 4.3 K to 7.1 K.
    assert at_tone(f, decibel(s[1, 0])) == pytest.approx(37.9, abs=1.2)
    assert np.max(decibel(s[0, 0])) < -12.0
    assert at_tone(result.frequency, noise_temperature(result)) == pytest.approx(5.7, abs=1.6)
