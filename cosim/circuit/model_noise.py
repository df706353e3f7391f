"""What the simulator's models say of their channels' noise, for currents that are made by hand.

A resistor that conducts nothing beside a channel makes a known current between the same nets. The
ratio of the two in a small-signal noise analysis is that of the currents, whatever the circuit
makes of them. The operating points are those of sources frozen at a few instants of a run, and at
some more for devices that conduct at none of them. What counts is each device's noise over all of
them; of one that is off at all of them nothing is told, whatever its model says there.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import constants

from cosim.circuit.bias import CleanRun
from cosim.circuit.deck import Deck, SourceLine
from cosim.circuit.flicker import Flicker, flicker_unread
from cosim.circuit.generators import channel_conductance
from cosim.circuit.hierarchy import structure_of
from cosim.circuit.inventory import NoisyDevice
from cosim.circuit.noise_parts import CHANNEL, FLICKER, THERMAL
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.probe import Probe
from cosim.circuit.standstill import deck_at_rest, resting_run, small_signal_noise
from cosim.waveform import FloatArray

_BESIDE = 1e12  # ohm
_BAND = (1e6, 1e7)  # Hz; the parts of a device are told apart at any frequency
_LEAST = 1e-3  # of a device's greatest 1/f noise; less does not count for its law
_CONDUCTS = 0.1  # of its greatest conductance along the run: what a device has that is on
_FURTHER = 8  # instants that are added for devices that are off at the others
_MISFIT = 0.2  # of a density, by which a law of the current may miss it


@dataclass(frozen=True, slots=True)
class _Point:
    """A channel at one operating point: 4 k T times `white`, and 1/f noise at the band's ends."""

    white: float
    slow: FloatArray
    conductance: float
    current: float


def with_models(
    clean: CleanRun, settings: NoiseSettings, instants: Sequence[float], *, gammas: bool
) -> NoiseSettings:
    """Take excess factors and 1/f noise of channels from the simulator's models.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    settings : NoiseSettings
        What is given there by device or by model goes before what the models say.
    instants : sequence of float
        Of the run, in s; up to 8 more are added.
    gammas : bool
        Whether excess factors are taken; 1/f noise is in any case.

    Returns
    -------
    NoiseSettings
        With both for the MOS transistors whose 1/f noise is not read from their cards, BSIM3 and
        BSIM4 for example; level 1 to 3 have the excess factor 2/3. A factor is the mean over the
        instants, by power. A law of 1/f noise, coefficient times a power of the current, is taken
        if it meets the instants within 20 %.

    Raises
    ------
    DeckError, SimulationError
        If the frozen circuit cannot be simulated.
    """
    wanted = [item for item in clean.inventory.devices if _is_unread(clean, item)]
    if not wanted:
        return settings
    along = {item.name: channel_conductance(clean, settings, item) for item in wanted}
    points: dict[str, list[_Point]] = {device.name: [] for device in wanted}
    for instant in _all_instants(clean, along, instants):
        still = deck_at_rest(clean, (instant, instant))
        for name, point in _points(clean, settings, still, wanted).items():
            points[name].append(point)
    factors: dict[str, float] = {}
    laws: dict[str, Flicker] = {}
    for device in wanted:
        found = points[device.name]
        least = _CONDUCTS * float(along[device.name].max())
        if not any(point.conductance > least for point in found):
            continue
        white = sum(point.white for point in found)
        conducting = sum(point.conductance for point in found)
        if white > 0.0 and conducting > 0.0:
            factors[device.name] = white / conducting
        law = _law(found)
        if law is not None:
            laws[device.name] = law
    given = {name.lower() for name in settings.gammas}
    own = {
        device.name: factors[device.name]
        for device in wanted
        if gammas and device.name in factors and device.model not in given
    }
    slow = {
        device.name: laws[device.name]
        for device in wanted
        if device.name in laws and settings.flicker_of(device) is None
    }
    return replace(
        settings,
        gammas=own | {name.lower(): value for name, value in settings.gammas.items()},
        flicker=slow | dict(settings.flicker),
    )


