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
STUDIES = ("sweep",)


@dataclass(frozen=True, slots=True)
class Testbench:
    """A testbench with all that a run needs.

    Parameters
    ----------
    title : str
        A line for people.
    netlist, waveform
        Where the waveform comes from; one of the two is None.
    drive, qubit, gate, accuracy
        The other tables, in SI units.
    stimulus : tuple of Stimulus
        The tables [[stimulus]], in SI units; only with a netlist.
    noise : tuple of Noise
        The tables [[noise]], in SI units.
    spectator : tuple of SpectatorTable
        The tables [[spectator]], in SI units.
    sweep : mapping
        The table [sweep] as it was given; `cosim.sweep.table` reads it.
    folder : str
        Folder that the paths in the tables are relative to.
    source : str
        Path of the file it came from; empty when made in Python.
    circuit : str
        The deck's text when it came as a PySpice `Circuit`; else empty.
    """

    __test__ = False  # The name starts with "Test"; pytest must not collect it.

    title: str
    netlist: NetlistTable | None
    waveform: WaveformTable | None
    drive: DriveTable
    qubit: QubitTable
    gate: GateTable
    accuracy: AccuracyTable
    stimulus: tuple[Stimulus, ...] = ()
    noise: tuple[Noise, ...] = ()
    spectator: tuple[SpectatorTable, ...] = ()
    sweep: Mapping[str, Any] = field(default_factory=dict)
    folder: str = "."
    source: str = ""
    circuit: str = ""

    def to_toml(self) -> str:
        """Write the testbench as a TOML text that gives the same run again."""
        tables = {name: getattr(self, name) for name in (*TABLES, *ARRAYS, *STUDIES)}
        given = {name: table for name, table in tables.items() if table not in (None, (), {})}
        return write_tables(self.title, given)


def load_testbench(path: str | os.PathLike[str]) -> Testbench:
    """Read a testbench file.

    Parameters
    ----------
    path : path
        The TOML file.

    Returns
    -------
    Testbench
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        If the file cannot be read, or a key or value is wrong; it names file, table and key.
    """
    file = Path(path)
    return _build(read_toml(file), file=str(file), folder=str(file.parent))


def make_testbench(tables: Mapping[str, Any], *, folder: str | os.PathLike[str] = ".") -> Testbench:
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
    Testbench
        Quantities in SI units.

    Raises
    ------
    TestbenchError
        If a key or value is wrong.
    """
    return _build(tables, file="", folder=str(folder))


def _build(tables: Mapping[str, Any], *, file: str, folder: str) -> Testbench:
    label = file or "the testbench"
    known = (*TABLES, *ARRAYS, *STUDIES)
    for name in tables:
        if isinstance(tables[name], Mapping) and name not in known:
            raise TestbenchError(f"{label}: unknown table [{name}]; {near_names(name, known)}")
    check_keys(tables, ["title", *known], label)
    title = tables.get("title", "")
    if not isinstance(title, str):
        raise TestbenchError(f"{label}: 'title' is a text, got {title!r}")
    for name in ("drive", "qubit", "gate"):
        if name not in tables:
            raise TestbenchError(f"{label}: the table [{name}] is missing")
    sources = [name for name in SOURCES if name in tables]
    if len(sources) != 1:
        raise TestbenchError(
            f"{label}: wanted one of the tables [netlist] and [waveform], got "
            f"{'both' if sources else 'none'}"
        )
    given, circuit = _with_circuit(tables, label)
    parts: dict[str, Any] = {name: None for name in SOURCES}
    for name, cls in TABLES.items():
        if name in sources or name not in SOURCES:
            parts[name] = read_table(given.get(name, {}), cls, file=label, name=name)
    if parts["netlist"] is not None and parts["drive"].termination is None:
        raise TestbenchError(
            f"{label}, table [drive]: the key 'termination' is missing",
            hint='say termination = "50 ohm", or "in deck" where the deck has the load',
        )
    stimulus = read_stimuli(tables.get("stimulus", []), file=label)
    if stimulus and parts["netlist"] is None:
        raise TestbenchError(
            f"{label}: a table [[stimulus]] drives a source of a deck, but there is no [netlist]"
        )
    noise = read_noises(tables.get("noise", []), file=label)
    spectator = _read_spectators(tables.get("spectator", []), label)
    sweep = tables.get("sweep", {})
    if not isinstance(sweep, Mapping):
        raise TestbenchError(f"{label}: wanted a table [sweep], got {sweep!r}")
    return Testbench(
        title=title,
        **parts,
        stimulus=stimulus,
        noise=noise,
        spectator=spectator,
        sweep=copy.deepcopy(dict(sweep)),
        folder=folder,
        source=file,
        circuit=circuit,
    )


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
