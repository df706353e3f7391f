"""Oracle: envelopes made of shapes and imperfections whose numbers are known."""

import math

import numpy as np
import pytest

from cosim.dsp.anatomy.dissection import dissect
from cosim.dsp.anatomy.fitting import Wanted
from cosim.dsp.anatomy.lines import find_decay, find_lines
from cosim.dsp.anatomy.parts import Anatomy
from cosim.dsp.anatomy.refinement import refine
from cosim.dsp.anatomy.shapes import Shape, edge, make_grid, sample_shape
from cosim.dsp.demodulation import demodulate
from cosim.errors import InputError, WaveformError
from cosim.waveform import ComplexArray, FloatArray, Waveform

CARRIER = 5e9
LEVEL = 0.1
STEP = 0.5 / CARRIER
T: FloatArray = np.arange(1401) * STEP  # 140 ns
START, END = 20e-9, 120e-9
GRID = make_grid(T, CARRIER)


def rise(middle: float, length: float) -> FloatArray:
    return 0.5 + 0.5 * np.sin(math.pi * np.clip((T - middle) / length, -0.5, 0.5))


FLAT = rise(START, 4e-9) - rise(END, 6e-9)
PLACE = (T - 70e-9) / 100e-9


def taken_apart(iq: ComplexArray | FloatArray, wanted: Wanted | None = None) -> Anatomy:
    return dissect(GRID, np.asarray(iq, dtype=np.complex128), wanted or Wanted())


def fade(begin: float, time: float) -> FloatArray:
    return np.exp(-np.maximum(T - begin, 0.0) / time)


def test_an_edge_is_what_the_demodulator_makes_of_it() -> None:
    """A jump at a time between the samples, through the demodulator itself."""
    t = np.arange(round(60e-9 * CARRIER * 80)) / (CARRIER * 80)
    for middle, length in ((30.03e-9, 0.0), (30.03e-9, 1e-9)):
        u = np.clip((t - middle) / length, -0.5, 0.5) if length else np.sign(t - middle) * 0.5
        wave = Waveform(t, 0.5 * (1.0 + np.sin(math.pi * u)) * np.cos(2 * math.pi * CARRIER * t))
        seen = demodulate(wave, CARRIER)
        value, _ = edge(make_grid(seen.t, CARRIER), middle, length)
        # Over the middle half, away from the ends of the record. A jump of a real carrier holds
        # also what its negative frequency spreads to, 1/(2 pi) of a quarter turn: 8 % of it.
        inside = (seen.t > 20e-9) & (seen.t < 40e-9)
        allowed = 0.1 if length == 0.0 else 2e-3
        assert np.abs(seen.iq - value)[inside].max() < allowed


def test_an_edge_keeps_its_area_and_its_slope() -> None:
    for length in (0.0, 0.7e-9, 30e-9):
        value, slope = edge(GRID, 70.02e-9, length)
        # Up to where it is 1: the area of a jump there. The sum stands for the integral, with an
        # error of the filter's own, 1e-6 of a step.
        assert float(value.sum()) * STEP == pytest.approx(T[-1] + 0.5 * STEP - 70.02e-9, abs=1e-15)
    # At its ends the curvature of an edge jumps, which a central difference over one of its 300
    # samples sees as pi/300 times an eighth of the slope at most.
    assert np.gradient(value, STEP) == pytest.approx(slope, abs=1.5e-3 * np.abs(slope).max())


def test_ideal_and_parts_make_the_pulse_again() -> None:
    noise = np.random.default_rng(4).standard_normal((2, T.size)) * 1e-4
    iq = LEVEL * FLAT * (1.0 + 0.01 * PLACE) * np.exp(0.3j) + noise[0] + 1j * noise[1]
    found = taken_apart(iq, Wanted(step_rate=1e9, duration=100e-9, baseband_frequency=40e6))
    whole = found.envelope(0.09, 0.25, found.parts)
    assert np.abs(whole - iq).max() < 1e-15
    # One by one in some order: the differences sum to it.
    parts, total = list(found.parts), found.envelope(0.09, 0.25, ())
    for count in range(1, len(parts) + 1):
        before = found.envelope(0.09, 0.25, parts[: count - 1])
        total = total + found.envelope(0.09, 0.25, parts[:count]) - before
    assert np.abs(total - iq).max() < 1e-14
    ideal = found.envelope(0.09, 0.25, ())
    assert ideal[700] == pytest.approx(0.09 * np.exp(0.25j), rel=1e-9)


@pytest.mark.parametrize(("size", "time"), [(0.02, 8e-9), (-0.004, 15e-9), (0.05, 3e-9)])
def test_settling(size: float, time: float) -> None:
    found = taken_apart(LEVEL * FLAT * (1.0 + size * fade(START, time))).numbers
    value = found["settling_re"] * found["level"] / LEVEL
    assert value == pytest.approx(size, rel=0.02)
    assert found["settling_time"] == pytest.approx(time, rel=0.02)
    assert found["droop"] == pytest.approx(0.0, abs=0.02 * abs(size))
    assert abs(found["tail_re"]) < 0.02 * abs(size)


