"""Waveforms that were simulated or measured elsewhere, taken into the same path."""

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

import numpy as np

from cosim.capture import Capture, check_window
from cosim.circuit.netlist import DeckFile
from cosim.circuit.probe import Probe, parse_probe
from cosim.dsp.upconversion import upconvert
from cosim.errors import TestbenchError, WaveformError, near_names
from cosim.formats.columns import column_names, read_columns
from cosim.formats.rawfile import read_raw
from cosim.schema import WaveformTable
from cosim.testbench import Testbench
from cosim.waveform import Waveform

# Samples per carrier period that every second sample must still have to tell the error.
LEAST_HALVED = 20


def import_waveform(bench: Testbench) -> Capture:
    """Read the waveform that a testbench names; its own time grid is kept.

    Parameters
    ----------
    bench : Testbench
        With a table [waveform]. The probe is a combination of columns or vectors of the file.

    Returns
    -------
    Capture
        Without a run of the simulator.

    Raises
    ------
    TestbenchError
        If there is no such table, or the window does not lie within the waveform.
    WaveformError, InputError
        If the file cannot be read or a column does not exist.
    """
    table = bench.waveform
    if table is None:
        raise TestbenchError(f"{bench.source or 'the testbench'} has no table [waveform]")
    path = Path(bench.folder) / Path(table.file).expanduser()
    drive = bench.drive
    probes = [parse_probe(text) for text in (drive.probe, drive.i, drive.q) if text is not None]
    columns = _read(table, path, probes)
    waves = [_combine(probe, columns, path) for probe in probes]
    wave, extra = waves[0], dict[str, Waveform]()
    step = float(np.median(np.diff(wave.t)))
    if drive.probe is None:
        assert isinstance(drive.carrier, float)  # DriveTable refuses anything else.
        extra = dict(zip(("i", "q"), waves, strict=False))
        wave = upconvert(wave, waves[1] if len(waves) > 1 else None, drive.carrier)
    check_window(bench, float(wave.t[-1]), float(wave.t[0]))
    sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
    return Capture(wave, extra, step, (DeckFile(str(path), "", sha256),), (), None)


def every_second(wave: Waveform, carrier_frequency: float) -> Waveform | None:
    """Give a waveform by every second of its samples, to tell what lies between them.

    The curve through half of the samples errs sixteen times as much where the samples resolve
    the signal, so the change it makes bounds the error of the curve through all of them.

    Parameters
    ----------
    wave : Waveform
        Shape (n,).
    carrier_frequency : float
        In Hz.

    Returns
    -------
    Waveform or None
        The first, third, ... and the last sample; None when fewer than 20 would be left of each
        carrier period.
    """
    keep = np.arange(0, wave.t.size, 2)
    if keep[-1] != wave.t.size - 1:
        keep[-1] = wave.t.size - 1
    t = wave.t[keep]
    if 1.0 / (carrier_frequency * float(np.median(np.diff(t)))) < LEAST_HALVED * (1 - 1e-9):
        return None
    return Waveform(t, wave.v[keep], wave.unit)


def _read(table: WaveformTable, path: Path, probes: Sequence[Probe]) -> dict[str, Waveform]:
    if path.suffix.lower() != ".raw":
        # Only what the probes name is read: other columns may hold text or decibels.
        names = column_names(path)
        wanted = dict.fromkeys(
            _found(probe, term, names, path) for probe in probes for _, term in probe.terms
        )
        return read_columns(
            path,
            time=table.time,
            values=tuple(wanted),
            time_unit=table.time_unit,
            unit=table.unit,
        )
    for key in ("time", "time_unit", "unit"):
        if getattr(table, key) is not None:
            raise TestbenchError(f"table [waveform], key '{key}': a raw file says that itself")
    plot = read_raw(path, plot=table.plot)
    if plot.axis != "time":
        raise WaveformError(f"{path}: the plot '{plot.name}' is over {plot.axis}, wanted time")
    time = plot.vectors[plot.axis]
    return {
        name: Waveform(time, values, unit=plot.units[name])
        for name, values in plot.vectors.items()
        if name != plot.axis and plot.units[name] in ("V", "A")
    }


def _combine(probe: Probe, columns: Mapping[str, Waveform], path: Path) -> Waveform:
    """Add up columns by the weights of a probe; "ch1" and "v(ch1)" name the same column."""
    parts = [(weight, columns[_found(probe, term, columns, path)]) for weight, term in probe.terms]
    first = parts[0][1]
    if len({wave.unit for _, wave in parts}) > 1:
        raise TestbenchError(f"table [drive], probe '{probe.text}' mixes volts and amperes")
    total = np.sum([weight * wave.v for weight, wave in parts], axis=0)
    return Waveform(first.t, np.asarray(total), unit=first.unit)


def _found(probe: Probe, term: str, names: Iterable[str], path: Path) -> str:
    """Give the column that a term of a probe names."""
    inner = term[term.find("(") + 1 : -1]
    lower = {name.lower(): name for name in names}
    for key in (term, inner, f"{inner}#branch"):
        if key in lower:
            return lower[key]
    raise TestbenchError(
        f"table [drive], probe '{probe.text}': {path} has no column '{inner}'; "
        f"{near_names(inner, lower)}"
    )
