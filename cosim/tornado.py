"""Bars of what moving one number at a time does, as sweeps and sensitivities show it."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

# Any two stay apart, by at least 28 in the distance of the CIE 1976 color space, to normal eyes and
# under simulated full protanopia, deuteranopia and tritanopia.
COLORS = (
    "#1d4f91",
    "#e5801a",
    "#46c2d0",
    "#60263e",
    "#deb17e",
    "#882700",
    "#9c9eff",
    "#898070",
)
GRAY = "0.7"


@dataclass(frozen=True, slots=True)
class TornadoBar:
    """A number, and what moving it does.

    Parameters
    ----------
    label : str
        Of its bar, of one or more lines.
    low, high : float
        Change of the metric at the lower and at the higher value; NaN where there is none.
    faint : bool
        Drawn gray: it cannot be told from numerical errors.
    """

    label: str
    low: float
    high: float
    faint: bool = False


def draw_tornado(axes: Axes, bars: Sequence[TornadoBar], unit: str) -> None:
    """Draw a bar for each number, the first on top.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Where.
    bars : sequence of TornadoBar
        At least one.
    unit : str
        Of the metric; "" or "1" for none.
    """
    ends = [abs(end) for bar in bars for end in (bar.low, bar.high) if not math.isnan(end)]
    largest = max(ends, default=0.0)
    # A power of ten in the label leaves the ticks short.
    power = math.floor(math.log10(largest)) if largest > 0.0 else 0
    for row, bar in enumerate(bars):
        # Each end has half of the bar's height, so that an optimum shows both.
        for change, offset, color, name in (
            (bar.low, -0.2, COLORS[0], "at the lower value"),
            (bar.high, 0.2, COLORS[1], "at the higher value"),
        ):
            axes.barh(
                row + offset,
                0.0 if math.isnan(change) else change / 10.0**power,
                0.4,
                color=GRAY if bar.faint else color,
                label=name if row == 0 else None,
            )
    label_bars(axes, [bar.label for bar in bars])
    axes.axvline(0.0, color="0.25", lw=0.8)
    axes.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
    unit = "" if unit in ("", "1") else f" {unit}"
    times = f" ($10^{{{power}}}${unit})" if power else f" ({unit.strip()})" * bool(unit)
    axes.set_xlabel(f"change of the metric{times}")
    axes.legend(fontsize=7, loc="lower right")


def label_bars(axes: Axes, labels: Sequence[str]) -> None:
    """Name horizontal bars, the first on top.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Where.
    labels : sequence of str
        One for each bar.
    """
    axes.set_yticks(range(len(labels)), labels, fontsize=8)
    axes.set_ylim(len(labels) - 0.5, -0.5)
