"""What is in an archived run, written as files that other programs read."""

import os
from pathlib import Path

import numpy as np

from cosim.decision_result import DecisionResult
from cosim.errors import InputError
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult, gate_result
from cosim.waveform import FloatArray, Waveform

SCRATCH = "{scratch}/"
DECK, STARTUP = "deck.cir", ".spiceinit"


def export_deck(
    result: GateResult | ReadoutResult | DecisionResult, folder: str | os.PathLike[str]
) -> tuple[Path, ...]:
    """Write the exact deck of a run, so that it can be repeated by hand.

    In the folder, `ngspice -b -r out.raw deck.cir` then gives the vectors of the run: ngspice
    reads the commands in `.spiceinit` (compatibility mode) from the working folder first. The
    seed becomes an option of the deck, since ngspice draws anew after these commands.

    Parameters
    ----------
    result : GateResult, ReadoutResult or DecisionResult
        A run that simulated a deck; of a readout it is the deck for |1>.
    folder : path
        Made if it does not exist; it must be empty.

    Returns
    -------
    tuple of Path
        The files written.

    Raises
    ------
    InputError
        If the result is of a study, has no deck, or keeps it only in part since files of it are
        confidential, or the folder is not empty or cannot be written.
    """
    readout = isinstance(result, ReadoutResult | DecisionResult)
    record = result.run if readout else gate_result(result).run
    if not record.deck_sent:
        raise InputError("the run imported a waveform: there is no deck to export")
    if record.withheld:
        raise InputError(
            "the run keeps its deck without the lines of confidential files: "
            + ", ".join(record.withheld),
            hint="run the testbench again where these files are, to the same SHA-256",
        )
    target = Path(folder)
    title, rest = record.deck_sent.replace(SCRATCH, "").split("\n", 1)
    modes = [line for line in record.deck_commands if not line.startswith("setseed")]
    texts = {
        DECK: f"{title}\n.options seed={record.seed}\n{rest}",
        STARTUP: "".join(f"{line}\n" for line in ("set num_threads=1", *modes)),
        **record.deck_data,
    }
    try:
        target.mkdir(parents=True, exist_ok=True)
        if any(target.iterdir()):
            raise InputError(f"the folder {target} is not empty", hint="name a new folder")
        for name, text in texts.items():
            (target / name).write_bytes(text.encode("latin-1" if name != DECK else "utf-8"))
    except OSError as error:
        raise InputError(f"the deck cannot be written to {target}: {error}") from None
    return tuple(target / name for name in texts)


def export_csv(
    result: GateResult | ReadoutResult | DecisionResult, path: str | os.PathLike[str]
) -> int:
    """Write the waveforms of a run as columns with units.

    Parameters
    ----------
    result : GateResult
        The run.
    path : path
        The file; columns are the time in s, the probe, and the further vectors on its grid.

    Returns
    -------
    int
        Rows written.

    Raises
    ------
    InputError
        If the run is of a readout, or the file cannot be written.
    """
    result = gate_result(result)
    columns: dict[str, FloatArray] = {"time (s)": result.waveform.t}
    for name, wave in {"probe": result.waveform, **result.extra}.items():
        columns[f"{name} ({wave.unit})"] = _on_grid(wave, result.waveform.t)
    return _write(columns, path)


def export_envelope(
    result: GateResult | ReadoutResult | DecisionResult, path: str | os.PathLike[str]
) -> int:
    """Write the demodulated envelope of a run as columns with units, or the records of a readout.

    Parameters
    ----------
    result : GateResult or ReadoutResult
        The run.
    path : path
        The file; columns are the time in s, I and Q as carrier peak amplitudes. Of a readout I and
        Q of the mean record for |0> and for |1>.

    Returns
    -------
    int
        Rows written.

    Raises
    ------
    InputError
        If the run is of a comparator, or the file cannot be written.
    """
    if isinstance(result, ReadoutResult):
        traces = result.traces
        states = {"0": traces.ground, "1": traces.excited}
        parts = {
            f"{name} of |{state}> (V)": np.asarray(part)
            for state, record in states.items()
            for name, part in (("I", record.real), ("Q", record.imag))
        }
        return _write({"time (s)": traces.time, **parts}, path)
    result = gate_result(result)
    envelope = result.envelope
    columns = {
        "time (s)": envelope.t,
        f"I ({envelope.unit})": np.asarray(envelope.iq.real),
        f"Q ({envelope.unit})": np.asarray(envelope.iq.imag),
    }
    return _write(columns, path)


def _on_grid(wave: Waveform, t: FloatArray) -> FloatArray:
    if wave.t.shape == t.shape and bool((wave.t == t).all()):
        return wave.v
    return np.asarray(np.interp(t, wave.t, wave.v))


def _write(columns: dict[str, FloatArray], path: str | os.PathLike[str]) -> int:
    table = np.column_stack(list(columns.values()))
    header = ",".join(f'"{name}"' if "," in name else name for name in columns)
    try:
        # Seventeen digits give every number back to the last bit.
        np.savetxt(path, table, fmt="%.17g", delimiter=",", header=header, comments="")
    except OSError as error:
        raise InputError(f"{os.fspath(path)} cannot be written: {error}") from None
    return int(table.shape[0])
