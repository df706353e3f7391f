"""QuTiP's solvers: the rotating-wave twin of every run, and the kernel's reference."""

import math
from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import qutip
from scipy.interpolate import PPoly

from cosim.errors import EvolutionError, InputError, WaveformError
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.hamiltonian import anharmonic_energies
from cosim.quantum.operators import OperatorSystem
from cosim.quantum.qubit import Qubit
from cosim.quantum.steps import DriveSpline, check_window
from cosim.waveform import ComplexArray, FloatArray

# Verner's ninth-order pair: of QuTiP's integrators the most accurate for its time here.
METHOD = "vern9"


def evolve_rotating_wave(
    qubit: Qubit, rate: ComplexArray, t: FloatArray, *, rtol: float = 1e-9
) -> ComplexArray:
    """Evolve a qubit in the rotating-wave approximation with QuTiP and give the channel.

    Parameters
    ----------
    qubit : Qubit
    rate : ndarray of complex, shape (n,)
        Envelope of the drive rate in the qubit's frame in rad/s,
        2 pi k (I + jQ) exp(j (omega_c - omega_q) t).
    t : ndarray, shape (n,)
        Times in s, a uniform rising grid, n >= 4. The channel is that from the first to the last.
    rtol : float
        Relative tolerance of the solver, 1e-13 to 1e-3; the absolute one is a hundredth of it.

    Returns
    -------
    ndarray, shape (levels**2, levels**2)
        Column-stacking superoperator in the frame rotating at the qubit's frequency, phase zero
        at t = 0, as that of `cosim.quantum.evolution.evolve`.

    Raises
    ------
    WaveformError
        If the envelope is too short, not finite or not on a uniform rising grid.
    InputError
        If `rtol` is out of range.
    EvolutionError
        If the solver fails.

    Notes
    -----
    H/hbar = (rate a + rate^* a^dag)/2 + anharmonic part; between samples the envelope is a cubic
    spline. Measured at the default tolerance on a 120 ns pulse of 10 MHz: error 3e-10 for the
    elements of the computational subspace, up to 2e-7 for those of the sixth level; 5 ms with 2
    levels, 20 ms with 3, 120 ms with 4, 2.4 s with 6 (0.1 s with 6 and no loss).
    """
    rate, t = _check_envelope(rate, t)
    a = qutip.Qobj(qubit.annihilation())
    static = qutip.Qobj(np.diag(anharmonic_energies(qubit)))
    envelope = qutip.coefficient(rate, tlist=t)
    hamiltonian = qutip.QobjEvo([static, [a / 2, envelope], [a.dag() / 2, envelope.conj()]])
    # The fastest of the drive's own rotation, the anharmonic phases and the envelope's changes;
    # without the last the solver could step over a pulse that follows a long wait.
    largest = float(np.abs(rate).max())
    change = float(np.abs(np.diff(rate)).max() / (t[1] - t[0]) / largest) if largest > 0 else 0.0
    fastest = max(
        math.sqrt(qubit.levels - 1) * largest,
        abs(2 * math.pi * qubit.anharmonicity) * (qubit.levels - 2),
        change,
    )
    window = (float(t[0]), float(t[-1]))
    return _propagate(hamiltonian, qubit.collapse_operators(), window, fastest, rtol)


def evolve_reference(
    qubit: Qubit, drive: DriveSpline, start: float, stop: float, *, rtol: float = 1e-11
) -> ComplexArray:
    """Evolve a qubit under the full drive with QuTiP and give the channel.

    Parameters
    ----------
    qubit, drive, start, stop
        As in `cosim.quantum.evolution.evolve`.
    rtol : float
        Relative tolerance of the solver, 1e-13 to 1e-3; the absolute one is a hundredth of it.

    Returns
    -------
    ndarray, shape (levels**2, levels**2)
        Column-stacking superoperator in the frame rotating at the qubit's frequency, phase zero
        at t = 0.

    Raises
    ------
    InputError
        If the window is empty or `rtol` is out of range.
    WaveformError
        If the window leaves the drive's time range.
    EvolutionError
        If the solver fails.

    Notes
    -----
    Solved in the laboratory frame, which the compiled kernel never uses, and turned into the
    rotating frame at both ends. The solver starts anew wherever the drive jumps and at the tiny
    intervals that a circuit simulator leaves after a breakpoint.
    """
    n = np.arange(float(qubit.levels))
    a = qubit.annihilation()
    laboratory = OperatorSystem(
        energies=qubit.omega * n + anharmonic_energies(qubit),
        drive=np.asarray(a + a.conj().T, dtype=np.complex128),
        collapse=tuple(qubit.collapse_operators()),
    )
    return _evolve(laboratory, drive, start, stop, qubit.omega * n, rtol)


def evolve_operators(
    system: OperatorSystem,
    drive: DriveSpline,
    start: float,
    stop: float,
    *,
    scale: float = 1.0,
    rtol: float = 1e-10,
) -> ComplexArray:
    """Evolve a user's own system under the full drive with QuTiP and give the channel.

    Parameters
    ----------
    system : OperatorSystem
    drive : DriveSpline
        2 pi k v(t) in rad/s.
    start, stop : float
        Window in s on the drive's own time axis.
    scale : float
        Factor on the drive.
    rtol : float
        Relative tolerance of the solver, 1e-13 to 1e-3; the absolute one is a hundredth of it.

    Returns
    -------
    ndarray, shape (levels**2, levels**2)
        Column-stacking superoperator in the eigenbasis of the Hamiltonian, in the frame that
        rotates with it, phase zero at t = 0.

    Raises
    ------
    InputError
        If the window is empty or `rtol` is out of range.
    WaveformError
        If the window leaves the drive's time range.
    EvolutionError
        If the solver fails.
    """
    scaled = DriveSpline(drive.t, scale * drive.c)
    return _evolve(system, scaled, start, stop, system.energies, rtol)


