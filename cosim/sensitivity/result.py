"""The declared result of a study of sensitivities."""

import math
from dataclasses import dataclass, field
from typing import Any

from cosim.waveform import FloatArray


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class SensitivityItem:
    """A number, and what it does to the metric.

    Parameters
    ----------
    key : str
        Its dotted key.
    unit : str
        Of its values; "1" for a plain number, as a deck's parameters are.
    value, tolerance : float
        Where it stands, and how far it is moved for the costs, in SI units.
    step : float
        How far it is moved for the derivatives.
    first, first_error : float
        First derivative of the metric per unit, and a bound of its error.
    second, second_error : float
        The second, per unit squared; NaN where only one side could be run.
    cost_low, cost_high : float
        Change of the metric with the number one tolerance lower, and higher; NaN where that could
        not be run.
    bound : float
        Changes below this cannot be told from what the simulator's tolerances do.
    status : str
        "resolved"; "not resolved", then the costs are below the bound; "no effect", not even in
        the last digit; or "failed".
    turn : ndarray, shape (3,)
        What one tolerance turns the gate by, before the ideal one, about x, y and z in rad; NaN
        for a readout.
    simulated : bool
        Whether the circuit ran for it.
    note : str
        What failed.
    """

    key: str
    unit: str
    value: float = field(metadata={"unit_from": "unit"})
    tolerance: float = field(metadata={"unit_from": "unit"})
    step: float = field(metadata={"unit_from": "unit"})
    first: float
    first_error: float
    second: float
    second_error: float
    cost_low: float = field(metadata=_unit("1"))
    cost_high: float = field(metadata=_unit("1"))
    bound: float = field(metadata=_unit("1"))
    status: str
    turn: FloatArray = field(metadata={"unit": "rad", "axes": ("axis",)})
    simulated: bool
    note: str = ""

    @property
    def largest(self) -> float:
        """The larger cost without its sign; -1 where there is none."""
        costs = [abs(c) for c in (self.cost_low, self.cost_high) if not math.isnan(c)]
        return max(costs, default=-1.0)


@dataclass(frozen=True, slots=True)
class SensitivityResult:
    """What each number of a testbench and its deck does to the metric.

    Parameters
    ----------
    title : str
        Title of the testbench.
    metric : str
        "as_simulated", "free_frame" or "calibrated", then 1 - F_avg of a gate, or
        "assignment_error".
    value : float
        The metric as the testbench stands.
    numerical_floor : float
        Its error bar, from a run at half the step; NaN where the testbench leaves it out.
    noise : float
        What ten times smaller tolerances of the simulator do to the error vector, whose square is
        an infidelity, on the same time steps; of a readout, to the metric, relative.
    items : tuple of SensitivityItem
        The largest cost first.
    netlist_runs : int
        Runs of the circuit. One of a readout is many transients.
    warnings : tuple of str
        What the reader must know.
    started : str
        Start as ISO 8601 with UTC offset.
    wall_time : float
        In s.
    testbench : str
        The testbench as TOML.
    """

    title: str
    metric: str
    value: float = field(metadata=_unit("1"))
    numerical_floor: float = field(metadata=_unit("1"))
    noise: float = field(metadata=_unit("1"))
    items: tuple[SensitivityItem, ...]
    netlist_runs: int
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata=_unit("s"))
    testbench: str = field(metadata={"table": False})


# Classes by the tag that the archive keeps.
SENSITIVITY_KINDS: dict[str, type] = {
    cls.__name__: cls for cls in (SensitivityResult, SensitivityItem)
}
