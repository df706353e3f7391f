"""The ideal pulse of a specification: its envelope, calibrated on the qubit, on a grid of cells.

All is in the frame that rotates at the qubit's frequency, with the drive about x: a rotation about
another axis of the plane is the same thing turned about z, and costs the same. A cell carries the
mean of the envelope over it, so that an edge between two cells keeps its time.
"""

import math
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.optimize import minimize

from cosim.errors import TestbenchError
from cosim.noise_frame import unitary_losses
from cosim.quantum.batch import evolve_batch, propagate_batch
from cosim.quantum.batch_drive import BatchDrive
from cosim.quantum.channel import unitary_superoperator
from cosim.quantum.fidelity import average_gate_fidelity, target_unitary
from cosim.quantum.frame import free_frame, phase_frame
from cosim.quantum.qubit import Qubit
from cosim.specification.request import PulseTable
from cosim.waveform import ComplexArray, FloatArray

# Cells of the pulse, and those in a turn of the third level against the drive: halving both changes
# what an imperfection costs by less than a part in a thousand, white noise that reaches the third
# level by 2 %.
CELLS = 128
PER_TURN = 10.0
# Room before and after the pulse, for edges that come early or late, as part of the cells.
ROOM = 16
# Points of the running integral of a smooth envelope.
KNOTS = 4001
# More would take minutes.
MOST_CELLS = 4000


@dataclass(frozen=True, slots=True)
class Envelope:
    """The running integral of an envelope I + jQ, straight between its knots.

    Parameters
    ----------
    times : ndarray, shape (k,)
        In s from the start of the pulse, rising.
    area : ndarray of complex, shape (k,)
        Integral of the envelope up to there in s: its peak is 1.
    """

    times: FloatArray = field(metadata={"unit": "s"})
    area: ComplexArray = field(metadata={"unit": "s"})

    def up_to(self, times: FloatArray) -> ComplexArray:
        """Give the integral up to any times, constant before and after the pulse.

        Parameters
        ----------
        times : ndarray, any shape
            In s.

        Returns
        -------
        ndarray of complex, shape as `times`
            In s.
        """
        real = np.interp(times, self.times, self.area.real)
        return np.asarray(real + 1j * np.interp(times, self.times, self.area.imag))


@dataclass(frozen=True, slots=True)
class IdealPulse:
    """The ideal pulse, calibrated.

    Parameters
    ----------
    qubit : Qubit
        With its decoherence.
    envelope : Envelope
        Of peak 1.
    duration : float
        In s.
    angle : float
        Of the target rotation in rad, positive.
    peak : float
        Drive rate in rad/s at the peak of the envelope, calibrated.
    offset : float
        Carrier less qubit in Hz, calibrated or given.
    before, after : float
        Virtual Z in rad, frozen: they belong to the pulse, whatever disturbs it.
    cells : int
        Cells of the pulse; there are `room` more before and after it.
    """

    qubit: Qubit
    envelope: Envelope
    duration: float = field(metadata={"unit": "s"})
    angle: float = field(metadata={"unit": "rad"})
    peak: float = field(metadata={"unit": "rad/s"})
    offset: float = field(metadata={"unit": "Hz"})
    before: float = field(metadata={"unit": "rad"})
    after: float = field(metadata={"unit": "rad"})
    cells: int = field(metadata={"unit": "1"})

    @property
    def room(self) -> int:
        """Cells before, and after, the pulse."""
        return math.ceil(self.cells / ROOM)

    @property
    def step(self) -> float:
        """Length of a cell in s."""
        return self.duration / self.cells

    @property
    def edges(self) -> FloatArray:
        """Edges of all cells in s from the start of the pulse, shape (cells + 2 room + 1,)."""
        return np.asarray(self.step * np.arange(-self.room, self.cells + self.room + 1.0))

    @property
    def middles(self) -> FloatArray:
        """Middles of all cells in s, shape (cells + 2 room,)."""
        return np.asarray(self.edges[:-1] + 0.5 * self.step)

    @property
    def within(self) -> FloatArray:
        """1 for the cells of the pulse itself, 0 for the others, shape (cells + 2 room,)."""
        found = np.zeros(self.cells + 2 * self.room)
        found[self.room : self.room + self.cells] = 1.0
        return found

    @property
    def lossless(self) -> Qubit:
        """The qubit without decoherence."""
        return replace(self.qubit, t1=math.inf, t2=math.inf)

    def losses(self, unitaries: ComplexArray) -> FloatArray:
        """Give 1 - F_avg of evolutions against the target.

        Parameters
        ----------
        unitaries : ndarray, shape (batch, d, d)
            In the qubit's frame, without the virtual Z.

        Returns
        -------
        ndarray, shape (batch,)
            Leakage included.
        """
        return unitary_losses(self.against_target(unitaries))[0]

    def against_target(self, unitaries: ComplexArray) -> ComplexArray:
        """Give V^dag Z(after) U Z(before), shape (batch, d, d)."""
        n = np.arange(self.qubit.levels)
        turned = np.exp(-1j * self.after * n)[:, None] * unitaries * np.exp(-1j * self.before * n)
        target = np.eye(self.qubit.levels, dtype=np.complex128)
        target[:2, :2] = target_unitary((1.0, 0.0, 0.0), self.angle)
        return np.asarray(target.conj().T @ turned)


