"""A calibration as tables for a terminal."""

import math

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.calibration.result import CalibrationResult, CalibrationRun, KnobResult
from cosim.sweep_terminal import short_names
from cosim.terminal import framed, plain_table
from cosim.units import format_quantity

METRICS = {
    "as_simulated": "infidelity as simulated",
    "free_frame": "infidelity in the free frame",
    "calibrated": "infidelity after an ideal scale of the amplitude",
    "assignment_error": "assignment error",
}
LIMITS = {
    "resolution": "resolution of the knobs",
    "bounds": "bounds of the knobs",
    "unreached": "coherent error that no knob reaches",
    "rest": "decoherence and noise",
    "numerical floor": "the numerical floor: a smaller step is needed to see more",
}
_OF_READOUT = {"rest": "what no knob moves"}
_AXES = "xyz"
_LEGEND = (
    "costs: half a step off; for {cost}: the step that would cost that; moves by: the best of the "
    "circuit at half the time step"
)
# Below this part of the largest item a limit has no line.
_LEAST_SHARE = 1e-6


def calibration_table(result: CalibrationResult) -> Group:
    """Lay out a calibration.

    Parameters
    ----------
    result : CalibrationResult
        What came out.

    Returns
    -------
    rich.console.Group
        The metric before and after, the knobs, what limits the rest, warnings and the caution.
    """
    parts: list[RenderableType] = [
        Text(_heading(result)),
        _metric_table(result),
        Text(""),
        _knob_table(result),
        Text(_LEGEND.format(cost=f"{result.cost:.0e}"), style="dim"),
        Text(""),
        Text("what is left"),
        _limit_table(result),
    ]
    return framed(result.title or "calibration", parts, result.warnings)


def run_line(run: CalibrationRun, number: int) -> str:
    """Say in a line what a run of the search gave.

    Parameters
    ----------
    run : CalibrationRun
        The run.
    number : int
        Its number, from 1.

    Returns
    -------
    str
    """
    values = ", ".join(f"{value:.6g}" for value in run.values)
    found = "failed" if run.fault else f"{run.metric:.4e}"
    return f"run {number} ({run.purpose}): {values}: {found}"


def limit_label(result: CalibrationResult, name: str) -> str:
    """Name what limits a calibration, for people.

    Parameters
    ----------
    result : CalibrationResult
        What came out.
    name : str
        As in `CalibrationResult.limited_by`.

    Returns
    -------
    str
    """
    if result.metric == "assignment_error" and name in _OF_READOUT:
        return _OF_READOUT[name]
    return LIMITS[name]


def format_value(value: float, unit: str) -> str:
    """Write the value of a knob.

    Parameters
    ----------
    value : float
        In SI units; NaN and infinity are a dash.
    unit : str
        Of it; "1" for a plain number.

    Returns
    -------
    str
    """
    if not math.isfinite(value):
        return "-"
    return f"{value:.6g}" if unit == "1" else format_quantity(value, unit, 6)


def _heading(result: CalibrationResult) -> str:
    weight = f" + {result.leakage_weight:g} x leakage" if result.leakage_weight else ""
    knobs = f"{len(result.knobs)} knob{'s' * (len(result.knobs) > 1)}"
    return (
        f"{METRICS[result.metric]}{weight}, {knobs}, {result.runs} runs, "
        f"{result.netlist_runs} of them of the netlist"
    )


def _metric_table(result: CalibrationResult) -> Table:
    table = _headed(("", "before", "after"))
    bars = (result.before_error_bar, result.numerical_floor)
    table.add_row("metric", *(f"{value:.3e}" for value in (result.before, result.after)))
    if not all(map(math.isnan, bars)):
        table.add_row("its error bar", *("-" if math.isnan(b) else f"± {b:.1e}" for b in bars))
    if not math.isnan(result.leakage_after):
        turns = zip(_AXES, result.turn_before, result.turn_after, strict=True)
        for axis, *pair in turns:
            table.add_row(f"error about {axis}", *(f"{math.degrees(a):+.4f}°" for a in pair))
        lost = (result.leakage_before, result.leakage_after)
        if max(lost) > 1e-12:  # Two levels leak by rounding errors alone.
            table.add_row("leakage", *(f"{value:.2e}" for value in lost))
    return table


def _knob_table(result: CalibrationResult) -> Table:
    table = _headed(
        ("knob", "start", "found", "step", "costs", f"for {result.cost:.0e}", "moves by")
    )
    names = short_names([knob.key for knob in result.knobs])
    for knob in result.knobs:
        found = f"{format_value(knob.found, knob.unit)}{_mark(knob)}"
        table.add_row(
            names[knob.key],
            format_value(knob.start, knob.unit),
            found,
            format_value(knob.resolution, knob.unit) if knob.resolution else "any",
            f"{knob.resolution_cost:.1e}" if knob.resolution else "-",
            format_value(float(f"{knob.resolution_needed:.3g}"), knob.unit),
            "-" if math.isnan(knob.shift) else _signed(knob),
        )
    return table


def _mark(knob: KnobResult) -> str:
    return f" ({knob.bound})" if knob.bound else ""


def _signed(knob: KnobResult) -> str:
    text = format_value(float(f"{knob.shift:.2g}"), knob.unit)
    return text if text.startswith("-") else f"+{text}"


def _limit_table(result: CalibrationResult) -> Table:
    table = plain_table()
    limits = result.limits
    items = {
        "unreached": limits.unreached,
        "bounds": limits.bounds,
        "resolution": limits.resolution,
        "rest": limits.rest,
    }
    least = _LEAST_SHARE * max(items.values())
    for name, value in sorted(items.items(), key=lambda item: -item[1]):
        if value > least:
            told = f": {_direction(result)}" if name == "unreached" else ""
            table.add_row(limit_label(result, name), f"{value:.3e}{told}")
    table.add_row("limited by", limit_label(result, result.limited_by))
    return table


def _direction(result: CalibrationResult) -> str:
    turns = np.degrees(result.turn_unreached)
    # A turn by a small angle theta costs theta^2/6; the rest are amplitudes of leakage.
    if float(result.turn_unreached @ result.turn_unreached) / 6.0 < 0.5 * result.limits.unreached:
        return "mostly leakage"
    return ", ".join(f"{turn:+.3f}° about {axis}" for axis, turn in zip(_AXES, turns, strict=True))


def _headed(names: tuple[str, ...]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column(names[0], style="bold", no_wrap=True)
    for name in names[1:]:
        table.add_column(name, justify="right", no_wrap=True)
    return table
