"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`."""

import pytest

from tests.examples.committed import TRAINS, expected, train_example, train_figures

# What Newton's iteration makes of another processor's rounding, 1e-6 of a waveform, is 3e-6 rad of
# half a turn; an infidelity of 1e-3 moves by 1e-7 of itself, and a fit of taps by its condition.
TOLERATED = {
    "before.infidelity": 1e-7,
    "before.sequence": 1e-5,
    "before.residual": 1e-6,
    "after.infidelity": 1e-7,
    "after.sequence": 1e-5,
    "after.residual": 1e-5,
    "headroom": 1e-3,
    "turn at rest": 1e-5,
    "netlist_runs": 0.0,
}


@pytest.mark.ngspice
@pytest.mark.full
@pytest.mark.parametrize("name", TRAINS)
def test_trains_give_the_committed_numbers(name: str) -> None:
    result = train_example(name)
    found, committed = train_figures(result), expected(name)
    assert found.keys() == committed.keys() == TOLERATED.keys()
    for key, value in found.items():
        assert value == pytest.approx(committed[key], rel=0.0, abs=TOLERATED[key]), key
    # What the README says of it: the filter leaves nothing but decoherence, and the line's own
    # nonlinearity, which it cannot reach.
    assert result.predistortion is not None
    assert result.predistortion.after.sequence < 1.05 * result.predistortion.after.memoryless
    assert result.predistortion.after.residual < 0.1 * result.before.residual
