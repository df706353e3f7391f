"""The noise of a circuit's own devices at the probe, as envelopes that are added to the drive's."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.interpolate import CubicSpline

from cosim.added_noise import INJECTION, AddedNoise, choose_method, temperatures_of
from cosim.capture import Plan
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.generators import check_names
from cosim.circuit.injection import InjectedNoise, device_noise
from cosim.circuit.model_noise import with_models
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.noise_shares import DeviceShares, device_shares
from cosim.dsp.demodulation import demodulate
from cosim.errors import SimulationError, TestbenchError
from cosim.noise_frame import Nominal, superoperators, unitary_losses
from cosim.quantum.batch import propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.side_results import NoiseSource
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# What the devices explain of the noise together; less means that the projection does not hold.
EXPLAINED = 0.7
# Of a period of the carrier, at which models are asked for the noise of their channels.
INSTANTS = 8


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
    method : "injection", "stationary" or "frozen"
        How its noise is worked out.
    reason : str
        Why, where the testbench left it open.
    added : AddedNoise or None
        The voltage that it adds, of the other two methods.
    warnings : tuple of str
        What the reader must know, without the noise's name.
    made : dict
        Seed -> its noise: a run of the simulator serves the gate's qubit, the others and rest.
    single : dict
        Device and seed -> the noise of the device alone.
    told : dict
        Stretch of the run -> the devices' shares of the noise there.
    """

    clean: CleanRun
    settings: NoiseSettings
    probe: str
    unit: str
    carrier_frequency: float
    method: str = INJECTION
    reason: str = ""
    added: AddedNoise | None = None
    warnings: tuple[str, ...] = ()
    made: dict[int, tuple[Envelope, InjectedNoise]] = field(default_factory=dict, compare=False)
    single: dict[tuple[str, int], Envelope] = field(default_factory=dict, compare=False)
    told: dict[tuple[float, float], DeviceShares] = field(default_factory=dict, compare=False)

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

    def shares(self, seeds: Sequence[int], span: tuple[float, float]) -> DeviceShares:
        """Tell which device makes how much of the noise, from the runs of all devices.

        Parameters
        ----------
        seeds : sequence of int
            Of the noisy runs.
        span : tuple of two floats
            Stretch of the run in s.

        Returns
        -------
        DeviceShares

        Raises
        ------
        SimulationError, DeckError
            If a run fails.
        """
        if span not in self.told:
            (probe,) = self.clean.probes
            runs = [self.envelope(seed)[1] for seed in seeds]
            where = (probe, self.carrier_frequency, span)
            self.told[span] = device_shares(self.clean, self.settings, runs, *where)
        return self.told[span]

    def alone(self, device: str, seed: int) -> Envelope:
        """Run the circuit with the noise of one device.

        Parameters
        ----------
        device : str
            In ngspice's name.
        seed : int
            Not negative.

        Returns
        -------
        Envelope
            Of its noise, around the carrier.

        Raises
        ------
        SimulationError, DeckError
            If the run fails.
        """
        if (device, seed) not in self.single:
            noise = device_noise(self.clean, seed, self.settings, devices=(device,))
            self.single[device, seed] = self._demodulated(noise)
        return self.single[device, seed]

    def _demodulated(self, noise: InjectedNoise) -> Envelope:
        wave = Waveform(noise.time, noise.samples[self.probe], unit=self.unit)
        return demodulate(wave, self.carrier_frequency)


def circuit_noise(
    bench: Testbench, plan: Plan | None, noise: NetlistNoise, carrier_frequency: float
) -> CircuitNoise:
    """Run a circuit without noise, look at its devices and choose how their noise is worked out.

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
        If there is no netlist, a line of S-parameters stands behind the probe, it is a baseband
        pair, or the circuit has no operating point and the table wants the noise around it.
    SimulationError, DeckError, ProbeError
        If the run, or the small-signal noise that is asked for, fails.
    UnknownNameError
        If an excess factor is given for what is no device and no model.
    """
    if plan is None:
        raise TestbenchError('[[noise]] with from = "netlist" needs a [netlist], not a [waveform]')
    if plan.baseband or bench.drive.line is not None:
        raise TestbenchError(
            '[[noise]] with from = "netlist" goes with one probe at the carrier, and with no line '
            "of S-parameters behind it"
        )
    (probe,) = plan.probes
    settings = NoiseSettings(temperatures_of(noise), gammas=noise.gammas)
    if noise.gamma is not None:
        settings = replace(settings, gamma=noise.gamma)
    clean = clean_run(plan.deck, plan.request, [probe.text])
    check_names(clean.inventory, settings)
    span = _stretch(bench, clean)
    choice = choose_method(clean, noise, carrier_frequency, span)
    warnings = tuple[str, ...]()
    if choice.method == INJECTION:
        settings, warnings = _modelled(clean, settings, noise, carrier_frequency, span)
    return CircuitNoise(
        clean,
        settings,
        probe.text,
        probe.unit,
        carrier_frequency,
        choice.method,
        choice.reason,
        choice.added,
        warnings,
    )


def _modelled(
    clean: CleanRun,
    settings: NoiseSettings,
    noise: NetlistNoise,
    carrier_frequency: float,
    span: tuple[float, float],
) -> tuple[NoiseSettings, tuple[str, ...]]:
    """Ask the models of channels that no formula here stands for, along a period of the carrier."""
    middle = 0.5 * (span[0] + span[1])
    instants = [middle + k / (INSTANTS * carrier_frequency) for k in range(INSTANTS)]
    try:
        return with_models(clean, settings, instants, gammas=noise.gamma is None), ()
    except SimulationError as error:
        text = f"the models of its channels could not be asked for their noise: {error.message}"
        return settings, (text,)


def _stretch(bench: Testbench, clean: CleanRun) -> tuple[float, float]:
    """Give the stretch of the run that counts: from the gate to the rest that is judged."""
    whole = (0.0, float(clean.result.time[-1]))
    spans = [span for span in (bench.gate.window or whole, bench.gate.idle) if span is not None]
    return min(start for start, _ in spans), max(stop for _, stop in spans)


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
