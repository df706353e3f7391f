"""Oracle: each run of the plan made alone by `cosim.run`, scipy's intervals and ranks on the
table's own column, and the derivative of an assignment error by its preparation error."""

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import stats

import cosim
from cosim import archive
from cosim.errors import ArchiveError, TestbenchError
from cosim.keys import flattened
from cosim.readout import ReadoutRuns, run_readout, simulate_readout
from cosim.sweep import simulated
from cosim.sweep.batches import DONE
from cosim.sweep.estimate import estimate_sweep
from cosim.sweep.goal import make_goal
from cosim.sweep.identity import files_of, identity_keys
from cosim.sweep.keeping import kept_whole
from cosim.sweep.planning import make_sweep
from cosim.sweep.record import SWEEP_KINDS, FailedRun, check_same_plan, make_sweep_record
from cosim.sweep.repetition import read_record, repeat_sample, rerun
from cosim.sweep.run import run_sweep
from cosim.sweep.statistics import SweepSummary, summarise
from cosim.testbench import ReadoutBench, load_testbench
from tests.readout.test_archive import leaves
from tests.readout.test_decisions import ideal
from tests.readout.test_pulse import asked
from tests.readout.test_sensor import DECK as SENSOR_DECK
from tests.sweep.benches import HERE, OF_TIME, differing, rows
from tests.sweep.readout_benches import (
    ADC,
    GAIN,
    NOISE,
    T1,
    Sweep,
    swept_bench,
    write_swept,
)

pytestmark = pytest.mark.ngspice

SENSOR: dict[str, Any] = {
    "netlist": {"file": "deck.cir"},
    "sensor": {
        "parameter": "g",
        "late_parameter": "g_late",
        "event_parameter": "t_event",
        "value_0": 1e-6,
        "value_1": 1.05e-6,
        "start": "0.2 us",
    },
    "readout": {"probe": "v(out)", "window": ["0.2 us", "2 us"], "shots": 1000, "records": 100},
    "noise": [{"acts_on": "probe", "from": "netlist", "seeds": 2}],
    "accuracy": {"floor": False},
}


@pytest.fixture
def calls(monkeypatch: pytest.MonkeyPatch) -> list[ReadoutBench]:
    """Note each simulation that is asked for."""
    noted: list[ReadoutBench] = []

    def simulate(bench: ReadoutBench, **more: Any) -> ReadoutRuns:
        noted.append(bench)
        return simulate_readout(bench, **more)

    monkeypatch.setattr(simulated, "simulate_readout", simulate)
    return noted


def check_against_single_runs(path: Path, bench: ReadoutBench) -> None:
    plan = make_sweep(bench)
    found = rows(path)
    assert [row["id"] for row in found] == list(range(1, len(plan) + 1))
    whole = {k: archive.read(path, SWEEP_KINDS, k) for k in archive.record_numbers(path)}
    assert whole
    for run, row in zip(plan, found, strict=True):
        alone = cosim.run(plan.testbench(run))
        cells, _ = archive.cells_of(alone)
        expected = {
            **cells,
            **run.values,
            "kind": type(alone).__name__,
            "status": "done",
            "identity": run.identity,
            "seed": run.seed,
            "warnings": "\n".join(alone.warnings),
        }
        for name, value in expected.items():
            if name not in OF_TIME:
                assert row[name] == value or (row[name] != row[name] and value != value), name
        if run.number + 1 in whole:
            check_equal(whole[run.number + 1], alone)


def check_equal(one: object, other: object) -> None:
    """Compare two results to the last bit, but for times."""
    mine, theirs = leaves(one), leaves(other)
    for name in mine.keys() | theirs.keys():
        if "wall_times" in name or name.endswith("started"):
            continue
        np.testing.assert_array_equal(mine[name], theirs[name], err_msg=name)


def summary_of(path: Path, **goal: Any) -> tuple[SweepSummary, dict[str, np.ndarray]]:
    record, table = read_record(path), archive.read_table(path)
    made = make_goal("assignment_error", record.limit)
    units = archive.read_units(path)
    summary = summarise(table, record.inputs, made, planned=record.runs, units=units)
    return summary, dict(table)


