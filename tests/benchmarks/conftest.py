"""What benchmarks have otherwise than tests."""

import pytest


@pytest.fixture(scope="session", autouse=True)
def no_wait_for_the_disk() -> None:
    """Wait for the disk: what that costs is part of what is measured."""
