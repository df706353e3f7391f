"""The declared result of a readout whose comparator decides by itself."""

from dataclasses import dataclass, field
from typing import Any

from cosim.dsp.detection.assignment import ErrorItems
from cosim.result import RunRecord, as_plain
from cosim.waveform import FloatArray

_NOT_IN_TABLE = {"table": False}


@dataclass(frozen=True, slots=True)
class DecisionCounts:
    """Decisions of noisy runs, by the signal.

    Parameters
    ----------
    levels : ndarray, shape (n,)
        Signals: 0 is the answer for |0>, 1 that for |1>.
    ones : ndarray, shape (n,)
        Decisions for |1> at each.
    trials : ndarray, shape (n,)
        Noisy runs at each.
    """

    levels: FloatArray = field(metadata={"unit": "1", "axes": ("levels",)})
    ones: FloatArray = field(metadata={"unit": "1", "axes": ("levels",)})
    trials: FloatArray = field(metadata={"unit": "1", "axes": ("levels",)})


@dataclass(frozen=True, slots=True)
class DecisionPaths:
    """The signal to which an answer with a change of state is equal.

    Parameters
    ----------
    decay_times, excitation_times : ndarray, shape (k,)
        Simulated times of the change in s, from t = 0 of the deck.
    decays, excitations : ndarray, shape (k,)
        Signals, on the scale of `DecisionCounts`.
    """

    decay_times: FloatArray = field(metadata={"unit": "s", "axes": ("decay_times",)})
    decays: FloatArray = field(metadata={"unit": "1", "axes": ("decay_times",)})
    excitation_times: FloatArray = field(metadata={"unit": "s", "axes": ("excitation_times",)})
    excitations: FloatArray = field(metadata={"unit": "1", "axes": ("excitation_times",)})


@dataclass(frozen=True, slots=True)
class DecisionResult:
    """A readout as the netlist's own comparator decides it.

    Parameters
    ----------
    title : str
        Title of the testbench.
    assignment_error : float
        (P(1|0) + P(0|1))/2.
    standard_error : float
        Of the assignment error, since offset and noise are known from a number of decisions only.
    assignment_matrix : ndarray, shape (2, 2)
        P(i|j): decision i, state j prepared.
    snr : float
        Distance of the two answers over the noise, both as the comparator sees them.
    errors : ErrorItems
        What the error is made of. What the chain bends is in `separation`, and there is no
        converter, so that `saturation` and `quantisation` are 0.
    offset, offset_error : float
        Signal at which both decisions are as likely, and its standard error: 0 is the answer for
        |0>, 1 that for |1>, and 0.5 is best.
    noise, noise_error : float
        Standard deviation of the noise, and its standard error, on that scale.
    clean_offset : float
        The signal at which the decision changes without noise.
    signal : float
        Largest distance of the two answers at the source in V: what 1 of that scale is worth.
    decide_at : float
        Time in s at which the decision is read.
    latency : float
        From the end of the window to that, in s.
    noise_method : str
        "injection", or "arriving only" where the netlist is taken to be quiet.
    left_out : tuple of str
        What makes noise in the deck and is not in it.
    numerical_floor : float
        Change of the assignment error by the offset that is found at half the step; NaN when left
        out.
    fitted : DecisionCounts
        What offset and noise are fitted to.
    counted : DecisionCounts
        At the two answers themselves, apart from the fit.
    paths : DecisionPaths
        For changes of state during the readout.
    warnings : tuple of str
        What the reader must know before using the numbers.
    run : RunRecord
        Deck, testbench, versions, times, log.
    """

    title: str
    assignment_error: float = field(metadata={"unit": "1"})
    standard_error: float = field(metadata={"unit": "1"})
    assignment_matrix: FloatArray = field(
        metadata={
            "unit": "1",
            "axes": ("decided", "prepared"),
            "labels": {"decided": ("0", "1"), "prepared": ("0", "1")},
        }
    )
    snr: float = field(metadata={"unit": "1"})
    errors: ErrorItems
    offset: float = field(metadata={"unit": "1"})
    offset_error: float = field(metadata={"unit": "1"})
    noise: float = field(metadata={"unit": "1"})
    noise_error: float = field(metadata={"unit": "1"})
    clean_offset: float = field(metadata={"unit": "1"})
    signal: float = field(metadata={"unit": "V"})
    decide_at: float = field(metadata={"unit": "s"})
    latency: float = field(metadata={"unit": "s"})
    noise_method: str
    left_out: tuple[str, ...]
    numerical_floor: float = field(metadata={"unit": "1"})
    fitted: DecisionCounts = field(metadata=_NOT_IN_TABLE)
    counted: DecisionCounts = field(metadata=_NOT_IN_TABLE)
    paths: DecisionPaths = field(metadata=_NOT_IN_TABLE)
    warnings: tuple[str, ...]
    run: RunRecord = field(metadata=_NOT_IN_TABLE)


# Classes by the tag that the archive keeps.
DECISION_KINDS: dict[str, type] = {
    cls.__name__: cls for cls in (DecisionResult, DecisionCounts, DecisionPaths, ErrorItems)
}

# What `--json` prints of it, in this order.
DECISION_FIELDS = (
    "assignment_error",
    "standard_error",
    "assignment_matrix",
    "snr",
    "errors",
    "offset",
    "offset_error",
    "noise",
    "noise_error",
    "clean_offset",
    "signal",
    "decide_at",
    "latency",
    "noise_method",
    "fitted",
    "counted",
    "numerical_floor",
    "warnings",
)


def decision_numbers(result: DecisionResult) -> dict[str, Any]:
    """Turn the result into plain numbers for machines.

    Parameters
    ----------
    result : DecisionResult
        The result of a run.

    Returns
    -------
    dict
        The fields of `DECISION_FIELDS`; a number that does not exist is None.
    """
    return {name: as_plain(getattr(result, name)) for name in DECISION_FIELDS}