def test_a_row_is_what_the_run_gives_alone(tmp_path: Path, calls: list[ReadoutBench]) -> None:
    more: dict[str, Any] = {"noise": NOISE, "accuracy": {"floor": True}}
    bench = swept_bench(tmp_path, {"keep": 1, "grid": [GAIN, T1]}, **more)
    state = run_sweep(bench, tmp_path / "a.h5", engine=HERE)
    assert (state.planned, state.finished, state.failed, state.missing) == (4, 4, {}, 0)
    assert len(calls) == 2  # For the gains; what is done with the records needs no more.
    check_against_single_runs(tmp_path / "a.h5", bench)
    # The archive of a sweep is read as that of single runs where a run is kept whole.
    (number,) = archive.record_numbers(tmp_path / "a.h5")
    again = cosim.load(tmp_path / "a.h5", run=number)
    assert isinstance(again, cosim.ReadoutResult)
    assert again.assignment_error == max(row["assignment_error"] for row in rows(tmp_path / "a.h5"))
    assert again.standard_error > again.numerical_floor > 0.0
    bar = summary_of(tmp_path / "a.h5")[0].worst[0].error_bar
    assert bar == again.standard_error + again.numerical_floor


def test_a_sensor_is_swept(tmp_path: Path) -> None:
    (tmp_path / "deck.cir").write_text(SENSOR_DECK)
    sweep = {"grid": [{"key": "sensor.value_1", "values": [1.05e-6, 1.1e-6]}]}
    bench = cosim.make_testbench({**SENSOR, "sweep": sweep}, folder=tmp_path)
    assert isinstance(bench, ReadoutBench)
    state = run_sweep(bench, tmp_path / "a.h5", engine=HERE)
    assert (state.finished, state.missing) == (2, 0)
    check_against_single_runs(tmp_path / "a.h5", bench)


@pytest.mark.full
def test_decisions_of_a_comparator_are_swept(tmp_path: Path) -> None:
    sweep = {"limit": 0.3, "grid": [{"key": "readout.preparation_error", "values": [0.0]}]}
    bench = replace(ideal(tmp_path), studies={"sweep": sweep})
    path = tmp_path / "a.h5"
    run_sweep(bench, path, engine=HERE)
    check_against_single_runs(path, bench)
    (row,) = rows(path)
    # Its error bar is what chance leaves open and what the time step does.
    bar = np.nansum([row["standard_error"], row["numerical_floor"]])
    assert summary_of(path)[0].worst[0].error_bar == bar > 0.0


# Keys of a readout of which a second value, here, needs no further simulation.
JUDGED: dict[str, Any] = {
    "readout.adc_bits": 5,
    "readout.adc_full_scale": 1e-3,
    "readout.adc_cycles": 3,
    "readout.t1": 30e-6,
    "readout.thermal_population": 0.03,
    "readout.preparation_error": 0.02,
    "readout.shots": 2000,
    "readout.records": 200,
}
WEIGHTS = {"readout.weights": "matched"}


@pytest.mark.full
def test_what_is_done_with_the_records_is_shared_and_gives_the_same(tmp_path: Path) -> None:
    base = swept_bench(
        tmp_path,
        {},
        noise=NOISE,
        readout={**ADC, "thermal_population": 0.01},
    )
    shared = simulate_readout(base)
    first = run_readout(base, runs=shared).assignment_error
    changes = {path.split(".")[1]: value for path, value in {**JUDGED, **WEIGHTS}.items()}
    bench = replace(base, readout=replace(base.readout, **changes))
    check_equal(run_readout(bench, runs=shared), run_readout(bench))
    # So that each of them makes another number of what is shared, but these, which make no error.
    for name in changes.keys() - {"adc_cycles", "shots", "records"}:
        bench = replace(base, readout=replace(base.readout, **{name: changes[name]}))
        assert run_readout(bench, runs=shared).assignment_error != first, name


def waveform_keys(bench: ReadoutBench, path: str, *values: object) -> list[str]:
    plan = make_sweep(
        replace(bench, studies={"sweep": {"grid": [{"key": path, "values": list(values)}]}})
    )
    assert len({run.identity for run in plan}) == len(values), path
    return [run.waveform_key for run in plan]


