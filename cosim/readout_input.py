"""What a readout sends into the netlist: the answers of a resonator, or the states of a sensor."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from cosim.circuit.netlist import DeckFile
from cosim.errors import TestbenchError
from cosim.outgoing import OutputLine
from cosim.quantum.incident import IncidentField
from cosim.quantum.resonator import Resonator
from cosim.quantum.resonator_field import Field, evolve_field, fields_with_jump
from cosim.readout_line import emf_at_source, way_out
from cosim.readout_pulse import PlayedPulse, incident_field
from cosim.readout_schema import MOST_PHOTONS, ReadoutTable, ResonatorTable
from cosim.waveform import ComplexArray, FloatArray, Waveform

# Part of the answer with which the chain's response to small signals is found.
SMALL = 0.05
GROUND, EXCITED, SECOND, REST = "0", "1", "2", "rest"


@dataclass(frozen=True, slots=True)
class Answers:
    """What the netlist is asked, run by run, as the EMF of its source.

    Parameters
    ----------
    drive : IncidentField
        The field towards the resonator, from the deck's t = 0 on.
    fields : dict of Field
        Run -> field in and behind the resonator, each of shape (n,).
    emf : dict of ndarray of complex, each of shape (n,)
        Run -> I + jQ of the EMF in V on the grid of `drive`: "0", "1", "2", "decay 1" and so on,
        "excitation 1" and so on, and "rest" without any.
    decay_times, excitation_times : ndarray, shape (k,)
        Times in s at which |1> decays and |0> is excited in these runs.
    line : OutputLine
        From the resonator to the deck, as it is at the drive's frequency.
    files : tuple of DeckFile
        That were read for them, besides the deck.
    notices : tuple of str
        What the reader must know.
    """

    drive: IncidentField
    fields: dict[str, Field]
    emf: dict[str, ComplexArray]
    decay_times: FloatArray = field(metadata={"unit": "s"})
    excitation_times: FloatArray = field(metadata={"unit": "s"})
    line: OutputLine
    files: tuple[DeckFile, ...] = ()
    notices: tuple[str, ...] = ()


def make_answers(
    pulse: ResonatorTable,
    table: ReadoutTable,
    stop: float,
    *,
    played: PlayedPulse | None = None,
    folder: str = ".",
) -> Answers:
    """Work out what leaves the resonator for every run of the netlist.

    Parameters
    ----------
    pulse : ResonatorTable
        The resonator and its drive.
    table : ReadoutTable
        What is asked of the readout.
    stop : float
        End of the run in s.
    played : PlayedPulse or None
        A pulse of another netlist or a file; None: that of the table.
    folder : str
        That files of [readout] are relative to.

    Returns
    -------
    Answers

    Raises
    ------
    TestbenchError
        If the pulse does not end within the run, or the window lies outside of it.
    WaveformError, InputError
        If a file of [readout] cannot be used.
    """
    resonator = pulse.resonator()
    if pulse.stop > stop:
        raise TestbenchError(
            f"table [resonator]: the pulse ends at {1e9 * pulse.stop:g} ns, behind the run's end "
            f"at {1e9 * stop:g} ns",
            hint="shorten the pulse, or say a later 'stop' in [netlist]",
        )
    check_readout_window(table, pulse.start, stop)
    way = way_out(table, pulse.drive, folder)
    drive = incident_field(pulse, resonator, stop) if played is None else played.drive
    fields = {name: evolve_field(resonator, drive, level) for name, level in _levels(pulse)}
    _check_photons(fields)
    first = pulse.start
    decays = inner_times(first, table.window[1], table.decay_times if _decays(table) else 0)
    rises = inner_times(
        first, table.window[1], max(2, table.decay_times // 2) if _excites(table) else 0
    )
    fields |= _jumps(resonator, drive, decays, "decay", 1, 0)
    fields |= _jumps(resonator, drive, rises, "excitation", 0, 1)
    emf = {
        name: emf_at_source(one.outside, drive.step, pulse.drive, way)
        for name, one in fields.items()
    }
    emf[REST] = np.zeros(drive.samples.size, dtype=np.complex128)
    window = table.window[1] - table.window[0]
    notices = way.notices(max(resonator.kappa / (2.0 * math.pi), 1.0 / window))
    files = way.files
    if played is not None:
        files, notices = (*played.files, *files), (*played.notices, *notices)
    return Answers(drive, fields, emf, decays, rises, way.line, files, notices)


def source_waveforms(
    emf: ComplexArray, answers: Answers, table: ReadoutTable, step: float, stop: float
) -> dict[str, Waveform]:
    """Give what the deck's sources play in one run.

    Parameters
    ----------
    emf : ndarray of complex, shape (n,)
        One of the runs of `answers`.
    answers : Answers
        With the grid.
    table : ReadoutTable
        At which frequency the answer enters.
    step : float
        Time step of the simulator in s.
    stop : float
        End of the run in s.

    Returns
    -------
    dict of Waveform
        By source, in V.
    """
    assert table.source is not None  # A testbench with a resonator insists on it.
    grid = answers.drive.t
    if table.source_q is not None:
        return {
            table.source: Waveform(grid, emf.real.copy(), unit="V"),
            table.source_q: Waveform(grid, emf.imag.copy(), unit="V"),
        }
    t = np.asarray(step * np.arange(math.ceil(stop / step) + 2), dtype=np.float64)
    turning = np.interp(t, grid, emf.real) + 1j * np.interp(t, grid, emf.imag)
    # Straight lines between the samples of a carrier are weaker by this factor.
    turn = 2.0 * math.pi * (table.intermediate_frequency or answers.drive.frequency)
    weaker = float(np.sinc(turn * step / (2.0 * math.pi)) ** 2)
    wave = (turning * np.exp(1j * turn * t)).real / weaker
    return {table.source: Waveform(t, wave, unit="V")}


def input_frequency_of(pulse: ResonatorTable, table: ReadoutTable) -> float:
    """Give the frequency at which the answer enters.

    Parameters
    ----------
    pulse : ResonatorTable
        With the drive's frequency.
    table : ReadoutTable
        With the way in.

    Returns
    -------
    float
        In Hz; 0 for a baseband pair.
    """
    if table.signal == "baseband":
        return 0.0
    return table.intermediate_frequency or pulse.drive


def answer_emf(answers: Answers, name: str) -> ComplexArray:
    """Give the EMF of a run by its name.

    Parameters
    ----------
    answers : Answers
        From `make_answers`.
    name : str
        One of its runs, or "small" and one of them.

    Returns
    -------
    ndarray of complex, shape (n,)
        I + jQ in V.
    """
    whole = name.removeprefix("small ")
    return SMALL * answers.emf[whole] if whole != name else answers.emf[name]


def check_readout_window(table: ReadoutTable, begin: float, stop: float) -> None:
    """Refuse a window of integration that does not lie within the run, or is over too early.

    Parameters
    ----------
    table : ReadoutTable
        The table [readout].
    begin : float
        Time in s from which on the state counts.
    stop : float
        End of the run in s.

    Raises
    ------
    TestbenchError
        Naming both.
    """
    first, last = table.window
    if first < 0.0 or last > stop * (1.0 + 1e-9):
        raise TestbenchError(
            f"table [readout], key 'window': {1e9 * first:g} ns to {1e9 * last:g} ns does not lie "
            f"within the run of 0 ns to {1e9 * stop:g} ns"
        )
    if last <= begin:
        raise TestbenchError(
            f"table [readout], key 'window': {1e9 * first:g} ns to {1e9 * last:g} ns is over "
            f"before the state counts, from 'start' at {1e9 * begin:g} ns on",
            hint="a later window, or an earlier 'start' in [resonator] or [sensor]",
        )


def inner_times(first: float, last: float, count: int) -> FloatArray:
    """Spread times of jumps over a stretch; at its ends the runs without a jump stand.

    Parameters
    ----------
    first, last : float
        Ends of the stretch in s.
    count : int
        How many.

    Returns
    -------
    ndarray, shape (count,)
        In s, the middles of equal parts.
    """
    return np.asarray(first + (last - first) * (np.arange(count) + 0.5) / max(count, 1))


def _check_photons(fields: Mapping[str, Field]) -> None:
    """Refuse a drive that no line attenuates: more photons than 'photons' may make."""
    most = max(float(one.photons.max()) for one in fields.values())
    # Off resonance a field rings up to twice, its photons to four times, what it settles at.
    limit = 4.0 * MOST_PHOTONS
    if most > limit:
        raise TestbenchError(
            f"table [resonator]: the drive puts {most:.3g} photons into the resonator, wanted at "
            f"most {limit:.0e}",
            hint="'power' is that at the resonator, and a 'pulse' has its line's 'attenuation' in "
            "the [drive] of its own testbench",
        )


def _levels(pulse: ResonatorTable) -> list[tuple[str, int]]:
    levels = [(GROUND, 0), (EXCITED, 1)]
    return levels if pulse.chi_2 is None else [*levels, (SECOND, 2)]


def _decays(table: ReadoutTable) -> bool:
    return math.isfinite(table.t1)


def _excites(table: ReadoutTable) -> bool:
    return _decays(table) and table.thermal_population > 0.0


def _jumps(
    resonator: Resonator,
    drive: IncidentField,
    times: FloatArray,
    name: str,
    before: int,
    after: int,
) -> Mapping[str, Field]:
    if not times.size:
        return {}
    found = fields_with_jump(resonator, drive, times, before, after)
    return {
        f"{name} {number}": Field(found.step, found.frequency, inside, outside)
        for number, (inside, outside) in enumerate(
            zip(found.inside, found.outside, strict=True), start=1
        )
    }
