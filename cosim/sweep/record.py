"""What a sweep archives besides its table: the plan that it follows, and the runs that failed."""

import hashlib
import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field, replace
from math import nan

from cosim.archive.layout import SCHEMA_VERSION
from cosim.circuit.confidential import kept_files
from cosim.circuit.deck import Deck, DeckFile
from cosim.decision_result import DECISION_KINDS
from cosim.decks import read_deck, roots_of
from cosim.errors import ArchiveError
from cosim.readout_pulse import pulse_source
from cosim.readout_result import READOUT_KINDS
from cosim.record import package_versions
from cosim.result import KINDS
from cosim.sweep.axes import Corner
from cosim.sweep.identity import bears_on_nothing
from cosim.sweep.plan import SweepPlan
from cosim.testbench import Bench, ReadoutBench
from cosim.waveform import Waveform

_SHOWN = 5  # differing keys that a message names


@dataclass(frozen=True, slots=True)
class SweepRecord:
    """The plan of a sweep, as its archive keeps it: equal for all jobs that share one.

    Parameters
    ----------
    title : str
        Title of the testbench.
    runs : int
        How many runs are planned.
    inputs : tuple of str
        Columns of the table that the plan sets.
    units : dict of str
        Unit by column, "" for texts and plain numbers.
    fidelity : str
        Which of the three fidelities ranks the runs; "assignment_error" of a readout.
    limit : float
        Of the infidelity or assignment error, for the yield; NaN without one.
    keep : str
        How many of the worst runs keep their raw waveforms, or "all".
    digest : str
        SHA-256 of all that determines the runs, in hexadecimal.
    content : str
        What it is taken of, as JSON: testbench by corner, SHA-256 of the files, the table [sweep].
    testbench : str
        The testbench as TOML, complete.
    source, folder : str
        Path of the testbench, and the folder that its paths are relative to.
    circuit : str
        The deck's text when it was made in Python; else empty.
    deck_files : tuple of DeckFile
        Every file of the decks as its author wrote it; without its text where it is confidential.
    versions : dict of str
        Package to version.
    """

    title: str
    runs: int = field(metadata={"unit": "1"})
    inputs: tuple[str, ...]
    units: dict[str, str]
    fidelity: str
    limit: float = field(metadata={"unit": "1"})
    keep: str
    digest: str
    content: str
    testbench: str
    source: str
    folder: str
    circuit: str
    deck_files: tuple[DeckFile, ...]
    versions: dict[str, str]


@dataclass(frozen=True, slots=True)
class FailedRun:
    """What is kept of a run that has no result.

    Parameters
    ----------
    status : str
        Why, as in `cosim.sweep.batches.Outcome`.
    error : str
        The message.
    log : tuple of str
        Lines of the simulator's log that belong to it.
    testbench : str
        The testbench of this run as TOML; empty when it did not come that far.
    deck_sent : str
        The deck as it was sent to the simulator, without confidential lines; empty as above.
    waveforms : dict of Waveform
        What the simulator had computed until it failed; empty when it had nothing.
    """

    status: str
    error: str
    log: tuple[str, ...]
    testbench: str
    deck_sent: str
    waveforms: dict[str, Waveform]


# Classes by the tag that the archive of a sweep keeps.
SWEEP_KINDS: dict[str, type] = {
    **KINDS,
    **READOUT_KINDS,
    **DECISION_KINDS,
    SweepRecord.__name__: SweepRecord,
    FailedRun.__name__: FailedRun,
}


def make_sweep_record(plan: SweepPlan, bench: Bench) -> SweepRecord:
    """Write down a plan.

    Parameters
    ----------
    plan : SweepPlan
        The plan.
    bench : Bench
        The testbench it was made of.

    Returns
    -------
    SweepRecord
        The same testbench and files give the same `digest` everywhere.
    """
    content = _content(plan)
    report = plan.table.report
    return SweepRecord(
        title=bench.title,
        runs=len(plan),
        inputs=plan.columns,
        units=plan.units,
        fidelity=report.fidelity,
        limit=nan if report.limit is None else report.limit,
        keep=str(report.keep),
        digest=hashlib.sha256(content.encode()).hexdigest(),
        content=content,
        testbench=bench.to_toml(),
        source=os.path.abspath(bench.source) if bench.source else "",
        folder=os.path.abspath(bench.folder),
        circuit=bench.circuit,
        deck_files=_deck_files(plan),
        versions=package_versions(),
    )