def _evolve(
    system: OperatorSystem,
    drive: DriveSpline,
    start: float,
    stop: float,
    frame: FloatArray,
    rtol: float,
) -> ComplexArray:
    """Solve in the laboratory frame; turn by the frame's energies in rad/s at both ends."""
    start, stop = check_window(drive, start, stop)
    d = system.levels
    rate = qutip.coefficient(_searched(drive))
    static = qutip.Qobj(np.diag(system.energies))
    hamiltonian = qutip.QobjEvo([static, [qutip.Qobj(system.drive), rate]])
    fastest = float(np.ptp(system.energies))
    channel = np.eye(d * d, dtype=np.complex128)
    edges = _restarts(drive, start, stop)
    for first, last in pairwise(edges):
        window = (float(first), float(last))
        channel = _propagate(hamiltonian, system.collapse, window, fastest, rtol) @ channel
    into = np.kron(np.exp(-1j * frame * stop), np.exp(1j * frame * stop))
    back = np.kron(np.exp(1j * frame * start), np.exp(-1j * frame * start))
    return np.asarray(into[:, None] * channel * back[None, :])


def _searched(drive: DriveSpline) -> PPoly:
    """Give the drive to QuTiP in a form whose pieces it finds by search.

    QuTiP takes knots whose distances differ by less than 1e-8 for a uniform grid, which every
    uneven grid in seconds is at this scale, and then evaluates the wrong piece. An unused piece
    that starts one second earlier makes the grid uneven beyond doubt.
    """
    knots = np.concatenate([[drive.t[0] - 1.0], drive.t])
    return PPoly(np.concatenate([np.zeros((4, 1)), drive.c], axis=1), knots)


def _restarts(drive: DriveSpline, start: float, stop: float) -> FloatArray:
    """Give the ends of the window and the knots between them that an adaptive step cannot cross."""
    h = np.diff(drive.t)
    c = drive.c
    end = ((c[0] * h + c[1]) * h + c[2]) * h + c[3]
    jump = np.abs(c[3, 1:] - end[:-1]) > 1e-9 * np.abs(c[3]).max()
    tiny = h < 0.01 * h.max()
    inner = drive.t[1:-1][jump | tiny[:-1] | tiny[1:]]
    inner = inner[(inner > start) & (inner < stop)]
    return np.concatenate([[start], inner, [stop]])


def _propagate(
    hamiltonian: qutip.QobjEvo,
    collapse: Sequence[ComplexArray],
    window: tuple[float, float],
    fastest: float,
    rtol: float,
) -> ComplexArray:
    """Run QuTiP's propagator over a window; `fastest` in rad/s bounds its steps."""
    start, stop = window
    if not 1e-13 <= rtol <= 1e-3:
        raise InputError(f"solver tolerance: wanted rtol from 1e-13 to 1e-3, got {rtol!r}")
    step = (stop - start) / 4
    if fastest > 0:
        step = min(step, math.pi / (2 * fastest))
    options = {
        "method": METHOD,
        "rtol": rtol,
        "atol": rtol / 100,
        "max_step": step,
        "nsteps": 10**8,
        "progress_bar": "",
    }
    operators = [qutip.Qobj(operator) for operator in collapse]
    try:
        propagators = qutip.propagator(hamiltonian, [start, stop], operators, options=options)
    except (qutip.IntegratorException, ValueError, ArithmeticError) as error:
        raise EvolutionError(
            f"QuTiP's solver failed between {start:.6g} s and {stop:.6g} s: {error}",
            hint="loosen the tolerance or shorten the window",
        ) from error
    last = np.asarray(propagators[-1].full())
    return last if operators else unitary_superoperator(last)


def _check_envelope(rate: ComplexArray, t: FloatArray) -> tuple[ComplexArray, FloatArray]:
    rate = np.ascontiguousarray(rate, dtype=np.complex128)
    t = np.ascontiguousarray(t, dtype=np.float64)
    if t.ndim != 1 or rate.shape != t.shape or t.size < 4:
        raise WaveformError(
            f"envelope: wanted rate and time of one shape (n,) with n >= 4, got {rate.shape} and "
            f"{t.shape}"
        )
    if not (np.isfinite(t).all() and np.isfinite(rate).all()):
        bad = int(np.flatnonzero(~(np.isfinite(t) & np.isfinite(rate)))[0])
        raise WaveformError(f"envelope: sample {bad} of {t.size} is not finite")
    steps = np.diff(t)
    mean = float(t[-1] - t[0]) / (t.size - 1)
    if not (mean > 0 and np.abs(steps - mean).max() <= 1e-6 * mean):
        raise WaveformError(
            f"envelope: wanted a uniform rising time grid, got steps from {steps.min():.6g} s to "
            f"{steps.max():.6g} s"
        )
    return rate, t
