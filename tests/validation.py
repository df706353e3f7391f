"""Checks against numbers from outside record themselves, and make the validation table.

A pytest plugin. A test that takes the fixture `validate` states what it checks, where the number
comes from and how far it may be off; `--validation PATH` writes all that was stated as a Markdown
table at the end of a session that passed. The rows travel with the tests' reports, so that they
survive the processes of pytest-xdist. A module or class says with `TOPIC` where its rows belong.
"""

import math
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Protocol

import pytest

TOPICS = (
    "metrics",
    "dynamics in the rotating-wave approximation",
    "dynamics without rotating wave",
    "DRAG",
    "circuit",
    "signal",
    "coupling",
    "readout",
    "end to end through ngspice",
)
MEMORY = "recalled from memory"

# Agreement beyond this is that of floating-point numbers, which differs between machines.
MOST_DIGITS = 12
# What a published value carries unless its check says otherwise; more digits than these in the
# number itself mean that the test computed it from a closed form.
PUBLISHED_DIGITS = 7
SHOWN_DIGITS = 7
_KEY = "validation"


@dataclass(frozen=True, slots=True)
class Row:
    """One check: what was wanted, where that stands, and what was got."""

    topic: str
    card: str
    quantity: str
    unit: str
    source: str
    expected: float
    got: float
    digits: int
    test: str


class Validate(Protocol):
    """The signature of the fixture `validate`."""

    def __call__(
        self,
        quantity: str,
        source: str,
        expected: float,
        got: float,
        unit: str = "",
        *,
        rel: float = 0.0,
        abs: float = 0.0,
        card: str = "",
        digits: int | None = None,
    ) -> None:
        """Assert |got - expected| <= max(rel |expected|, abs) and record the check."""


def digits_carried(value: float) -> int:
    """Give the digits in which agreement with a number may be claimed."""
    mantissa = repr(float(value)).lstrip("-").split("e")[0].replace(".", "").strip("0")
    return PUBLISHED_DIGITS if len(mantissa) <= PUBLISHED_DIGITS else MOST_DIGITS


def agreement(expected: float, got: float, digits: int) -> int | None:
    """Give floor(-log10 |got/expected - 1|), capped at the digits; None for equal numbers.

    Equality with a rounded number is worth that number's digits and no more.
    """
    if got == expected:
        return None if digits >= MOST_DIGITS else digits
    return min(digits, math.floor(-math.log10(math.fabs(got / expected - 1.0))))


def ceiling(value: float) -> str:
    """Give the power of ten that a magnitude stays below, 1e-12 at the least."""
    if value == 0.0:
        return f"1e-{MOST_DIGITS}"
    return f"1e{max(math.floor(math.log10(math.fabs(value))) + 1, -MOST_DIGITS):d}"


def line(row: Row) -> str:
    """Format one row of the table."""
    if row.expected == 0.0:
        # The digits of what is left of a zero are those of rounding errors.
        got = f"below {ceiling(row.got)}"
        agrees = f"{ceiling(row.got)} absolute"
    else:
        found = agreement(row.expected, row.got, row.digits)
        got = f"{row.got:.{SHOWN_DIGITS}g}"
        agrees = "exact" if found is None else str(found)
    quantity = f"{row.quantity} ({row.unit})" if row.unit else row.quantity
    expected = f"{row.expected + 0.0:.{SHOWN_DIGITS}g}"  # No minus before a zero.
    cells = (row.card, quantity, row.source, expected, got, agrees, row.test)
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _rank(row: Row) -> float:
    """Rank a row by how well it agrees, the worst first."""
    if row.expected == 0.0:
        return -math.fabs(row.got)
    return -math.fabs(row.got / row.expected - 1.0)


def merged(rows: Iterable[Row]) -> list[Row]:
    """Sort the rows; of repeated checks of one thing the worst stays."""
    found: dict[tuple[object, ...], Row] = {}
    for row in rows:
        key = (TOPICS.index(row.topic), row.card or "~", row.quantity, row.source, row.expected)
        if key not in found or _rank(row) < _rank(found[key]):
            found[key] = row
    return [found[key] for key in sorted(found)]


