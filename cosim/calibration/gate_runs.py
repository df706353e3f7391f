"""Runs of a gate at given values of the knobs; the circuit runs only where it has to."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.calibration.points import Point, Report, bench_at
from cosim.calibration.table import CalibrateTable, Knob
from cosim.capture import Capture, capture_probe, make_plan
from cosim.captures import capture_probes
from cosim.circuit.deck import Deck
from cosim.errors import CosimError, SimulationError
from cosim.gate import Shots, gate_target, run_gate
from cosim.imported import import_waveform
from cosim.line import through_line
from cosim.quantum.coherent_error import error_vector
from cosim.quantum.fidelity import leakage
from cosim.quantum.frame import phase_frame
from cosim.quantum.operators import OperatorSystem
from cosim.qubit_drive import couple
from cosim.result import Fidelity, GateResult
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise

_Key = tuple[float, ...]


@dataclass
class GateRuns:
    """Runs a gate at given values of its knobs.

    What is no part of the metric is left out: neighbours, rest, the second solver, and, since
    each run of it takes many of the circuit, the netlist's own noise.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck as read.
    table : CalibrateTable
        What is solved for.
    knobs : sequence of Knob
        By what.
    system : OperatorSystem or None
        A user's own system.
    report : callable or None
        Called with each point.
    history : list of Point
        All runs until now.
    """

    bench: Testbench
    deck: Deck | None
    table: CalibrateTable
    knobs: Sequence[Knob]
    system: OperatorSystem | None = None
    report: Report | None = None
    history: list[Point] = field(default_factory=list)
    _shots: dict[_Key, Shots] = field(default_factory=dict)

    def run(self, places: Sequence[tuple[float, ...]], purpose: str) -> list[Point]:
        """Run at some places; those whose decks differ in parameters only share a load.

        Parameters
        ----------
        places : sequence of tuple of float
            The value of each knob as a part of the distance of its bounds.
        purpose : str
            What for; a fault of a start or a difference is raised.

        Returns
        -------
        list of Point
            One each; a run that failed has an infinite value.

        Raises
        ------
        InputError
            If the testbench or its deck cannot be used.
        SimulationError
            If the start or a difference cannot be simulated.
        """
        benches = [self._bench(place) for place in places]
        fresh = self._simulate(places, benches)
        points = []
        counted: set[_Key] = set()
        for place, bench in zip(places, benches, strict=True):
            found = fresh.get(self._key(place))
            # A second run on one waveform costs none of the circuit.
            simulated = found is not None and self._key(place) not in counted
            counted.add(self._key(place))
            try:
                if isinstance(found, CosimError):
                    raise found
                point = self._point(bench, place, purpose, simulated)
            except SimulationError as error:
                if purpose in ("start", "difference"):
                    raise
                point = Point(
                    place, purpose, math.inf, np.zeros(0), simulated=simulated, fault=error.message
                )
            self._keep(point)
            points.append(point)
        return points

    def finish(self, point: Point) -> Point:
        """Run once more at half the step.

        Parameters
        ----------
        point : Point
            Where the search has ended.

        Returns
        -------
        Point
            With what the second run gives as its vector, the metric of the first as its value and
            the error bar of that; the warnings are those of the whole run.

        Raises
        ------
        SimulationError
            If it cannot be simulated.
        """
        bench = self._bench(point.place)
        floored = replace(bench, accuracy=replace(bench.accuracy, floor=True))
        shots = self._shots.get(self._key(point.place))
        second = None
        if shots is not None:
            half = capture_probe(shots.plan.half_step())
            second = replace(shots, first=half)
            shots = replace(shots, second=half)
        result = run_gate(floored, system=self.system, shots=shots)
        vector = point.vector
        if second is not None:
            again = run_gate(bench, system=self.system, shots=second)
            vector, _ = self._judged(bench, again, second)
        bar = self._view(result).error_bar
        last = replace(
            point,
            purpose="floor",
            vector=vector,
            error_bar=bar,
            simulated=shots is not None,
            warnings=result.warnings,
        )
        self._keep(last)
        return last

    def _keep(self, point: Point) -> None:
        self.history.append(point)
        if self.report is not None:
            self.report(point)

    def _bench(self, place: Sequence[float]) -> Testbench:
        bench = bench_at(self.bench, self.knobs, place)
        return replace(
            bench,
            spectator=(),
            noise=tuple(item for item in bench.noise if not isinstance(item, NetlistNoise)),
            gate=replace(bench.gate, idle=None),
            accuracy=replace(bench.accuracy, floor=False, reference=False),
        )

    def _key(self, place: Sequence[float]) -> _Key:
        """Give the values that the waveform depends on."""
        pairs = zip(self.knobs, place, strict=True)
        return tuple(knob.at(part) for knob, part in pairs if knob.simulated)

    def _simulate(
        self, places: Sequence[tuple[float, ...]], benches: Sequence[Testbench]
    ) -> dict[_Key, Capture | CosimError]:
        """Simulate what has not been yet, in one family; give that by its values."""
        if self.bench.netlist is None:
            return {}
        wanted = dict(zip(map(self._key, places), benches, strict=True))
        missing = [key for key in wanted if key not in self._shots]
        plans = [make_plan(wanted[key], self.deck) for key in missing]
        found = dict(zip(missing, capture_probes(plans), strict=True))
        for (key, shot), plan in zip(found.items(), plans, strict=True):
            if isinstance(shot, Capture):
                self._shots[key] = Shots(plan, shot, None)
        return found

    def _point(
        self, bench: Testbench, place: tuple[float, ...], purpose: str, simulated: bool
    ) -> Point:
        shots = self._shots.get(self._key(place))
        result = run_gate(bench, system=self.system, shots=shots)
        vector, lost = self._judged(bench, result, shots)
        value = self._view(result).infidelity + self.table.leakage_weight * lost
        return Point(
            place, purpose, value, vector, lost, simulated=simulated, warnings=result.warnings
        )

    def _view(self, result: GateResult) -> Fidelity:
        views = {
            "as_simulated": result.as_simulated,
            "free_frame": result.free_frame,
            "calibrated": result.calibrated,
        }
        return views[self.table.metric]

    def _judged(
        self, bench: Testbench, result: GateResult, shots: Shots | None
    ) -> tuple[np.ndarray, float]:
        """Give the error vector in the metric's frame, and the leakage."""
        view = self._view(result)
        channel = result.channel.superoperator
        if view.amplitude_scale != 1.0 or view.detuning != 0.0:
            first = import_waveform(bench) if shots is None else shots.first
            shot = through_line(bench, first)
            pulse = couple(bench, shot, self.system).pulse(shot.waveform)
            # Without noise, which is then in the rest.
            channel = pulse.channel(scale=view.amplitude_scale, detuning=view.detuning)
        framed = phase_frame(channel, view.z_before, view.z_after)
        target = gate_target(bench).unitary
        weight = self.table.leakage_weight
        return error_vector(framed, target, leakage_weight=weight), max(0.0, leakage(channel))
