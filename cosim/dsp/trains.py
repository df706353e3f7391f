"""Trains of pulses: patterns that cover all histories, shapes repeated slot by slot, samples."""

from collections.abc import Sequence

import numpy as np

from cosim.errors import WaveformError
from cosim.waveform import FloatArray, Waveform

# Histories longer than this make trains of thousands of slots.
MOST_ORDER = 8
# A value this close to rest, as a part of the range of a pulse, is rest.
_REST = 1e-9


def covering_bits(order: int) -> tuple[int, ...]:
    """Give bits in which every slot's value meets every history of the slots before it.

    Parameters
    ----------
    order : int
        Length of the histories, 1 to `MOST_ORDER`.

    Returns
    -------
    tuple of int
        2^(order + 1) + order bits: a de Bruijn sequence of words of order + 1 bits, with its last
        `order` bits before it, so that the first of its words has its history, too.

    Raises
    ------
    WaveformError
        If the order is out of its range.

    Notes
    -----
    The concatenation, in the order of the alphabet, of the Lyndon words whose length divides the
    word length (H. Fredricksen and J. Maiorana, Discrete Math. 23, 207 (1978)).
    """
    if not 1 <= order <= MOST_ORDER:
        raise WaveformError(f"histories of 1 to {MOST_ORDER} slots can be covered, got {order}")
    length = order + 1
    bits: list[int] = []
    word = [0]
    while word:
        if length % len(word) == 0:
            bits += word
        # The next Lyndon word: repeat to the length, drop trailing ones, raise the last bit.
        word = [word[place % len(word)] for place in range(length)]
        while word and word[-1] == 1:
            word.pop()
        if word:
            word[-1] = 1
    return (*bits[-order:], *bits)


def random_bits(count: int, seed: int) -> tuple[int, ...]:
    """Give seeded random bits, each 1 with probability one half.

    Parameters
    ----------
    count : int
        Number of bits.
    seed : int
        Of the generator.

    Returns
    -------
    tuple of int
        Of 0 and 1.
    """
    drawn = np.random.default_rng(seed).integers(0, 2, size=count)
    return tuple(int(bit) for bit in drawn)


def pulse_span(shape: Waveform) -> tuple[float, float]:
    """Find the part of a waveform in which it is not at rest.

    Parameters
    ----------
    shape : Waveform
        One pulse; its first value is its rest.

    Returns
    -------
    tuple of two floats
        Times in s at which it leaves its rest and is back there.

    Raises
    ------
    WaveformError
        If it never leaves its rest, or ends elsewhere.
    """
    away = np.flatnonzero(np.abs(shape.v - shape.v[0]) > _REST * np.ptp(shape.v))
    if np.ptp(shape.v) == 0.0:
        raise WaveformError("the waveform is constant: there is no pulse to repeat")
    if away[-1] == shape.v.size - 1:
        raise WaveformError(
            f"the pulse does not come back to its rest of {shape.v[0]:g} {shape.unit}: it ends at "
            f"{shape.v[-1]:g} {shape.unit}"
        )
    return float(shape.t[away[0] - 1]), float(shape.t[away[-1] + 1])


def repeat_shape(shape: Waveform, factors: Sequence[float], spacing: float) -> Waveform:
    """Play a pulse once per slot, each time scaled about its rest.

    Parameters
    ----------
    shape : Waveform
        One pulse; its first value is its rest.
    factors : sequence of float
        Of each slot; 0 leaves the slot at rest.
    spacing : float
        Length of a slot in s, at least that of the pulse.

    Returns
    -------
    Waveform
        The pulse of slot n begins n spacings behind that of `shape`.

    Raises
    ------
    WaveformError
        If the pulse is longer than the spacing, or `pulse_span` refuses it.
    """
    start, stop = pulse_span(shape)
    if stop - start > spacing * (1.0 + 1e-9):
        raise WaveformError(
            f"the pulse lasts {(stop - start) * 1e9:.6g} ns, from {start * 1e9:.6g} ns to "
            f"{stop * 1e9:.6g} ns, which is longer than the spacing of {spacing * 1e9:.6g} ns"
        )
    inside = (shape.t >= start) & (shape.t <= stop)
    t, v = shape.t[inside], shape.v[inside] - shape.v[0]
    end = start + len(factors) * spacing
    times = [np.array([start - spacing])]
    values = [np.zeros(1)]
    for number, factor in enumerate(factors):
        if factor != 0.0:
            times.append(t + number * spacing)
            values.append(factor * v)
    times.append(np.array([end + spacing]))
    values.append(np.zeros(1))
    at = np.concatenate(times)
    # Where one pulse ends as the next begins there are two samples at rest, one of which goes.
    keep = np.append(np.diff(at) > 1e-9 * spacing, True)
    return Waveform(at[keep], shape.v[0] + np.concatenate(values)[keep], shape.unit)


def sample_waveform(waveform: Waveform, rate: float, count: int) -> FloatArray:
    """Sample a waveform at the ticks of a clock that ticks at t = 0.

    Parameters
    ----------
    waveform : Waveform
        Straight lines between its samples, constant before and behind them.
    rate : float
        Samples per second in Hz.
    count : int
        Number of samples.

    Returns
    -------
    ndarray, shape (count,)
        Values at n/rate.
    """
    return np.asarray(np.interp(np.arange(count) / rate, waveform.t, waveform.v))


def hold_samples(samples: FloatArray, rate: float, edge: float, unit: str) -> Waveform:
    """Give what a converter plays: each sample is reached from the last one and held.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        Values at n/rate.
    rate : float
        Samples per second in Hz.
    edge : float
        Time in s that a change takes, on a straight line that begins at the tick.
    unit : str
        "V" or "A".

    Returns
    -------
    Waveform
        From t = 0 on.

    Raises
    ------
    WaveformError
        If the edge does not lie between 0 and the time of one sample.
    """
    if not 0.0 < edge <= (1.0 + 1e-9) / rate:
        raise WaveformError(
            f"an edge takes more than 0 s and at most the {1.0 / rate:.6g} s of one sample, "
            f"got {edge:.6g} s"
        )
    changes = np.flatnonzero(np.diff(samples)) + 1
    t = changes[:, None] / rate + np.array([0.0, edge])
    v = np.stack((samples[changes - 1], samples[changes]), axis=1)
    times = np.concatenate(([0.0], t.ravel(), [samples.size / rate]))
    values = np.concatenate((samples[:1], v.ravel(), samples[-1:]))
    keep = np.append(np.diff(times) > 1e-9 / rate, True)
    return Waveform(times[keep], values[keep], unit)
