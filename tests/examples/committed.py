"""The examples, what is committed of their results, and the program that makes that anew.

As a program, `python -m tests.examples.committed`, this runs every example and writes
expected.toml.
"""

import json
import math
import subprocess
import sys
import tempfile
import tomllib
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
import tomli_w

import cosim
from cosim.archive import read_table
from cosim.calibration.result import CalibrationResult
from cosim.calibration.trim import calibrate
from cosim.drift.result import DriftResult
from cosim.drift.study import run_drift
from cosim.result import GateResult
from cosim.specification.gate_specification import specify_gate
from cosim.specification.readout_specification import specify_readout
from cosim.sweep.goal import judged, make_goal
from cosim.sweep.keeping import metric_of
from cosim.sweep.local import local_engine
from cosim.sweep.repetition import read_record
from cosim.sweep.run import run_sweep
from cosim.testbench import DesignBench, gate_bench
from cosim.train.result import TrainResult
from cosim.train.study import run_train

TABLE = Path(__file__).with_name("expected.toml")
EXAMPLES = Path(__file__).parents[2] / "examples"
SWEPT_READOUTS = ("readout_corners",)
TRIMMED_SWEEPS = ("trim_per_die",)
SWEEPS = ("sweep_corners", *SWEPT_READOUTS, *TRIMMED_SWEEPS)
# One of so many shares of a sweep is run, as a job of an array would: two runs of each corner, of
# the readout all four of one, which share what is simulated, and of the trims four runs of the
# frozen one and the two of a die.
SHARES = 4
CALIBRATIONS = ("calibrate_modulator",)
DRIFTS = ("drift_x180",)
TRAINS = ("train_flux",)
SPECIFICATIONS = ("specify_readout", "specify_x180")
# The script amplifier_bias runs this one; once more would take a minute and a half.
WITHIN_SCRIPTS = ("readout_dispersive",)
BENCHES = sorted(
    {path.stem for path in EXAMPLES.glob("*.toml")}
    - {*SWEEPS, *CALIBRATIONS, *SPECIFICATIONS, *DRIFTS, *TRAINS, *WITHIN_SCRIPTS}
)
OF_TRANSISTORS = sorted(name for name in BENCHES if "bsim4" in name)
# The check at half the step takes twice as long as the run. That of these decks is tried on a
# shorter pulse, in tests/gate/test_error_bars.py.
WITHOUT_FLOOR = ("x90_bsim4", "x90_oscillator")
# Scripts that can be told which values to run are told some of them.
ARGUMENTS = {"amplifier_bias": ("bias.png", "1"), "amplitude_codes": ("92", "94")}
# What needs a cluster is tested in tests/sweep.
SCRIPTS = sorted({path.stem for path in EXAMPLES.glob("*.py")} - {"sweep_on_slurm"})

# Another processor or library rounds differently, which Newton's iteration in ngspice turns into
# a change of a waveform of the order of its relative tolerance of 1e-4 in the worst case and of
# 1e-6 in practice; an angle of 1e-6 x pi/2 costs 4e-13, and 1e-9 in cross terms with errors of
# 1e-3. A tenth of the examples' own numerical floors is far above all that.
TOLERANCE = {
    "as_simulated.average_gate_fidelity": 1e-7,
    "free_frame.average_gate_fidelity": 1e-7,
    "calibrated.average_gate_fidelity": 1e-7,
    "calibrated.amplitude_scale": 1e-5,
    "leakage": 1e-7,
    "seepage": 1e-6,
    "unitarity": 1e-7,
    "rotation.angle": 1e-5,
    "rotating_wave_error": 1e-8,
    "numerical_floor": 1e-7,
    "pulse.amplitude": 1e-5,
}

# In practice a waveform changes by 1e-6 (above). The rarest error here, at a signal over noise
# below 8, changes in relative terms by at most 8**2/4 of that. The density of injected noise is a
# difference of two runs and known to some 1e-4, of which such an error takes 8 times as much.
READOUT_NUMBERS = (
    "assignment_error",
    "snr",
    "errors.separation",
    "errors.decay",
    "errors.preparation",
    "best_assignment_error",
    "added_noise_quanta",
    "noise_temperature",
    "residual_photons",
    "wait",
    "latency",
    "repeat_agreement",
    "dephasing_rate",
)
READOUT_TOLERANCE = 1e-3  # relative


def expected(name: str) -> dict[str, Any]:
    """Give what is committed of an example."""
    found: dict[str, Any] = tomllib.loads(TABLE.read_text(encoding="utf-8"))[name]
    return found


def run_example(name: str) -> GateResult | cosim.ReadoutResult:
    """Run a testbench; a readout, of many runs, without its check at half the step."""
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    if isinstance(bench, cosim.ReadoutBench) or name in WITHOUT_FLOOR:
        bench = replace(bench, accuracy=replace(bench.accuracy, floor=False))
    result = cosim.run(bench)
    assert isinstance(result, GateResult | cosim.ReadoutResult)
    return result


def key_numbers(result: object) -> dict[str, float]:
    """Give the numbers of a result that are committed; those that it has not are left out."""
    found = {}
    for name in TOLERANCE if isinstance(result, GateResult) else READOUT_NUMBERS:
        value: object = result
        for part in name.split("."):
            value = getattr(value, part)
        assert isinstance(value, float)
        if not math.isnan(value):
            found[name] = value
    return found


