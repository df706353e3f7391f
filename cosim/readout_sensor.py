"""What a readout asks of a deck with a charge sensor: its states, and when they change."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from cosim.dsp.detection.records import Transitions
from cosim.errors import TestbenchError
from cosim.readout_input import EXCITED, GROUND, inner_times
from cosim.readout_schema import ReadoutTable, SensorTable
from cosim.waveform import FloatArray

NEVER = 1.0  # s; the deck's event, where there is none


@dataclass(frozen=True, slots=True)
class SensorRuns:
    """The deck's parameters for each of the runs.

    Parameters
    ----------
    parameters : dict of str to dict of float
        Run -> .param -> value in SI units: "0", "1", "decay 1" and so on, "excitation 1" and so
        on.
    decay_times, excitation_times : ndarray, shape (k,)
        Times in s of the events in these runs.
    """

    parameters: dict[str, Mapping[str, float]]
    decay_times: FloatArray = field(metadata={"unit": "s"})
    excitation_times: FloatArray = field(metadata={"unit": "s"})


def sensor_transitions(sensor: SensorTable, table: ReadoutTable) -> Transitions:
    """Give how often the state changes, and how soon it shows.

    Parameters
    ----------
    sensor : SensorTable
        The sensor.
    table : ReadoutTable
        With the decay of |1>.

    Returns
    -------
    Transitions
    """
    p, t1 = table.thermal_population, table.t1
    return Transitions(
        down=(1.0 - p) / t1 if math.isfinite(t1) else 0.0,
        up=p / t1 if math.isfinite(t1) else 0.0,
        conversion=1.0 / sensor.tunnel_time if sensor.tunnel_time > 0.0 else math.inf,
        reversion=0.0 if math.isinf(sensor.return_time) else 1.0 / sensor.return_time,
    )


def make_sensor_runs(sensor: SensorTable, table: ReadoutTable, stop: float) -> SensorRuns:
    """Work out the deck's parameters for every run.

    Parameters
    ----------
    sensor : SensorTable
        The sensor.
    table : ReadoutTable
        With the window, the decay of |1> and the number of simulated times.
    stop : float
        End of the run in s.

    Returns
    -------
    SensorRuns

    Raises
    ------
    TestbenchError
        If the run is so long that an event that never comes would come.
    """
    if stop >= NEVER:
        raise TestbenchError(
            f"a run with a [sensor] takes less than {NEVER:g} s, got {stop:g} s",
        )
    transitions = sensor_transitions(sensor, table)
    low, high = sensor.value_0, sensor.value_1
    falls = transitions.reversion > 0.0 or (transitions.down > 0.0 and not transitions.converts)
    rises = transitions.up > 0.0 or transitions.converts
    last = table.window[1]
    decays = inner_times(sensor.start, last, table.decay_times if falls else 0)
    excitations = inner_times(sensor.start, last, table.decay_times if rises else 0)
    parameters = {GROUND: _values(sensor, low, low), EXCITED: _values(sensor, high, high)}
    for number, time in enumerate(decays.tolist(), start=1):
        parameters[f"decay {number}"] = _values(sensor, high, low, time)
    for number, time in enumerate(excitations.tolist(), start=1):
        parameters[f"excitation {number}"] = _values(sensor, low, high, time)
    return SensorRuns(parameters, decays, excitations)


def _values(
    sensor: SensorTable, first: float, then: float, event: float = NEVER
) -> Mapping[str, float]:
    return {
        sensor.parameter: first,
        sensor.late_parameter: then,
        sensor.event_parameter: event,
    }
