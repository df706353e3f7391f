"""Oracles: the area theorem and the resonance in closed form, and fine scans of the same runs."""

import itertools
import math
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import cosim
from cosim import archive
from cosim.calibration.result import CALIBRATION_KINDS, CalibrationResult, calibration_numbers
from cosim.calibration.trim import calibrate, moved, trimmed
from cosim.errors import InputError, SimulationError
from cosim.testbench import Testbench
from cosim.voltage_noises import NetlistNoise
from tests.calibration.pulses import LEVEL, PHASE, bench
from tests.sources import ALLEN_EBERLY, KRANTZ
from tests.validation import Validate

pytestmark = pytest.mark.ngspice
TOPIC = "end to end through ngspice"
EXAMPLES = Path(__file__).parents[2] / "examples"
# 1/(4 k T) in V.
BEST_LEVEL = 0.25 / (125e6 * 20e-9)


def infidelity(made: Testbench, level: float, phase: float, metric: str = "as_simulated") -> float:
    parameters = {**made.netlist.parameters, "level": level, "phase": phase}
    netlist = replace(made.netlist, parameters=parameters)
    result = cosim.run(replace(made, netlist=netlist, accuracy=replace(made.accuracy, floor=False)))
    return float(getattr(result, metric).infidelity)


def test_amplitude_and_phase_of_a_square_pulse(tmp_path: Path, validate: Validate) -> None:
    made = bench(tmp_path, LEVEL, PHASE)
    result = calibrate(made)
    level, phase = result.knobs
    # The part of the drive that turns the other way moves the best level by the order of
    # (k A/2 f)^2/..., 1e-6 in the cost; edges of 5 ps in 20 ns are 2.5e-4 of the area at most.
    validate(
        "best amplitude of a square pi/2 pulse, 1/(4 k T)",
        ALLEN_EBERLY,
        BEST_LEVEL,
        level.found,
        "V",
        rel=3e-4,
    )
    assert phase.found == pytest.approx(0.0, abs=0.05)  # 2 pi f x 5 ps/2, and as above
    assert result.netlist_runs <= 7
    assert result.netlist_runs == result.runs == len(result.history)
    assert result.complete
    assert (result.history[0].metric, result.before) == (result.before, result.history[0].metric)
    # The cost of a knob off its best, by theta = 2 pi k T A and 1 - F = theta^2/6.
    assert level.stiffness == pytest.approx((2 * math.pi * 125e6 * 20e-9) ** 2 / 6, rel=0.02)
    assert level.resolution_needed == pytest.approx(2 * math.sqrt(1e-5 / level.stiffness))
    assert result.turn_before[0] == pytest.approx(-0.1 * math.pi / 2, rel=0.03)


@pytest.mark.full
def test_the_end_is_the_best_of_a_fine_scan_within_the_floor(tmp_path: Path) -> None:
    made = bench(tmp_path, LEVEL, PHASE, qubit={"detuning": "1.5 MHz", "t2": "10 us"})
    result = calibrate(made)
    level, phase = (item.found for item in result.knobs)
    # Steps of an eighth of what costs 1e-5, out to where that is exceeded.
    steps = [item.resolution_needed / 8 for item in result.knobs]
    scan = [
        infidelity(made, level + i * steps[0], phase + j * steps[1])
        for i, j in itertools.product(range(-2, 3), range(-2, 3))
    ]
    assert result.after > 1e-4  # what no knob reaches
    assert min(scan) >= result.after - max(result.numerical_floor, 1e-9)
    assert result.netlist_runs <= 12
    assert result.limits.unreached + result.limits.rest == pytest.approx(result.after, rel=1e-3)


def test_a_knob_of_the_qubit_runs_no_circuit(tmp_path: Path, validate: Validate) -> None:
    knobs = {"key": "qubit.detuning", "low": "-20 MHz", "high": "20 MHz", "start": "3 MHz"}
    made = bench(tmp_path, knobs, netlist={"parameters": {"level": 0.1, "phase": 0}})
    result = calibrate(made)
    # Half a turn of the qubit's frame against the carrier over 24 ns would be 20 MHz. What is
    # left is the shift by the part of the drive that turns the other way, (k A)^2/(4 f): 8 kHz.
    validate(
        "carrier offset that is best for a resonant pulse",
        "resonance, computed from the formula",
        0.0,
        result.knobs[0].found,
        "Hz",
        abs=50e3,
    )
    assert result.netlist_runs == 2  # the start, and the floor
    assert result.runs >= 4


