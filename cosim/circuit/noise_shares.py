"""Which device makes how much of a circuit's noise, told from noisy runs of all devices at once.

The noise at a probe is the sum of what the currents of the devices make, and these currents are
known and independent of one another. In a time that is short beside the gate and long beside the
memory of what carries the carrier, what reaches it from one device is a fixed combination of its
current around the harmonics of the carrier, and of its slow current in times before, which biases
keep for longer: it is found by least squares over many such times. What that
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
_STEADY = 0.01  # of the carrier's amplitude; one that moves by less has no shape of its own
_LEAST = 4  # windows per number that is fitted to one half of the runs
_DRAWS = 24  # of all currents, for what a device makes in the mean
_OFFSETS = (-0.5, 0.0, 0.5)  # over the gate's length: what a half turn and a rest see
_RANK = 1e-6  # of the greatest singular value: what is less is the same direction twice
_TOLD = 5.0  # standard deviations from which on a part is told from none; a product has long tails


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
        # The slow current of the time before each window: two bells, which add up to a flat top.
        early = self.starts[0] - self.length * np.array([1.0, 0.5])
        slow = _projected(grid, drawn, early, self.length, (0.0,))[:, :, 0]
        slow = np.concatenate([slow, found[:, :, _HARMONICS]])
        before = slow[:-2] + slow[1:-1]
        found = np.concatenate([found, before[:, :, None]], axis=2)
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
    numbers = (len(windows.frequencies) + 1) * len(windows.shapes)
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


@dataclass(frozen=True, slots=True)
class _Device:
    """What a device's currents hold in the windows, ready to be fitted to either half of the runs.

    Parameters
    ----------
    designs : tuple of ndarray
        Of each half, (windows of all its runs, numbers), an orthonormal basis of its columns, and
        what turns an amplitude along the basis into weights of the numbers.
    seen : ndarray, shape (numbers, numbers)
        Mean products of the numbers as the gate sees them.
    """

    designs: tuple[tuple[ComplexArray, ComplexArray, ComplexArray], ...]
    seen: ComplexArray


@dataclass(frozen=True, slots=True)
class _Fit:
    """A device fitted to both halves: what the gate sees of it, errors by chance and in all."""

    made: float
    chance: float
    deviation: float
    explained: float
    left: tuple[ComplexArray, ...]


def _shares(
    currents: Sequence[NoiseCurrent],
    drawn: ComplexArray,
    outputs: ComplexArray,
    offsets: ComplexArray,
) -> DeviceShares:
    """Fit one device after the other, the greatest first, to what the ones before have left."""
    waiting = {
        name: _device(
            np.concatenate(
                [drawn[:, k] for k, current in enumerate(currents) if current.device == name],
                axis=2,
            ),
            len(outputs),
            offsets,
        )
        for name in dict.fromkeys(current.device for current in currents)
    }
    power = float(np.vdot(outputs, outputs).real)
    left = tuple(outputs[half::2].reshape(-1) for half in (0, 1))
    told: dict[str, _Fit] = {}
    while True:
        fits = {name: _fitted(device, left) for name, device in waiting.items()}
        clear = [name for name, fit in fits.items() if fit.made > _TOLD * fit.chance]
        if not clear:
            break
        most = max(clear, key=lambda name: fits[name].made)
        told[most] = fits[most]
        left = fits[most].left
        del waiting[most]
    rest = math.fsum(fit.made for fit in fits.values())
    whole = math.fsum(fit.made for fit in told.values()) + rest
    explained = math.fsum(fit.explained for fit in (*told.values(), *fits.values())) / power
    if not whole > 0.0:
        return DeviceShares({}, explained, math.inf)
    parts = {name: told[name].made / whole for name in sorted(told, key=lambda n: -told[n].made)}
    deviation = max(fit.deviation for fit in (*told.values(), *fits.values()))
    return DeviceShares(parts, explained, deviation / whole)


def _device(x: ComplexArray, runs: int, offsets: ComplexArray) -> _Device:
    """Factorise what a device holds, (draws, windows, numbers), of which the first are the runs."""
    designs = []
    for half in (0, 1):
        design = x[half:runs:2].reshape(-1, x.shape[2])
        basis, singular, right = np.linalg.svd(design, full_matrices=False)
        most = float(singular[0])
        rank = int(np.count_nonzero(singular > _RANK * most)) if most > 0.0 else 0
        designs.append((design, basis[:, :rank], right[:rank].conj().T / singular[:rank]))
    seen = np.einsum("ow,dwk->dok", offsets, x).reshape(-1, x.shape[2])
    return _Device(tuple(designs), seen.conj().T @ seen / len(seen))


def _fitted(device: _Device, outputs: Sequence[ComplexArray]) -> _Fit:
    weights, spreads, left = [], [], []
    explained = 0.0
    for (design, basis, back), wanted in zip(device.designs, outputs, strict=True):
        along = basis.conj().T @ wanted
        power = float(np.vdot(wanted, wanted).real)
        found = back @ along
        weights.append(found)
        spreads.append(back @ back.conj().T * (power / wanted.size))
        left.append(wanted - design @ found)
        chance = along.size / wanted.size
        explained += (float(np.vdot(along, along).real) - chance * power) / (1.0 - chance)
    seen = device.seen
    mean = 0.5 * (weights[0] + weights[1])
    by_chance = 0.5 * float(np.trace(seen @ spreads[0] @ seen @ spreads[1]).real)
    beside = 0.5 * float((mean.conj() @ seen @ (spreads[0] + spreads[1]) @ seen @ mean).real)
    return _Fit(
        float((weights[0].conj() @ seen @ weights[1]).real),
        math.sqrt(max(0.0, by_chance)),
        math.sqrt(max(0.0, by_chance + beside)),
        explained,
        tuple(left),
    )


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
    if count and np.ptp(level) > _STEADY * float(level.max()):
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
    turns = 2.0 * math.pi * np.asarray(frequencies)
    found = np.empty((starts.size, len(values), len(turns)), dtype=np.complex128)
    for place, start in enumerate(starts):
        first, stop = np.searchsorted(time, (start, start + length))
        at = time[first:stop]
        bell = np.sin(math.pi * (at - start) / length) ** 2 * widths[first:stop]
        phases = at[:, None] * turns
        waves = np.concatenate([np.cos(phases), -np.sin(phases)], axis=1)
        both = values[:, first:stop] @ (bell[:, None] * waves)
        found[place] = both[:, : len(turns)] + 1j * both[:, len(turns) :]
    return found
