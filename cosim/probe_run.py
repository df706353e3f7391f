"""A run of a few hundred points that tells what the whole run will take."""

import math
from dataclasses import dataclass, replace

from cosim.capture import Plan, capture_probe
from cosim.circuit.analysis import TransientResult

POINTS = 200
TRIAL_POINTS = 10

# Bytes per number in memory and, after compression, in an archive (measured: 0.64 of the size).
BYTES, PACKED = 8, 0.64 * 8

# Copies of the vectors that a run holds at most: in ngspice, on the way, in the result.
COPIES = 3


@dataclass(frozen=True, slots=True)
class Estimate:
    """What a testbench will take.

    Parameters
    ----------
    time : float
        Wall-clock time of ngspice in s, both runs if there are two.
    memory : float
        Memory for the vectors in byte, on top of the program's own.
    disk : float
        Size of the archive in byte.
    """

    time: float
    memory: float
    disk: float


def try_deck(plan: Plan) -> None:
    """Load the deck, find its operating point and take a few steps.

    Parameters
    ----------
    plan : Plan
        From `cosim.capture.make_plan`.

    Raises
    ------
    SimulationError, DeckError
        If ngspice does not take the deck.
    """
    _short_run(plan, TRIAL_POINTS)


def estimate_run(plan: Plan, *, floor: bool) -> Estimate:
    """Run the first 200 points of a plan, and of its half step, and scale up.

    Parameters
    ----------
    plan : Plan
        From `cosim.capture.make_plan`.
    floor : bool
        Whether the run at half the step will be made too.

    Returns
    -------
    Estimate
        From the deck's first points: a circuit that is quiet at first takes longer later.

    Raises
    ------
    SimulationError, DeckError
        If the simulator fails.
    """
    plans = (plan, plan.half_step()) if floor else (plan,)
    time = 0.0
    for item in plans:
        request = item.request
        result = _short_run(item, POINTS)
        # Loading the deck is part of the time that is scaled; it is small beside a whole run.
        share = math.ceil(request.stop / request.step) / result.time.size
        time += result.wall_time * share
    points = math.ceil(plans[-1].request.stop / plans[-1].request.step)
    vectors = 1 + len(plan.request.saves)
    kept = math.ceil(plan.request.stop / plan.request.step)
    return Estimate(
        time=time,
        memory=float(COPIES * BYTES * points * vectors),
        disk=PACKED * kept * (2 + len(plan.request.saves)),
    )


def _short_run(plan: Plan, points: int) -> TransientResult:
    request = plan.request
    short = replace(request, stop=min(request.stop, points * request.step))
    shot = capture_probe(replace(plan, request=short, baseband=False))
    assert shot.result is not None
    return shot.result
