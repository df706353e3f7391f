"""Noise currents of devices over time, made from a seed and the bias of a clean run.

A white current of the one-sided density S(t) is sqrt(S(t)) times independent numbers of the
variance 1/(2 h) at time points h apart: its band ends at 1/(2 h), unless a narrower one is asked
for. Noise that is slow is the same numbers with their spectrum shaped, see `_slow_numbers`.
"""

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy import constants, fft
from scipy.interpolate import CubicSpline

from cosim.circuit.bias import CleanRun, conductance, junction_currents
from cosim.circuit.flicker import Flicker, card_flicker, flicker_unread
from cosim.circuit.inventory import Inventory, NoisyDevice
from cosim.circuit.noise_parts import CHANNEL, THERMAL
from cosim.circuit.noise_settings import NoiseSettings
from cosim.errors import InputError, UnknownNameError, near_names
from cosim.waveform import FloatArray

_FINER = 4
_MOST_NUMBERS = 10**8  # of one run: 0.8 GB, and as much in files
_JUNCTIONS = {"ic": (0, 2), "ib": (1, 2), "id": (0, 1)}  # Between which terminals they flow.


@dataclass(frozen=True, slots=True)
class NoiseCurrent:
    """A noise current between two nets.

    Parameters
    ----------
    device : str
        The device in ngspice's name.
    nodes : tuple of (str, str)
        Nets between which it flows.
    white : ndarray, shape (n,)
        One-sided density of its white part on the grid, in A^2/Hz.
    slow : ndarray, shape (n,)
        One-sided density of its 1/f part at 1 Hz on the grid, in A^2/Hz.
    exponent : float
        Power of the frequency by which the 1/f part falls.
    """

    device: str
    nodes: tuple[str, str]
    white: FloatArray = field(metadata={"unit": "A^2/Hz", "axes": ("time",)})
    slow: FloatArray = field(metadata={"unit": "A^2/Hz", "axes": ("time",)})
    exponent: float


def noise_grid(clean: CleanRun) -> FloatArray:
    """Give the times at which noise currents are made.

    A number that is drawn between two time points of the run would only be seen through a straight
    line, which takes up to half of the power at the end of the band. So the currents are made at
    the run's own time points; of those closer than half a step, as there are behind the corners of
    sources, only so many that no number stands for less than that.

    Parameters
    ----------
    clean : CleanRun
        The clean run.

    Returns
    -------
    ndarray, shape (n,)
        Time points of the run in s, from 0 on, at least half a step apart.
    """
    time = clean.result.time
    least = clean.request.step / 2
    close = np.flatnonzero(np.diff(time) < least)
    if close.size == 0:
        return time
    kept = np.ones(time.size, dtype=bool)
    last = time[close[0]]
    place = int(close[0]) + 1
    while place < time.size:
        if time[place] - last < least:
            kept[place] = False
        else:
            last = time[place]
        place += 1
    return time[kept]


def _widths(grid: FloatArray) -> FloatArray:
    """Give the time in s for which each number of a grid stands."""
    steps = np.diff(grid)
    return np.concatenate([steps[:1], (steps[:-1] + steps[1:]) / 2, steps[-1:]])


def noise_currents(
    clean: CleanRun, settings: NoiseSettings, devices: Collection[str] | None = None
) -> tuple[NoiseCurrent, ...]:
    """Give the densities of noise currents along a clean run.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        Temperatures in K and the rest.
    devices : collection of str or None
        Names in ngspice of the devices whose currents are wanted; None: of all.

    Returns
    -------
    tuple of NoiseCurrent
        One per resistor, channel and junction: 4 k T/R, the channel's (see `NoiseSettings`), and
        2 q |I| of the currents that cross junctions; with the 1/f part where there is one.

    Raises
    ------
    UnknownNameError
        If there is no such device, or 1/f noise or an excess factor is given for a name that is
        neither a device nor a model.
    """
    present = {device.name: device for device in clean.inventory.devices}
    wanted = present.keys() if devices is None else {name.strip().lower() for name in devices}
    for name in sorted(wanted - present.keys()):
        raise UnknownNameError(
            f"'{name}' is no device whose noise is injected", hint=near_names(name, present)
        )
    check_names(clean.inventory, settings)
    grid = noise_grid(clean)
    found: list[NoiseCurrent] = []
    for name, device in present.items():
        if name in wanted:
            found += _currents(clean, settings, device, grid)
    return tuple(found)


