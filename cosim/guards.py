"""What a reader must know before using the numbers of a gate."""

import math
from dataclasses import replace

import numpy as np

from cosim.adjust import Pulse
from cosim.capture import check_steps
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.quantum.operators import OperatorSystem
from cosim.result import Fidelity
from cosim.waveform import ComplexArray, Envelope

# A change of the average gate fidelity by one more level that is worth a warning.
LEVELS_TOLERANCE = 1e-6

# Carrier left at an edge of the window, over the plateau, that is worth a warning: a pulse cut
# there by the window loses an angle of the same order.
EDGE_TOLERANCE = 1e-3


def step_warnings(step: float, carrier_frequency: float) -> tuple[str, ...]:
    """Tell when there are few time steps per carrier period.

    Parameters
    ----------
    step : float
        Time step in s.
    carrier_frequency : float
        In Hz.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    return check_steps(1.0 / (step * carrier_frequency), 1.0 / carrier_frequency)


def edge_warnings(
    window: tuple[float, float], envelope: Envelope, amplitude: float
) -> tuple[str, ...]:
    """Tell when the window cuts the pulse.

    Parameters
    ----------
    window : tuple of two floats
        Start and end of the gate in s.
    envelope : Envelope
        At the probe.
    amplitude : float
        Of the plateau, in the envelope's unit.

    Returns
    -------
    tuple of str
        A warning per edge at which more than `EDGE_TOLERANCE` of the plateau is left.
    """
    size = np.abs(envelope.iq)
    found = []
    for name, edge in zip(("start", "end"), window, strict=True):
        level = float(np.interp(edge, envelope.t, size)) / amplitude
        if level > EDGE_TOLERANCE:
            found.append(
                f"the carrier is at {20 * math.log10(level):.0f} dB of the pulse at the {name} "
                f"of the window ({edge * 1e9:g} ns): the window cuts the pulse"
            )
    return tuple(found)


def level_warnings(pulse: Pulse, target: ComplexArray) -> tuple[str, ...]:
    """Tell when the levels kept are too few, from a run with one more.

    Parameters
    ----------
    pulse : Pulse
        Drive, qubit and window.
    target : ndarray of complex, shape (2, 2)
        Target unitary.

    Returns
    -------
    tuple of str
        The warning, if any; a spin and a system of operators have no further level.
    """
    qubit = pulse.qubit
    if isinstance(qubit, OperatorSystem) or qubit.levels == 2:
        return ()
    # What more levels change is coherent, so the quick lossless path tells it.
    fewer = pulse.lossless()
    more = replace(
        fewer, qubit=replace(qubit.with_levels(qubit.levels + 1), t1=math.inf, t2=math.inf)
    )
    change = abs(
        average_gate_fidelity(more.channel(), target)
        - average_gate_fidelity(fewer.channel(), target)
    )
    if change <= LEVELS_TOLERANCE:
        return ()
    return (
        f"{qubit.levels} levels are too few: with {qubit.levels + 1} the average gate fidelity "
        f"changes by {change:.1e}; raise 'levels' in [qubit]",
    )


def floor_warnings(calibrated: Fidelity, floor: float) -> tuple[str, ...]:
    """Tell when the infidelity is below its numerical floor.

    Parameters
    ----------
    calibrated : Fidelity
        The highest of the three fidelities.
    floor : float
        1 - F_avg between the two runs; NaN without a second run.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    if floor > calibrated.infidelity:
        return (
            f"the calibrated infidelity {calibrated.infidelity:.1e} is below the numerical "
            f"floor {floor:.1e}: a smaller step is needed to resolve it",
        )
    return ()
