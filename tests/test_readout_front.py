"""Oracle: the result that is shown, made of a resonator's records in closed form with known noise;
terminal, JSON, archive and figure must give its numbers back."""

import io
import json
import math
import sys
from collections.abc import Callable
from dataclasses import fields, is_dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.image import imread
from rich.console import Console

import cosim
from cosim import cli
from cosim.archive import read_table
from cosim.comparison import compare_runs
from cosim.dsp.detection.assignment import scan_integration, split_assignment
from cosim.dsp.detection.converter import Adc
from cosim.dsp.detection.output_noise import OutputNoise
from cosim.dsp.detection.reception import ChainOutput, Detector
from cosim.dsp.detection.records import Preparation, Records, relaxation
from cosim.dsp.detection.shots import integrated_shots, record_shots, shot_points
from cosim.errors import InputError
from cosim.exporting import export_csv
from cosim.readout_figures import plot_readout
from cosim.readout_result import (
    READOUT_FIELDS,
    ReadoutNoise,
    ReadoutResult,
    ReadoutTraces,
    readout_numbers,
)
from cosim.readout_terminal import readout_table
from cosim.result import RunRecord, as_numbers
from cosim.terminal import CAUTION, runs_table
from cosim.waveform import ComplexArray
from tests.readout.benches import bench

WIDTH = 80
BEGIN, STEP, COUNT = 100e-9, 2e-9, 400  # of the records: from 100 ns to 900 ns of the deck
WINDOW = (100e-9, 800e-9)  # of the records' time
RATE = 2.0 * math.pi * 1.5e6  # kappa/2 in rad/s
LEVEL = 20e-3  # V
SEED = 5
DEVICES = {
    "arriving": 0.41,
    "xlna.xfirst.m1": 0.3,
    "rload": 0.15,
    "xlna.m2": 0.08,
    "r2": 0.03,
    "r3": 0.02,
    "r4": 0.01,
}


def field(states: tuple[complex, complex], change: float = math.inf) -> ComplexArray:
    """A field that settles with RATE on one level, and on another after a change."""
    t = STEP * np.arange(COUNT)
    before = states[0] * (1.0 - np.exp(-RATE * t))
    if math.isinf(change):
        return before
    reached = states[0] * (1.0 - math.exp(-RATE * change))
    after = states[1] + (reached - states[1]) * np.exp(-RATE * np.maximum(t - change, 0.0))
    return np.where(t < change, before, after)


def make_result(*, quadratures: int = 2, told: bool = True) -> ReadoutResult:
    """A readout of a resonator, or of a sensor with one output, of which less is told."""
    low, high = LEVEL * np.exp(0.6j), LEVEL * np.exp(-0.3j)
    if quadratures == 1:
        low, high = 0.2 * LEVEL + 0j, 0.8 * LEVEL + 0j
    times = np.linspace(0.0, STEP * COUNT, 9)[:-1]
    records = Records(
        STEP,
        field((low, high)),
        field((high, low)),
        times,
        np.array([field((high, low), change) for change in times]),
        times,
        np.array([field((low, high), change) for change in times]),
    )
    adc = Adc(8, 0.2, 0.25 / STEP)
    corner = 1e6 + np.abs(np.linspace(-250e6, 250e6, 101))
    noise = OutputNoise(
        frequencies=np.linspace(-250e6, 250e6, 101),
        density=1.5e-12 * (1.0 + 2e6 / corner),
        quadratures=quadratures,
    )
    output = ChainOutput(records, noise)
    detector = Detector(start=WINDOW[0], stop=WINDOW[1], adc=adc if told else None)
    chances = (relaxation(6e-6, 0.02), Preparation(0.02, 0.001))
    split = split_assignment(output, detector, *chances)
    scan = scan_integration(output, detector, *chances)
    points = shot_points(split, *chances, 500, SEED)
    t = BEGIN + STEP * (np.arange(COUNT) + 0.5)
    photons = np.abs(records.ground) ** 2 * 4.0 / LEVEL**2
    return ReadoutResult(
        title="a resonator through its amplifier" if told else "a sensor and its amplifier",
        assignment_error=split.assignment_error,
        assignment_matrix=split.assignment_matrix,
        snr=split.snr,
        errors=split.errors,
        integration_time=split.projection.integration_time,
        best_integration_time=scan.best_time,
        best_assignment_error=scan.best_error,
        added_noise_quanta=12.5 if told else math.nan,
        noise_temperature=3.6 if told else math.nan,
        noise_method="injection" if told else "arriving only",
        residual_photons=3.1 if told else math.nan,
        wait=640e-9 if told else math.nan,
        latency=adc.group_delay if told else 0.0,
        repeat_agreement=0.957,
        dephasing_rate=2.7e6 if told else math.nan,
        shots=integrated_shots(split, *chances, 100_000, SEED),
        records=record_shots(output, detector, split, *chances, 2000, SEED),
        numerical_floor=2.3e-5 if told else math.nan,
        split=split,
        scan=scan,
        noise=ReadoutNoise(
            noise.frequencies,
            noise.density,
            0.07,
            DEVICES if told else {},
            "the chain is switched" if told else "",
            ("1/f noise of xlna.m2",) if told else (),
        ),
        traces=ReadoutTraces(
            t,
            records.ground,
            records.excited,
            t,
            photons if told else np.zeros(0),
            1.1 * photons if told else np.zeros(0),
            points[0],
            points[1],
            0.5 * points[0] if told else np.zeros(0, complex),
        ),
        efficiency=0.0385 if told else math.nan,
        residual_stark_shift=-41e3 if told else math.nan,
        purcell_time=77e-6 if told else math.nan,
        leaked=np.array([0.25, 0.75]) if told else np.zeros(0),
        warnings=("the chain saturates for |1> more than for |0>",) if told else (),
        run=RunRecord(
            started="2026-01-02T03:04:05+00:00",
            host="a machine",
            versions={"qcosim": "0.1.0"},
            seed=1,
            wall_times={"ngspice": 1.5, "shots": 0.25},
            testbench='title = "a readout"\n',
            deck_files=(),
            deck_sent="a deck\n.end\n",
            deck_data={},
            deck_commands=(),
            log=("Doing analysis at TEMP = 27",),
            points=5001,
            step=4e-12,
            steps_per_period=40.0,
        ),
    )


