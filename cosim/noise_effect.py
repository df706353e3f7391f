"""What the noise of a testbench does to its gate: filter functions, and seeded samples beside them.

Noise is small and slow beside the carrier, so that its effect is computed in the rotating wave on
the demodulated envelope, as a channel by which the clean one is preceded: V = U0^dag U of each
sample, averaged. The clean channel itself stays that of the full waveform.
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from types import MappingProxyType

import numpy as np

from cosim.added_noise import INJECTION
from cosim.coupling import rate_per_unit
from cosim.dsp.noise.bands import FrequencyGrid, frequency_grid
from cosim.dsp.noise.density import SpectralDensity
from cosim.dsp.noise.paths import PathPlan, generator, plan_paths, sample_paths
from cosim.errors import InputError, TestbenchError
from cosim.guards import counting_warnings
from cosim.netlist_noise import circuit_warnings, injected_noise, labelled
from cosim.noise_frame import (
    Nominal,
    channel_losses,
    nominal_evolution,
    superoperators,
    unitary_losses,
)
from cosim.noise_spectra import noise_filters, noise_spectrum
from cosim.noises import VOLTAGES, AmplitudeNoise, DetuningNoise, Noise, PhaseNoise
from cosim.noisy_circuit import CircuitNoise
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.filters import (
    filter_area,
    noise_infidelity,
    phase_filter_functions,
)
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.quasistatic import gaussian_average
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.side_results import NoiseEffect, NoiseSource
from cosim.voltage_noises import LineNoise, NetlistNoise
from cosim.waveform import ComplexArray, Envelope, FloatArray

# Samples of one batch, even: enough that the kernel's own cost is all, few enough to be small.
CHUNK = 256
# Change of the average on doubling the nodes of the quadrature over what is constant in a gate.
QUADRATURE = 1e-10
# Sampling and first order disagree when they differ by more than this many standard errors ...
SIGNIFICANT = 4.0
# ... and by more than this part, or by more than what second order makes of it.
NEGLIGIBLE = 0.02
# ... and by more than thousands of slices round a channel.
ROUNDING = 1e-12
# What the sampling cannot reach is told from this part of the effect on.
UNREACHED = 0.01


@dataclass(frozen=True, slots=True)
class _Fluctuation:
    """One source with what is drawn of it."""

    noise: Noise
    name: str
    stream: int
    density: SpectralDensity | None
    plan: PathPlan | None = field(default=None)


@dataclass(frozen=True, slots=True)
class NoisyGate:
    """What noise does to a gate.

    Parameters
    ----------
    correction : ndarray of complex, shape (levels^2, levels^2)
        Channel before the clean one.
    effect : NoiseEffect
        In numbers.
    warnings : tuple of str
        What the reader must know.
    """

    correction: ComplexArray
    effect: NoiseEffect
    warnings: tuple[str, ...]


def noisy_gate(
    drive: QubitDrive,
    envelope: Envelope,
    noises: Sequence[Noise],
    *,
    samples: int,
    seed: int,
    circuits: Mapping[int, CircuitNoise] = MappingProxyType({}),
    of_the_line: bool = False,
) -> NoisyGate:
    """Work out what the noise of a testbench does to its gate.

    Parameters
    ----------
    drive : QubitDrive
        Qubit, line, carrier and window.
    envelope : Envelope
        At the probe.
    noises : sequence of Noise
        The tables [[noise]], at least one.
    samples : int
        How many seeded samples are drawn of what fluctuates during the gate.
    seed : int
        Of these; the same seed gives the same numbers on any number of workers.
    circuits : mapping of int to CircuitNoise
        Place among `noises`, from 0 -> the circuit of a `NetlistNoise`, or of what stands for it.
    of_the_line : bool
        Whether to leave out the detuning's, which is the gate's own qubit's: all others reach every
        qubit of the line.

    Returns
    -------
    NoisyGate

    Raises
    ------
    InputError
        If the qubit is given by operators, a density does not cover the band that is needed, or
        its power is infinite.
    SimulationError
        If a noisy run of the circuit fails.
    """
    if isinstance(drive.qubit, OperatorSystem):
        raise InputError(
            'a system of operators has no [[noise]] tables: put its noise into "collapse" operators'
        )
    nominal = nominal_evolution(drive.qubit, drive, envelope)
    volts = rate_per_unit(drive.line, envelope.unit)
    for noise in noises:
        if isinstance(noise, LineNoise):
            _check_line(noise, drive, envelope.unit)
    found = [
        _Fluctuation(
            noise,
            noise.name or f"noise {number}",
            number,
            noise.density(drive.carrier_frequency),
        )
        for number, noise in enumerate(noises, start=1)
        if not (of_the_line and isinstance(noise, DetuningNoise))
    ]
    tables = [item for item in found if not isinstance(item.noise, NetlistNoise)]
    sources: dict[int, NoiseSource] = {}
    for item in tables:
        source = _source(nominal, item, volts)
        of_circuit = circuits.get(item.stream - 1)
        sources[item.stream] = source if of_circuit is None else labelled(source, of_circuit)
    drawn = _drawn_effect(nominal, tables, volts, samples, seed)
    first_order = sum(source.infidelity for source in sources.values())
    spread = SIGNIFICANT * drawn.error + NEGLIGIBLE * drawn.infidelity + drawn.infidelity**2
    spread = max(spread, ROUNDING)
    agree = drawn.method == "quadrature" or abs(drawn.infidelity - first_order) <= spread
    correction, variance = drawn.correction, drawn.error**2
    for item in found:
        if isinstance(item.noise, NetlistNoise):
            circuit = circuits[item.stream - 1]
            channel, source = injected_noise(nominal, circuit, item.noise, item.name, volts, seed)
            sources[item.stream] = source
            # Independent of the others, and small: the channels follow one another.
            correction = correction @ channel
            variance += source.standard_error**2
    injected = [item for item in sources.values() if item.method == INJECTION]
    effect = NoiseEffect(
        first_order=sum(source.infidelity for source in sources.values()),
        infidelity=drawn.infidelity + sum(item.infidelity for item in injected),
        standard_error=math.sqrt(variance),
        leakage=drawn.leakage + sum(item.leakage for item in injected),
        samples=drawn.samples,
        seed=seed,
        method=drawn.method if tables else INJECTION,
        agree=agree,
        sources=tuple(sources[item.stream] for item in found),
        noise_method=", ".join(dict.fromkeys(item.method for item in circuits.values())),
    )
    told = (
        text
        for place, circuit in circuits.items()
        for text in circuit_warnings(circuit, sources[place + 1])
    )
    return NoisyGate(correction, effect, (*_warnings(drive.qubit, found, effect), *told))


def _check_line(noise: LineNoise, drive: QubitDrive, unit: str) -> None:
    if unit != "V":
        raise TestbenchError('[[noise]] with acts_on = "line" goes with a probe of a voltage')
    if abs(noise.attenuation - drive.line.attenuation) > 1e-6:
        raise TestbenchError(
            f'[[noise]] with acts_on = "line": its stages make {noise.attenuation:g} dB, and '
            f"[drive] says attenuation = {drive.line.attenuation:g} dB",
            hint="give every attenuator between probe and qubit with its temperature",
        )


@dataclass(frozen=True, slots=True)
class _Drawn:
    """What the tables do together, the circuit's own noise apart."""

    correction: ComplexArray
    infidelity: float
    error: float
    leakage: float
    samples: int
    method: str


