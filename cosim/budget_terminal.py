"""An error budget as tables for a terminal."""

import math

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from cosim.budget.result import BudgetItem, BudgetResult, IdealPulse
from cosim.terminal import CAUTION
from cosim.units import format_quantity

# What costs less than this has no line of its own, unless it is all there is.
LEAST_SHOWN = 1e-10

_VIEWS = {
    "as_simulated": "as simulated",
    "free_frame": "in the free frame",
    "calibrated": "calibrated",
}


def budget_parts(result: BudgetResult) -> Group:
    """Lay out an error budget.

    Parameters
    ----------
    result : BudgetResult

    Returns
    -------
    rich.console.Group
        Heading, the ranked table, pairs, the advice, warnings and the caution.
    """
    known = "" if math.isnan(result.error_bar) else f" ± {result.error_bar:.1e}"
    parts: list[RenderableType] = [
        Text(result.title or "gate", style="bold"),
        Text(
            f"target {result.target}; infidelity {_VIEWS[result.fidelity]} "
            f"{result.total_infidelity:.3e}{known}"
        ),
        Text(_ideal_line(result.ideal)),
        _item_table(result),
    ]
    small = [item.name for item in result.items if not _shown(item) and item.kind != "numerical"]
    if small:
        parts.append(Text(f"below {LEAST_SHOWN:.0e} both ways: {', '.join(small)}", style="dim"))
    parts += [Text(""), _note_table(result)]
    if result.pairs:
        parts += [Text(""), Text("together on the ideal pulse"), _pair_table(result)]
    parts += [Text(""), Text(result.advice, style="bold")]
    parts += [Text(f"warning: {line}", style="yellow") for line in result.warnings]
    parts.append(Text(CAUTION, style="dim"))
    return Group(*parts)


def _shown(item: BudgetItem) -> bool:
    costs = [abs(cost) for cost in (item.alone, item.removed) if not math.isnan(cost)]
    return bool(costs) and max(costs) >= LEAST_SHOWN


def _ideal_line(ideal: IdealPulse) -> str:
    edges = ""
    if ideal.family == "flat-top":
        edges = f", edges {_seconds(ideal.rise)} and {_seconds(ideal.fall)} (10 to 90 %)"
    weight = f", DRAG weight {ideal.quadrature:.4g}" * (ideal.quadrature != 0.0)
    fit = f"; from the fit: {', '.join(ideal.from_fit)}" * bool(ideal.from_fit)
    return (
        f"ideal pulse: {ideal.family}, {_seconds(ideal.duration)} at half height{edges}{weight}"
        f"{fit}"
    )


def _item_table(result: BudgetResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", style="bold", no_wrap=True)
    for name in ("value", "alone", "removed"):
        table.add_column(name, justify="right", no_wrap=True)
    table.add_column("absorbed by", no_wrap=True)
    shown = [item for item in result.items if _shown(item)]
    for item in (item for item in shown if item.counted):
        costs = (_cost(item.alone), _cost(item.removed))
        table.add_row(item.name, value_text(item), *costs, item.absorbed_by or "-")
    table.add_row("sum", "", _cost(result.total_infidelity - result.interaction))
    table.add_row("interaction", "", _cost(result.interaction))
    table.add_row("total", "", _cost(result.total_infidelity))
    for item in (item for item in shown if not item.counted):
        table.add_row(
            item.name, value_text(item), _cost(item.alone), _cost(item.removed), "no part"
        )
    return table


def _note_table(result: BudgetResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", style="bold", no_wrap=True)
    table.add_column("about x, y, z (mrad)", justify="right", no_wrap=True)
    table.add_column("", overflow="fold")
    for item in result.items:
        if _shown(item):
            table.add_row(item.name, _vector(item), item.note)
    return table


def value_text(item: BudgetItem) -> str:
    """Write the size of an imperfection.

    Parameters
    ----------
    item : BudgetItem

    Returns
    -------
    str
    """
    value = item.value
    if math.isnan(value) or item.kind in ("incoherent", "numerical"):
        return "-"
    if item.unit == "dBc":
        return "none" if math.isinf(value) else f"{value:.1f} dBc"
    if item.unit == "rad":
        return f"{math.degrees(value):+.4g}°"
    if item.unit == "1":
        return f"{100.0 * value:+.4g} %" if item.name != "quadrature" else f"{value:+.4g}"
    text = format_quantity(value, item.unit)
    return text if value < 0.0 else f"+{text}"


def _cost(value: float) -> str:
    if math.isnan(value):
        return "-"
    return f"{value:.2e}" if abs(value) >= 1e-12 else "0"


def _vector(item: BudgetItem) -> str:
    if any(math.isnan(part) for part in item.error_vector):
        return "-"
    return ", ".join(f"{1e3 * part + 0.0:+.3f}" for part in item.error_vector)


def _pair_table(result: BudgetResult) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("", no_wrap=True)
    for name in ("together", "beyond the sum"):
        table.add_column(name, justify="right", no_wrap=True)
    table.add_column("", no_wrap=True)
    for pair in result.pairs:
        names = f"{pair.first} + {pair.second}"
        table.add_row(names, _cost(pair.together), _cost(pair.interaction), pair.relation)
    return table


def _seconds(value: float) -> str:
    return format_quantity(value, "s")
