"""What the photons of a readout do to the qubit, while it is read and until the next gate."""

import math
from dataclasses import dataclass, field

import numpy as np

from cosim.quantum.readout_limits import dephasing_rate, stark_shift
from cosim.quantum.resonator import steady_field, wait_for_photons
from cosim.readout_guards import dispersive_numbers, dispersive_warnings
from cosim.readout_input import EXCITED, GROUND, Answers
from cosim.readout_pulse import drive_level
from cosim.readout_schema import ResonatorTable

LEFT = 0.01  # photons, after which the next gate may begin


@dataclass(frozen=True, slots=True)
class Aftermath:
    """What a readout leaves behind; NaN of a sensor.

    Parameters
    ----------
    residual_photons : float
        At the end of the run, the greater number of the two states.
    wait : float
        Time in s from there until `LEFT` photons are left.
    residual_stark_shift : float
        Of the qubit's frequency in Hz by these photons, 2 chi for each, in a gate that begins then.
    dephasing_rate : float
        By which the drive measures in steady state, in 1/s.
    purcell_time : float
        In which the qubit decays through its resonator alone in s; NaN without a coupling.
    warnings : tuple of str
        Of the picture of a qubit that only shifts its resonator.
    """

    residual_photons: float = field(default=math.nan, metadata={"unit": "1"})
    wait: float = field(default=math.nan, metadata={"unit": "s"})
    residual_stark_shift: float = field(default=math.nan, metadata={"unit": "Hz"})
    dephasing_rate: float = field(default=math.nan, metadata={"unit": "1/s"})
    purcell_time: float = field(default=math.nan, metadata={"unit": "s"})
    warnings: tuple[str, ...] = ()


def find_aftermath(
    pulse: ResonatorTable | None, answers: Answers | None, t1: float, stop: float
) -> Aftermath:
    """Work out what a readout leaves behind.

    Parameters
    ----------
    pulse : ResonatorTable or None
        The resonator and its drive; None of a sensor.
    answers : Answers or None
        With the fields of |0> and |1>.
    t1 : float
        Decay time of |1> in s that the readout is given.
    stop : float
        End of the run in s, a little before that of the fields.

    Returns
    -------
    Aftermath

    Raises
    ------
    InputError
        If chi has another sign than coupling, detuning and anharmonicity make.
    """
    if pulse is None or answers is None:
        return Aftermath()
    resonator = pulse.resonator()
    fields = [answers.fields[name] for name in (GROUND, EXCITED)]
    ends = [complex(np.interp(stop, answers.drive.t, one.inside)) for one in fields]
    left = max(ends, key=abs)
    photons = abs(left) ** 2
    most = max(float(one.photons.max()) for one in fields)
    level = drive_level(pulse, resonator, answers.drive)
    steady = [steady_field(resonator, state, level, pulse.drive) for state in (0, 1)]
    # The readout has left the one state with its field, in which a gate then begins: to both states
    # of the qubit belongs the same field, unlike in a superposition that is being read.
    shift = float(stark_shift(resonator, left, left))
    guards = dispersive_numbers(pulse, most)
    return Aftermath(
        photons,
        wait_for_photons(resonator, photons, LEFT),
        shift / (2.0 * math.pi),
        float(dephasing_rate(resonator, steady[0], steady[1])),
        math.nan if guards is None else 1.0 / guards.purcell_rate,
        dispersive_warnings(pulse, most, t1),
    )