def _all_instants(
    clean: CleanRun, along: Mapping[str, FloatArray], instants: Sequence[float]
) -> list[float]:
    """Add instants at which devices conduct that conduct at none of those that are given."""
    time = clean.result.time
    found = list(instants)
    for conductance in along.values():
        there = np.interp(found, time, conductance)
        off = float(np.max(there)) <= _CONDUCTS * float(conductance.max())
        if off and len(found) < len(instants) + _FURTHER:
            found.append(float(time[np.argmax(conductance)]))
    return found


def _is_unread(clean: CleanRun, device: NoisyDevice) -> bool:
    return device.kind == "mos" and bool(flicker_unread(clean.deck, device))


def _points(
    clean: CleanRun, settings: NoiseSettings, still: Deck, devices: Sequence[NoisyDevice]
) -> dict[str, _Point]:
    """Give what can be told of devices at one operating point."""
    taken = structure_of(still.lines).root.elements
    number = 1
    while any(name.startswith(f"rbeside{number}_") for name in taken):
        number += 1
    names = [f"rbeside{number}_{place}" for place in range(len(devices))]
    lines = tuple(
        SourceLine(f"{name} {device.nodes[0]} {device.nodes[2]} {_BESIDE:g}", "", 0)
        for name, device in zip(names, devices, strict=True)
        if device.nodes[0] != device.nodes[2]
    )
    deck = replace(still, lines=(*still.lines, *lines))
    result = small_signal_noise(clean, deck, _anywhere(devices), _BAND, 1)
    resting = resting_run(clean, still)
    found = {}
    for name, device in zip(names, devices, strict=True):
        known = result.by_device.get(name, {}).get(THERMAL)
        if known is None or not (known > 0.0).all():
            continue  # Both nets are held, and the device's noise reaches none.
        parts = result.by_device[device.name]
        current = 4.0 * constants.k * clean.device_temperature / _BESIDE
        found[device.name] = _Point(
            white=float(parts[CHANNEL][0] / known[0]) / _BESIDE,
            slow=parts[FLICKER] / known * current,
            conductance=float(channel_conductance(resting, settings, device)[0]),
            current=abs(float(resting.vector(device, "id")[0])),
        )
    return found


def _anywhere(devices: Sequence[NoisyDevice]) -> Probe:
    """Give a sum of all nets' voltages in which nothing cancels."""
    nets = dict.fromkeys(node for item in devices for node in (item.nodes[0], item.nodes[2]))
    nodes = tuple(node for node in nets if node != "0")
    weights = np.random.default_rng(0).uniform(0.5, 1.5, len(nodes))
    terms = tuple((float(w), f"v({node})") for w, node in zip(weights, nodes, strict=True))
    return Probe("all nets", terms, "V", nodes)


def _law(points: Sequence[_Point]) -> Flicker | None:
    """Fit a power of the current to 1/f noise; None where it follows none."""
    most = max(float(point.slow[0]) for point in points)
    if not most > 0.0:
        return Flicker(0.0)
    counting = [point for point in points if point.slow[0] > _LEAST * most and point.current > 0.0]
    if not counting:
        return None
    exponents = [
        float(np.log(p.slow[0] / p.slow[1]) / np.log(_BAND[1] / _BAND[0])) for p in counting
    ]
    exponent = float(np.mean(exponents))
    currents = np.log([point.current for point in counting])
    levels = np.log([float(point.slow[0]) for point in counting]) + exponent * np.log(_BAND[0])
    power, offset = 1.0, float(np.mean(levels - currents))
    if np.ptp(currents) > 0.1:
        power, offset = (float(value) for value in np.polyfit(currents, levels, 1))
    missed = np.abs(np.expm1(offset + power * currents - levels))
    weight = np.exp(levels - levels.max())
    if float(np.max(missed * weight)) > _MISFIT or power < 0.0 or not 0.5 <= exponent <= 1.5:
        return None
    return Flicker(float(np.exp(offset)), power, exponent)
