"""What a source of noise costs at each frequency: its density and the gate's filter function."""

from collections.abc import Sequence

import numpy as np

from cosim.dsp.noise.bands import FrequencyGrid
from cosim.dsp.noise.density import SpectralDensity
from cosim.noise_frame import Nominal
from cosim.noises import AmplitudeNoise, DetuningNoise, Noise, PhaseNoise
from cosim.quantum.filters import FilterFunction, filter_function, phase_operator
from cosim.side_results import NoiseSpectrum
from cosim.waveform import ComplexArray, FloatArray

# The lobes of a filter function far above the inverse of the gate's length are averaged.
BINS = 300


def noise_filters(
    nominal: Nominal, noise: Noise, volts: float, frequencies: FloatArray
) -> tuple[list[FilterFunction], list[ComplexArray]]:
    """Give the filter functions of a source, and the operators that it multiplies.

    Parameters
    ----------
    nominal : Nominal
        The clean evolution.
    noise : Noise
        What fluctuates.
    volts : float
        Drive rate in rad/s per unit at the probe.
    frequencies : ndarray, shape (k,)
        In Hz.

    Returns
    -------
    functions : list of FilterFunction
        One, or one of each quadrature of an added voltage.
    operators : list of ndarray, shape (d, d) or (n, d, d)
        In rad/s per unit of the noise.
    """
    drive = nominal.drive_hamiltonian(nominal.edge_rate)
    number = nominal.qubit.number()
    if isinstance(noise, DetuningNoise):
        operators = [number]
    elif isinstance(noise, AmplitudeNoise):
        operators = [drive]
    elif isinstance(noise, PhaseNoise):
        operators = [phase_operator(number, drive)]
    else:
        # The two quadratures of an added voltage are independent.
        turn = volts * nominal.edge_turn
        operators = [nominal.drive_hamiltonian(turn), nominal.drive_hamiltonian(1j * turn)]
    found = [filter_function([nominal.path], [one], frequencies) for one in operators]
    return found, operators


def noise_spectrum(
    density: SpectralDensity,
    levels: FloatArray,
    functions: Sequence[FilterFunction],
    grid: FrequencyGrid,
) -> NoiseSpectrum:
    """Lay a density and the filter functions beside each other, averaged in at most `BINS` bins.

    Parameters
    ----------
    density : SpectralDensity
        Of the noise.
    levels : ndarray, shape (n,)
        Its values at the grid's frequencies.
    functions : sequence of FilterFunction
        At the same, of independent parts of equal density; their sum counts.
    grid : FrequencyGrid
        Of n frequencies.

    Returns
    -------
    NoiseSpectrum
        The sum of density * filter * width over its bins is the first-order infidelity.
    """
    f, weights = grid.frequencies, grid.weights
    total = np.asarray(sum((function.total for function in functions), np.zeros_like(f)))
    edges = np.geomspace(f[0], f[-1], BINS + 1)
    place = np.searchsorted(edges, f, side="right")
    starts = np.flatnonzero(np.diff(place, prepend=-1))
    widths = np.add.reduceat(weights, starts)
    cost = np.add.reduceat(weights * levels * total, starts)
    filtered = np.add.reduceat(weights * total, starts) / widths
    centres = np.add.reduceat(weights * f, starts) / widths
    # The product of both is kept, so that a bin in which both change costs what it costs.
    average = np.add.reduceat(weights * levels, starts) / widths
    mean = np.divide(cost, widths * filtered, out=average, where=filtered > 0.0)
    return NoiseSpectrum(centres, widths, mean, filtered, density.unit, density.low, density.high)
