"""Oracle: the feedback network in closed form, Johnson noise, and `ngspice -b` small signals.

An amplifier with the gain A and the feedback resistor R_f behind a conductance g has the gain
-R_f g/(1 + (1 + R_f g)/A), and far below its own cutoff one pole at 1/(2 pi R_f C_f) (circuit
theory).
"""

import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from scipy.constants import k as BOLTZMANN

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
FOLDER = NETLISTS / "transimpedance"
DECK = FOLDER / "transimpedance.cir"
R_F, C_F, G_SENSOR = 1e6, 60e-15, 10e-6
EVENT = {"g_late": 12e-6, "t_event": 0.5e-6}


def record(
    parameters: Mapping[str, float], step: float = 0.5e-9, section: str = "tt"
) -> tuple[FloatArray, FloatArray, FloatArray, float]:
    """Times to 2 us, v(out) - v(ref), v(sense) - v(ref), and the supply's mean current."""
    saves = ("v(out)", "v(ref)", "v(sense)", "i(vsup)")
    deck = with_parameters(load_deck(DECK, sections={"models.lib": section}), parameters)
    result = simulate(deck, TransientRequest(stop=2e-6, step=step, saves=saves))
    assert result.warnings == ()
    v = result.vectors
    supply = -float(np.mean(v["i(vsup)"]))
    return result.time, v["v(out)"] - v["v(ref)"], v["v(sense)"] - v["v(ref)"], supply


def test_output_is_the_sensor_current_times_the_feedback_resistor() -> None:
    _, out, sense, supply = record(EVENT)
    for place, g in ((0, 10e-6), (-1, 12e-6)):
        # The sensor stands between the EMF and the virtual ground, which the finite gain moves; its
        # series resistance of 50 ohm takes 5e-4 of the current.
        current = g / (1 + 50.0 * g) * (0.5e-3 - sense[place])
        assert out[place] - sense[place] == pytest.approx(-R_F * current, rel=2e-5)
        # Systematic offset of the amplifier: microvolts, as NOTES.md has it.
        assert abs(sense[place]) < 5e-6
    assert 1.1 * supply == pytest.approx(0.82e-3, rel=0.05)


def test_event_settles_with_the_feedback_time_constant(validate: Validate) -> None:
    t, out, _, _ = record(EVENT)
    share = (out - out[0]) / (out[-1] - out[0])
    late = t > 0.5e-6
    times = [float(np.interp(level, share[late], t[late])) for level in (0.1, 0.9)]
    quantity = "10 to 90 % time of the transimpedance amplifier after a tunnelling event"
    source = sources.CIRCUITS + ", ln(9) R_f C_f"
    # The amplifier's own poles lie some 20 times higher and shorten it: R_f C_f - 1/(2 pi GBW
    # C_f/C_in) and the like are of second order, 2 %.
    validate(quantity, source, math.log(9) * R_F * C_F, times[1] - times[0], "s", rel=3e-2)
    # No overshoot: the amplifier is stable with its load and line.
    assert np.max(share) < 1.001
    finer = record(EVENT, step=0.25e-9)[1]
    # Half the step moves nothing that is seen.
    assert finer[-1] == pytest.approx(out[-1], rel=1e-6)


def test_gain_and_band(tmp_path: Path, validate: Validate) -> None:
    deck = load_deck(DECK)
    f, v = ac_analysis(deck, tmp_path, (1e3, 20e6, 2000), ("out", "sense"))
    open_loop = abs(v["out"][0] / v["sense"][0])
    assert open_loop > 1e4
    g = G_SENSOR / (1 + 50.0 * G_SENSOR)
    quantity = "gain of the transimpedance amplifier behind 100 kohm"
    source = sources.CIRCUITS + ", R_f g/(1 + (1 + R_f g)/A)"
    expected = R_F * g / (1 + (1 + R_F * g) / open_loop)
    # At 1 kHz the pole of R_f C_f takes 7e-8.
    validate(quantity, source, expected, abs(v["out"][0]), rel=1e-6)
    gain = np.abs(v["out"]) / abs(v["out"][0])
    edge = float(np.interp(-1 / math.sqrt(2), -gain, f))
    # The amplifier's finite bandwidth moves the edge by 4 %, as the step response.
    assert edge == pytest.approx(1 / (2 * math.pi * R_F * C_F), rel=6e-2)


def test_noise_is_that_of_its_resistors_and_little_more(validate: Validate) -> None:
    request = NoiseRequest("v(out,ref)", "vin", 1e3, 1e7, 10, by_device=True)
    result = simulate_noise(load_deck(DECK), request)
    assert result.warnings == ()
    cold = at_noise_temperatures(result, NoiseTemperatures(4.0, 4.0, 4.0))
    parts = {name: sum(own.values())[10] / R_F**2 for name, own in cold.by_device.items()}
    source = sources.JOHNSON_NYQUIST + ", 4 k T/R"
    for name, g in (("rsensor", G_SENSOR), ("rf", 1 / R_F)):
        quantity = f"current noise density of {name} at the transimpedance amplifier's input, 4 K"
        # At 10 kHz. A finite gain of 2e4 takes 1.2e-3 of the square, r0 1e-3 of the sensor's.
        validate(quantity, source, 4 * BOLTZMANN * 4.0 * g, parts[name], "A^2/Hz", rel=3e-3)
    amplifier = sum(share for name, share in parts.items() if name.startswith("m."))
    # The design number of NOTES.md: 3.1 fA/sqrt(Hz) of the transistors beside 49 of the resistors.
    assert math.sqrt(amplifier) == pytest.approx(3.1e-15, rel=0.1)


@pytest.mark.parametrize(("section", "supply"), [("ss", 1.0), ("ff", 1.2)])
def test_corners(section: str, supply: float) -> None:
    _, out, _, _ = record({"vdd": supply}, section=section)
    # The feedback resistor sets the gain; offsets of 5 uV times 1 + R_f g are 1 % of it.
    assert out[-1] == pytest.approx(-R_F * G_SENSOR * 0.5e-3, rel=2e-2)


def test_cards_are_those_of_the_modulator() -> None:
    ours = (FOLDER / "models.lib").read_text()
    assert ours == (NETLISTS / "pulse_modulator" / "models.lib").read_text()
