"""The noise of a readout: what arrives with the signal, and what the netlist's devices add."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.added_noise import FROZEN, INJECTION, STATIONARY, AddedNoise, choose_method
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.deck import Deck
from cosim.circuit.generators import noise_currents
from cosim.circuit.noise_settings import NoiseSettings
from cosim.dsp.detection.band_levels import noise_of_levels
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.errors import TestbenchError
from cosim.noisy_circuit import modelled_settings, noise_settings
from cosim.outgoing import ArrivingNoise
from cosim.readout_entry import NoisyInput, readout_currents, resistors_behind
from cosim.readout_injection import Entry, NoisyRuns, injected_output, powers_alone
from cosim.readout_output import Grid, ReadoutPlan
from cosim.readout_schema import ReadoutTable
from cosim.readout_stationary import baseband_noise
from cosim.voltage_noises import NetlistNoise

ARRIVING = "arriving only"
_OFFSETS = 41  # of a density that is known in closed form


@dataclass(frozen=True, slots=True)
class ChainNoise:
    """Noise at the outputs of the netlist.

    Parameters
    ----------
    output : OutputNoise
        Of the records, two-sided around the carrier.
    method : str
        "injection", "stationary", or "arriving only" where the netlist is taken to be quiet.
    reason : str
        Why, where the testbench left it open.
    relative_error : float
        Standard error of the density near the carrier over itself: of a few noisy runs.
    devices : dict of str to float
        Device in ngspice's name -> its part of the density near the carrier, the greatest first;
        "arriving" for what comes with the signal. Empty where it is not told.
    left_out : tuple of str
        What makes noise in the deck and is not in it.
    netlist : float
        Part of the density near the carrier that does not arrive with the signal, in V^2/Hz: the
        devices', and what arrives at other frequencies and is mixed onto the output.
    netlist_error : float
        Standard error of that in V^2/Hz.
    bent : float
        By how much injected noise of all differs from the sum of its parts, over itself.
    """

    output: OutputNoise
    method: str
    reason: str = ""
    relative_error: float = field(default=0.0, metadata={"unit": "1"})
    devices: dict[str, float] = field(default_factory=dict, metadata={"unit": "1"})
    left_out: tuple[str, ...] = ()
    netlist: float = field(default=0.0, metadata={"unit": "V^2/Hz"})
    netlist_error: float = field(default=0.0, metadata={"unit": "V^2/Hz"})
    bent: float = field(default=0.0, metadata={"unit": "1"})

    @property
    def near(self) -> float:
        """Density beside the carrier in V^2/Hz, two-sided."""
        return float(self.output.at(np.zeros(1))[0])


def quadratures_of(table: ReadoutTable) -> int:
    """Tell what the outputs are.

    Parameters
    ----------
    table : ReadoutTable
        With the outputs.

    Returns
    -------
    int
        2 for I and Q, or a voltage around a carrier; 1 for one voltage in baseband.
    """
    return 2 if table.q is not None or table.output_frequency is not None else 1


def arriving_only(arriving: ArrivingNoise, gain: float, table: ReadoutTable) -> ChainNoise:
    """Take the netlist for quiet: what arrives, times its gain.

    Parameters
    ----------
    arriving : ArrivingNoise
        At the signal's frequency.
    gain : float
        Envelope at the output over that of the EMF.
    table : ReadoutTable
        With the outputs.

    Returns
    -------
    ChainNoise
    """
    quadratures = quadratures_of(table)
    white = float(arriving.emf_density[0]) * gain**2
    # One real output has the one quadrature, of half the power.
    return ChainNoise(
        OutputNoise(white=white * quadratures / 2.0, quadratures=quadratures), ARRIVING
    )


def netlist_noise_at_output(
    plan: ReadoutPlan,
    table: ReadoutTable,
    grid: Grid,
    noise: NetlistNoise,
    decks: Sequence[Deck],
    entry: NoisyInput | None,
) -> ChainNoise:
    """Simulate the noise of the netlist at its outputs, together with what arrives.

    Parameters
    ----------
    plan : ReadoutPlan
        The plan.
    table : ReadoutTable
        With the outputs and the seed.
    grid : Grid
        Of the records.
    noise : NetlistNoise
        The table [[noise]].
    decks : sequence of Deck
        For |0> and for |1>: the noise is that of the circuit's bias in these runs.
    entry : NoisyInput or None
        Where noise arrives; None for a deck with a sensor of its own.

    Returns
    -------
    ChainNoise

    Raises
    ------
    TestbenchError
        If no resistor stands behind the source, or the testbench insists on a stationary circuit
        that is none.
    SimulationError, DeckError
        If a run fails.
    """
    texts = [probe.text for probe in plan.probes]
    span = table.window
    middle = 0.5 * (span[0] + span[1])
    cleans = [clean_run(deck, plan.request, texts) for deck in decks]
    behind = {} if entry is None else resistors_behind(plan, entry, cleans[0], table)
    settings = noise_settings(noise, plan.deck)
    instead = _instead(behind, cleans[0], settings)
    reason = "I and Q at an intermediate frequency are no one voltage around a carrier"
    if table.output_frequency is not None and len(texts) == 1:
        choice = choose_method(cleans[0], noise, table.output_frequency, span, middle)
        reason = choice.reason
        if choice.added is not None:
            found = _around_carrier(choice.added, table.output_frequency, grid, instead)
            return replace(found, method=choice.method, reason=reason)
    elif noise.method == FROZEN or (noise.method == STATIONARY and table.output_frequency):
        where = "one output at its 'output_frequency'"
        where += "" if noise.method == FROZEN else ", or with outputs in baseband"
        raise TestbenchError(
            f'[[noise]] with method = "{noise.method}" goes with {where}',
            hint=f'say method = "{INJECTION}"',
        )
    elif noise.method != INJECTION and table.output_frequency is None:
        reason, resting = baseband_noise(cleans, noise, grid, span, instead)
        if resting is not None:
            left_out = tuple(cleans[0].inventory.left_out)
            return _told(resting.output, STATIONARY, reason, resting.parts, instead, left_out)
    carrier = table.output_frequency or 1.0 / span[1]
    settings, _ = modelled_settings(cleans[0], settings, noise, carrier, middle)
    runs = NoisyRuns(
        cleans,
        [readout_currents(clean, settings, behind) for clean in cleans],
        settings,
        None if entry is None else _entry(entry, behind, table, grid),
        table,
        grid,
        quadratures_of(table),
        plan.progress,
    )
    found = _injected(runs, noise, instead)
    return found if noise.method == INJECTION else replace(found, reason=reason)


def _injected(runs: NoisyRuns, noise: NetlistNoise, instead: Mapping[str, float]) -> ChainNoise:
    seeds = range(runs.table.seed, runs.table.seed + noise.seeds)
    found = injected_output(runs, seeds)
    return ChainNoise(
        found.output,
        INJECTION,
        "",
        found.relative_error,
        _shares(powers_alone(runs, seeds), instead) if noise.by_device else {},
        tuple(runs.cleans[0].inventory.left_out),
        found.netlist,
        found.netlist_error,
        found.bent,
    )


def _entry(
    entry: NoisyInput, behind: Mapping[str, float], table: ReadoutTable, grid: Grid
) -> Entry:
    """Say which part of what arrives is that around the signal.

    A mixer takes its image, twice the output's frequency off, to the same output: the band of the
    signal ends half-way there.
    """
    half_band = math.inf
    # One and the same frequency may have been rounded in two ways.
    if not math.isclose(table.output_frequency or 0.0, entry.frequency, rel_tol=1e-9):
        half_band = min(0.5 / grid.step, 0.5 * entry.frequency or math.inf)
        half_band = min(half_band, table.output_frequency or math.inf)
    return Entry(behind, entry.frequency, half_band)


def _instead(
    behind: Mapping[str, float], clean: CleanRun, settings: NoiseSettings
) -> dict[str, float]:
    """Give what arrives over the own noise of the resistors behind the sources."""
    own = {one.device: float(one.white[0]) for one in noise_currents(clean, settings, behind)}
    return {name: density / own[name] for name, density in behind.items()}


def _around_carrier(
    added: AddedNoise, carrier_frequency: float, grid: Grid, instead: Mapping[str, float]
) -> ChainNoise:
    """Put what arrives in the place of the noise of the resistors behind the sources."""
    density = added.table.density(carrier_frequency)
    assert density is not None  # Its table has points.
    changed = {name: part * instead.get(name, 1.0) for name, part in added.parts.items()}
    factor = sum(changed.values()) / sum(added.parts.values())
    reach = 0.5 / grid.step
    offsets = np.linspace(0.0, reach, _OFFSETS)
    values = factor * density.at(np.maximum(offsets, 1e-4 * reach))
    return _told(noise_of_levels(offsets, values, 2), "", "", changed, instead, added.left_out)


def _told(
    output: OutputNoise,
    method: str,
    reason: str,
    parts: Mapping[str, float],
    instead: Mapping[str, float],
    left_out: tuple[str, ...],
) -> ChainNoise:
    """Tell which part of a density that is known without chance is the netlist's."""
    devices = _shares(parts, instead)
    found = ChainNoise(output, method, reason, 0.0, devices, left_out)
    return replace(found, netlist=found.near * (1.0 - devices.get("arriving", 0.0)))


def _shares(powers: Mapping[str, float], instead: Mapping[str, float]) -> dict[str, float]:
    """Give the parts of devices, the greatest first; what arrives goes under one name."""
    found: dict[str, float] = {}
    for device, power in powers.items():
        name = "arriving" if device in instead else device
        found[name] = found.get(name, 0.0) + power / sum(powers.values())
    return dict(sorted(found.items(), key=lambda pair: -pair[1]))