@pytest.fixture(scope="module")
def result() -> ReadoutResult:
    return make_result()


@pytest.fixture(scope="module")
def sensor() -> ReadoutResult:
    return make_result(quadratures=1, told=False)


def printed(result: ReadoutResult) -> str:
    text = io.StringIO()
    Console(file=text, width=WIDTH, highlight=False).print(readout_table(result))
    return text.getvalue()


def same(a: Any, b: Any) -> bool:
    """Tell whether two values are of one type and equal, NaN being equal to itself."""
    if isinstance(a, np.ndarray):
        return isinstance(b, np.ndarray) and a.dtype == b.dtype and np.array_equal(a, b)
    if type(a) is not type(b):
        return False
    if isinstance(a, float):
        return a == b or (math.isnan(a) and math.isnan(b))
    if is_dataclass(a):
        return all(same(getattr(a, one.name), getattr(b, one.name)) for one in fields(a))
    return bool(a == b)


class TestReadoutTable:
    def test_it_shows_the_numbers_of_the_result(self, result: ReadoutResult) -> None:
        text = printed(result)
        lines = text.splitlines()
        assert max(map(len, lines)) <= WIDTH
        words = " ".join(text.split())
        assert f"{result.assignment_error:.4e} ± 2.3e-05" in words
        assert f"P(1|0) = {result.assignment_matrix[1, 0]:.4e}" in words
        assert f"P(0|1) = {result.assignment_matrix[0, 1]:.4e}" in words
        # The records begin at 100 ns of the deck, and the window at the first whole sample of the
        # converter 100 ns later: it converts every 8 ns.
        assert "integrated from 204 ns to 900 ns" in words
        assert "leaked to 2 P(0|2) = 2.5000e-01 P(1|2) = 7.5000e-01" in words
        assert "12.5 quanta: 0.0385 of the information is left" in words
        assert "photons at the end 3.1, which shift the qubit by -41 kHz" in words
        assert "Purcell decay in 77 µs through the resonator alone" in words
        for expected in ("3.6 K", "± 7%: the chain is switched", "wait 640 ns"):
            assert expected in words
        assert "arriving 41.0%, xlna.xfirst.m1 30.0%" in words
        assert "r3" not in words
        for counts in (result.shots, result.records):
            value = f"{counts.assignment_error:.4e} ± {counts.standard_error:.1e}"
            off = counts.deviation(result.assignment_matrix)
            assert f"{counts.count} {value} {off:+.2f} standard errors" in words
        assert "warning: the chain saturates for |1> more than for |0>" in lines
        best = f"best one {1e9 * result.scan.best_time:.4g} ns, assignment error"
        assert f"{best} {result.scan.best_error:.4e}" in words
        assert words.endswith(CAUTION)

    def test_a_best_length_at_the_end_of_the_window(self, sensor: ReadoutResult) -> None:
        assert sensor.best_integration_time == pytest.approx(700e-9, rel=1e-9, abs=0.0)
        assert "the whole window; a longer one may be better" in printed(sensor)

    def test_the_greatest_error_comes_first(self, result: ReadoutResult) -> None:
        items = {one.name: getattr(result.errors, one.name) for one in fields(result.errors)}
        ranked = sorted(items, key=lambda name: -items[name])
        lines = {line.split()[0]: line for line in printed(result).splitlines() if line.strip()}
        places = [list(lines).index(name) for name in ranked]
        assert places == sorted(places)
        shares = [float(lines[name].split()[2].rstrip("%")) for name in ranked]
        # Six shares, each rounded to a tenth of a percent.
        assert sum(shares) == pytest.approx(100.0, abs=0.3)
        bars = [lines[name].count("█") for name in ranked]
        assert bars[0] == max(bars) > 0

    def test_an_item_that_helps_has_no_bar(self, result: ReadoutResult) -> None:
        helps = replace(result, errors=replace(result.errors, saturation=-1e-2))
        (line,) = (x for x in printed(helps).splitlines() if x.startswith("saturation"))
        assert "-1.000e-02" in line
        assert "█" not in line

    def test_what_is_not_known_is_a_dash(self, sensor: ReadoutResult) -> None:
        text = printed(sensor)
        assert "nan" not in text.lower()
        for name in ("added noise", "noise temperature", "photons at the end", "dephasing"):
            (line,) = (x for x in text.splitlines() if x.startswith(name))
            assert line.removeprefix(name).strip().startswith("-")

    def test_long_names_are_folded(self, result: ReadoutResult) -> None:
        devices = {f"xchip.xamplifier.xstage{n}.m.xtransistor.m1": 0.1 for n in range(9)}
        long = replace(result, title="a title " * 20, warnings=("a warning " * 20,))
        text = printed(replace(long, noise=replace(result.noise, devices=devices)))
        assert max(map(len, text.splitlines())) <= WIDTH
        assert "…" not in text
        assert "".join(list(devices)[4]) in "".join(text.split())

    def test_no_wrong_decision_at_all(self, result: ReadoutResult) -> None:
        # The closed form underflows where the states are far apart.
        sure = replace(
            result,
            assignment_error=0.0,
            assignment_matrix=np.eye(2),
            errors=replace(result.errors, **{one.name: 0.0 for one in fields(result.errors)}),
        )
        assert "assignment error   0.0000e+00" in printed(sure)


