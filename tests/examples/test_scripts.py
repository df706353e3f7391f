"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/gate, tests/analytic,
tests/published and tests/crosscheck are for.
"""

from pathlib import Path

import pytest

from tests.examples.committed import EXAMPLES, SCRIPTS, expected, numbers, run_script


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_run_and_print_the_committed_lines(name: str, tmp_path: Path) -> None:
    done = run_script(name, tmp_path)
    assert done.returncode == 0, done.stderr
    found = numbers(done.stdout)
    # Digits shown, and what is left of an infidelity that a calibration takes to its rounding.
    assert found == [pytest.approx(row, rel=2e-3, abs=1e-11) for row in expected(name)["rows"]]
    assert found


@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_stay_short(name: str) -> None:
    assert len((EXAMPLES / f"{name}.py").read_text(encoding="utf-8").splitlines()) <= 80
