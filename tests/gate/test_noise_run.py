"""Oracle: a run of a sampled pulse with noise, a neighbour and rest, part against part.

What each part should be is tested beside this file; here it is that a run holds them, keeps them,
draws them, and refuses what cannot be meant.
"""

import json
import math
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

import cosim
from cosim.errors import CosimError
from cosim.figures import plot_gate
from cosim.noise_figures import draw_sides, side_rows
from cosim.result import GateResult, as_numbers

BASE = """
[waveform]
file = "pulse.csv"
unit = "V"
[drive]
probe = "v"
carrier = "2 GHz"
[qubit]
kind = "transmon"
frequency = "2 GHz"
anharmonicity = "-250 MHz"
rabi_per_volt = "40 MHz/V"
t1 = "50 us"
t2 = "40 us"
[gate]
target = "x"
window = ["5 ns", "65 ns"]
idle = ["70 ns", "95 ns"]
[accuracy]
floor = false
noise_samples = 100
"""
NOISE = """
[[noise]]
acts_on = "phase"
name = "LO"
sidebands = [["10 kHz", "-95 dBc/Hz"], ["100 MHz", "-150 dBc/Hz"]]
above = "hold"
[[noise]]
acts_on = "probe"
name = "output"
white = "10 nV/sqrt(Hz)"
[[noise]]
acts_on = "detuning"
name = "slow"
t2_star = "5 us"
"""
SPECTATOR = """
[[spectator]]
kind = "spin"
name = "q2"
offset = "60 MHz"
rabi_per_volt = "40 MHz/V"
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A raised cosine of 50 ns at 0.5 V, with 0.25 mV of carrier left."""
    place = tmp_path_factory.mktemp("noise")
    t = np.arange(0.0, 100e-9, 6.25e-12)
    rise = np.clip((t - 10e-9) / 50e-9, 0.0, 1.0)
    size = 0.25 * (1 - np.cos(2 * math.pi * rise)) + 0.25e-3
    table = np.column_stack([t, size * np.cos(2 * math.pi * 2e9 * t)])
    np.savetxt(place / "pulse.csv", table, delimiter=",", header="time,v", comments="")
    return place


def run(folder: Path, text: str) -> GateResult:
    tables: dict[str, Any] = tomllib.loads(text)
    tables["waveform"]["time_unit"] = "s"
    result = cosim.run(cosim.make_testbench(tables, folder=folder))
    assert isinstance(result, GateResult)
    return result


@pytest.fixture(scope="module")
def result(folder: Path) -> GateResult:
    return run(folder, BASE + NOISE + SPECTATOR)


@pytest.mark.full
def test_a_spectrum_adds_up_to_what_its_source_costs(result: GateResult) -> None:
    assert result.noise is not None
    lo, output, slow = result.noise.sources
    for source in (lo, output):
        spectrum = source.spectrum
        assert spectrum is not None
        assert spectrum.frequencies.size <= 300
        assert np.all(np.diff(spectrum.frequencies) > 0.0)
        total = float(np.sum(spectrum.density * spectrum.filter * spectrum.widths))
        # Sums in another order.
        assert total == pytest.approx(source.infidelity, rel=1e-12, abs=0.0)
    assert (lo.spectrum.low, lo.spectrum.high) == (1e4, math.inf)  # type: ignore[union-attr]
    assert slow.spectrum is None


def test_noise_is_part_of_every_number(result: GateResult, folder: Path) -> None:
    clean = run(folder, BASE + SPECTATOR)
    assert clean.noise is None
    assert result.noise is not None
    # They add up but for products of the two: samples come in pairs of opposite sign, so that no
    # mean of theirs adds to the coherent error of the pulse.
    assert clean.as_simulated.infidelity > 1e-3
    more = result.as_simulated.infidelity - clean.as_simulated.infidelity
    assert more == pytest.approx(result.noise.infidelity, rel=0.02)
    (other,), (quiet,) = result.spectators, clean.spectators
    assert other.noise is not None
    assert quiet.noise is None
    assert [item.name for item in other.noise.sources] == ["LO", "output"]
    assert other.infidelity > quiet.infidelity
    total = result.free_frame.infidelity + other.free_frame_infidelity
    assert result.register_infidelity == pytest.approx(total, rel=1e-12)
    assert result.idle is not None
    assert clean.idle is not None
    assert result.idle.noise is not None
    # 25 ns of T2* = 5 us lose (25/5000)^2/3 at rest, the voltage 2/3 of the flips up.
    wanted = (25 / 5000) ** 2 / 3
    (rest,) = [item for item in result.idle.noise.sources if item.name == "slow"]
    assert rest.infidelity == pytest.approx(wanted, rel=1e-4)
    assert result.idle.infidelity > clean.idle.infidelity
    # 0.5005 V over 0.25 mV.
    assert result.idle.extinction == pytest.approx(20 * math.log10(2002), abs=0.1)


def test_what_is_slower_is_said_once(result: GateResult) -> None:
    (text,) = [text for text in result.warnings if "slower than its first point" in text]
    assert text.startswith("noise 'LO'")


def test_the_archive_keeps_it_and_json_is_plain(result: GateResult, tmp_path: Path) -> None:
    cosim.save(result, tmp_path / "a.h5")
    again = cosim.load(tmp_path / "a.h5")
    assert isinstance(again, GateResult)
    assert again.noise is not None
    assert result.noise is not None
    first, second = result.noise.sources[0].spectrum, again.noise.sources[0].spectrum
    assert first is not None
    assert second is not None
    assert np.array_equal(first.density, second.density)
    numbers = as_numbers(again)
    assert numbers == as_numbers(result)
    assert json.loads(json.dumps(numbers, allow_nan=False)) == numbers
    assert "spectrum" not in numbers["noise"]["sources"][0]


