"""An error budget as a figure."""

import math
import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from cosim.budget.result import BudgetItem, BudgetResult
from cosim.budget_terminal import value_text
from cosim.errors import InputError
from cosim.terminal import CAUTION

# Items that are drawn, and decades below the greatest that are shown.
MOST_ITEMS = 14
_DECADES = 7


def plot_budget(result: BudgetResult, path: str | os.PathLike[str]) -> None:
    """Draw a budget: what each item costs, and the real pulse against its ideal.

    Parameters
    ----------
    result : BudgetResult
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(11.0, 7.0), layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(3, 2, width_ratios=(1.15, 1.0))
    _draw_items(figure.add_subplot(grid[:, 0]), result)
    pulse = figure.add_subplot(grid[0, 1])
    _draw_pulse(pulse, result)
    _draw_deviation(figure.add_subplot(grid[1, 1], sharex=pulse), result)
    _draw_phase(figure.add_subplot(grid[2, 1], sharex=pulse), result)
    view = result.fidelity.replace("_", " ")
    title = result.title or f"gate {result.target}"
    figure.suptitle(f"{title}: infidelity {result.total_infidelity:.2e} ({view})", fontsize=11)
    figure.text(0.995, 0.002, CAUTION, ha="right", va="bottom", fontsize=6, color="0.45")
    figure.get_layout_engine().set(rect=(0, 0.02, 1, 0.98))  # type: ignore[union-attr, call-arg]
    try:
        figure.savefig(path, dpi=150)
    except (OSError, ValueError) as error:
        raise InputError(f"the figure {os.fspath(path)} cannot be written: {error}") from None


def _draw_items(axes: Axes, result: BudgetResult) -> None:
    items = [item for item in result.items if item.counted and _largest(item) > 0.0]
    top = max([_largest(item) for item in items] + [result.total_infidelity])
    least = top * 10.0**-_DECADES
    items = [item for item in items if _largest(item) > least][:MOST_ITEMS]
    places = np.arange(len(items), dtype=float)
    for offset, color, label in ((-0.2, "C0", "alone"), (0.2, "C1", "removed")):
        costs = np.array([getattr(item, label) for item in items])
        saves = costs < 0.0
        size = np.where(np.isnan(costs), 0.0, np.abs(costs))
        bars = axes.barh(places + offset, size, 0.38, color=color, label=label)
        for bar, negative in zip(bars, saves, strict=True):
            if negative:
                bar.set(fill=False, edgecolor=color, hatch="////", lw=0.8)
    axes.axvline(result.total_infidelity, color="0.3", lw=1.0, ls="--", label="total")
    if not math.isnan(result.error_bar) and result.error_bar > least:
        axes.axvline(result.error_bar, color="0.6", lw=1.0, ls=":", label="error bar")
    axes.set_xscale("log")
    axes.set_xlim(least, 3.0 * top)
    labels = [f"{item.name}\n{_size(item)}" for item in items]
    axes.set_yticks(places, labels, fontsize=8)
    axes.invert_yaxis()
    axes.set_xlabel("infidelity 1 - F_avg (hatched: the item makes good what others do wrong)")
    axes.grid(axis="x", color="0.9")
    axes.set_axisbelow(True)
    axes.legend(fontsize=8, loc="lower right")


def _size(item: BudgetItem) -> str:
    text = value_text(item)
    absorbed = f", absorbed by {item.absorbed_by}" * item.absorbed
    return (text if text != "-" else item.kind) + absorbed


def _largest(item: BudgetItem) -> float:
    costs = [abs(cost) for cost in (item.alone, item.removed) if not math.isnan(cost)]
    return max(costs, default=0.0)


def _draw_pulse(axes: Axes, result: BudgetResult) -> None:
    scale, unit = _milli(result)
    t = result.real.t * 1e9
    turn = np.exp(-1j * result.ideal.phase)
    for envelope, style, label in ((result.real, "-", "real"), (result.wanted, "--", "ideal")):
        iq = envelope.iq * turn * scale
        width = 1.6 if style == "-" else 1.0
        axes.plot(t, iq.real, style, color="C0", lw=width, label=f"I, {label}")
        axes.plot(t, iq.imag, style, color="C1", lw=width, label=f"Q, {label}")
    axes.set_ylabel(f"envelope ({unit})")
    axes.set_xlim(t[0], t[-1])
    axes.legend(fontsize=7, ncols=4, loc="lower right", bbox_to_anchor=(1.0, 1.0), frameon=False)


def _draw_deviation(axes: Axes, result: BudgetResult) -> None:
    turn = np.exp(-1j * result.ideal.phase) / result.ideal.amplitude * 100.0
    t = result.real.t * 1e9
    total = (result.real.iq - result.wanted.iq) * turn
    rest = (result.real.iq - result.fitted.iq) * turn
    axes.plot(t, total.real, color="C0", lw=1.0, label="I, real less ideal")
    axes.plot(t, total.imag, color="C1", lw=1.0, label="Q, real less ideal")
    axes.plot(t, np.abs(rest), color="0.5", lw=0.8, label="size of the residual")
    axes.set_ylabel("deviation (% of ideal)")
    axes.legend(fontsize=7)


def _draw_phase(axes: Axes, result: BudgetResult) -> None:
    iq = result.real.iq * np.exp(-1j * result.ideal.phase)
    strong = np.abs(iq) > 0.1 * result.ideal.amplitude
    phase = np.where(strong, np.degrees(np.angle(iq)), np.nan)
    axes.plot(result.real.t * 1e9, phase, color="C2", lw=1.2)
    ideal = result.wanted.iq * np.exp(-1j * result.ideal.phase)
    strong = np.abs(ideal) > 0.1 * result.ideal.amplitude
    wanted = np.where(strong, np.degrees(np.angle(ideal)), np.nan)
    axes.plot(result.wanted.t * 1e9, wanted, "--", color="0.3", lw=1.0)
    axes.set_ylabel("phase (degrees)")
    axes.set_xlabel("time (ns)")
    seen = phase[np.isfinite(phase)]
    middle = 0.5 * (seen.min() + seen.max())
    half = max(1.0, 0.6 * float(np.ptp(seen)))
    axes.set_ylim(middle - half, middle + half)


def _milli(result: BudgetResult) -> tuple[float, str]:
    unit = result.real.unit
    return (1.0, unit) if result.ideal.amplitude >= 1.0 else (1e3, f"m{unit}")
