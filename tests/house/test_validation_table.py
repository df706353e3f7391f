"""Oracle: rows and sessions whose table is known beforehand, through pytest-xdist as well."""

import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from tests.validation import Row, Validate, agreement, ceiling, digits_carried, line, table

TOPIC = "metrics"
ROW = Row("metrics", "A01", "fidelity", "", "a book", 0.9933333, 0.99333334, 7, "a.py")


@pytest.mark.parametrize(
    ("expected", "got", "digits", "claimed"),
    [
        (2.0, 2.0003, 12, 3),
        (2.0, 2.0001, 12, 4),
        (-2.0, -2.0001, 12, 4),
        (2.0, 2.5, 12, 0),
        (0.9933333, 0.99333333, 7, 7),
        (0.9933333, 0.9933333, 7, 7),
        (1.0, 1.0 + 2e-16, 12, 12),
        (1.0, 1.0, 12, None),
    ],
)
def test_digits_of_agreement(expected: float, got: float, digits: int, claimed: int | None) -> None:
    assert agreement(expected, got, digits) == claimed


def test_a_closed_form_carries_more_digits_than_a_published_number() -> None:
    assert digits_carried(0.0001644799) == 7
    assert digits_carried(-1.2e-30) == 7
    assert digits_carried(3.141592653589793) == 12


@pytest.mark.parametrize(
    ("value", "power"), [(0.0, "1e-12"), (3e-15, "1e-12"), (-2e-7, "1e-6"), (0.5, "1e0")]
)
def test_what_is_left_of_a_zero_is_a_power_of_ten(value: float, power: str) -> None:
    assert ceiling(value) == power


def test_a_line_is_rounded() -> None:
    assert line(ROW) == "| A01 | fidelity | a book | 0.9933333 | 0.9933333 | 7 | a.py |"
    zero = replace(ROW, expected=0.0, got=3e-8, unit="V")
    assert "| fidelity (V) | a book | 0 | below 1e-7 | 1e-7 absolute |" in line(zero)


def test_the_worst_of_repeated_checks_stays_and_topics_keep_their_order() -> None:
    text = table([replace(ROW, topic="circuit"), ROW, replace(ROW, got=0.9934)])
    assert text.index("## Metrics") < text.index("## Circuit")
    assert "2 checks" in text
    assert "Lowest agreement: 4 digits" in text
    assert text.count("| 0.9934 | 4 |") == 1


def test_a_check_fails_outside_its_tolerance(validate: Validate) -> None:
    with pytest.raises(AssertionError, match=r"quantity: got 1\.1 V, wanted 1\.0 within 0\.01"):
        validate("quantity", "source", 1.0, 1.1, "V", rel=1e-2)
    with pytest.raises(AssertionError):
        validate("not a number", "source", 1.0, float("nan"), rel=1.0)


MODULE = """
TOPIC = "metrics"
def test_one(validate):
    validate("one", "a book", 1.0, 1.001, rel=0.01, card="A01")
def test_two(validate):
    assert {outcome}
    validate("two", "a book", 2.0, 2.0, digits=12)
"""


@pytest.mark.full
@pytest.mark.parametrize("workers", [[], ["-n", "2"]])
def test_a_session_writes_its_table_only_if_it_passes(tmp_path: Path, workers: list[str]) -> None:
    root = Path(__file__).parents[2]
    (tmp_path / "tests").mkdir()
    command = [sys.executable, "-m", "pytest", "-q", "-p", "tests.validation", "-p"]
    command += ["no:cacheprovider", *workers, "--rootdir", str(tmp_path)]

    def session(outcome: bool, *options: str) -> int:
        module = tmp_path / "tests" / "test_module.py"
        module.write_text(MODULE.format(outcome=outcome), encoding="utf-8")
        return subprocess.run(
            [*command, *options, "tests/test_module.py"],
            cwd=tmp_path,
            env={"PYTHONPATH": str(root), "PATH": "/usr/bin:/bin"},
            capture_output=True,
            check=False,
            timeout=120,
        ).returncode

    path = tmp_path / "table.md"
    assert session(True) == 0
    assert session(False, "--validation", str(path)) == 1
    assert not path.exists()
    assert session(True, "--validation", str(path)) == 0
    text = path.read_text(encoding="utf-8")
    assert "| A01 | one | a book | 1 | 1.001 | 3 | test_module.py |" in text
    assert "|  | two | a book | 2 | 2 | exact | test_module.py |" in text


def test_the_committed_table_names_every_check_value_of_the_tests() -> None:
    """A table left over from before a check was added, renamed or removed."""
    tests = Path(__file__).parents[1]
    named = {
        card
        for path in tests.rglob("test_*.py")
        if path != Path(__file__)
        for card in re.findall(r'card="([A-Z]\d\d)"', path.read_text(encoding="utf-8"))
    }
    committed = (tests / "VALIDATION.md").read_text(encoding="utf-8")
    assert named == set(re.findall(r"^\| ([A-Z]\d\d) \|", committed, re.MULTILINE))
    assert len(named) > 40
