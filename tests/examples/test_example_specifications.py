"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/specification is for.
"""

import pytest

from tests.examples.committed import SPECIFICATIONS, expected, specified


@pytest.mark.full
@pytest.mark.parametrize("name", SPECIFICATIONS)
def test_specifications_give_the_committed_limits(name: str) -> None:
    found, committed = specified(name), expected(name)
    assert found.keys() == committed.keys()
    for key, value in found.items():
        # Limits are searched to 1e-4; an integration may end a sample of a thousand elsewhere.
        assert value == pytest.approx(committed[key], rel=3e-3, abs=0.0), key
