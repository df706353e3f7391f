"""Gates of a testbench with some of its numbers changed; the circuit runs only where it has to."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

from cosim.adjust import Pulse
from cosim.calibration.table import needs_circuit
from cosim.capture import Capture, Plan, capture_probe, make_plan
from cosim.captures import capture_probes
from cosim.circuit.deck import Deck
from cosim.dsp.demodulation import demodulate
from cosim.errors import CosimError
from cosim.gate import Shots, run_gate
from cosim.imported import import_waveform
from cosim.keys import NumberKey, with_number
from cosim.line import through_line
from cosim.noise_setup import line_of_noise
from cosim.quantum.operators import OperatorSystem
from cosim.qubit_drive import QubitDrive, couple
from cosim.result import GateResult
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from cosim.waveform import ComplexArray

Changes = tuple[tuple[NumberKey, float], ...]


@dataclass(frozen=True, slots=True)
class ChangedGate:
    """A gate with some numbers changed.

    Parameters
    ----------
    bench : Testbench
        With them.
    drive : QubitDrive
        Qubit, carrier, line and window.
    pulse : Pulse
        On the qubit, with what noise does before it.
    """

    bench: Testbench
    drive: QubitDrive
    pulse: Pulse


@dataclass
class ChangedGates:
    """Runs a gate with some of its numbers changed.

    What is no part of the metric is left out: neighbours, rest, the second solver, and, since
    each run of it takes many of the circuit, the netlist's own noise.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck as read.
    system : OperatorSystem or None
        A user's own system.
    report : callable or None
        Called with the number of a simulated waveform, from 1, and how many are under way.
    before : ndarray of complex, shape (levels^2, levels^2), or None
        What noise does, for all gates alike, where the testbench's own has been taken out of it.
    netlist_runs : int
        Waveforms simulated until now.
    """

    bench: Testbench
    deck: Deck | None
    system: OperatorSystem | None = None
    report: Callable[[int, int], None] | None = None
    before: ComplexArray | None = None
    netlist_runs: int = 0
    _shots: dict[Changes, tuple[Plan | None, Capture | CosimError]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.bench = replace(
            self.bench,
            spectator=(),
            noise=tuple(item for item in self.bench.noise if not isinstance(item, NetlistNoise)),
            gate=replace(self.bench.gate, idle=None),
            accuracy=replace(self.bench.accuracy, floor=False, reference=False),
        )

    def run(self, variants: Sequence[Changes]) -> list[ChangedGate | CosimError]:
        """Run with some numbers changed; decks that differ in parameters only share a load.

        Parameters
        ----------
        variants : sequence of tuples
            Each names the numbers that are changed, and their values in SI units; () is the
            testbench as it stands.

        Returns
        -------
        list of ChangedGate or CosimError
            One each: why a run failed, or why a value is impossible.
        """
        benches = [self._bench(changes) for changes in variants]
        self._simulate(variants, benches)
        found: list[ChangedGate | CosimError] = []
        for changes, bench in zip(variants, benches, strict=True):
            try:
                found.append(bench if isinstance(bench, CosimError) else self._gate(changes, bench))
            except CosimError as error:
                found.append(error)
        return found

    def tighter(self) -> ChangedGate | None:
        """Run the testbench as it stands with ten times smaller tolerances, on the same time steps.

        Returns
        -------
        ChangedGate or None
            None where there is no circuit.

        Raises
        ------
        SimulationError
            If it cannot be simulated.
        """
        plan, _ = self.shot()
        if plan is None:
            return None
        request = replace(plan.request, tolerances=plan.request.tolerances.tighter())
        shot = capture_probe(replace(plan, request=request))
        self.netlist_runs += 1
        return self._coupled(self.bench, plan, shot)

    def shot(self) -> tuple[Plan | None, Capture]:
        """Give the plan and the waveform of the testbench as it stands.

        Returns
        -------
        tuple of Plan or None, and Capture

        Raises
        ------
        CosimError
            If it cannot be simulated.
        """
        self._simulate([()], [self.bench])
        plan, shot = self._shots[()]
        if isinstance(shot, CosimError):
            raise shot
        return plan, shot

    def result(self, floor: bool) -> GateResult:
        """Give the whole result of the testbench as it stands.

        Parameters
        ----------
        floor : bool
            Run once more at half the step, for the error bars.

        Returns
        -------
        GateResult

        Raises
        ------
        CosimError
            If it cannot be simulated.
        """
        plan, shot = self.shot()
        half = None
        if floor and plan is not None:
            half = capture_probe(plan.half_step())
            self.netlist_runs += 1
        bench = replace(self.bench, accuracy=replace(self.bench.accuracy, floor=floor))
        shots = None if plan is None else Shots(plan, shot, half)
        return run_gate(bench, system=self.system, shots=shots)

    def _bench(self, changes: Changes) -> Testbench | CosimError:
        bench = self.bench
        try:
            for key, value in changes:
                bench = with_number(bench, key, value)
        except CosimError as error:
            return error
        return bench

    def _simulate(
        self, variants: Sequence[Changes], benches: Sequence[Testbench | CosimError]
    ) -> None:
        """Simulate what has not been yet, in one family."""
        missing: dict[Changes, Plan] = {}
        for changes, bench in zip(variants, benches, strict=True):
            key = _simulated(changes)
            if isinstance(bench, CosimError) or key in self._shots or key in missing:
                continue
            try:
                if bench.netlist is None:
                    self._shots[key] = None, import_waveform(bench)
                else:
                    missing[key] = make_plan(bench, self.deck)
            except CosimError as error:
                self._shots[key] = None, error
        shots = capture_probes(list(missing.values()))
        for (key, plan), shot in zip(missing.items(), shots, strict=True):
            self._shots[key] = plan, shot
            self.netlist_runs += 1
            if self.report is not None:
                self.report(self.netlist_runs, len(missing))

    def _gate(self, changes: Changes, bench: Testbench) -> ChangedGate:
        plan, shot = self._shots[_simulated(changes)]
        if isinstance(shot, CosimError):
            raise shot
        return self._coupled(bench, plan, shot)

    def _coupled(self, bench: Testbench, plan: Plan | None, shot: Capture) -> ChangedGate:
        shot = through_line(bench, shot)
        drive = couple(bench, shot, self.system)
        pulse = replace(drive.pulse(shot.waveform), before=self.before)
        if bench.noise:
            envelope = demodulate(shot.waveform, drive.carrier_frequency)
            noisy = line_of_noise(bench, plan, drive.carrier_frequency, envelope).on(drive)
            if noisy is not None:
                pulse = replace(pulse, before=noisy.correction)
        return ChangedGate(bench, drive, pulse)


def _simulated(changes: Changes) -> Changes:
    """Give those of the changes that the waveform depends on."""
    return tuple((key, value) for key, value in changes if needs_circuit(key))
