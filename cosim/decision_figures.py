"""A comparator's decisions as a figure: their probability over the signal, and changes of state."""

import math
import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from scipy.special import ndtr

from cosim.decision_result import DecisionCounts, DecisionResult
from cosim.figure_frame import write_figure

_POINTS = 401


def plot_decisions(result: DecisionResult, path: str | os.PathLike[str]) -> None:
    """Draw a readout that the netlist's own comparator decides.

    Parameters
    ----------
    result : DecisionResult
        The result of a run.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(11.0, 4.5), layout="constrained")
    FigureCanvasAgg(figure)
    left, right = figure.subplots(1, 2)
    _draw_probability(left, result)
    _draw_changes(right, result)
    write_figure(figure, result.title or "readout", path, margin=0.03)


def _draw_probability(axes: Axes, result: DecisionResult) -> None:
    ends = [0.0, 1.0, result.offset - 4 * result.noise, result.offset + 4 * result.noise]
    x = np.linspace(min(ends), max(ends), _POINTS)
    axes.plot(x, ndtr((x - result.offset) / result.noise), color="C0", label="probit fit")
    _draw_counts(axes, result.fitted, "C0", "o", "counted")
    _draw_counts(axes, result.counted, "C3", "s", "at |0> and |1>")
    axes.set_xlim(x[0], x[-1])
    axes.set_xlabel("signal (0 for |0>, 1 for |1>)")
    axes.set_ylabel("probability of decision 1")
    axes.legend(fontsize=8)


def _draw_counts(axes: Axes, counts: DecisionCounts, color: str, marker: str, label: str) -> None:
    share = counts.ones / counts.trials
    error = np.sqrt(share * (1.0 - share) / counts.trials)
    axes.errorbar(
        counts.levels, share, error, fmt=marker, color=color, ms=3, lw=0.8, alpha=0.7, label=label
    )


def _draw_changes(axes: Axes, result: DecisionResult) -> None:
    paths = result.paths
    axes.axhline(result.offset, color="0.4", lw=0.8, label="offset")
    axes.axhspan(
        result.offset - result.noise, result.offset + result.noise, color="0.9", label="noise"
    )
    for times, values, color, label in (
        (paths.decay_times, paths.decays, "C3", "|1> that decays"),
        (paths.excitation_times, paths.excitations, "C0", "|0> that is excited"),
    ):
        if times.size:
            axes.plot(1e9 * times, values, "o-", color=color, ms=3, label=label)
    axes.axvline(1e9 * result.decide_at, color="0.4", ls=":", lw=0.8, label="decision")
    low = math.floor(min(0.0, result.offset - result.noise))
    axes.set_ylim(low - 0.1, max(1.1, result.offset + result.noise + 0.1))
    axes.set_xlabel("time of the change (ns)")
    axes.set_ylabel("signal it is worth")
    axes.legend(fontsize=8)
