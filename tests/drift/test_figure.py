"""Oracle: the drawn figure, measured in its pixels: no text over another or cut off."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from cosim.drift_figures import plot_drift
from tests.drift.test_front import made


def draw(span: float, title: str, monkeypatch: pytest.MonkeyPatch) -> Figure:
    """Draw an infidelity that rises by a factor, and catch the figure in place of writing it."""
    result = replace(made(limit=1e-6 * span), title=title)
    mean = np.geomspace(1e-6, 1e-6 * span, result.time.size)
    result = replace(result, mean=mean, average=mean, low=mean, median=mean, high=mean)
    caught: list[Figure] = []
    monkeypatch.setattr(Figure, "savefig", lambda figure, *_, **__: caught.append(figure))
    plot_drift(result, "figure.png")
    caught[0].draw_without_rendering()  # Warnings of the layout are errors here.
    return caught[0]


def labels(axes: Axes) -> list[tuple[float, float]]:
    """Bottom and top of the labels of the vertical axis, from below."""
    low, high = axes.get_ylim()
    ticks = [*axes.yaxis.get_major_ticks(), *axes.yaxis.get_minor_ticks()]
    drawn = [tick for tick in ticks if low <= tick.get_loc() <= high and tick.label1.get_text()]
    extents = [tick.label1.get_window_extent() for tick in drawn]
    return sorted((extent.y0, extent.y1) for extent in extents)


@pytest.mark.parametrize("span", [1.5, 4.0, 7.0, 12.0, 60.0, 200.0, 1e3, 1e5])
def test_levels_can_be_read(span: float, monkeypatch: pytest.MonkeyPatch) -> None:
    found = labels(draw(span, "a drift", monkeypatch).axes[0])
    assert len(found) >= 2
    assert all(above[0] > below[1] for below, above in pairwise(found))


@pytest.mark.parametrize("words", [1, 40])
def test_a_title_is_not_cut(words: int, monkeypatch: pytest.MonkeyPatch) -> None:
    figure = draw(2.0, " ".join(["drifting"] * words), monkeypatch)
    (title,) = [text for text in figure.texts if text.get_text().startswith("drifting")]
    extent = title.get_window_extent()
    assert extent.x0 >= 0.0
    assert extent.x1 <= figure.bbox.width
    assert extent.y1 <= figure.bbox.height
    assert all(axes.get_window_extent().y1 < extent.y0 for axes in figure.axes)
