"""A readout as a figure: points, trajectories, lengths of the integration, noise and errors."""

import math
import os

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure, SubFigure

from cosim.figure_frame import write_figure
from cosim.readout_result import ReadoutResult
from cosim.readout_terminal import ranked_errors, window_of
from cosim.units import format_quantity

# Devices that are shown, and decades that a logarithmic axis of errors goes down from the largest.
MOST_DEVICES = 8
DECADES = 6

_STATES = ("C0", "C3", "C2")  # colours of |0>, |1> and |2>
_SMALL = 8
_LONGEST = 20  # characters of a device's name
_LEAST = 1e-30  # stands for zero on a logarithmic axis
_PREFIXES = ((1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"))


def plot_readout(result: ReadoutResult, path: str | os.PathLike[str]) -> None:
    """Draw a readout.

    Parameters
    ----------
    result : ReadoutResult
        The result of a run.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(12.0, 9.5), layout="constrained")
    FigureCanvasAgg(figure)
    # Each part lays out its columns by itself.
    parts = figure.add_gridspec(2, 1, height_ratios=[2.0, 1.0])
    _draw_states(figure.add_subfigure(parts[0]), result)
    _draw_figures_of_merit(figure.add_subfigure(parts[1]), result)
    write_figure(figure, result.title or "readout", path)


def _draw_states(figure: SubFigure, result: ReadoutResult) -> None:
    grid = figure.add_gridspec(2, 3)
    _draw_points(figure.add_subplot(grid[0, 0]), result)
    _draw_errors(figure.add_subplot(grid[1, 0]), result)
    filled = result.traces.photons_ground.size > 0
    records = figure.add_subplot(grid[0 if filled else slice(0, 2), 1:])
    _draw_records(records, result)
    if filled:
        records.set_xlabel("")
        _draw_photons(figure.add_subplot(grid[1, 1:], sharex=records), result)


def _draw_figures_of_merit(figure: SubFigure, result: ReadoutResult) -> None:
    devices = bool(result.noise.devices)
    grid = figure.add_gridspec(1, 4 if devices else 3)
    _draw_snr(figure.add_subplot(grid[0]), result)
    _draw_lengths(figure.add_subplot(grid[1]), result)
    _draw_density(figure.add_subplot(grid[2]), result)
    if devices:
        _draw_devices(figure.add_subplot(grid[3]), result)


def _draw_points(axes: Axes, result: ReadoutResult) -> None:
    clouds = _clouds(result)
    scale, unit = _prefixed(float(max(np.abs(cloud).max() for cloud in clouds)), "V")
    projection = result.split.projection
    title = f"{sum(cloud.size for cloud in clouds)} shots"
    if projection.quadratures == 1:
        _draw_values(axes, result, scale, unit)
        _finish(axes, title)
        return
    for state, cloud in enumerate(clouds):
        z = cloud * scale
        axes.plot(z.real, z.imag, ".", color=_STATES[state], ms=3, mew=0, alpha=0.4)
    turn = np.exp(1j * projection.axis)
    means = projection.points * scale
    # Along the axis the threshold is a number; the lines cross half-way between the means.
    across = 1j * float((means * np.conj(turn)).imag.mean())
    crossing = turn * (result.split.threshold * scale + across)
    for label, style, way in (("axis", ":", turn), ("threshold", "--", 1j * turn)):
        first, second = crossing, crossing + way * float(np.abs(means[1] - means[0]))
        ends = (first.real, first.imag), (second.real, second.imag)
        axes.axline(*ends, color="black", lw=1.0, ls=style, label=label)
    # Where |2> lies is told by its points alone.
    for state, mean in enumerate([*means, *(cloud.mean() * scale for cloud in clouds[2:])]):
        colour = _STATES[state]
        axes.plot(mean.real, mean.imag, "o", color=colour, mec="white", ms=8, label=f"|{state}>")
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_xlabel(f"I ({unit})", fontsize=_SMALL)
    axes.set_ylabel(f"Q ({unit})", fontsize=_SMALL)
    _finish(axes, title)


def _clouds(result: ReadoutResult) -> list[np.ndarray]:
    traces = result.traces
    second = [traces.points_second] if traces.points_second.size else []
    return [traces.points_ground, traces.points_excited, *second]


def _draw_values(axes: Axes, result: ReadoutResult, scale: float, unit: str) -> None:
    """Count the values of a single output, whose points lie on a line."""
    projection = result.split.projection
    values = [projection.along(cloud) * scale for cloud in _clouds(result)]
    edges = np.histogram_bin_edges(np.concatenate(values), bins=60).tolist()
    for state, one in enumerate(values):
        axes.hist(one, edges, color=_STATES[state], alpha=0.6, label=f"|{state}>")
    threshold = result.split.threshold * scale
    axes.axvline(threshold, color="black", lw=1.0, ls="--", label="threshold")
    # A few decays among many shots are what a linear axis hides.
    axes.set_yscale("symlog", linthresh=1.0)
    axes.set_xlabel(f"integrated signal ({unit})", fontsize=_SMALL)
    axes.set_ylabel("shots", fontsize=_SMALL)


def _draw_errors(axes: Axes, result: ReadoutResult) -> None:
    ranked = ranked_errors(result.errors)
    rows = [(f"{name} (helps)" if value < 0.0 else name, value) for name, value in ranked]
    rows.append(("all together", result.assignment_error))
    largest = max(max(abs(value) for _, value in rows), _LEAST)
    lowest = largest * 10.0**-DECADES
    axes.set_xscale("log")
    # Room for the numbers at the ends of the bars, beyond the errors that there are.
    axes.set_xlim(lowest, largest * 10.0**2.7)
    top = min(0, math.ceil(math.log10(largest)) + 1)
    axes.set_xticks(10.0 ** np.arange(math.ceil(math.log10(lowest)), top + 1))
    for place, (name, value) in enumerate(rows):
        colour = "0.3" if name == "all together" else "C2" if value < 0.0 else "C1"
        axes.barh(place, abs(value), color=colour, height=0.6)
        end = max(abs(value), lowest)
        axes.text(end, place, f" {value:.1e}" if value else " 0", va="center", fontsize=7)
    counted = (("integrated shots", result.shots, "o"), ("whole records", result.records, "s"))
    for place, (name, counts, marker) in enumerate(counted, start=len(rows)):
        value, bar = counts.assignment_error, counts.standard_error
        rows.append((f"{counts.count} {name}", value))
        # On a logarithmic axis a bar that reaches zero goes down to a tenth of the value.
        down = min(bar, 0.9 * value)
        axes.errorbar(value, place, xerr=[[down], [bar]], fmt=marker, ms=4, capsize=3, color="0.3")
        text = f"  {value:.1e} ± {bar:.0e}"
        axes.text(max(value + bar, lowest), place, text, va="center", fontsize=7)
    axes.set_yticks(range(len(rows)), [name for name, _ in rows], fontsize=_SMALL)
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.set_xlabel("part of the assignment error", fontsize=_SMALL)
    _finish(axes, "what makes the wrong decisions", legend=False)


def _draw_records(axes: Axes, result: ReadoutResult) -> None:
    traces = result.traces
    per_second, second = _time_scale(result)
    records = (traces.ground, traces.excited)
    scale, unit = _prefixed(float(max(np.abs(record).max() for record in records)), "V")
    single = result.split.projection.quadratures == 1
    for state, record in enumerate(records):
        t, z, colour = traces.time * per_second, record * scale, _STATES[state]
        name = "output" if single else "I"
        axes.plot(t, z.real, color=colour, lw=1.3, label=f"{name}, |{state}>")
        if not single:
            axes.plot(t, z.imag, color=colour, lw=1.3, ls="--", label=f"Q, |{state}>")
    _mark_window(axes, result, per_second)
    axes.margins(x=0)
    axes.set_xlabel(f"time ({second})", fontsize=_SMALL)
    axes.set_ylabel(f"record ({unit})", fontsize=_SMALL)
    _finish(axes, "mean records")


def _draw_photons(axes: Axes, result: ReadoutResult) -> None:
    traces = result.traces
    per_second, second = _time_scale(result)
    t = traces.field_time * per_second
    # Driven midway between the two resonances, both states have as many: one is drawn dashed.
    axes.plot(t, traces.photons_ground, color=_STATES[0], lw=1.6, label="|0>")
    axes.plot(t, traces.photons_excited, color=_STATES[1], lw=1.3, ls="--", label="|1>")
    _mark_window(axes, result, per_second)
    axes.set_xlim(0.0, max(traces.time[-1], traces.field_time[-1]) * per_second)
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel(f"time ({second})", fontsize=_SMALL)
    axes.set_ylabel("photons", fontsize=_SMALL)
    _finish(axes, "photons in the resonator")


def _time_scale(result: ReadoutResult) -> tuple[float, str]:
    return _prefixed(float(result.traces.time[-1]), "s")


def _mark_window(axes: Axes, result: ReadoutResult, per_second: float) -> None:
    start, stop = window_of(result)
    label = "window of the integration"
    axes.axvspan(start * per_second, stop * per_second, color="0.92", lw=0, label=label, zorder=0)


def _draw_snr(axes: Axes, result: ReadoutResult) -> None:
    scan = result.scan
    per_second, second = _prefixed(float(scan.snr_times[-1]), "s")
    axes.plot(scan.snr_times * per_second, scan.snr, color="C4", lw=1.4)
    used = result.integration_time * per_second, result.snr
    axes.plot(*used, "o", color="black", ms=5, label="the window")
    axes.set_xlim(0.0, scan.snr_times[-1] * per_second * 1.03)
    axes.set_ylim(0.0, 1.1 * float(scan.snr.max()))
    _mark_best(axes, result, per_second)
    axes.set_xlabel(f"integration time ({second})", fontsize=_SMALL)
    axes.set_ylabel("signal over noise", fontsize=_SMALL)
    axes.legend(fontsize=7, loc="lower right")
    _finish(axes, f"SNR {result.snr:.3g} over the window", legend=False)


def _draw_lengths(axes: Axes, result: ReadoutResult) -> None:
    scan = result.scan
    per_second, second = _prefixed(float(scan.snr_times[-1]), "s")
    _set_logarithmic(axes, scan.assignment_error, 1.5)
    axes.plot(scan.times * per_second, _positive(scan.assignment_error), color="C4", lw=1.4)
    used = result.integration_time * per_second, result.assignment_error
    axes.plot(*used, "o", color="black", ms=5, label="the window")
    axes.set_xlim(0.0, scan.snr_times[-1] * per_second * 1.03)
    _mark_best(axes, result, per_second)
    axes.set_xlabel(f"integration time ({second})", fontsize=_SMALL)
    axes.set_ylabel("assignment error", fontsize=_SMALL)
    axes.legend(fontsize=7, loc="upper right")
    length = format_quantity(scan.best_time, "s", 3)
    _finish(axes, f"best: {scan.best_error:.2e} at {length}", legend=False)


def _mark_best(axes: Axes, result: ReadoutResult, per_second: float) -> None:
    best = result.scan.best_time * per_second
    axes.axvline(best, color="C2", lw=1.2, ls=":", label="the best length")


def _draw_density(axes: Axes, result: ReadoutResult) -> None:
    noise = result.noise
    f = noise.frequencies / 1e6
    _set_logarithmic(axes, noise.density, 3.0)
    axes.plot(f, _positive(noise.density), color="C5", lw=1.4)
    axes.set_xlim(f[0], f[-1])
    single = result.split.projection.quadratures == 1
    where = "frequency" if single else "offset from the carrier"
    axes.set_xlabel(f"{where} (MHz)", fontsize=_SMALL)
    axes.set_ylabel("two-sided density (V²/Hz)", fontsize=_SMALL)
    _finish(axes, f"noise at the output, {result.noise_method}", legend=False)


def _draw_devices(axes: Axes, result: ReadoutResult) -> None:
    devices = list(result.noise.devices.items())
    shown = devices[:MOST_DEVICES]
    if len(devices) > len(shown):
        shown.append(("others", sum(share for _, share in devices[MOST_DEVICES:])))
    for place, (_, share) in enumerate(shown):
        axes.barh(place, 100.0 * share, color="C5", height=0.6)
        axes.text(100.0 * max(share, 0.0), place, f" {share:.1%}", va="center", fontsize=7)
    # Room for the numbers at the ends of the bars.
    axes.set_xlim(right=1.3 * 100.0 * max(share for _, share in shown))
    # Of a name within many subcircuits the end tells most.
    names = [name if len(name) <= _LONGEST else f"…{name[1 - _LONGEST :]}" for name, _ in shown]
    axes.set_yticks(range(len(shown)), names, fontsize=7)
    axes.set_ylim(len(shown) - 0.5, -0.5)
    axes.set_xlabel("part of the density (%)", fontsize=_SMALL)
    _finish(axes, "noise near the carrier, by device", legend=False)


def _finish(axes: Axes, title: str, *, legend: bool = True) -> None:
    axes.tick_params(which="both", labelsize=7)
    axes.set_title(title, fontsize=9, loc="left")
    if legend:
        axes.legend(
            loc="lower right",
            bbox_to_anchor=(1.0, 1.0),
            ncols=6,
            fontsize=7,
            frameon=False,
            borderpad=0,
            columnspacing=1.0,
            handlelength=1.5,
        )


def _prefixed(largest: float, unit: str) -> tuple[float, str]:
    """Factor that makes readable numbers of SI values up to a largest, and the unit of these."""
    size, prefix = next((one for one in _PREFIXES if largest >= one[0]), _PREFIXES[-1])
    return 1.0 / size, prefix + unit


def _set_logarithmic(axes: Axes, values: np.ndarray, room: float) -> None:
    """Fit a logarithmic axis to values, some or all of which may be zero or alike."""
    axes.set_yscale("log")
    known = values[values > 0.0]
    low, high = (float(known.min()), float(known.max())) if known.size else (_LEAST, _LEAST)
    axes.set_ylim(low / room, high * room)


def _positive(values: np.ndarray) -> np.ndarray:
    # A logarithmic axis has no place for zero.
    return np.where(values > 0.0, values, np.nan)
