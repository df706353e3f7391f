"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/gate, tests/analytic,
tests/published and tests/crosscheck are for.
"""

from pathlib import Path

import pytest

from tests.examples.committed import SWEEPS, TOLERANCE, expected, sweep_infidelities


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SWEEPS)
def test_sweeps_give_the_committed_infidelities(name: str, tmp_path: Path) -> None:
    found = sweep_infidelities(name, tmp_path / "s.h5")
    # Two runs of each corner.
    assert sorted(run.split()[1] for run in found) == ["fast"] * 2 + ["slow"] * 2 + ["typical"] * 2
    assert found == pytest.approx(
        expected(name)["infidelities"], abs=TOLERANCE["free_frame.average_gate_fidelity"]
    )
