"""Results as figures."""

import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure, SubFigure

from cosim.figure_frame import write_figure
from cosim.noise_figures import draw_sides, side_rows
from cosim.result import GateResult

_LABELS = ("I", "X", "Y", "Z")


def plot_gate(result: GateResult, path: str | os.PathLike[str]) -> None:
    """Draw a gate: waveform, phase, Pauli transfer matrix, fidelities, noise and other qubits.

    Parameters
    ----------
    result : GateResult
        The result of a run.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(10.5, 6.5 + 3.0 * side_rows(result)), layout="constrained")
    FigureCanvasAgg(figure)
    gate = _with_sides(figure, result)
    grid = gate.add_gridspec(2, 3)
    envelope = gate.add_subplot(grid[0, :2])
    _draw_envelope(envelope, result)
    _draw_phase(gate.add_subplot(grid[1, :2], sharex=envelope), result)
    _draw_matrix(gate.add_subplot(grid[0, 2]), result)
    _draw_infidelities(gate.add_subplot(grid[1, 2]), result)
    write_figure(figure, result.title or f"gate {result.target}", path)


def _with_sides(figure: Figure, result: GateResult) -> Figure | SubFigure:
    """Draw what stands beside the gate below; give the part of the figure that is left."""
    more = side_rows(result)
    if not more:
        return figure
    # Each part lays out its columns by itself.
    parts = figure.add_gridspec(2, 1, height_ratios=[6.5, 3.0 * more])
    draw_sides(figure.add_subfigure(parts[1]), result)
    return figure.add_subfigure(parts[0])


def _draw_envelope(axes: Axes, result: GateResult) -> None:
    # The carrier is far too dense to be seen: its outline over a few periods says the same.
    t = result.waveform.t * 1e9
    scale, unit = _milli(result.pulse.amplitude, result.waveform.unit)
    period = 1e9 / result.carrier_frequency
    low, high, centre = _outline(t, result.waveform.v * scale, period)
    axes.fill_between(centre, low, high, color="0.85", lw=0, label="waveform at the probe")
    iq = result.envelope.iq * scale
    axes.plot(result.envelope.t * 1e9, iq.real, color="C0", lw=1.4, label="I")
    axes.plot(result.envelope.t * 1e9, iq.imag, color="C1", lw=1.4, label="Q")
    _mark_window(axes, result)
    axes.set_ylabel(f"amplitude ({unit})")
    axes.set_xlim(t[0], t[-1])
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=3, fontsize=8, frameon=False)


def _outline(
    t: np.ndarray, v: np.ndarray, period: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    # A block shorter than a period would show beats that are not there.
    shortest = int(np.ceil(period / float(np.median(np.diff(t))))) + 1
    count = min(max(shortest, t.size // 600), t.size)
    usable = t.size // count * count
    blocks = v[:usable].reshape(-1, count)
    return blocks.min(axis=1), blocks.max(axis=1), t[:usable].reshape(-1, count).mean(axis=1)


def _draw_phase(axes: Axes, result: GateResult) -> None:
    iq = result.envelope.iq
    strong = np.abs(iq) > 0.1 * result.pulse.amplitude
    phase = np.degrees(np.unwrap(np.angle(iq[strong])))
    axes.plot(result.envelope.t[strong] * 1e9, phase, color="C2", lw=1.2)
    _mark_window(axes, result)
    axes.set_ylabel("carrier phase (degrees)")
    axes.set_xlabel("time (ns)")
    # A flat phase is drawn flat: the axis never shows less than two degrees.
    middle = 0.5 * (phase.min() + phase.max())
    half = max(1.0, 0.6 * np.ptp(phase))
    axes.set_ylim(middle - half, middle + half)


def _mark_window(axes: Axes, result: GateResult) -> None:
    for edge in result.window:
        axes.axvline(edge * 1e9, color="0.4", lw=0.8, ls="--")
    if result.idle is not None:
        start, stop = 1e9 * result.idle.start, 1e9 * result.idle.stop
        axes.axvspan(start, stop, color="C0", alpha=0.08, lw=0)
        place = axes.get_xaxis_transform()
        axes.text(0.5 * (start + stop), 0.97, "rest", transform=place, ha="center", va="top")


def _draw_matrix(axes: Axes, result: GateResult) -> None:
    matrix = result.channel.pauli_transfer_matrix
    axes.imshow(matrix, cmap="RdBu", vmin=-1, vmax=1)
    for (row, column), value in np.ndenumerate(matrix):
        shade = "white" if abs(value) > 0.6 else "black"
        text = f"{value:.3f}" if abs(value) >= 5e-4 else f"{value:.0e}"
        axes.text(column, row, text, ha="center", va="center", fontsize=7, color=shade)
    axes.set_xticks(range(4), _LABELS)
    axes.set_yticks(range(4), _LABELS)
    axes.set_title(f"Pauli transfer matrix, target {result.target}", fontsize=9)
    axes.set_xlabel("in")
    axes.set_ylabel("out")


def _draw_infidelities(axes: Axes, result: GateResult) -> None:
    views = {
        "as simulated": result.as_simulated,
        "free frame": result.free_frame,
        "calibrated": result.calibrated,
    }
    for index, view in enumerate(views.values()):
        bar = 0.0 if np.isnan(view.error_bar) else view.error_bar
        # On a logarithmic axis a bar that reaches zero goes down to a tenth of the value.
        down = min(bar, 0.9 * view.infidelity)
        axes.errorbar(index, view.infidelity, yerr=[[down], [bar]], fmt="o", capsize=4, color="C0")
    for value, label, style in (
        (result.numerical_floor, "numerical floor", "--"),
        (result.rotating_wave_error, "rotating-wave error", ":"),
        (result.leakage, "leakage", "-."),
    ):
        if value > 1e-12:
            axes.axhline(value, color="0.4", lw=1, ls=style, label=label)
    axes.set_yscale("log")
    axes.set_xlim(-0.5, 2.5)
    axes.set_xticks(range(3), list(views), fontsize=8)
    axes.set_ylabel("infidelity 1 - F_avg")
    if axes.get_legend_handles_labels()[1]:
        axes.legend(fontsize=7)


def _milli(amplitude: float, unit: str) -> tuple[float, str]:
    return (1.0, unit) if amplitude >= 1.0 else (1e3, f"m{unit}")