def check_names(inventory: Inventory, settings: NoiseSettings) -> None:
    """Refuse settings of devices that are not there.

    Parameters
    ----------
    inventory : Inventory
        What makes noise in a deck.
    settings : NoiseSettings
        1/f noise and excess factors by device or model.

    Raises
    ------
    UnknownNameError
        If a name is neither a device that makes noise nor a model of one.
    """
    known = {device.name for device in inventory.devices}
    known |= {device.model for device in inventory.devices} - {""}
    for name in (*settings.flicker, *settings.gammas):
        if name.lower() not in known:
            raise UnknownNameError(
                f"the noise of '{name}' is given, which is no device that makes noise and no model "
                "of one",
                hint=near_names(name.lower(), known),
            )


def left_out(clean: CleanRun, settings: NoiseSettings) -> tuple[str, ...]:
    """Name the noise that no current stands for.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        1/f noise that is given.

    Returns
    -------
    tuple of str
        "m.x1.m1: the 1/f noise of its model 'nch'" and the like.
    """
    unread = {
        device.name: flicker_unread(clean.deck, device)
        for device in clean.inventory.devices
        if settings.flicker_of(device) is None
    }
    texts = (f"{name}: {text}" for name, text in unread.items() if text)
    return (*clean.inventory.left_out, *texts)


def _currents(
    clean: CleanRun, settings: NoiseSettings, device: NoisyDevice, grid: FloatArray
) -> list[NoiseCurrent]:
    def along(values: FloatArray) -> FloatArray:
        return np.interp(grid, clean.result.time, values)

    def thermal(part: str) -> float:
        kelvin = settings.temperatures.of(part)
        return 4 * constants.k * (clean.device_temperature if kelvin is None else kelvin)

    quiet = np.zeros_like(grid)
    if device.kind == "resistor":
        white = np.full_like(grid, thermal(THERMAL) * conductance(clean, device))
        return [NoiseCurrent(device.name, _between(device, (0, 1)), white, quiet, 1.0)]
    if device.kind in ("mos", "jfet"):
        carried = {"id": along(clean.vector(device, "id"))}
        conducting = channel_conductance(clean, settings, device)
        whites = {"id": thermal(CHANNEL) * settings.gamma_of(device) * along(conducting)}
        ends = {"id": _between(device, (0, 2))}
    else:
        carried = {name: along(i) for name, i in junction_currents(clean, device).items()}
        whites = {name: 2 * constants.e * np.abs(i) for name, i in carried.items()}
        ends = {name: _between(device, _JUNCTIONS[name]) for name in carried}
    # The 1/f noise of a bipolar transistor is that of its base's current.
    slow_one = "ib" if device.kind == "bipolar" else "id"
    slow, exponent = _flicker(clean, settings, device, carried[slow_one])
    return [
        NoiseCurrent(
            device.name,
            ends[name],
            white,
            slow if name == slow_one else quiet,
            exponent,
        )
        for name, white in whites.items()
    ]


def _between(device: NoisyDevice, places: tuple[int, int]) -> tuple[str, str]:
    first, second = places
    return device.nodes[first], device.nodes[second]


def channel_conductance(
    clean: CleanRun, settings: NoiseSettings, device: NoisyDevice
) -> FloatArray:
    """Give the conductance by which 4 k T gamma is multiplied.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        Which conductance is meant.
    device : NoisyDevice
        A field-effect transistor.

    Returns
    -------
    ndarray, shape (n,)
        In S.
    """
    gm = np.abs(clean.vector(device, "gm"))
    if settings.channel == "transconductance":
        return gm
    # With drain and source exchanged, as in a passive mixer, models give the other sign.
    gds = np.abs(clean.vector(device, "gds"))
    at_no_voltage = gm + gds
    part = np.divide(gds, at_no_voltage, out=np.zeros_like(gds), where=at_no_voltage > 0)
    whole: FloatArray = at_no_voltage * (1 + part + part**2) / (1 + part)
    return whole


def _flicker(
    clean: CleanRun, settings: NoiseSettings, device: NoisyDevice, current: FloatArray
) -> tuple[FloatArray, float]:
    """Give the density at 1 Hz along the run, and the power of the frequency."""
    given = settings.flicker_of(device)
    if given is None:
        card = card_flicker(clean.deck, device)
        if card is None:
            return np.zeros_like(current), 1.0
        area = 1.0
        if device.kind == "mos":
            width, length, multiplier = (
                float(clean.vector(device, name)[-1]) for name in ("w", "l", "m")
            )
            area = card.per_area * width * (length - card.overlap)
            area *= multiplier if card.multiplied else 1.0
        given = Flicker(card.kf / area, card.af)
    return given.coefficient * np.abs(current) ** given.current_exponent, given.frequency_exponent


