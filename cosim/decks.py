"""The deck of a testbench: read from its files, and altered as the testbench says."""

import os
from pathlib import Path

from cosim.circuit.confidential import Roots, confidential_roots
from cosim.circuit.deck import shortened
from cosim.circuit.mismatch import Shift, with_mismatch
from cosim.circuit.netlist import (
    Deck,
    deck_from_text,
    load_deck,
    with_instances,
    with_parameters,
)
from cosim.errors import TestbenchError
from cosim.schema import NetlistTable
from cosim.testbench import Bench


def read_deck(bench: Bench) -> Deck:
    """Read the deck of a testbench with the sections that it names; nothing else is changed.

    Parameters
    ----------
    bench : Bench
        The testbench.

    Returns
    -------
    Deck
        The deck with its includes.

    Raises
    ------
    DeckError, TestbenchError
        If it cannot be read, or the testbench has no netlist.
    """
    table = netlist_of(bench)
    folder = Path(bench.folder)
    include_paths = tuple(
        str(_under(folder, path, "include_paths")) for path in table.include_paths
    )
    if bench.circuit:
        return deck_from_text(
            bench.circuit,
            name=table.file,
            folder=folder,
            include_paths=include_paths,
            sections=table.sections,
            compatibility=table.compatibility,
        )
    return load_deck(
        _short(_under(folder, table.file, "file")),
        include_paths=include_paths,
        sections=table.sections,
        compatibility=table.compatibility,
    )


def altered_deck(bench: Bench, deck: Deck) -> Deck:
    """Apply a testbench's parameters, instances and mismatch to its deck.

    Parameters
    ----------
    bench : Bench
        The testbench.
    deck : Deck
        From `read_deck`.

    Returns
    -------
    Deck
        The altered deck.

    Raises
    ------
    DeckError, InputError
        If a parameter, instance or transistor does not exist, or a value is impossible.
    """
    table = netlist_of(bench)
    deck = with_instances(with_parameters(deck, table.parameters), table.instances)
    shifts = {
        path: Shift(values.get("threshold", 0.0), values.get("current_factor", 1.0))
        for path, values in table.mismatch.items()
    }
    return with_mismatch(deck, shifts)


def roots_of(bench: Bench) -> Roots:
    """Look at the folders of a testbench whose files are confidential.

    Parameters
    ----------
    bench : Bench
        The testbench.

    Returns
    -------
    Roots
        None for a testbench that imports a waveform.

    Raises
    ------
    DeckError
        If one is not there.
    """
    named = bench.netlist.confidential if bench.netlist is not None else ()
    folder = Path(bench.folder)
    return confidential_roots([str(_under(folder, path, "confidential")) for path in named])


def netlist_of(bench: Bench) -> NetlistTable:
    """Give the table [netlist] of a testbench.

    Parameters
    ----------
    bench : Bench
        The testbench.

    Returns
    -------
    NetlistTable
        The table.

    Raises
    ------
    TestbenchError
        If the testbench imports a waveform.
    """
    if bench.netlist is None:
        raise TestbenchError(
            f"{bench.source or 'the testbench'} imports a waveform: there is no netlist to simulate"
        )
    return bench.netlist


def _under(folder: Path, name: str, key: str) -> Path:
    """Give the path that a key names, relative to the testbench's folder; "~" is expanded."""
    try:
        path = folder / Path(name).expanduser()
        os.lstat(os.fsencode(path))
    except OSError:
        pass  # Whether it is there is said where it is read.
    except (RuntimeError, ValueError) as error:  # no such user; NUL, or half a character
        raise TestbenchError(
            f"table [netlist], key '{key}': {shortened(repr(name))} is no path: {error}"
        ) from None
    return path


def _short(path: Path) -> Path:
    # "examples/../netlists/a.cir" reads better as "netlists/a.cir", where that is the same file.
    short = Path(os.path.normpath(path))
    return short if os.path.realpath(short) == os.path.realpath(path) else path
