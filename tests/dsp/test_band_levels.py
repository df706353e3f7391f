"""Oracle: densities in closed form of white noise and of what a filter makes of it, and the scatter
of many draws against the errors that are stated."""

import math
from dataclasses import replace

import numpy as np
import pytest

from cosim.dsp.detection.band_levels import (
    averaged_levels,
    carrier_ratio,
    explained_levels,
    noise_of_levels,
)
from cosim.waveform import ComplexArray

STEP, COUNT, BEFORE = 1e-9, 400, 600
POLE = 0.05  # of a one-pole filter: its time is 20 samples
SETS = 60


def white(generator: np.random.Generator, rows: int, *, real: bool = False) -> ComplexArray:
    """White noise of the density 1/Hz, two-sided, with a past that a filter may remember."""
    size = (rows, BEFORE + COUNT)
    if real:
        return generator.standard_normal(size) / math.sqrt(STEP) + 0j
    parts = generator.standard_normal((2, *size))
    return np.asarray((parts[0] + 1j * parts[1]) / math.sqrt(2.0 * STEP))


def filtered(x: ComplexArray) -> ComplexArray:
    """One pole, of the gain 1 at the carrier."""
    kernel = POLE * (1.0 - POLE) ** np.arange(BEFORE)
    return np.array([np.convolve(row, kernel)[: row.size] for row in x])


def gains(f: np.ndarray) -> np.ndarray:
    """Power gain of the filter at offsets in Hz."""
    return POLE**2 / np.abs(1.0 - (1.0 - POLE) * np.exp(-2j * np.pi * f * STEP)) ** 2


@pytest.mark.parametrize("real", [False, True])
def test_the_mean_and_its_error(real: bool) -> None:
    generator = np.random.default_rng(7)
    quadratures = 1 if real else 2
    found = [
        averaged_levels(white(generator, 4, real=real)[:, BEFORE:], STEP, quadratures)
        for _ in range(SETS)
    ]
    values, errors = (
        np.array([getattr(one, key) for one in found]) for key in ("values", "errors")
    )
    spread = values.std(axis=0)
    # Four standard errors of the mean, and of a standard deviation, each of 60 numbers.
    assert (np.abs(values.mean(axis=0) - 1.0) < 4.0 * spread / math.sqrt(SETS)).all()
    np.testing.assert_allclose(errors.mean(axis=0), spread, rtol=4.0 / math.sqrt(2.0 * SETS))


@pytest.mark.parametrize("other", [0.0, 0.3])
def test_known_noise_behind_a_filter_that_remembers(other: float) -> None:
    generator = np.random.default_rng(11)
    explained, plain, stated = [], [], []
    for _ in range(SETS):
        x = white(generator, 4)
        y = filtered(x) + math.sqrt(other) * white(generator, 4)
        y, x = y[:, BEFORE:], x[:, BEFORE:]
        found = explained_levels(y, x, STEP, 2, math.inf)
        explained.append(found.values[0])
        stated.append(found.errors[0])
        plain.append(averaged_levels(y, STEP, 2).values[0])
    # The mean of the first band's five lines, which a taper does not widen by more than 1 %.
    lines = np.arange(-2, 3) / (COUNT * STEP)
    expected = float(gains(lines).mean()) + other
    spread = float(np.std(explained))
    assert np.mean(explained) == pytest.approx(expected, abs=4.0 * spread / 60**0.5 + 0.01)
    # Surer than the mean of the records alone, 4 and 1.4 times, and no surer than it says.
    assert spread < np.std(plain) / (3.0 if other == 0.0 else 1.2)
    assert spread < 1.4 * float(np.mean(stated))


def test_a_mirror_image_is_explained_too() -> None:
    generator = np.random.default_rng(3)
    x = white(generator, 2)[:, BEFORE:]
    found = explained_levels((2.0 + 1j) * x + 0.5j * np.conj(x), x, STEP, 2, 50e6)
    # Bands within a twentieth of the records' rate; nothing is left to chance.
    inside = found.frequencies < 0.03 / STEP
    assert inside.sum() >= 2
    np.testing.assert_allclose(found.values[inside], 5.25, rtol=1e-9)
    beyond = averaged_levels((2.0 + 1j) * x + 0.5j * np.conj(x), STEP, 2)
    np.testing.assert_array_equal(found.values[~inside][2:], beyond.values[~inside][2:])


def test_the_density_at_the_carrier_behind_a_filter() -> None:
    """The first band is five lines of 2.5 MHz, as wide as the filter: 0.85 of the density at 0."""
    generator = np.random.default_rng(5)
    found = []
    for _ in range(SETS):
        levels = averaged_levels(filtered(white(generator, 8))[:, BEFORE:], STEP, 2)
        found.append(carrier_ratio(levels) * levels.values[0])
    scatter = float(np.std(found)) / math.sqrt(SETS)
    # Four standard errors, and 3 % for the inverse's parabola through means of bands.
    assert np.mean(found) == pytest.approx(1.0, abs=4.0 * scatter + 0.03)
    assert scatter < 0.025  # or the mean of the band would pass as well


def test_white_noise_and_none_at_the_carrier() -> None:
    flat = averaged_levels(white(np.random.default_rng(5), 400)[:, BEFORE:], STEP, 2)
    # 0.08 of the scatter of the ratio of two bands of 400 records, which is 3 %, twice.
    assert carrier_ratio(flat) == pytest.approx(1.0, abs=0.005)
    assert carrier_ratio(averaged_levels(np.zeros((2, COUNT), complex), STEP, 2)) == 1.0
    assert carrier_ratio(replace(flat, values=1.0 / flat.squares.clip(1.0) ** 2)) == 2.0


def test_levels_as_noise_of_a_record() -> None:
    noise = noise_of_levels(np.array([0.0, 1e6, 5e6]), np.array([3.0, 2.0, 1.0]), 1)
    np.testing.assert_allclose(noise.at(np.array([-1e6, 0.0, 3e6])), [2.0, 3.0, 1.5], rtol=1e-12)
