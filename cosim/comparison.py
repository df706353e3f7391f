"""Two archived runs side by side: numbers, waveforms, and what went into them."""

import difflib
import math
from dataclasses import dataclass

import numpy as np

from cosim.decision_result import DecisionResult
from cosim.readout_result import ReadoutResult
from cosim.result import GateResult, gate_result

# The numbers compared, by their name in the result, with the name of their error bar if any.
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
        Largest difference of the two waveforms at the probe over the largest value of the first,
        where both are known.
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
    """Compare two runs of a gate.

    Parameters
    ----------
    first, second : GateResult
        The runs.

    Returns
    -------
    Comparison
        Changes are second minus first.

    Raises
    ------
    InputError
        If one is of a readout.
    """
    first, second = gate_result(first), gate_result(second)
    numbers = tuple(
        Difference(name, _number(first, name), _number(second, name), _bar(first, second, bar))
        for name, bar in NUMBERS.items()
    )
    return Comparison(numbers, _waveforms(first, second), _inputs(first, second))


def _number(result: GateResult, name: str) -> float:
    value: object = result
    for part in name.split("."):
        value = getattr(value, part)
    assert isinstance(value, float)
    return value


def _bar(first: GateResult, second: GateResult, name: str) -> float:
    return _number(first, name) + _number(second, name) if name else math.nan


def _waveforms(first: GateResult, second: GateResult) -> float:
    one, two = first.waveform, second.waveform
    start, stop = max(one.t[0], two.t[0]), min(one.t[-1], two.t[-1])
    t = one.t[(one.t >= start) & (one.t <= stop)]
    if t.size == 0 or one.unit != two.unit:
        return math.nan
    difference = np.abs(np.interp(t, two.t, two.v) - np.interp(t, one.t, one.v))
    return float(difference.max() / np.abs(one.v).max())


def _inputs(first: GateResult, second: GateResult) -> tuple[str, ...]:
    lines = difflib.unified_diff(_texts(first), _texts(second), lineterm="", n=0)
    return tuple(line for line in lines if not line.startswith(("---", "+++", "@@")))


def _texts(result: GateResult) -> list[str]:
    versions = [f"{name} {release}" for name, release in result.run.versions.items()]
    return [*result.run.testbench.splitlines(), *result.run.deck_sent.splitlines(), *versions]
