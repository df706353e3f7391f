"""The declared results of a readout, as they are shown, archived and read back."""

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from cosim.dsp.detection.assignment import AssignmentSplit, ErrorItems, IntegrationScan
from cosim.dsp.detection.projection import Projection
from cosim.dsp.detection.shots import ShotCounts
from cosim.result import RunRecord, as_plain
from cosim.waveform import ComplexArray, FloatArray

_NOT_IN_TABLE = {"table": False}


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


def _no_points() -> ComplexArray:
    return np.zeros(0, dtype=np.complex128)


def _not_known() -> FloatArray:
    return np.zeros(0)


@dataclass(frozen=True, slots=True)
class ReadoutNoise:
    """The noise at the outputs.

    Parameters
    ----------
    frequencies : ndarray, shape (n,)
        Offsets from the carrier in Hz.
    density : ndarray, shape (n,)
        Two-sided in V^2/Hz.
    relative_error : float
        Standard error of the density near the carrier over itself.
    devices : dict of str to float
        Device in ngspice's name -> its part near the carrier, the greatest first; "arriving" for
        what comes with the signal. Empty where it is not told.
    reason : str
        Why this method, where the testbench left it open.
    left_out : tuple of str
        What makes noise in the deck and is not in it.
    """

    frequencies: FloatArray = field(metadata={"unit": "Hz", "axes": ("frequencies",)})
    density: FloatArray = field(metadata={"unit": "V**2/Hz", "axes": ("frequencies",)})
    relative_error: float = field(metadata=_unit("1"))
    devices: dict[str, float] = field(metadata={**_unit("1"), **_NOT_IN_TABLE})
    reason: str = ""
    left_out: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ReadoutTraces:
    """What figures need: fields, records and points.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Of the records in s, from t = 0 of the deck.
    ground, excited : ndarray of complex, shape (n,)
        Records of |0> and |1> in V.
    field_time : ndarray, shape (m,)
        In s.
    photons_ground, photons_excited : ndarray, shape (m,)
        In the resonator; empty for a sensor.
    points_ground, points_excited : ndarray of complex, shape (k,)
        Some integrated shots in V.
    points_second : ndarray of complex, shape (k,)
        The same of |2>; empty where it is not known what |2> does.
    """

    time: FloatArray = field(metadata={"unit": "s", "axes": ("time",)})
    ground: ComplexArray = field(metadata={"unit": "V", "axes": ("time",)})
    excited: ComplexArray = field(metadata={"unit": "V", "axes": ("time",)})
    field_time: FloatArray = field(metadata={"unit": "s", "axes": ("field_time",)})
    photons_ground: FloatArray = field(metadata={"unit": "1", "axes": ("field_time",)})
    photons_excited: FloatArray = field(metadata={"unit": "1", "axes": ("field_time",)})
    points_ground: ComplexArray = field(metadata={"unit": "V", "axes": ("shot",)})
    points_excited: ComplexArray = field(metadata={"unit": "V", "axes": ("shot",)})
    points_second: ComplexArray = field(
        default_factory=_no_points, metadata={"unit": "V", "axes": ("second_shot",)}
    )


