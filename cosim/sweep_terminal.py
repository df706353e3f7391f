"""What a sweep tells, as tables for a terminal."""

import math
from collections.abc import Mapping, Sequence

from rich.console import Group, RenderableType
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from cosim.sweep.columns import PERTURBED
from cosim.sweep.intervals import Yield
from cosim.sweep.statistics import SweepSummary
from cosim.terminal import CAUTION
from cosim.units import format_quantity

_QUANTILES = {"0": "best", "50": "median", "100": "worst"}
_RESOLVED = {True: "yes", False: "no", None: "-"}


def summary_table(summary: SweepSummary, above: Sequence[RenderableType] = ()) -> Group:
    """Lay out what a sweep tells.

    Parameters
    ----------
    summary : SweepSummary
        From `cosim.sweep.statistics.summarise`.
    above : sequence
        What stands below the heading, before all else.

    Returns
    -------
    rich.console.Group
        Counts, yield, quantiles, corners, worst runs, sensitivities, notes and the caution.
        Parts without data are left out.
    """
    parts: list[RenderableType] = [
        Text(_with_unit(summary.metric, summary.unit), style="bold"),
        *above,
        Text(_counts(summary)),
    ]
    if summary.finished:
        parts.append(_number_table(summary))
        parts += _headed("metric over the runs", _quantile_table(summary))
    if summary.corners:
        parts += _headed("corners", _corner_table(summary))
    if summary.worst:
        parts += _headed("worst runs", _worst_table(summary))
    if summary.sensitivities:
        parts += _headed("one at a time, where the swing is largest", _swing_table(summary))
        parts += [Text(line) for line in _swing_places(summary)]
    if summary.correlations:
        parts += _headed(_correlation_heading(summary), _correlation_table(summary))
    parts.append(Text(""))
    parts += [Text(f"note: {line}", style="yellow") for line in summary.notes]
    parts.append(Text(CAUTION, style="dim"))
    return Group(*parts)


def short_names(names: Sequence[str]) -> dict[str, str]:
    """Shorten dotted names to their last part where that tells them apart.

    Parameters
    ----------
    names : sequence of str
        Names of columns.

    Returns
    -------
    dict
        Name to short name.
    """
    last = [name.rpartition(".")[2] for name in names]
    return {
        name: short if last.count(short) == 1 else name
        for name, short in zip(names, last, strict=True)
    }


def describe_inputs(inputs: Mapping[str, float | str], units: Mapping[str, str]) -> str:
    """Write the inputs of a run for people.

    Parameters
    ----------
    inputs : mapping
        Column to value in SI units.
    units : mapping of str
        Unit by column, where it has one.

    Returns
    -------
    str
        For instance "corner ss, vdd 1.045, detuning 50 kHz".
    """
    short = short_names(list(inputs))
    texts = [
        f"{short[name]} {format_input(value, units.get(name, ''))}"
        for name, value in inputs.items()
        if name != PERTURBED
    ]
    moved = str(inputs.get(PERTURBED, ""))
    return ", ".join(texts) + f" ({short.get(moved, moved)} moved)" * bool(moved)


def format_input(value: float | str, unit: str) -> str:
    """Write the value of an input for people.

    Parameters
    ----------
    value : float or str
        In SI units, or a name.
    unit : str
        Its unit; empty or "1" where it has none.

    Returns
    -------
    str
        For instance "50 kHz", "1.045" or "ss".
    """
    if isinstance(value, str):
        return value
    if unit in ("", "1"):
        return "-" if math.isnan(value) else f"{value:.5g}"
    # A prefix suits the upper unit alone: "85 MHz/V".
    top, slash, bottom = unit.partition("/")
    return format_quantity(value, top, 5) + slash + bottom


def format_yield(found: Yield) -> str:
    """Write a yield with its intervals, or say that it is no probability.

    Parameters
    ----------
    found : Yield
        The yield.

    Returns
    -------
    str
        One line.
    """
    text = f"{found.passed} of {found.total}, {format_percent(found.fraction)}"
    if not found.random:
        return text + " of the runs, not a probability"
    exact, score = (
        " to ".join(format_percent(end) for end in ends)
        for ends in (found.clopper_pearson, found.wilson)
    )
    return (
        f"{text}; {100 * found.level:g} % confidence: {exact} (Clopper-Pearson), {score} (Wilson)"
    )


def format_percent(value: float) -> str:
    """Write a fraction in percent.

    Parameters
    ----------
    value : float
        From 0 to 1.

    Returns
    -------
    str
        With as many digits as its distance from 0 or 1 asks for.
    """
    # 99.97 % must not be rounded to 100 %: every failure counts.
    rest = 100 * min(value, 1.0 - value)
    digits = 1 - math.floor(math.log10(rest)) if 0.0 < rest < 1.0 else 1
    return f"{100 * value:.{digits}f} %"


def _counts(summary: SweepSummary) -> str:
    text = f"{summary.reported} of {summary.planned} planned runs, {summary.finished} judged"
    others = [f"{count} {name}" for name, count in summary.statuses.items() if name != "done"]
    if summary.failed:
        text += f", {summary.failed} failed" + (f" ({', '.join(others)})" if others else "")
    return text


