"""Noise and the other qubits of a line as figures: who costs how much, and at which frequencies."""

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import SubFigure

from cosim.result import GateResult
from cosim.side_results import NoiseEffect, NoiseSource, NoiseSpectrum, SpectatorEffect

COLUMNS = 3
# Decades that a logarithmic axis of costs goes down from the largest.
DECADES = 7
# Devices of a circuit that are shown, and spectators up to which they bear their names.
MOST_DEVICES = 5
MOST_NAMES = 8

_SMALL = 8
# What fluctuates -> density's unit, factor on it, and unit of the filter function.
_UNITS = {
    "rad/s": ("Hz²/Hz", (2.0 * math.pi) ** -2, "1/Hz²"),
    "1": ("1/Hz", 1.0, "1"),
    "rad": ("rad²/Hz", 1.0, "1/rad²"),
    # Each quadrature has twice the density of the voltage.
    "V": ("V²/Hz", 0.5, "1/V²"),
}


def side_rows(result: GateResult) -> int:
    """Give the number of rows of panels that `draw_sides` needs.

    Parameters
    ----------
    result : GateResult
        The result of a run.

    Returns
    -------
    int
        0 without noise and without other qubits.
    """
    if result.noise is None:
        return 1 if result.spectators else 0
    return 1 + math.ceil(len(_with_spectra(result.noise)) / COLUMNS)


