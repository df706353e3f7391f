"""Oracle: what is drawn, read back from the axes; the colors under simulated color blindness."""

import itertools
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from cosim.errors import InputError
from cosim.sweep.goal import Goal
from cosim.sweep.statistics import summarise
from cosim.sweep_figures import COLORS, plot_sweep
from cosim.terminal import CAUTION

F_AVG = "free_frame.average_gate_fidelity"
Table = dict[str, np.ndarray[Any, Any]]


def samples(count: int = 40, corners: tuple[str, ...] = ("slow", "fast")) -> Table:
    rng = np.random.default_rng(4)
    total = count * len(corners)
    detuning = np.tile(2e5 * rng.standard_normal(count), len(corners))
    infidelity = 1e-5 + (detuning / 5e6) ** 2 + 1e-5 * rng.random(total)
    return {
        "id": np.arange(1, total + 1),
        "status": np.array(["done"] * total, dtype=object),
        "corner": np.repeat(np.array(corners, dtype=object), count),
        "sample": np.tile(np.arange(count), len(corners)),
        "qubit.detuning": detuning,
        F_AVG: 1.0 - infidelity,
        "free_frame.error_bar": np.full(total, 1e-7),
    }


INPUTS = ("corner", "sample", "qubit.detuning")
UNITS = {"qubit.detuning": "Hz", F_AVG: "1"}


def draw(
    table: Table, inputs: tuple[str, ...], goal: Goal, monkeypatch: pytest.MonkeyPatch
) -> Figure:
    """Draw a sweep and catch the figure in place of writing it."""
    caught: list[Figure] = []
    monkeypatch.setattr(Figure, "savefig", lambda figure, *_, **__: caught.append(figure))
    plot_sweep(table, UNITS, summarise(table, inputs, goal), "figure.png")
    caught[0].draw_without_rendering()  # Warnings of the layout are errors here.
    return caught[0]


def test_samples(monkeypatch: pytest.MonkeyPatch) -> None:
    table = samples()
    figure = draw(table, INPUTS, Goal(limit=1e-3), monkeypatch)
    histogram, curve, shares, scatter = figure.axes
    assert histogram.get_xscale() == "log"
    assert scatter.get_xlabel() == "detuning (kHz)"
    metric = 1.0 - table[F_AVG]
    # The yield curve of a corner crosses the limit at the corner's yield.
    for line, part in zip(curve.lines, (slice(0, 40), slice(40, 80)), strict=False):
        kept = np.asarray(line.get_ydata())[np.asarray(line.get_xdata()) <= 1e-3]
        assert kept[-1] == pytest.approx(100.0 * np.mean(metric[part] <= 1e-3))
    points = np.concatenate([np.asarray(part.get_offsets()) for part in scatter.collections])
    assert points[:, 0] == pytest.approx(table["qubit.detuning"] / 1e3)
    assert points[:, 1] == pytest.approx(metric)
    assert shares.patches[0].get_width() > 90.0  # Per cent: the detuning does nearly all.
    assert any(text.get_text() == CAUTION for text in figure.texts)


def test_a_title_is_not_cut(monkeypatch: pytest.MonkeyPatch) -> None:
    table = samples()
    table["status"][:1] = "failed"
    title = draw(table, INPUTS, Goal(limit=1e-3), monkeypatch).texts[0]
    assert "1 more failed" in title.get_text()
    extent = title.get_window_extent()
    assert extent.x0 >= 0.0
    assert extent.x1 <= title.get_figure(root=True).bbox.width


def test_one_at_a_time(monkeypatch: pytest.MonkeyPatch) -> None:
    table = {
        "id": np.arange(1, 4),
        "status": np.array(["done"] * 3, dtype=object),
        "qubit.detuning": np.array([0.0, -1e5, 1e5]),
        "perturbed": np.array(["", "qubit.detuning", "qubit.detuning"], dtype=object),
        F_AVG: 1.0 - np.array([1e-4, 4e-4, 6e-4]),
    }
    figure = draw(table, ("qubit.detuning", "perturbed"), Goal(), monkeypatch)
    _, _, tornado = figure.axes
    # Both ends are worse, by 3 and 5 in 10^-4.
    assert [bar.get_width() for bar in tornado.patches] == pytest.approx([3.0, 5.0])
    assert tornado.get_xlabel() == "change of the metric ($10^{-4}$)"
    assert tornado.get_yticklabels()[0].get_text() == "detuning\n-100 kHz to 100 kHz"


