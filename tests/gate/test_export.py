"""Oracles: `ngspice -b` on the exported deck, and the run itself read back through its files."""

import subprocess
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim.capture import Capture, Plan, capture_probe, make_plan
from cosim.comparison import compare_runs
from cosim.errors import InputError, TestbenchError
from cosim.exporting import export_csv, export_deck, export_envelope
from cosim.formats.columns import read_columns
from cosim.formats.rawfile import read_raw
from cosim.probe_run import estimate_run
from cosim.result import GateResult
from tests.conftest import BenchMaker

pytestmark = pytest.mark.ngspice

DECK = """a gated carrier with a random level
.param spread={agauss(0,0.05,1)}
.func window(t) {min(max((t-5n)/2n,0),1)*min(max((28n-t)/2n,0),1)}
b1 src 0 v={0.1*(1+spread)*cos(2*pi*1g*time)*window(time)}
r1 src out 50
r2 out 0 50
.tran 1n 32n
.end
"""
TABLES = {
    "netlist": {"save": ["v(src)"], "seed": 7},
    "drive": {"carrier": "1 GHz", "probe": "2*v(out)"},
    "qubit": {"frequency": "1 GHz", "rabi_per_volt": "130 MHz/V"},
    "gate": {"target": "x90", "window": ["1 ns", "31 ns"]},
}


@pytest.fixture(name="result")
def fixture_result(make_bench: BenchMaker) -> GateResult:
    return cosim.run(make_bench(DECK, TABLES))


def test_the_exported_deck_repeats_the_run(result: GateResult, tmp_path: Path) -> None:
    folder = tmp_path / "repeat"
    export_deck(result, folder)
    command = ["ngspice", "-b", "-r", "out.raw", "deck.cir"]
    subprocess.run(command, cwd=folder, capture_output=True, timeout=60, check=False)
    raw = read_raw(folder / "out.raw")
    assert np.array_equal(raw.vectors["time"], result.waveform.t)
    # The same program on the same lines with the same seed: the same numbers.
    assert np.array_equal(2 * raw.vectors["v(out)"], result.waveform.v)