def draw_sides(figure: SubFigure, result: GateResult) -> None:
    """Draw noise and other qubits.

    Parameters
    ----------
    figure : SubFigure
        Empty, with room for `side_rows` rows of panels.
    result : GateResult
        The result of a run.
    """
    effect = result.noise
    if effect is None:
        _draw_spectators(figure.add_subplot(), result)
        return
    grid = figure.add_gridspec(side_rows(result), COLUMNS)
    shown = _with_spectra(effect)
    colours = {item.name: f"C{place % 10}" for place, item in enumerate(effect.sources)}
    duration = result.window[1] - result.window[0]
    _draw_costs(figure.add_subplot(grid[0, 0]), effect, colours)
    middle = slice(1, 2) if result.spectators else slice(1, 3)
    _draw_octaves(figure.add_subplot(grid[0, middle]), shown, colours, duration)
    if result.spectators:
        _draw_spectators(figure.add_subplot(grid[0, 2]), result)
    for place, (item, spectrum) in enumerate(shown):
        axes = figure.add_subplot(grid[1 + place // COLUMNS, place % COLUMNS])
        _draw_density(axes, item, spectrum, colours[item.name], duration)


def _with_spectra(effect: NoiseEffect) -> list[tuple[NoiseSource, NoiseSpectrum]]:
    return [(item, item.spectrum) for item in effect.sources if item.spectrum is not None]


def _draw_costs(axes: Axes, effect: NoiseEffect, colours: dict[str, str]) -> None:
    rows: list[tuple[str, float, float, str, NoiseSource | None]] = []
    for item in effect.sources:
        rows.append((item.name, item.infidelity, item.standard_error, colours[item.name], item))
        for device, value in list(item.devices.items())[:MOST_DEVICES]:
            rows.append((f"of it {device}", value, 0.0, "0.75", None))
    rows.append(("all together", effect.infidelity, effect.standard_error, "0.3", None))
    largest = max(max(value for _, value, *_ in rows), 1e-30)
    lowest = largest * 10.0**-DECADES
    for place, (_, value, error, colour, source) in enumerate(rows):
        axes.barh(place, value, color=colour, height=0.6, xerr=error or None, capsize=2)
        if source is not None and source.leakage > lowest:
            axes.plot(source.leakage, place, "|", color="black", ms=12, mew=1.5)
        end = value + error
        if source is not None and source.oscillator_frame > lowest:
            axes.plot(source.oscillator_frame, place, "D", mfc="white", mec="black", ms=5)
            end = max(end, 1.5 * source.oscillator_frame)
        axes.text(end, place, f" {value:.1e}", va="center", fontsize=7)
    axes.plot([], [], "|", color="black", ms=9, mew=1.5, label="of it leakage")
    if any(not math.isnan(item.oscillator_frame) for item in effect.sources):
        axes.plot([], [], "D", mfc="white", mec="black", ms=5, label="oscillator's frame")
    axes.set_xscale("log")
    # Room for the numbers at the ends of the bars.
    axes.set_xlim(lowest, largest * 10.0**2.3)
    axes.set_yticks(range(len(rows)), [name for name, *_ in rows], fontsize=_SMALL)
    axes.set_ylim(len(rows) - 0.5, -0.5)
    axes.set_xlabel("infidelity by noise, 1 - F_avg", fontsize=_SMALL)
    axes.tick_params(axis="x", labelsize=7)
    axes.legend(
        loc="lower right",
        bbox_to_anchor=(1.0, 1.0),
        ncols=2,
        fontsize=7,
        frameon=False,
        borderpad=0,
    )


def _draw_octaves(
    axes: Axes,
    shown: list[tuple[NoiseSource, NoiseSpectrum]],
    colours: dict[str, str],
    duration: float,
) -> None:
    if not shown:
        axes.set_axis_off()
        axes.text(0.5, 0.5, "no noise with a density", ha="center", va="center", fontsize=_SMALL)
        return
    largest = 1e-30
    for item, spectrum in shown:
        f = spectrum.frequencies
        cost = math.log(2.0) * f * spectrum.density * spectrum.filter
        largest = max(largest, float(cost.max()))
        axes.plot(f, _positive(cost), color=colours[item.name], lw=1.2, label=item.name)
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_ylim(largest * 10.0**-DECADES, largest * 5.0)
    _mark_duration(axes, duration)
    axes.set_xlabel("frequency, or offset from the carrier (Hz)", fontsize=_SMALL)
    axes.set_ylabel("infidelity per octave", fontsize=_SMALL)
    axes.tick_params(labelsize=7)
    axes.legend(fontsize=7, loc="lower left")


def _draw_density(
    axes: Axes, item: NoiseSource, spectrum: NoiseSpectrum, colour: str, duration: float
) -> None:
    unit, factor, filter_unit = _UNITS[spectrum.unit]
    f = spectrum.frequencies
    density = _positive(factor * spectrum.density)
    known = density[np.isfinite(density)]
    # The scale before the data: that of a constant density has no span of its own.
    axes.set_xscale("log")
    axes.set_yscale("log")
    if known.size:
        axes.set_ylim(0.1 * float(known.min()), 10.0 * float(known.max()))
    axes.plot(f, density, color=colour, lw=1.6)
    axes.set_ylabel(f"density ({unit})", fontsize=_SMALL, color=colour)
    where = "frequency" if item.acts_on == "detuning" else "offset from the carrier"
    axes.set_xlabel(f"{where} (Hz)", fontsize=_SMALL)
    axes.set_title(item.name, fontsize=9)
    other = axes.twinx()
    filtered = spectrum.filter / factor
    other.plot(f, _positive(filtered), color="0.45", lw=1.0)
    other.set_yscale("log")
    top = float(filtered.max())
    if top > 0.0:
        other.set_ylim(top * 10.0**-DECADES, top * 10.0)
    other.set_ylabel(f"filter function ({filter_unit})", fontsize=_SMALL, color="0.35")
    _mark_duration(axes, duration)
    low, high = float(f[0]), float(f[-1])
    if item.highest_frequency < spectrum.high:
        axes.axvspan(high, 4.0 * high, color="C3", alpha=0.2, lw=0)
        _say(axes, 2.0 * high, "no sample")
        high *= 4.0
    if spectrum.low > 0.0:
        axes.axvspan(0.1 * low, low, color="0.85", lw=0)
        _say(axes, 0.3 * low, "not known")
        low *= 0.1
    axes.set_xlim(low, high)
    for one in (axes, other):
        one.tick_params(labelsize=7)


def _say(axes: Axes, frequency: float, text: str) -> None:
    axes.text(
        frequency,
        0.5,
        text,
        transform=axes.get_xaxis_transform(),
        rotation=90,
        fontsize=6,
        ha="center",
        va="center",
        color="0.3",
    )


def _mark_duration(axes: Axes, duration: float) -> None:
    axes.axvline(1.0 / duration, color="0.5", lw=0.8, ls=":")
    axes.text(
        1.0 / duration,
        0.98,
        " 1/gate ",
        transform=axes.get_xaxis_transform(),
        fontsize=6,
        ha="right",
        va="top",
        color="0.35",
    )


def _draw_spectators(axes: Axes, result: GateResult) -> None:
    effects = result.spectators
    offsets = [(item.frequency - result.carrier_frequency) / 1e6 for item in effects]
    series: dict[str, tuple[str, str, list[float]]] = {
        "as is": ("^", "C1", [item.infidelity for item in effects]),
        "free frame": ("o", "C0", [item.free_frame_infidelity for item in effects]),
        "leakage": ("|", "black", [item.leakage for item in effects]),
        "by noise": ("x", "C3", [_by_noise(item) for item in effects]),
    }
    largest = max(max(values) for _, _, values in series.values())
    for name, (marker, colour, values) in series.items():
        heights = [value if value > largest * 1e-9 else math.nan for value in values]
        if not all(math.isnan(height) for height in heights):
            axes.plot(offsets, heights, marker, color=colour, ms=6, label=name)
    if len(effects) <= MOST_NAMES:
        for offset, item in zip(offsets, effects, strict=True):
            axes.annotate(
                item.name,
                (offset, max(item.infidelity, item.free_frame_infidelity)),
                xytext=(0, 6),
                textcoords="offset points",
                ha="center",
                fontsize=7,
            )
    axes.axvline(0.0, color="0.5", lw=0.8, ls=":")
    axes.set_yscale("log")
    axes.margins(x=0.15, y=0.2)
    axes.set_xlabel("offset of the other qubits (MHz)", fontsize=_SMALL)
    axes.set_ylabel("infidelity 1 - F_avg", fontsize=_SMALL)
    axes.legend(
        loc="lower center",
        bbox_to_anchor=(0.5, 1.0),
        ncols=4,
        fontsize=7,
        frameon=False,
        columnspacing=0.8,
        handletextpad=0.0,
        borderpad=0,
    )
    axes.tick_params(labelsize=7)


def _by_noise(item: SpectatorEffect) -> float:
    return 0.0 if item.noise is None else item.noise.infidelity


def _positive(values: np.ndarray) -> np.ndarray:
    # A logarithmic axis has no place for zero.
    return np.where(values > 0.0, values, math.nan)