def _number_table(summary: SweepSummary) -> Table:
    table = Table(box=None, pad_edge=False, show_header=False)
    table.add_column(style="bold", no_wrap=True)
    table.add_column(overflow="fold")
    limit = summary.goal.limit
    if summary.limit_yield is not None:
        table.add_row("limit", f"at most {limit:.4g}{' ' * bool(summary.unit)}{summary.unit}")
        table.add_row("yield", format_yield(summary.limit_yield))
    if summary.pessimistic_yield is not None:
        table.add_row("failed runs as misses", format_yield(summary.pessimistic_yield))
    if summary.everywhere_yield is not None:
        table.add_row("samples good everywhere", format_yield(summary.everywhere_yield))
    if summary.limit_yield is not None:
        words = "runs lie within their error bar of the limit"
        passed = f", {summary.undecided_passed} of them counted as good"
        table.add_row("undecided", f"{summary.undecided} {words}{passed * (summary.undecided > 0)}")
    spread = summary.standard_deviation
    words = "" if math.isnan(spread) else f", standard deviation {spread:.3e}"
    table.add_row("mean", f"{summary.mean:.3e}{words}")
    return table


def _quantile_table(summary: SweepSummary) -> Table:
    table = _columns([_QUANTILES.get(name, f"{name} %") for name in summary.quantiles])
    table.add_row(*(f"{value:.3e}" for value in summary.quantiles.values()))
    return table


def _corner_table(summary: SweepSummary) -> Table:
    limited = not math.isnan(summary.goal.limit)
    names = ["corner", "runs", "failed", "median", "worst", *["yield", "Clopper-Pearson"] * limited]
    table = _columns(names, left=1)
    for row in summary.corners:
        cells = [
            escape(row.name),
            str(row.runs),
            str(row.failed),
            _number(row.median),
            _number(row.worst),
        ]
        if limited:
            found = row.limit_yield
            cells.append("-" if found is None else format_percent(found.fraction))
            interval = found is not None and found.random
            ends = found.clopper_pearson if found is not None else ()
            cells.append(" to ".join(format_percent(end) for end in ends) if interval else "-")
        table.add_row(*cells)
    return table


def _worst_table(summary: SweepSummary) -> Table:
    table = _columns(["run", "metric", "error bar"])
    table.add_column("inputs", overflow="fold")
    for run in summary.worst:
        # Rich would take "[hot]" in a name for a style.
        bar = "-" if math.isnan(run.error_bar) else f"± {run.error_bar:.1e}"
        inputs = describe_inputs(run.inputs, summary.units)
        table.add_row(str(run.id), f"{run.metric:.3e}", bar, escape(inputs))
    return table


def _swing_table(summary: SweepSummary) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("moved", overflow="fold")
    for name in ("low", "nominal", "high", "swing", "derivative", "resolved"):
        table.add_column(name, justify="right", no_wrap=True)
    short = short_names(summary.inputs)
    for item in summary.sensitivities:
        at, unit = item.largest, summary.units.get(item.key, "")
        ends = " to ".join(format_input(value, unit) for value in (at.low_input, at.high_input))
        values = [_number(value, 2) for value in (at.low, at.nominal, at.high, at.swing)]
        slope = _number(at.derivative, 2)
        if unit and not math.isnan(at.derivative):
            slope += f" per {unit}"
        table.add_row(escape(f"{short[item.key]} {ends}"), *values, slope, _RESOLVED[item.resolved])
    return table


def _swing_places(summary: SweepSummary) -> list[str]:
    short = short_names(summary.inputs)
    places: dict[str, list[str]] = {}
    for item in summary.sensitivities:
        if item.largest.point:
            place = describe_inputs(item.largest.point, summary.units)
            places.setdefault(place, []).append(short[item.key])
    return [f"at {place}: {', '.join(keys)}" for place, keys in places.items()]


def _correlation_heading(summary: SweepSummary) -> str:
    where = "within the corners" if len(summary.corners) > 1 else "over the runs"
    fit = f"linear fit with R^2 {summary.r_squared:.3f}"
    return (
        f"inputs and metric, {where}; {'no linear fit' if math.isnan(summary.r_squared) else fit}"
    )


def _correlation_table(summary: SweepSummary) -> Table:
    names = ["input", "share", "rank corr.", "std. coeff.", "spread", "resolved", "beyond chance"]
    table = _columns(names, left=1)
    short = short_names(summary.inputs)
    for item in summary.correlations:
        # Of a share of variance, other than of a yield, no more than a tenth of a percent counts.
        share = "-" if math.isnan(item.share) else f"{100 * item.share:.1f} %"
        slope = "-" if math.isnan(item.standardised) else f"{item.standardised:+.3f}"
        cells = (share, f"{item.spearman:+.3f}", slope, _number(item.effect, 2))
        table.add_row(
            short[item.key], *cells, _RESOLVED[item.resolved], _RESOLVED[item.significant]
        )
    return table


def _headed(heading: str, table: Table) -> list[RenderableType]:
    return [Text(""), Text(heading, style="bold"), table]


def _columns(names: Sequence[str], left: int = 0) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for at, name in enumerate(names):
        table.add_column(name, justify="left" if at < left else "right", no_wrap=at >= left)
    return table


def _number(value: float, digits: int = 3) -> str:
    return "-" if math.isnan(value) else f"{value:.{digits}e}"


def _with_unit(name: str, unit: str) -> str:
    return f"{name} ({unit})" if unit not in ("", "1") else name
