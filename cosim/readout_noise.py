"""The noise of a readout: what arrives with the signal, and what the netlist's devices add."""

import itertools
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from cosim.added_noise import INJECTION, choose_method
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.deck import Deck
from cosim.circuit.generators import noise_currents, noise_samples
from cosim.circuit.injection import injected_difference
from cosim.circuit.noise_settings import NoiseSettings
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.errors import TestbenchError
from cosim.noisy_circuit import modelled_settings, noise_settings
from cosim.outgoing import ArrivingNoise
from cosim.readout_entry import NoisyInput, readout_currents, resistors_behind
from cosim.readout_output import Grid, ReadoutPlan, outputs_record
from cosim.readout_schema import ReadoutTable
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray, FloatArray

ARRIVING = "arriving only"
# Bands of |frequency| that the injected noise is averaged over, in lines of a record's spectrum.
_FIRST_BAND = 3
_GROWTH = 1.6
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
    """

    output: OutputNoise
    method: str
    reason: str = ""
    relative_error: float = field(default=0.0, metadata={"unit": "1"})
    devices: dict[str, float] = field(default_factory=dict, metadata={"unit": "1"})
    left_out: tuple[str, ...] = ()

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
    cleans = [clean_run(deck, plan.request, texts) for deck in decks]
    behind = {} if entry is None else resistors_behind(plan, entry, cleans[0], table)
    settings = noise_settings(noise, plan.deck)
    reason = "I and Q, or an output in baseband, are no voltage around a carrier"
    if table.output_frequency is not None:
        choice = choose_method(
            cleans[0], noise, table.output_frequency, span, 0.5 * (span[0] + span[1])
        )
        reason = choice.reason
        if choice.added is not None:
            density = choice.added.table.density(table.output_frequency)
            assert density is not None  # Its table has points.
            parts = dict(choice.added.parts)
            factor, devices = _with_arriving(parts, behind, cleans[0], settings)
            reach = 0.5 / grid.step
            offsets = np.linspace(0.0, reach, _OFFSETS)
            values = factor * density.at(np.maximum(offsets, 1e-4 * reach))
            f = np.concatenate([-offsets[:0:-1], offsets])
            output = OutputNoise(0.0, f, np.concatenate([values[:0:-1], values]), 2)
            left_out = choice.added.left_out
            return ChainNoise(output, choice.method, reason, 0.0, devices, left_out)
    elif noise.method not in ("auto", INJECTION):
        raise TestbenchError(
            f'[[noise]] with method = "{noise.method}" goes with one output at its '
            "'output_frequency'",
            hint=f'say method = "{INJECTION}"',
        )
    instant = 0.5 * (span[0] + span[1])
    carrier = table.output_frequency or 1.0 / span[1]
    settings, _ = modelled_settings(cleans[0], settings, noise, carrier, instant)
    return _injected(plan, table, grid, noise, cleans, behind, settings, reason)


def _injected(
    plan: ReadoutPlan,
    table: ReadoutTable,
    grid: Grid,
    noise: NetlistNoise,
    cleans: Sequence[CleanRun],
    behind: Mapping[str, float],
    settings: NoiseSettings,
    reason: str,
) -> ChainNoise:
    currents = [readout_currents(clean, settings, behind) for clean in cleans]

    def record(seed: int, only: str = "") -> ComplexArray:
        # The states take turns, so that the noise is the mean of theirs.
        place = seed % len(cleans)
        clean = cleans[place]
        made = [one for one in currents[place] if only in ("", one.device)]
        samples = noise_samples(clean, settings, made, seed)
        found = injected_difference(clean, made, samples).samples
        waves = [found[probe.text] / settings.scale for probe in plan.probes]
        return outputs_record(clean.result.time, waves, table, grid)

    seeds = range(table.seed, table.seed + noise.seeds)
    records = np.array([record(seed) for seed in seeds])
    output, error = _spectrum(records, grid, quadratures_of(table))
    devices: dict[str, float] = {}
    if noise.by_device:
        names = dict.fromkeys(one.device for one in currents[0])
        powers = {
            name: float(np.mean([_near(record(seed, name), grid) for seed in seeds]))
            for name in names
        }
        whole = sum(powers.values())
        devices = {_named(name, behind): power / whole for name, power in powers.items()}
        devices = dict(sorted(devices.items(), key=lambda pair: -pair[1]))
    left_out = tuple(cleans[0].inventory.left_out)
    return ChainNoise(output, INJECTION, reason, error, devices, left_out)


def _named(device: str, behind: Mapping[str, float]) -> str:
    return "arriving" if device in behind else device


def _with_arriving(
    parts: dict[str, float],
    behind: Mapping[str, float],
    clean: CleanRun,
    settings: NoiseSettings,
) -> tuple[float, dict[str, float]]:
    """Put what arrives in the place of the noise of the resistors behind the sources.

    Gives the factor on the density near the carrier, and the parts after that.
    """
    own = {one.device: float(one.white[0]) for one in noise_currents(clean, settings)}
    changed = {
        _named(name, behind): part * (behind[name] / own[name] if name in behind else 1.0)
        for name, part in parts.items()
    }
    factor = sum(changed.values()) / sum(parts.values())
    whole = sum(changed.values())
    shares = {name: part / whole for name, part in changed.items()}
    return factor, dict(sorted(shares.items(), key=lambda pair: -pair[1]))


def _spectrum(records: ComplexArray, grid: Grid, quadratures: int) -> tuple[OutputNoise, float]:
    """Average the spectra of noise records over bands of frequency.

    Gives the density, and its relative standard error near the carrier.
    """
    count = records.shape[1]
    lines = np.abs(np.fft.fft(records, axis=1)) ** 2 * grid.step / count
    number = np.abs(np.fft.fftfreq(count) * count).round().astype(int)
    edges = [0]
    width = float(_FIRST_BAND)
    while edges[-1] <= count // 2:
        edges.append(edges[-1] + max(1, round(width)))
        width *= _GROWTH
    middles, levels = [], []
    first_error = 0.0
    for low, high in itertools.pairwise(edges):
        inside = (number >= low) & (number < high)
        if not inside.any():
            continue
        values = lines[:, inside]
        middles.append(0.0 if low == 0 else float(number[inside].mean()))
        levels.append(float(values.mean()))
        if low == 0:
            # A line of white noise scatters by itself (I + jQ); of a real output, mirrored lines
            # are the same one.
            free = values.size if quadratures == 2 else 0.5 * (values.size + records.shape[0])
            first_error = 1.0 / math.sqrt(free)
    unit = 1.0 / (count * grid.step)
    f: FloatArray = unit * np.array([*middles, count / 2.0 + 1.0])
    density = np.array([*levels, levels[-1]])
    both = np.concatenate([-f[:0:-1], f]), np.concatenate([density[:0:-1], density])
    return OutputNoise(0.0, *both, quadratures), first_error


def _near(record: ComplexArray, grid: Grid) -> float:
    """Give the density near the carrier of one noise record, in V^2/Hz."""
    lines = np.abs(np.fft.fft(record)) ** 2 * grid.step / record.size
    return float(np.mean([*lines[:_FIRST_BAND], *lines[-_FIRST_BAND + 1 :]]))
