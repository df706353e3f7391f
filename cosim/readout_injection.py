"""Injected noise of a readout: what the netlist makes, told apart from what arrives there.

Noise is small, so the netlist's answers to several currents add up. What arrives may be a thousand
times what the devices make, and a few noisy runs know its power to some tenths: beside that the
devices' part would drown. So the runs are of two kinds. In the first the devices make noise, and
what arrives does so only at frequencies that reach the output by mixing: that is the netlist's
part, known as well as so many runs can tell. In the second, of which a few do, what arrives around
the signal makes noise alone. Its samples are known, and what the output owes to them by a gain has
a power that is known without chance; only what is left has to be averaged.

A fit to the known samples in runs of all noise at once needs none of the second kind, but it was
measured to be wrong: behind a tank of 20 ns and 30 dB, where the netlist makes 1 % of the noise in
a record of 400 ns, what arrived before the record began left the fit with 19 times the netlist's
part, and with three to seven times after local polynomials in frequency for gain and transient.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.circuit.bias import CleanRun
from cosim.circuit.generators import NoiseCurrent, noise_grid, noise_samples
from cosim.circuit.injection import injected_difference
from cosim.circuit.noise_settings import NoiseSettings
from cosim.dsp.demodulation import demodulate
from cosim.dsp.detection.band_levels import (
    BandLevels,
    averaged_levels,
    carrier_ratio,
    explained_levels,
    noise_of_levels,
)
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.readout_output import Grid, cell_means, outputs_record
from cosim.readout_progress import RunProgress
from cosim.readout_schema import ReadoutTable
from cosim.waveform import ComplexArray, FloatArray, Waveform

# Runs of the devices for one of what arrives around the signal, and the least of these: a gain that
# moves with the signal leaves some of what arrives to chance.
_FEWER, _LEAST = 4, 4
_PASSED = 0.25  # of the carrier: the pass band of the demodulator


@dataclass(frozen=True, slots=True)
class Entry:
    """The noise that arrives: which currents, and around which frequency.

    Parameters
    ----------
    densities : mapping of str to float
        Resistor behind a source, that of I first -> one-sided density of its current in A^2/Hz.
    frequency : float
        At which the signal enters in Hz; 0 as a pair in baseband.
    half_band : float
        In Hz; what arrives within this of the signal's frequency is counted as arriving, what
        reaches the output from elsewhere as the netlist's.
    """

    densities: Mapping[str, float] = field(metadata={"unit": "A^2/Hz"})
    frequency: float = field(metadata={"unit": "Hz"})
    half_band: float = field(metadata={"unit": "Hz"})


@dataclass(frozen=True, slots=True)
class NoisyRuns:
    """What makes a deck's runs noisy, and how their outputs are read.

    Parameters
    ----------
    cleans : sequence of CleanRun
        Of the states, which take turns, so that the noise is the mean of theirs.
    currents : sequence of sequence of NoiseCurrent
        Of each.
    settings : NoiseSettings
        Temperatures and the rest.
    entry : Entry or None
        None where nothing arrives.
    table : ReadoutTable
        With the outputs.
    grid : Grid
        Of the records.
    quadratures : int
        2 for I + jQ, 1 for a single real output.
    progress : RunProgress
        Is told of every run.
    """

    cleans: Sequence[CleanRun]
    currents: Sequence[Sequence[NoiseCurrent]]
    settings: NoiseSettings
    entry: Entry | None
    table: ReadoutTable
    grid: Grid
    quadratures: int
    progress: RunProgress = field(default_factory=RunProgress, compare=False)

    def drawn(self, seed: int) -> tuple[CleanRun, Sequence[NoiseCurrent], FloatArray]:
        """Draw the currents of a seed.

        Parameters
        ----------
        seed : int
            Not negative.

        Returns
        -------
        CleanRun
            Of the state whose turn it is.
        sequence of NoiseCurrent
            Of the devices and of what arrives.
        ndarray, shape (currents, n)
            In A.
        """
        place = seed % len(self.cleans)
        clean, currents = self.cleans[place], self.currents[place]
        return clean, currents, noise_samples(clean, self.settings, currents, seed)

    def record(
        self, clean: CleanRun, currents: Sequence[NoiseCurrent], samples: FloatArray
    ) -> ComplexArray:
        """Run the deck with currents.

        Parameters
        ----------
        clean : CleanRun
            Of the state.
        currents : sequence of NoiseCurrent
            Between which nets they flow.
        samples : ndarray, shape (currents, n)
            In A.

        Returns
        -------
        ndarray of complex, shape (m,)
            The noise as a record in V.

        Raises
        ------
        SimulationError, DeckError
            If the run fails.
        """
        found = injected_difference(clean, currents, samples).samples
        self.progress.end(clean.request.stop)
        waves = [found[probe.text] / self.settings.scale for probe in clean.probes]
        return outputs_record(clean.result.time, waves, self.table, self.grid)


@dataclass(frozen=True, slots=True)
class InjectedOutput:
    """The noise at the outputs of a readout's netlist.

    Parameters
    ----------
    output : OutputNoise
        All of it.
    relative_error : float
        Standard error of its density near the carrier over itself.
    netlist : float
        Density near the carrier of what the netlist makes, in V^2/Hz.
    netlist_error : float
        Standard error of that in V^2/Hz.
    bent : float
        By how much a run of all noise at once differs from the sum of its parts, over itself.
    """

    output: OutputNoise
    relative_error: float = field(metadata={"unit": "1"})
    netlist: float = field(metadata={"unit": "V^2/Hz"})
    netlist_error: float = field(metadata={"unit": "V^2/Hz"})
    bent: float = field(metadata={"unit": "1"})


def injected_output(runs: NoisyRuns, seeds: range) -> InjectedOutput:
    """Simulate the noise at the outputs.

    Parameters
    ----------
    runs : NoisyRuns
        What is run.
    seeds : range
        One for each run of the devices.

    Returns
    -------
    InjectedOutput

    Raises
    ------
    SimulationError, DeckError
        If a run fails.
    """
    step, quadratures = runs.grid.step, runs.quadratures
    if runs.entry is None:
        records = np.array([runs.record(*runs.drawn(seed)) for seed in seeds])
        return _put_together(averaged_levels(records, step, quadratures), None, quadratures, 0.0)
    records = np.array([_own(runs, seed) for seed in seeds])
    pairs = [_arriving(runs, seed) for seed in seeds[: arriving_runs(len(seeds))]]
    arrived, known = (np.array(part) for part in zip(*pairs, strict=True))
    passed = _PASSED * runs.entry.frequency if runs.entry.frequency else math.inf
    beside = explained_levels(arrived, known, step, quadratures, passed)
    whole = runs.record(*runs.drawn(seeds[0]))
    size = float(np.linalg.norm(whole))
    bent = float(np.linalg.norm(whole - records[0] - arrived[0])) / size if size > 0.0 else 0.0
    return _put_together(averaged_levels(records, step, quadratures), beside, quadratures, bent)


def _put_together(
    own: BandLevels, beside: BandLevels | None, quadratures: int, bent: float
) -> InjectedOutput:
    values, error = own.values, float(own.errors[0])
    if beside is not None:
        values = values + beside.values
        error = math.hypot(error, float(beside.errors[0]))
    near = float(values[0])
    # The parts are known as means over the first band; their ratio there stands for the carrier.
    ratio = carrier_ratio(replace(own, values=values))
    return InjectedOutput(
        noise_of_levels(own.frequencies, np.array([ratio * near, *values[1:]]), quadratures),
        error / near if near > 0.0 else 0.0,
        ratio * float(own.values[0]),
        ratio * float(own.errors[0]),
        bent,
    )


def arriving_runs(seeds: int) -> int:
    """Give the runs of what arrives around the signal alone.

    Parameters
    ----------
    seeds : int
        Runs of the devices.

    Returns
    -------
    int
    """
    return min(seeds, max(_LEAST, seeds // _FEWER))


def powers_alone(runs: NoisyRuns, seeds: range) -> dict[str, float]:
    """Run each device alone.

    Parameters
    ----------
    runs : NoisyRuns
        What is run.
    seeds : range
        Of the runs of each.

    Returns
    -------
    dict of str to float
        Device in ngspice's name -> density near the carrier in V^2/Hz.

    Raises
    ------
    SimulationError, DeckError
        If a run fails.
    """
    found: dict[str, list[float]] = {}
    for seed in seeds:
        clean, currents, samples = runs.drawn(seed)
        for name in dict.fromkeys(one.device for one in currents):
            places = [k for k, one in enumerate(currents) if one.device == name]
            record = runs.record(clean, [currents[k] for k in places], samples[places])
            near = averaged_levels(record[None], runs.grid.step, runs.quadratures).values[0]
            found.setdefault(name, []).append(float(near))
    return {name: float(np.mean(powers)) for name, powers in found.items()}


def _own(runs: NoisyRuns, seed: int) -> ComplexArray:
    """Let the devices make noise, and what arrives where only mixing brings it to the output."""
    assert runs.entry is not None  # Its only caller has one.
    clean, currents, samples = runs.drawn(seed)
    for place, one in enumerate(currents):
        if one.device in runs.entry.densities:
            samples[place] -= _around_signal(samples[place], clean, runs.entry)
    flowing = [int(k) for k in np.flatnonzero(samples.any(axis=1))]
    return runs.record(clean, [currents[k] for k in flowing], samples[flowing])


def _arriving(runs: NoisyRuns, seed: int) -> tuple[ComplexArray, ComplexArray]:
    """Let what arrives around the signal make noise alone; give it at the output and as it enters.

    As it enters it is scaled to the density 1/Hz, two-sided about the signal's frequency.
    """
    assert runs.entry is not None  # Its only caller has one.
    clean, currents, samples = runs.drawn(seed)
    rows = {one.device: k for k, one in enumerate(currents)}
    places = [rows[name] for name in runs.entry.densities]
    made = np.array([_around_signal(samples[k], clean, runs.entry) for k in places])
    record = runs.record(clean, [currents[k] for k in places], made)
    densities = np.array(list(runs.entry.densities.values()))
    unit = made / (runs.settings.scale * np.sqrt(densities))[:, None]
    grid = noise_grid(clean)
    if runs.entry.frequency == 0.0:
        # A real quantity in baseband has half of its one-sided density to either side.
        return record, cell_means(grid, unit[0] + 1j * unit[1], runs.grid)
    found = demodulate(Waveform(grid, unit[0], unit="A"), runs.entry.frequency)
    # An envelope has twice the one-sided density of its signal, two-sided.
    return record, cell_means(found.t, found.iq, runs.grid) / math.sqrt(2.0)


def _around_signal(samples: FloatArray, clean: CleanRun, entry: Entry) -> FloatArray:
    """Give the part of what arrives that lies around the signal's frequency."""
    if math.isinf(entry.half_band):
        return samples
    # The grid is even but for some points behind the corners of sources: these the band takes for
    # others, which matters as little as there are few of them.
    lines = np.fft.rfft(samples)
    f = np.fft.rfftfreq(samples.size, clean.request.step)
    lines[np.abs(f - entry.frequency) > entry.half_band] = 0.0
    return np.asarray(np.fft.irfft(lines, samples.size))