def test_gates_and_readouts_in_one_list() -> None:
    columns = {
        "id": np.array([1, 2]),
        "status": np.array(["done", "done"], dtype=object),
        "start_time": np.array(["2026-01-02T03:04:05+00:00"] * 2, dtype=object),
        "target": np.array(["x90", ""], dtype=object),
        "title": np.array(["a gate", "a readout"], dtype=object),
        "free_frame.process_fidelity": np.array([0.9991, math.nan]),
        "free_frame.average_gate_fidelity": np.array([0.9994, math.nan]),
        "assignment_error": np.array([math.nan, 0.0182]),
    }
    text = io.StringIO()
    Console(file=text, width=WIDTH, highlight=False).print(runs_table(columns))
    lines = text.getvalue().splitlines()
    assert max(map(len, lines)) <= WIDTH
    gate, readout = (next(x for x in lines if x.startswith(f"{n} ")) for n in (1, 2))
    assert gate.split()[-3:] == ["0.9991000", "6.000e-04", "-"]
    assert readout.split()[-3:] == ["-", "-", "1.820e-02"]


def test_json_prints_the_declared_names(result: ReadoutResult, sensor: ReadoutResult) -> None:
    numbers = json.loads(json.dumps(readout_numbers(result), allow_nan=False))
    assert list(numbers) == list(READOUT_FIELDS)
    assert numbers["assignment_matrix"] == result.assignment_matrix.tolist()
    assert sum(numbers["errors"].values()) == pytest.approx(result.assignment_error, abs=1e-15)
    assert set(numbers["errors"]) == {
        "separation",
        "decay",
        "preparation",
        "excitation",
        "saturation",
        "quantisation",
    }
    assert numbers["shots"]["count"] == 100_000
    assert {"assignment_error", "standard_error"} <= set(numbers["shots"])
    less = json.loads(json.dumps(readout_numbers(sensor), allow_nan=False))
    assert less["added_noise_quanta"] is less["numerical_floor"] is None


