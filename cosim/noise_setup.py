"""The noise of a testbench, made ready once for the gate, the others of the line, and rest."""

from collections.abc import Mapping
from dataclasses import dataclass

from cosim.capture import Plan
from cosim.noise_effect import NoisyGate, noisy_gate
from cosim.noises import DetuningNoise, Noise
from cosim.noisy_circuit import CircuitNoise, circuit_noise
from cosim.qubit_drive import QubitDrive
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import Envelope


@dataclass(frozen=True, slots=True)
class LineOfNoise:
    """The clean envelope of a line with the noise on it.

    Parameters
    ----------
    envelope : Envelope
        At the probe, over the whole run.
    noises : tuple of Noise
        The tables [[noise]]; a circuit's small-signal noise stands in as what it adds at the probe.
    samples : int
        Seeded samples of what fluctuates during a gate.
    seed : int
        Their seed: all qubits of the line see the same noise.
    circuits : mapping of int to CircuitNoise
        Place among `noises`, from 0 -> the circuit of a `NetlistNoise`, or of what stands for it.
    """

    envelope: Envelope
    noises: tuple[Noise, ...]
    samples: int
    seed: int
    circuits: Mapping[int, CircuitNoise]

    def on(self, drive: QubitDrive) -> NoisyGate | None:
        """Work out what the noise does to the gate's own qubit within some window.

        Parameters
        ----------
        drive : QubitDrive
            Qubit, line, carrier and window.

        Returns
        -------
        NoisyGate or None
            None without noise.

        Raises
        ------
        InputError
            As `noisy_gate`.
        SimulationError
            If a noisy run of the circuit fails.
        """
        return self._effect(drive, False) if self.noises else None

    def on_another(self, drive: QubitDrive) -> NoisyGate | None:
        """Work out what the noise does to another qubit: the detuning's is not its own.

        Parameters
        ----------
        drive : QubitDrive
            The other qubit, its line, carrier and window.

        Returns
        -------
        NoisyGate or None
            None where no noise reaches it.

        Raises
        ------
        InputError
            As `noisy_gate`.
        SimulationError
            If a noisy run of the circuit fails.
        """
        if all(isinstance(noise, DetuningNoise) for noise in self.noises):
            return None
        return self._effect(drive, True)

    def _effect(self, drive: QubitDrive, of_the_line: bool) -> NoisyGate:
        return noisy_gate(
            drive,
            self.envelope,
            self.noises,
            samples=self.samples,
            seed=self.seed,
            circuits=self.circuits,
            of_the_line=of_the_line,
        )


def line_of_noise(
    bench: Testbench, plan: Plan | None, carrier_frequency: float, envelope: Envelope
) -> LineOfNoise:
    """Make the noise of a testbench ready.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    plan : Plan or None
        Of its run; None when it imports a waveform.
    carrier_frequency : float
        In Hz.
    envelope : Envelope
        At the probe.

    Returns
    -------
    LineOfNoise

    Raises
    ------
    TestbenchError
        If the circuit's own noise is asked for and there is no circuit, or none of that method.
    SimulationError, DeckError
        If its clean run fails, or its small-signal noise.
    """
    circuits = {
        place: circuit_noise(bench, plan, noise, carrier_frequency)
        for place, noise in enumerate(bench.noise)
        if isinstance(noise, NetlistNoise)
    }
    noises = list(bench.noise)
    for place, circuit in circuits.items():
        if circuit.added is not None:
            noises[place] = circuit.added.table
    accuracy = bench.accuracy
    return LineOfNoise(
        envelope, tuple(noises), accuracy.noise_samples, accuracy.noise_seed, circuits
    )
