"""What a reader must know before using the numbers of a gate."""

import math
from dataclasses import replace

import numpy as np

from cosim.adjust import SCALE_RANGE, Pulse
from cosim.capture import check_steps
from cosim.coupling import DriveLine, rate_per_unit
from cosim.dsp.noise.density import SpectralDensity
from cosim.dsp.pulse import PulseMeasures
from cosim.noises import DetuningNoise, Noise
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.result import Fidelity
from cosim.waveform import ComplexArray, Envelope, Waveform

# A change of the average gate fidelity by one more level that is worth a warning.
LEVELS_TOLERANCE = 1e-6

# Turns of the burst against the carrier over the pulse that are worth a warning; a quadrature
# that shapes a pulse makes a few hundredths.
CARRIER_TOLERANCE = 0.25

# 1 - F_avg between the two runs of the circuit beyond which nothing holds.
BROKEN = 0.01

# 1 - F_avg between the two solvers that is worth a warning.
TWIN_TOLERANCE = 1e-4

# Carrier left at an edge of the window, over the plateau, that is worth a warning: a pulse cut
# there by the window loses an angle of the same order.
EDGE_TOLERANCE = 1e-3

# A noise that dephases at this part of T2's own rate, or whose T2* is within this part of T2, may
# be what T2 was measured with.
DOUBLE_TOLERANCE = 0.1


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
    window: tuple[float, float], waveform: Waveform, carrier_frequency: float, amplitude: float
) -> tuple[str, ...]:
    """Tell when the window cuts the pulse.

    Parameters
    ----------
    window : tuple of two floats
        Start and end of the gate in s.
    waveform : Waveform
        At the probe; the envelope would not do, for its filter smears the pulse over an edge.
    carrier_frequency : float
        In Hz.
    amplitude : float
        Of the plateau, in the waveform's unit.

    Returns
    -------
    tuple of str
        A warning per edge at which more than `EDGE_TOLERANCE` of the plateau is left.
    """
    found = []
    for name, edge in zip(("start", "end"), window, strict=True):
        near = np.abs(waveform.t - edge) <= 0.5 / carrier_frequency
        level = float(np.ptp(waveform.v[near])) / (2.0 * amplitude) if near.any() else 0.0
        if level > EDGE_TOLERANCE:
            found.append(
                f"the carrier is at {20 * math.log10(level):.0f} dB of the pulse at the {name} "
                f"of the window ({edge * 1e9:g} ns): the window cuts the pulse"
            )
    return tuple(found)


def area_warnings(
    window: tuple[float, float], envelope: Envelope, line: DriveLine, target_angle: float
) -> tuple[str, ...]:
    """Tell when the pulse lies outside the window, or turns the qubit round and round.

    Parameters
    ----------
    window : tuple of two floats
        Start and end of the gate in s.
    envelope : Envelope
        At the probe.
    line : DriveLine
        The way from the probe to the qubit.
    target_angle : float
        Angle of the target in rad.

    Returns
    -------
    tuple of str
        The warnings, if any.
    """
    size = np.abs(envelope.iq)
    inside = (envelope.t >= window[0]) & (envelope.t <= window[1])
    whole, part = float(size.sum()), float(size[inside].sum())
    found = []
    if part < 0.5 * whole:
        found.append(
            f"only {100 * part / whole:.0f} % of the pulse lies in the window of "
            f"{window[0] * 1e9:g} ns to {window[1] * 1e9:g} ns: check 'window' in [gate]"
        )
    angle = rate_per_unit(line, envelope.unit) * part * envelope.dt
    if angle > target_angle + math.pi:
        found.append(
            f"the pulse turns a resonant qubit by {math.degrees(angle):.0f} degrees, the target is "
            f"{math.degrees(target_angle):g}: check 'attenuation' and 'rabi_per_volt'"
        )
    return tuple(found)