def _drawn_effect(
    nominal: Nominal, items: Sequence[_Fluctuation], volts: float, samples: int, seed: int
) -> _Drawn:
    levels = nominal.qubit.levels
    if not items:
        return _Drawn(np.eye(levels**2, dtype=np.complex128), 0.0, 0.0, 0.0, 0, "quadrature")
    if all(item.density is None for item in items):
        average = _quadrature(nominal, items)
        return _Drawn(average, *_without_error(average, levels), 0, "quadrature")
    planned = [
        item
        if item.density is None
        else replace(item, plan=_in_table(item, lambda item=item: _plan(nominal, item.density)))
        for item in items
    ]
    correction, losses, leaks = _sampled(nominal, planned, volts, samples, seed)
    # Both samples of a pair lose almost the same, so that it is the pairs that are independent.
    pairs = losses[: samples // 2 * 2].reshape(-1, 2).mean(axis=1)
    error = float(pairs.std(ddof=1) / math.sqrt(pairs.size))
    return _Drawn(correction, float(losses.mean()), error, float(leaks.mean()), samples, "samples")


def _without_error(channel: ComplexArray, levels: int) -> tuple[float, float, float]:
    infidelity, leaked = channel_losses(channel, levels)
    return infidelity, 0.0, leaked


def _source(nominal: Nominal, item: _Fluctuation, volts: float) -> NoiseSource:
    """Give the effect of one source by itself, to first order or by quadrature."""
    kind = item.noise.acts_on
    if item.density is None:
        infidelity, leaked = channel_losses(_quadrature(nominal, [item]), nominal.qubit.levels)
        return NoiseSource(item.name, kind, "quadrature", infidelity, leaked)
    grid = _in_table(item, lambda: _grid(nominal, item.density))
    levels = _in_table(item, lambda: item.density.at(grid.frequencies))
    functions, operators = noise_filters(nominal, item.noise, volts, grid.frequencies)
    effects = [noise_infidelity(function, levels, grid.weights) for function in functions]
    infidelity = sum(effect.infidelity for effect in effects)
    leaked = sum(effect.leakage for effect in effects)
    frame = math.nan
    if isinstance(item.noise, PhaseNoise):
        drive = nominal.drive_hamiltonian(nominal.edge_rate)
        number = nominal.qubit.number()
        phase = phase_filter_functions([nominal.path], [drive], number, grid.frequencies)
        frame = noise_infidelity(phase.oscillator_frame, levels, grid.weights).infidelity
    high = float(grid.frequencies[-1])
    beyond = 0.0
    if item.density.high > high:
        # At most what white noise of the greatest density up to ten times the last frequency would
        # do above it; a tenth of the filter's tail lies beyond.
        above = np.geomspace(high, min(item.density.high, 10.0 * high), 50)
        last = float(item.density.at(above).max())
        for function, operator in zip(functions, operators, strict=True):
            whole = filter_area([nominal.path], [operator]).infidelity
            beyond += last * max(0.0, whole - float(grid.weights @ function.total))
    spectrum = noise_spectrum(item.density, levels, functions, grid)
    return NoiseSource(
        item.name,
        kind,
        "filter function",
        infidelity,
        leaked,
        frame,
        beyond,
        high,
        spectrum=spectrum,
    )


def _grid(nominal: Nominal, density: SpectralDensity | None) -> FrequencyGrid:
    assert density is not None
    low = density.low
    high = min(density.high, nominal.nyquist)
    return frequency_grid(low, high, nominal.duration, density.corners)


def _plan(nominal: Nominal, density: SpectralDensity | None) -> PathPlan:
    assert density is not None
    return plan_paths(density, nominal.rate.size, nominal.step)


def _quadrature(nominal: Nominal, items: Sequence[_Fluctuation]) -> ComplexArray:
    """Average over what is constant during the gate; the channel before the clean one."""
    kinds = (DetuningNoise, AmplitudeNoise, PhaseNoise)
    spreads = [
        math.sqrt(sum(item.noise.spread**2 for item in items if isinstance(item.noise, kind)))
        for kind in kinds
    ]

    def channels(points: FloatArray) -> ComplexArray:
        detuning, amplitude, phase = points.T
        factor = (1.0 + amplitude) * np.exp(1j * phase)
        rate = factor[:, None] * nominal.rate
        unitaries = propagate_batch(
            nominal.qubit, BatchDrive(nominal.step, rate, detuning[:, None])
        ).unitaries
        return superoperators(nominal.final.conj().T @ unitaries)

    return np.asarray(gaussian_average(channels, spreads, tolerance=QUADRATURE).value)


def _sampled(
    nominal: Nominal, items: Sequence[_Fluctuation], volts: float, samples: int, seed: int
) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Draw samples; give their mean channel, and the losses and leakage of each."""
    d = nominal.qubit.levels
    total = np.zeros((d * d, d * d), dtype=np.complex128)
    losses, leaks = np.empty(samples), np.empty(samples)
    for first in range(0, samples, CHUNK):
        count = min(CHUNK, samples - first)
        drive = _drawn(nominal, items, volts, seed, first, count)
        unitaries = nominal.final.conj().T @ propagate_batch(nominal.qubit, drive).unitaries
        total += superoperators(unitaries).sum(axis=0)
        lost, leaked = unitary_losses(unitaries)
        losses[first : first + count] = lost
        leaks[first : first + count] = leaked
    return total / samples, losses, leaks


def _drawn(
    nominal: Nominal,
    items: Sequence[_Fluctuation],
    volts: float,
    seed: int,
    first: int,
    count: int,
) -> BatchDrive:
    shape = (count, nominal.rate.size)
    detuning, factor = np.zeros(shape), np.ones(shape)
    phase, added = np.zeros(shape), np.zeros(shape, dtype=np.complex128)
    for item in items:
        if isinstance(item.noise, VOLTAGES):
            paths = [
                _paths(item, seed, first, count, 2 * item.stream + quadrature)
                for quadrature in (0, 1)
            ]
            added += volts * (paths[0] + 1j * paths[1])
            continue
        drawn = _paths(item, seed, first, count, 2 * item.stream)
        if isinstance(item.noise, DetuningNoise):
            detuning += drawn
        elif isinstance(item.noise, AmplitudeNoise):
            factor += drawn
        else:
            phase += drawn
    rate = nominal.rate * factor * np.exp(1j * phase) + nominal.turn * added
    return BatchDrive(nominal.step, rate, detuning)


def _paths(item: _Fluctuation, seed: int, first: int, count: int, stream: int) -> FloatArray:
    """Draw samples in pairs, x and -x: their mean is no drift that would turn the qubit.

    A mean of the samples other than zero would add to the coherent error of the gate, which it
    multiplies, and that is much more than what the noise itself costs.
    """
    start, pairs = first // 2, (first + count + 1) // 2 - first // 2
    if item.plan is not None:
        drawn = sample_paths(item.plan, seed, start, pairs, stream=stream, offset=True)
    else:
        draws = [
            generator(seed, stream, number).standard_normal()
            for number in range(start, start + pairs)
        ]
        drawn = item.noise.spread * np.array(draws)[:, None]
    return np.stack([drawn, -drawn], axis=1).reshape(2 * pairs, -1)[:count]


def _in_table(item: _Fluctuation, work):  # type: ignore[no-untyped-def]
    """Name the table in the error of a density that does not do."""
    try:
        return work()
    except InputError as error:
        raise TestbenchError(
            f"table [[noise]] number {item.stream}, '{item.name}': {error.message}",
            hint=error.hint,
        ) from None


def _warnings(qubit: Qubit, items: Sequence[_Fluctuation], effect: NoiseEffect) -> tuple[str, ...]:
    found = []
    if not effect.agree:
        found.append(
            f"noise: {effect.samples} samples give an infidelity of {effect.infidelity:.3g} "
            f"+- {effect.standard_error:.2g}, first order {effect.first_order:.3g}: they differ by "
            "more than the sampling error, so that the noise is not small"
        )
    for item, source in zip(items, effect.sources, strict=True):
        if source.left_out:
            more = f" and {len(source.left_out) - 1} more" * (len(source.left_out) > 1)
            found.append(f"noise '{item.name}' is without {source.left_out[0]}{more}")
        if item.density is not None and item.density.low > 0.0:
            found.append(
                f"noise '{item.name}': what is slower than its first point, below "
                f"{item.density.low:g} Hz, is not known and not counted"
            )
        if source.unreached > UNREACHED * source.infidelity:
            found.append(
                f"noise '{item.name}': above {source.highest_frequency:.3g} Hz, where the samples "
                f"end, it costs up to {source.unreached:.2g} more"
            )
        found += counting_warnings(qubit, item.name, item.noise, item.density)
    return tuple(found)
