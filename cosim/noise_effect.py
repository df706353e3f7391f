"""What the noise of a testbench does to its gate: filter functions, and seeded samples beside them.

Noise is small and slow beside the carrier, so that its effect is computed in the rotating wave on
the demodulated envelope, as a channel by which the clean one is preceded: V = U0^dag U of each
sample, averaged. The clean channel itself stays that of the full waveform.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.coupling import rate_per_unit, rotating_rate
from cosim.dsp.noise.bands import FrequencyGrid, frequency_grid
from cosim.dsp.noise.density import SpectralDensity
from cosim.dsp.noise.paths import PathPlan, generator, plan_paths, sample_paths
from cosim.errors import InputError, TestbenchError
from cosim.noises import AmplitudeNoise, DetuningNoise, Noise, PhaseNoise, ProbeNoise
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.filters import (
    FilterFunction,
    PathSegment,
    filter_area,
    filter_function,
    noise_infidelity,
    phase_filter_functions,
    phase_operator,
)
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.quasistatic import gaussian_average
from cosim.quantum.qubit import Qubit
from cosim.qubit_drive import QubitDrive
from cosim.side_results import NoiseEffect, NoiseSource
from cosim.waveform import ComplexArray, Envelope, FloatArray

# Samples of one batch: enough that the kernel's own cost is all, few enough to be small.
CHUNK = 256
# Change of the average on doubling the nodes of the quadrature over what is constant in a gate.
QUADRATURE = 1e-10
# Sampling and first order disagree when they differ by more than this many standard errors ...
SIGNIFICANT = 4.0
# ... and by more than this part, or by more than what second order makes of it.
NEGLIGIBLE = 0.02
# What the sampling cannot reach is told from this part of the effect on.
UNREACHED = 0.01


@dataclass(frozen=True, slots=True)
class _Nominal:
    """The clean evolution in the rotating wave, on slices of equal length."""

    qubit: Qubit
    step: float
    rate: ComplexArray  # (n,), rad/s in the middle of each slice
    turn: ComplexArray  # (n,), exp(2 pi i offset t) of the carrier in the qubit's frame
    edge_rate: ComplexArray  # (n + 1,), at the edges
    edge_turn: ComplexArray
    path: PathSegment
    final: ComplexArray  # (d, d)

    @property
    def duration(self) -> float:
        return self.step * self.rate.size

    @property
    def nyquist(self) -> float:
        return 0.5 / self.step

    def drive_hamiltonian(self, rate: ComplexArray) -> ComplexArray:
        """Give (rate a + rate^* a^dag)/2, shape (n, d, d), in rad/s."""
        a = self.qubit.annihilation()
        half = 0.5 * rate[:, None, None]
        return np.asarray(half * a + half.conj() * a.conj().T)


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
    drive: QubitDrive, envelope: Envelope, noises: Sequence[Noise], *, samples: int, seed: int
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

    Returns
    -------
    NoisyGate

    Raises
    ------
    InputError
        If the qubit is given by operators, a density does not cover the band that is needed, or
        its power is infinite.
    """
    if isinstance(drive.qubit, OperatorSystem):
        raise InputError(
            'a system of operators has no [[noise]] tables: put its noise into "collapse" operators'
        )
    nominal = _nominal(drive.qubit, drive, envelope)
    found = [
        _Fluctuation(
            noise,
            noise.name or f"noise {number}",
            number,
            noise.density(drive.carrier_frequency),
        )
        for number, noise in enumerate(noises, start=1)
    ]
    volts = rate_per_unit(drive.line, envelope.unit)
    sources = tuple(_source(nominal, item, volts) for item in found)
    first_order = sum(source.infidelity for source in sources)
    if all(item.density is None for item in found):
        average = _quadrature(nominal, found)
        infidelity, leaked = _losses(average, nominal.qubit.levels)
        effect = NoiseEffect(
            first_order, infidelity, 0.0, leaked, 0, seed, "quadrature", True, sources
        )
        return NoisyGate(average, effect, _warnings(drive.qubit, found, effect))
    planned = [
        item
        if item.density is None
        else replace(
            item,
            plan=_in_table(item, lambda item=item: _plan(nominal, item.density)),
        )
        for item in found
    ]
    correction, losses, leaks = _sampled(nominal, planned, volts, samples, seed)
    error = float(losses.std(ddof=1) / math.sqrt(samples))
    sampled = float(losses.mean())
    beyond = SIGNIFICANT * error + NEGLIGIBLE * sampled + sampled**2
    effect = NoiseEffect(
        first_order,
        sampled,
        error,
        float(leaks.mean()),
        samples,
        seed,
        "samples",
        abs(sampled - first_order) <= beyond,
        sources,
    )
    return NoisyGate(correction, effect, _warnings(drive.qubit, found, effect))