def table(rows: Iterable[Row]) -> str:
    """Write the whole table as Markdown."""
    kept = merged(rows)
    cards = sorted({card for row in kept for card in row.card.split(", ") if card})
    counted = [row for row in kept if row.expected != 0.0]
    claims = [agreement(row.expected, row.got, row.digits) for row in counted]
    lowest = min((claim for claim in claims if claim is not None), default=MOST_DIGITS)
    text = [
        "# Validation",
        "",
        "Made by `bash tests/run.sh`, which runs every check below; do not edit by hand.",
        "",
        f"{len(kept)} checks against numbers from outside the project, among them {len(cards)} "
        "named check values (a letter and a number, which also stand in the test). "
        f"Lowest agreement: {lowest} digit{'s' * (lowest != 1)}.",
        "",
        "Agreement is the number of digits, floor(-log10 |got/expected - 1|), at most "
        f"{MOST_DIGITS} and at most those that the expected value carries; the absolute "
        "difference where zero is expected. Where it is low, the comment beside the check in the "
        "test names what the formula leaves out, mostly the counter-rotating part of the drive or "
        "the next order of a series. "
        f"Numbers are rounded to {SHOWN_DIGITS} digits.",
    ]
    for topic in TOPICS:
        part = [row for row in kept if row.topic == topic]
        if part:
            text += ["", f"## {topic[0].upper()}{topic[1:]}", ""]
            text += ["| check value | quantity | source | expected | got | agreement | test |"]
            text += ["|---|---|---|---|---|---|---|"]
            text += [line(row) for row in part]
    return "\n".join(text) + "\n"


@pytest.fixture
def validate(request: pytest.FixtureRequest) -> Validate:
    """Check a number against one from outside, and record the check for the table."""
    topic = getattr(request.cls, "TOPIC", None) or getattr(request.module, "TOPIC", None)
    assert topic in TOPICS, f"a module or class that validates names one of {TOPICS} as its TOPIC"
    test = str(Path(request.node.location[0]).relative_to("tests"))

    def check(
        quantity: str,
        source: str,
        expected: float,
        got: float,
        unit: str = "",
        *,
        rel: float = 0.0,
        abs: float = 0.0,
        card: str = "",
        digits: int | None = None,
    ) -> None:
        wanted, found = float(expected), float(got)
        allowed = max(rel * math.fabs(wanted), abs)
        difference = math.fabs(found - wanted)
        assert difference <= allowed, (
            f"{quantity}: got {found!r} {unit}, wanted {wanted!r} within {allowed:.3g} "
            f"(off by {difference:.3g}); source: {source}"
        )
        claimed = digits_carried(wanted) if digits is None else digits
        row = Row(topic, card, quantity, unit, source, wanted, found, claimed, test)
        request.node.user_properties.append((_KEY, asdict(row)))

    return check


class Recorder:
    """Collects the rows of a session and writes the table at its end."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.rows: list[Row] = []

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        """Take the rows out of a test's report."""
        if report.when == "call":
            for key, value in report.user_properties:
                if key == _KEY and isinstance(value, dict):
                    self.rows.append(Row(**value))

    def pytest_sessionfinish(self, exitstatus: int) -> None:
        """Write the table, if every test passed."""
        if exitstatus == 0:
            self.path.write_text(table(self.rows), encoding="utf-8")


def pytest_addoption(parser: pytest.Parser) -> None:
    """Add the option that names the table's file."""
    parser.addoption(
        "--validation",
        metavar="PATH",
        help="write the table of checks against outside numbers, if the session passes",
    )


def pytest_configure(config: pytest.Config) -> None:
    """Start collecting, in the process that hears of every report."""
    path = config.getoption("--validation")
    if path and not hasattr(config, "workerinput"):
        config.pluginmanager.register(Recorder(Path(path).absolute()), "validation-recorder")
