"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/drift is for.
"""

import pytest

from tests.examples.committed import DRIFTS, drift_example, drift_figures, expected


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", DRIFTS)
def test_drifts_give_the_committed_intervals(name: str) -> None:
    result = drift_example(name)
    # A waveform changes by 1e-6 from machine to machine (committed.py): 1e-9 in an infidelity, and
    # 1e-3 at most of what the least source that is told adds; that below 1e-10 is no number.
    found, committed = drift_figures(result), expected(name)
    assert found.keys() == committed.keys()
    for key, value in found.items():
        assert value == pytest.approx(committed[key], rel=1e-3, abs=1e-10), key
    assert result.warnings == ()
    assert result.dominant == "qubit"
    # Gates with all sources moved agree with the sum of the sources.
    assert result.model_error < 0.05
