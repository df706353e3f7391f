"""What a run at given values of the knobs tells."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol, TypeVar

from cosim.calibration.table import Knob
from cosim.keys import with_number
from cosim.testbench import Bench
from cosim.waveform import FloatArray

AnyBench = TypeVar("AnyBench", bound=Bench)


@dataclass(frozen=True, slots=True)
class Point:
    """A run at given values of the knobs.

    Parameters
    ----------
    place : tuple of float
        The value of each knob as a part of the distance of its bounds, 0 to 1.
    purpose : str
        "start", "difference", "step", "neighbour" or "floor".
    value : float
        The metric, with what leakage costs beside it; infinite where the run failed.
    vector : ndarray, shape (m,)
        Coherent error, whose square is part of the value; of no length for a readout.
    leakage : float
        L1; NaN for a readout.
    error_bar : float
        Of the metric; NaN without a floor run.
    simulated : bool
        Whether the circuit ran for it.
    warnings : tuple of str
        Of the run.
    fault : str
        Why it failed; else "".
    """

    place: tuple[float, ...]
    purpose: str
    value: float
    vector: FloatArray
    leakage: float = math.nan
    error_bar: float = math.nan
    simulated: bool = True
    warnings: tuple[str, ...] = ()
    fault: str = ""

    @property
    def rest(self) -> float:
        """What of the value is not in the square of the vector."""
        return self.value - float(self.vector @ self.vector)


Report = Callable[[Point], None]


class Runner(Protocol):
    """Runs a testbench at given values of its knobs, and keeps what came out."""

    history: list[Point]

    def run(self, places: Sequence[tuple[float, ...]], purpose: str) -> list[Point]:
        """Run at some places; a run that fails is a point of infinite value."""
        ...

    def finish(self, point: Point) -> Point:
        """Run once more at half the step; give the point with its error bar."""
        ...


def bench_at(bench: AnyBench, knobs: Sequence[Knob], place: Sequence[float]) -> AnyBench:
    """Set the knobs of a testbench.

    Parameters
    ----------
    bench : Bench
        The testbench.
    knobs : sequence of Knob
        Its knobs.
    place : sequence of float
        The value of each as a part of the distance of its bounds.

    Returns
    -------
    Bench
        A copy.

    Raises
    ------
    TestbenchError
        If a value does not go with the others.
    """
    for knob, part in zip(knobs, place, strict=True):
        bench = with_number(bench, knob.key, knob.at(part))
    return bench
