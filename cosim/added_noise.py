"""The small-signal noise of a circuit as a table that adds a voltage around the carrier."""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from cosim.circuit.bias import CleanRun
from cosim.circuit.inventory import unobserved_elements
from cosim.circuit.noise_parts import FLICKER, NoiseTemperatures
from cosim.circuit.probe import Probe
from cosim.circuit.standstill import RestingNoise, resting_noise
from cosim.circuit.stationarity import LIMIT, Stationarity, check_stationarity
from cosim.errors import SimulationError, TestbenchError
from cosim.units import format_quantity
from cosim.voltage_noises import NetlistNoise, ProbeNoise

INJECTION, STATIONARY, FROZEN = "injection", "stationary", "frozen"
_OFFSETS = np.geomspace(1e-5, 0.98, 200)  # of the carrier
_LEAST = 1e-30  # of the greatest density; a density in points is positive
_UNEVEN = 0.05  # of the density beside the carrier, from which on its two sides differ
_SHOWN = 5


@dataclass(frozen=True, slots=True)
class AddedNoise:
    """A circuit's noise around an operating point.

    Parameters
    ----------
    table : ProbeNoise
        The voltage that it adds at the probe.
    parts : mapping of str to float
        Device in ngspice's name -> its part of the density at the carrier, the greatest first.
    left_out : tuple of str
        What makes noise and is not in it, with the reason.
    warnings : tuple of str
        What the reader must know, without the noise's name.
    """

    table: ProbeNoise
    parts: Mapping[str, float] = field(metadata={"unit": "1"})
    left_out: tuple[str, ...]
    warnings: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Choice:
    """How a circuit's own noise is worked out.

    Parameters
    ----------
    method : "injection", "stationary" or "frozen"
        By which.
    reason : str
        Why, where the testbench left it open.
    added : AddedNoise or None
        Of the other two.
    """

    method: str
    reason: str
    added: AddedNoise | None


def choose_method(
    clean: CleanRun,
    noise: NetlistNoise,
    carrier_frequency: float,
    span: tuple[float, float],
    instant: float,
) -> Choice:
    """Find out whether a circuit's noise is that of an operating point.

    Parameters
    ----------
    clean : CleanRun
        A run without noise of one probe.
    noise : NetlistNoise
        The table [[noise]].
    carrier_frequency : float
        In Hz.
    span : tuple of two floats
        The stretch of the run in s that counts.
    instant : float
        At which "frozen" freezes it, in s.

    Returns
    -------
    Choice

    Raises
    ------
    TestbenchError
        If the testbench says "stationary" and the circuit is not, with the devices and by how much
        they change, or if "frozen" names an instant outside of the run.
    ProbeError, SimulationError, DeckError
        If the small-signal noise that the testbench asks for cannot be simulated.
    """
    if noise.method == INJECTION:
        return Choice(INJECTION, "", None)
    temperatures = temperatures_of(noise)
    if noise.method == FROZEN:
        if instant > clean.request.stop:
            raise TestbenchError(
                f"[[noise]]{_named(noise)}, key 'instant': {format_quantity(instant, 's')} lies "
                f"behind the end of the run at {format_quantity(clean.request.stop, 's')}"
            )
        still = (instant, instant)
        resting = resting_noise(clean, clean.probes[0], carrier_frequency, still, temperatures)
        leading = check_stationarity(clean, *span, _shares(resting, carrier_frequency)).changes
        moved = max((resting.shift[name] for name in leading), default=0.0)
        text = f"an estimate from the circuit frozen at {format_quantity(instant, 's')}"
        text += ", which converts no noise from one frequency to another"
        if moved > LIMIT:
            text += f"; a leading device's bias is {moved:.0%} off that of the run there"
        return Choice(FROZEN, "", _added(noise, resting, carrier_frequency, span, text))
    (probe,) = clean.probes
    reason, still_found = noise_at_rest(clean, probe, noise, carrier_frequency, span)
    if still_found is None:
        return Choice(INJECTION, reason, None)
    return Choice(STATIONARY, reason, _added(noise, still_found, carrier_frequency, span, ""))


def temperatures_of(noise: NetlistNoise) -> NoiseTemperatures:
    """Give the noise temperatures of a table.

    Parameters
    ----------
    noise : NetlistNoise
        The table [[noise]].

    Returns
    -------
    NoiseTemperatures
        In K.
    """
    return NoiseTemperatures(
        noise.resistor_temperature, noise.channel_temperature, noise.series_temperature
    )


def _named(noise: NetlistNoise) -> str:
    return f" '{noise.name}'" if noise.name else ""


