"""Oracle: the committed table expected.toml, made by `python -m tests.examples.committed`.

The table guards against change; that its numbers are right is what tests/gate, tests/analytic,
tests/published and tests/crosscheck are for.
A file of its own, as these take as long as all others, and files are dealt out to processes.
"""

from pathlib import Path

import pytest

from tests.examples.committed import OF_TRANSISTORS, check_testbench

pytestmark = [pytest.mark.ngspice, pytest.mark.full]


@pytest.mark.parametrize("name", OF_TRANSISTORS)
def test_testbenches_give_the_committed_numbers(name: str, tmp_path: Path) -> None:
    check_testbench(name, tmp_path)
