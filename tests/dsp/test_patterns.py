"""Oracle: SPICE's PULSE written out by hand, Python's own binary numbers, the raised cosine."""

import numpy as np
import numpy.typing as npt
import pytest

from cosim.dsp.patterns import EdgeShape, clocked_words, from_points, repeat_pattern
from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform


def pulse(t: FloatArray, delay: float, edge: float, width: float) -> FloatArray:
    """SPICE's PULSE(0 1 delay edge edge width), once (ngspice manual, independent sources)."""
    corners = np.cumsum([delay, edge, width, edge])
    return np.interp(t, corners, [0.0, 1.0, 1.0, 0.0])


def at(waveform: Waveform, t: npt.ArrayLike) -> FloatArray:
    return np.asarray(np.interp(np.asarray(t, dtype=float), waveform.t, waveform.v))


def test_a_pattern_is_a_pulse() -> None:
    wave = repeat_pattern("0110", 1e-9, low=0.0, high=1.0, edge=50e-12, start=5e-9)
    t = np.linspace(0.0, 12e-9, 4001)
    # Two ones: the level stands from the end of the rise to the start of the fall. Rounding.
    assert np.abs(at(wave, t) - pulse(t, 6e-9, 50e-12, 2e-9 - 50e-12)).max() < 1e-9
    assert (wave.t[0], wave.t[-1]) == pytest.approx((5e-9, 9e-9), rel=1e-14)  # rounding
    assert wave.t.size == 6  # Samples at corners only.


def test_repetition_continues_the_pattern() -> None:
    once = repeat_pattern("10" * 6, 1e-9, low=-1.0, high=2.0, edge=0.2e-9)
    for again in (
        repeat_pattern([1, 0], 1e-9, low=-1.0, high=2.0, edge=0.2e-9, count=6),
        repeat_pattern("10", 1e-9, low=-1.0, high=2.0, edge=0.2e-9, stop=11.5e-9),
    ):
        assert np.array_equal(again.t, once.t)
        assert np.array_equal(again.v, once.v)


def test_levels_hold_outside() -> None:
    wave = repeat_pattern("10", 1e-9, low=0.1, high=0.9, edge=0.1e-9, start=5e-9)
    assert at(wave, 0.0) == 0.9
    assert at(wave, 1.0) == 0.1
    flat = repeat_pattern("111", 1e-9, low=0.0, high=1e-3, edge=0.1e-9, unit="A")
    assert flat.unit == "A"
    assert np.array_equal(flat.v, [1e-3, 1e-3])


def test_smooth_edges_follow_the_raised_cosine() -> None:
    wave = repeat_pattern("01", 2e-9, low=0.0, high=1.0, edge=1e-9, shape="smooth")
    t = np.linspace(2e-9, 3e-9, 1001)
    exact = (1.0 - np.cos(np.pi * (t - 2e-9) / 1e-9)) / 2.0
    # Linear interpolation between n = 64 pieces errs by at most (pi/n)^2/16 = 1.5e-4.
    assert np.abs(at(wave, t) - exact).max() < 1.51e-4


@pytest.mark.parametrize("shape", ["linear", "smooth"])
@pytest.mark.parametrize("start", [0.0, 0.1e-9, 3.3333e-6])
def test_edges_as_long_as_a_bit_join(shape: EdgeShape, start: float) -> None:
    wave = repeat_pattern("01" * 50, 1e-9, low=0.0, high=1.0, edge=1e-9, start=start, shape=shape)
    t = start + 1e-9 * np.arange(100)
    # A time of 3 us is rounded to 4e-22 s, 4e-13 of an edge.
    assert at(wave, t) == pytest.approx(np.append(0.0, np.arange(99) % 2), abs=1e-6)


def test_words_are_binary_numbers() -> None:
    words = [93, 0, 127, 64, 1]
    lines = clocked_words(words, 1e9, 7, low=0.0, high=1.1, edge=50e-12, start=2e-9)
    middles = 2e-9 + 1e-9 * (np.arange(5) + 0.5)
    seen = np.array([at(line, middles) for line in lines]) / 1.1
    for place, word in enumerate(words):
        text = "".join(str(round(level)) for level in reversed(seen[:, place]))
        assert text == format(word, "07b")


def test_points_are_kept() -> None:
    wave = from_points([(0.0, 0.0), (1e-9, 1.0)], unit="A")
    assert np.array_equal(wave.t, [0.0, 1e-9])
    assert np.array_equal(wave.v, [0.0, 1.0])
    assert wave.unit == "A"


@pytest.mark.parametrize(
    ("points", "words"),
    [
        ([(0.0, 1.0)], "at least two"),
        ([], "at least two"),
        ([(0.0, 1.0), (0.0, 2.0)], "must rise, but sample 1"),
        ([(0.0, 1.0), (1e-9, 2.0), (0.5e-9, 1.0)], "must rise, but sample 2"),
        ([(0.0, 1.0), (1e-9, np.inf)], "not finite"),
    ],
)
def test_impossible_points(points: list[tuple[float, float]], words: str) -> None:
    with pytest.raises(WaveformError, match=words):
        from_points(points)


@pytest.mark.parametrize(
    ("bits", "period", "edge", "words"),
    [
        ("", 1e-9, 1e-10, "at least one bit"),
        ("012", 1e-9, 1e-10, "bit 3 must be 0 or 1, got '2'"),
        ([0, -1], 1e-9, 1e-10, "bit 2 must be 0 or 1, got -1"),
        ("01", 0.0, 1e-10, "period must be positive"),
        ("01", np.inf, 1e-10, "period must be positive"),
        ("01", 1e-9, 0.0, "more than 0 s"),
        ("01", 1e-9, 1.1e-9, "at most the 1e-09 s of one bit"),
        ("01", 1e-9, np.nan, "an edge takes"),
    ],
)
def test_impossible_patterns(bits: str | list[int], period: float, edge: float, words: str) -> None:
    with pytest.raises(WaveformError, match=words):
        repeat_pattern(bits, period, low=0.0, high=1.0, edge=edge)


def test_impossible_repetitions() -> None:
    def play(*, start: float = 0.0, count: int = 1, stop: float | None = None) -> None:
        repeat_pattern(
            "01", 1e-9, low=0.0, high=1.0, edge=1e-10, start=start, count=count, stop=stop
        )

    with pytest.raises(WaveformError, match="at least once"):
        play(count=0)
    with pytest.raises(WaveformError, match="more than 5000000 samples"):
        play(stop=1.0)
    with pytest.raises(WaveformError, match="stop must be finite"):
        play(stop=np.inf)
    with pytest.raises(WaveformError, match="start must be finite"):
        play(start=np.nan)


@pytest.mark.parametrize(
    ("words", "clock", "width", "text"),
    [
        ([3, 8], 1e9, 3, "word 2 is 8, which does not fit 3 lines: wanted 0 to 7"),
        ([-1], 1e9, 3, "word 1 is -1"),
        ([2], 1e9, 1, "1 line: wanted 0 to 1"),
        ([0], 1e9, 0, "at least one line"),
        ([0], 0.0, 1, "clock must be positive"),
        ([], 1e9, 1, "at least one bit"),
    ],
)
def test_impossible_words(words: list[int], clock: float, width: int, text: str) -> None:
    with pytest.raises(WaveformError, match=text):
        clocked_words(words, clock, width, low=0.0, high=1.0, edge=1e-10)
