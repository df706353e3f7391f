"""Two archived runs side by side: numbers, waveforms, and what went into them."""

import difflib
import math
from dataclasses import dataclass

import numpy as np

from cosim.decision_result import DecisionResult
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult, gate_result
from cosim.waveform import ComplexArray, FloatArray

_Run = GateResult | ReadoutResult
_Course = tuple[FloatArray, FloatArray | ComplexArray]

# The numbers compared, by their name in the result, with the names of what their error bar is the
# sum of, if any.
NUMBERS: dict[str, str] = {
    "as_simulated.average_gate_fidelity": "as_simulated.error_bar",
    "as_simulated.process_fidelity": "as_simulated.process_error_bar",
    "free_frame.average_gate_fidelity": "free_frame.error_bar",
    "free_frame.process_fidelity": "free_frame.process_error_bar",
    "calibrated.average_gate_fidelity": "calibrated.error_bar",
    "calibrated.process_fidelity": "calibrated.process_error_bar",
    "calibrated.amplitude_scale": "",
    "leakage": "",
    "seepage": "",
    "numerical_floor": "",
    "rotating_wave_error": "",
    "phase_slip": "",
    "rotation.angle": "",
    "unitarity": "",
    "carrier_frequency": "",
    "pulse.amplitude": "",
    "pulse.duration": "",
}
READOUT_NUMBERS: dict[str, str] = {
    "assignment_error": "numerical_floor standard_error",
    "snr": "",
    "errors.separation": "",
    "errors.saturation": "",
    "errors.quantisation": "",
    "errors.excitation": "",
    "errors.decay": "",
    "errors.preparation": "",
    "best_integration_time": "",
    "best_assignment_error": "",
    "added_noise_quanta": "",
    "noise_temperature": "noise_temperature_error",
    "residual_photons": "",
    "wait": "",
    "repeat_agreement": "",
    "dephasing_rate": "",
}


@dataclass(frozen=True, slots=True)
class Difference:
    """One number of two runs.

    Parameters
    ----------
    name : str
        Its name in the result.
    first, second : float
        Its values, in the result's own units; NaN where it does not exist.
    bar : float
        Sum of the two error bars; NaN where there is none.
    """

    name: str
    first: float
    second: float
    bar: float

    @property
    def change(self) -> float:
        """Second minus first."""
        return self.second - self.first

    @property
    def resolved(self) -> bool | None:
        """Whether the change exceeds the error bars; None where there are none."""
        return None if math.isnan(self.bar) else abs(self.change) > self.bar


@dataclass(frozen=True, slots=True)
class Comparison:
    """Two runs side by side.

    Parameters
    ----------
    numbers : tuple of Difference
        The numbers.
    waveform_difference : float
        Largest difference of the two waveforms at the probe, or of a readout's mean records, over
        the largest value of the first, where both are known.
    inputs : tuple of str
        Lines of testbench, deck and versions that differ, with "-" for the first run and "+" for
        the second.
    """

    numbers: tuple[Difference, ...]
    waveform_difference: float
    inputs: tuple[str, ...]


def compare_runs(
    first: GateResult | ReadoutResult | DecisionResult,
    second: GateResult | ReadoutResult | DecisionResult,
) -> Comparison:
    """Compare two runs of a gate, or two of a readout.

    Parameters
    ----------
    first, second : GateResult, or ReadoutResult
        The runs.

    Returns
    -------
    Comparison
        Changes are second minus first.

    Raises
    ------
    InputError
        If they are not of one kind, or of a comparator's decisions.
    """
    if isinstance(first, ReadoutResult) and isinstance(second, ReadoutResult):
        records = max(
            _apart(*(_record(one, state) for one in (first, second)))
            for state in ("ground", "excited")
        )
        return Comparison(_numbers(first, second, READOUT_NUMBERS), records, _inputs(first, second))
    first, second = gate_result(first), gate_result(second)
    numbers = _numbers(first, second, NUMBERS)
    return Comparison(numbers, _waveforms(first, second), _inputs(first, second))


def _numbers(first: _Run, second: _Run, names: dict[str, str]) -> tuple[Difference, ...]:
    return tuple(
        Difference(name, _number(first, name), _number(second, name), _bar(first, second, bars))
        for name, bars in names.items()
    )


def _number(result: _Run, name: str) -> float:
    value: object = result
    for part in name.split("."):
        value = getattr(value, part)
    assert isinstance(value, float)
    return value


def _bar(first: _Run, second: _Run, names: str) -> float:
    parts = [_number(one, name) for one in (first, second) for name in names.split()]
    return sum(parts) if parts else math.nan


def _record(result: ReadoutResult, state: str) -> _Course:
    return result.traces.time, np.asarray(getattr(result.traces, state))


def _waveforms(first: GateResult, second: GateResult) -> float:
    one, two = first.waveform, second.waveform
    return _apart((one.t, one.v), (two.t, two.v)) if one.unit == two.unit else math.nan


def _apart(one: _Course, two: _Course) -> float:
    start, stop = max(one[0][0], two[0][0]), min(one[0][-1], two[0][-1])
    t = one[0][(one[0] >= start) & (one[0] <= stop)]
    if t.size == 0:
        return math.nan
    difference = np.abs(np.interp(t, *two) - np.interp(t, *one))
    return float(difference.max() / np.abs(one[1]).max())


def _inputs(first: _Run, second: _Run) -> tuple[str, ...]:
    lines = difflib.unified_diff(_texts(first), _texts(second), lineterm="", n=0)
    return tuple(line for line in lines if not line.startswith(("---", "+++", "@@")))


def _texts(result: _Run) -> list[str]:
    versions = [f"{name} {release}" for name, release in result.run.versions.items()]
    return [*result.run.testbench.splitlines(), *result.run.deck_sent.splitlines(), *versions]
