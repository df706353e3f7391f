"""Which device makes how much of a circuit's noise, told from noisy runs of all devices at once.

The noise at a probe is the sum of what the currents of the devices make, and these currents are
known and independent of one another. In a time that is short beside the gate and long beside the
circuit's memory, what reaches the carrier from one device is a fixed combination of its current
around the harmonics of the carrier. So the noise around the carrier is projected onto those of each
device, by least squares over many such times; what a device explains beyond the part that as many
random numbers would explain by chance is its share. No run is needed but those of the samples.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.circuit.bias import CleanRun
from cosim.circuit.generators import noise_currents, noise_grid, noise_samples
from cosim.circuit.injection import InjectedNoise
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.probe import Probe, evaluate_probe
from cosim.waveform import ComplexArray, FloatArray

_PERIODS = 8  # of the carrier in a smooth window of time; they overlap by half
_HARMONICS = 4  # up to which currents reach the carrier: a switch has 2/pi, 2/(3 pi) ... of them
_LEAST = 4  # windows per number that is fitted
_RANK = 1e-6  # of the greatest singular value: what is less is the same direction twice
_TOLD = 3.0  # standard deviations from which on a share is told from none


@dataclass(frozen=True, slots=True)
class DeviceShares:
    """The parts of devices in the power of a circuit's noise around its carrier.

    Parameters
    ----------
    parts : dict of str to float
        Device in ngspice's name -> its part, those that are told from none, the greatest first.
    explained : float
        Sum of the parts of all devices, 1 within the errors where the method holds.
    deviation : float
        Greatest standard deviation of a part; infinite where there are too few windows of time to
        tell devices apart.
    """

    parts: dict[str, float] = field(metadata={"unit": "1"})
    explained: float = field(metadata={"unit": "1"})
    deviation: float = field(metadata={"unit": "1"})


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
        Noisy runs of all devices.
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
    starts, length = _windows(carrier_frequency, span)
    # The carrier's own amplitude: what a stage of the carrier adds comes and goes with it.
    time = clean.result.time
    wave = evaluate_probe(probe, clean.result.vectors)
    level = np.abs(_projected(time, wave[None], starts, length, (carrier_frequency,)))[:, 0, 0]
    shapes = [np.ones_like(level)]
    if np.ptp(level) > _RANK * float(level.max(initial=0.0)):
        shapes.append(level / float(level.max()))
    harmonics = [k * carrier_frequency for k in range(-_HARMONICS, _HARMONICS + 1)]
    currents = noise_currents(clean, settings)
    grid = noise_grid(clean)
    outputs, inputs = [], []
    for run in runs:
        noise = run.samples[probe.text][None]
        outputs.append(_projected(run.time, noise, starts, length, (carrier_frequency,))[:, 0, 0])
        drawn = noise_samples(clean, settings, currents, run.seed)
        found = _projected(grid, drawn, starts, length, harmonics)
        inputs.append(np.concatenate([shape[:, None, None] * found for shape in shapes], axis=2))
    y = np.concatenate(outputs)
    x = np.concatenate(inputs)
    if not y.any():
        return DeviceShares({}, 1.0, 0.0)
    if y.size < _LEAST * x.shape[2]:
        return DeviceShares({}, math.nan, math.inf)
    parts: dict[str, float] = {}
    deviations: dict[str, float] = {}
    for name in dict.fromkeys(current.device for current in currents):
        own = [place for place, current in enumerate(currents) if current.device == name]
        parts[name], deviations[name] = _explained(x[:, own].reshape(y.size, -1), y)
    order = sorted(parts, key=lambda name: -parts[name])
    told = {name: parts[name] for name in order if parts[name] > _TOLD * deviations[name]}
    greatest = max(
        math.sqrt(deviations[name] ** 2 + 2.0 * max(0.0, parts[name]) / y.size) for name in parts
    )
    return DeviceShares(told, math.fsum(parts.values()), greatest)


def single_shares(
    runs: Iterable[tuple[str, InjectedNoise]],
    probe: Probe,
    carrier_frequency: float,
    span: tuple[float, float],
) -> DeviceShares:
    """Tell which device makes how much from a noisy run of each alone.

    Parameters
    ----------
    runs : iterable of (str, InjectedNoise)
        Device, and the run in which it alone makes noise.
    probe : Probe
        One of the clean run's.
    carrier_frequency : float
        In Hz.
    span : tuple of two floats
        Stretch of the run in s.

    Returns
    -------
    DeviceShares
        All devices; the parts add up to 1.
    """
    starts, length = _windows(carrier_frequency, span)
    powers: dict[str, float] = {}
    for name, run in runs:
        noise = run.samples[probe.text][None]
        found = _projected(run.time, noise, starts, length, (carrier_frequency,))
        powers[name] = float(np.sum(np.abs(found) ** 2))
    whole = math.fsum(powers.values())
    if not whole > 0.0:
        return DeviceShares({}, 1.0, 0.0)
    order = sorted(powers, key=lambda name: -powers[name])
    parts = {name: powers[name] / whole for name in order}
    return DeviceShares(parts, 1.0, max(parts.values()) * math.sqrt(2.0 / starts.size))


def _windows(carrier_frequency: float, span: tuple[float, float]) -> tuple[FloatArray, float]:
    """Give the starts of the windows of time in s, and their length."""
    start, stop = span
    length = _PERIODS / carrier_frequency
    count = max(0, math.floor((stop - start - length) / (length / 2) * (1 + 1e-9)) + 1)
    return start + length / 2 * np.arange(count, dtype=np.float64), length


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


def _explained(design: ComplexArray, y: ComplexArray) -> tuple[float, float]:
    """Give the part of the power of y that a device explains, and what chance makes of none."""
    left, singular, _ = np.linalg.svd(design, full_matrices=False)
    rank = int(np.count_nonzero(singular > _RANK * float(singular[0]))) if singular[0] > 0 else 0
    chance = rank / y.size
    power = float(np.vdot(y, y).real)
    whole = float(np.sum(np.abs(left[:, :rank].conj().T @ y) ** 2)) / power
    return (whole - chance) / (1.0 - chance), math.sqrt(rank) / y.size