def check_testbench(name: str, folder: Path) -> None:
    """Run a testbench, compare with what is committed, and archive and read what came out."""
    result = run_example(name)
    committed, found = expected(name), key_numbers(result)
    assert found.keys() == committed.keys()
    for key, value in found.items():
        if isinstance(result, GateResult):
            wanted = pytest.approx(committed[key], abs=TOLERANCE[key])
        else:
            wanted = pytest.approx(committed[key], rel=READOUT_TOLERANCE, abs=0.0)
        assert value == wanted, f"{key}: got {value!r}, committed is {wanted}"
    assert result.warnings == (), result.warnings
    cosim.save(result, folder / "a.h5")
    again = cosim.load(folder / "a.h5")
    assert key_numbers(again) == found


def sweep_losses(name: str, path: Path) -> dict[str, float]:
    """Run a share of a sweep on two workers and give what each run is judged by, by its number."""
    state = run_sweep(EXAMPLES / f"{name}.toml", path, engine=local_engine(2), part=(1, SHARES))
    assert state.finished == state.planned
    table = read_table(path)
    losses, _ = judged(table, make_goal(metric_of(read_record(path))))
    labels = table["trim" if name in TRIMMED_SWEEPS else "corner"]
    return {
        f"{number} {label}": loss
        for number, label, loss in zip(table["id"].tolist(), labels, losses.tolist(), strict=True)
    }


def calibration_example(name: str) -> CalibrationResult:
    """Run a calibration."""
    return calibrate(cosim.load_testbench(EXAMPLES / f"{name}.toml"))


def calibration_figures(result: CalibrationResult) -> dict[str, float]:
    """Give the numbers of a calibration that are committed."""
    return {
        "before": result.before,
        "after": result.after,
        "numerical_floor": result.numerical_floor,
        "limits.resolution": result.limits.resolution,
        "limits.rest": result.limits.rest,
        "netlist_runs": float(result.netlist_runs),
        **{knob.key: knob.found for knob in result.knobs},
    }


def drift_example(name: str) -> DriftResult:
    """Run a study of drift."""
    return run_drift(gate_bench(cosim.load_testbench(EXAMPLES / f"{name}.toml")))


def drift_figures(result: DriftResult) -> dict[str, float]:
    """Give the numbers of a study of drift that are committed."""
    return {
        "trimmed": result.trimmed,
        "right_after": result.right_after,
        "interval_end": result.interval_end,
        "interval_average": result.interval_average,
        "mean at the horizon": float(result.mean[-1]),
        "95 % at the horizon": float(result.high[-1]),
        **{source.name: source.cost for source in result.sources},
    }


def train_example(name: str) -> TrainResult:
    """Play a train."""
    return run_train(cosim.load_testbench(EXAMPLES / f"{name}.toml"))


def train_figures(result: TrainResult) -> dict[str, float]:
    """Give the numbers of a train with a pre-distortion that are committed."""
    found = result.predistortion
    assert found is not None
    idle = result.factors == 0.0
    return {
        "before.infidelity": float(result.before.infidelity.max()),
        "before.sequence": result.before.sequence,
        "before.residual": result.before.residual,
        "after.infidelity": float(found.after.infidelity.max()),
        "after.sequence": found.after.sequence,
        "after.residual": found.after.residual,
        "headroom": found.headroom,
        "turn at rest": float(abs(result.before.turn[idle]).max()),
        "netlist_runs": float(result.netlist_runs),
    }


def numbers(text: str) -> list[list[float]]:
    """The numbers of each line of a printed table; three or four digits are shown.

    Lines on run times are left out, for these are the machine's.
    """
    rows = []
    for line in text.splitlines():
        found = []
        for word in line.split():
            try:
                found.append(float(word))
            except ValueError:
                continue
        if len(found) > 1 and "ngspice" not in line:
            rows.append(found)
    return rows


def run_script(name: str, folder: Path) -> subprocess.CompletedProcess[str]:
    """Run a script in a folder."""
    return subprocess.run(
        [sys.executable, EXAMPLES / f"{name}.py", *ARGUMENTS.get(name, ())],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )


def specified(name: str) -> dict[str, float]:
    """Solve a specification and give its limits, and what all of them cost together."""
    bench = cosim.load_testbench(EXAMPLES / f"{name}.toml")
    assert isinstance(bench, DesignBench)
    if bench.readout is not None:
        readout = specify_readout(bench)
        found = {block.name: block.limit for block in readout.blocks}
        return found | {"together": readout.assignment_error}
    gate = specify_gate(bench)
    found = {block.name: block.limit for block in gate.blocks}
    return found | {"together": gate.verification.infidelity, "power": gate.total_power}


def write_expected() -> None:
    """Run every example and write the table."""
    table: dict[str, object] = {}
    for name in BENCHES:
        table[name] = key_numbers(run_example(name))
        print(name, json.dumps(table[name], indent=1))
    for name in SWEEPS:
        with tempfile.TemporaryDirectory() as folder:
            table[name] = {"losses": sweep_losses(name, Path(folder, "s.h5"))}
    for name in CALIBRATIONS:
        table[name] = calibration_figures(calibration_example(name))
    for name in SPECIFICATIONS:
        table[name] = specified(name)
    for name in DRIFTS:
        table[name] = drift_figures(drift_example(name))
    for name in TRAINS:
        table[name] = train_figures(train_example(name))
    for name in SCRIPTS:
        with tempfile.TemporaryDirectory() as folder:
            done = run_script(name, Path(folder))
        done.check_returncode()
        print(done.stdout)
        table[name] = {"rows": numbers(done.stdout)}
    TABLE.write_text(tomli_w.dumps(table), encoding="utf-8")


if __name__ == "__main__":
    write_expected()
