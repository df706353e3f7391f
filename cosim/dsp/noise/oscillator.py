"""Noise of oscillators and clocks: phase, amplitude, frequency, jitter."""

import math
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from cosim.dsp.noise.density import Outside, PowerLaw, SpectralDensity, density_from_points
from cosim.errors import InputError


def phase_noise_density(
    offsets: npt.ArrayLike,
    levels: npt.ArrayLike,
    *,
    below: Outside = "error",
    above: Outside = "error",
) -> SpectralDensity:
    """Make the density of the phase from single-sideband phase noise.

    Parameters
    ----------
    offsets : array_like, shape (n,)
        Offsets from the carrier in Hz, positive, rising; at least two.
    levels : array_like, shape (n,)
        L(f) in dBc/Hz.
    below, above : {"error", "zero", "hold", "extend"}
        As in `density_from_points`.

    Returns
    -------
    SpectralDensity
        S_phi = 2 L in rad**2/Hz, straight in dB over the logarithm of the offset.

    Raises
    ------
    InputError
        If the offsets do not rise or shapes differ.

    Notes
    -----
    IEEE Std 1139: L(f) is half of the one-sided density of the phase.
    """
    values = 2 * 10 ** (np.asarray(levels, dtype=np.float64) / 10)
    return density_from_points(offsets, values, "rad", below=below, above=above)


def amplitude_noise_density(
    offsets: npt.ArrayLike,
    levels: npt.ArrayLike,
    *,
    below: Outside = "error",
    above: Outside = "error",
) -> SpectralDensity:
    """Make the density of the relative amplitude from single-sideband amplitude noise.

    Parameters
    ----------
    offsets : array_like, shape (n,)
        Offsets from the carrier in Hz, positive, rising; at least two.
    levels : array_like, shape (n,)
        Single-sideband amplitude noise in dBc/Hz.
    below, above : {"error", "zero", "hold", "extend"}
        As in `density_from_points`.

    Returns
    -------
    SpectralDensity
        S_eps = 2 x single-sideband AM in 1/Hz, eps the relative amplitude error.

    Raises
    ------
    InputError
        If the offsets do not rise or shapes differ.

    Notes
    -----
    A relative amplitude e cos(2 pi f t) makes two sidebands of (e/2)**2 of the carrier's power
    each, and has the mean square e**2/2.
    """
    values = 2 * 10 ** (np.asarray(levels, dtype=np.float64) / 10)
    return density_from_points(offsets, values, "1", below=below, above=above)


def jitter_density(jitter: float, frequency: float, clock_frequency: float) -> SpectralDensity:
    """Make the density of the phase of a signal that is timed by a clock with jitter.

    Parameters
    ----------
    jitter : float
        Standard deviation of the time error of an edge in s, independent from edge to edge.
    frequency : float
        Frequency of the signal in Hz whose phase is asked for.
    clock_frequency : float
        Rate of the clock's edges in Hz.

    Returns
    -------
    SpectralDensity
        (2 pi frequency jitter)**2/(clock_frequency/2) in rad**2/Hz up to half the clock's rate,
        zero above.

    Raises
    ------
    InputError
        If the jitter is negative or a frequency not positive.

    Notes
    -----
    Errors that are independent at each edge are white up to half the rate of the edges, and their
    variance is that of the phase at an edge.
    """
    if not (math.isfinite(jitter) and jitter >= 0):
        raise InputError(f"jitter: wanted a time of at least zero in s, got {jitter!r}")
    for name, value in (("frequency", frequency), ("clock frequency", clock_frequency)):
        if not (math.isfinite(value) and value > 0):
            raise InputError(f"jitter: wanted a positive {name} in Hz, got {value!r}")
    level = (2 * math.pi * frequency * jitter) ** 2 / (clock_frequency / 2)
    return SpectralDensity("rad", (PowerLaw(level, high=clock_frequency / 2),))


def frequency_noise_density(phase: SpectralDensity) -> SpectralDensity:
    """Give the density of the angular frequency that belongs to a density of the phase.

    Parameters
    ----------
    phase : SpectralDensity
        In rad**2/Hz, of power laws only.

    Returns
    -------
    SpectralDensity
        (2 pi f)**2 S_phi in (rad/s)**2/Hz.

    Raises
    ------
    InputError
        If the density is not one of a phase, or is not made of power laws.
    """
    if phase.unit != "rad":
        raise InputError(f"frequency noise: wanted a density of a phase in rad, got {phase.unit!r}")
    terms = []
    for term in phase.terms:
        if not isinstance(term, PowerLaw):
            raise InputError(
                "frequency noise: wanted a density of power laws, got a Lorentzian of the phase"
            )
        level = term.level * (2 * math.pi * term.reference) ** 2
        terms.append(replace(term, level=level, exponent=term.exponent - 2))
    return SpectralDensity("rad/s", tuple(terms), phase.low, phase.high)


def timing_jitter(phase: SpectralDensity, frequency: float, low: float, high: float) -> float:
    """Give the jitter that belongs to the phase noise in a band.

    Parameters
    ----------
    phase : SpectralDensity
        In rad**2/Hz.
    frequency : float
        Of the signal in Hz.
    low, high : float
        Band of offsets in Hz.

    Returns
    -------
    float
        Standard deviation of the time in s.

    Raises
    ------
    InputError
        If the density is not known in the band or the frequency is not positive.

    Notes
    -----
    IEEE Std 1139.
    """
    if not (math.isfinite(frequency) and frequency > 0):
        raise InputError(f"jitter: wanted a positive frequency in Hz, got {frequency!r}")
    return math.sqrt(phase.variance(low, high)) / (2 * math.pi * frequency)
