"""Yields of a sweep with and without trims, as tables for a terminal."""

import math
from collections.abc import Mapping, Sequence

from rich.console import RenderableType
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from cosim.sweep.columns import EACH, FROZEN
from cosim.sweep.intervals import Yield
from cosim.sweep.trim_comparison import KnobSpread, TrimPart
from cosim.sweep_terminal import describe_inputs, format_input, format_percent, short_names

_HEADS = {FROZEN: "one trim for all", EACH: "a trim for each die"}
_LEFT = {
    "rest": "decoherence and noise",
    "unreached": "error that no knob reaches",
    "bounds": "bounds of the knobs",
    "resolution": "resolution of the knobs",
}
_QUANTILES = {"0": "best", "50": "median", "95": "95 %", "100": "worst"}
_MOST_POINTS = 12


def trim_parts(parts: Sequence[TrimPart], units: Mapping[str, str]) -> list[RenderableType]:
    """Lay out what a sweep tells of its trims.

    Parameters
    ----------
    parts : sequence of TrimPart
        From `cosim.sweep.trim_comparison.compare_trims`.
    units : mapping of str
        Unit by column.

    Returns
    -------
    list
        The trims side by side, what they warn of, the corners and points of the grid where there
        are up to a dozen, and a line on whose runs the tables after it are.
    """
    found: list[RenderableType] = [_side_by_side(parts, units)]
    for part in parts:
        for words, count in part.warnings.items():
            line = f"note: {count} of {part.trims} calibrations ({part.trim}) warn: {words}"
            found.append(Text(line, style="yellow"))
    points = max((len(part.points) for part in parts), default=0)
    if 1 < points <= _MOST_POINTS:
        found += [Text(""), Text("by corner and point of the grid", style="bold")]
        found.append(_point_table(parts, units))
    if len(parts) > 1:
        found += [Text(""), Text(f"of the runs with {_HEADS[parts[-1].trim]}", style="bold")]
    return [*found, Text("")]


def _side_by_side(parts: Sequence[TrimPart], units: Mapping[str, str]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("trim", no_wrap=True)
    for part in parts:
        table.add_column(_HEADS[part.trim], justify="right", no_wrap=True)
    rows = [
        ("calibrations", [str(part.trims) for part in parts]),
        ("their runs of the netlist", [str(part.netlist_runs) for part in parts]),
        ("runs", [_runs(part) for part in parts]),
    ]
    for name, yields in (
        ("yield", [part.summary.limit_yield for part in parts]),
        ("failed runs as misses", [part.summary.pessimistic_yield for part in parts]),
        ("dies good everywhere", [part.summary.everywhere_yield for part in parts]),
    ):
        rows.append((name, [_share(found) for found in yields]))
        rows.append(("  Clopper-Pearson", [_exact(found) for found in yields]))
        rows.append(("  Wilson", [_score(found) for found in yields]))
    for percent, name in _QUANTILES.items():
        rows.append((name, [_number(part.summary.quantiles.get(percent)) for part in parts]))
    keys = list(dict.fromkeys(knob.key for part in parts for knob in part.knobs))
    short = short_names(keys)
    for key in keys:
        knobs = [{knob.key: knob for knob in part.knobs}.get(key) for part in parts]
        unit = units.get(key, "")
        rows.append((escape(short[key]), [_middle(knob, unit) for knob in knobs]))
        rows.append(("  over the dies", [_ends(knob, unit) for knob in knobs]))
    rows.append(("left where it was trimmed", [_number(part.after) for part in parts]))
    for name, words in _LEFT.items():
        rows.append((f"  {words}", [_number(part.left.get(name), 1) for part in parts]))
    for name, cells in rows:
        if any(cells):
            table.add_row(name, *cells)
    return table


def _point_table(parts: Sequence[TrimPart], units: Mapping[str, str]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    table.add_column("point", overflow="fold")
    table.add_column("trim", no_wrap=True)
    limited = any(part.summary.limit_yield is not None for part in parts)
    for name in ("median", "worst", *["yield", "Clopper-Pearson"] * limited):
        table.add_column(name, justify="right", no_wrap=True)
    rows = {
        (describe_inputs(item.point, units), part.trim): item
        for part in parts
        for item in part.points
    }
    for place in dict.fromkeys(place for place, _ in rows):
        for at, part in enumerate(part for part in parts if (place, part.trim) in rows):
            point = rows[place, part.trim]
            cells = [_number(point.median), _number(point.worst)]
            if limited:
                # A failed run is no good die.
                found = point.pessimistic_yield or point.limit_yield
                cells += [_share(found), _exact(found)]
            table.add_row("" if at else escape(place), part.trim, *cells)
    return table


def _runs(part: TrimPart) -> str:
    found = part.summary
    text = f"{found.reported} of {found.planned}" if found.missing else str(found.reported)
    return text + f", {found.failed} failed" * bool(found.failed)


def _share(found: Yield | None) -> str:
    if found is None:
        return ""
    return f"{found.passed} of {found.total}, {format_percent(found.fraction)}"


def _exact(found: Yield | None) -> str:
    return _interval(found.clopper_pearson) if found is not None and found.random else ""


def _score(found: Yield | None) -> str:
    return _interval(found.wilson) if found is not None and found.random else ""


def _interval(ends: tuple[float, float]) -> str:
    return " to ".join(format_percent(end) for end in ends)


def _middle(knob: KnobSpread | None, unit: str) -> str:
    return "" if knob is None else format_input(knob.median, unit)


def _ends(knob: KnobSpread | None, unit: str) -> str:
    if knob is None or knob.low == knob.high:
        return ""
    return f"{format_input(knob.low, unit)} to {format_input(knob.high, unit)}"


def _number(value: float | None, digits: int = 3) -> str:
    return "" if value is None or math.isnan(value) else f"{value:.{digits}e}"