def test_a_folder_that_is_not_empty_is_left_alone(result: GateResult, tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine", encoding="utf-8")
    with pytest.raises(InputError, match="not empty"):
        export_deck(result, tmp_path)
    assert (tmp_path / "mine.txt").read_text(encoding="utf-8") == "mine"


def imported(result: GateResult, file: Path, bench: cosim.Testbench, **drive: str) -> GateResult:
    tables = {
        "waveform": {"file": str(file)},
        "drive": {"carrier": "1 GHz", **drive},
        "qubit": TABLES["qubit"] | {"kind": "spin"},
        "gate": TABLES["gate"],
    }
    return cosim.run(cosim.make_testbench(tables, folder=bench.folder))


def same_numbers(one: GateResult, two: GateResult) -> None:
    for name in ("average_gate_fidelity", "process_fidelity"):
        assert getattr(one.as_simulated, name) == getattr(two.as_simulated, name)


def test_columns_and_raw_files_take_the_same_path(
    result: GateResult, make_bench: BenchMaker, tmp_path: Path
) -> None:
    bench = make_bench(DECK, TABLES)
    assert export_csv(result, tmp_path / "a.csv") == result.waveform.t.size
    columns = read_columns(tmp_path / "a.csv")
    assert np.array_equal(columns["probe"].v, result.waveform.v)
    from_csv = imported(result, tmp_path / "a.csv", bench, probe="probe")
    assert np.array_equal(from_csv.waveform.t, result.waveform.t)  # the raw grid is kept
    same_numbers(from_csv, result)
    assert 0 <= from_csv.numerical_floor < 1e-6
    assert from_csv.run.deck_files[0].path.endswith("a.csv")
    assert len(from_csv.run.deck_files[0].sha256) == 64

    export_deck(result, tmp_path / "d")
    command = ["ngspice", "-b", "-r", "out.raw", "deck.cir"]
    subprocess.run(command, cwd=tmp_path / "d", capture_output=True, timeout=60, check=False)
    from_raw = imported(result, tmp_path / "d" / "out.raw", bench, probe="v(out)+v(out)")
    same_numbers(from_raw, result)
    with pytest.raises(InputError, match="no deck"):
        export_deck(from_csv, tmp_path / "none")


def test_the_envelope_upconverted_gives_the_gate_again(
    result: GateResult, make_bench: BenchMaker, tmp_path: Path
) -> None:
    export_envelope(result, tmp_path / "iq.csv")
    bench = make_bench(DECK, TABLES)
    again = imported(result, tmp_path / "iq.csv", bench, i="i", q="q")
    # The demodulator's pass band cuts the edges' spectrum beyond a quarter of the carrier.
    assert again.as_simulated.average_gate_fidelity == pytest.approx(
        result.as_simulated.average_gate_fidelity, abs=1e-5
    )
    assert again.rotation.angle == pytest.approx(result.rotation.angle, rel=1e-4)


def test_faults_of_imported_waveforms(
    result: GateResult, make_bench: BenchMaker, tmp_path: Path
) -> None:
    bench = make_bench(DECK, TABLES)
    export_csv(result, tmp_path / "a.csv")
    with pytest.raises(TestbenchError, match=r"no column 'prob'.*'probe'"):
        imported(result, tmp_path / "a.csv", bench, probe="prob")
    tables = {"gate": {"window": ["1 ns", "60 ns"]}}
    with pytest.raises(TestbenchError, match="60 ns does not lie within the run of 0 ns to 32 ns"):
        cosim.run(
            cosim.make_testbench(
                {
                    "waveform": {"file": str(tmp_path / "a.csv")},
                    "drive": {"carrier": "1 GHz", "probe": "probe"},
                    "qubit": TABLES["qubit"] | {"kind": "spin"},
                    "gate": TABLES["gate"] | tables["gate"],
                }
            )
        )


def coarse(samples: int) -> GateResult:
    """A pulse with a third harmonic, as a switching mixer makes it, of so many samples a period."""
    t = np.arange(0, 32e-9, 1e-9 / samples)
    wave = np.cos(2 * np.pi * 1e9 * t) - np.cos(2 * np.pi * 3e9 * t) / 3
    v = 0.1 * np.sin(np.pi * t / 32e-9) ** 2 * wave
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "trace.csv"
        rows = "\n".join(f"{x:.12e},{y:.12e}" for x, y in zip(t, v, strict=True))
        path.write_text(f"t (s),v (V)\n{rows}\n", encoding="utf-8")
        tables = {
            "waveform": {"file": str(path)},
            "drive": {"carrier": "1 GHz", "probe": "v"},
            "qubit": TABLES["qubit"] | {"kind": "spin"},
            "gate": TABLES["gate"],
        }
        return cosim.run(cosim.make_testbench(tables))


def test_the_error_bar_of_an_import_covers_what_lies_between_its_samples() -> None:
    """Oracle: the same pulse with 640 samples per carrier period."""
    true = coarse(640)
    for samples in (40, 80):
        found = coarse(samples)
        for name in ("as_simulated", "free_frame"):
            one, two = getattr(found, name), getattr(true, name)
            error = abs(one.average_gate_fidelity - two.average_gate_fidelity)
            assert error <= one.error_bar
            assert one.error_bar < 1e-3  # else the bar would say nothing
    assert np.isnan(coarse(39).numerical_floor)


def test_comparison(result: GateResult, make_bench: BenchMaker) -> None:
    same = compare_runs(result, result)
    assert all(item.change == 0 or np.isnan(item.change) for item in same.numbers)
    assert same.waveform_difference == 0
    assert same.inputs == ()
    bench = make_bench(DECK, TABLES)
    assert bench.netlist is not None
    other = cosim.run(replace(bench, netlist=replace(bench.netlist, seed=8)))
    found = compare_runs(result, other)
    amplitude = next(item for item in found.numbers if item.name == "pulse.amplitude")
    ratio = other.pulse.amplitude / result.pulse.amplitude
    assert amplitude.change == other.pulse.amplitude - result.pulse.amplitude
    # The deck is linear, so that the waveforms differ by the ratio everywhere.
    assert found.waveform_difference == pytest.approx(abs(ratio - 1), rel=1e-6)
    assert "-seed = 7" in found.inputs
    assert "+seed = 8" in found.inputs


def test_the_short_run_estimates_the_whole(
    make_bench: BenchMaker, monkeypatch: pytest.MonkeyPatch
) -> None:
    def timed(plan: Plan) -> Capture:
        """The short run as it is, of 1 ms for each of its points."""
        shot = capture_probe(plan)
        assert shot.result is not None
        return replace(shot, result=replace(shot.result, wall_time=1e-3 * shot.result.time.size))

    monkeypatch.setattr("cosim.probe_run.capture_probe", timed)
    tables = {**TABLES, "netlist": {"save": ["v(src)"], "stop": "400 ns"}}
    bench = make_bench(DECK, tables)
    estimate = estimate_run(make_plan(bench), floor=False)
    whole = cosim.run(bench)
    # The grid is the carrier's; the simulator adds its first point and those of breakpoints.
    assert estimate.time == pytest.approx(1e-3 * whole.run.points, rel=1e-3)
    assert estimate.disk > 2 * 8 * 0.5 * whole.run.points
    both = estimate_run(make_plan(bench), floor=True)
    assert both.time == pytest.approx(3 * estimate.time, rel=1e-3)  # one point more or less
    assert both.memory == pytest.approx(2 * estimate.memory, rel=1e-3)
