"""The headline evolution: a qubit under the real drive, without the rotating-wave approximation.

H/hbar = 2 pi alpha n (n - 1)/2 + rate(t) (a exp(-i omega_q t) + a^dag exp(i omega_q t)), the frame
that rotates at the qubit's frequency with phase zero at t = 0, plus relaxation and dephasing.
"""

import numpy as np

from cosim.errors import InputError
from cosim.quantum import kernel
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.qubit import Qubit
from cosim.quantum.steps import DriveSpline, StepPlan, dissipator_rates, plan_steps
from cosim.waveform import ComplexArray, FloatArray

__all__ = ["DriveSpline", "evolve", "propagate_unitary", "run_plan", "step_error"]


def evolve(
    qubit: Qubit,
    drive: DriveSpline,
    start: float,
    stop: float,
    *,
    scale: float | FloatArray = 1.0,
) -> ComplexArray:
    """Evolve a qubit under the full drive and give the channel.

    Parameters
    ----------
    qubit : Qubit
    drive : DriveSpline
        2 pi k v(t) in rad/s.
    start, stop : float
        Window in s on the drive's own time axis.
    scale : float or ndarray, shape (batch,)
        Factor on the drive; an array evolves a batch.

    Returns
    -------
    ndarray, shape (levels**2, levels**2) or (batch, levels**2, levels**2)
        Column-stacking superoperator in the frame rotating at the qubit's frequency, phase zero
        at t = 0.

    Raises
    ------
    InputError
        If the window is empty or a number is not finite.
    WaveformError
        If the window leaves the drive's time range.

    Notes
    -----
    Sixth-order Magnus steps and Simpson placement of the dissipator, see `cosim.quantum.kernel`.
    """
    return _evolve(qubit, drive, start, stop, scale, 1)


def propagate_unitary(
    qubit: Qubit,
    drive: DriveSpline,
    start: float,
    stop: float,
    *,
    scale: float | FloatArray = 1.0,
) -> ComplexArray:
    """Evolve a qubit under the full drive without relaxation and dephasing.

    Parameters
    ----------
    qubit, drive, start, stop, scale
        As in `evolve`; t1 and t2 are left out of account.

    Returns
    -------
    ndarray, shape (levels, levels) or (batch, levels, levels)
        Propagator in the frame rotating at the qubit's frequency, phase zero at t = 0.

    Raises
    ------
    InputError, WaveformError
        As in `evolve`.
    """
    lossless = Qubit(qubit.frequency, qubit.levels, qubit.anharmonicity)
    scales = _check_scale(scale)
    plan = plan_steps(lossless, drive, start, stop, scale=float(np.abs(scales).max()))
    unitaries = np.array([_unitary(lossless, drive, plan, float(value)) for value in scales.flat])
    return np.asarray(unitaries if scales.ndim else unitaries[0])


def step_error(
    qubit: Qubit, drive: DriveSpline, start: float, stop: float, *, scale: float = 1.0
) -> float:
    """Estimate the kernel's own error by halving every step and every panel.

    Parameters
    ----------
    qubit, drive, start, stop, scale
        As in `evolve`.

    Returns
    -------
    float
        Largest change of an element of the superoperator, dimensionless. The change is close to
        the error of the longer steps, which are those of `evolve`.

    Raises
    ------
    InputError, WaveformError
        As in `evolve`.

    Notes
    -----
    Richardson's step halving (common practice).
    """
    coarse = _evolve(qubit, drive, start, stop, scale, 1)
    fine = _evolve(qubit, drive, start, stop, scale, 2)
    return float(np.abs(coarse - fine).max())


def _evolve(
    qubit: Qubit,
    drive: DriveSpline,
    start: float,
    stop: float,
    scale: float | FloatArray,
    refine: int,
) -> ComplexArray:
    scales = _check_scale(scale)
    largest = float(np.abs(scales).max())
    plan = plan_steps(qubit, drive, start, stop, scale=largest, refine=refine)
    channels = np.array([run_plan(qubit, drive, plan, float(value)) for value in scales.flat])
    return np.asarray(channels if scales.ndim else channels[0])


def run_plan(qubit: Qubit, drive: DriveSpline, plan: StepPlan, scale: float = 1.0) -> ComplexArray:
    """Run the kernel over a plan of steps.

    Parameters
    ----------
    qubit : Qubit
    drive : DriveSpline
    plan : StepPlan
        From `plan_steps` with the same qubit and drive.
    scale : float
        Factor on the drive.

    Returns
    -------
    ndarray, shape (levels**2, levels**2)
        Column-stacking superoperator as in `evolve`.
    """
    d = qubit.levels
    if qubit.lossless:
        u = _unitary(qubit, drive, plan, scale)
        return np.asarray(np.kron(u.conj(), u))
    decay, down, up = dissipator_rates(qubit)
    images = kernel.channel_product(
        plan.begin,
        plan.length,
        plan.piece,
        plan.kick,
        drive.t,
        drive.c,
        qubit.omega,
        scale * np.sqrt(np.arange(1.0, d)),
        anharmonic_energies(qubit),
        decay,
        down,
        up,
    )
    # images[i, j, m, n] = <m|E(|i><j|)|n>; the element stands in row m + d n, column i + d j.
    return np.ascontiguousarray(images.transpose(3, 2, 1, 0).reshape(d * d, d * d))


def _unitary(qubit: Qubit, drive: DriveSpline, plan: StepPlan, scale: float) -> ComplexArray:
    return np.asarray(
        kernel.unitary_product(
            plan.begin,
            plan.length,
            plan.piece,
            drive.t,
            drive.c,
            qubit.omega,
            scale * np.sqrt(np.arange(1.0, qubit.levels)),
            anharmonic_energies(qubit),
        )
    )


def _check_scale(scale: float | FloatArray) -> FloatArray:
    scales = np.asarray(scale, dtype=np.float64)
    if scales.ndim > 1 or scales.size == 0 or not np.isfinite(scales).all():
        raise InputError(
            f"drive scale: wanted a finite number or a one-dimensional array of them, got shape "
            f"{scales.shape}, {scales!r}"
        )
    return scales
