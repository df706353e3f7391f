"""What each block must meet, as a figure: what each costs, and the masks."""

import os
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from cosim.errors import InputError
from cosim.specification.readout_result import ReadoutSpecification
from cosim.specification.result import GateSpecification, LimitMask
from cosim.specification_terminal import format_limit
from cosim.terminal import CAUTION

_SMALL = 8


def plot_specification(result: GateSpecification, path: str | os.PathLike[str]) -> None:
    """Draw a specification of a gate.

    Parameters
    ----------
    result : GateSpecification
        The specification.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    panels = 1 + len(result.masks)
    columns = 1 if panels == 1 else 2
    rows = -(-panels // columns)
    figure = Figure(figsize=(6.2 * columns, max(4.4, 3.4 * rows)), layout="constrained")
    FigureCanvasAgg(figure)
    axes = np.atleast_1d(figure.subplots(rows, columns)).reshape(-1)
    names = [f"{item.label}: {format_limit(item.limit, item.unit)}" for item in result.blocks]
    fixed = [("decoherence", result.decoherence), ("ideal pulse", result.pulse_infidelity)]
    shares = [(name, item.share) for name, item in zip(names, result.blocks, strict=True)]
    together = ("all together, simulated", result.verification.infidelity)
    draw_shares(axes[0], [*fixed, *shares, together], result.target_infidelity, "infidelity")
    for place, mask in enumerate(result.masks, start=1):
        _draw_mask(axes[place], mask, result.block(mask.name).label)
    for unused in axes[panels:]:
        unused.set_axis_off()
    save_figure(figure, result.title or "specification", path)


def plot_readout_specification(result: ReadoutSpecification, path: str | os.PathLike[str]) -> None:
    """Draw a specification of a readout.

    Parameters
    ----------
    result : ReadoutSpecification
        The specification.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure = Figure(figsize=(7.5, 4.4), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots()
    base = result.base
    shares = [
        ("vacuum and loss", base.separation),
        ("decay", base.decay),
        ("preparation", base.preparation),
        ("excitation", base.excitation),
    ]
    shares += [
        (f"{block.label}: {format_limit(block.limit, block.unit)}", block.share)
        for block in result.blocks
    ]
    shares.append(("all together, in closed form", result.assignment_error))
    draw_shares(axes, shares, result.target_error, "assignment error")
    save_figure(figure, result.title or "specification", path)


def draw_shares(
    axes: Axes, shares: Sequence[tuple[str, float]], target: float, quantity: str
) -> None:
    """Draw what each block costs beside the target.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Where.
    shares : sequence of (str, float)
        Name and cost of each, the last one of all together.
    target : float
        What all may cost together.
    quantity : str
        What it is that they cost.
    """
    least = 1e-4 * target
    axes.set_xscale("log")
    axes.set_xlim(least, 30.0 * target)
    for place, (_, value) in enumerate(shares):
        colour = "0.3" if place == len(shares) - 1 else "C0"
        axes.barh(place, max(value, least), color=colour, height=0.65)
        text = axes.text(max(value, least), place, f" {value:.1e}", va="center", fontsize=7)
        text.set_bbox({"facecolor": "white", "edgecolor": "none", "pad": 0.5})
    axes.axvline(target, color="C3", lw=1.2, ls="--", label="target", zorder=0)
    axes.set_yticks(range(len(shares)), [name for name, _ in shares], fontsize=7)
    axes.set_ylim(len(shares) - 0.5, -0.5)
    axes.tick_params(axis="x", labelsize=7)
    axes.set_xlabel(f"{quantity}, each at its limit", fontsize=_SMALL)
    axes.legend(fontsize=7, loc="upper right")


def save_figure(figure: Figure, title: str, path: str | os.PathLike[str]) -> None:
    """Write a figure with its title and the caution.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        The figure.
    title : str
        Above it.
    path : path
        File to write; its ending says the format.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    figure.suptitle(title, fontsize=11)
    figure.text(0.995, 0.002, CAUTION, ha="right", va="bottom", fontsize=6, color="0.45")
    figure.get_layout_engine().set(rect=(0, 0.03, 1, 0.97))  # type: ignore[union-attr, call-arg]
    try:
        figure.savefig(path, dpi=150)
    except (OSError, ValueError) as error:
        raise InputError(f"the figure {os.fspath(path)} cannot be written: {error}") from None


def _draw_mask(axes: Axes, mask: LimitMask, label: str) -> None:
    one_sided = bool((mask.low > 0.0).all())
    if one_sided:
        axes.plot(mask.low, mask.levels, "o-", color="C4", ms=3, lw=1.2)
        axes.set_xscale("log")
        axes.set_xlabel("offset (Hz)", fontsize=_SMALL)
    elif (mask.low == mask.high).all():
        axes.plot(mask.low / 1e6, mask.levels, "o", color="C4", ms=4)
        axes.set_xlabel("offset from the carrier (MHz)", fontsize=_SMALL)
    else:
        for low, high, level in zip(mask.low, mask.high, mask.levels, strict=True):
            axes.plot([low / 1e6, high / 1e6], [level, level], color="C4", lw=1.6)
        axes.set_xlabel("offset from the carrier (MHz)", fontsize=_SMALL)
        axes.set_yscale("log")
    axes.grid(visible=True, color="0.9", lw=0.6)
    axes.tick_params(which="both", labelsize=7)
    axes.set_ylabel(mask.unit, fontsize=_SMALL)
    axes.set_title(f"{label}: {mask.label}", fontsize=9, loc="left")
