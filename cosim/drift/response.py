"""What moves do to a gate whose frame and calibration stay those of the trim."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cosim.drift.table import Process
from cosim.errors import CosimError, InputError
from cosim.quantum.coherent_error import EXACT, ROOT, error_vector
from cosim.quantum.fidelity import average_gate_fidelity
from cosim.quantum.frame import phase_frame
from cosim.quantum.operators import OperatorSystem
from cosim.result import Fidelity
from cosim.sensitivity.changed_gates import ChangedGate, ChangedGates, Changes
from cosim.sensitivity.response import Outcome
from cosim.waveform import ComplexArray, FloatArray

# A response is known so many standard deviations beyond the linear drift; what is farther out, one
# move in two million, counts as if it were there.
REACH = 5.0
# Points of a response for which the circuit runs; where none does, they are doubled until the
# response between them is known to this part of its largest.
NODES, MOST_NODES, CLOSE = 5, 65, 1e-4
# Changes below this are rounding.
_LEAST = 1e-8


@dataclass(frozen=True, slots=True)
class Frozen:
    """How a gate is judged: by frame, scale and reference frequency of the trim.

    Parameters
    ----------
    view : Fidelity
        Frame, scale and carrier offset.
    frequency : float
        Of the qubit in Hz, NaN for a system given by operators.
    target : ndarray of complex, shape (2, 2)
        Target unitary.
    """

    view: Fidelity
    frequency: float
    target: ComplexArray

    def outcome(self, gate: ChangedGate) -> Outcome:
        """Judge a gate.

        Parameters
        ----------
        gate : ChangedGate
            From `ChangedGates.run`.

        Returns
        -------
        Outcome
            1 - F_avg and the error vector.
        """
        view, (start, stop) = self.view, gate.drive.window
        channel = gate.pulse.channel(scale=view.amplitude_scale, detuning=view.detuning)
        qubit = gate.drive.qubit
        if not isinstance(qubit, OperatorSystem) and qubit.frequency != self.frequency:
            # The channel is in the frame of the qubit as it is now, the pulses are played in that
            # of the qubit as it was.
            turn = 2.0 * math.pi * (qubit.frequency - self.frequency)
            channel = phase_frame(channel, -turn * start, turn * stop)
        framed = phase_frame(channel, view.z_before, view.z_after)
        value = 1.0 - average_gate_fidelity(framed, self.target)
        return Outcome(value, error_vector(framed, self.target))


@dataclass(frozen=True, slots=True)
class Response:
    """What the moves of a process change in the error vector and in the rest of the infidelity.

    Parameters
    ----------
    reach : float
        Largest move for which it is known.
    curve : ndarray, shape (n, m + 1)
        Chebyshev coefficients on [-reach, reach] of the vector's m parts and of the rest.
    """

    reach: float
    curve: FloatArray

    def at(self, moves: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Give the changes.

        Parameters
        ----------
        moves : ndarray, shape (k,)
            In the unit of the process.

        Returns
        -------
        vectors : ndarray, shape (k, m)
        rests : ndarray, shape (k,)
        """
        x = np.clip(moves, -self.reach, self.reach) / self.reach
        found = np.asarray(np.polynomial.chebyshev.chebval(x, self.curve).T, dtype=np.float64)
        return found[:, :-1], found[:, -1]


def find_responses(
    gates: ChangedGates, frozen: Frozen, centre: Outcome, processes: Sequence[Process], t: float
) -> list[Response]:
    """Run a gate at moves of each process alone.

    Parameters
    ----------
    gates : ChangedGates
        Of the testbench.
    frozen : Frozen
        How they are judged.
    centre : Outcome
        Without a move.
    processes : sequence of Process
        What moves.
    t : float
        Longest time since the trim, in s.

    Returns
    -------
    list of Response
        One each.

    Raises
    ------
    InputError
        If a move is impossible for a number.
    SimulationError
        If a moved gate cannot be simulated.
    """
    reaches = [abs(item.motion.mean(t)) + REACH * item.motion.deviation(t) for item in processes]
    # The circuits of all processes in one family.
    variants: list[Changes] = []
    for process, reach in zip(processes, reaches, strict=True):
        variants += [moved(process, reach * x) for x in _nodes(NODES)] if process.simulated else []
    gates.run(variants)
    return [
        _response(gates, frozen, centre, process, reach)
        for process, reach in zip(processes, reaches, strict=True)
    ]


