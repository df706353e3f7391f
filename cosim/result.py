"""The declared results of a run, as they are shown, archived and read back."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, is_dataclass
from typing import Any

import numpy as np

from cosim.circuit.netlist import DeckFile
from cosim.dsp.pulse import PulseMeasures
from cosim.errors import InputError
from cosim.quantum.fidelity import Rotation
from cosim.side_results import IdleEffect, NoiseEffect, NoiseSource, NoiseSpectrum, SpectatorEffect
from cosim.waveform import ComplexArray, Envelope, FloatArray, Waveform

# What `cosim.circuit.confidential` writes in place of lines, and of a data file.
_LEFT_OUT = re.compile(
    r"^\* (?:\d+ lines of )?(.+) \(SHA-256 [0-9a-f]{64}\) (?:are|is) left out here$", re.MULTILINE
)

# What varies little from run to run has no column of its own in an archive's table.
_NOT_IN_TABLE = {"table": False}

_PAULI = ("I", "X", "Y", "Z")


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class Fidelity:
    """One of the three fidelities of a gate, with what was adjusted for it.

    Parameters
    ----------
    average_gate_fidelity : float
        F_avg = (d F_pro + 1 - L1)/(d + 1).
    process_fidelity : float
        F_pro = Tr(S_U^dag S_E)/d^2 over the computational subspace.
    error_bar : float
        Bound on the error of `average_gate_fidelity` from the circuit simulator's step and
        tolerances; NaN when the floor run was left out.
    process_error_bar : float
        The same for `process_fidelity`.
    z_before, z_after : float
        Angles in rad of the virtual Z before and after the gate; 0 where nothing is adjusted.
    amplitude_scale : float
        Factor on the drive; 1 where nothing is adjusted.
    detuning : float
        Offset added to the carrier in Hz; 0 where nothing is adjusted.
    """

    average_gate_fidelity: float = field(metadata=_unit("1"))
    process_fidelity: float = field(metadata=_unit("1"))
    error_bar: float = field(default=float("nan"), metadata=_unit("1"))
    process_error_bar: float = field(default=float("nan"), metadata=_unit("1"))
    z_before: float = field(default=0.0, metadata=_unit("rad"))
    z_after: float = field(default=0.0, metadata=_unit("rad"))
    amplitude_scale: float = field(default=1.0, metadata=_unit("1"))
    detuning: float = field(default=0.0, metadata=_unit("Hz"))

    @property
    def infidelity(self) -> float:
        """1 - F_avg."""
        return 1.0 - self.average_gate_fidelity


@dataclass(frozen=True, slots=True)
class Channel:
    """The simulated channel in the qubit's own frame.

    Parameters
    ----------
    superoperator : ndarray of complex, shape (levels^2, levels^2)
        Column-stacking convention.
    pauli_transfer_matrix : ndarray, shape (4, 4)
        R_ij = Tr(P_i E(P_j))/2 on the computational subspace.
    """

    superoperator: ComplexArray = field(
        metadata={"unit": "1", "axes": ("operator_out", "operator_in")}
    )
    pauli_transfer_matrix: FloatArray = field(
        metadata={
            "unit": "1",
            "axes": ("pauli_out", "pauli_in"),
            "labels": {"pauli_out": _PAULI, "pauli_in": _PAULI},
        }
    )


@dataclass(frozen=True, slots=True)
class RunRecord:
    """What is needed to check a run in two years.

    Parameters
    ----------
    started : str
        Start as ISO 8601 with UTC offset.
    host : str
        Name of the machine and its operating system.
    versions : dict of str
        Package or program to version.
    seed : int
        Seed of the deck's random functions.
    wall_times : dict of float
        Stage to wall-clock time in s.
    testbench : str
        The testbench as TOML, complete.
    deck_files : tuple of DeckFile
        Every file of the deck as its author wrote it; without its text where it is confidential.
    deck_sent : str
        The deck exactly as it was sent to the simulator; comments stand in place of the lines of
        confidential files.
    deck_data : dict of str
        Name to content of the data files that the deck reads, where it says "{scratch}/".
    deck_commands : tuple of str
        Commands given to ngspice before the deck was loaded.
    log : tuple of str
        The simulator's log.
    points : int
        Time points of the transient.
    step : float
        Time step in s.
    steps_per_period : float
        Carrier period over step.
    """

    started: str
    host: str
    versions: dict[str, str]
    seed: int
    wall_times: dict[str, float] = field(metadata=_unit("s"))
    testbench: str
    deck_files: tuple[DeckFile, ...]
    deck_sent: str
    deck_data: dict[str, str]
    deck_commands: tuple[str, ...]
    log: tuple[str, ...]
    points: int = field(metadata=_unit("1"))
    step: float = field(metadata=_unit("s"))
    steps_per_period: float = field(metadata=_unit("1"))

    @property
    def withheld(self) -> tuple[str, ...]:
        """Paths of the confidential files that are left out of the deck as sent."""
        kept = "\n".join((self.deck_sent, *self.deck_data.values()))
        return tuple(dict.fromkeys(_LEFT_OUT.findall(kept)))


@dataclass(frozen=True, slots=True)
class GateResult:
    """A gate as the netlist plays it.

    Parameters
    ----------
    title : str
        Title of the testbench.
    target : str
        The target rotation in words.
    as_simulated, free_frame, calibrated : Fidelity
        Nothing adjusted; best over virtual Z before and after; also over one amplitude scale
        (and one carrier offset if the testbench lists it).
    leakage : float
        L1, population that leaves the computational subspace, averaged over its states.
    seepage : float
        L2, population that comes back from the other levels; 0 for two levels.
    numerical_floor : float
        1 - F_avg between the channel and that of a second run at half the step and tighter
        tolerances, or, for an imported waveform, of every second of its samples; NaN when that
        was left out, or the waveform has under 40 samples per carrier period.
    rotating_wave_error : float
        1 - F_avg between the headline channel and that of the rotating-wave path, which is
        solved by an independent solver on the demodulated envelope.
    reference_error : float
        1 - F_avg between the channel and that of QuTiP on the full waveform; NaN unless the
        testbench asks for it.
    phase_slip : float
        What the free frame hides, in rad per gate, in [-pi, pi]: the sum of its two angles, as
        far as it matters, less the angle 2 pi (f_qubit - f_carrier) T by which the qubit runs
        ahead of the carrier over the window. A gate played again and again with a carrier that
        runs on needs a virtual Z of this angle each time.
    rotation : Rotation
        Axis and angle of the unitary nearest to the channel; the axis on the target's side where
        that brings the angle nearer to the target's, which may then exceed a half turn.
    unitarity : float
        1 for a unitary channel.
    carrier_frequency : float
        In Hz, given or estimated.
    qubit_frequency : float
        In Hz.
    window : tuple of two floats
        Start and end of the gate in s.
    pulse : PulseMeasures
        The pulse at the probe.
    waveform : Waveform
        At the probe, on the simulator's own grid.
    envelope : Envelope
        I + jQ at the probe.
    channel : Channel
        As simulated.
    extra : dict of Waveform
        Further vectors that the testbench asked to keep.
    warnings : tuple of str
        What the reader must know before using the numbers.
    run : RunRecord
        Deck, testbench, versions, times, log.
    noise : NoiseEffect or None
        What the noise of the testbench does; it is part of the three fidelities, the leakage and
        the channel. None without [[noise]].
    spectators : tuple of SpectatorEffect
        The other qubits of the line.
    register_infidelity : float
        Sum of the free-frame infidelities of the qubit and of the others; NaN without others.
    idle : IdleEffect or None
        A stretch without a pulse, where the testbench names one.
    """

    title: str
    target: str
    as_simulated: Fidelity
    free_frame: Fidelity
    calibrated: Fidelity
    leakage: float = field(metadata=_unit("1"))
    seepage: float = field(metadata=_unit("1"))
    numerical_floor: float = field(metadata=_unit("1"))
    rotating_wave_error: float = field(metadata=_unit("1"))
    reference_error: float = field(metadata=_unit("1"))
    phase_slip: float = field(metadata=_unit("rad"))
    rotation: Rotation
    unitarity: float = field(metadata=_unit("1"))
    carrier_frequency: float = field(metadata=_unit("Hz"))
    qubit_frequency: float = field(metadata=_unit("Hz"))
    window: tuple[float, float] = field(metadata=_unit("s"))
    pulse: PulseMeasures
    waveform: Waveform = field(metadata=_NOT_IN_TABLE)
    envelope: Envelope = field(metadata=_NOT_IN_TABLE)
    channel: Channel
    extra: dict[str, Waveform] = field(metadata=_NOT_IN_TABLE)
    warnings: tuple[str, ...]
    run: RunRecord = field(metadata=_NOT_IN_TABLE)
    noise: NoiseEffect | None = None
    spectators: tuple[SpectatorEffect, ...] = ()
    register_infidelity: float = field(default=math.nan, metadata=_unit("1"))
    idle: IdleEffect | None = None


# Classes by the tag that the archive keeps.
KINDS: dict[str, type] = {
    cls.__name__: cls
    for cls in (
        GateResult,
        Fidelity,
        Rotation,
        Channel,
        RunRecord,
        PulseMeasures,
        Waveform,
        Envelope,
        DeckFile,
        NoiseEffect,
        NoiseSource,
        NoiseSpectrum,
        SpectatorEffect,
        IdleEffect,
    )
}

# What `--json` prints of a gate, in this order.
GATE_FIELDS = (
    "as_simulated",
    "free_frame",
    "calibrated",
    "leakage",
    "seepage",
    "numerical_floor",
    "rotating_wave_error",
    "phase_slip",
    "rotation",
    "unitarity",
    "carrier_frequency",
    "warnings",
)


def gate_result(result: object) -> GateResult:
    """Insist on the result of a gate.

    Parameters
    ----------
    result : object
        A result of any kind.

    Returns
    -------
    GateResult
        The same.

    Raises
    ------
    InputError
        If it is of another kind.
    """
    if not isinstance(result, GateResult):
        title = getattr(result, "title", "")
        named = f" ({title!r})" * bool(title)
        raise InputError(
            f"this takes the result of a gate, got a {type(result).__name__}{named}",
            hint="of an archive with several runs say which one: --run",
        )
    return result


def as_numbers(result: object) -> dict[str, Any]:
    """Turn a gate result into plain numbers for machines.

    Parameters
    ----------
    result : GateResult
        The result of a run.

    Returns
    -------
    dict
        The fields of `GATE_FIELDS`, and those that the testbench asks for: `reference_error`,
        `noise`, `spectators` and `register_infidelity`, `idle`; a number that does not exist is
        None.

    Raises
    ------
    InputError
        If the result is of another kind.
    """
    result = gate_result(result)
    asked = ["reference_error"] * (not math.isnan(result.reference_error))
    asked += ["noise"] * (result.noise is not None)
    asked += ["spectators", "register_infidelity"] * bool(result.spectators)
    asked += ["idle"] * (result.idle is not None)
    return {name: as_plain(getattr(result, name)) for name in (*GATE_FIELDS, *asked)}


def as_columns(table: Mapping[str, Any]) -> dict[str, list[Any]]:
    """Turn the table of an archive into plain lists for machines.

    Parameters
    ----------
    table : mapping of ndarray, each of shape (runs,)
        From `cosim.archive.read_table`.

    Returns
    -------
    dict of list
        The same columns; a number that does not exist is None.
    """
    return {name: as_plain(tuple(column.tolist())) for name, column in table.items()}


def as_plain(value: Any) -> Any:
    """Turn a declared dataclass into what JSON can hold.

    Parameters
    ----------
    value : object
        Dataclasses, tuples, lists and arrays of plain numbers and texts.

    Returns
    -------
    object
        Dictionaries and lists; a number that does not exist or is infinite is None, and what is
        no part of a table of runs is left out.
    """
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, np.ndarray):
        return as_plain(value.tolist())
    if isinstance(value, (tuple, list)):
        return [as_plain(item) for item in value]
    if is_dataclass(value):
        return {
            item.name: as_plain(getattr(value, item.name))
            for item in fields(value)
            if item.metadata.get("table", True)
        }
    return value