def make_pulse(table: PulseTable, qubit: Qubit, angle: float, fastest: float = 0.0) -> IdealPulse:
    """Make the ideal pulse and calibrate it.

    Parameters
    ----------
    table : PulseTable
        What it looks like.
    qubit : Qubit
        On which it plays.
    angle : float
        Of the rotation in rad, above 0 and at most 2 pi.
    fastest : float
        Greatest offset from the carrier in Hz that the cells have to follow.

    Returns
    -------
    IdealPulse
        Amplitude, virtual Z and, unless the carrier is given, its frequency give the least
        infidelity without decoherence.

    Raises
    ------
    TestbenchError
        If DRAG is asked of two levels, or the calibration does not come near the target.
    """
    if PER_TURN * fastest * table.duration > MOST_CELLS:
        raise TestbenchError(
            f"table [specify]: an offset of {fastest:g} Hz makes {fastest * table.duration:.4g} "
            f"turns in the pulse; at most {MOST_CELLS / PER_TURN:g} are followed",
            hint="leave out what lies so far from the carrier",
        )
    if table.drag != 0.0 and qubit.levels == 2:
        raise TestbenchError(
            "table [specify.pulse], key 'drag': a qubit of two levels has nothing to leak to",
            hint='kind = "transmon" in [qubit] has further levels',
        )
    turns = table.duration * abs(qubit.anharmonicity) if qubit.levels > 2 else 0.0
    cells = max(CELLS, math.ceil(PER_TURN * max(turns, fastest * table.duration)))
    shape = envelope_of(table, qubit)
    area = float(shape.area[-1].real)
    offset = 0.0 if isinstance(table.carrier, str) else table.carrier - qubit.frequency
    pulse = IdealPulse(qubit, shape, table.duration, angle, angle / area, offset, 0.0, 0.0, cells)
    if qubit.levels > 2 or offset != 0.0:
        pulse = _calibrated(pulse, isinstance(table.carrier, str))
    lost = base_infidelity(pulse)
    if lost > 0.1:
        raise TestbenchError(
            f"table [specify.pulse]: calibrated as well as it goes, the pulse itself has an "
            f"infidelity of {lost:.3g}",
            hint="it is too short for the levels of the qubit, or its carrier too far away",
        )
    return pulse


def envelope_of(table: PulseTable, qubit: Qubit) -> Envelope:
    """Give the envelope of a pulse, of peak 1.

    Parameters
    ----------
    table : PulseTable
        What it looks like.
    qubit : Qubit
        Of whose anharmonicity DRAG makes use.

    Returns
    -------
    Envelope
    """
    duration = table.duration
    if table.shape == "square":
        return Envelope(np.array([0.0, duration]), np.array([0.0, duration], dtype=np.complex128))
    t = np.linspace(0.0, duration, 2 * KNOTS - 1)
    if table.shape == "gaussian":
        sigma = duration / 4.0 if table.sigma is None else table.sigma
        low = math.exp(-0.125 * (duration / sigma) ** 2)
        level = (np.exp(-0.5 * ((t - 0.5 * duration) / sigma) ** 2) - low) / (1.0 - low)
    else:
        edge = 0.5 * duration if table.edge is None else table.edge
        from_end = np.minimum(t, duration - t)
        level = 0.5 - 0.5 * np.cos(math.pi * np.clip(from_end / edge, 0.0, 1.0))
    # Simpson's rule from knot to knot.
    h = t[1] - t[0]
    parts = h / 3.0 * (level[:-2:2] + 4.0 * level[1::2] + level[2::2])
    area = np.concatenate([[0.0], np.cumsum(parts)]).astype(np.complex128)
    if table.drag != 0.0:
        area += 1j * table.drag * level[::2] / (2.0 * math.pi * qubit.anharmonicity)
    return Envelope(t[::2], area)


