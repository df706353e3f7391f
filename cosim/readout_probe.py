"""A run of a few hundred points that tells what a whole readout will take."""

import math
from dataclasses import dataclass, replace

from cosim.circuit.inventory import noisy_devices
from cosim.circuit.preparation import prepare
from cosim.circuit.simulator import simulate_prepared
from cosim.decision_noise import INJECTION, ROUNDS, SEEDS
from cosim.probe_run import BYTES, COPIES, POINTS, TRIAL_POINTS, Estimate
from cosim.readout_chain import STATES, Inquiry
from cosim.readout_decisions import COUNTED
from cosim.readout_injection import arriving_runs
from cosim.readout_input import GROUND
from cosim.readout_output import ReadoutPlan
from cosim.testbench import ReadoutBench
from cosim.voltage_noises import NetlistNoise

# Transients with which a comparator's threshold is found, with which the noise is closed in on, and
# those for each answer with a change of state (counted on the comparators of the tests).
_THRESHOLD, _PILOTS, _PATH = 16, 24, 7
# A noisy run over a clean one, in time (a modulator of 52 MOSFETs), and vectors for each device
# that makes noise: its bias in a clean run, and its current on the way to a noisy one.
_NOISIER, _BIAS, _CURRENT = 1.45, 4, 4
# Bytes of a whole readout in an archive: what does not grow with the number of points.
_RECORD = 3e5


@dataclass(frozen=True, slots=True)
class Transients:
    """How many runs of the netlist a readout takes, as far as that is known beforehand.

    Parameters
    ----------
    clean, noisy : int
        Without noise and with it, at the step.
    half : int
        At half the step.
    """

    clean: int
    noisy: int
    half: int


def transients_of(bench: ReadoutBench, plan: ReadoutPlan, inquiry: Inquiry) -> Transients:
    """Count the runs of the netlist that a readout takes.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    plan : ReadoutPlan
        With the deck.
    inquiry : Inquiry
        What is asked.

    Returns
    -------
    Transients
        A chain that bends takes a few more; noise that proves to be stationary takes no noisy run.
        Of a comparator about as many: how soon noisy decisions err is not known beforehand.
    """
    noise = [one for one in bench.noise if isinstance(one, NetlistNoise)]
    jumps = len(inquiry.jumps)
    if bench.readout.decision is not None:
        seeds = noise[0].seeds if noise else SEEDS
        noisy = _PILOTS + 2 * (ROUNDS + COUNTED) * seeds
        half = _THRESHOLD if bench.accuracy.floor else 0
        # One more clean run, at the threshold, gives the bias by which devices make noise.
        return Transients(_THRESHOLD + 1 + _PATH * jumps, noisy, half)
    weak = 3 if inquiry.answers is not None else 0
    injected = 0
    for one in noise:
        if one.method in ("auto", INJECTION):
            devices = len(noisy_devices(plan.deck).devices) if one.by_device else 0
            injected += one.seeds * (1 + devices)
            # What arrives is run alone as well, and once with all the rest.
            injected += arriving_runs(one.seeds) + 1 if inquiry.answers is not None else 0
    clean = len(STATES) * (2 if noise else 1) + jumps + weak
    return Transients(clean, injected, len(STATES) if bench.accuracy.floor else 0)


def estimate_readout(bench: ReadoutBench, plan: ReadoutPlan, inquiry: Inquiry) -> Estimate:
    """Run the first 200 points of a readout's |0>, and of its half step, and scale up.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    plan : ReadoutPlan
        The deck and the transient.
    inquiry : Inquiry
        What is asked.

    Returns
    -------
    Estimate
        From the deck's first points.

    Raises
    ------
    SimulationError, DeckError
        If the simulator fails.
    """
    counts = transients_of(bench, plan, inquiry)
    time = (counts.clean + _NOISIER * counts.noisy) * _time_of(plan, inquiry)
    if counts.half:
        time += counts.half * _time_of(plan.half_step(), inquiry)
    points = math.ceil(plan.request.stop / plan.request.step)
    vectors = 1 + len(plan.request.saves)
    # The runs of a chain are kept until its records are read, those of a comparator are not.
    decides = bench.readout.decision is not None
    kept = vectors * (COPIES if decides else COPIES + counts.clean)
    if bench.noise:
        devices = len(noisy_devices(plan.deck).devices)
        kept += devices * ((1 if decides else len(STATES)) * _BIAS + _CURRENT)
    return Estimate(time, float(BYTES * points * kept), _RECORD)


def _time_of(plan: ReadoutPlan, inquiry: Inquiry) -> float:
    """Give the wall-clock time of a whole transient in s."""
    request, deck = plan.request, inquiry.deck_of(plan, GROUND)
    times = []
    for points in (TRIAL_POINTS, POINTS):
        short = replace(request, stop=min(request.stop, points * request.step))
        times.append(simulate_prepared(prepare(deck, short), short).wall_time)
    # Of a run of a few points most is the loading, which many short runs must not be scaled by.
    each = max(times[1] - times[0], 0.0) / (POINTS - TRIAL_POINTS)
    return times[0] + each * request.stop / request.step
