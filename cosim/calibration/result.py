"""The declared result of a calibration, as it is shown, archived and read back."""

from dataclasses import dataclass, field, fields
from typing import Any

from cosim.result import as_plain
from cosim.waveform import FloatArray

_NOT_IN_TABLE = {"table": False}


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class KnobResult:
    """A knob: where it stood, where it stands now, and how well it has to be set.

    Parameters
    ----------
    key : str
        Dotted key.
    unit : str
        Of its values; "1" for a plain number, as a deck's parameters often are.
    start, found : float
        Before and after, in SI units.
    low, high : float
        Bounds.
    integer : bool
        Whether it takes whole numbers only.
    resolution : float
        What it can be set to, in whole steps; 0 for any value.
    bound : str
        "low" or "high" where the metric would still fall beyond that bound; else "".
    slope : float
        Change of the metric with the knob where it stands, per unit.
    stiffness : float
        What the knob off by d costs, the others at rest, over d^2.
    resolution_cost : float
        What its resolution may cost: half a step off.
    resolution_needed : float
        Steps that would cost as much as the table's `cost` at half a step off.
    shift : float
        By how much its best value moves when the circuit is run at half the step: what the trim
        owes to the simulator. NaN without a floor run, and where knobs do the same.
    """

    key: str
    unit: str
    start: float = field(metadata={"unit_from": "unit"})
    found: float = field(metadata={"unit_from": "unit"})
    low: float = field(metadata={"unit_from": "unit"})
    high: float = field(metadata={"unit_from": "unit"})
    integer: bool
    resolution: float = field(metadata={"unit_from": "unit"})
    bound: str
    slope: float
    stiffness: float
    resolution_cost: float = field(metadata=_unit("1"))
    resolution_needed: float = field(metadata={"unit_from": "unit"})
    shift: float = field(metadata={"unit_from": "unit"})


@dataclass(frozen=True, slots=True)
class Limits:
    """What is left of the metric, by what it is due to; the four add up to it.

    Parameters
    ----------
    resolution : float
        The knobs' steps.
    bounds : float
        Their bounds: what the model expects beyond, up to once their distance away; of a readout
        up to a tenth of it.
    unreached : float
        Coherent error that none of the knobs reaches; 0 for a readout.
    rest : float
        What no turn of a knob undoes: decoherence, noise. Of a readout all else.
    """

    resolution: float = field(metadata=_unit("1"))
    bounds: float = field(metadata=_unit("1"))
    unreached: float = field(metadata=_unit("1"))
    rest: float = field(metadata=_unit("1"))


@dataclass(frozen=True, slots=True)
class CalibrationRun:
    """One run of the search.

    Parameters
    ----------
    purpose : str
        "start", "difference", "step", "neighbour" or "floor", the run at half the step.
    values : ndarray, shape (n,)
        Of the knobs, in SI units.
    metric : float
        What came out; infinite where the run failed.
    simulated : bool
        Whether the circuit ran for it.
    fault : str
        Why it failed; else "".
    """

    purpose: str
    values: FloatArray = field(metadata={"axes": ("knob",)})
    metric: float = field(metadata=_unit("1"))
    simulated: bool
    fault: str = ""


@dataclass(frozen=True, slots=True)
class CalibrationResult:
    """A calibration through the netlist.

    Parameters
    ----------
    title : str
        Title of the testbench.
    metric : str
        "as_simulated", "free_frame" or "calibrated", then 1 - F_avg of a gate, or
        "assignment_error".
    leakage_weight : float
        What leakage costs beside its part in the infidelity; the metric has it.
    before, after : float
        The metric.
    numerical_floor : float
        Error bar of `after`, from a run at half the step; of a comparator's decisions their
        standard error. NaN where the testbench leaves it out.
    before_error_bar : float
        Error bar of `before`, as if its channel were off by as much as that of `after`; NaN for a
        readout, and as above.
    leakage_before, leakage_after : float
        L1; NaN for a readout.
    turn_before, turn_after, turn_unreached : ndarray, shape (3,)
        The coherent error as a small turn before the ideal gate, about x, y and z in rad, in the
        frame of the metric: of the start, of the best, and what of it no knob reaches. NaN for a
        readout.
    knobs : tuple of KnobResult
        What was turned.
    cost : float
        What the resolution that is needed is told for.
    limits : Limits
        What is left, by what it is due to.
    limited_by : str
        The largest of these: "numerical floor" where the metric lies below it, else "resolution",
        "bounds", "unreached" or "rest".
    runs : int
        Of the gate or readout, with the last at half the step.
    netlist_runs : int
        Those for which the circuit ran. One of a readout is many transients.
    complete : bool
        False where the runs were used up before the search had ended.
    history : tuple of CalibrationRun
        All runs in their order.
    warnings : tuple of str
        What the reader must know.
    started : str
        Start as ISO 8601 with UTC offset.
    wall_time : float
        In s.
    testbench : str
        The testbench as TOML, before the trim.
    """

    title: str
    metric: str
    leakage_weight: float = field(metadata=_unit("1"))
    before: float = field(metadata=_unit("1"))
    after: float = field(metadata=_unit("1"))
    numerical_floor: float = field(metadata=_unit("1"))
    before_error_bar: float = field(metadata=_unit("1"))
    leakage_before: float = field(metadata=_unit("1"))
    leakage_after: float = field(metadata=_unit("1"))
    turn_before: FloatArray = field(metadata={"unit": "rad", "axes": ("axis",)})
    turn_after: FloatArray = field(metadata={"unit": "rad", "axes": ("axis",)})
    turn_unreached: FloatArray = field(metadata={"unit": "rad", "axes": ("axis",)})
    knobs: tuple[KnobResult, ...]
    cost: float = field(metadata=_unit("1"))
    limits: Limits
    limited_by: str
    runs: int
    netlist_runs: int
    complete: bool
    history: tuple[CalibrationRun, ...]
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata=_unit("s"))
    testbench: str = field(metadata=_NOT_IN_TABLE)


# Classes by the tag that the archive keeps.
CALIBRATION_KINDS: dict[str, type] = {
    cls.__name__: cls for cls in (CalibrationResult, KnobResult, Limits, CalibrationRun)
}


def calibration_numbers(result: CalibrationResult) -> dict[str, Any]:
    """Turn a calibration into plain numbers for machines.

    Parameters
    ----------
    result : CalibrationResult
        What came out.

    Returns
    -------
    dict
        Its fields by name but the testbench; a number that does not exist or is infinite is None.
    """
    names = (item.name for item in fields(result) if item.name != "testbench")
    return {name: as_plain(getattr(result, name)) for name in names}
