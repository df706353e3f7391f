"""What the noise of a circuit's own devices does to a gate, and which device how much."""

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.added_noise import INJECTION
from cosim.noise_frame import Nominal, superoperators, unitary_losses
from cosim.noisy_circuit import CircuitNoise
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.side_results import NoiseSource
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray, Envelope, FloatArray

# What the devices explain of the noise together; less means that the projection does not hold.
EXPLAINED = 0.7


def injected_noise(
    nominal: Nominal,
    circuit: CircuitNoise,
    noise: NetlistNoise,
    name: str,
    volts: float,
    seed: int,
) -> tuple[ComplexArray, NoiseSource]:
    """Work out what a circuit's own noise does to the gate, from a run of it for each seed.

    Parameters
    ----------
    nominal : Nominal
        The clean evolution.
    circuit : CircuitNoise
        The circuit.
    noise : NetlistNoise
        The table [[noise]].
    name : str
        Its name.
    volts : float
        Drive rate in rad/s per unit at the probe.
    seed : int
        The first of the seeds.

    Returns
    -------
    ndarray of complex, shape (levels^2, levels^2)
        Channel before the clean one.
    NoiseSource
        In numbers.

    Raises
    ------
    SimulationError, DeckError
        If a run fails.
    """
    seeds = range(seed, seed + noise.seeds)
    found = [circuit.envelope(number) for number in seeds]
    unitaries = _with_added(nominal, [envelope for envelope, _ in found], volts)
    losses, leaks = unitary_losses(unitaries)
    infidelity, error_of_runs = _mean(losses)
    devices = _each if noise.by_device else _told
    parts, error, explain = devices(nominal, circuit, seeds, volts, infidelity)
    source = NoiseSource(
        name=name,
        acts_on=noise.acts_on,
        method=INJECTION,
        infidelity=infidelity,
        leakage=float(leaks.mean()),
        highest_frequency=found[0][1].highest_frequency,
        flips=float((np.abs(unitaries[:, [0, 1], [1, 0]]) ** 2).mean()),
        standard_error=error_of_runs,
        devices=parts,
        devices_error=error,
        devices_explain=explain,
        left_out=found[0][1].left_out,
        reason=circuit.reason,
    )
    return superoperators(unitaries).mean(axis=0), source


_Parts = tuple[dict[str, float], float, float]


def _told(
    nominal: Nominal, circuit: CircuitNoise, seeds: Sequence[int], volts: float, infidelity: float
) -> _Parts:
    """Give each device's part of the infidelity, the error, and what the parts explain."""
    del volts
    start = float(nominal.middles[0]) - 0.5 * nominal.step
    shares = circuit.shares(seeds, (start, start + nominal.duration))
    parts = {device: infidelity * part for device, part in shares.parts.items()}
    return parts, infidelity * shares.deviation, shares.explained


def _each(
    nominal: Nominal, circuit: CircuitNoise, seeds: Sequence[int], volts: float, infidelity: float
) -> _Parts:
    """Give what each device costs alone, in runs of its own."""
    found, errors = {}, [0.0]
    for device in circuit.clean.inventory.devices:
        envelopes = [circuit.alone(device.name, seed) for seed in seeds]
        losses, _ = unitary_losses(_with_added(nominal, envelopes, volts))
        found[device.name], error = _mean(losses)
        errors.append(error)
    parts = dict(sorted(found.items(), key=lambda pair: -pair[1]))
    return parts, max(errors), sum(parts.values()) / infidelity if infidelity > 0.0 else 1.0


def labelled(source: NoiseSource, circuit: CircuitNoise) -> NoiseSource:
    """Say of a voltage added at the probe that it is a circuit's noise, and whose.

    Parameters
    ----------
    source : NoiseSource
        What the added voltage does.
    circuit : CircuitNoise
        The circuit that it stands for.

    Returns
    -------
    NoiseSource
    """
    if circuit.added is None:
        return source
    parts = circuit.added.parts.items()
    return replace(
        source,
        method=circuit.method,
        devices={device: source.infidelity * part for device, part in parts},
        left_out=circuit.added.left_out,
        reason=circuit.reason,
    )


def circuit_warnings(circuit: CircuitNoise, source: NoiseSource) -> tuple[str, ...]:
    """Say what the reader must know of a circuit's noise.

    Parameters
    ----------
    circuit : CircuitNoise
        The circuit.
    source : NoiseSource
        What its noise does.

    Returns
    -------
    tuple of str
    """
    if circuit.added is not None:
        return tuple(f"noise '{source.name}': {text}" for text in circuit.added.warnings)
    found = [f"noise '{source.name}': {text}" for text in circuit.warnings]
    if source.devices_error == math.inf:
        found.append(
            f"noise '{source.name}': in so short a gate so few noisy runs do not tell its devices "
            "apart; more 'seeds' do, or by_device = true, which takes runs of each"
        )
    elif source.devices_explain < EXPLAINED:
        found.append(
            f"noise '{source.name}': the parts of its devices are rough, they explain "
            f"{source.devices_explain:.0%} of its power; by_device = true takes runs of each"
        )
    return tuple(found)


def _mean(losses: FloatArray) -> tuple[float, float]:
    """Give the mean over pairs of opposite sign, which are independent, and its error."""
    pairs = losses.reshape(2, -1).mean(axis=0)
    return float(pairs.mean()), float(pairs.std(ddof=1) / math.sqrt(pairs.size))


def _with_added(nominal: Nominal, envelopes: Sequence[Envelope], volts: float) -> ComplexArray:
    """Give V = U0^dag U for each envelope added to the drive, then taken from it.

    Noise of either sign is as likely, and so the mean of few runs turns nothing by itself; shape
    (2 envelopes, d, d).
    """
    added = np.array([CubicSpline(item.t, item.iq)(nominal.middles) for item in envelopes])
    rate = nominal.rate + volts * nominal.turn * np.concatenate([added, -added])
    unitaries = propagate_batch(nominal.qubit, BatchDrive(nominal.step, rate)).unitaries
    return np.asarray(nominal.final.conj().T @ unitaries)