def _nominal(qubit: Qubit, drive: QubitDrive, envelope: Envelope) -> _Nominal:
    start, stop = drive.window
    offset = drive.carrier_frequency - qubit.frequency
    step = min(envelope.dt, 1.0 / (20.0 * abs(offset))) if offset else envelope.dt
    count = max(16, round((stop - start) / step))
    step = (stop - start) / count
    edges: FloatArray = start + step * np.arange(count + 1, dtype=np.float64)
    middles: FloatArray = edges[:-1] + 0.5 * step
    spline = CubicSpline(envelope.t, envelope.iq)
    rate = rotating_rate(spline(middles), middles, drive.line, envelope.unit, offset)
    edge_rate = rotating_rate(spline(edges), edges, drive.line, envelope.unit, offset)
    slices = propagate_batch(qubit, BatchDrive(step, rate[:, None])).unitaries
    path = np.empty((count + 1, qubit.levels, qubit.levels), dtype=np.complex128)
    path[0] = np.eye(qubit.levels)
    for k in range(count):
        path[k + 1] = slices[k] @ path[k]
    turns = [np.exp(2j * math.pi * offset * t) for t in (middles, edges)]
    segment = PathSegment(start, step, path)
    return _Nominal(qubit, step, rate, turns[0], edge_rate, turns[1], segment, path[-1])


def _source(nominal: _Nominal, item: _Fluctuation, volts: float) -> NoiseSource:
    """Give the effect of one source by itself, to first order or by quadrature."""
    kind = item.noise.acts_on
    if item.density is None:
        infidelity, leaked = _losses(_quadrature(nominal, [item]), nominal.qubit.levels)
        return NoiseSource(item.name, kind, "quadrature", infidelity, leaked)
    grid = _in_table(item, lambda: _grid(nominal, item.density))
    levels = _in_table(item, lambda: item.density.at(grid.frequencies))
    functions, operators = _filters(nominal, item, volts, grid.frequencies)
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
    if item.density.high == math.inf and item.density.variance(high, math.inf) > 0.0:
        # At most what white noise of the density at the last frequency would do above it.
        last = float(levels[-1])
        for function, operator in zip(functions, operators, strict=True):
            whole = filter_area([nominal.path], [operator]).infidelity
            beyond += last * max(0.0, whole - float(grid.weights @ function.total))
    return NoiseSource(item.name, kind, "filter function", infidelity, leaked, frame, beyond, high)


def _filters(
    nominal: _Nominal, item: _Fluctuation, volts: float, frequencies: FloatArray
) -> tuple[list[FilterFunction], list[ComplexArray]]:
    """Give the filter functions of a source, and the operators that it multiplies."""
    drive = nominal.drive_hamiltonian(nominal.edge_rate)
    number = nominal.qubit.number()
    if isinstance(item.noise, DetuningNoise):
        operators = [number]
    elif isinstance(item.noise, AmplitudeNoise):
        operators = [drive]
    elif isinstance(item.noise, PhaseNoise):
        operators = [phase_operator(number, drive)]
    else:
        # The two quadratures of an added voltage are independent.
        turn = volts * nominal.edge_turn
        operators = [nominal.drive_hamiltonian(turn), nominal.drive_hamiltonian(1j * turn)]
    found = [filter_function([nominal.path], [one], frequencies) for one in operators]
    return found, operators


