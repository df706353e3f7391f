"""What a sweep tells, as a page of figures."""

import math
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes
from matplotlib.axis import XAxis, YAxis
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from cosim.errors import InputError
from cosim.sweep.columns import CORNER, EACH, FROZEN, TRIM, Table, encode
from cosim.sweep.goal import judged
from cosim.sweep.statistics import SweepSummary
from cosim.sweep_terminal import describe_inputs, format_input, short_names
from cosim.terminal import CAUTION
from cosim.tornado import COLORS, GRAY, TornadoBar, draw_tornado, label_bars
from cosim.waveform import FloatArray

_MARKERS = "os^Dv<>P"
_DASHES: tuple[Any, ...] = (
    "-",
    "--",
    "-.",
    ":",
    (0, (5, 1)),
    (0, (1, 1)),
    (0, (3, 1, 1, 1)),
    (0, (8, 3)),
)
_MOST_SCATTERS = 3
_MOST_BARS = 10
_MOST_STEPS = 2000
# Below this ratio of its ends a logarithmic axis has no decades to show.
_LEAST_RATIO = 5.0
_FEW_DECADES = 300.0
_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}
_PREFIXED = ("s", "Hz", "V", "A", "F", "H", "W", "m")


@dataclass(frozen=True)
class _Series:
    """The runs of a corner, or all: their places in the table and their looks."""

    name: str
    runs: npt.NDArray[np.int64]
    number: int


def plot_sweep(
    table: Table,
    units: Mapping[str, str],
    summary: SweepSummary,
    path: str | os.PathLike[str],
) -> None:
    """Draw a sweep: histogram, yield curve, scatter plots, tornado, as far as there are data.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.
    units : mapping of str
        Unit by column, from `cosim.archive.read_units`.
    summary : SweepSummary
        What `cosim.sweep.statistics.summarise` says of that table.
    path : path
        File to write; its ending says the format: png, pdf, svg.

    Raises
    ------
    InputError
        If no run has finished, or the file cannot be written.
    """
    if not summary.finished:
        raise InputError("no run of the sweep has finished: there is nothing to draw")
    metric = judged(table, summary.goal)[0]
    series = _series(table, summary, metric)
    panels: list[Callable[[Axes], None]] = [
        partial(_draw_histogram, summary=summary, metric=metric, series=series),
        partial(_draw_yield, summary=summary, metric=metric, series=series),
    ]
    if any(not math.isnan(item.swing) for item in summary.sensitivities):
        panels.append(partial(_draw_swings, summary=summary, units=units))
    if summary.correlations:
        panels.append(partial(_draw_shares, summary=summary))
    for item in summary.correlations[:_MOST_SCATTERS]:
        panels.append(
            partial(
                _draw_scatter,
                summary=summary,
                metric=metric,
                series=series,
                values=np.asarray(table[item.key], dtype=float),
                name=item.key,
                unit=units.get(item.key, ""),
            )
        )
    columns = 3 if len(panels) in (3, 5, 6) else 2
    rows = math.ceil(len(panels) / columns)
    figure = Figure(figsize=(4.4 * columns, 3.7 * rows + 0.6), layout="constrained")
    FigureCanvasAgg(figure)
    for at, draw in enumerate(panels, start=1):
        draw(figure.add_subplot(rows, columns, at))
    figure.suptitle("each die trimmed, " * _both(table) + _title(summary), wrap=True)
    figure.text(0.995, 0.003, CAUTION, ha="right", va="bottom", fontsize=6, color="0.45")
    figure.get_layout_engine().set(  # type: ignore[union-attr]
        rect=(0, 0.025, 1, 0.975),
        h_pad=0.1,
        w_pad=0.08,  # type: ignore[call-arg]
    )
    try:
        figure.savefig(path, dpi=150)
    except (OSError, ValueError) as error:
        raise InputError(f"the figure {os.fspath(path)} cannot be written: {error}") from None


def _title(summary: SweepSummary) -> str:
    found, text = summary.limit_yield, f"{summary.metric}: {summary.finished} runs"
    if summary.failed:
        text += f", {summary.failed} more failed"
    if found is None:
        return text
    text += f"; {100 * found.fraction:.1f} % keep the limit {summary.goal.limit:.3g}"
    if found.random:
        low, high = (100 * end for end in found.clopper_pearson)
        text += f" ({low:.1f} to {high:.1f} % at {100 * found.level:g} % confidence)"
    if (everywhere := summary.everywhere_yield) is not None:
        text += f", {100 * everywhere.fraction:.1f} % of the samples everywhere"
    return text


