"""The declared result of a train, as it is shown, archived and read back."""

from dataclasses import dataclass, field, fields
from typing import Any

from cosim.dsp.settling import Settling
from cosim.result import as_plain
from cosim.waveform import Envelope, FloatArray

_NOT_IN_TABLE = {"table": False}


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class History:
    """All pulses of the train that follow one history.

    Parameters
    ----------
    slots : str
        What the slots before played, the latest one last.
    pulses : int
        How many pulses have it.
    infidelity : float
        Mean 1 - F_avg, calibrated.
    worst : float
        The largest of them.
    turn : tuple of 3 floats
        Mean coherent error about x, y, z in rad, against that of the first pulse.
    """

    slots: str
    pulses: int
    infidelity: float = field(metadata=_unit("1"))
    worst: float = field(metadata=_unit("1"))
    turn: tuple[float, float, float] = field(metadata=_unit("rad"))


@dataclass(frozen=True, slots=True)
class Tail:
    """What is left on the line behind a pulse, until the next one.

    Parameters
    ----------
    begin : float
        End of the pulse as it is played, in s.
    length : float
        Of the stretch without a pulse, from there on, in s.
    start, end : float
        Size of what is left where the fit begins, behind the edge, and at the
        end, over the pulse's peak.
    shift_start, shift_end : float
        The same as a shift of the qubit in Hz; NaN for a line that drives it.
    settling : Settling or None
        The fit; of real and imaginary part, over the pulse's peak, at `begin`. None where less
        than six samples are left.
    """

    begin: float = field(metadata=_unit("s"))
    length: float = field(metadata=_unit("s"))
    start: float = field(metadata=_unit("1"))
    end: float = field(metadata=_unit("1"))
    shift_start: float = field(metadata=_unit("Hz"))
    shift_end: float = field(metadata=_unit("Hz"))
    settling: Settling | None


@dataclass(frozen=True, slots=True)
class StepSettling:
    """How a step of the sources settles at the probe.

    Parameters
    ----------
    t : ndarray, shape (n,)
        From the step on, in s.
    error : ndarray, shape (n,)
        Departure from the ideal step, over its height.
    settled : float
        Time in s from which on it stays within a hundredth; NaN where it never does.
    settling : Settling
        Exponentials fitted to what is behind the edge.
    """

    t: FloatArray = field(metadata={"unit": "s", "axes": ("t",)})
    error: FloatArray = field(metadata={"unit": "1", "axes": ("t",)})
    settled: float = field(metadata=_unit("s"))
    settling: Settling


@dataclass(frozen=True, slots=True)
class TrainResponse:
    """One run of the whole train.

    Parameters
    ----------
    as_simulated : ndarray, shape (slots,)
        1 - F_avg of each slot, nothing adjusted.
    infidelity : ndarray, shape (slots,)
        The same in the frame and at the amplitude that the first pulse, after rest, is best in.
    leakage : ndarray, shape (slots,)
        L1.
    turn : ndarray, shape (slots, 3)
        Coherent error of each slot as a turn about x, y, z in rad before the ideal gate.
    amplitude_scale : float
        That of the first pulse, for all.
    detuning : float
        Carrier offset in Hz, likewise.
    late : float
        By how much the slots begin later than the testbench's window, in s.
    numerical_floor : float
        Largest 1 - F_avg between the channels of a slot and those at half the step; NaN without
        such a run.
    lag_costs : ndarray, shape (lags,)
        For lag 1, 2, ...: by what infidelity two slots with one pulse, and one history up to there,
        differ at most. NaN where the train has no such pair.
    memory_depth : int
        How many previous slots matter above the floor.
    memory_deeper : bool
        Whether the train resolves no end of it.
    memory_floor : float
        Infidelity by which the simulator's own errors make slots differ.
    spread : float
        Pattern dependence: largest less smallest infidelity among the slots with the first pulse.
    worst_slot : int
        Number of the slot with the largest infidelity, from 1.
    worst_history : str
        What the slots before it played.
    histories : tuple of History
        Of the pulses, by what the slots before played.
    settling : Settling or None
        Exponentials of what pulses leave to later ones, about x, y, z in rad, over slots.
    tail : Tail or None
        What is left on the line behind a pulse; None for a train without a slot at rest.
    sequence : float
        1 - F_avg of the whole train, one channel after the other, against all targets.
    product : float
        1 less the product of the slots' fidelities.
    memoryless : float
        1 - F_avg of a train of which each pulse is like the first, and each rest at rest.
    envelope : Envelope
        I + jQ at the probe, less what it is at rest.
    ideal : Envelope
        What it is held against: the first pulse in each slot, or the ideal of a pre-distortion.
    residual : float
        Root mean square of the difference of the two over that of the ideal one.
    """

    as_simulated: FloatArray = field(metadata={"unit": "1", "axes": ("slot",)})
    infidelity: FloatArray = field(metadata={"unit": "1", "axes": ("slot",)})
    leakage: FloatArray = field(metadata={"unit": "1", "axes": ("slot",)})
    turn: FloatArray = field(metadata={"unit": "rad", "axes": ("slot", "axis")})
    amplitude_scale: float = field(metadata=_unit("1"))
    detuning: float = field(metadata=_unit("Hz"))
    late: float = field(metadata=_unit("s"))
    numerical_floor: float = field(metadata=_unit("1"))
    lag_costs: FloatArray = field(metadata={"unit": "1", "axes": ("lag",)})
    memory_depth: int
    memory_deeper: bool
    memory_floor: float = field(metadata=_unit("1"))
    spread: float = field(metadata=_unit("1"))
    worst_slot: int
    worst_history: str
    histories: tuple[History, ...]
    settling: Settling | None
    tail: Tail | None
    sequence: float = field(metadata=_unit("1"))
    product: float = field(metadata=_unit("1"))
    memoryless: float = field(metadata=_unit("1"))
    envelope: Envelope = field(metadata=_NOT_IN_TABLE)
    ideal: Envelope = field(metadata=_NOT_IN_TABLE)
    residual: float = field(metadata=_unit("1"))