def check_same_plan(archived: SweepRecord, plan: SweepRecord, path: str) -> None:
    """Refuse to mix the runs of two plans.

    Parameters
    ----------
    archived : SweepRecord
        What the archive was begun with.
    plan : SweepRecord
        What the testbench and its files say now.
    path : str
        The archive's name for the message.

    Raises
    ------
    ArchiveError
        If they are not the same; it names what has changed.
    """
    if archived.digest == plan.digest:
        return
    old, new = (_flat(json.loads(record.content)) for record in (archived, plan))
    changed = sorted(key for key in old.keys() | new.keys() if old.get(key) != new.get(key))
    decks = [key for key in changed if key.endswith((".files.deck", ".files.pulse"))]
    files = _changed_files(archived.deck_files, plan.deck_files)
    if decks and files:
        # The file's own name tells more than where its checksum stands.
        changed = [*files, *(key for key in changed if key not in decks)]
    listed = ", ".join(changed[:_SHOWN])
    if len(changed) > _SHOWN:
        listed += f" and {len(changed) - _SHOWN} more"
    raise ArchiveError(
        f"{path} was begun with another testbench or deck, and its runs are not mixed with those "
        f"of this one; changed: {listed}",
        hint="give another archive, or take the testbench and the files as they were: "
        f"`qcosim show {path} --testbench` prints it",
    )


def _changed_files(old: Sequence[DeckFile], new: Sequence[DeckFile]) -> list[str]:
    known, now = {file.sha256 for file in old}, {file.sha256 for file in new}
    found = [file.path for file in new if file.sha256 not in known]
    return found or [file.path for file in old if file.sha256 not in now]


def _content(plan: SweepPlan) -> str:
    # What the corners set stands below; a testbench that was written and read again may say it in
    # another order.
    own = asdict(plan.table)
    table = {name: own[name] for name in ("grid", "monte_carlo", "mismatch", "one_at_a_time")}
    table["corners"] = [corner.name for corner in plan.corners]
    corners = {corner.name or "testbench": _corner_content(corner) for corner in plan.corners}
    whole = {"schema": SCHEMA_VERSION, "sweep": table, "corners": corners}
    if plan.trimming is not None:
        whole["trim"] = {
            "runs": list(plan.trimming.modes),
            "at": {key.path: value for key, value in plan.trimming.at},
            "calibrate": dict(plan.trimming.study),
            "knobs": [key.path for key in plan.trimming.knobs],
            # What the frozen trim is made of may be no corner of the sweep.
            "testbench": _corner_content(plan.trimming.nominal),
        }
    return json.dumps(whole, sort_keys=True, separators=(",", ":"))


def _corner_content(corner: Corner) -> dict[str, object]:
    return {
        "testbench": {
            key: value for key, value in corner.flat.items() if not bears_on_nothing(key)
        },
        "files": {**dict(corner.files.waveform), "line": corner.files.line},
    }


def _flat(value: object, name: str = "") -> dict[str, object]:
    if isinstance(value, Mapping):
        found: dict[str, object] = {}
        for key, item in value.items():
            found |= _flat(item, f"{name}.{key}" if name else str(key))
        return found
    return {name: value}


def _deck_files(plan: SweepPlan) -> tuple[DeckFile, ...]:
    found: dict[tuple[str, str], DeckFile] = {}
    nominal = () if plan.trimming is None else (plan.trimming.nominal,)
    for corner in (*plan.corners, *nominal):
        for bench, deck in _decks(corner.bench, corner.deck):
            for file in kept_files(deck.files, roots_of(bench)):
                # Jobs that share a plan may have named its testbench in different ways.
                whole = replace(file, path=os.path.abspath(file.path))
                found.setdefault((whole.path, whole.sha256), whole)
    return tuple(found.values())


def _decks(bench: Bench, deck: Deck | None) -> list[tuple[Bench, Deck]]:
    """Give the deck of a testbench, and that of a readout's pulse."""
    found: list[tuple[Bench, Deck]] = [] if deck is None else [(bench, deck)]
    source = pulse_source(bench) if isinstance(bench, ReadoutBench) else None
    if source is None or source.netlist is None:
        return found
    return [*found, (source, read_deck(source))]