def noise_samples(
    clean: CleanRun, settings: NoiseSettings, currents: Sequence[NoiseCurrent], seed: int
) -> FloatArray:
    """Draw the noise currents of one run.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        Band in Hz and scale.
    currents : sequence of NoiseCurrent
        From `noise_currents`.
    seed : int
        Not negative. The numbers of a current depend on it, on the device's name and on nothing
        else: one device alone has those that it has among all.

    Returns
    -------
    ndarray, shape (currents, n)
        In A on the grid of `noise_grid`, times the scale. The white part is zero at t = 0, so that
        it is no part of the operating point.

    Raises
    ------
    InputError
        If the seed is negative, the band is wider than the grid's, or there are too many numbers.
    """
    if seed < 0:
        raise InputError(f"the seed of noise must not be negative, got {seed}")
    step = clean.request.step
    nyquist = 1 / (2 * step)
    if settings.bandwidth is not None and settings.bandwidth > nyquist:
        raise InputError(
            f"NoiseSettings.bandwidth must not exceed half over the step, {nyquist:g} Hz, got "
            f"{settings.bandwidth:g} Hz",
            hint="Take a shorter step.",
        )
    grid = noise_grid(clean)
    if len(currents) * grid.size > _MOST_NUMBERS:
        raise InputError(
            f"{len(currents)} noise currents at {grid.size} times are more than "
            f"{_MOST_NUMBERS:.0e} numbers",
            hint="Name fewer devices at a time, or take a shorter run.",
        )
    out = np.empty((len(currents), grid.size))
    for place, current in enumerate(currents):
        again = sum(other.device == current.device for other in currents[:place])
        # A seed of its own for each: numbers must not depend on which others there are.
        random = np.random.default_rng([seed, again, *current.device.encode()])
        white = _white_numbers(random, grid, step, settings.bandwidth)
        out[place] = np.sqrt(current.white) * white
        out[place, 0] = 0.0
        if current.slow.any():
            slow = _slow_numbers(random, grid, step, current.exponent, settings)
            out[place] += np.sqrt(current.slow) * slow
    return settings.scale * out


def _white_numbers(
    random: np.random.Generator, grid: FloatArray, step: float, bandwidth: float | None
) -> FloatArray:
    """Draw numbers of the one-sided density 1/Hz up to the end of the band."""
    if bandwidth is None:
        return np.asarray(random.standard_normal(grid.size) / np.sqrt(2 * _widths(grid)))
    return _shaped_numbers(random, grid, step, 0.0, bandwidth)


def _shaped_numbers(
    random: np.random.Generator,
    grid: FloatArray,
    step: float,
    exponent: float,
    bandwidth: float | None,
) -> FloatArray:
    """Draw numbers of the one-sided density f^-exponent on an even record, and read it off."""
    size = _record(grid, step)
    frequencies = fft.rfftfreq(size, step)
    spectrum = fft.rfft(random.standard_normal(size) / math.sqrt(2 * step))
    if exponent:
        spectrum[0] = 0.0
        spectrum[1:] *= frequencies[1:] ** (-exponent / 2)
    if bandwidth is not None:
        spectrum[frequencies > bandwidth] = 0.0
    # Between four points per sample a spline errs by 0.1 % at the very end of the grid's band.
    finer = _FINER * fft.irfft(spectrum, _FINER * size)
    times = np.arange(_FINER * size) * (step / _FINER)
    return np.asarray(CubicSpline(times, finer)(grid))


def _record(grid: FloatArray, step: float) -> int:
    """Give the samples of a periodic record that is longer than the run."""
    return fft.next_fast_len(math.ceil(float(grid[-1]) / step) + 2, real=True)


def _slow_numbers(
    random: np.random.Generator,
    grid: FloatArray,
    step: float,
    exponent: float,
    settings: NoiseSettings,
) -> FloatArray:
    """Draw numbers of the one-sided density f^-exponent from the slowest frequency on.

    White numbers with their spectrum shaped, of which each bin stands for the band around it; the
    band below the first bin's is a constant of the run.
    """
    numbers = _shaped_numbers(random, grid, step, exponent, settings.bandwidth)
    edge = 1 / (2 * step * _record(grid, step))
    lowest = edge if settings.slowest is None else settings.slowest
    constant = random.standard_normal()
    if lowest < edge:
        rise = 1 - exponent
        span = math.log(edge / lowest)
        ratio = math.expm1(rise * span) / rise if rise * span != 0 else span
        numbers += constant * math.sqrt(lowest**rise * ratio)
    return numbers