@dataclass(frozen=True, slots=True)
class Predistortion:
    """A filter before the converter, and what the netlist makes of it.

    Parameters
    ----------
    taps : ndarray, shape (k,)
        Weights of the sample itself and of those before it.
    rate : float
        Samples per second in Hz.
    delay : float
        Of the ideal response behind the stimulus, in s.
    line_delay : float
        That at which the unfiltered response is closest to its ideal one, in s.
    regularisation : float
        Over the largest singular value: as asked for, or more where the peak demands it.
    regularisation_asked : float
        As asked for.
    condition : float
        Largest over smallest singular value.
    rank : int
        Directions, of as many as there are taps, that the regularisation leaves free.
    level : float
        Part of the pulse at which the response was measured.
    predicted : float
        Residual that the design expects of one pulse.
    peak_before, peak_after : float
        Largest departure from rest of the samples of the train, over that of the pulse.
    full_scale_used : float
        Largest value of the samples over the converter's full scale.
    headroom : float
        Amplitude that the filter costs: 20 log10 of the ratio of the peaks, in dB.
    worst_peak : float
        Sum of the absolute taps: the peak of the worst train, over that of the pulse.
    nonlinear_before, nonlinear_after : float
        Root mean square of what superposition of the response at `level` does not explain, without
        and with the filter, over that of the ideal train: no linear filter reaches it.
    after : TrainResponse
        The train again, with the filter.
    """

    taps: FloatArray = field(metadata={"unit": "1", "axes": ("tap",)})
    rate: float = field(metadata=_unit("Hz"))
    delay: float = field(metadata=_unit("s"))
    line_delay: float = field(metadata=_unit("s"))
    regularisation: float = field(metadata=_unit("1"))
    regularisation_asked: float = field(metadata=_unit("1"))
    condition: float = field(metadata=_unit("1"))
    rank: int
    level: float = field(metadata=_unit("1"))
    predicted: float = field(metadata=_unit("1"))
    peak_before: float = field(metadata=_unit("1"))
    peak_after: float = field(metadata=_unit("1"))
    full_scale_used: float = field(metadata=_unit("1"))
    headroom: float = field(metadata=_unit("dB"))
    worst_peak: float = field(metadata=_unit("1"))
    nonlinear_before: float = field(metadata=_unit("1"))
    nonlinear_after: float = field(metadata=_unit("1"))
    after: TrainResponse


@dataclass(frozen=True, slots=True)
class TrainResult:
    """A train of pulses through a netlist.

    Parameters
    ----------
    title : str
        Title of the testbench.
    target : str
        What a pulse of factor 1 is meant to do.
    kind : str
        "drive", or "shift" of a line that shifts the qubit's frequency.
    factors : ndarray, shape (slots,)
        Of the pulse in each slot.
    spacing, begin : float
        Length of a slot, and where the first one begins, in s.
    before : TrainResponse
        The train as it stands; with a pre-distortion through its converter, without its filter.
    predistortion : Predistortion or None
        Where one is asked for.
    step_before, step_after : StepSettling or None
        Where a step is asked for; the second with the filter.
    netlist_runs : int
        Runs of the circuit.
    step : float
        Time step in s.
    warnings : tuple of str
        What the reader must know.
    started : str
        Start as ISO 8601 with UTC offset.
    wall_time : float
        In s.
    testbench : str
        The testbench as TOML.
    """

    title: str
    target: str
    kind: str
    factors: FloatArray = field(metadata={"unit": "1", "axes": ("slot",)})
    spacing: float = field(metadata=_unit("s"))
    begin: float = field(metadata=_unit("s"))
    before: TrainResponse
    predistortion: Predistortion | None
    step_before: StepSettling | None
    step_after: StepSettling | None
    netlist_runs: int
    step: float = field(metadata=_unit("s"))
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata=_unit("s"))
    testbench: str = field(metadata=_NOT_IN_TABLE)


# Classes by the tag that the archive keeps.
TRAIN_KINDS: dict[str, type] = {
    cls.__name__: cls
    for cls in (
        TrainResult,
        TrainResponse,
        Predistortion,
        StepSettling,
        Tail,
        History,
        Settling,
        Envelope,
    )
}


def train_numbers(result: TrainResult) -> dict[str, Any]:
    """Turn a train's result into plain numbers for machines.

    Parameters
    ----------
    result : TrainResult
        What came out.

    Returns
    -------
    dict
        Its fields by name but envelopes and the testbench; a number that does not exist is None.
    """
    names = (item.name for item in fields(result) if item.metadata.get("table", True))
    return {name: as_plain(getattr(result, name)) for name in names}