def noise_at_rest(
    clean: CleanRun,
    probe: Probe,
    noise: NetlistNoise,
    frequency: float,
    span: tuple[float, float],
    band: tuple[float, float] | None = None,
) -> tuple[str, RestingNoise | None]:
    """Analyse the noise around the operating point, if the circuit keeps to one.

    Parameters
    ----------
    clean : CleanRun
        A run without noise.
    probe : Probe
        One of its.
    noise : NetlistNoise
        The table [[noise]].
    frequency : float
        In Hz, of the carrier or another at which devices that make noise there lead the circuit.
    span : tuple of two floats
        The stretch of the run in s that counts.
    band : tuple of two floats or None
        As `cosim.circuit.standstill.resting_noise` takes it.

    Returns
    -------
    str
        What was found, or what speaks against it.
    RestingNoise or None

    Raises
    ------
    TestbenchError
        If the testbench says "stationary" and the circuit is not.
    ProbeError, SimulationError, DeckError
        If the small-signal noise that the testbench asks for cannot be simulated.
    """
    reason, found = _at_rest(clean, probe, noise, frequency, span, band)
    if found is None and noise.method == STATIONARY:
        raise TestbenchError(
            f'[[noise]]{_named(noise)} with method = "stationary": {reason}',
            hint='Say method = "injection", which holds for any circuit.',
        )
    return reason, found


def _at_rest(
    clean: CleanRun,
    probe: Probe,
    noise: NetlistNoise,
    frequency: float,
    span: tuple[float, float],
    band: tuple[float, float] | None,
) -> tuple[str, RestingNoise | None]:
    """Give the noise around the operating point, or None and what speaks against one."""
    asked = noise.method == STATIONARY
    if not asked and noise.channels_given:
        return "excess factors are given, which only injection takes", None
    if not asked and probe.unit != "V":
        return "the probe is a current", None
    blind = unobserved_elements(clean.deck)
    if blind:
        more = f" and {len(blind) - _SHOWN} more" * (len(blind) > _SHOWN)
        named = ", ".join(blind[:_SHOWN]) + more
        return f"a run does not tell whether these change with time: {named}", None
    found = check_stationarity(clean, *span)
    if not found.stationary:
        return found.sentence(), None
    try:
        resting = resting_noise(clean, probe, frequency, span, temperatures_of(noise), band)
    except SimulationError:
        if asked:
            raise
        # Its message may quote a deck whose lines are not to be kept with a result.
        return (
            "the simulator finds no operating point of the circuit with its sources at rest",
            None,
        )
    found = check_stationarity(clean, *span, _shares(resting, frequency))
    return _verdict(found, resting)


def _verdict(found: Stationarity, resting: RestingNoise) -> tuple[str, RestingNoise | None]:
    if not found.stationary:
        return found.sentence(), None
    off = {name: resting.shift[name] for name in found.changes if resting.shift[name] > LIMIT}
    if off:
        named = ", ".join(f"{name} by {off[name]:.0%}" for name in sorted(off)[:_SHOWN])
        return f"at the sources' mean values the bias is not that of the run: {named}", None
    return found.sentence(), resting


def _added(
    noise: NetlistNoise,
    resting: RestingNoise,
    carrier_frequency: float,
    span: tuple[float, float],
    estimate: str,
) -> AddedNoise:
    """Make a table of a density; an estimate is without 1/f noise."""
    frequency = resting.noise.frequency
    density = np.zeros_like(frequency)
    left_out = []
    for device, parts in resting.noise.by_device.items():
        for part, values in parts.items():
            if part != FLICKER or not estimate:
                density += values
            elif values.any():
                left_out.append(f"{device}: its 1/f noise, of which a frozen circuit tells nothing")
    below, above = (
        np.interp(carrier_frequency * (1.0 + sign * _OFFSETS), frequency, density)
        for sign in (-1.0, 1.0)
    )
    levels = 0.5 * (below + above)
    warnings = [estimate] if estimate else []
    if density.any():
        floor = _LEAST * float(levels.max())
        points = tuple(
            (float(offset), max(float(level), floor))
            for offset, level in zip(carrier_frequency * _OFFSETS, levels, strict=True)
        )
        table = ProbeNoise("probe", noise.name, points=points, below="hold", above="hold")
        beside = _beside(carrier_frequency, span)
        ends = carrier_frequency - beside, carrier_frequency + beside
        lower, upper = np.interp(ends, frequency, density)
        uneven = abs(upper - lower) / max(upper, lower)
        if uneven > _UNEVEN:
            warnings.append(
                f"one over the gate's length below and above the carrier its densities differ by "
                f"{uneven:.0%}; both sides count with their mean"
            )
    else:
        table = ProbeNoise("probe", noise.name, white=0.0)
    shares = _shares(resting, carrier_frequency, without=FLICKER if estimate else "")
    whole = sum(shares.values())
    order = sorted(shares, key=lambda name: -shares[name])
    parts_of = {name: shares[name] / whole for name in order if shares[name] > 0.0}
    return AddedNoise(table, parts_of, tuple(left_out), tuple(warnings))


def _beside(carrier_frequency: float, span: tuple[float, float]) -> float:
    """Give one over the length of the stretch in Hz, within the grid."""
    return min(1.0 / (span[1] - span[0]), float(_OFFSETS[-1]) * carrier_frequency)


def _shares(
    resting: RestingNoise, carrier_frequency: float, *, without: str = ""
) -> dict[str, float]:
    """Give the density at the carrier by device, in V^2/Hz."""
    frequency = resting.noise.frequency
    return {
        device: sum(
            float(np.interp(carrier_frequency, frequency, values))
            for part, values in parts.items()
            if part != without
        )
        for device, parts in resting.noise.by_device.items()
    }
