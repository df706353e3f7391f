"""A train as a figure: its envelope, slot by slot, what is remembered, and a step."""

import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from cosim.figure_frame import write_figure
from cosim.train.result import TrainResponse, TrainResult

_COLOURS = ("C3", "C0")
_MOST_POINTS = 6000
_LEAST_ERROR = 1e-6
_LEAST_INFIDELITY = 1e-12
# In percent; the edge of a step may be far off.
_MOST_STEP = 15.0


def plot_train(result: TrainResult, path: str | os.PathLike[str]) -> None:
    """Draw a train.

    Parameters
    ----------
    result : TrainResult
        What came out.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    responses = {"as played": result.before}
    if result.predistortion is not None:
        responses["pre-distorted"] = result.predistortion.after
    stepped = result.step_before is not None
    figure = Figure(figsize=(11.0, 8.6), layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(3, 2, height_ratios=[2, 1.3, 2])
    top = figure.add_subplot(grid[0, :])
    below = figure.add_subplot(grid[1, :], sharex=top)
    _draw_envelopes(top, below, result, responses)
    _draw_slots(figure.add_subplot(grid[2, 0]), result, responses)
    last = figure.add_subplot(grid[2, 1])
    if stepped:
        _draw_steps(last, result)
    else:
        _draw_lags(last, responses)
    write_figure(figure, result.title or "train", path)


def _draw_envelopes(
    top: Axes, below: Axes, result: TrainResult, responses: dict[str, TrainResponse]
) -> None:
    unit = result.before.envelope.unit
    for number, (name, item) in enumerate(responses.items()):
        envelope, ideal = item.envelope, item.ideal
        every = max(1, envelope.iq.size // _MOST_POINTS)
        t = (envelope.t - item.late)[::every] * 1e9
        turn = _turned(ideal.iq)
        wanted = (ideal.iq * turn).real[::every]
        got = (envelope.iq * turn).real[::every]
        if number == 0:
            what = "ideal" if len(responses) > 1 else "the first pulse in each slot"
            top.plot(t, 1e3 * wanted, color="0.55", lw=2.5, label=what)
        top.plot(t, 1e3 * got, color=_COLOURS[number], lw=0.9, label=name)
        label = f"{name}: {100.0 * item.residual:.2g} % rms"
        off = np.abs(envelope.iq - ideal.iq)[::every]
        peak = float(np.abs(ideal.iq).max())
        below.semilogy(
            t, np.maximum(off / peak, _LEAST_ERROR), color=_COLOURS[number], lw=0.8, label=label
        )
    for slot in range(result.factors.size + 1):
        at = (result.begin + slot * result.spacing) * 1e9
        for axes in (top, below):
            axes.axvline(at, color="0.9", lw=0.6, zorder=0)
    top.set_ylabel(f"at the probe (m{unit})")
    below.set(xlabel="time (ns)", ylabel="off the ideal, over its peak")
    top.legend(fontsize=7, loc="upper right", ncols=3)
    below.legend(fontsize=7, loc="lower right", ncols=2)


def _turned(iq: np.ndarray) -> complex:
    """The phase that makes an envelope real where it is strongest."""
    peak = complex(iq[np.argmax(np.abs(iq))])
    return np.conj(peak) / abs(peak) if peak else 1.0


def _draw_slots(axes: Axes, result: TrainResult, responses: dict[str, TrainResponse]) -> None:
    slots = np.arange(1, result.factors.size + 1)
    pulses = result.factors != 0.0
    for number, (name, item) in enumerate(responses.items()):
        colour = _COLOURS[number]
        # The pulse that is calibrated may have none but rounding.
        shown = np.maximum(item.infidelity, _LEAST_INFIDELITY)
        axes.semilogy(slots[pulses], shown[pulses], "o", color=colour, label=f"pulse, {name}")
        axes.semilogy(
            slots[~pulses],
            shown[~pulses],
            "o",
            mfc="none",
            color=colour,
            label=f"rest, {name}",
        )
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set(xlabel="slot", ylabel="1 - F_avg, calibrated on the first pulse")
    axes.legend(fontsize=7)


def _draw_lags(axes: Axes, responses: dict[str, TrainResponse]) -> None:
    for number, (name, item) in enumerate(responses.items()):
        lags = np.arange(1, item.lag_costs.size + 1)
        axes.semilogy(
            lags,
            np.maximum(item.lag_costs, item.memory_floor),
            "o-",
            color=_COLOURS[number],
            label=name,
        )
        axes.axhline(item.memory_floor, color=_COLOURS[number], lw=0.8, ls="--")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set(xlabel="slots back, or more", ylabel="what they cost")
    axes.legend(fontsize=7)


def _draw_steps(axes: Axes, result: TrainResult) -> None:
    for number, step in enumerate((result.step_before, result.step_after)):
        if step is not None:
            name = "as played" if number == 0 else "pre-distorted"
            axes.plot(step.t * 1e9, 100.0 * step.error, color=_COLOURS[number], lw=1, label=name)
    for level in (-1.0, 1.0):
        axes.axhline(level, color="0.6", lw=0.8, ls="--")
    low, high = axes.get_ylim()
    axes.set_ylim(max(low, -_MOST_STEP), min(high, _MOST_STEP))
    axes.set(xlabel="time behind the step (ns)", ylabel="step off its ideal (%)")
    axes.legend(fontsize=7)
