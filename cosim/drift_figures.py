"""A study of drift as a figure: infidelity and its sources over the time since a trim."""

import math
import os
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter, NullLocator

from cosim.calibration_terminal import METRICS
from cosim.drift.result import DriftResult
from cosim.drift_terminal import format_time
from cosim.figure_frame import write_figure
from cosim.tornado import COLORS

# Times that people mark an axis with, in s.
_MARKS = (1e-6, 1e-3, 1.0, 10.0, 60.0, 600.0, 3600.0, 6 * 3600.0, 86400.0, 864000.0)
_DASHES: tuple[Any, ...] = ("-", "--", "-.", ":", (0, (5, 1)), (0, (1, 1)))
# Sources that cost less than this part of the largest are not drawn.
_LEAST_SHARE = 1e-5
# Ratios of the ends of an axis, beyond which all levels between powers of ten, and even two of
# them, would run into one another.
_FEW, _MANY = 8.0, 300.0


def plot_drift(result: DriftResult, path: str | os.PathLike[str]) -> None:
    """Draw a study of drift.

    Parameters
    ----------
    result : DriftResult
        What came out.
    path : path
        File to write; its ending says the format: png, pdf, svg.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(9.6, 4.6), layout="constrained")
    FigureCanvasAgg(figure)
    left, right = figure.subplots(1, 2)
    _draw_mean(left, result)
    _draw_sources(right, result)
    for axes in (left, right):
        _mark_times(axes, result)
    write_figure(figure, result.title or "drift", path)


def _draw_mean(axes: Axes, result: DriftResult) -> None:
    axes.fill_between(
        result.time, result.low, result.high, color=COLORS[2], alpha=0.35, lw=0, label="5 to 95 %"
    )
    axes.plot(result.time, result.median, color=COLORS[2], lw=1.2, label="median")
    axes.plot(result.time, result.mean, color=COLORS[0], lw=1.8, label="mean")
    axes.plot(
        result.time,
        result.average,
        color=COLORS[0],
        lw=1.2,
        ls="--",
        label="averaged since the trim",
    )
    if not math.isnan(result.limit):
        axes.axhline(result.limit, color="0.25", lw=1.2, ls=(0, (6, 2)), label="limit of the mean")
    for interval in (result.interval_end, result.interval_average):
        if math.isfinite(interval) and interval > result.time[0]:
            axes.axvline(interval, color=COLORS[1], lw=1.0)
            axes.plot([interval], [result.limit], "o", color=COLORS[1], ms=4)
    axes.set_yscale("log")
    axes.set_ylabel(METRICS[result.metric].replace(" after ", "\nafter "))
    axes.legend(fontsize=7, loc="upper left")
    _mark_levels(axes)


def _mark_levels(axes: Axes) -> None:
    """Label the levels between powers of ten as far as there is room for them."""
    low, high = axes.get_ylim()
    if high > _MANY * low:
        axes.yaxis.set_minor_formatter(NullFormatter())
        return
    if high > _FEW * low:
        axes.yaxis.set_minor_locator(LogLocator(subs=(2.0, 5.0)))
    axes.yaxis.set_minor_formatter(FuncFormatter(lambda value, _: f"{value:.1e}"))
    axes.tick_params(axis="y", which="minor", labelsize=7)


def _draw_sources(axes: Axes, result: DriftResult) -> None:
    largest = max(float(np.abs(source.alone).max()) for source in result.sources)
    shown = 0
    for source in result.sources:
        values = np.where(source.alone > 0.0, source.alone, np.nan)
        if not np.nan_to_num(values).max() > _LEAST_SHARE * largest:
            continue
        style = {"color": COLORS[shown % len(COLORS)], "ls": _DASHES[shown % len(_DASHES)]}
        axes.plot(result.time, values, label=source.name, lw=1.6, **style)
        shown += 1
    if shown:
        axes.set_yscale("log")
        axes.set_ylim(bottom=_LEAST_SHARE * largest)
        axes.legend(fontsize=7, loc="lower right")
    hidden = len(result.sources) - shown
    more = f"; {hidden} of no account" * (hidden > 0)
    axes.set_title(f"what each source adds by itself{more}", fontsize=10)
    axes.set_ylabel("mean infidelity added")


def _mark_times(axes: Axes, result: DriftResult) -> None:
    axes.set_xscale("log")
    ends = (float(result.time[0]), float(result.time[-1]))
    axes.set_xlim(*ends)
    marks = [mark for mark in _MARKS if ends[0] <= mark <= ends[1]]
    if len(marks) > 1:
        axes.set_xticks(marks, [format_time(mark) for mark in marks], fontsize=8)
        axes.xaxis.set_minor_locator(NullLocator())
    else:
        axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlabel("time since the trim")
