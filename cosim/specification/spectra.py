"""Noise of a given shape of density, as samples over the cells of a pulse."""

import math
from dataclasses import replace

import numpy as np

from cosim.dsp.noise.density import PowerLaw, SpectralDensity, density_from_points
from cosim.dsp.noise.paths import generator, path_covariance, plan_paths, sample_paths
from cosim.errors import TestbenchError
from cosim.specification.blocks import FlickerNoiseTable, PhaseNoiseTable
from cosim.specification.curves import SampledNoise
from cosim.specification.pulse import IdealPulse
from cosim.waveform import ComplexArray, FloatArray


def phase_shape(table: PhaseNoiseTable) -> SpectralDensity:
    """Give the density of the phase for L = 1 (0 dBc/Hz) at the offset that is told.

    Parameters
    ----------
    table : PhaseNoiseTable
        The shape.

    Returns
    -------
    SpectralDensity
        In rad^2/Hz: S_phi = 2 L.

    Notes
    -----
    L = floor (1 + (corner/f)^2) (1 + flicker_corner/f): D. B. Leeson, "A simple model of feedback
    oscillator noise spectrum", Proc. IEEE 54, 329 (1966).
    """
    low, high = table.low, table.high
    if table.points:
        offsets, levels = zip(*table.points, strict=True)
        values = [2.0 * 10.0 ** (level / 10.0) for level in levels]
        shape = density_from_points(offsets, values, "rad", below="extend", above="hold")
        terms = [
            replace(term, low=max(term.low, low), high=min(term.high, high))
            for term in shape.terms
            if isinstance(term, PowerLaw) and max(term.low, low) < min(term.high, high)
        ]
        level = float(shape.at([table.offset])[0])
    else:
        b, c = table.corner, table.flicker_corner
        parts = ((1.0, 0.0), (c, 1.0), (b**2, 2.0), (b**2 * c, 3.0))
        terms = [PowerLaw(2.0 * part, n, 1.0, low, high) for part, n in parts if part > 0.0]
        f = table.offset
        level = 2.0 * (1.0 + (b / f) ** 2) * (1.0 + c / f)
    return SpectralDensity("rad", tuple(terms)).scaled(2.0 / level, "rad")


def mask_level(table: PhaseNoiseTable, offset: float) -> float:
    """Give L at an offset in dB relative to that at the offset that is told.

    Parameters
    ----------
    table : PhaseNoiseTable
        The shape.
    offset : float
        In Hz, between its `low` and its `high`.

    Returns
    -------
    float
        In dB.
    """
    return 10.0 * math.log10(float(phase_shape(table).at([offset])[0]) / 2.0)


def coloured_noise(
    pulse: IdealPulse,
    where: str,
    density: SpectralDensity,
    seed: int,
    stream: int,
    rows: int,
    low: float,
) -> SampledNoise:
    """Draw noise of a density over the cells of a pulse.

    Parameters
    ----------
    pulse : IdealPulse
    where : "gain" or "phase"
        What it acts on.
    density : SpectralDensity
        For x = 1.
    seed, stream : int
        Of the random numbers.
    rows : int
        How many samples, even: they come in pairs of opposite sign.
    low : float
        Lowest frequency of the density in Hz; from there on its drift during the pulse counts,
        which is what an oscillator that is its own reference has of it.

    Returns
    -------
    SampledNoise
    """
    cells, step = pulse.middles.size, pulse.step
    slowest = min(low, 1.0 / (10.0 * cells * step))
    plan = plan_paths(density, cells, step, slowest=slowest)
    paths = sample_paths(plan, seed, 0, rows // 2, stream=stream, offset=True)
    covariance = path_covariance(plan) + plan.slow_variance
    return SampledNoise(where, paired(paths), covariance)  # type: ignore[arg-type]


def white_noise(
    pulse: IdealPulse, where: str, density: float, seed: int, stream: int, rows: int
) -> SampledNoise:
    """Draw white noise over the cells of a pulse.

    Parameters
    ----------
    pulse, where, seed, stream, rows
        As in `coloured_noise`; "added" draws two quadratures.
    density : float
        One-sided, of one quadrature, for x = 1.

    Returns
    -------
    SampledNoise
    """
    cells = pulse.middles.size
    variance = density / (2.0 * pulse.step)
    both = where == "added"
    draws = np.array(
        [
            generator(seed, stream, number).standard_normal(cells * (1 + both))
            for number in range(rows // 2)
        ]
    )
    samples: FloatArray | ComplexArray = draws[:, :cells]
    if both:
        samples = draws[:, :cells] + 1j * draws[:, cells:]
    covariance = np.zeros(cells)
    covariance[0] = variance
    return SampledNoise(where, paired(math.sqrt(variance) * samples), covariance)  # type: ignore[arg-type]


def flicker_density(table: FlickerNoiseTable) -> SpectralDensity:
    """Give 1/f noise of level 1 at 1 Hz, from the lowest frequency that counts.

    Parameters
    ----------
    table : FlickerNoiseTable
        With `low`.

    Returns
    -------
    SpectralDensity
        In 1/Hz.
    """
    return SpectralDensity("1", (PowerLaw(1.0, 1.0, 1.0, table.low),))


def check_band(table: PhaseNoiseTable, pulse: IdealPulse, frame: str) -> None:
    """Refuse phase noise without an end where the oscillator is the reference.

    Parameters
    ----------
    table : PhaseNoiseTable
    pulse : IdealPulse
    frame : str
        "qubit" or "oscillator".

    Raises
    ------
    TestbenchError
        If it reaches beyond half the rate of the cells in the oscillator's frame.
    """
    nyquist = 0.5 / pulse.step
    if frame == "oscillator" and table.high > nyquist:
        raise TestbenchError(
            f"table [specify.phase_noise]: with frame = \"oscillator\" wanted 'high' of at most "
            f"{nyquist:.4g} Hz, got {table.high:g} Hz",
            hint="the phase at the two ends of the pulse counts there, and that of a floor without "
            "an end has no bound: 'high' is the bandwidth of what the oscillator drives",
        )


def paired(rows: np.ndarray) -> np.ndarray:
    """Give each row and its negative, one after the other.

    Parameters
    ----------
    rows : ndarray, shape (n, m)

    Returns
    -------
    ndarray, shape (2 n, m)
    """
    return np.stack([rows, -rows], axis=1).reshape(2 * len(rows), -1)
