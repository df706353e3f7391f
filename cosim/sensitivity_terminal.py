"""Sensitivities as tables for a terminal."""

import math

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.calibration_terminal import METRICS, format_value
from cosim.sensitivity.response import FAILED, NO_EFFECT, RESOLVED
from cosim.sensitivity.result import SensitivityItem, SensitivityResult
from cosim.sweep_terminal import short_names
from cosim.terminal import framed

_LEGEND = (
    "lower, higher: change of the metric with the number moved to that side; first, second: "
    "derivatives per unit of the number"
)


def sensitivity_table(result: SensitivityResult) -> Group:
    """Lay out sensitivities.

    Parameters
    ----------
    result : SensitivityResult
        What came out.

    Returns
    -------
    rich.console.Group
        The metric, the ranked numbers, those without effect, warnings and the caution.
    """
    parts: list[RenderableType] = [Text(_heading(result)), _item_table(result)]
    parts.append(Text(_LEGEND, style="dim"))
    parts += [Text(line) for line in _lines(result)]
    return framed(result.title or "sensitivities", parts, result.warnings)


def ends_of(item: SensitivityItem) -> str:
    """Say how far a number was moved: "0.396 to 0.404".

    Parameters
    ----------
    item : SensitivityItem
        The number.

    Returns
    -------
    str
    """
    ends = (item.value - item.tolerance, item.value + item.tolerance)
    return " to ".join(format_value(end, item.unit) for end in ends)


def _heading(result: SensitivityResult) -> str:
    bar = "" if math.isnan(result.numerical_floor) else f" ± {result.numerical_floor:.1e}"
    return f"{METRICS[result.metric]} {result.value:.3e}{bar}, {result.netlist_runs} netlist runs"


def _item_table(result: SensitivityResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("number", style="bold", no_wrap=True)
    for name in ("moved", "lower", "higher", "first", "second"):
        table.add_column(name, justify="right", no_wrap=True)
    names = short_names([item.key for item in result.items])
    for item in result.items:
        if item.status in (NO_EFFECT, FAILED):
            continue
        costs = (_cost(item.cost_low), _cost(item.cost_high))
        style = None if item.status == RESOLVED else "dim"
        table.add_row(
            names[item.key],
            _moved(item),
            *(costs if style is None else ("not res.", f"< {item.bound:.0e}")),
            _derivative(item.first, item.first_error),
            _derivative(item.second, item.second_error),
            style=style,
        )
    return table


def _lines(result: SensitivityResult) -> list[str]:
    names = short_names([item.key for item in result.items])
    idle = [names[item.key] for item in result.items if item.status == NO_EFFECT]
    found = [f"no effect: {', '.join(idle)}"] if idle else []
    if any(item.status not in (RESOLVED, NO_EFFECT, FAILED) for item in result.items):
        found.append(
            "not res.: the change is less than what the simulator's tolerances may do, "
            "which is the bound"
        )
    return found


def _moved(item: SensitivityItem) -> str:
    value = format_value(float(f"{item.value:.4g}"), item.unit)
    if item.value == 0.0 or item.unit == "dB":
        return f"{value} ± {format_value(float(f'{item.tolerance:.3g}'), item.unit)}"
    return f"{value} ± {100.0 * item.tolerance / abs(item.value):.3g} %"


def _cost(value: float) -> str:
    return "-" if math.isnan(value) else f"{value:+.1e}"


def _derivative(value: float, error: float) -> str:
    """Write a derivative, or its bound where it is less than its error."""
    if math.isnan(value):
        return "-"
    return f"{value:+.1e}" if abs(value) > error else f"< {error:.0e}"
