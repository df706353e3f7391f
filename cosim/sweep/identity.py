"""What a run is: hashes of all that determines its result, and of what determines its waveform.

A hash is taken over a canonical JSON text: the flat testbench, the SHA-256 of every file that it
reads, the mismatch by its constants, seed and sample, and the version of the archive's schema. It
does not depend on the process, the folder, or on what else the sweep holds.
"""

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import chain
from pathlib import Path
from typing import Any

from cosim.archive.layout import SCHEMA_VERSION
from cosim.circuit.deck import Deck
from cosim.decks import read_deck
from cosim.errors import TestbenchError
from cosim.readout_pulse import pulse_source
from cosim.testbench import Bench, ReadoutBench, Testbench

# Names and places of files, whose content counts, and what bears on no number: the wall-clock
# limit of a run that ended, and how much of the deck its record keeps.
_IGNORED = frozenset(
    {
        "netlist.file",
        "netlist.include_paths",
        "netlist.confidential",
        "netlist.time_limit",
        "waveform.file",
        "drive.line",
        "readout.line",
        "readout.amplifier",
        "resonator.pulse",
    }
)
# The keys besides those of the netlist, the stimuli and the imported waveform that say what is
# simulated: the probe's load, the carrier, from which the time step follows, and whether there is
# a second run.
_OF_WAVEFORM = frozenset(
    {
        "drive.probe",
        "drive.i",
        "drive.q",
        "drive.termination",
        "drive.carrier",
        "accuracy.floor",
    }
)
_WAVEFORM_TABLES = frozenset({"netlist", "stimulus", "waveform"})
# Of a readout the other way round, since nearly all that it is said to be is simulated: the
# resonator's answers are the deck's source, the window and the seed are those of its noise. These
# keys are used on the records only, as `cosim.readout.run_readout` takes them from
# `simulate_readout`. The converter's rate is none of them: the records' grid follows from it. A
# comparator's decisions are simulated with all of them.
_OF_RECORDS = frozenset(
    {
        "readout.weights",
        "readout.adc_bits",
        "readout.adc_full_scale",
        "readout.adc_cycles",
        "readout.preparation_error",
        "readout.shots",
        "readout.records",
        "accuracy.reference",
        "accuracy.noise_samples",
        "accuracy.noise_seed",
    }
)
# Of these it is simulated whether there are such changes of state, and judged how often they come.
_OF_CHANGES = ("readout.t1", "readout.thermal_population")


@dataclass(frozen=True, slots=True)
class Files:
    """SHA-256 of the files that a testbench reads.

    Parameters
    ----------
    waveform : mapping
        Role -> SHA-256 of each, in order: the deck with its includes and data, the stimuli, an
        imported waveform; the two-ports of a readout, and all that makes its pulse.
    line : tuple of str
        The Touchstone file of the line; empty without one.
    """

    waveform: Mapping[str, tuple[str, ...]]
    line: tuple[str, ...]


def files_of(bench: Bench, deck: Deck | None) -> Files:
    """Hash the files that a testbench reads.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck or None
        Its deck as read; None when it imports a waveform.

    Returns
    -------
    Files

    Raises
    ------
    TestbenchError
        If a file cannot be read.
    """
    waveform: dict[str, tuple[str, ...]] = {}
    if deck is not None:
        data = tuple(file.sha256 for file in deck.data_files)
        waveform["deck"] = (*(file.sha256 for file in deck.files), *data)
    for number, stimulus in enumerate(bench.stimulus, start=1):
        name = getattr(stimulus, "file", None)
        if name is not None:
            waveform[f"stimulus.{number}"] = (_sha256(bench, name),)
    line: tuple[str, ...] = ()
    if isinstance(bench, Testbench):
        if bench.waveform is not None:
            waveform["waveform"] = (_sha256(bench, bench.waveform.file),)
        if bench.drive.line is not None:
            line = (_sha256(bench, bench.drive.line),)
    if isinstance(bench, ReadoutBench):
        waveform |= _files_of_readout(bench)
    return Files(waveform, line)