def test_all_else_is_simulated_anew(tmp_path: Path) -> None:
    bench = swept_bench(tmp_path, {}, noise=NOISE, readout={**ADC, "thermal_population": 0.01})
    flat, files = flattened(bench), files_of(bench, None)
    base = identity_keys(flat, files, {})
    shared, nothing = set(), set()
    for path, value in flat.items():
        moved = value + 0.25 if isinstance(value, float) else ["other"]
        identity, waveform, _ = identity_keys({**flat, path: moved}, files, {})
        if identity == base[0]:
            nothing.add(path)
        elif waveform == base[1]:
            shared.add(path)
    assert shared == {
        *JUDGED,
        *WEIGHTS,
        "accuracy.reference",
        "accuracy.noise_samples",
        "accuracy.noise_seed",
    }
    # Names of files, whose content counts, and what bears on no number.
    netlist = ("file", "include_paths", "confidential", "time_limit")
    names = {"readout.line", "readout.amplifier", "resonator.pulse"}
    assert nothing == {f"netlist.{name}" for name in netlist} | names
    assert {"noise.1.seeds", "resonator.photons", "readout.window", "readout.seed"} < flat.keys()


def test_whether_the_state_changes_is_simulated(tmp_path: Path) -> None:
    bench = swept_bench(tmp_path, {}, readout={"t1": None})
    corners = {name: {"readout.t1": name} for name in ("20 us", "1 ms")}
    corners["never"] = {"readout.preparation_error": 0.01}
    plan = make_sweep(replace(bench, studies={"sweep": {"corners": corners}}))
    short, long, never = (run.waveform_key for run in plan)
    assert short == long != never
    bench = swept_bench(tmp_path, {})
    none, few, many = waveform_keys(bench, "readout.thermal_population", 0.0, 0.01, 0.1)
    assert none != few == many


@pytest.mark.parametrize(
    ("path", "values"),
    [("readout.t1", ("2 us", "3 us")), ("readout.preparation_error", (0.01, 0.02))],
)
def test_decisions_share_nothing(tmp_path: Path, path: str, values: tuple[object, ...]) -> None:
    bench = ideal(tmp_path, readout={"t1": "2 us"})
    assert len(set(waveform_keys(bench, path, *values))) == 2


# Six independent samples, of which some fail as the time `fail` lies within the run.
SAMPLES: Sweep = {
    "limit": 8e-3,
    "keep": 1,
    "monte_carlo": {
        "runs": 6,
        "seed": 2,
        "vary": [
            {
                "key": "netlist.parameters.fail",
                "distribution": "uniform",
                "low": 300,
                "high": 900,
            },
            {"key": "readout.t1", "distribution": "lognormal", "sigma": 0.5},
        ],
    },
}


@pytest.fixture(scope="module")
def sampled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("sampled")
    run_sweep(write_swept(folder, SAMPLES), folder / "a.h5", engine=HERE)
    return folder


def test_yield_against_a_limit_on_the_assignment_error(sampled: Path) -> None:
    found, table = summary_of(sampled / "a.h5")
    done = table["status"] == DONE
    fails = table["netlist.parameters.fail"] < 470.0
    assert 0 < fails.sum() < 6
    assert (done == ~fails).all()
    errors = table["assignment_error"][done]
    passed = int((errors <= 8e-3).sum())
    assert 0 < passed < done.sum()
    for counted, total in ((found.limit_yield, done.sum()), (found.pessimistic_yield, 6)):
        assert counted is not None
        assert (counted.passed, counted.total) == (passed, total)
        test = stats.binomtest(passed, int(total))
        for name, ends in (("exact", counted.clopper_pearson), ("wilson", counted.wilson)):
            interval = test.proportion_ci(counted.level, method=name)
            # Both solve the same equation to their own tolerance.
            np.testing.assert_allclose(ends, interval, rtol=1e-9)
    assert found.quantiles["50"] == np.median(errors)
    # Other than of a fidelity, the greatest is the worst.
    assert found.worst[0].metric == found.quantiles["100"] == errors.max()
    worst = int(table["id"][done][errors.argmax()])
    assert found.worst[0].id == worst
    assert kept_whole(sampled / "a.h5") == {worst, *table["id"][~done].tolist()}
    assert (found.metric, found.statuses) == (
        "assignment error",
        {DONE: int(done.sum()), "no convergence": int(fails.sum())},
    )