def test_bounds_that_exclude_the_optimum(tmp_path: Path) -> None:
    made = bench(tmp_path, {**LEVEL, "high": 0.095}, PHASE)
    result = calibrate(made)
    (warning,) = [text for text in result.warnings if "bounds" in text]
    assert "the bounds exclude the optimum: 'netlist.parameters.level'" in warning
    assert (result.knobs[0].bound, result.knobs[1].bound) == ("high", "")
    assert result.knobs[0].found == 0.095
    assert result.knobs[0].slope < 0.0
    assert result.limited_by == "bounds"
    found = re.search(r"the best is expected at ([\d.]+), for", warning)
    assert found is not None
    # Sines of half an error angle of up to 9 degrees, seen as a line.
    assert float(found[1]) == pytest.approx(BEST_LEVEL, rel=0.01)


def test_an_optimum_farther_away_than_the_model_is_asked_is_said_to_be_beyond(
    tmp_path: Path,
) -> None:
    # The best is 0, nine times the distance of the bounds below them.
    result = calibrate(bench(tmp_path, {**PHASE, "low": 9, "high": 10, "start": 9.5}))
    (warning,) = [text for text in result.warnings if "bounds" in text]
    assert "the best is expected at 8 or beyond, for at least" in warning


def test_the_netlists_own_noise_is_said_to_be_no_part_of_the_metric(tmp_path: Path) -> None:
    made = bench(tmp_path, LEVEL)
    noisy = replace(made, noise=(NetlistNoise("probe", "netlist", method="stationary"),))
    quiet, result = calibrate(made), calibrate(noisy)
    (warning,) = set(result.warnings) - set(quiet.warnings)
    assert "nor in the metric told here: run the trimmed testbench" in warning
    assert result.after == quiet.after


def test_a_parameter_that_the_circuit_does_not_use_is_named(tmp_path: Path) -> None:
    made = bench(tmp_path, LEVEL, {"key": "netlist.parameters.idle", "low": 0, "high": 3})
    with pytest.raises(InputError, match=r"'netlist\.parameters\.idle' does nothing"):
        calibrate(made)


def test_the_free_frame_does_not_see_a_phase(tmp_path: Path) -> None:
    made = bench(tmp_path, PHASE, study={"metric": "free_frame"})
    with pytest.raises(InputError, match=r"'netlist\.parameters\.phase' does nothing"):
        calibrate(made)


def test_amplitude_and_duration_do_the_same_in_the_free_frame(tmp_path: Path) -> None:
    end = {"key": "netlist.parameters.t_end", "low": "15 ns", "high": "23 ns"}
    result = calibrate(bench(tmp_path, LEVEL, end, study={"metric": "free_frame"}))
    (warning,) = [text for text in result.warnings if "do the same" in text]
    assert "'netlist.parameters.level' and 'netlist.parameters.t_end'" in warning
    assert result.after < 1e-8
    assert all(math.isnan(item.shift) for item in result.knobs)


def test_steps_are_verified_against_their_neighbours(tmp_path: Path) -> None:
    code = {"key": "netlist.parameters.idle", "low": 0, "high": 31, "integer": True, "start": 12}
    made = bench(tmp_path, code, PHASE, netlist={"parameters": {"level": 0.1}})
    deck = Path(made.folder) / "deck.cir"
    # Rounded inside, as a converter does: a code between two would be one of them.
    text = deck.read_text(encoding="utf-8").replace("v={level}", "v={level*floor(idle+0.5)/15.6}")
    deck.write_text(text, encoding="utf-8")
    result = calibrate(made)
    assert [run.purpose for run in result.history].count("neighbour") >= 1
    assert result.knobs[0].found == 16.0
    assert all(run.values[0] == round(run.values[0]) for run in result.history)
    assert {15.0, 17.0} <= {float(run.values[0]) for run in result.history}
    assert result.netlist_runs <= 12
    # The angle is off by 0.4/15.6 of a quarter turn.
    wanted = (2 / 3) * math.sin(0.4 / 15.6 * math.pi / 4) ** 2
    assert result.limits.resolution == pytest.approx(wanted, rel=0.02)
    assert result.limited_by == "resolution"


