"""A circuit whose devices make noise: how that is worked out, and its noisy runs."""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from cosim.added_noise import INJECTION, AddedNoise, choose_method, temperatures_of
from cosim.capture import Plan
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.deck import Deck
from cosim.circuit.generators import check_names
from cosim.circuit.injection import InjectedNoise, device_noise
from cosim.circuit.inventory import noisy_devices
from cosim.circuit.model_noise import with_models
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.noise_shares import DeviceShares, device_shares
from cosim.dsp.demodulation import demodulate
from cosim.errors import SimulationError, TestbenchError
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import Envelope, Waveform

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
    settings = noise_settings(noise, plan.deck)
    clean = clean_run(plan.deck, plan.request, [probe.text])
    window = bench.gate.window or (0.0, float(clean.result.time[-1]))
    middle = 0.5 * (window[0] + window[1])
    instant = middle if noise.instant is None else noise.instant
    # From the gate to the rest that is judged, or the other way round.
    spans = [span for span in (window, bench.gate.idle) if span is not None]
    stretch = min(start for start, _ in spans), max(stop for _, stop in spans)
    choice = choose_method(clean, noise, carrier_frequency, stretch, instant)
    warnings = tuple[str, ...]()
    if choice.method == INJECTION:
        settings, warnings = modelled_settings(clean, settings, noise, carrier_frequency, middle)
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


def noise_settings(noise: NetlistNoise, deck: Deck) -> NoiseSettings:
    """Read how a table wants the noise of devices to be made.

    Parameters
    ----------
    noise : NetlistNoise
        The table [[noise]].
    deck : Deck
        The deck of the run.

    Returns
    -------
    NoiseSettings

    Raises
    ------
    UnknownNameError
        If an excess factor is given for what is no device that makes noise and no model of one.
    """
    settings = NoiseSettings(temperatures_of(noise), gammas=noise.gammas)
    if noise.gamma is not None:
        settings = replace(settings, gamma=noise.gamma)
    check_names(noisy_devices(deck), settings)
    return settings


def modelled_settings(
    clean: CleanRun,
    settings: NoiseSettings,
    noise: NetlistNoise,
    carrier_frequency: float,
    middle: float,
) -> tuple[NoiseSettings, tuple[str, ...]]:
    """Ask the models of channels that no formula here stands for, along a period of the carrier.

    Parameters
    ----------
    clean : CleanRun
        The run without noise.
    settings : NoiseSettings
        From `noise_settings`.
    noise : NetlistNoise
        The table [[noise]]: an excess factor that is given goes before what models say.
    carrier_frequency : float
        In Hz.
    middle : float
        Time in s in the middle of what counts.

    Returns
    -------
    NoiseSettings
        With what the models say.
    tuple of str
        A warning where they could not be asked.
    """
    instants = [middle + k / (INSTANTS * carrier_frequency) for k in range(INSTANTS)]
    try:
        return with_models(clean, settings, instants, gammas=noise.gamma is None), ()
    except SimulationError:
        # Its message may quote a deck whose lines are not to be kept with a result.
        text = (
            "the simulator finds no operating point with the sources frozen, so that the models of "
            "channels are not asked for their noise: their excess factors are taken for 2/3"
        )
        return settings, (text,)
