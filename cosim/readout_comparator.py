"""A comparator in the netlist of a readout: what it is asked, and where it decides otherwise.

A decision is one bit, so the offset is found from when it changes, over signals on the line through
the answers for |0> and |1>.
"""

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.circuit.analysis import TransientResult
from cosim.circuit.probe import evaluate_probe
from cosim.errors import TestbenchError
from cosim.readout_chain import deck_with_answer
from cosim.readout_input import EXCITED, GROUND, Answers
from cosim.readout_output import ReadoutPlan, simulate_all
from cosim.readout_schema import ReadoutTable
from cosim.waveform import ComplexArray, FloatArray

# Signals that are tried where |0> and |1> are decided alike.
LADDER = (-4.0, -2.0, -1.0, -0.5, 0.25, 0.5, 0.75, 1.5, 2.0, 3.0, 5.0)
FINEST = 2.0**-14  # of the distance of the states, to which the threshold is found without noise


@dataclass(frozen=True, slots=True)
class Comparator:
    """The netlist with its decision: what it is asked, and when it is read.

    Parameters
    ----------
    plan : ReadoutPlan
        The deck and the transient.
    table : ReadoutTable
        With the threshold.
    answers : Answers
        Of the resonator.
    instant : float
        Time in s of the decision.
    """

    plan: ReadoutPlan
    table: ReadoutTable
    answers: Answers
    instant: float = field(metadata={"unit": "s"})

    def emf(self, x: float) -> ComplexArray:
        """Give an answer on the line through those for |0> and |1>.

        Parameters
        ----------
        x : float
            0 for |0>, 1 for |1>.

        Returns
        -------
        ndarray of complex, shape (n,)
            EMF in V.
        """
        return (1.0 - x) * self.answers.emf[GROUND] + x * self.answers.emf[EXCITED]

    def levels(self, rows: ComplexArray) -> FloatArray:
        """Run the netlist without noise.

        Parameters
        ----------
        rows : ndarray of complex, shape (k, n)
            Answers in V.

        Returns
        -------
        ndarray, shape (k,)
            The node's voltages in V when it is read.

        Raises
        ------
        SimulationError
            If a run fails.
        """
        made = [deck_with_answer(self.plan, self.table, self.answers, emf) for emf in rows]
        return np.array([self.level(one) for one in simulate_all(self.plan, made)])

    def level(self, result: TransientResult) -> float:
        """Read the node.

        Parameters
        ----------
        result : TransientResult
            A run.

        Returns
        -------
        float
            In V.
        """
        wave = evaluate_probe(self.plan.probes[0], result.vectors)
        return float(np.interp(self.instant, result.time, wave))

    def high(self, levels: FloatArray) -> npt.NDArray[np.bool_]:
        """Tell which voltages are above the threshold.

        Parameters
        ----------
        levels : ndarray, shape (k,)
            In V.

        Returns
        -------
        ndarray of bool, shape (k,)
        """
        assert self.table.threshold is not None  # The table insists on it beside a decision.
        return levels > self.table.threshold


@dataclass(frozen=True, slots=True)
class Threshold:
    """Where the decision changes without noise.

    Parameters
    ----------
    offset : float
        Signal: 0 for |0>, 1 for |1>.
    rising : bool
        Whether the node is high for the greater signal, that of |1>.
    """

    offset: float = field(metadata={"unit": "1"})
    rising: bool


def find_threshold(comparator: Comparator) -> Threshold:
    """Find where the clean decision changes: between |0> and |1>, or else on the ladder.

    Parameters
    ----------
    comparator : Comparator
        The netlist.

    Returns
    -------
    Threshold
        The change that is nearest to half-way, to `FINEST`.

    Raises
    ------
    TestbenchError
        If the node never switches.
    SimulationError
        If a run fails.
    """
    x = np.array([0.0, 1.0])
    levels = comparator.levels(np.array([comparator.emf(one) for one in x]))
    if comparator.high(levels[:1]) == comparator.high(levels[1:]):
        more = np.array(LADDER)
        levels = np.append(levels, comparator.levels(np.array([comparator.emf(a) for a in more])))
        x = np.append(x, more)
        levels, x = levels[np.argsort(x)], np.sort(x)
    high = comparator.high(levels)
    changes = np.flatnonzero(high[1:] != high[:-1])
    if changes.size == 0:
        raise TestbenchError(
            f"table [readout], key 'decision': '{comparator.table.decision}' never switches: at "
            f"{1e9 * comparator.instant:.6g} ns it is between {levels.min():.4g} V and "
            f"{levels.max():.4g} V for signals from {x[0]:g} to {x[-1]:g} times the distance of "
            f"|1> from |0>, and the threshold is {comparator.table.threshold:g} V",
            hint="look at 'threshold', 'decide_at', the comparator's offset and the gain before it",
        )
    nearest = changes[np.argmin(np.abs(0.5 * (x[changes] + x[changes + 1]) - 0.5))]
    rising = bool(high[nearest + 1])
    bounds = (x[nearest : nearest + 1], x[nearest + 1 : nearest + 2])
    base = comparator.emf(0.0)[None, :]
    found = find_changes(comparator, base, rising, bounds, FINEST)
    return Threshold(float(found[0]), rising)


def find_changes(
    comparator: Comparator,
    rows: ComplexArray,
    rising: bool,
    bounds: tuple[FloatArray, FloatArray],
    width: float,
) -> FloatArray:
    """Find how much of E(1) - E(0) each answer needs until its clean decision changes; bisection.

    Parameters
    ----------
    comparator : Comparator
        The netlist.
    rows : ndarray of complex, shape (k, n)
        Answers in V.
    rising : bool
        Whether the node is high for the greater signal.
    bounds : tuple of two ndarray, each of shape (k,)
        Where to look, on the scale of E(1) - E(0).
    width : float
        To which it is found, on that scale.

    Returns
    -------
    ndarray, shape (k,)
        Where it does not change between the bounds, the nearer of them.

    Raises
    ------
    SimulationError
        If a run fails.
    """
    low, high = (np.array(bound, dtype=np.float64) for bound in bounds)
    step = comparator.emf(1.0) - comparator.emf(0.0)
    while float((high - low).max()) > width:
        middle = 0.5 * (low + high)
        levels = comparator.levels(rows + middle[:, None] * step[None, :])
        above = comparator.high(levels) == rising
        low, high = np.where(above, low, middle), np.where(above, middle, high)
    return 0.5 * (low + high)