def _grid(nominal: _Nominal, density: SpectralDensity | None) -> FrequencyGrid:
    assert density is not None
    low = density.low
    high = min(density.high, nominal.nyquist)
    return frequency_grid(low, high, nominal.duration, density.corners)


def _plan(nominal: _Nominal, density: SpectralDensity | None) -> PathPlan:
    assert density is not None
    return plan_paths(density, nominal.rate.size, nominal.step)


def _quadrature(nominal: _Nominal, items: Sequence[_Fluctuation]) -> ComplexArray:
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
        return _superoperators(nominal.final.conj().T @ unitaries)

    return np.asarray(gaussian_average(channels, spreads, tolerance=QUADRATURE).value)


def _sampled(
    nominal: _Nominal, items: Sequence[_Fluctuation], volts: float, samples: int, seed: int
) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Draw samples; give their mean channel, and the losses and leakage of each."""
    d = nominal.qubit.levels
    total = np.zeros((d * d, d * d), dtype=np.complex128)
    losses, leaks = np.empty(samples), np.empty(samples)
    for first in range(0, samples, CHUNK):
        count = min(CHUNK, samples - first)
        drive = _drawn(nominal, items, volts, seed, first, count)
        unitaries = nominal.final.conj().T @ propagate_batch(nominal.qubit, drive).unitaries
        total += _superoperators(unitaries).sum(axis=0)
        block = unitaries[:, :2, :2]
        kept = np.einsum("bij,bij->b", block, block.conj()).real
        trace = np.abs(np.einsum("bii->b", block)) ** 2
        losses[first : first + count] = 1.0 - (trace + kept) / 6.0
        leaks[first : first + count] = 1.0 - kept / 2.0
    return total / samples, losses, leaks


def _drawn(
    nominal: _Nominal,
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
        if isinstance(item.noise, ProbeNoise):
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
    if item.plan is not None:
        return sample_paths(item.plan, seed, first, count, stream=stream, offset=True)
    draws = [
        generator(seed, stream, number).standard_normal() for number in range(first, first + count)
    ]
    return item.noise.spread * np.array(draws)[:, None]


def _superoperators(unitaries: ComplexArray) -> ComplexArray:
    """Give conj(U) kron U of each, column-stacking, shape (batch, d^2, d^2)."""
    batch, d, _ = unitaries.shape
    product = np.einsum("bij,bkl->bikjl", unitaries.conj(), unitaries)
    return np.asarray(product.reshape(batch, d * d, d * d))


def _losses(channel: ComplexArray, levels: int) -> tuple[float, float]:
    """Give infidelity against the identity and leakage of a channel, on the two lowest levels."""
    d = levels
    blocks = channel.reshape(d, d, d, d)  # column n, row m of E in that order of columns
    # E[j' d + i', j d + i] maps |i><j| to |i'><j'|.
    trace = sum(blocks[j, i, j, i] for i in range(2) for j in range(2)).real
    kept = sum(blocks[k, k, i, i] for i in range(2) for k in range(2)).real
    # Rounding may leave something below zero of nothing.
    return max(0.0, float(1.0 - (trace + kept) / 6.0)), max(0.0, float(1.0 - kept / 2.0))


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
        if isinstance(item.noise, DetuningNoise) and item.density is not None:
            # White noise of the detuning dephases at S/4, which T2 may count already.
            low = max(item.density.low, 1e-3)
            rate = float(item.density.at([low])[0]) / 4.0 if low < item.density.high else 0.0
            if qubit.gamma_phi > 0.0 and rate > 0.1 * qubit.gamma_phi:
                found.append(
                    f"noise '{item.name}' alone dephases at {rate:.3g} 1/s at low frequency, and "
                    f"the testbench's t2 at {qubit.gamma_phi:.3g} 1/s: the same noise may be "
                    "counted twice"
                )
    return tuple(found)
