"""Oracle: the commutating mixer in closed form, the Butterworth response, image rejection.

Conversion gain of a transconductor whose current a square wave crosses: (2/pi) g_m R; image
rejection of a quadrature error e: cot^2(e/2) (B. Razavi, RF Microelectronics; recalled from
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
from cosim.circuit.bias import clean_run
from cosim.circuit.injection import device_noise
from cosim.circuit.netlist import load_deck, with_parameters
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.simulator import simulate
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

NETLISTS = Path(__file__).parents[2] / "netlists"
FOLDER = NETLISTS / "readout_mixer"
DECK = FOLDER / "readout_mixer.cir"
LO = 5.9e9
IF = 100e6
LEVEL = 1e-3
NOISE = 67.0  # K of the source at one sideband, its own two among it, all devices at 4 K
POINTS = 80  # per period of the LO; coarser ones see its edges up to degrees too early or late.


def outputs(
    parameters: Mapping[str, float], *, section: str = "tt", frequency: float = LO
) -> tuple[complex, complex, dict[str, float]]:
    """Parts of I + jQ that turn at +f and -f, f the IF; and means of single quantities."""
    intermediate = IF * frequency / LO
    sides = ("v(i_p)", "v(i_n)", "v(q_p)", "v(q_n)")
    means = ("i(vsup)", "@m.xi.mgp[gm]")
    step = 1 / (POINTS * frequency)
    # Two IF periods until the filters have settled, one to look at.
    stop = 3 / intermediate
    deck = with_parameters(load_deck(DECK, sections={"models.lib": section}), parameters)
    result = simulate(deck, TransientRequest(stop=stop, step=step, saves=(*sides, *means)))
    assert result.warnings == ()
    v = result.vectors
    grid = stop - step * np.arange(round(1 / (intermediate * step)))
    iq = (v["v(i_p)"] - v["v(i_n)"]) + 1j * (v["v(q_p)"] - v["v(q_n)"])
    samples = CubicSpline(result.time, iq)(grid)
    turn = np.exp(-2j * np.pi * intermediate * grid)
    found = {name: float(np.mean(v[name][result.time > stop / 2])) for name in means}
    return complex(np.mean(samples * turn)), complex(np.mean(samples / turn)), found


@pytest.mark.full
def test_signal_above_the_lo_turns_forwards_and_its_image_backwards() -> None:
    ahead, back, found = outputs({})
    # The design number of NOTES.md: I is 1.78 times the EMF.
    assert abs(ahead) / LEVEL == pytest.approx(1.78, rel=1e-2)
    # Both channels are alike and see one LO a quarter apart: only Newton errors remain.
    assert abs(back) < 1e-5 * abs(ahead)
    image, other, _ = outputs({"f_in": LO - IF})
    assert abs(image) < 1e-4 * abs(other)
    # The transconductors' own pole tells the two sidebands apart by little.
    assert abs(other) == pytest.approx(abs(ahead), rel=5e-3)
    assert -1.2 * found["i(vsup)"] == pytest.approx(5.05e-3, rel=0.02)


@pytest.mark.full
def test_slow_and_hard_switching_has_the_gain_of_a_square_wave(validate: Validate) -> None:
    slow = {"f_lo": LO / 30, "f_in": (LO + IF) / 30, "lo_amp": 0.6, "c_couple": 10e-9}
    ahead, _, found = outputs(slow, frequency=LO / 30)
    quantity = "conversion gain of the readout mixer, switched slowly, over half the EMF"
    source = sources.RAZAVI_MIXER
    expected = 2 / math.pi * found["@m.xi.mgp[gm]"] * 220.0
    # While the LO crosses zero, 6 % of the period, both switches of a pair conduct; the output
    # conductance of transconductor and switches shunts 1 % of the current.
    validate(quantity, source, expected, abs(ahead) / (LEVEL / 2), rel=2e-2)


def test_quadrature_error_makes_the_image_of_the_formula(validate: Validate) -> None:
    ahead, back, _ = outputs({"phase_error": 5.0})
    rejection = 20 * math.log10(abs(ahead / back))
    expected = 20 * math.log10(1 / math.tan(math.radians(2.5)))
    quantity = "image rejection of the readout mixer with an LO error of 5 degrees"
    # A time step is 4.5 degrees of the LO, whose edges take the error for 5.05 degrees: 0.1 dB. At
    # a fourth of the step the formula is met to 0.003 dB.
    validate(quantity, sources.RAZAVI, expected, rejection, "dB", abs=0.2, digits=3)


@pytest.mark.full
def test_filter_is_a_butterworth_low_pass() -> None:
    # The IF stays at 100 MHz: the corner moves to it, and to a half of it.
    flat = abs(outputs({"f_filter": 4 * IF})[0])
    for ratio in (1.0, 2.0):
        gain = abs(outputs({"f_filter": IF / ratio})[0]) / flat
        wanted = (1 + ratio**6) ** -0.5 / (1 + 0.25**6) ** -0.5
        # Output conductance of the switches beside the load of 220 ohm: 1 % of it, and two
        # periods of settling at the corner leave 1 %.
        assert gain == pytest.approx(wanted, rel=4e-2)


def test_nothing_leaves_without_a_signal() -> None:
    ahead, back, _ = outputs({"amp_in": 0.0})
    # Double balance: the LO and its harmonics cancel, but for rounding and Newton errors.
    assert max(abs(ahead), abs(back)) < 1e-3 * LEVEL


@pytest.mark.full
@pytest.mark.parametrize(("section", "supply"), [("ss", 1.15), ("ff", 1.25)])
def test_corners(section: str, supply: float) -> None:
    ahead, back, _ = outputs({"vdd": supply}, section=section)
    # Transconductance goes as the root of the card's parameter, which moves by 10 %.
    assert abs(ahead) / LEVEL == pytest.approx(1.78, rel=0.1)
    assert abs(back) < 1e-4 * abs(ahead)


@pytest.mark.full
def test_noise_of_both_sidebands_folds_onto_the_outputs() -> None:
    # A wide filter gives many independent frequencies in a short run.
    wide = {"f_filter": 2e9, "amp_in": 0.0}
    gain = abs(outputs({"f_filter": 2e9})[0]) / LEVEL
    step, settled = 1 / (POINTS * LO), 5e-9
    deck = with_parameters(load_deck(DECK), wide)
    probes = ("v(i_p) - v(i_n)", "v(q_p) - v(q_n)")
    run = clean_run(deck, TransientRequest(stop=65e-9, step=step), list(probes))
    settings = NoiseSettings(NoiseTemperatures(4.0, 4.0, 4.0))
    grid = np.arange(settled, 65e-9 - step, step)
    f = np.fft.rfftfreq(grid.size, step)
    band = (f > 0.05e9) & (f < 0.9e9)
    kelvin = {}
    for name, devices in (("source", ("r0",)), ("all", None)):
        densities = []
        for seed in (0, 1):
            noise = device_noise(run, seed, settings, devices=devices)
            for probe in probes:
                values = np.interp(grid, noise.time, noise.samples[probe])
                densities.append(2 * step * np.abs(np.fft.rfft(values))[band] ** 2 / grid.size)
        kelvin[name] = float(np.mean(densities)) / gain**2 / (4 * BOLTZMANN * 50.0)
    # Four standard deviations of a mean of exponential numbers: four records of 51 frequencies.
    bound = 4 / np.sqrt(4 * np.count_nonzero(band))
    # Each sideband brings the 4 K of the source. So do those of the LO's odd harmonics n, with 1/n
    # of the amplitude for square switching: 1 + 1/9 + 1/25 ... = pi^2/8 at the most.
    most = 2 * 4.0 * math.pi**2 / 8
    assert 2 * 4.0 * (1 - bound) < kelvin["source"] < most * (1 + bound)
    # The design number of NOTES.md.
    assert kelvin["all"] == pytest.approx(NOISE, rel=bound)


def test_cards_are_those_of_the_modulator() -> None:
    ours = (FOLDER / "models.lib").read_text()
    assert ours == (NETLISTS / "pulse_modulator" / "models.lib").read_text()
