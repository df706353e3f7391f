"""Unwanted tones beside the carrier, of a phase that nobody knows."""

import math

import numpy as np

from cosim.dsp.noise.paths import generator
from cosim.specification.blocks import SpursTable
from cosim.specification.curves import SMALL_LOSS
from cosim.specification.distortion import Distortion, distorted_losses
from cosim.specification.pulse import IdealPulse, tone_factor
from cosim.specification.spectra import paired
from cosim.waveform import ComplexArray, FloatArray

# Default offsets of the mask in units of one over the duration.
MULTIPLES = (0.1, 0.3, 0.5, 1.0, 2.0, 3.0, 5.0, 10.0)
# Phases over which the cost of a mask's point is averaged.
PHASES = 8
# Corrections of a mask's levels: the cost goes with the square, so that few are wanted.
ROUNDS = 6


def spur_offsets(table: SpursTable, pulse: IdealPulse) -> FloatArray:
    """Give the offsets of a mask.

    Parameters
    ----------
    table : SpursTable
        Which may name them.
    pulse : IdealPulse

    Returns
    -------
    ndarray, shape (n,)
        In Hz from the carrier, rising.
    """
    if table.offsets:
        return np.array(sorted(set(table.offsets)))
    offsets = [sign * one / pulse.duration for one in MULTIPLES for sign in (-1.0, 1.0)]
    if pulse.qubit.levels > 2:
        offsets.append(pulse.qubit.anharmonicity - pulse.offset)
    return np.array(sorted(offsets))


def tones(pulse: IdealPulse, offset: float, count: int, seed: int, stream: int) -> ComplexArray:
    """Give a tone with phases that are spread evenly, in pairs of opposite sign and shuffled.

    Parameters
    ----------
    pulse : IdealPulse
    offset : float
        From the carrier in Hz.
    count : int
        How many, even.
    seed, stream : int
        Of the order.

    Returns
    -------
    ndarray of complex, shape (count, cells)
        Of amplitude 1 for the transition next to it (`tone_factor`).
    """
    half = count // 2
    phases = math.pi * (generator(seed, stream, 0).permutation(half) + 0.5) / half
    return paired(_tone(pulse, offset, phases)).astype(np.complex128)


def worst_offset(pulse: IdealPulse, frame: str, base: float, offsets: FloatArray) -> float:
    """Find the offset at which a small tone costs most.

    Parameters
    ----------
    pulse, frame, base
        As in `cosim.specification.curves.Curve`.
    offsets : ndarray, shape (n,)
        In Hz.

    Returns
    -------
    float
        One of them.
    """
    small = math.sqrt(SMALL_LOSS) / (pulse.peak * pulse.duration)
    costs = _costs(pulse, frame, base, offsets, np.full(offsets.size, 10.0 * small))
    return float(offsets[int(np.argmax(costs))])


def spur_levels(
    pulse: IdealPulse, frame: str, base: float, offsets: FloatArray, share: float
) -> FloatArray:
    """Give the level of a tone at each offset that alone costs a share.

    Parameters
    ----------
    pulse, frame, base
        As in `cosim.specification.curves.Curve`.
    offsets : ndarray, shape (n,)
        In Hz.
    share : float
        Infidelity.

    Returns
    -------
    ndarray, shape (n,)
        Over the peak of the pulse; at most 1.
    """
    levels = np.full(offsets.size, min(1.0, math.sqrt(6.0 * share) / (pulse.peak * pulse.duration)))
    for _ in range(ROUNDS):
        costs = np.maximum(_costs(pulse, frame, base, offsets, levels), 1e-3 * share)
        levels = np.minimum(1.0, levels * np.sqrt(share / costs))
    return levels


def _costs(
    pulse: IdealPulse, frame: str, base: float, offsets: FloatArray, levels: FloatArray
) -> FloatArray:
    """Cost of tones, averaged over their phases, shape as `offsets`."""
    phases = 2.0 * math.pi * (np.arange(PHASES) + 0.5) / PHASES
    rows = np.concatenate(
        [
            level * _tone(pulse, float(offset), phases)
            for offset, level in zip(offsets, levels, strict=True)
        ]
    )
    lost = distorted_losses(pulse, Distortion(added=rows), frame) - base
    return np.asarray(lost.reshape(offsets.size, PHASES).mean(axis=1))


def _tone(pulse: IdealPulse, offset: float, phases: FloatArray) -> ComplexArray:
    turn = 2.0 * math.pi * offset * pulse.middles
    factor = float(tone_factor(pulse, np.array(offset)))
    return np.asarray(factor * np.exp(1j * (turn + phases[:, None])))