def _series(table: Table, summary: SweepSummary, metric: FloatArray) -> list[_Series]:
    """Part the judged runs by trim, or else by corner as far as there are colors."""
    good = np.isfinite(metric)
    if _both(table):
        return [
            _Series(f"trim: {name}", np.flatnonzero(good & (table[TRIM] == name)), at)
            for at, name in enumerate((FROZEN, EACH))
        ]
    if not 1 < len(summary.corners) <= len(COLORS):
        return [_Series("", np.flatnonzero(good), 0)]
    names, codes = encode(table[CORNER])
    parts = [
        _Series(name, np.flatnonzero(good & (codes == at)), at) for at, name in enumerate(names)
    ]
    return [part for part in parts if part.runs.size]


def _both(table: Table) -> bool:
    """Whether there are runs with a frozen trim and with one for each die."""
    return TRIM in table and all((table[TRIM] == name).any() for name in (FROZEN, EACH))


def _is_log(values: FloatArray, limit: float) -> bool:
    """Whether a logarithmic axis suits the metric and its limit."""
    ends = values[values > 0.0]
    if not ends.size or (values <= 0.0).mean() > 0.5:
        return False
    if limit > 0.0:
        ends = np.append(ends, limit)
    return bool(ends.max() > _LEAST_RATIO * ends.min())


def _make_log(axis: XAxis | YAxis, values: FloatArray, limit: float) -> None:
    set_scale = axis.axes.set_xscale if axis.axis_name == "x" else axis.axes.set_yscale
    set_scale("log", nonpositive="mask")
    ends = np.append(values, limit)
    ends = ends[ends > 0.0]
    if ends.max() < _FEW_DECADES * ends.min():
        # Too few powers of ten to read a value by; all digits would overlap.
        axis.set_major_locator(LogLocator(subs=(1.0, 3.0)))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:.0e}"))
    axis.set_minor_formatter(NullFormatter())


def _metric_label(summary: SweepSummary) -> str:
    return f"{summary.metric} ({summary.unit})" if summary.unit not in ("", "1") else summary.metric


def _draw_histogram(
    axes: Axes, summary: SweepSummary, metric: FloatArray, series: Sequence[_Series]
) -> None:
    good = metric[np.isfinite(metric)]
    count = min(max(round(math.sqrt(good.size)), 8), 50)
    hidden = 0
    if _is_log(good, summary.goal.limit):
        hidden = int((good <= 0.0).sum())
        shown = good[good > 0.0]
        edges = np.geomspace(shown.min(), shown.max() * (1.0 + 1e-9), count + 1)
        _make_log(axes.xaxis, good, summary.goal.limit)
    else:
        # Equal values get a bin that is seen.
        half = 0.5 * float(np.ptp(good)) or 0.05 * abs(float(good[0])) or 1.0
        middle = 0.5 * float(good.min() + good.max())
        edges = np.linspace(middle - half, middle + half, count + 1)
        # Rounding must not leave the least or the greatest outside.
        edges[0], edges[-1] = min(edges[0], good.min()), max(edges[-1], good.max())
    alone = len(series) == 1
    for part in series:
        axes.hist(
            metric[part.runs],
            edges.tolist(),
            histtype="bar" if alone else "step",
            alpha=0.75 if alone else 1.0,
            lw=0.0 if alone else 1.5,
            ls=_DASHES[part.number],
            color=COLORS[part.number],
        )
    _mark_limit(axes.axvline, summary)
    axes.set_xlabel(_metric_label(summary))
    axes.set_ylabel("runs per bin")
    title = "histogram" + f"; {hidden} runs at or below 0 are not shown" * bool(hidden)
    axes.set_title(title, fontsize=10)
    axes.yaxis.set_major_locator(MaxNLocator(6, integer=True))


