"""What else the line does: to its other qubits while the gate is played, and to its own at rest."""

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from cosim.adjust import Pulse
from cosim.coupling import rate_per_unit
from cosim.errors import InputError, TestbenchError
from cosim.noises import VOLTAGES, DetuningNoise, Noise
from cosim.quantum.channel import nearest_unitary
from cosim.quantum.evolution import DriveSpline
from cosim.quantum.fidelity import average_gate_fidelity, leakage, rotation_of, target_unitary
from cosim.quantum.frame import free_frame
from cosim.quantum.heating import flip_rate
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.targets import target_rotation
from cosim.qubit_drive import QubitDrive, make_qubit
from cosim.schema import SpectatorTable
from cosim.side_results import IdleEffect, SpectatorEffect
from cosim.waveform import Waveform

_IDENTITY = np.eye(2, dtype=np.complex128)


def spectator_effects(
    tables: Sequence[SpectatorTable], drive: QubitDrive, pulse: Pulse
) -> tuple[SpectatorEffect, ...]:
    """Evolve the other qubits of the line under the same waveform.

    Parameters
    ----------
    tables : sequence of SpectatorTable
        The tables [[spectator]].
    drive : QubitDrive
        Of the gate.
    pulse : Pulse
        The gate's; without the rotating-wave approximation, as the gate's own headline.

    Returns
    -------
    tuple of SpectatorEffect
        In the order of the tables. Noise of the testbench acts on the gate's qubit alone.

    Raises
    ------
    InputError
        If a target does not exist, or the gate's qubit is given by operators.
    """
    if not tables:
        return ()
    if isinstance(drive.qubit, OperatorSystem):
        raise InputError("[[spectator]] tables do not go with a system of operators")
    return tuple(
        _spectator(table, number, drive, pulse) for number, table in enumerate(tables, start=1)
    )


def _spectator(
    table: SpectatorTable, number: int, drive: QubitDrive, pulse: Pulse
) -> SpectatorEffect:
    assert not isinstance(drive.qubit, OperatorSystem)
    qubit = make_qubit(table.qubit(drive.qubit.frequency), drive.carrier_frequency)
    # The line is the same; only what a volt does to this qubit differs.
    share = table.rabi_per_volt / drive.line.rabi_per_volt
    spline = DriveSpline(pulse.drive.t, pulse.drive.c * share)
    try:
        wanted = target_rotation(table.target)
    except InputError as error:
        raise TestbenchError(
            f"table [[spectator]] number {number}, key 'target': {error.message}", hint=error.hint
        ) from None
    target = target_unitary(wanted.axis, wanted.angle)
    channel = Pulse(qubit, spline, pulse.start, pulse.stop).channel()
    framed = free_frame(channel, target)
    found = rotation_of(nearest_unitary(channel))
    return SpectatorEffect(
        name=table.name or f"spectator {number}",
        frequency=qubit.frequency,
        target=table.target,
        infidelity=_loss(average_gate_fidelity(channel, target)),
        free_frame_infidelity=_loss(framed.average_gate_fidelity),
        rotation=found,
        phase=math.remainder(-(framed.before + framed.after), 2.0 * math.pi),
        leakage=max(0.0, leakage(channel)),
    )


def spectator_warnings(effects: Sequence[SpectatorEffect], drive: QubitDrive) -> tuple[str, ...]:
    """Name spectators that the carrier drives as it drives its target.

    Parameters
    ----------
    effects : sequence of SpectatorEffect
        From `spectator_effects`.
    drive : QubitDrive
        Of the gate.

    Returns
    -------
    tuple of str
    """
    start, stop = drive.window
    width = 1.0 / (stop - start)
    return tuple(
        f"'{item.name}' lies {abs(item.frequency - drive.carrier_frequency):.3g} Hz from the "
        f"carrier, within the pulse's own width of {width:.3g} Hz: it is driven like the target"
        for item in effects
        if item.target == "identity" and abs(item.frequency - drive.carrier_frequency) < width
    )


def idle_effect(
    span: tuple[float, float],
    drive: QubitDrive,
    pulse: Pulse,
    waveform: Waveform,
    noises: Sequence[Noise],
) -> IdleEffect:
    """Judge a stretch without a pulse.

    Parameters
    ----------
    span : tuple of two floats
        Start and end in s.
    drive : QubitDrive
        Of the gate.
    pulse : Pulse
        The gate's, whose drive reaches over the whole run.
    waveform : Waveform
        At the probe.
    noises : sequence of Noise
        The tables [[noise]].

    Returns
    -------
    IdleEffect

    Raises
    ------
    InputError
        If the stretch does not lie within the run.
    """
    start, stop = span
    clean = replace(pulse, start=start, stop=stop, before=None)
    channel = clean.channel()
    framed = free_frame(channel, _IDENTITY)
    inside = (waveform.t >= start) & (waveform.t <= stop)
    flips = dephasing = 0.0
    volts = rate_per_unit(drive.line, waveform.unit)
    for noise in noises:
        density = noise.density(drive.carrier_frequency)
        if density is None:
            continue
        if isinstance(noise, VOLTAGES):
            # Of each quadrature beside the carrier; of the voltage itself it is half of that.
            offset = abs(drive.carrier_frequency - _frequency(drive))
            lowest = max(offset, density.low, 1.0)
            flips += flip_rate(0.5 * volts**2 * float(density.at([lowest])[0]))
        elif isinstance(noise, DetuningNoise):
            # White noise of the detuning, as its density at the slowest turn of the stretch.
            lowest = min(max(1.0 / (stop - start), density.low), density.high)
            dephasing += float(density.at([lowest])[0]) / 4.0
    return IdleEffect(
        start=start,
        stop=stop,
        infidelity=_loss(average_gate_fidelity(channel, _IDENTITY)),
        free_frame_infidelity=_loss(framed.average_gate_fidelity),
        phase=math.remainder(-(framed.before + framed.after), 2.0 * math.pi),
        leakage=max(0.0, leakage(channel)),
        residual=float(np.ptp(waveform.v[inside])) / 2.0 if inside.any() else math.nan,
        flip_rate=flips,
        dephasing_rate=dephasing,
    )


def _frequency(drive: QubitDrive) -> float:
    if isinstance(drive.qubit, OperatorSystem):
        return drive.carrier_frequency
    return drive.qubit.frequency


def _loss(fidelity: float) -> float:
    # Rounding may carry a perfect gate past 1.
    return max(0.0, 1.0 - fidelity)