def clean_rate(pulse: IdealPulse) -> ComplexArray:
    """Give the drive rate of the ideal pulse in the qubit's frame.

    Parameters
    ----------
    pulse : IdealPulse

    Returns
    -------
    ndarray of complex, shape (cells + 2 room,)
        In rad/s.
    """
    level = np.diff(pulse.envelope.up_to(pulse.edges)) / pulse.step
    turn = np.exp(2j * math.pi * pulse.offset * pulse.middles)
    return np.asarray(pulse.peak * level * turn)


def tone_factor(pulse: IdealPulse, offsets: FloatArray) -> FloatArray:
    """Give the factor with which a tone in the middle of a cell stands for its course over it.

    Parameters
    ----------
    pulse : IdealPulse
    offsets : ndarray, any shape
        From the carrier in Hz.

    Returns
    -------
    ndarray, shape as `offsets`
        For the transition next to the tone, the first or the second of the qubit.

    Notes
    -----
    Over a cell the transition at an offset f_m turns against a drive that stands still, and takes
    sinc(f_m step) of it, while of the tone itself it takes the mean, sinc((f - f_m) step).
    """
    near = np.zeros_like(offsets)
    if pulse.qubit.levels > 2:
        second = pulse.qubit.anharmonicity - pulse.offset
        near = np.where(np.abs(offsets - second) < np.abs(offsets), second, 0.0)
    return np.asarray(np.sinc((offsets - near) * pulse.step) / np.sinc(near * pulse.step))


def base_infidelity(pulse: IdealPulse) -> float:
    """Give what the ideal pulse itself loses without decoherence: leakage and what stays.

    Parameters
    ----------
    pulse : IdealPulse

    Returns
    -------
    float
        1 - F_avg.
    """
    found = propagate_batch(pulse.lossless, BatchDrive(pulse.step, clean_rate(pulse))).unitaries
    return float(pulse.losses(found)[0])


def clean_channels(pulse: IdealPulse) -> tuple[ComplexArray, ComplexArray]:
    """Evolve the ideal pulse with decoherence and without, over its duration alone.

    Parameters
    ----------
    pulse : IdealPulse

    Returns
    -------
    tuple of two ndarrays, shape (d^2, d^2)
        With and without, virtual Z included.
    """
    rate = clean_rate(pulse)[pulse.room : pulse.room + pulse.cells]
    drive = BatchDrive(pulse.step, rate)
    lossy = evolve_batch(pulse.qubit, drive).channels[0]
    clean = unitary_superoperator(propagate_batch(pulse.lossless, drive).unitaries[0])
    return (
        phase_frame(lossy, pulse.before, pulse.after),
        phase_frame(clean, pulse.before, pulse.after),
    )


def channel_infidelity(pulse: IdealPulse, channel: ComplexArray) -> float:
    """Give 1 - F_avg of a channel against the target of a pulse.

    Parameters
    ----------
    pulse : IdealPulse
    channel : ndarray, shape (d^2, d^2)
        Virtual Z included.

    Returns
    -------
    float
    """
    return 1.0 - average_gate_fidelity(channel, target_unitary((1.0, 0.0, 0.0), pulse.angle))


def _calibrated(pulse: IdealPulse, with_carrier: bool) -> IdealPulse:
    """Find amplitude, carrier and virtual Z of least infidelity without decoherence."""
    target = target_unitary((1.0, 0.0, 0.0), pulse.angle)
    unit = 0.01 / pulse.duration

    def at(x: FloatArray) -> IdealPulse:
        offset = pulse.offset + (float(x[1]) * unit if with_carrier else 0.0)
        return replace(pulse, peak=pulse.peak * (1.0 + 0.01 * float(x[0])), offset=offset)

    def frame_of(trial: IdealPulse) -> tuple[float, float, float]:
        drive = BatchDrive(trial.step, clean_rate(trial))
        found = propagate_batch(trial.lossless, drive).unitaries[0]
        best = free_frame(unitary_superoperator(found), target)
        return 1.0 - best.average_gate_fidelity, best.before, best.after

    corners = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    size = 2 if with_carrier else 1
    # 1e-13 in the infidelity is rounding.
    found = minimize(  # type: ignore[call-overload]  # The stubs want no array in options.
        lambda x: frame_of(at(x))[0],
        corners[0, :size],
        method="Nelder-Mead",
        options={"initial_simplex": corners[: size + 1, :size], "xatol": 1e-5, "fatol": 1e-13},
    )
    best = at(found.x)
    _, before, after = frame_of(best)
    return replace(best, before=before, after=after)
