"""Oracles: scipy's integrals of the definition, seeded paths, and published Allan deviations."""

import itertools
import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import quad

from cosim.drift.structure import (
    Flicker,
    Fluctuation,
    Motion,
    RandomWalk,
    Shaped,
    White,
    from_allan,
)
from cosim.dsp.noise.density import PowerLaw, SpectralDensity, density_from_points
from tests.sources import ALLAN
from tests.validation import Validate

TOPIC = "signal"


def by_definition(density: Callable[[float], float], t: float, low: float, high: float) -> float:
    """2 int S (1 - cos 2 pi f t) df, half a turn at a time."""
    edges = np.arange(math.ceil(low * 2 * t), math.floor(high * 2 * t) + 1) / (2 * t)
    edges = np.unique([low, *edges[(edges > low) & (edges < high)], high])
    parts = [
        quad(lambda f: 4 * density(f) * math.sin(math.pi * f * t) ** 2, a, b, limit=200)[0]
        for a, b in itertools.pairwise(edges)
    ]
    return math.fsum(parts)


@pytest.mark.parametrize("t", [1e-3, 0.3, 40.0])
def test_flicker_and_white_noise_follow_the_definition(t: float) -> None:
    # quad's own errors, of 1e-8 per part.
    got = Flicker(2.5, 0.01, 3.0).structure(t)
    assert got == pytest.approx(by_definition(lambda f: 2.5 / f, t, 0.01, 3.0), rel=1e-7)
    got = Flicker(2.5, 0.0, 3.0).structure(t)
    assert got == pytest.approx(by_definition(lambda f: 2.5 / f, t, 1e-12, 3.0), rel=1e-7)
    got = White(2.5, 3.0).structure(t)
    assert got == pytest.approx(by_definition(lambda f: 2.5, t, 0.0, 3.0), rel=1e-7)


def test_a_random_walk_is_noise_of_one_over_f_squared() -> None:
    level, t = 0.7, 3.0
    density = level**2 / (2 * math.pi**2)
    # What lies above 400 Hz is density times 2/400 on average: 2e-5 of the whole.
    got = by_definition(lambda f: density / f**2, t, 1e-9, 400.0) + 2 * density / 400.0
    assert RandomWalk(level).structure(t) == pytest.approx(got, rel=1e-6)


def test_flicker_noise_far_from_its_corners_is_a_logarithm() -> None:
    got = Flicker(1.0, 1e-9, 1e3).structure(50.0)
    # Ci falls off as 1/z: 3e-6; what is below 1 nHz is z^2/4 = 2.5e-14.
    wanted = 2 * (np.euler_gamma + math.log(2 * math.pi * 1e3 * 50.0))
    assert got == pytest.approx(wanted, rel=1e-6)


@pytest.mark.parametrize("t", [1e-4, 0.02, 7.0, 300.0])
def test_any_density_by_quadrature_agrees_with_the_closed_forms(t: float) -> None:
    cases = [
        (SpectralDensity("Hz", (PowerLaw(2.5, 1.0),)), Flicker(2.5, 0.0, 20.0)),
        (SpectralDensity("Hz", (PowerLaw(2.5, 0.0),)), White(2.5, 20.0)),
    ]
    for density, closed in cases:
        got = Shaped(density, 0.0, 20.0).structure(t)
        # Below a millionth of 1/t there is a millionth of flicker noise at most.
        assert got == pytest.approx(closed.structure(t), rel=2e-6)
    assert Shaped(cases[0][0], 0.0, 20.0).structure(0.0) == 0.0


def test_a_density_of_points_follows_the_definition() -> None:
    density = density_from_points([0.1, 1.0, 10.0], [30.0, 2.0, 1.0], "Hz", below="extend")
    for t in (0.05, 2.0):
        wanted = by_definition(lambda f: float(density.at(f)), t, 1e-6, 10.0)
        # Kinks of the density within a piece of quad's; and the lowest millionth.
        assert Shaped(density, 0.0, 10.0).structure(t) == pytest.approx(wanted, rel=1e-5)


@pytest.mark.parametrize("kind", ["white", "flicker", "random walk"])
def test_allan_deviations(kind: str, validate: Validate) -> None:
    """sigma^2(tau) = 2 int S sin^4(pi f tau)/(pi f tau)^2 df, of the density that is made."""
    tau, deviation, high = 30.0, 2e-11, 1e3
    made = from_allan(kind, deviation, tau, high)

    def density(f: float) -> float:
        if isinstance(made, White):
            return made.level
        if isinstance(made, Flicker):
            return made.level / f
        assert isinstance(made, RandomWalk)
        return made.level**2 / (2 * math.pi**2 * f**2)

    edges = np.concatenate([[1e-9], np.arange(1, 2000) / tau])
    total = 0.0
    for a, b in itertools.pairwise(edges):
        total += quad(
            lambda f: (
                2
                * density(f)
                / deviation**2
                * (math.sin(math.pi * f * tau) ** 2 / (math.pi * f * tau)) ** 2
            ),
            a,
            b,
        )[0]
    # Beyond 2000/tau there is the mean of sin^4, 3/8, times 2 S/(pi f tau)^2: of white noise
    # 4e-5 of the whole, of the others much less.
    validate(
        f"Allan deviation of the {kind} frequency noise that is made from one",
        ALLAN,
        deviation,
        deviation * math.sqrt(total),
        rel=1e-4,
    )


def test_structure_functions_of_seeded_paths() -> None:
    """A random walk of Gaussian steps, and its mean square move."""
    rng = np.random.default_rng(11)
    steps = 0.3 * math.sqrt(0.5) * rng.normal(size=(20_000, 40))
    paths = np.cumsum(steps, axis=1)
    for count in (4, 40):
        got = float(np.mean(paths[:, count - 1] ** 2))
        # A chi-square of 20000 degrees: 1 % standard error, four of them.
        assert RandomWalk(0.3).structure(0.5 * count) == pytest.approx(got, rel=0.04)


def test_a_motion_adds_independent_parts() -> None:
    parts: tuple[Fluctuation, ...] = (RandomWalk(2.0), White(1.0, 5.0))
    motion = Motion(rate=3.0, trim_error=4.0, fluctuations=parts)
    assert motion.mean(7.0) == 21.0
    # 16 + 4 x 7 + 2 x 5 (1 - sinc(70)).
    assert motion.deviation(7.0) == pytest.approx(math.sqrt(16 + 28 + 10), rel=1e-12)
    assert motion.deviation(0.0) == 4.0