def _draw_yield(
    axes: Axes, summary: SweepSummary, metric: FloatArray, series: Sequence[_Series]
) -> None:
    good = metric[np.isfinite(metric)]
    log = _is_log(good, summary.goal.limit)
    for part in series:
        values = np.sort(metric[part.runs])
        share = 100.0 * np.arange(1, values.size + 1) / values.size
        # More steps than this are not seen, but make a large file.
        kept = np.unique(np.linspace(0, values.size - 1, _MOST_STEPS).astype(int))
        axes.step(
            np.append(values[kept[:1]], values[kept]),
            np.append(0.0, share[kept]),
            where="post",
            lw=1.5,
            ls=_DASHES[part.number],
            color=COLORS[part.number],
            label=part.name,
        )
    if log:
        _make_log(axes.xaxis, good, summary.goal.limit)
    _mark_limit(axes.axvline, summary)
    axes.set_ylim(0.0, 103.0)
    axes.set_xlabel(f"limit on the {_metric_label(summary)}")
    axes.set_ylabel("runs that keep it (%)")
    axes.set_title("yield curve" + ", failed runs left out" * bool(summary.failed), fontsize=10)
    axes.grid(alpha=0.3)
    # The one legend of the page: colors and dashes mean the same in all panels.
    if any(axes.get_legend_handles_labels()[1]):
        axes.legend(fontsize=7)


def _draw_scatter(
    axes: Axes,
    summary: SweepSummary,
    metric: FloatArray,
    series: Sequence[_Series],
    values: FloatArray,
    name: str,
    unit: str,
) -> None:
    scale, shown = _scale(values[np.isfinite(values)], unit)
    good = metric[np.isfinite(metric)]
    if _is_log(good, summary.goal.limit):
        _make_log(axes.yaxis, good, summary.goal.limit)
    # Many points are drawn as pixels in vector formats too, and lighter.
    size, alpha = (4.0, 0.25) if good.size > 5000 else (12.0, 0.7)
    for part in series:
        axes.scatter(
            values[part.runs] * scale,
            metric[part.runs],
            s=size,
            alpha=alpha,
            lw=0,
            color=COLORS[part.number],
            marker=_MARKERS[part.number],
            rasterized=good.size > 2000,
        )
    _mark_limit(axes.axhline, summary)
    short = short_names(summary.inputs)[name]
    axes.set_xlabel(f"{short} ({shown})" if shown else short)
    axes.set_ylabel(_metric_label(summary))


def _draw_swings(axes: Axes, summary: SweepSummary, units: Mapping[str, str]) -> None:
    items = [item for item in summary.sensitivities if not math.isnan(item.swing)][:_MOST_BARS]
    short = short_names(summary.inputs)
    bars = []
    for item in items:
        at = item.largest
        unit = units.get(item.key, "")
        ends = " to ".join(format_input(value, unit) for value in (at.low_input, at.high_input))
        where = f"\nat {describe_inputs(at.point, units)}" if at.point else ""
        label = f"{short[item.key]}\n{ends}{where}"
        changes = at.low - at.nominal, at.high - at.nominal
        bars.append(TornadoBar(label, *changes, faint=item.resolved is False))
    draw_tornado(axes, bars, summary.unit)
    gray = ", gray: within the error bars" * any(bar.faint for bar in bars)
    axes.set_title(f"one at a time, the largest swings{gray}", fontsize=10)


def _draw_shares(axes: Axes, summary: SweepSummary) -> None:
    items = [item for item in summary.correlations if not math.isnan(item.share)][:_MOST_BARS]
    short = short_names(summary.inputs)
    gray = [item.significant is False or item.resolved is False for item in items]
    colors = [GRAY if faint else COLORS[0] for faint in gray]
    axes.barh(range(len(items)), [100.0 * item.share for item in items], 0.6, color=colors)
    labels = [f"{short[item.key]}\nrank corr. {item.spearman:+.2f}" for item in items]
    label_bars(axes, labels)
    axes.set_xlim(0.0, 100.0)
    axes.set_xlabel("variance that goes with the input alone (%)")
    words = ", gray: chance, or within the error bars" * any(gray)
    axes.set_title(f"influence{words}", fontsize=10)


def _mark_limit(line: Callable[..., object], summary: SweepSummary) -> None:
    if not math.isnan(summary.goal.limit):
        label = f"limit {summary.goal.limit:.3g}"
        line(summary.goal.limit, label=label, color="0.25", lw=1.2, ls=(0, (6, 2)))


def _scale(values: FloatArray, unit: str) -> tuple[float, str]:
    """Give the factor to a prefix that suits the values, and the unit with it."""
    top, slash, bottom = unit.partition("/")
    largest = float(np.abs(values).max()) if values.size else 0.0
    if top not in _PREFIXED or largest == 0.0:
        return 1.0, "" if unit == "1" else unit
    power = min(max(3 * math.floor(math.log10(largest) / 3.0), -15), 12)
    return 10.0**-power, f"{_PREFIXES[power]}{top}{slash}{bottom}"