def test_a_tail_after_the_pulse() -> None:
    tail = 0.01 * fade(END, 6e-9) * rise(END, 6e-9)
    found = taken_apart(LEVEL * (FLAT * (1.0 + 0.01 * fade(START, 6e-9)) - tail)).numbers
    # Its time constant is that of the plateau.
    assert found["tail_re"] * found["level"] / LEVEL == pytest.approx(-0.01, rel=0.02)


@pytest.mark.parametrize(("size", "time", "frequency"), [(0.01, 10e-9, 150e6), (0.03, 5e-9, 300e6)])
def test_ringing(size: float, time: float, frequency: float) -> None:
    u = np.maximum(T - START, 0.0)
    wave = size * fade(START, time) * np.cos(2 * math.pi * frequency * u)
    found = taken_apart(LEVEL * FLAT * (1.0 + wave)).numbers
    # A real wave has half of it on each side of the carrier.
    for side in ("up", "down"):
        value = found[f"ringing_on_{side}_re"] * found["level"] / LEVEL
        assert value == pytest.approx(0.5 * size, rel=0.02)
    assert found["ringing_frequency"] == pytest.approx(frequency, rel=1e-3)
    assert found["ringing_time"] == pytest.approx(time, rel=0.02)


@pytest.mark.parametrize("offset", [37e6, -120e6, 300e6])
@pytest.mark.parametrize("modulated", [False, True])
def test_a_spur(offset: float, modulated: bool) -> None:
    tone = 0.01 * np.exp(2j * math.pi * offset * T + 0.3j) * (FLAT if modulated else 1.0)
    found = taken_apart(LEVEL * (FLAT + tone))
    (spur,) = found.spurs
    assert spur.modulated is modulated
    amplitude = complex(*(found.numbers[name] for name in spur.numbers))
    assert abs(amplitude) == pytest.approx(0.01 * LEVEL, rel=0.02)
    assert found.numbers[f"{spur.name}_frequency"] == pytest.approx(offset, abs=5e4)


@pytest.mark.parametrize("family", ["gaussian", "raised cosine"])
def test_a_spur_beside_a_pulse_without_a_plateau(family: str) -> None:
    shape = Shape(family, 70e-9, 20e-9, 20e-9, 20e-9)
    tone = 0.005 * LEVEL * np.exp(2j * math.pi * 83e6 * T + 0.4j)
    found = taken_apart(LEVEL * sample_shape(shape, GRID).value + tone)
    assert found.ideal.family == family
    (spur,) = found.spurs
    assert not spur.modulated
    amplitude = complex(*(found.numbers[name] for name in spur.numbers))
    assert amplitude == pytest.approx(0.005 * LEVEL * np.exp(0.4j), rel=0.02)
    assert found.numbers["level"] == pytest.approx(LEVEL, rel=1e-4)


def test_two_spurs_and_droop_at_once() -> None:
    tones = 0.004 * np.exp(2j * math.pi * 55e6 * T) + 0.02 * np.exp(-2j * math.pi * 140e6 * T)
    found = taken_apart(LEVEL * FLAT * (1.0 + 0.01 * PLACE + tones))
    sizes = [abs(complex(*(found.numbers[n] for n in spur.numbers))) for spur in found.spurs]
    assert sizes == pytest.approx([0.02 * LEVEL, 0.004 * LEVEL], rel=0.02)
    assert found.numbers["droop"] == pytest.approx(0.01, rel=0.02)


def test_clock_feed_through_and_steps() -> None:
    clock = 0.003 * np.exp(2j * math.pi * 1e9 * T + 1j)
    found = taken_apart(LEVEL * (FLAT + clock), Wanted(step_rate=1e9))
    known = {spur.name: found.numbers[spur.numbers[0]] for spur in found.spurs}
    assert set(known) == {"clock +1", "clock -1"}
    amplitude = complex(*(found.numbers[name] for name in found.spurs[0].numbers))
    assert abs(amplitude) == pytest.approx(0.003 * LEVEL, rel=1e-3)
    # A droop in steps of 10 ns: what lies beyond half of that clock, and is no steady tone, is
    # called its steps, and what is left over besides is smaller.
    staircase = 1.0 + 0.1 * (np.floor(T / 10e-9) * 10e-9 + 5e-9 - 70e-9) / 100e-9
    found = taken_apart(LEVEL * FLAT * staircase, Wanted(step_rate=100e6))
    assert np.linalg.norm(found.steps) > 2.0 * np.linalg.norm(found.rest)
    # Of a sawtooth of 1 % from tooth to tooth the root mean square is 0.01/sqrt(12), of which a
    # half is taken up by the plateau's steady tones at the clock and twice the clock.
    plateau = (T > 30e-9) & (T < 110e-9)
    rms = float(np.sqrt(np.mean(np.abs(found.steps[plateau]) ** 2))) / LEVEL
    assert 0.1 * 0.01 / math.sqrt(12.0) < rms < 0.01 / math.sqrt(12.0)


