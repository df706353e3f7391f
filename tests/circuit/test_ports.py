"""Oracle: handbook values of pads, matched loads, lines and mismatch, against decks in ngspice.

What a lossless line does in the steady state is seen on a sine at 200 steps per period, well after
the reflections have died away; amplitudes and phases are those of the package's demodulator.
"""

import cmath
import math

import pytest

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.netlist import deck_from_text, with_terminations
from cosim.circuit.simulator import simulate
from cosim.coupling import voltage_gain
from cosim.dsp.demodulation import demodulate
from cosim.waveform import Waveform
from tests import sources
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "circuit"

# Newton's relative tolerance of 1e-4 is the worst case for a linear circuit, and so is the grid of
# the sine: the demodulator's spline takes less than 1e-7.
SOLVED = 1e-5


def phasor(text: str, frequency: float, node: str = "out", terminated: bool = False) -> complex:
    """Carrier at a node in the middle of 40 periods: peak amplitude and phase."""
    deck = deck_from_text("deck\n" + text + "\n.end\n")
    if terminated:
        deck = with_terminations(deck, (node,), 50.0)
    stop, step = 60 / frequency, 1 / (frequency * 200)
    request = TransientRequest(stop=stop, step=step, saves=(f"v({node})",))
    result = simulate(deck, request)
    envelope = demodulate(Waveform(result.time, result.vectors[f"v({node})"]), frequency)
    return complex(envelope.iq[2 * envelope.iq.size // 3])


def source(frequency: float, peak: float = 2.0, resistance: float = 50.0) -> str:
    """A cosine behind a resistor, at node a; the peak is that of the open circuit."""
    return f"v1 src 0 sin(0 {peak!r} {frequency!r} 0 0 90)\nr1 src a {resistance!r}"


def reflection(load: str, frequency: float) -> complex:
    """Reflection at node a, from the wave of 1 V that a source of 50 ohm sends out."""
    return phasor(f"{source(frequency)}\n{load}", frequency, node="a") - 1


PADS = {
    3: (8.549868, 141.9262, 292.4022, 17.61479),
    6: (16.61394, 66.93104, 150.476, 37.35188),
    10: (25.97469, 35.13642, 96.24753, 71.15125),
    20: (40.90909, 10.10101, 61.11111, 247.5),
}


@pytest.mark.parametrize("decibels", PADS)
@pytest.mark.parametrize("shape", ["T", "Pi"])
def test_matched_pads(validate: Validate, shape: str, decibels: int) -> None:
    # F03: the handbook's resistors in, attenuation and match out.
    series, shunt, outer, bridge = PADS[decibels]
    if shape == "T":
        pad = f"ra a m {series}\nrm m 0 {shunt}\nrb m out {series}"
    else:
        pad = f"ra a 0 {outer}\nrm a out {bridge}\nrb out 0 {outer}"
    text = f"{source(1e9)}\n{pad}"
    out = abs(phasor(text, 1e9, terminated=True))
    quantity = f"attenuation of a {shape} pad with the resistors of {decibels} dB"
    got = -20 * math.log10(out)
    validate(quantity, sources.ITT, float(decibels), got, "dB", rel=SOLVED, card="F03")
    # The same attenuation as a number of the testbench.
    assert voltage_gain(decibels) == pytest.approx(out, rel=SOLVED)
    back = reflection(f"{pad}\nrl out 0 50", 1e9)
    quantity = f"reflection of a {shape} pad with the resistors of {decibels} dB"
    validate(quantity, sources.ITT, 0.0, abs(back), abs=SOLVED, card="F03")


def test_power_and_volts(validate: Validate) -> None:
    # F07, F08: an open-circuit peak of 0.6324555 V behind 50 ohm is 0 dBm in a matched load, and
    # 1 V rms 5 mW.
    peak = abs(phasor(f"{source(1e9, 0.6324555)}\nvo a out 0", 1e9, terminated=True))
    quantity = "peak voltage of 0 dBm in 50 ohm, from 0.6324555 V open"
    validate(quantity, sources.CIRCUITS, 0.3162278, peak, "V", rel=SOLVED, card="F08")
    quantity = "rms voltage of 0 dBm in 50 ohm, from 0.6324555 V open"
    rms = peak / math.sqrt(2)
    validate(quantity, sources.CIRCUITS, 0.2236068, rms, "V", rel=SOLVED, card="F08")
    quantity = "power of 1 V peak to peak in 50 ohm"
    swing = abs(phasor(f"{source(1e9, 1.0)}\nvo a out 0", 1e9, terminated=True))
    power = 10 * math.log10(swing**2 / 100 / 1e-3)
    # 1e-5 of the voltage is 1e-4 dB.
    validate(quantity, sources.CIRCUITS, 3.9794, power, "dBm", abs=1e-4, card="F08", digits=5)
    full = abs(phasor(f"{source(1e9, math.sqrt(2))}\nvo a out 0", 1e9, terminated=True))
    available = full**2 / (2 * 50)
    formula = sources.CIRCUITS + ", V^2/(4 R)"
    quantity = "available power of 1 V rms behind 50 ohm"
    validate(quantity, formula, 0.005, available, "W", rel=2 * SOLVED, card="F07")
    dbm = 10 * math.log10(available / 1e-3)
    validate(quantity, formula, 6.9897, dbm, "dBm", abs=1e-4, card="F07", digits=5)


def test_mismatched_load(validate: Validate) -> None:
    # F15: return loss 20 dB, a load of 50 ohm x 1.222222.
    back = abs(reflection("rl a 0 61.11111", 1e9))
    quantity = "reflection of 61.11111 ohm, a standing-wave ratio of 1.222222"
    validate(quantity, sources.POZAR, 0.1, back, rel=1e-4, card="F15")
    quantity = "mismatch loss at a return loss of 20 dB"
    peak = abs(phasor(f"{source(1e9)}\nrl a 0 61.11111\nvo a out 0", 1e9))
    lost = -10 * math.log10(peak**2 / 61.11111 * 50)
    # 1e-5 of the voltage is 1e-4 dB of power.
    validate(quantity, sources.POZAR, 0.04364805, lost, "dB", abs=1e-4, card="F15")


def test_ripple_between_two_reflections(validate: Validate) -> None:
    # F15: 20 dB at the source and 14 dB at the load, a line of half a wavelength at 1 GHz between
    # them. The amplitude is largest and smallest, the reflections in phase and against it, at half
    # and a quarter of a wavelength; the phase strays most in between.
    one, two = 0.1, 10 ** (-14 / 20)
    near, far = (50 * (1 + g) / (1 - g) for g in (one, two))
    text = "t1 a 0 out 0 z0=50 td=0.5n"

    def through(frequency: float) -> complex:
        deck = f"{source(frequency, resistance=near)}\n{text}\nrl out 0 {far!r}"
        return phasor(deck, frequency) * cmath.exp(2j * math.pi * frequency * 0.5e-9)

    ripple = abs(20 * math.log10(abs(through(1e9)) / abs(through(0.5e9))))
    formula = sources.POZAR + ", 20 log10((1 + G1 G2)/(1 - G1 G2))"
    quantity = "ripple between reflections of 20 dB and 14 dB"
    # 1e-5 of either voltage is 1e-4 dB.
    validate(quantity, formula, 0.3466586, ripple, "dB", abs=2e-4, card="F15")
    # The reflections' product turns by twice the line's phase; the largest angle of 1/(1 - p
    # exp(-j x)) is asin(p), where cos x = p.
    turn = math.acos(one * two)
    frequency = (2 * math.pi + turn) / (2 * math.pi) * 1e9
    angle = abs(math.degrees(cmath.phase(through(frequency))))
    formula = sources.POZAR + ", asin(G1 G2)"
    quantity = "phase ripple between reflections of 20 dB and 14 dB"
    # 1e-5 rad is 6e-4 degrees.
    validate(quantity, formula, 1.143277, angle, "degrees", abs=6e-4, card="F15")


def test_quarter_wave_transformer(validate: Validate) -> None:
    # F04: 50 ohm to 100 ohm, matched at 1 GHz.
    load = "t1 a 0 out 0 z0=70.71068 td=0.25n\nrl out 0 100"
    formula = sources.POZAR + ", quarter-wave transformer"
    matched = abs(reflection(load, 1e9))
    quantity = "reflection of a quarter-wave transformer of 70.71068 ohm, 50 to 100 ohm"
    # The simulator joins delayed waves by parabolas over steps of 1/200 period, which takes
    # (2 pi/200)^3/16 = 2e-6 of them.
    validate(quantity + ", at its frequency", formula, 0.0, matched, abs=1e-4, card="F04")
    low = abs(reflection(load, 0.8e9))
    validate(quantity + ", at 0.8 of it", formula, 0.1086077, low, rel=1e-3, card="F04")
    edge = 1e9 * (1 - 0.3670017 / 2)
    at_edge = abs(reflection(load, edge))
    quantity += ", at the edge of its fractional bandwidth of 0.3670017"
    validate(quantity, formula, 0.1, at_edge, rel=1e-3, card="F04")


def test_phasors_are_those_of_a_cosine() -> None:
    assert phasor(f"{source(1e9)}\nvo a out 0\nrl out 0 50", 1e9) == pytest.approx(1, abs=SOLVED)
