"""Trims of a sweep being found, and put into the testbenches of its runs."""

import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from cosim.calibration.result import CalibrationResult
from cosim.calibration.trim import calibrate
from cosim.errors import CosimError
from cosim.keys import with_number
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planned_run import SweepRun
from cosim.testbench import Bench

# What each row tells of the trim that its run had, besides the knobs.
PARTS = ("resolution", "bounds", "unreached", "rest")
"""Parts of what a trim leaves, `cosim.calibration.result.Limits`; columns "trim.rest" and so on."""


@dataclass(frozen=True, slots=True)
class Trim:
    """What a trim has found, or why it has found nothing.

    Parameters
    ----------
    result : CalibrationResult or None
        What was found.
    error : CosimError or None
        Why there is nothing.
    wall_time : float
        In s.
    """

    result: CalibrationResult | None
    error: CosimError | None
    wall_time: float


Trims = Mapping[str, Trim]
"""By `SweepRun.trim_key`."""


def find_trim(plan: SweepPlan, run: SweepRun) -> Trim:
    """Calibrate the die of a run, or the testbench itself where its trim is frozen.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    run : SweepRun
        One of its runs, of a plan that trims.

    Returns
    -------
    Trim
        The same for all runs with its `trim_key`, wherever it is found.
    """
    began = time.perf_counter()
    result, fault = None, None
    try:
        result = calibrate(plan.trim_bench(run), deck=plan.trim_corner(run).deck)
    except CosimError as error:
        fault = error
    return Trim(result, fault, time.perf_counter() - began)


def trimmed_bench(plan: SweepPlan, run: SweepRun, trims: Trims) -> Bench:
    """Give the testbench of one run with its trim.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    run : SweepRun
        One of its runs.
    trims : mapping of Trim
        With that of the run, if it has one.

    Returns
    -------
    Bench
        Ready to be run.

    Raises
    ------
    CosimError
        What the trim failed by.
    TestbenchError
        If the values do not go together.
    """
    bench = plan.testbench(run)
    if plan.trimming is None:
        return bench
    trim = trims[run.trim_key]
    if trim.result is None:
        assert trim.error is not None  # One of the two is there.
        raise trim.error
    for key, knob in zip(plan.trimming.knobs, trim.result.knobs, strict=True):
        bench = with_number(bench, key, knob.found)
    return bench


def trim_cells(trim: Trim | None) -> tuple[dict[str, Any], dict[str, str]]:
    """Give what the row of a run tells of its trim.

    Parameters
    ----------
    trim : Trim or None
        The trim; None where there is none.

    Returns
    -------
    cells : dict
        The knobs by their keys, the netlist's runs, the metric at the trim and what it is due to,
        by column; empty where nothing was found.
    units : dict of str
        Unit by column.
    """
    if trim is None or trim.result is None:
        return {}, {}
    found = trim.result
    cells: dict[str, Any] = {knob.key: knob.found for knob in found.knobs}
    units = {knob.key: knob.unit for knob in found.knobs}
    cells |= {
        "trim.netlist_runs": found.netlist_runs,
        "trim.before": found.before,
        "trim.after": found.after,
        **{f"trim.{name}": getattr(found.limits, name) for name in PARTS},
        "trim.limited_by": found.limited_by,
        "trim.warnings": "\n".join(found.warnings),
    }
    return cells, units