def test_a_failed_readout_is_a_row_that_tells_why(sampled: Path) -> None:
    row = next(row for row in rows(sampled / "a.h5") if row["status"] != DONE)
    assert row["status"] == "no convergence"
    assert "ngspice found no solution" in row["error"]
    assert math.isnan(row["assignment_error"])
    record = archive.read(sampled / "a.h5", SWEEP_KINDS, row["id"])
    assert isinstance(record, FailedRun)
    assert (record.status, record.error) == (row["status"], row["error"])
    assert f"fail = {row['netlist.parameters.fail']!r}" in record.testbench
    assert "b2 mark 0 v=ln({fail}-time*1g)" in record.deck_sent
    with pytest.raises(cosim.errors.SimulationError, match="no solution"):
        rerun(sampled / "a.h5", row["id"])


@pytest.mark.full
def test_shares_are_merged_and_what_is_missing_is_resumed(sampled: Path, tmp_path: Path) -> None:
    toml = sampled / "bench.toml"
    parts = [tmp_path / "one.h5", tmp_path / "two.h5"]
    for number, path in enumerate(parts, start=1):
        run_sweep(toml, path, engine=HERE, part=(number, 2))
    assert archive.merge(tmp_path / "both.h5", parts) == 6
    archive.consolidate(tmp_path / "both.h5", kept_whole(tmp_path / "both.h5"))
    whole = rows(sampled / "a.h5")
    assert differing(rows(tmp_path / "both.h5"), whole) == []
    assert archive.record_numbers(tmp_path / "both.h5") == archive.record_numbers(sampled / "a.h5")
    begun = len(rows(parts[0]))
    assert begun == 3
    state = run_sweep(toml, parts[0], engine=HERE, resume=True)
    assert (state.made, state.missing) == (6 - begun, 0)
    assert differing(rows(parts[0]), whole) == []
    assert archive.record_numbers(parts[0]) == archive.record_numbers(sampled / "a.h5")


def test_runs_made_again_are_the_same(sampled: Path) -> None:
    path = sampled / "a.h5"
    done = [row for row in rows(path) if row["status"] == DONE]
    cells, _ = archive.cells_of(rerun(path, done[0]["id"]))
    for name, value in cells.items():
        kept = done[0][name]
        assert kept == value or (kept != kept and value != value), name
    found = repeat_sample(path, 2)
    assert len(found) == 2
    for item in found:
        assert (item.difference, item.what, item.same) == (0.0, "assignment errors", True)
        assert 0.0 < item.allowed < 1e-4


def test_one_at_a_time_against_the_derivative(tmp_path: Path, calls: list[ReadoutBench]) -> None:
    """|1> prepared wrongly with the chance p makes of an error e the error e + p (1 - 2 e)/2."""
    sweep = {
        "one_at_a_time": [
            {"key": "readout.preparation_error", "step": 0.005},
            {"key": "readout.shots", "step": 100},
        ]
    }
    more = {"preparation_error": 0.01, "t1": None, "shots": 2000}
    bench = swept_bench(tmp_path, sweep, readout=more, noise=NOISE)
    run_sweep(bench, tmp_path / "a.h5", engine=HERE)
    assert len(calls) == 1
    found, table = summary_of(tmp_path / "a.h5")
    separation = table["errors.separation"][0]
    first, second = found.sensitivities
    assert (first.key, second.key) == ("readout.preparation_error", "readout.shots")
    # Straight in p, so that the step does not matter; what is left is rounding.
    assert first.largest.derivative == pytest.approx(0.5 - separation, rel=1e-9)
    assert second.swing == 0.0
    # The states are SNR/2 standard deviations from the threshold, for a noise one error off too.
    result = cosim.load(tmp_path / "a.h5", run=3)
    assert isinstance(result, cosim.ReadoutResult)
    off = np.array([1.0, -1.0]) * result.noise.relative_error
    errors = stats.norm.sf(0.5 * result.snr / np.sqrt(1.0 + off))
    expected = 0.5 * (errors[0] - errors[1]) * (1.0 - 0.015)
    # The threshold, which moves a little with the preparation, changes less than this.
    assert result.standard_error == pytest.approx(expected, rel=1e-3)
    assert result.standard_error > 0.01 * separation


