"""The noise of a circuit's own devices at the probe, as envelopes that are added to the drive's."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.capture import Plan
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.injection import InjectedNoise, device_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_settings import NoiseSettings
from cosim.dsp.demodulation import demodulate
from cosim.errors import TestbenchError
from cosim.noise_frame import Nominal, superoperators, unitary_losses
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.side_results import NoiseSource
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray, Envelope, Waveform

INJECTION = "injection"


@dataclass(frozen=True, slots=True)
class CircuitNoise:
    """A circuit with its noisy devices, run once without noise.

    Parameters
    ----------
    clean : CleanRun
        That run.
    settings : NoiseSettings
        Temperatures and the rest.
    probe : str
        The probe.
    unit : str
        Its unit.
    carrier_frequency : float
        In Hz.
    made : dict
        Seed -> its noise: a run of the simulator serves the gate's qubit, the others and rest.
    """

    clean: CleanRun
    settings: NoiseSettings
    probe: str
    unit: str
    carrier_frequency: float
    made: dict[int, tuple[Envelope, InjectedNoise]] = field(default_factory=dict, compare=False)

    def envelope(self, seed: int) -> tuple[Envelope, InjectedNoise]:
        """Run the circuit with the noise of one seed.

        Parameters
        ----------
        seed : int
            Not negative.

        Returns
        -------
        Envelope
            Of the noise, around the carrier.
        InjectedNoise
            The noise itself, and what made it.

        Raises
        ------
        SimulationError, DeckError
            If the run fails.
        """
        if seed not in self.made:
            noise = device_noise(self.clean, seed, self.settings)
            self.made[seed] = self._demodulated(noise), noise
        return self.made[seed]

    def devices(self, seed: int) -> Iterator[tuple[str, Envelope]]:
        """Run the circuit with the noise of one device after the other.

        Parameters
        ----------
        seed : int
            Not negative.

        Yields
        ------
        tuple of (str, Envelope)
            Device in ngspice's name, and the envelope of its noise.

        Raises
        ------
        SimulationError, DeckError
            If a run fails.
        """
        for device in self.clean.inventory.devices:
            noise = device_noise(self.clean, seed, self.settings, devices=(device.name,))
            yield device.name, self._demodulated(noise)

    def _demodulated(self, noise: InjectedNoise) -> Envelope:
        wave = Waveform(noise.time, noise.samples[self.probe], unit=self.unit)
        return demodulate(wave, self.carrier_frequency)


def circuit_noise(
    bench: Testbench, plan: Plan | None, noise: NetlistNoise, carrier_frequency: float
) -> CircuitNoise:
    """Run a circuit without noise and look at its devices.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    plan : Plan or None
        Of its run; None when it imports a waveform.
    noise : NetlistNoise
        The table [[noise]].
    carrier_frequency : float
        In Hz.

    Returns
    -------
    CircuitNoise

    Raises
    ------
    TestbenchError
        If there is no netlist, a line of S-parameters stands behind the probe, or it is a baseband
        pair.
    SimulationError, DeckError
        If the run fails.
    """
    if plan is None:
        raise TestbenchError('[[noise]] with from = "netlist" needs a [netlist], not a [waveform]')
    if plan.baseband or bench.drive.line is not None:
        raise TestbenchError(
            '[[noise]] with from = "netlist" goes with one probe at the carrier, and with no line '
            "of S-parameters behind it"
        )
    (probe,) = plan.probes
    settings = NoiseSettings(
        temperatures=NoiseTemperatures(
            noise.resistor_temperature, noise.channel_temperature, noise.series_temperature
        ),
        gamma=noise.gamma,
    )
    clean = clean_run(plan.deck, plan.request, [probe.text])
    return CircuitNoise(clean, settings, probe.text, probe.unit, carrier_frequency)


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
    devices: dict[str, float] = {}
    if noise.by_device:
        names, alone = zip(*circuit.devices(seed), strict=True)
        each, _ = unitary_losses(_with_added(nominal, alone, volts))
        devices = dict(zip(names, each.tolist(), strict=True))
    source = NoiseSource(
        name=name,
        acts_on=noise.acts_on,
        method=INJECTION,
        infidelity=float(losses.mean()),
        leakage=float(leaks.mean()),
        highest_frequency=found[0][1].highest_frequency,
        standard_error=float(losses.std(ddof=1) / math.sqrt(len(seeds))),
        devices=dict(sorted(devices.items(), key=lambda pair: -pair[1])),
        left_out=found[0][1].left_out,
    )
    return superoperators(unitaries).mean(axis=0), source


def _with_added(nominal: Nominal, envelopes: Sequence[Envelope], volts: float) -> ComplexArray:
    """Give V = U0^dag U for each envelope added to the drive, shape (envelopes, d, d)."""
    added = np.array([CubicSpline(item.t, item.iq)(nominal.middles) for item in envelopes])
    rate = nominal.rate + volts * nominal.turn * added
    unitaries = propagate_batch(nominal.qubit, BatchDrive(nominal.step, rate)).unitaries
    return np.asarray(nominal.final.conj().T @ unitaries)
