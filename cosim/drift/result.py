"""The declared result of a study of drift."""

from dataclasses import dataclass, field
from typing import Any

from cosim.waveform import FloatArray


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


_OVER_TIME = {"unit": "1", "axes": ("time",)}


@dataclass(frozen=True, slots=True)
class DriftSource:
    """Something that moves after a trim.

    Parameters
    ----------
    name : str
        Of the source.
    keys : tuple of str
        Dotted keys of the numbers that it moves.
    unit : str
        Of its moves; "1" for a plain number.
    trim_error : float
        Standard deviation right after the trim.
    shift, deviation : float
        Mean and standard deviation of the move at `DriftResult.told_at`, the trim's error with it.
    cost : float
        What it adds to the infidelity by itself at that time, on average.
    alone : ndarray, shape (times,)
        The same at all times.
    """

    name: str
    keys: tuple[str, ...]
    unit: str
    trim_error: float = field(metadata={"unit_from": "unit"})
    shift: float = field(metadata={"unit_from": "unit"})
    deviation: float = field(metadata={"unit_from": "unit"})
    cost: float = field(metadata=_unit("1"))
    alone: FloatArray = field(metadata=_OVER_TIME)


@dataclass(frozen=True, slots=True)
class DriftResult:
    """What the time since a trim does to a gate.

    Parameters
    ----------
    title : str
        Title of the testbench.
    metric : str
        "as_simulated", "free_frame" or "calibrated": whose frame and scale stay those of the trim.
    trimmed : float
        1 - F_avg of the testbench as it stands, without errors of the trim.
    numerical_floor : float
        Its error bar; NaN where the testbench leaves it out.
    right_after : float
        Mean infidelity right after a trim, with its errors.
    limit : float
        That the mean must not exceed; NaN if none is given.
    interval_end : float
        Longest time, in s, at whose end the mean keeps the limit; infinite where it does to the
        horizon, NaN without a limit.
    interval_average : float
        Likewise for the mean averaged from the trim on.
    trim_duration : float
        In s; NaN if nothing is said.
    duty_lost_end, duty_lost_average : float
        Part of the time that trims take, at these intervals.
    told_at : float
        Time since the trim, in s, for which the sources are told: `interval_end`, or the horizon.
    dominant : str
        Name of the source that costs most there.
    time : ndarray, shape (times,)
        Since the trim, in s.
    mean, average : ndarray, shape (times,)
        Mean infidelity then, and averaged from the trim on.
    low, median, high : ndarray, shape (times,)
        Its quantiles of 5, 50 and 95 % over trims.
    sources : tuple of DriftSource
        The largest cost first.
    model_error : float
        Largest difference between the infidelity that the sources' error vectors add up to, and
        that of gates run with all of them moved, over the mean; at `told_at`.
    netlist_runs : int
        Runs of the circuit.
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
    trimmed: float = field(metadata=_unit("1"))
    numerical_floor: float = field(metadata=_unit("1"))
    right_after: float = field(metadata=_unit("1"))
    limit: float = field(metadata=_unit("1"))
    interval_end: float = field(metadata=_unit("s"))
    interval_average: float = field(metadata=_unit("s"))
    trim_duration: float = field(metadata=_unit("s"))
    duty_lost_end: float = field(metadata=_unit("1"))
    duty_lost_average: float = field(metadata=_unit("1"))
    told_at: float = field(metadata=_unit("s"))
    dominant: str
    time: FloatArray = field(metadata={"unit": "s", "axes": ("time",)})
    mean: FloatArray = field(metadata=_OVER_TIME)
    average: FloatArray = field(metadata=_OVER_TIME)
    low: FloatArray = field(metadata=_OVER_TIME)
    median: FloatArray = field(metadata=_OVER_TIME)
    high: FloatArray = field(metadata=_OVER_TIME)
    sources: tuple[DriftSource, ...]
    model_error: float = field(metadata=_unit("1"))
    netlist_runs: int
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata=_unit("s"))
    testbench: str = field(metadata={"table": False})


# Classes by the tag that the archive keeps.
DRIFT_KINDS: dict[str, type] = {cls.__name__: cls for cls in (DriftResult, DriftSource)}