class TestArchive:
    @pytest.mark.parametrize("name", ["result", "sensor"])
    def test_what_is_loaded_equals_what_was_saved(
        self, name: str, request: pytest.FixtureRequest, tmp_path: Path
    ) -> None:
        saved = request.getfixturevalue(name)
        assert cosim.save(saved, tmp_path / "a.h5") == 1
        again = cosim.load(tmp_path / "a.h5")
        assert isinstance(again, ReadoutResult)
        assert same(again, saved)
        assert printed(again) == printed(saved)

    def test_the_table_has_the_scalars(self, result: ReadoutResult, tmp_path: Path) -> None:
        cosim.save(result, tmp_path / "a.h5")
        cosim.save(replace(result, snr=3.5), tmp_path / "a.h5")
        table = read_table(tmp_path / "a.h5")
        assert list(table["snr"]) == [result.snr, 3.5]
        for name in ("errors.decay", "shots.standard_error", "best_assignment_error", "wait"):
            assert name in table
        # What has its place with the run alone.
        assert not any(name.startswith(("split.", "scan.", "noise.", "run.")) for name in table)


class TestFigure:
    @pytest.mark.full
    @pytest.mark.parametrize("name", ["result", "sensor"])
    def test_it_is_drawn(self, name: str, request: pytest.FixtureRequest, tmp_path: Path) -> None:
        plot_readout(request.getfixturevalue(name), tmp_path / "a.png")
        picture = imread(tmp_path / "a.png")
        assert picture.shape[:2] == (1425, 1800)
        # Panels of lines and points: part of the picture, not all of it, is coloured.
        coloured = (np.ptp(picture[..., :3], axis=2) > 0.1).mean()
        assert 0.005 < coloured < 0.3

    @pytest.mark.full
    def test_an_item_that_helps_and_another_format(
        self, result: ReadoutResult, tmp_path: Path
    ) -> None:
        helps = replace(result, errors=replace(result.errors, saturation=-1e-2))
        plot_readout(helps, tmp_path / "a.pdf")
        assert (tmp_path / "a.pdf").read_bytes().startswith(b"%PDF")

    @pytest.mark.full
    def test_extremes_are_drawn_without_complaint(
        self, result: ReadoutResult, tmp_path: Path
    ) -> None:
        """Warnings are errors here: of axes without a span, of logarithms of zero."""
        zero = replace(result.errors, **{one.name: 0.0 for one in fields(result.errors)})
        counts = replace(result.shots, assignment_error=0.0, standard_error=0.0)
        sure = replace(
            result,
            title="",
            assignment_error=0.0,
            errors=zero,
            shots=counts,
            records=counts,
            scan=replace(result.scan, assignment_error=np.zeros(result.scan.times.size)),
            noise=replace(
                result.noise,
                density=np.full(result.noise.density.size, 1e-15),
                devices={f"xchip.xamplifier.xstage{n}.mtransistor": 0.05 for n in range(20)},
            ),
        )
        plot_readout(sure, tmp_path / "a.png")

    def test_a_file_that_cannot_be_written(self, result: ReadoutResult, tmp_path: Path) -> None:
        with pytest.raises(InputError, match="cannot be written"):
            plot_readout(result, tmp_path / "none" / "a.png")