def moved(process: Process, move: float) -> Changes:
    """Give the numbers that a move changes.

    Parameters
    ----------
    process : Process
        What moves.
    move : float
        How far, in its unit.

    Returns
    -------
    tuple of (NumberKey, float)
    """
    if move == 0.0:
        return ()
    return tuple((key, value + factor * move) for key, value, factor in process.moves)


def moved_together(processes: Sequence[Process], moves: FloatArray) -> Changes:
    """Give the numbers that the moves of several processes change.

    Parameters
    ----------
    processes : sequence of Process
        What moves.
    moves : ndarray, shape (processes,)
        How far, in their units.

    Returns
    -------
    tuple of (NumberKey, float)
    """
    values = {key: value for item in processes for key, value, _ in item.moves}
    for process, move in zip(processes, moves.tolist(), strict=True):
        for key, _, factor in process.moves:
            values[key] += factor * move
    return tuple(values.items())


def cost_of(vectors: FloatArray) -> FloatArray:
    """Give what error vectors cost: their square, and less where they go on in a straight line.

    Parameters
    ----------
    vectors : ndarray, shape (..., m)
        As `cosim.quantum.coherent_error.error_vector` gives them, or sums of such.

    Returns
    -------
    ndarray, shape (...)
        1 - F_avg of the coherent part.
    """
    length = np.linalg.norm(vectors[..., :6], axis=-1) / ROOT
    half = EXACT + (length - math.sin(EXACT)) / math.cos(EXACT)
    sine = np.where(length <= math.sin(EXACT), length, np.sin(half))
    leaked = np.sum(vectors[..., 6:] ** 2, axis=-1)
    found: FloatArray = ROOT**2 * sine**2 + leaked
    return found


def _response(
    gates: ChangedGates, frozen: Frozen, centre: Outcome, process: Process, reach: float
) -> Response:
    width = centre.vector.size + 1
    if reach == 0.0:
        return Response(1.0, np.zeros((1, width)))
    count = NODES
    rows = _rows(gates, frozen, centre, process, reach, count)
    while not process.simulated and count < MOST_NODES:
        between = Response(reach, _curve(rows))
        count = 2 * count - 1
        rows = _rows(gates, frozen, centre, process, reach, count)
        vectors, rests = between.at(reach * _nodes(count))
        missed = np.abs(np.column_stack([vectors, rests]) - rows).max()
        if missed <= max(CLOSE * float(np.abs(rows).max()), _LEAST):
            break
    return Response(reach, _curve(rows))


def _rows(
    gates: ChangedGates,
    frozen: Frozen,
    centre: Outcome,
    process: Process,
    reach: float,
    count: int,
) -> FloatArray:
    """Run at the nodes; give the changes of vector and rest, shape (count, m + 1)."""
    rows = []
    nodes = reach * _nodes(count)
    for move, gate in zip(
        nodes.tolist(), gates.run([moved(process, x) for x in nodes.tolist()]), strict=True
    ):
        if isinstance(gate, InputError):
            raise InputError(
                f"the drift of '{process.name}' by {move:g} is impossible: {gate.message}",
                hint="shorten the horizon, or look at its size",
            )
        if isinstance(gate, CosimError):
            raise gate
        found = frozen.outcome(gate)
        rows.append([*(found.vector - centre.vector), found.rest - centre.rest])
    return np.array(rows)


def _nodes(count: int) -> FloatArray:
    """Give the extrema of a Chebyshev polynomial, -1 to 1; the middle one is zero exactly."""
    found = -np.cos(math.pi * np.arange(count) / (count - 1))
    found[count // 2] = 0.0
    return np.asarray(found)


def _curve(rows: FloatArray) -> FloatArray:
    nodes = _nodes(len(rows))
    return np.asarray(np.polynomial.chebyshev.chebfit(nodes, rows, len(rows) - 1))
