"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/gate, tests/analytic,
tests/published and tests/crosscheck are for.
"""

from pathlib import Path

import pytest

from tests.examples.committed import (
    READOUT_TOLERANCE,
    SWEEPS,
    SWEPT_READOUTS,
    TOLERANCE,
    TRIMMED_SWEEPS,
    expected,
    sweep_losses,
)


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", SWEEPS)
def test_sweeps_give_the_committed_losses(name: str, tmp_path: Path) -> None:
    found, committed = sweep_losses(name, tmp_path / "s.h5"), expected(name)["losses"]
    labels = sorted(run.split()[1] for run in found)
    if name in SWEPT_READOUTS:
        assert labels == ["typical"] * 4
        assert found == pytest.approx(committed, rel=READOUT_TOLERANCE, abs=0.0)
    else:
        corners = ["fast"] * 2 + ["slow"] * 2 + ["typical"] * 2
        # Trims to whole codes are the same wherever they are made.
        assert labels == (["each"] * 2 + ["frozen"] * 4 if name in TRIMMED_SWEEPS else corners)
        tolerance = TOLERANCE["free_frame.average_gate_fidelity"]
        assert found == pytest.approx(committed, abs=tolerance)
