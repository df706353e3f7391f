"""A study of drift as tables for a terminal."""

import math

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.calibration_terminal import METRICS, format_value
from cosim.drift.result import DriftResult, DriftSource
from cosim.terminal import framed, plain_table
from cosim.units import format_quantity

# Times that are listed: of the curve's points each of so many.
_EVERY = 8
_LONG = ((86400.0, "day"), (3600.0, "h"), (60.0, "min"))


def drift_table(result: DriftResult) -> Group:
    """Lay out a study of drift.

    Parameters
    ----------
    result : DriftResult
        What came out.

    Returns
    -------
    rich.console.Group
        The infidelity over time, the intervals, the sources, warnings and the caution.
    """
    parts: list[RenderableType] = [
        Text(f"{METRICS[result.metric]}, {result.netlist_runs} netlist runs"),
        _number_table(result),
        Text(""),
        _curve_table(result),
        Text(""),
        Text(f"sources, {format_time(result.told_at)} after a trim"),
        _source_table(result),
    ]
    return framed(result.title or "drift", parts, result.warnings)


def format_time(value: float) -> str:
    """Write a time, long ones in minutes, hours or days.

    Parameters
    ----------
    value : float
        In s.

    Returns
    -------
    str
        "13.66 h"; "-" for a value that is not a number.
    """
    for size, unit in _LONG:
        if math.isfinite(value) and value >= size:
            return f"{value / size:.4g} {unit}"
    return format_quantity(value, "s")


def _number_table(result: DriftResult) -> Table:
    table = plain_table()
    bar = "" if math.isnan(result.numerical_floor) else f" ± {result.numerical_floor:.1e}"
    table.add_row("trimmed", f"{result.trimmed:.3e}{bar}")
    if any(source.trim_error > 0.0 for source in result.sources):
        table.add_row("right after a trim", f"{result.right_after:.3e}, with the trim's own errors")
    if not math.isnan(result.limit):
        table.add_row("limit of the mean", f"{result.limit:.3e}")
        for label, what, interval, lost in (
            ("trim every", "the mean at its end", result.interval_end, result.duty_lost_end),
            ("or every", "the mean over it", result.interval_average, result.duty_lost_average),
        ):
            duty = "" if math.isnan(lost) else f"; trims take {100.0 * lost:.2g} %"
            told = format_time(interval)
            if math.isinf(interval):
                told, duty = f"over {format_time(float(result.time[-1]))}", ""
            table.add_row(label, f"{told} by {what}{duty}")
    table.add_row("dominated by", result.dominant)
    table.add_row("check, all moved", f"the sum of effects is within {result.model_error:.1e}")
    return table


def _curve_table(result: DriftResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("after a trim", "mean", "averaged", "5 %", "median", "95 %"):
        table.add_column(name, justify="right", no_wrap=True)
    columns = (result.mean, result.average, result.low, result.median, result.high)
    for at in range(0, result.time.size, _EVERY):
        table.add_row(
            format_time(float(result.time[at])), *(f"{column[at]:.3e}" for column in columns)
        )
    return table


def _source_table(result: DriftResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("source", style="bold", no_wrap=True)
    for name in ("moves by", "costs alone"):
        table.add_column(name, justify="right", no_wrap=True)
    table.add_column("of", overflow="fold")
    for source in result.sources:
        keys = ", ".join(source.keys)
        table.add_row(source.name, _move(source), f"{source.cost:+.2e}", keys)
    return table


def _move(source: DriftSource) -> str:
    spread = f"± {format_value(float(f'{source.deviation:.3g}'), source.unit)}"
    if source.shift == 0.0:
        return spread
    shift = format_value(float(f"{source.shift:.3g}"), source.unit)
    return f"{shift} {spread}" if source.deviation > 0.0 else shift
