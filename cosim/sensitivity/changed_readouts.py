"""Readouts of a testbench with some of its numbers changed."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

from cosim.circuit.deck import Deck
from cosim.errors import CosimError
from cosim.keys import NumberKey, nominal, with_number
from cosim.readout import ReadoutRuns, run_readout, simulate_readout
from cosim.readout_decisions import run_decisions
from cosim.sensitivity.changed_gates import Changes
from cosim.testbench import ReadoutBench

# Numbers that say how records are judged (`cosim.readout.ReadoutRuns`), and how often the state
# changes: that it changes at all is simulated, so that these count where they are not zero.
_JUDGED = ("readout.adc_bits", "readout.adc_full_scale", "readout.preparation_error")
_RATES = ("readout.t1", "readout.thermal_population")


@dataclass
class ChangedReadouts:
    """Runs a readout with some of its numbers changed.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    deck : Deck
        Its deck as read.
    report : callable or None
        Called with the number of a readout that was simulated, from 1, and how many are asked for.
    netlist_runs : int
        Readouts simulated until now; each is many transients.
    """

    bench: ReadoutBench
    deck: Deck
    report: Callable[[int, int], None] | None = None
    netlist_runs: int = 0
    _runs: dict[Changes, ReadoutRuns] = field(default_factory=dict)

    def simulated(self, key: NumberKey) -> bool:
        """Tell whether the circuit has to run again for a number.

        Parameters
        ----------
        key : NumberKey
            Which one.

        Returns
        -------
        bool
        """
        if self.bench.readout.decision is not None:
            return True
        rate = key.path in _RATES and nominal(self.bench, self.deck, key)
        return not (rate or key.path in _JUDGED)

    def run(self, variants: Sequence[Changes]) -> list[float | CosimError]:
        """Run with some numbers changed.

        Parameters
        ----------
        variants : sequence of tuples
            Each names the numbers that are changed, and their values in SI units.

        Returns
        -------
        list of float or CosimError
            The assignment error of each, or why it failed.
        """
        found: list[float | CosimError] = []
        for changes in variants:
            try:
                found.append(self._measured(changes, len(variants)))
            except CosimError as error:
                found.append(error)
        return found

    def nominal(self) -> tuple[float, float, tuple[str, ...]]:
        """Run the testbench as it stands.

        Returns
        -------
        tuple of float, float and tuple of str
            Assignment error; numerical floor, NaN without one, of a comparator's decisions their
            standard error; warnings.

        Raises
        ------
        InputError
            If the testbench or its deck cannot be used.
        SimulationError
            If the circuit cannot be simulated.
        """
        if self.bench.readout.decision is not None:
            decided = run_decisions(self.bench, deck=self.deck)
            return decided.assignment_error, decided.standard_error, decided.warnings
        self._count(1)
        # With its half step where the testbench asks for one; the others run without.
        runs = simulate_readout(self.bench, deck=self.deck)
        self._runs[()] = runs
        result = run_readout(self.bench, runs=runs)
        return result.assignment_error, result.numerical_floor, result.warnings

    def _measured(self, changes: Changes, asked: int) -> float:
        bench = self.bench
        for key, value in changes:
            bench = with_number(bench, key, value)
        bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
        if bench.readout.decision is not None:
            self._count(asked)
            return run_decisions(bench, deck=self.deck).assignment_error
        known = tuple(item for item in changes if self.simulated(item[0]))
        if known not in self._runs:
            self._count(asked)
            self._runs[known] = simulate_readout(bench, deck=self.deck)
        return run_readout(bench, runs=self._runs[known]).assignment_error

    def _count(self, asked: int) -> None:
        self.netlist_runs += 1
        if self.report is not None:
            self.report(self.netlist_runs, asked)
