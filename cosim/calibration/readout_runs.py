"""Runs of a readout at given values of the knobs."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.calibration.points import Point, Report, bench_at
from cosim.calibration.table import Knob
from cosim.circuit.deck import Deck
from cosim.errors import SimulationError
from cosim.readout import ReadoutRuns, run_readout, simulate_readout
from cosim.readout_decisions import run_decisions
from cosim.testbench import ReadoutBench

# Keys that say how records are judged: of a readout with records, what is simulated does not
# depend on them (`cosim.readout.ReadoutRuns`).
_JUDGED = ("readout.adc_bits", "readout.adc_full_scale", "readout.preparation_error")


@dataclass
class ReadoutTrials:
    """Runs a readout at given values of its knobs.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    deck : Deck or None
        Its deck as read; None reads it for each run.
    knobs : sequence of Knob
        What may be turned.
    report : callable or None
        Called with each point.
    history : list of Point
        All runs until now.
    """

    bench: ReadoutBench
    deck: Deck | None
    knobs: Sequence[Knob]
    report: Report | None = None
    history: list[Point] = field(default_factory=list)
    _runs: dict[tuple[float, ...], ReadoutRuns] = field(default_factory=dict)

    def run(self, places: Sequence[tuple[float, ...]], purpose: str) -> list[Point]:
        """Run at some places.

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
        points = []
        for place in places:
            before = len(self._runs)
            try:
                value, warnings, _ = self._measured(place, floor=False)
                fault = ""
            except SimulationError as error:
                if purpose in ("start", "difference"):
                    raise
                value, warnings, fault = math.inf, (), error.message
            simulated = self._decides or bool(fault) or len(self._runs) > before
            points.append(
                Point(
                    place,
                    purpose,
                    value,
                    np.zeros(0),
                    simulated=simulated,
                    warnings=warnings,
                    fault=fault,
                )
            )
            self._keep(points[-1])
        return points

    def finish(self, point: Point) -> Point:
        """Run once more with the check at half the step.

        Parameters
        ----------
        point : Point
            Where the search has ended.

        Returns
        -------
        Point
            With the error bar, and the warnings of the whole run.

        Raises
        ------
        SimulationError
            If it cannot be simulated.
        """
        _, warnings, floor = self._measured(point.place, floor=True)
        last = replace(point, purpose="floor", error_bar=floor, simulated=True, warnings=warnings)
        self._keep(last)
        return last

    @property
    def _decides(self) -> bool:
        return self.bench.readout.decision is not None

    def _keep(self, point: Point) -> None:
        self.history.append(point)
        if self.report is not None:
            self.report(point)

    def _measured(
        self, place: tuple[float, ...], *, floor: bool
    ) -> tuple[float, tuple[str, ...], float]:
        """Give the assignment error, the warnings and the numerical floor."""
        bench = bench_at(self.bench, self.knobs, place)
        bench = replace(bench, accuracy=replace(bench.accuracy, floor=floor))
        if self._decides:
            decided = run_decisions(bench, deck=self.deck)
            return decided.assignment_error, decided.warnings, decided.standard_error
        pairs = zip(self.knobs, place, strict=True)
        key = tuple(knob.at(part) for knob, part in pairs if knob.key.path not in _JUDGED)
        if floor or key not in self._runs:
            self._runs[key] = simulate_readout(bench, deck=self.deck)
        result = run_readout(bench, runs=self._runs[key])
        return result.assignment_error, result.warnings, result.numerical_floor