class TestCommands:
    @pytest.fixture
    def qcosim(
        self, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
    ) -> Callable[..., tuple[int, str, str]]:
        """Run the command in this process; gives exit code, standard output, standard error."""

        def call(*words: object) -> tuple[int, str, str]:
            monkeypatch.setattr(sys, "argv", ["qcosim", *map(str, words)])
            with pytest.raises(SystemExit) as end:
                cli.main()
            out, err = capfd.readouterr()
            return int(end.value.code or 0), out, err

        return call

    @pytest.mark.ngspice
    def test_run(self, qcosim: Callable[..., tuple[int, str, str]], tmp_path: Path) -> None:
        few = {"shots": 1000, "records": 100, "window": ["20 ns", "120 ns"], "decay_times": 2}
        netlist, resonator = {"stop": "165 ns"}, {"length": "100 ns"}
        made = bench(tmp_path, netlist=netlist, resonator=resonator, readout=few)
        (tmp_path / "ro.toml").write_text(made.to_toml(), encoding="utf-8")
        archive, figure = tmp_path / "new.h5", tmp_path / "new.png"
        words = ("run", tmp_path / "ro.toml", "--archive", archive, "--plot", figure)
        code, out, err = qcosim(*words)
        assert code == 0, err
        assert "what makes the wrong decisions" in out
        assert figure.read_bytes().startswith(b"\x89PNG")
        assert "as run 1 of" in err
        _, first, _ = qcosim("run", tmp_path / "ro.toml", "--json")
        _, second, _ = qcosim("show", archive, "--run", 1, "--json")
        # Shots have a seed, so that nothing but times differs between two runs.
        assert json.loads(first) == json.loads(second)
        assert list(json.loads(first)) == list(READOUT_FIELDS)

    def test_a_readout_takes_no_system(self, tmp_path: Path) -> None:
        z = np.diag([0.0, 1.0])
        system = cosim.operator_system(z, np.array([[0.0, 1.0], [1.0, 0.0]]))
        with pytest.raises(InputError, match="takes no system of operators"):
            cosim.run(bench(tmp_path), system=system)

    @pytest.fixture
    def archive(self, result: ReadoutResult, tmp_path: Path) -> Path:
        cosim.save(result, tmp_path / "ro.h5")
        return tmp_path / "ro.h5"

    def test_show(
        self, qcosim: Callable[..., tuple[int, str, str]], archive: Path, result: ReadoutResult
    ) -> None:
        code, out, _ = qcosim("show", archive)
        assert code == 0
        assert f"{result.assignment_error:.3e}" in out
        code, out, _ = qcosim("show", archive, "--run", 1)
        assert code == 0
        assert "what makes the wrong decisions" in out
        assert "a machine" in out
        code, out, _ = qcosim("show", archive, "--run", 1, "--json")
        assert json.loads(out) == readout_numbers(result)
        code, out, _ = qcosim("show", archive, "--log")
        assert out == "Doing analysis at TEMP = 27\n"

    def test_what_takes_gates_refuses_readouts(
        self, qcosim: Callable[..., tuple[int, str, str]], archive: Path, tmp_path: Path
    ) -> None:
        code, out, err = qcosim("export", archive, "--csv", tmp_path / "a.csv")
        assert (code, out) == (2, "")
        assert "result of a gate, got a ReadoutResult ('a resonator" in err
        assert not (tmp_path / "a.csv").exists()

    def test_two_runs_are_compared(
        self, qcosim: Callable[..., tuple[int, str, str]], archive: Path
    ) -> None:
        code, out, _ = qcosim("compare", archive, archive)
        lines = {line.split()[0]: line.split()[1:] for line in out.splitlines()[1:-1]}
        assert code == 0
        assert lines["assignment_error"][2:] == ["+0.00e+00", "equal"]
        assert lines["errors.separation"][2:] == ["+0.00e+00", "equal"]
        assert "…" not in out

    def test_deck_and_records_are_exported(
        self,
        qcosim: Callable[..., tuple[int, str, str]],
        archive: Path,
        result: ReadoutResult,
        tmp_path: Path,
    ) -> None:
        table, folder = tmp_path / "records.csv", tmp_path / "deck"
        code, _, err = qcosim("export", archive, "--envelope", table, "--deck", folder)
        assert (code, err.count("rows in")) == (0, 1)
        assert table.read_text().startswith("time (s),I of |0> (V),Q of |0> (V),I of |1> (V),Q")
        columns = np.loadtxt(table, delimiter=",", skiprows=1).T
        np.testing.assert_array_equal(columns[0], result.traces.time)
        np.testing.assert_array_equal(columns[1] + 1j * columns[2], result.traces.ground)
        np.testing.assert_array_equal(columns[3] + 1j * columns[4], result.traces.excited)
        title, rest = result.run.deck_sent.split("\n", 1)
        sent = f"{title}\n.options seed={result.run.seed}\n{rest}"
        assert (folder / "deck.cir").read_text() == sent


def test_what_a_change_of_a_readout_is_worth(result: ReadoutResult) -> None:
    traces = replace(result.traces, excited=1.5 * result.traces.excited)
    bars = {"numerical_floor": 1e-4, "standard_error": 2e-4}
    first = replace(result, **bars)
    near = replace(first, assignment_error=first.assignment_error + 5e-4)
    far = replace(first, assignment_error=first.assignment_error + 7e-4, traces=traces)
    found = [compare_runs(first, other) for other in (near, far)]
    errors = [one.numbers[0] for one in found]
    assert [one.name for one in errors] == ["assignment_error"] * 2
    # Both have bars of 3e-4.
    assert [one.resolved for one in errors] == [False, True]
    assert [one.bar for one in errors] == pytest.approx([6e-4, 6e-4], rel=1e-9)
    assert found[0].waveform_difference == 0.0
    assert found[1].waveform_difference == pytest.approx(0.5, rel=1e-12)


def test_gates_alone_have_waveforms(result: ReadoutResult, tmp_path: Path) -> None:
    for attempt in (
        lambda: export_csv(result, tmp_path / "a.csv"),
        lambda: as_numbers(result),
    ):
        with pytest.raises(InputError, match="result of a gate, got a ReadoutResult"):
            attempt()