def test_the_trim_is_put_into_a_testbench_and_written_elsewhere(tmp_path: Path) -> None:
    made = bench(tmp_path, {**LEVEL, "start": 0.08}, PHASE)
    result = calibrate(made)
    done = trimmed(made, result)
    assert done.netlist.parameters == {
        "level": result.knobs[0].found,
        "phase": result.knobs[1].found,
    }
    assert "start" not in done.studies["calibrate"]["knob"][0]
    assert "start" in made.studies["calibrate"]["knob"][0]
    folder = tmp_path / "elsewhere"
    folder.mkdir()
    (folder / "trim.toml").write_text(moved(done, folder).to_toml(), encoding="utf-8")
    again = cosim.load_testbench(folder / "trim.toml")
    assert cosim.run(again).as_simulated.infidelity == pytest.approx(result.after, abs=1e-15)
    # A second calibration begins where the first has ended.
    second = calibrate(replace(again, accuracy=replace(again.accuracy, floor=False)))
    assert second.before == pytest.approx(result.after, abs=1e-15)
    assert second.runs <= 4
    assert math.isnan(second.numerical_floor)


def test_a_calibration_is_archived_and_read_back(tmp_path: Path) -> None:
    result = calibrate(bench(tmp_path, LEVEL))
    info = archive.RunInfo("done", result.started, result.wall_time)
    archive.append(tmp_path / "a.h5", result, info=info)
    again = archive.read(tmp_path / "a.h5", CALIBRATION_KINDS)
    assert isinstance(again, CalibrationResult)
    assert calibration_numbers(again) == calibration_numbers(result)
    assert again.testbench == result.testbench
    assert archive.read_table(tmp_path / "a.h5")["limits.unreached"] == [result.limits.unreached]


def test_a_run_that_does_not_converge_is_named_and_left(tmp_path: Path) -> None:
    # At more than 0.099 V the logarithm loses its argument within the run.
    made = bench(tmp_path, LEVEL, netlist={"parameters": {"fail": 1000}})
    deck = Path(made.folder) / "deck.cir"
    text = deck.read_text(encoding="utf-8").replace("{fail}", "{fail*(level>0.099 ? 0.01 : 1)}")
    deck.write_text(text, encoding="utf-8")
    result = calibrate(made)
    failed = [run for run in result.history if run.fault]
    assert failed
    assert all(math.isinf(run.metric) and run.values[0] > 0.099 for run in failed)
    assert any("the run at netlist.parameters.level = 0.099" in text for text in result.warnings)
    assert result.knobs[0].found <= 0.099
    # As near to where it fails as the runs allow.
    assert result.knobs[0].found > 0.097
    broken = replace(made, netlist=replace(made.netlist, parameters={"fail": 10}))
    with pytest.raises(SimulationError):
        calibrate(broken)


def test_progress_tells_every_run(tmp_path: Path) -> None:
    told: list[float] = []
    result = calibrate(bench(tmp_path, LEVEL), progress=lambda run: told.append(run.metric))
    assert told == [run.metric for run in result.history]
    assert np.array_equal(result.history[0].values, [0.09])


@pytest.mark.full
def test_amplitude_and_drag_weight_of_a_transmon(validate: Validate) -> None:
    made = cosim.load_testbench(EXAMPLES / "x180_transmon.toml")
    assert isinstance(made, Testbench)
    # Fine steps of the DAC, and nothing that a trim does not mend.
    parameters = {**made.netlist.parameters, "bits": 20}
    qubit = replace(made.qubit, t1=math.inf, t2=math.inf, thermal_population=0.0)
    knobs = [
        {"key": "netlist.parameters.amp", "low": "0.3 V", "high": "0.48 V", "start": "0.38 V"},
        {"key": "netlist.parameters.drag", "low": -0.5, "high": 2.0, "start": 0.0},
    ]
    made = replace(
        made,
        netlist=replace(made.netlist, parameters=parameters),
        qubit=qubit,
        accuracy=replace(made.accuracy, floor=False),
        studies={"calibrate": {"metric": "as_simulated", "knob": knobs}},
    )
    result = calibrate(made)
    # The weight that also holds the phase of the qubit, without a detuning; first order in the
    # drive over the anharmonicity, of which the square is 0.01 here.
    validate(
        "DRAG weight that is best without a detuning, through the netlist",
        KRANTZ + ", eq. (101) and text",
        0.5,
        result.knobs[1].found,
        abs=0.01,
    )
    assert result.netlist_runs <= 8
    assert result.before > 5e-3
    assert result.after < 1e-7
    # What is left is leakage, not a turn.
    assert np.abs(result.turn_unreached).max() < 1e-4
    assert result.leakage_after == pytest.approx(result.after, rel=0.01)