def test_a_drag_pulse() -> None:
    alpha = -2.0 * math.pi * 300e6
    grid = make_grid(T, CARRIER, alpha)
    shape = Shape("raised cosine", 70e-9, 12e-9, 12e-9, 12e-9, 0.7)
    iq = LEVEL * sample_shape(shape, grid).value
    found = dissect(grid, iq, Wanted())
    assert found.ideal.family == "raised cosine"
    assert found.ideal.weight == pytest.approx(0.7, rel=1e-3)
    known = dissect(grid, iq * np.exp(2j * math.pi * 1e5 * T), Wanted(weight=0.5))
    assert known.numbers["weight"] == pytest.approx(0.7, rel=0.02)
    assert known.ideal.weight == 0.5
    assert known.numbers["frequency"] == pytest.approx(1e5, rel=0.02)
    off = dissect(grid, iq, Wanted(drag=False))
    assert off.numbers["weight"] == 0.0


def test_what_the_designer_knows_takes_the_place_of_the_fit() -> None:
    found = taken_apart(LEVEL * FLAT, Wanted("flat-top", duration=101e-9, edge=5e-9))
    assert (found.ideal.duration, found.ideal.rise, found.ideal.fall) == (101e-9, 5e-9, 5e-9)
    assert found.numbers["duration"] == pytest.approx(100e-9, rel=1e-4)
    assert found.numbers["rise"] == pytest.approx(4e-9, rel=1e-2)
    assert found.numbers["fall"] == pytest.approx(6e-9, rel=1e-2)
    square = taken_apart(LEVEL * FLAT, Wanted("square"))
    assert square.ideal.rise == square.ideal.fall == 0.0


def test_a_flat_pulse_is_no_gaussian() -> None:
    found = taken_apart(LEVEL * FLAT, Wanted("gaussian"))
    assert np.linalg.norm(found.rest) > 0.1 * np.linalg.norm(LEVEL * FLAT)


def test_bad_input() -> None:
    with pytest.raises(InputError, match="wanted one of"):
        taken_apart(LEVEL * FLAT, Wanted("triangle"))
    with pytest.raises(WaveformError, match="no pulse"):
        taken_apart(np.zeros(T.size))
    with pytest.raises(InputError, match="15 samples"):
        make_grid(T[:15], CARRIER)


def test_lines_are_told_from_noise() -> None:
    t, rng = T[:800], np.random.default_rng(1)
    noise = 1e-3 * (rng.standard_normal(800) + 1j * rng.standard_normal(800))
    assert find_lines(t, noise) == ()
    tones = 0.01 * np.exp(2j * math.pi * 80e6 * t) + 0.002 * np.exp(2j * math.pi * 200e6 * t)
    first, second = find_lines(t, tones)
    # Both lie on the grid of a record of 80 ns to 1e-4 of a line's width.
    assert (first.frequency, second.frequency) == pytest.approx((80e6, 200e6), abs=1e4)
    assert (abs(first.amplitude), abs(second.amplitude)) == pytest.approx((0.01, 0.002), rel=1e-2)
    assert find_lines(t[:20], tones[:20]) == ()
    assert find_decay(t, noise, 0.0, 80e-9) is None


def test_least_squares_find_a_known_minimum() -> None:
    """A decay through exact samples, begun a factor of three away."""
    x = np.linspace(0.0, 1.0, 50)

    def model(numbers) -> ComplexArray:  # type: ignore[no-untyped-def]
        return (numbers["a"] * np.exp(-x / numbers["tau"])).astype(np.complex128)

    wanted = model({"a": 2.0, "tau": 0.3})
    begin = {"a": 1.0, "tau": 0.1, "unused": 5.0}
    found = refine(model, wanted, begin, {"a": 0.1, "tau": 0.01}, positive=("tau",))
    # Where a further round gains less than 1e-6 of what is left.
    assert found["a"] == pytest.approx(2.0, rel=1e-6)
    assert found["tau"] == pytest.approx(0.3, rel=1e-6)
    assert found["unused"] == 5.0


@pytest.mark.parametrize("kind", ["settling", "ringing"])
def test_a_decay_is_found_beside_a_stronger_line(kind: str) -> None:
    tone = 0.01 * np.exp(2j * math.pi * 60e6 * T)
    u = np.maximum(T - START, 0.0)
    wave = np.cos(2 * math.pi * 210e6 * u) if kind == "ringing" else 1.0
    pulse = FLAT * (1.0 + 0.006 * fade(START, 8e-9) * wave + 0.01 * PLACE) + tone
    found = taken_apart(LEVEL * pulse * np.exp(0.2j))
    (spur,) = found.spurs
    assert abs(complex(*(found.numbers[n] for n in spur.numbers))) == pytest.approx(
        0.01 * LEVEL, rel=0.02
    )
    name = "settling_re" if kind == "settling" else "ringing_on_up_re"
    size = found.numbers[name] * found.numbers["level"] / LEVEL
    assert size == pytest.approx(0.006 if kind == "settling" else 0.003, rel=0.02)
    # The droop is found beside a decay, which has a slope of its own.
    assert found.numbers["droop"] == pytest.approx(0.01, rel=0.02)
