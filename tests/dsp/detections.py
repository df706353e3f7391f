"""Chains that the tests of detection share: steady, of first order, and one that saturates."""

import math

import numpy as np
from scipy.special import erfcinv

from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.reception import ChainOutput
from cosim.dsp.detection.records import Preparation, Records, Transitions
from cosim.waveform import ComplexArray, FloatArray

NOTHING = Transitions()
SURE = Preparation()


def steady(
    count: int, step: float, snr: float, *, transitions: int = 3, quadratures: int = 2
) -> ChainOutput:
    """A chain without memory, 0 V or 1 V, with white noise that gives a signal over noise."""
    t = step * np.arange(count)
    times = step * count * np.arange(1, transitions + 1) / (transitions + 1)
    # A sample counts as a whole interval: of the one with the transition a part is in each state.
    decays = np.clip((times[:, None] - t) / step, 0.0, 1.0) + 0j
    records = Records(
        step, np.zeros(count, complex), np.ones(count, complex), times, decays, times, 1 - decays
    )
    # Each quadrature has its share of the power: sigma^2 = level/(quadratures duration).
    return ChainOutput(
        records, OutputNoise(white=quadratures * count * step / snr**2, quadratures=quadratures)
    )


def pointer_difference(t: FloatArray, change: FloatArray, rate: float) -> FloatArray:
    """Response from rest, -1 to +1, of a first-order chain whose input turns its sign at a time."""
    before = 1 - np.exp(-rate * t)
    after = np.maximum(t[None, :] - change[:, None], 0.0)
    return np.asarray(before - 2 * (1 - np.exp(-rate * after)))


def bent(signal: FloatArray, gain: float = 1.0) -> ComplexArray:
    """An amplifier that saturates at 1 V, at an angle in the plane of I and Q, off the middle."""
    return np.asarray((0.6 + 0.8j) * np.tanh(gain * signal + 0.2))


def pointers(
    count: int, step: float, rate: float, noise: OutputNoise, *, gain: float = 0.0, times: int = 15
) -> ChainOutput:
    """A first-order chain, behind an amplifier that saturates if a gain is given."""
    t = step * np.arange(count)
    change = count * step * np.arange(1, times + 1) / (times + 1)
    up = pointer_difference(t, np.append(change, np.inf), rate)

    def records(bend: bool) -> Records:
        def chain(x: FloatArray) -> ComplexArray:
            slope = gain / np.cosh(0.2) ** 2 if gain else 1.0
            offset = np.tanh(0.2) if gain else 0.0
            return bent(x, gain) if bend else np.asarray((0.6 + 0.8j) * (slope * x + offset))

        rows, mirrored = chain(up), chain(-up)
        return Records(step, mirrored[-1], rows[-1], change, rows[:-1], change, mirrored[:-1])

    if not gain:
        return ChainOutput(records(False), noise)
    return ChainOutput(records(True), noise, linear=records(False))


def separation_error(snr: float) -> float:
    """Wrong decisions between two equal Gaussians, the threshold in the middle (P. Krantz et al.,
    "A quantum engineer's guide to superconducting qubits", Appl. Phys. Rev. 6, 021318 (2019)).
    """
    return math.erfc(snr / math.sqrt(8.0)) / 2.0


def snr_for_error(error: float) -> float:
    """The signal over noise for that."""
    return float(math.sqrt(8.0) * erfcinv(2.0 * error))