def test_a_corner_moves_the_thermal_population_of_a_readout(tmp_path: Path) -> None:
    sweep = {"corners": {"cold": {"thermal_population": 0.0}, "warm": {"thermal_population": 0.02}}}
    plan = make_sweep(swept_bench(tmp_path, sweep))
    found = [plan.testbench(run) for run in plan]
    assert [bench.readout.thermal_population for bench in found] == [0.0, 0.02]  # type: ignore[attr-defined]


def test_photons_are_a_number_without_a_unit(tmp_path: Path) -> None:
    sweep = {"grid": [{"key": "resonator.photons", "values": [3, 5]}]}
    plan = make_sweep(swept_bench(tmp_path, sweep))
    found = [plan.testbench(run) for run in plan]
    assert [bench.resonator.photons for bench in found] == [3.0, 5.0]  # type: ignore[attr-defined]


@pytest.mark.parametrize(
    ("sweep", "words"),
    [
        ({"fidelity": "free_frame", "grid": [T1]}, ["'free_frame'", "assignment error"]),
        ({"fidelity": "leakage", "grid": [T1]}, ["'leakage'", "'assignment_error'"]),
        ({"limit": 1.5, "grid": [T1]}, ["'limit'", "assignment error"]),
        (
            {"grid": [{"key": "resonator.chii", "values": ["1 MHz"]}]},
            ["'resonator.chii'", "did you mean 'resonator.chi'"],
        ),
        ({"grid": [{"key": "qubit.t1", "values": ["1 us"]}]}, ["'qubit.t1'", "'readout.t1'"]),
        ({"grid": [{"key": "readout.weights", "values": ["x"]}]}, ["no number"]),
        ({"corners": {"a": {"qubit.t1": "1 us"}}}, ["'qubit.t1'", "[sweep.corners.a]"]),
        ({"grid": [{"key": "readout.adc_bits", "values": [8]}]}, ["go together"]),
        ({"grid": [{"key": "resonator.power", "values": ["-120 dBm"]}]}, ["'photons'"]),
    ],
)
def test_what_is_wrong_is_said_before_anything_runs(
    tmp_path: Path, sweep: Sweep, words: list[str]
) -> None:
    with pytest.raises(TestbenchError) as caught:
        run_sweep(swept_bench(tmp_path, sweep), tmp_path / "a.h5", engine=HERE)
    for word in words:
        assert word in str(caught.value)
    assert not list(tmp_path.glob("*.h5*"))


def test_a_gate_is_not_ranked_by_an_assignment_error(tmp_path: Path) -> None:
    from_file = Path(__file__).parents[2] / "examples" / "sweep_corners.toml"
    bench = load_testbench(from_file)
    sweep = {**bench.studies["sweep"], "fidelity": "assignment_error"}
    with pytest.raises(TestbenchError, match="'assignment_error' is not one of a gate"):
        make_sweep(replace(bench, studies={"sweep": sweep}))


def test_the_netlist_of_a_pulse_is_part_of_a_run(tmp_path: Path) -> None:
    made = replace(asked(tmp_path), studies={"sweep": {"grid": [T1]}})
    plan = make_sweep(made)
    record = make_sweep_record(plan, made)
    names = {Path(file.path).name: file.text for file in record.deck_files}
    assert names.keys() == {"deck.cir", "generator.cir"}
    assert estimate_sweep(plan).waveforms == 1
    # Another amplitude of the generator is another waveform, and not mixed in.
    (tmp_path / "generator.cir").write_text(names["generator.cir"].replace("0.1", "0.2"))
    changed = make_sweep(made)
    assert changed.run(0).waveform_key != plan.run(0).waveform_key
    with pytest.raises(ArchiveError, match=r"generator\.cir"):
        check_same_plan(record, make_sweep_record(changed, made), "a.h5")


def test_the_estimate_counts_what_is_simulated(tmp_path: Path) -> None:
    bench = swept_bench(tmp_path, {"grid": [GAIN, T1]}, noise=NOISE)
    found = estimate_sweep(make_sweep(bench))
    assert (found.runs, found.waveforms) == (4, 2)
    single = estimate_sweep(make_sweep(swept_bench(tmp_path, {"grid": [T1]}, noise=NOISE)))
    assert single.waveforms == 1
    assert 0.0 < single.time < math.inf
    assert found.memory == single.memory > 8.0 * 1881