def level_warnings(
    pulse: Pulse, target: ComplexArray, *, table: str = "[qubit]"
) -> tuple[str, ...]:
    """Tell when the levels kept are too few, from a run with one more.

    Parameters
    ----------
    pulse : Pulse
        Drive, qubit and window.
    target : ndarray of complex, shape (2, 2)
        Target unitary.
    table : str
        Where the levels stand.

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
        f"changes by {change:.1e}; raise 'levels' in {table}",
    )


def carrier_warnings(pulse: PulseMeasures) -> tuple[str, ...]:
    """Tell when the burst is not at the carrier.

    Parameters
    ----------
    pulse : PulseMeasures
        The pulse at the probe.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    turns = pulse.frequency_error * pulse.duration
    if abs(turns) <= CARRIER_TOLERANCE:
        return ()
    return (
        f"the burst is off the carrier by {pulse.frequency_error:.4g} Hz, {abs(turns):.2g} turns "
        "over the pulse: check 'carrier' in [drive]",
    )


def scale_warnings(calibrated: Fidelity) -> tuple[str, ...]:
    """Tell when the calibrated fidelity is at the end of what may be adjusted.

    Parameters
    ----------
    calibrated : Fidelity
        The calibrated fidelity.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    scale = calibrated.amplitude_scale
    if min(abs(scale - end) for end in SCALE_RANGE) > 1e-3:
        return ()
    return (
        f"the amplitude scale of the calibrated fidelity stands at the end of its range, "
        f"{scale:.4g}: the pulse is far from the target",
    )


def twin_warnings(
    carrier_frequency: float, qubit_frequency: float, rotating_wave_error: float
) -> tuple[str, ...]:
    """Tell when the two solvers differ, or when the second could not be run.

    Parameters
    ----------
    carrier_frequency, qubit_frequency : float
        In Hz.
    rotating_wave_error : float
        1 - F_avg between the two channels; NaN without a second one.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    if rotating_wave_error > TWIN_TOLERANCE:
        return (
            f"the rotating-wave path differs from the full waveform by {rotating_wave_error:.1e}: "
            "the drive is strong, or the carrier low, or the pulse wider than a quarter of it",
        )
    if math.isnan(rotating_wave_error) and abs(carrier_frequency - qubit_frequency) > 1e9:
        return ("the qubit is too far from the carrier for the rotating-wave path to check it",)
    return ()


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
    if floor > BROKEN:
        return (
            f"the two runs of the circuit differ by {floor:.1e}: the simulation has not converged, "
            "and none of the numbers holds",
        )
    if floor > calibrated.infidelity:
        return (
            f"the calibrated infidelity {calibrated.infidelity:.1e} is below the numerical "
            f"floor {floor:.1e}: a smaller step is needed to resolve it",
        )
    return ()


def counting_warnings(
    qubit: Qubit, name: str, noise: Noise, density: SpectralDensity | None
) -> tuple[str, ...]:
    """Tell when a noise of the detuning may be what the testbench's t2 stands for already.

    Parameters
    ----------
    qubit : Qubit
        With its t2.
    name : str
        Of the noise.
    noise : Noise
        The table [[noise]].
    density : SpectralDensity or None
        Of the detuning in (rad/s)^2/Hz; None for a constant one.

    Returns
    -------
    tuple of str
        The warning, if any.
    """
    rate = qubit.gamma_phi
    if not isinstance(noise, DetuningNoise) or rate <= 0.0:
        return ()
    if density is None:
        t2_star = math.sqrt(2.0) / noise.spread
        if abs(t2_star / qubit.t2 - 1.0) > DOUBLE_TOLERANCE:
            return ()
        return (
            f"noise '{name}' makes a T2* of {t2_star:.4g} s, and the testbench's t2 is "
            f"{qubit.t2:.4g} s: the same dephasing may be counted twice",
        )
    # White noise dephases at S/4; of another noise that is told where t2 would see it.
    where = max(density.low, rate / (2.0 * math.pi))
    own = float(density.at([where])[0]) / 4.0 if where < density.high else 0.0
    if own <= DOUBLE_TOLERANCE * rate:
        return ()
    return (
        f"noise '{name}' alone dephases at {own:.3g} 1/s, and the testbench's t2 at {rate:.3g} "
        "1/s: the same noise may be counted twice",
    )
