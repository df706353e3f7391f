"""Sensitivities as a figure: bars of what a tolerance of each number costs."""

import os

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from cosim.calibration_terminal import METRICS
from cosim.errors import InputError
from cosim.figure_frame import write_figure
from cosim.sensitivity.response import FAILED, NO_EFFECT, RESOLVED
from cosim.sensitivity.result import SensitivityResult
from cosim.sensitivity_terminal import ends_of
from cosim.sweep_terminal import short_names
from cosim.tornado import TornadoBar, draw_tornado

_MOST_BARS = 14
# Below this part of the largest a bar is not seen.
_LEAST_SHARE = 2e-3


def plot_sensitivity(result: SensitivityResult, path: str | os.PathLike[str]) -> None:
    """Draw sensitivities, the largest on top.

    Parameters
    ----------
    result : SensitivityResult
        What came out.
    path : path
        File to write; its ending says the format: png, pdf, svg.

    Raises
    ------
    InputError
        If no number has an effect, or the file cannot be written.
    """
    items = [item for item in result.items if item.status not in (NO_EFFECT, FAILED)]
    if not items:
        raise InputError("none of the numbers has an effect: there is nothing to draw")
    shown = [item for item in items if item.largest >= _LEAST_SHARE * items[0].largest]
    shown = shown[:_MOST_BARS]
    names = short_names([item.key for item in result.items])
    bars = [
        TornadoBar(
            f"{names[item.key]}\n{ends_of(item)}",
            item.cost_low,
            item.cost_high,
            faint=item.status != RESOLVED,
        )
        for item in shown
    ]
    figure = Figure(figsize=(8.0, 1.6 + 0.5 * len(bars)), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.add_subplot()
    draw_tornado(axes, bars, "1")
    rest = f"; {len(items) - len(shown)} smaller ones are left out" * (len(items) > len(shown))
    gray = "; gray: not resolved" * any(bar.faint for bar in bars)
    axes.set_title(f"one tolerance to either side{rest}{gray}", fontsize=10)
    title = f"{METRICS[result.metric]}: {result.value:.3e}"
    write_figure(figure, f"{result.title}\n{title}" if result.title else title, path)
