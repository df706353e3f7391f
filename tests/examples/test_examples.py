"""Oracle: the committed table expected.toml, made by running this file as a program.

The table guards against change; that its numbers are right is what tests/gate, tests/analytic,
tests/published and tests/crosscheck are for. Made anew with: python tests/examples/test_examples.py
"""

import json
import subprocess
import sys
import tempfile
import tomllib
from pathlib import Path

import pytest
import tomli_w

import cosim
from cosim.archive import read_table
from cosim.result import GateResult
from cosim.sweep.local import local_engine
from cosim.sweep.run import run_sweep

HERE = Path(__file__).parent
EXAMPLES = HERE.parents[1] / "examples"
SWEEPS = ("sweep_corners",)
BENCHES = sorted({path.stem for path in EXAMPLES.glob("*.toml")} - {*SWEEPS})
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


def key_numbers(result: GateResult) -> dict[str, float]:
    found = {}
    for name in TOLERANCE:
        value: object = result
        for part in name.split("."):
            value = getattr(value, part)
        assert isinstance(value, float)
        found[name] = value
    return found


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", BENCHES)
def test_testbenches_give_the_committed_numbers(name: str, tmp_path: Path) -> None:
    result = cosim.run(EXAMPLES / f"{name}.toml")
    expected = tomllib.loads((HERE / "expected.toml").read_text(encoding="utf-8"))[name]
    for key, value in key_numbers(result).items():
        assert value == pytest.approx(expected[key], abs=TOLERANCE[key]), key
    assert result.warnings == ()
    cosim.save(result, tmp_path / "a.h5")
    again = cosim.load(tmp_path / "a.h5")
    assert key_numbers(again) == key_numbers(result)


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SWEEPS)
def test_sweeps_give_the_committed_infidelities(name: str, tmp_path: Path) -> None:
    found = sweep_infidelities(name, tmp_path / "s.h5")
    expected = tomllib.loads((HERE / "expected.toml").read_text(encoding="utf-8"))[name]
    assert len(found) >= 24
    assert found == pytest.approx(
        expected["infidelities"], abs=TOLERANCE["free_frame.average_gate_fidelity"]
    )


def sweep_infidelities(name: str, path: Path) -> list[float]:
    """Run a sweep on two workers and give the infidelity of each run."""
    state = run_sweep(EXAMPLES / f"{name}.toml", path, engine=local_engine(2))
    assert state.finished == state.planned
    fidelities: list[float] = read_table(path)["free_frame.average_gate_fidelity"].tolist()
    return [1.0 - fidelity for fidelity in fidelities]


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_run_and_print_the_committed_lines(name: str, tmp_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, EXAMPLES / f"{name}.py"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    expected = tomllib.loads((HERE / "expected.toml").read_text(encoding="utf-8"))[name]
    found = numbers(done.stdout)
    # Digits shown, and what is left of an infidelity that a calibration takes to its rounding.
    assert found == [pytest.approx(row, rel=2e-3, abs=1e-11) for row in expected["rows"]]
    assert len(found) > 2


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


@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_stay_short(name: str) -> None:
    assert len((EXAMPLES / f"{name}.py").read_text(encoding="utf-8").splitlines()) <= 80


def write_expected() -> None:
    """Run every example and write the table."""
    table: dict[str, object] = {}
    for name in BENCHES:
        table[name] = key_numbers(cosim.run(EXAMPLES / f"{name}.toml"))
        print(name, json.dumps(table[name], indent=1))
    for name in SWEEPS:
        with tempfile.TemporaryDirectory() as folder:
            table[name] = {"infidelities": sweep_infidelities(name, Path(folder, "s.h5"))}
    for name in SCRIPTS:
        done = subprocess.run(
            [sys.executable, EXAMPLES / f"{name}.py"], capture_output=True, text=True, check=True
        )
        print(done.stdout)
        table[name] = {"rows": numbers(done.stdout)}
    (HERE / "expected.toml").write_text(tomli_w.dumps(table), encoding="utf-8")


if __name__ == "__main__":
    write_expected()
