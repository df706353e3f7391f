"""The testbench: a TOML file, or the same tables from Python, checked and in SI units."""

import copy
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from cosim.config import check_keys, read_table, read_toml
from cosim.errors import TestbenchError, near_names
from cosim.noises import Noise, read_noises
from cosim.readout_schema import (
    ONE_OUTPUT,
    READOUT_TABLES,
    ReadoutTable,
    ResonatorTable,
    SensorTable,
)
from cosim.schema import (
    SOURCES,
    TABLES,
    AccuracyTable,
    DriveTable,
    GateTable,
    NetlistTable,
    QubitTable,
    SpectatorTable,
    WaveformTable,
)
from cosim.stimuli import Stimulus, read_stimuli
from cosim.toml_writing import write_tables

# Tables of which there may be several.
ARRAYS = ("stimulus", "noise", "spectator")

# Tables of the studies: each study reads its own, when it is asked for.
STUDIES = ("sweep", "calibrate", "budget", "sensitivity", "drift", "specify", "train")

# What [readout] takes from the tables of a gate.
_SHARED = ("netlist", "accuracy")
_ALL = (*TABLES, *READOUT_TABLES, *ARRAYS, *STUDIES)

# What stands in a testbench that only makes a drive.
_NO_GATE: Mapping[str, Any] = {
    "qubit": {"kind": "spin", "frequency": "carrier", "rabi_per_volt": "1 Hz/V"},
    "gate": {"target": "identity"},
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """What testbenches of every kind have.

    Parameters
    ----------
    title : str
        A line for people.
    netlist : NetlistTable or None
        The deck; None where a waveform is imported.
    accuracy : AccuracyTable
        What is spent on error bars, in SI units.
    stimulus : tuple of Stimulus
        The tables [[stimulus]], in SI units; only with a netlist.
    noise : tuple of Noise
        The tables [[noise]], in SI units.
    studies : mapping
        The tables of `STUDIES`, by name, as they were given; each study reads its own.
    folder : str
        Folder that the paths in the tables are relative to.
    source : str
        Path of the file it came from; empty when made in Python.
    circuit : str
        The deck's text when it came as a PySpice `Circuit`; else empty.
    """

    title: str
    netlist: NetlistTable | None
    accuracy: AccuracyTable
    stimulus: tuple[Stimulus, ...] = ()
    noise: tuple[Noise, ...] = ()
    studies: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    folder: str = "."
    source: str = ""
    circuit: str = ""

    def to_toml(self) -> str:
        """Write the testbench as a TOML text that gives the same run again."""
        tables = {name: getattr(self, name, None) for name in _ALL} | dict(self.studies)
        given = {name: table for name, table in tables.items() if table not in (None, (), {})}
        return write_tables(self.title, given)


@dataclass(frozen=True, slots=True, kw_only=True)
class Testbench(Bench):
    """A testbench of a gate, with all that a run needs.

    Parameters
    ----------
    title, netlist, accuracy, stimulus, noise, studies, folder, source, circuit
        As in `Bench`.
    waveform : WaveformTable or None
        Where the waveform comes from when there is no netlist.
    drive, qubit, gate
        The other tables, in SI units.
    spectator : tuple of SpectatorTable
        The tables [[spectator]], in SI units.
    """

    __test__ = False  # The name starts with "Test"; pytest must not collect it.

    waveform: WaveformTable | None
    drive: DriveTable
    qubit: QubitTable
    gate: GateTable
    spectator: tuple[SpectatorTable, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadoutBench(Bench):
    """A testbench of a readout, with all that a run needs.

    Parameters
    ----------
    title, netlist, accuracy, stimulus, noise, studies, folder, source, circuit
        As in `Bench`; there is always a netlist.
    resonator : ResonatorTable or None
        What answers, in SI units.
    sensor : SensorTable or None
        In its place, a charge sensor in the deck.
    readout : ReadoutTable
        The way in and out, in SI units.
    """

    resonator: ResonatorTable | None
    sensor: SensorTable | None
    readout: ReadoutTable


@dataclass(frozen=True, slots=True, kw_only=True)
class DesignBench(Bench):
    """A testbench without a circuit, of which it is asked what a circuit must meet ([specify]).

    Parameters
    ----------
    title, netlist, accuracy, stimulus, noise, studies, folder, source, circuit
        As in `Bench`; there is no netlist, no stimulus and no noise.
    qubit : QubitTable or None
        Of a gate, in SI units.
    gate : GateTable or None
        What the gate is meant to do.
    resonator : ResonatorTable or None
        Of a readout, in SI units.
    readout : ReadoutTable or None
        How the readout is judged.
    """

    qubit: QubitTable | None = None
    gate: GateTable | None = None
    resonator: ResonatorTable | None = None
    readout: ReadoutTable | None = None

    def to_toml(self) -> str:
        """Write the testbench as a TOML text that gives the same specification again."""
        tables = {name: getattr(self, name) for name in ("qubit", "gate", "resonator", "readout")}
        given = {name: table for name, table in tables.items() if table is not None}
        return write_tables(self.title, given | dict(self.studies))


def load_testbench(path: str | os.PathLike[str]) -> Testbench | ReadoutBench | DesignBench:
    """Read a testbench file.

    Parameters
    ----------
    path : path
        The TOML file.

    Returns
    -------
    Testbench, ReadoutBench or DesignBench
        With [gate], with [readout], or with [specify] and no circuit; quantities in SI units.

    Raises
    ------
    TestbenchError
        If the file cannot be read, or a key or value is wrong; it names file, table and key.
    """
    file = Path(path)
    return _build(read_toml(file), file=str(file), folder=str(file.parent))


def make_testbench(
    tables: Mapping[str, Any], *, folder: str | os.PathLike[str] = "."
) -> Testbench | ReadoutBench | DesignBench:
    """Make a testbench from Python.

    Parameters
    ----------
    tables : mapping
        The same tables and keys as in a file, quantities as texts with units. A PySpice
        `Circuit` may stand in place of the deck's path, as tables["netlist"]["file"].
    folder : path
        Folder that the paths in the tables are relative to.

    Returns
    -------
    Testbench, ReadoutBench or DesignBench
        With [gate], with [readout], or with [specify] and no circuit; quantities in SI units.

    Raises
    ------
    TestbenchError
        If a key or value is wrong.
    """
    return _build(tables, file="", folder=str(folder))


def load_drive(path: str | os.PathLike[str]) -> Testbench:
    """Read a testbench file for its drive alone.

    Parameters
    ----------
    path : path
        The TOML file: [netlist] or [waveform], [drive], and [[stimulus]] where there is one.
        [qubit] and [gate] may be left out.

    Returns
    -------
    Testbench
        With a qubit and a gate that stand for none.

    Raises
    ------
    TestbenchError
        If the file cannot be read, or a key or value is wrong.
    """
    file = Path(path)
    tables = read_toml(file)
    if "readout" in tables:
        raise TestbenchError(f"{file} has [readout]; this takes a testbench with [drive]")
    return gate_bench(_build({**_NO_GATE, **tables}, file=str(file), folder=str(file.parent)))


def gate_bench(bench: Bench) -> Testbench:
    """Insist on a testbench of a gate.

    Parameters
    ----------
    bench : Bench
        Of either kind.

    Returns
    -------
    Testbench
        The same.

    Raises
    ------
    TestbenchError
        If it is one of a readout, or has no circuit.
    """
    if isinstance(bench, DesignBench):
        raise TestbenchError(
            f"{bench.source or 'the testbench'} has no [netlist] and no [waveform], so that there "
            "is nothing to run",
            hint="`qcosim specify` says what its blocks must meet",
        )
    if not isinstance(bench, Testbench):
        raise TestbenchError(
            f"{bench.source or 'the testbench'} has [readout]; this takes a testbench with [gate]"
        )
    return bench


def _build(
    tables: Mapping[str, Any], *, file: str, folder: str
) -> Testbench | ReadoutBench | DesignBench:
    label = file or "the testbench"
    for name in tables:
        if isinstance(tables[name], Mapping) and name not in _ALL:
            raise TestbenchError(f"{label}: unknown table [{name}]; {near_names(name, _ALL)}")
    if "specify" in tables and not any(name in tables for name in SOURCES):
        return _design_bench(tables, label, folder)
    readout = "readout" in tables
    kinds = {name: TABLES[name] for name in _SHARED} | READOUT_TABLES if readout else TABLES
    arrays = tuple(name for name in ARRAYS if not readout or name != "spectator")
    _check_kind(tables, readout, (*kinds, *arrays, *STUDIES), label)
    title = tables.get("title", "")
    if not isinstance(title, str):
        raise TestbenchError(f"{label}: 'title' is a text, got {title!r}")
    given, circuit = _with_circuit(tables, label)
    parts: dict[str, Any] = dict.fromkeys((*SOURCES, "resonator", "sensor"))
    for name, cls in kinds.items():
        if name in given or name not in parts:
            parts[name] = read_table(given.get(name, {}), cls, file=label, name=name)
    stimulus = read_stimuli(tables.get("stimulus", []), file=label)
    noise = read_noises(tables.get("noise", []), file=label)
    studies = {name: tables[name] for name in STUDIES if name in tables}
    for name, study in studies.items():
        if not isinstance(study, Mapping):
            raise TestbenchError(f"{label}: wanted a table [{name}], got {study!r}")
    common: dict[str, Any] = {
        "title": title,
        "stimulus": stimulus,
        "noise": noise,
        "studies": copy.deepcopy({name: dict(study) for name, study in studies.items()}),
        "folder": folder,
        "source": file,
        "circuit": circuit,
        **{name: part for name, part in parts.items() if name in kinds},
    }
    if readout:
        return _readout_bench(common, label)
    if stimulus and parts["netlist"] is None:
        raise TestbenchError(
            f"{label}: a table [[stimulus]] drives a source of a deck, but there is no [netlist]"
        )
    if parts["netlist"] is not None and parts["drive"].termination is None:
        raise TestbenchError(
            f"{label}, table [drive]: the key 'termination' is missing",
            hint='say termination = "50 ohm", or "in deck" where the deck has the load',
        )
    return Testbench(**common, spectator=_read_spectators(tables.get("spectator", []), label))


def _design_bench(tables: Mapping[str, Any], label: str, folder: str) -> DesignBench:
    """Read a testbench without a circuit."""
    readout = "readout" in tables
    names = ("resonator", "readout") if readout else ("qubit", "gate")
    kinds = READOUT_TABLES if readout else TABLES
    check_keys(tables, ["title", *names, "specify"], label)
    for name in names:
        if name not in tables:
            hint = "[specify] goes with [qubit] and [gate], or with [resonator] and [readout]"
            raise TestbenchError(f"{label}: the table [{name}] is missing", hint=hint)
    parts: dict[str, Any] = {
        name: read_table(tables[name], kinds[name], file=label, name=name) for name in names
    }
    study = tables["specify"]
    if not isinstance(study, Mapping):
        raise TestbenchError(f"{label}: wanted a table [specify], got {study!r}")
    return DesignBench(
        title=str(tables.get("title", "")),
        netlist=None,
        accuracy=AccuracyTable(),
        studies={"specify": copy.deepcopy(dict(study))},
        folder=folder,
        source="" if label == "the testbench" else label,
        **parts,
    )


def _check_kind(tables: Mapping[str, Any], readout: bool, known: Sequence[str], label: str) -> None:
    """Refuse tables of the other kind of testbench, and miss those of its own."""
    other = [name for name in _ALL if name in tables and name not in known]
    if other and readout:
        raise TestbenchError(f"{label}: the table [{other[0]}] does not go with [readout]")
    check_keys(tables, ["title", *known, *other], label)
    if other:
        raise TestbenchError(f"{label}: the table [{other[0]}] goes with [readout] only")
    for name in ("netlist", "readout") if readout else ("drive", "qubit", "gate"):
        if name not in tables:
            raise TestbenchError(f"{label}: the table [{name}] is missing")
    sources = [name for name in SOURCES if name in tables]
    if not readout and len(sources) != 1:
        raise TestbenchError(
            f"{label}: wanted one of the tables [netlist] and [waveform], got "
            f"{'both' if sources else 'none'}"
        )


def _readout_bench(parts: Mapping[str, Any], label: str) -> ReadoutBench:
    bench = ReadoutBench(**parts)
    if not bench.readout.has_output:
        raise TestbenchError(f"{label}, table [readout]: {ONE_OUTPUT}")
    if (bench.resonator is None) == (bench.sensor is None):
        raise TestbenchError(
            f"{label}: wanted one of the tables [resonator] and [sensor], got "
            f"{'none' if bench.resonator is None else 'both'}"
        )
    if bench.resonator is not None and bench.readout.source is None:
        raise TestbenchError(
            f"{label}, table [readout]: the key 'source' is missing",
            hint='name the voltage source that the resonator\'s answer replaces, such as "Vin"',
        )
    if bench.sensor is not None and bench.readout.source is not None:
        raise TestbenchError(
            f"{label}, table [readout]: with a [sensor] the deck has its own sources, and the key "
            "'source' has no place"
        )
    return bench


def _read_spectators(tables: object, file: str) -> tuple[SpectatorTable, ...]:
    if not isinstance(tables, Sequence) or isinstance(tables, str):
        raise TestbenchError(
            f"{file}: wanted tables [[spectator]], with two brackets, got {tables!r}"
        )
    return tuple(
        read_table(table, SpectatorTable, file=file, name="spectator", number=number)
        for number, table in enumerate(tables, start=1)
    )


def _with_circuit(tables: Mapping[str, Any], label: str) -> tuple[Mapping[str, Any], str]:
    """Take a PySpice circuit, or a path object, out of tables made in Python."""
    if "netlist" not in tables:
        return tables, ""
    if not isinstance(tables["netlist"], Mapping):
        raise TestbenchError(f"{label}: wanted a table [netlist], got {tables['netlist']!r}")
    netlist = dict(tables["netlist"])
    deck = netlist.get("file")
    circuit = ""
    if isinstance(deck, os.PathLike):
        netlist["file"] = os.fspath(deck)
    elif deck is not None and not isinstance(deck, str) and hasattr(deck, "elements"):
        # A PySpice circuit writes itself as a deck; the package itself is not needed for that.
        circuit = str(deck)
        netlist["file"] = "circuit"
    return {**tables, "netlist": netlist}, circuit