def _files_of_readout(bench: ReadoutBench) -> dict[str, tuple[str, ...]]:
    found: dict[str, tuple[str, ...]] = {
        f"readout.{key}": (_sha256(bench, name),)
        for key, name in (("line", bench.readout.line), ("amplifier", bench.readout.amplifier))
        if name is not None
    }
    source = pulse_source(bench)
    if source is not None:
        own = files_of(source, None if source.netlist is None else read_deck(source))
        text = hashlib.sha256(Path(source.source).read_bytes()).hexdigest()
        found["pulse"] = (text, *chain.from_iterable(own.waveform.values()), *own.line)
    return found


def _sha256(bench: Bench, name: str) -> str:
    path = Path(bench.folder) / Path(name).expanduser()
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError as error:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: {path} cannot be read: {error.strerror}"
        ) from None


def identity_keys(
    flat: Mapping[str, Any], files: Files, mismatch: Mapping[str, Any]
) -> tuple[str, str, str]:
    """Give the three hashes of a run.

    Parameters
    ----------
    flat : mapping
        The testbench, from `cosim.keys.flattened`, with the values of this run.
    files : Files
        The files that it reads.
    mismatch : mapping
        What the shifts of its transistors are drawn from; empty without mismatch.

    Returns
    -------
    tuple of (str, str, str)
        In hexadecimal: of all that determines the result; of what determines the waveform at the
        probe, of a readout its records; of the deck as read, without its parameters.
    """
    kept = {key: value for key, value in flat.items() if not bears_on_nothing(key)}
    waveform = _simulated(kept)
    rest = {key: value for key, value in kept.items() if key not in waveform or key in _OF_CHANGES}
    waveform_key = _hash([SCHEMA_VERSION, waveform, dict(files.waveform), dict(mismatch)])
    identity = _hash([waveform_key, rest, files.line])
    sections, mode = flat.get("netlist.sections"), flat.get("netlist.compatibility")
    deck_key = _hash([SCHEMA_VERSION, files.waveform.get("deck", ()), sections, mode])
    return identity, waveform_key, deck_key


def trim_key(identity: str, study: Mapping[str, Any]) -> str:
    """Give the hash of all that determines a trim.

    Parameters
    ----------
    identity : str
        Of the testbench that is calibrated, without its knobs' table.
    study : mapping
        The table [calibrate] as given.

    Returns
    -------
    str
        In hexadecimal.
    """
    return _hash([identity, dict(study)])


def with_trim(identity: str, waveform_key: str, mode: str, trim: str) -> tuple[str, str]:
    """Make the hashes of a run with a trim.

    Parameters
    ----------
    identity, waveform_key : str
        Of the run without it.
    mode : str
        "frozen" or "each".
    trim : str
        From `trim_key`.

    Returns
    -------
    tuple of (str, str)
        Identity, and that of the waveform at the probe, which the knobs may change.
    """
    return _hash([identity, mode, trim]), _hash([waveform_key, trim])


def bears_on_nothing(key: str) -> bool:
    """Tell whether a key of the flat testbench has no part in what a run is.

    Parameters
    ----------
    key : str
        Dotted key, "netlist.time_limit".

    Returns
    -------
    bool
    """
    return key in _IGNORED or (key.startswith("stimulus.") and key.endswith(".file"))


def _simulated(kept: Mapping[str, Any]) -> dict[str, Any]:
    """Give the part of the testbench that says what is simulated."""
    if "readout.window" not in kept:
        return {key: value for key, value in kept.items() if _is_of_waveform(key)}
    if kept["readout.decision"] is not None:
        return dict(kept)
    found = {key: value for key, value in kept.items() if key not in _OF_RECORDS}
    t1, population = (kept[key] for key in _OF_CHANGES)
    return {**found, "readout.t1": math.isfinite(t1), "readout.thermal_population": population > 0}


def _is_of_waveform(key: str) -> bool:
    return key in _OF_WAVEFORM or key.partition(".")[0] in _WAVEFORM_TABLES


def _hash(content: Any) -> str:
    # Python writes the shortest digits that give a float back, the same on every platform.
    text = json.dumps(content, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()