@pytest.mark.full
def test_figures(result: GateResult, folder: Path, tmp_path: Path) -> None:
    plot_gate(result, tmp_path / "a.png")
    assert (tmp_path / "a.png").stat().st_size > 50_000
    assert side_rows(result) == 2
    figure = Figure(figsize=(10.5, 6.0), layout="constrained")
    canvas = FigureCanvasAgg(figure)
    part = figure.add_subfigure(figure.add_gridspec(1, 1)[0])
    draw_sides(part, result)
    canvas.draw()
    costs, octaves, others, lo, _, output, _ = part.axes
    assert result.noise is not None
    bars = [bar.get_width() for bar in costs.patches]  # type: ignore[attr-defined]
    wanted = [item.infidelity for item in result.noise.sources]
    assert bars == pytest.approx([*wanted, result.noise.infidelity], rel=1e-12, abs=0.0)
    assert [item.get_text() for item in octaves.get_legend().get_texts()] == ["LO", "output"]  # type: ignore[union-attr]
    assert {"q2"} <= {text.get_text() for text in others.texts}
    assert (lo.get_title(), output.get_title()) == ("LO", "output")
    assert lo.get_ylabel() == "density (rad²/Hz)"
    # White noise of 10 nV per root of a hertz is drawn as such, not as that of a quadrature.
    assert output.lines[0].get_ydata() == pytest.approx(1e-16, rel=1e-9, abs=0.0)
    # Nothing that is written leaves the figure.
    width, height = canvas.get_width_height()
    for axes in part.axes:
        legend = axes.get_legend()
        written = [axes.title, axes.xaxis.label, axes.yaxis.label, *axes.texts]
        shown = [text for text in written if text.get_text()]
        for item in [*shown, *([] if legend is None else [legend])]:
            box = item.get_window_extent()
            assert -0.5 <= box.x0 <= box.x1 <= width + 0.5, item  # Half a pixel of rounding.
            assert -0.5 <= box.y0 <= box.y1 <= height + 0.5, item
    alone = run(folder, BASE + SPECTATOR)
    assert side_rows(alone) == 1
    plot_gate(alone, tmp_path / "b.png")


@pytest.mark.parametrize(
    ("change", "text", "message"),
    [
        (
            ("", ""),
            '[[noise]]\nacts_on = "phase"\nname = "LO"\n'
            'sidebands = [["1 kHz", "-90 dBc/Hz"], ["1 MHz", "-120 dBc/Hz"]]',
            r"number 1, 'LO': .*known from 1000 to 1e\+06 Hz, but .* needs",
        ),
        (("", ""), '[[noise]]\nacts_on = "amplitude"\nflicker = "1e-9 1/Hz"', "is infinite"),
        (("", ""), '[[noise]]\nacts_on = "line"\nstages = [["20 dB", "4 K"]]', "make 20 dB"),
        (("", ""), '[[noise]]\nacts_on = "probe"\nfrom = "netlist"', r"needs a \[netlist\]"),
        (('"95 ns"', '"200 ns"'), "", r"\[gate\], key 'idle': .* not within the run"),
        (('t2 = "40 us"', 't2 = "101 us"'), "", r"key 't2': at most twice t1 = 5e-05 s"),
    ],
)
def test_what_cannot_be_meant_is_refused(
    change: tuple[str, str], text: str, message: str, folder: Path
) -> None:
    with pytest.raises(CosimError, match=message):
        run(folder, BASE.replace(*change) + text)


@pytest.mark.parametrize(
    ("change", "text", "message"),
    [
        (
            ("", ""),
            '[[noise]]\nacts_on = "detuning"\nname = "d"\nwhite = "1e4 Hz^2/Hz"',
            # (2 pi)^2 1e4/4, and 1/40 us - 1/100 us.
            "noise 'd' alone dephases at 9.87e+04 1/s, and the testbench's t2 at 1.5e+04 1/s",
        ),
        (
            ("", ""),
            '[[noise]]\nacts_on = "detuning"\nname = "d"\nt2_star = "41 us"',
            "noise 'd' makes a T2* of 4.1e-05 s, and the testbench's t2 is 4e-05 s",
        ),
        (
            ("", ""),
            '[[noise]]\nacts_on = "probe"\nname = "out"\nwhite = "300 nV/sqrt(Hz)"',
            # (2 pi 40 MHz/V)^2 9e-14 V^2/Hz, up and down, and 1/50 us.
            "noise 'out' alone relaxes the qubit at 5.68e+03 1/s, and the testbench's t1 at 2e+04",
        ),
        (
            ("", ""),
            '[[spectator]]\nkind = "spin"\noffset = "1 MHz"\nrabi_per_volt = "40 MHz/V"',
            "'spectator 1': it lies 1e+06 Hz from the carrier",
        ),
        (
            ('anharmonicity = "-250 MHz"', 'anharmonicity = "-60 MHz"\nlevels = 3'),
            "",
            "3 levels are too few: with 4 the average gate fidelity changes by",
        ),
        (('idle = ["70 ns"', 'idle = ["40 ns"'), "", "'idle' in [gate] lies on a pulse"),
    ],
)
def test_what_is_doubtful_is_named_with_its_number(
    change: tuple[str, str], text: str, message: str, folder: Path
) -> None:
    found = run(folder, BASE.replace(*change) + text).warnings
    assert any(message in line for line in found), found
