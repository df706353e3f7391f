"""Which device makes how much of a circuit's noise, told from noisy runs of all devices at once.

The noise at a probe is the sum of what the currents of the devices make, and these currents are
known and independent of one another. In a time that is short beside the gate and long beside the
circuit's memory, what reaches the carrier from one device is a fixed combination of its current
around the harmonics of the carrier: it is found by least squares over many such times. What that
combination makes of further drawn currents, at offsets from the carrier that a gate of this length
sees, is the device's part. It is fitted twice, to one half of the runs each, and the two are
multiplied, so that what chance makes of a fit does not count. No run is needed but those there are.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.circuit.bias import CleanRun
from cosim.circuit.generators import NoiseCurrent, noise_currents, noise_grid, noise_samples
from cosim.circuit.injection import InjectedNoise
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.probe import Probe, evaluate_probe
from cosim.waveform import ComplexArray, FloatArray

_PERIODS = 8  # of the carrier in a smooth window of time; they overlap by half
_HARMONICS = 4  # up to which currents reach the carrier: a switch has 2/pi, 2/(3 pi) ... of them
_LEAST = 4  # windows per number that is fitted to one half of the runs
_DRAWS = 32  # of all currents, for what a device makes in the mean
_OFFSETS = (-0.5, 0.0, 0.5)  # over the gate's length: what a half turn and a rest see
_RANK = 1e-6  # of the greatest singular value: what is less is the same direction twice
_TOLD = 3.0  # standard deviations from which on a part is told from none


@dataclass(frozen=True, slots=True)
class DeviceShares:
    """The parts of devices in a circuit's noise around its carrier.

    Parameters
    ----------
    parts : dict of str to float
        Device in ngspice's name -> its part, those that are told from none, the greatest first.
    explained : float
        Part of the noise's power that all devices explain together, within 1/16 of the carrier; 1
        within the errors where the method holds.
    deviation : float
        Greatest standard deviation of a part; infinite where there are too few windows of time to
        tell devices apart.
    """

    parts: dict[str, float] = field(metadata={"unit": "1"})
    explained: float = field(metadata={"unit": "1"})
    deviation: float = field(metadata={"unit": "1"})


@dataclass(frozen=True, slots=True)
class _Windows:
    """Windows of time, and the harmonics and shapes by which a current reaches the carrier."""

    starts: FloatArray
    length: float
    frequencies: tuple[float, ...]
    shapes: tuple[FloatArray, ...]
    offsets: ComplexArray

    def inputs(self, grid: FloatArray, drawn: FloatArray) -> ComplexArray:
        """Give what currents hold in each window, shape (currents, windows, numbers)."""
        found = _projected(grid, drawn, self.starts, self.length, self.frequencies)
        parts = [shape[:, None, None] * found for shape in self.shapes]
        return np.concatenate(parts, axis=2).transpose(1, 0, 2)


def device_shares(
    clean: CleanRun,
    settings: NoiseSettings,
    runs: Sequence[InjectedNoise],
    probe: Probe,
    carrier_frequency: float,
    span: tuple[float, float],
) -> DeviceShares:
    """Tell which device makes how much of the noise of some noisy runs.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        With which the noise was made.
    runs : sequence of InjectedNoise
        Noisy runs of all devices, two at the least.
    probe : Probe
        One of the clean run's.
    carrier_frequency : float
        In Hz.
    span : tuple of two floats
        Stretch of the run in s.

    Returns
    -------
    DeviceShares
    """
    windows = _windows(clean, probe, carrier_frequency, span)
    currents = noise_currents(clean, settings)
    grid = noise_grid(clean)
    seeds = [run.seed for run in runs]
    outputs = np.array(
        [
            _projected(
                run.time,
                run.samples[probe.text][None],
                windows.starts,
                windows.length,
                (carrier_frequency,),
            )[:, 0, 0]
            for run in runs
        ]
    )
    if not outputs.any() or not currents:
        return DeviceShares({}, 1.0, 0.0)
    numbers = len(windows.frequencies) * len(windows.shapes)
    if (len(runs) // 2) * windows.starts.size < _LEAST * numbers:
        return DeviceShares({}, math.nan, math.inf)
    further = range(max(seeds) + 1, max(seeds) + 1 + max(0, _DRAWS - len(seeds)))
    drawn = np.array(
        [
            windows.inputs(grid, noise_samples(clean, settings, currents, seed))
            for seed in (*seeds, *further)
        ]
    )
    return _shares(currents, drawn, outputs, windows.offsets)


def _shares(
    currents: Sequence[NoiseCurrent],
    drawn: ComplexArray,
    outputs: ComplexArray,
    offsets: ComplexArray,
) -> DeviceShares:
    """Fit each device to the outputs; `drawn` is (draws, currents, windows, numbers)."""
    count = len(outputs)
    made: dict[str, float] = {}
    deviations: dict[str, tuple[float, float]] = {}
    explained = 0.0
    for name in dict.fromkeys(current.device for current in currents):
        own = [place for place, current in enumerate(currents) if current.device == name]
        x = np.concatenate([drawn[:, place] for place in own], axis=2)
        fits = [_fitted(x[half:count:2], outputs[half::2]) for half in (0, 1)]
        seen = np.einsum("ow,dwk->dok", offsets, x).reshape(-1, x.shape[2])
        power = seen.conj().T @ seen / len(seen)
        (first, spread_1, _), (second, spread_2, _) = fits
        made[name] = float((first.conj() @ power @ second).real)
        chance = 0.5 * float(np.trace(power @ spread_1 @ power @ spread_2).real)
        mean = 0.5 * (first + second)
        along = 0.5 * float((mean.conj() @ power @ (spread_1 + spread_2) @ power @ mean).real)
        deviations[name] = math.sqrt(max(0.0, chance)), math.sqrt(max(0.0, chance + along))
        explained += 0.5 * (fits[0][2] + fits[1][2])
    whole = math.fsum(made.values())
    if not whole > 0.0:
        return DeviceShares({}, explained, math.inf)
    order = sorted(made, key=lambda name: -made[name])
    told = {name: made[name] / whole for name in order if made[name] > _TOLD * deviations[name][0]}
    return DeviceShares(told, explained, max(both for _, both in deviations.values()) / whole)


def _fitted(x: ComplexArray, y: ComplexArray) -> tuple[ComplexArray, ComplexArray, float]:
    """Give weights by which a current makes the output, their covariance, and what they explain."""
    design, wanted = x.reshape(-1, x.shape[2]), y.reshape(-1)
    left, singular, right = np.linalg.svd(design, full_matrices=False)
    rank = int(np.count_nonzero(singular > _RANK * float(singular[0]))) if singular[0] > 0 else 0
    found = left[:, :rank].conj().T @ wanted
    back = right[:rank].conj().T / singular[:rank]
    power = float(np.vdot(wanted, wanted).real)
    chance = rank / wanted.size
    part = (float(np.vdot(found, found).real) / power - chance) / (1.0 - chance)
    return back @ found, back @ back.conj().T * (power / wanted.size), part


def _windows(
    clean: CleanRun, probe: Probe, carrier_frequency: float, span: tuple[float, float]
) -> _Windows:
    start, stop = span
    length = _PERIODS / carrier_frequency
    count = max(0, math.floor((stop - start - length) / (length / 2) * (1 + 1e-9)) + 1)
    starts = start + length / 2 * np.arange(count, dtype=np.float64)
    # The carrier's own amplitude: what a stage of the carrier adds comes and goes with it.
    wave = evaluate_probe(probe, clean.result.vectors)[None]
    level = np.abs(_projected(clean.result.time, wave, starts, length, (carrier_frequency,)))
    level = level[:, 0, 0]
    shapes = [np.ones(count)]
    if count and np.ptp(level) > _RANK * float(level.max()):
        shapes.append(level / float(level.max()))
    frequencies = tuple(k * carrier_frequency for k in range(-_HARMONICS, _HARMONICS + 1))
    turns = np.outer(np.array(_OFFSETS) / (stop - start), starts)
    return _Windows(starts, length, frequencies, tuple(shapes), np.exp(-2j * math.pi * turns))


def _projected(
    time: FloatArray,
    values: FloatArray,
    starts: FloatArray,
    length: float,
    frequencies: Sequence[float],
) -> ComplexArray:
    """Give what quantities hold of some frequencies in each window, (windows, values, f)."""
    widths = np.gradient(time)
    turns = -2j * math.pi * np.asarray(frequencies)
    found = np.empty((starts.size, len(values), len(turns)), dtype=np.complex128)
    for place, start in enumerate(starts):
        first, stop = np.searchsorted(time, (start, start + length))
        at = time[first:stop]
        bell = np.sin(math.pi * (at - start) / length) ** 2 * widths[first:stop]
        found[place] = values[:, first:stop] @ (bell[:, None] * np.exp(at[:, None] * turns))
    return found