@dataclass(frozen=True, slots=True)
class ReadoutResult:
    """A readout as the netlist makes it.

    Parameters
    ----------
    title : str
        Title of the testbench.
    assignment_error : float
        (P(1|0) + P(0|1))/2.
    assignment_matrix : ndarray, shape (2, 2)
        P(i|j): decision i, state j prepared.
    snr : float
        Distance of the means over the mean of the two standard deviations.
    errors : ErrorItems
        What the error is made of.
    integration_time : float
        Length of the window in s.
    best_integration_time, best_assignment_error : float
        The length with the least error, not longer than the window, and that error.
    added_noise_quanta : float
        What amplifiers, lines and netlist add, in quanta at the resonator's output; NaN for a
        sensor or a single output in baseband.
    noise_temperature : float
        Of the netlist at its source in K; NaN as above.
    noise_method : str
        "injection", "stationary" or "arriving only".
    residual_photons : float
        In the resonator at the end of the run, the greater of the two states.
    wait : float
        Time in s after the run until a hundredth of a photon is left; 0 where it is already.
    latency : float
        From the end of the window to the decision in s: the conversion of the last sample, and
        the cycles behind it; 0 without a converter.
    repeat_agreement : float
        Probability that a second readout, at once, decides as the first did, the mean over both
        states; NaN where the state is converted to be seen.
    dephasing_rate : float
        By which the drive measures in steady state, in 1/s.
    shots : ShotCounts
        Integrated shots.
    records : ShotCounts
        Whole records in time, with coloured noise and converter.
    numerical_floor : float
        Change of the assignment error in a second run at half the step; NaN when left out.
    split : AssignmentSplit
        The decisions in closed form, with weights, axis and threshold.
    scan : IntegrationScan
        Signal over noise and error against the length of the integration.
    noise : ReadoutNoise
        At the outputs.
    traces : ReadoutTraces
        For figures.
    warnings : tuple of str
        What the reader must know before using the numbers.
    run : RunRecord
        Deck, testbench, versions, times, log.
    noise_temperature_error : float
        Standard error of `noise_temperature` in K, of the runs with the netlist's noise alone; 0
        where it is no matter of chance.
    efficiency : float
        Part of the information in the resonator's field that the chain leaves, 1/(1 + 2 n) of n
        added quanta; NaN as these.
    residual_stark_shift : float
        Of the qubit's frequency by `residual_photons` in Hz, 2 chi for each; NaN for a sensor.
    purcell_time : float
        In which the qubit decays through its resonator alone in s; NaN where the testbench gives
        no coupling.
    leaked : ndarray, shape (2,)
        P(0|2) and P(1|2) of a qubit that has leaked to |2> and stays there; empty where the
        testbench does not say by how much |2> shifts the resonance.
    standard_error : float
        Of the assignment error, since the noise is known from a number of noisy runs only; 0 where
        it is no matter of chance.
    """

    title: str
    assignment_error: float = field(metadata=_unit("1"))
    assignment_matrix: FloatArray = field(
        metadata={
            "unit": "1",
            "axes": ("decided", "prepared"),
            "labels": {"decided": ("0", "1"), "prepared": ("0", "1")},
        }
    )
    snr: float = field(metadata=_unit("1"))
    errors: ErrorItems
    integration_time: float = field(metadata=_unit("s"))
    best_integration_time: float = field(metadata=_unit("s"))
    best_assignment_error: float = field(metadata=_unit("1"))
    added_noise_quanta: float = field(metadata=_unit("1"))
    noise_temperature: float = field(metadata=_unit("K"))
    noise_method: str
    residual_photons: float = field(metadata=_unit("1"))
    wait: float = field(metadata=_unit("s"))
    latency: float = field(metadata=_unit("s"))
    repeat_agreement: float = field(metadata=_unit("1"))
    dephasing_rate: float = field(metadata=_unit("1/s"))
    shots: ShotCounts
    records: ShotCounts
    numerical_floor: float = field(metadata=_unit("1"))
    split: AssignmentSplit = field(metadata=_NOT_IN_TABLE)
    scan: IntegrationScan = field(metadata=_NOT_IN_TABLE)
    noise: ReadoutNoise = field(metadata=_NOT_IN_TABLE)
    traces: ReadoutTraces = field(metadata=_NOT_IN_TABLE)
    warnings: tuple[str, ...]
    run: RunRecord = field(metadata=_NOT_IN_TABLE)
    noise_temperature_error: float = field(default=0.0, metadata=_unit("K"))
    efficiency: float = field(default=math.nan, metadata=_unit("1"))
    residual_stark_shift: float = field(default=math.nan, metadata=_unit("Hz"))
    purcell_time: float = field(default=math.nan, metadata=_unit("s"))
    leaked: FloatArray = field(
        default_factory=_not_known,
        metadata={"unit": "1", "axes": ("decided",), "labels": {"decided": ("0", "1")}},
    )
    standard_error: float = field(default=0.0, metadata=_unit("1"))


# Classes by the tag that the archive keeps.
READOUT_KINDS: dict[str, type] = {
    cls.__name__: cls
    for cls in (
        ReadoutResult,
        ErrorItems,
        ShotCounts,
        AssignmentSplit,
        Projection,
        IntegrationScan,
        ReadoutNoise,
        ReadoutTraces,
    )
}

# What `--json` prints of a readout, in this order.
READOUT_FIELDS = (
    "assignment_error",
    "standard_error",
    "assignment_matrix",
    "leaked",
    "snr",
    "errors",
    "integration_time",
    "best_integration_time",
    "best_assignment_error",
    "added_noise_quanta",
    "efficiency",
    "noise_temperature",
    "noise_temperature_error",
    "noise_method",
    "residual_photons",
    "residual_stark_shift",
    "wait",
    "latency",
    "repeat_agreement",
    "dephasing_rate",
    "purcell_time",
    "shots",
    "records",
    "numerical_floor",
    "warnings",
)


def readout_numbers(result: ReadoutResult) -> dict[str, Any]:
    """Turn a readout result into plain numbers for machines.

    Parameters
    ----------
    result : ReadoutResult
        The result of a run.

    Returns
    -------
    dict
        The fields of `READOUT_FIELDS`; a number that does not exist is None.
    """
    return {name: as_plain(getattr(result, name)) for name in READOUT_FIELDS}