@pytest.mark.full
@pytest.mark.parametrize("ending", ["png", "pdf", "svg"])
def test_formats(ending: str, tmp_path: Path) -> None:
    table = samples(10)
    path = tmp_path / f"figure.{ending}"
    plot_sweep(table, UNITS, summarise(table, INPUTS, Goal(limit=1e-3)), path)
    start = {"png": b"\x89PNG", "pdf": b"%PDF", "svg": b"<?xml"}[ending]
    assert path.read_bytes().startswith(start)


@pytest.mark.parametrize(
    "infidelities",
    [
        [1e-3],
        [1e-3, 1e-3, 1e-3],
        [0.0, 0.0],
        [-1e-9, 1e-9, 1e-5, 1e-3],  # Rounding may leave an infidelity below zero.
        [1e-3, math.nan],
    ],
)
@pytest.mark.parametrize("limit", [1e-3, math.nan, -1.0])
def test_odd_tables(
    infidelities: list[float], limit: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    metric = np.array(infidelities)
    table = {
        "id": np.arange(metric.size),
        "status": np.where(np.isnan(metric), "crash", "done").astype(object),
        F_AVG: 1.0 - metric,
    }
    histogram, _ = draw(table, (), Goal(limit=limit), monkeypatch).axes
    hidden = int((metric <= 0.0).sum()) if len(infidelities) == 4 else 0  # On a logarithmic axis.
    drawn = sum(bar.get_height() for bar in histogram.patches)
    assert drawn == np.isfinite(metric).sum() - hidden
    assert ("not shown" in histogram.get_title()) == bool(hidden)


def test_more_corners_than_colors_are_drawn_together(monkeypatch: pytest.MonkeyPatch) -> None:
    names = tuple(f"corner {at}" for at in range(len(COLORS) + 1))
    figure = draw(samples(5, names), INPUTS, Goal(limit=1e-3), monkeypatch)
    assert len(figure.axes[1].lines) == 2  # The curve and the limit.


def test_nothing_to_draw(tmp_path: Path) -> None:
    table = samples(2)
    table["status"][:] = "timeout"
    summary = summarise(table, INPUTS, Goal())
    with pytest.raises(InputError, match="nothing to draw"):
        plot_sweep(table, UNITS, summary, tmp_path / "figure.png")


def test_unknown_format(tmp_path: Path) -> None:
    table = samples(4)
    with pytest.raises(InputError, match="cannot be written"):
        plot_sweep(table, UNITS, summarise(table, INPUTS, Goal()), tmp_path / "figure.xyz")


# Rows give linear red, green and blue as an eye without one kind of cones sees them: G. M. Machado,
# M. M. Oliveira, L. A. F. Fernandes, IEEE Trans. Vis. Comput. Graph. 15, 1291 (2009), severity 1.
EYES = {
    "normal": np.eye(3),
    "protanopia": np.array(
        [
            [0.152286, 1.052583, -0.204868],
            [0.114503, 0.786281, 0.099216],
            [-0.003882, -0.048116, 1.051998],
        ]
    ),
    "deuteranopia": np.array(
        [
            [0.367322, 0.860646, -0.227968],
            [0.280085, 0.672501, 0.047413],
            [-0.01182, 0.04294, 0.968881],
        ]
    ),
    "tritanopia": np.array(
        [
            [1.255528, -0.076749, -0.178779],
            [-0.078411, 0.930809, 0.147602],
            [0.004733, 0.691367, 0.3039],
        ]
    ),
}


def lab(color: str, eye: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    """Give the place of a color in the CIE 1976 L*a*b* space, white D65."""
    coded = np.array([int(color[at : at + 2], 16) for at in (1, 3, 5)]) / 255.0
    linear = np.where(coded <= 0.04045, coded / 12.92, ((coded + 0.055) / 1.055) ** 2.4)
    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    x, y, z = (to_xyz @ np.clip(eye @ linear, 0.0, 1.0)) / (0.9505, 1.0, 1.089)
    f = [np.cbrt(v) if v > 0.008856 else 7.787 * v + 16.0 / 116.0 for v in (x, y, z)]
    return np.array([116.0 * f[1] - 16.0, 500.0 * (f[0] - f[1]), 200.0 * (f[1] - f[2])])


@pytest.mark.parametrize("eye", EYES)
def test_colors_stay_apart(eye: str) -> None:
    places = [lab(color, EYES[eye]) for color in COLORS]
    # As `cosim.sweep_figures` says; what differs by 2.3 is just seen to differ side by side.
    assert min(np.linalg.norm(a - b) for a, b in itertools.combinations(places, 2)) >= 28.0
