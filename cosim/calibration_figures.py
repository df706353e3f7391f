"""A calibration as a figure: the runs, what is left, and what each knob costs off its best."""

import math
import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from cosim.calibration.result import CalibrationResult, KnobResult
from cosim.calibration_terminal import METRICS, limit_label
from cosim.figure_frame import write_figure

_MARKS = {
    "start": ("s", "C3"),
    "difference": ("o", "0.55"),
    "step": ("D", "C0"),
    "neighbour": ("^", "C1"),
}
_WORDS = {
    "start": "start",
    "difference": "difference",
    "step": "step to the model's best",
    "neighbour": "neighbours of the best",
}
_COLUMNS = 3
_POINTS = 201


def plot_calibration(result: CalibrationResult, path: str | os.PathLike[str]) -> None:
    """Draw a calibration.

    Parameters
    ----------
    result : CalibrationResult
        What came out.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    rows = math.ceil(len(result.knobs) / _COLUMNS)
    figure = Figure(figsize=(10.5, 3.6 + 3.0 * rows), layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(2, 1, height_ratios=[3.6, 3.0 * rows])
    runs, left = figure.add_subfigure(grid[0]).subplots(1, 2, width_ratios=[3, 2])
    _draw_runs(runs, result)
    _draw_limits(left, result)
    columns = min(_COLUMNS, len(result.knobs))
    below = figure.add_subfigure(grid[1]).subplots(rows, columns, squeeze=False).ravel()
    for axes, knob in zip(below, result.knobs, strict=False):
        _draw_knob(axes, result, knob)
    for axes in below[len(result.knobs) :]:
        axes.remove()
    write_figure(figure, result.title or "calibration", path)


def _draw_runs(axes: Axes, result: CalibrationResult) -> None:
    runs = [run for run in result.history if run.purpose in _MARKS]
    for purpose, (marker, colour) in _MARKS.items():
        numbers = [at for at, run in enumerate(runs, start=1) if run.purpose == purpose]
        values = [run.metric for run in runs if run.purpose == purpose]
        if numbers:
            axes.plot(numbers, values, marker, color=colour, label=_WORDS[purpose])
    best = np.minimum.accumulate([run.metric for run in runs])
    axes.step(range(1, len(runs) + 1), best, where="post", color="0.7", lw=1, zorder=0)
    axes.axhline(result.after, color="C2", lw=1, label=f"after the trim: {result.after:.2e}")
    if not math.isnan(result.numerical_floor):
        axes.axhline(
            result.numerical_floor,
            color="0.4",
            lw=1,
            ls="--",
            label=f"its error bar: {result.numerical_floor:.1e}",
        )
    axes.set_yscale("log")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set(xlabel="run", ylabel=METRICS[result.metric])
    axes.legend(fontsize=7)


def _draw_limits(axes: Axes, result: CalibrationResult) -> None:
    limits = result.limits
    # What is below a ten-thousandth of the whole need not be seen.
    least = 1e-4 * result.after
    items = {
        name: value
        for name, value in (
            ("rest", limits.rest),
            ("resolution", limits.resolution),
            ("bounds", limits.bounds),
            ("unreached", limits.unreached),
        )
        if value > least
    }
    names = list(items)
    colours = ["C3" if name == result.limited_by else "0.6" for name in names]
    axes.barh(range(len(names)), list(items.values()), color=colours, height=0.6)
    axes.set_xscale("log")
    axes.set_xlim(least, 10.0 * result.after)
    axes.set_yticks(range(len(names)), [limit_label(result, name) for name in names], fontsize=8)
    for at, value in enumerate(items.values()):
        axes.text(value, at, f" {value:.1e}", va="center", fontsize=7)
    if result.numerical_floor > least:
        axes.axvline(result.numerical_floor, color="0.4", lw=1, ls="--")
    axes.set_xlabel("part of the metric")
    axes.set_title("what is left", fontsize=9)


def _draw_knob(axes: Axes, result: CalibrationResult, knob: KnobResult) -> None:
    scale, unit = _scaled(knob)
    # So far that the curve rises by as much as the metric itself, or over some steps.
    reach = knob.high - knob.low
    if knob.stiffness > 0.0:
        reach = 3.0 * math.sqrt(max(result.cost, result.after) / knob.stiffness)
        reach = max(reach, 2.5 * knob.resolution)
    low, high = max(knob.low, knob.found - reach), min(knob.high, knob.found + reach)
    x = np.linspace(low, high, _POINTS)
    move = x - knob.found
    y = result.after + knob.slope * move + knob.stiffness * move**2
    axes.plot(x * scale, y, color="C0", lw=1.2)
    if knob.resolution:
        count = np.arange(math.ceil(-reach / knob.resolution), reach / knob.resolution)
        steps = knob.found + count * knob.resolution
        steps = steps[(steps >= low - 1e-9 * knob.high) & (steps <= high)]
        if steps.size <= 40:
            off = steps - knob.found
            on = result.after + knob.slope * off + knob.stiffness * off**2
            axes.plot(steps * scale, on, ".", color="C0")
    axes.plot(knob.found * scale, result.after, "D", color="C2", label="found")
    if low <= knob.start <= high:
        axes.axvline(knob.start * scale, color="C3", lw=1, ls=":", label="start")
    for edge in (knob.low, knob.high):
        if low <= edge <= high:
            axes.axvline(edge * scale, color="0.4", lw=1, ls="--", label="bound")
    axes.axhline(result.after + result.cost, color="0.7", lw=0.8)
    axes.text(
        0.02,
        result.after + result.cost,
        f"+ {result.cost:.0e}",
        fontsize=7,
        va="bottom",
        transform=axes.get_yaxis_transform(),
        color="0.4",
    )
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel(f"{knob.key}{unit}", fontsize=8)
    axes.set_ylabel("metric, the others at rest", fontsize=8)
    # Between the arms of the curve, and clear of what is written beside its foot.
    axes.legend(fontsize=7, loc="upper center")


def _scaled(knob: KnobResult) -> tuple[float, str]:
    """Give the factor to a handy unit, and that unit for the axis."""
    largest = max(abs(knob.low), abs(knob.high))
    if knob.unit not in ("s", "Hz", "V", "A", "F", "H", "W", "m") or largest == 0.0:
        return 1.0, "" if knob.unit == "1" else f" ({knob.unit})"
    power = 3 * math.floor(math.log10(largest) / 3.0)
    prefixes = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}
    if power not in prefixes:
        return 1.0, f" ({knob.unit})"
    return 10.0**-power, f" ({prefixes[power]}{knob.unit})"
