"""The readout path where the netlist's own comparator decides.

A decision is one bit, so what makes it right is found from when it changes. The signal is put on a
scale x: the answer E(x) = (1 - x) E(0) + x E(1) of the resonator, 0 for |0> and 1 for |1>. Without
noise the decision changes at one x. Noisy runs around it, each with its own seed, give the
probability P(1|x) = Phi((x - offset)/noise) by a probit fit, and hence the decisions for the two
states. An answer with a change of state is worth the x that makes the clean comparator change its
decision after as much of E(1) - E(0) is added: the comparator sees both alike there.

What is approximated: the noise and the slope of the chain are those around the threshold, and the
two answers lie on a straight line from there. Where the chain saturates in between, decisions
counted at the two answers themselves would differ from that, and a warning says so. The bias of the
devices, by which they make noise, is that at the threshold. A change of state after the window's
end is not counted, and at most one within it. Detection and its closed form are otherwise those of
`cosim.dsp.detection`.
"""

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from scipy.interpolate import PchipInterpolator
from scipy.special import bdtr, bdtrc, ndtr

from cosim.circuit.deck import Deck
from cosim.decision_noise import (
    DecidingNoise,
    count_ones,
    deciding_noise,
    decision_counts,
    fit_decisions,
)
from cosim.decision_result import DecisionCounts, DecisionPaths, DecisionResult
from cosim.dsp.decisions import ProbitFit
from cosim.dsp.detection.assignment import ErrorItems
from cosim.dsp.detection.outcomes import wrong_shares
from cosim.dsp.detection.projection import TABLE, Projection
from cosim.dsp.detection.records import Preparation, Transitions
from cosim.errors import TestbenchError
from cosim.readout_chain import Inquiry, make_inquiry, transitions_of
from cosim.readout_comparator import FINEST, Comparator, Threshold, find_changes, find_threshold
from cosim.readout_guards import dispersive_warnings
from cosim.readout_input import EXCITED, GROUND, input_frequency_of
from cosim.readout_output import capture_of, make_readout_plan
from cosim.readout_progress import RunProgress
from cosim.record import Clock, make_record
from cosim.testbench import ReadoutBench
from cosim.waveform import FloatArray

# Signals between which an answer with a change of state is looked for; what lies beyond is as sure.
REACH = (-1.0, 2.0)
COUNTED = 4  # times the seeds: decisions at each of the answers themselves
UNLIKELY = 1e-3  # probability of a count under the fit, below which a warning is due


def run_decisions(
    bench: ReadoutBench,
    *,
    deck: Deck | None = None,
    progress: Callable[[float], None] | None = None,
) -> DecisionResult:
    """Run a testbench whose [readout] has a `decision`, up to the assignment error.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.
    deck : Deck or None
        As `cosim.decks.read_deck` gives it, where it has been read already.
    progress : callable or None
        Called with the simulated time in s, all runs added up, now and then.

    Returns
    -------
    DecisionResult
        A design estimate.

    Raises
    ------
    InputError
        If the testbench or the deck cannot be used, or the node never switches.
    SimulationError
        If ngspice fails.
    """
    clock = Clock()
    table, pulse = bench.readout, bench.resonator
    where = f"{bench.source or 'the testbench'}, table [readout]"
    if table.decision is None or pulse is None:
        raise TestbenchError(
            f"{where}: a comparator's decisions need the key 'decision' and a [resonator], whose "
            "answers are scaled until the decision changes",
            hint="of a [sensor] take the output in front of the comparator as 'probe'",
        )
    frequency = input_frequency_of(pulse, table)
    plan = make_readout_plan(bench, frequency, deck)
    plan = replace(plan, progress=RunProgress(progress))
    instant = table.window[1] if table.decide_at is None else table.decide_at
    if not 0.0 < instant <= plan.request.stop:
        raise TestbenchError(
            f"{where}, key 'decide_at': {1e9 * instant:g} ns does not lie within the run of 0 ns "
            f"to {1e9 * plan.request.stop:g} ns"
        )
    clock.lap("deck")
    inquiry = make_inquiry(bench, plan)
    assert inquiry.answers is not None  # There is a resonator.
    comparator = Comparator(plan, table, inquiry.answers, instant)
    clock.lap("resonator")
    threshold = find_threshold(comparator)
    clock.lap("threshold")
    noise = deciding_noise(bench, comparator, threshold)
    fit, fitted = fit_decisions(comparator, threshold, noise)
    clock.lap("noise")
    paths = _paths(comparator, threshold, inquiry, fit.noise)
    clock.lap("changes of state")
    projection = _projection(paths, inquiry.begin, table.window[1], fit.noise)
    preparation = Preparation(table.thermal_population, table.preparation_error)
    chances = transitions_of(bench), preparation
    matrix, errors = _split(projection, *chances, fit.offset)
    counted = _counted(comparator, threshold, noise)
    clock.lap("counts")
    floor = _floor(bench, comparator, threshold, fit)
    clock.lap("floor")
    clean = noise.clean.result
    photons = max(float(inquiry.answers.fields[name].photons.max()) for name in (GROUND, EXCITED))
    warnings = (
        *plan.notices,
        *inquiry.notices,
        *dispersive_warnings(pulse, photons, table.t1),
        *noise.notices,
        *_judged(threshold, fit, counted, table.decision),
    )
    distance = np.abs(inquiry.answers.emf[EXCITED] - inquiry.answers.emf[GROUND])
    return DecisionResult(
        title=bench.title,
        assignment_error=errors.total,
        standard_error=_standard_error(projection, *chances, fit),
        assignment_matrix=matrix,
        snr=1.0 / fit.noise,
        errors=errors,
        offset=fit.offset,
        offset_error=fit.offset_error,
        noise=fit.noise,
        noise_error=fit.noise_error,
        clean_offset=threshold.offset,
        signal=float(distance.max()),
        decide_at=instant,
        latency=instant - table.window[1],
        noise_method=noise.method,
        left_out=tuple(noise.clean.inventory.left_out),
        numerical_floor=floor,
        fitted=fitted,
        counted=counted,
        paths=paths,
        warnings=tuple(dict.fromkeys(warnings)),
        run=make_record(
            bench, inquiry.recorded(capture_of(plan, clean)), frequency or math.nan, clock
        ),
    )


def _counted(comparator: Comparator, threshold: Threshold, noise: DecidingNoise) -> DecisionCounts:
    """Count decisions at the two answers themselves, with seeds of their own."""
    trials = COUNTED * noise.seeds
    first = comparator.table.seed + 10**6  # Beyond those of the fit.
    rows = [
        (x, count_ones(comparator, threshold, noise, x, range(start, start + trials)), trials)
        for x, start in ((0.0, first), (1.0, first + trials))
    ]
    return decision_counts(rows)


def _paths(
    comparator: Comparator, threshold: Threshold, inquiry: Inquiry, sigma: float
) -> DecisionPaths:
    """Find what each answer with a change of state is worth, to a quarter of the noise."""
    positions = np.zeros(0)
    names = inquiry.jumps
    if names:
        rows = np.array([comparator.answers.emf[name] for name in names])
        low, high = (np.full(len(names), threshold.offset - end) for end in REACH[::-1])
        width = max(0.25 * sigma, FINEST)
        found = find_changes(comparator, rows, threshold.rising, (low, high), width)
        positions = threshold.offset - found
    decays = inquiry.decay_times.size
    return DecisionPaths(
        inquiry.decay_times, positions[:decays], inquiry.excitation_times, positions[decays:]
    )


def _projection(paths: DecisionPaths, begin: float, end: float, sigma: float) -> Projection:
    """Put the signals into the terms of the detection room: values 0 and 1, Gaussian noise."""
    stop = end - begin
    grid = np.linspace(0.0, stop, TABLE)

    def along(times: FloatArray, inner: FloatArray, state: int) -> FloatArray:
        # At the ends of the stretch stand the runs without a change.
        ends = (float(1 - state), float(state))
        if times.size == 0:
            return np.full(grid.size, ends[1])
        knots = np.concatenate([[0.0], times - begin, [stop]])
        return np.asarray(PchipInterpolator(knots, [ends[0], *inner, ends[1]])(grid))

    path = np.array(
        [
            along(paths.excitation_times, paths.excitations, 0),
            along(paths.decay_times, paths.decays, 1),
        ]
    )
    return Projection(
        weights=np.ones(1, dtype=np.complex128),
        step=stop,
        start=0.0,
        stop=stop,
        axis=0.0,
        points=np.array([0.0, 1.0], dtype=np.complex128),
        values=np.array([0.0, 1.0]),
        sigmas=np.full(2, sigma),
        path_times=grid,
        path_points=path.astype(np.complex128),
        path_sigmas=np.full(path.shape, sigma),
        coarse_points=path.astype(np.complex128),
        simulated=(paths.excitation_times.size, paths.decay_times.size),
        quadratures=1,
    )


def _split(
    projection: Projection, transitions: Transitions, preparation: Preparation, offset: float
) -> tuple[FloatArray, ErrorItems]:
    """Give P(i|j), and what the error is made of in the order of the detection room."""
    steps = (
        (Transitions(), Preparation()),
        (Transitions(up=transitions.up), Preparation()),
        (transitions, Preparation()),
        (transitions, preparation),
    )
    wrong = [wrong_shares(projection, *step, offset) for step in steps]
    totals = [sum(pair) / 2 for pair in wrong]
    first, second = wrong[-1]
    return np.array([[1 - first, second], [first, 1 - second]]), ErrorItems(
        separation=totals[0],
        saturation=0.0,
        quantisation=0.0,
        excitation=totals[1] - totals[0],
        decay=totals[2] - totals[1],
        preparation=totals[3] - totals[2],
    )


def _standard_error(
    projection: Projection, transitions: Transitions, preparation: Preparation, fit: ProbitFit
) -> float:
    """Give by how much the assignment error changes with offset and noise one error off each."""

    def error(offset: float, sigma: float) -> float:
        sigmas, along = np.full(2, sigma), np.full_like(projection.path_sigmas, sigma)
        moved = replace(projection, sigmas=sigmas, path_sigmas=along)
        return sum(wrong_shares(moved, transitions, preparation, offset)) / 2

    # A noise known to no better than itself has no lower end; a tenth of it stands for that.
    less = max(fit.noise - fit.noise_error, 0.1 * fit.noise)
    changes = (
        error(fit.offset + fit.offset_error, fit.noise)
        - error(fit.offset - fit.offset_error, fit.noise),
        error(fit.offset, fit.noise + fit.noise_error) - error(fit.offset, less),
    )
    return 0.5 * math.hypot(*changes)


def _floor(
    bench: ReadoutBench, comparator: Comparator, threshold: Threshold, fit: ProbitFit
) -> float:
    """Find the threshold once more at half the step; give the change of the separation error."""
    if not bench.accuracy.floor:
        return math.nan
    half = replace(comparator, plan=comparator.plan.half_step())
    moved = find_threshold(half).offset - threshold.offset
    errors = [sum(_separation(x, fit.noise)) / 2 for x in (fit.offset, fit.offset + moved)]
    return abs(errors[1] - errors[0])


def _separation(offset: float, sigma: float) -> tuple[float, float]:
    """Give P(1|0) and P(0|1) of states that do not change."""
    return float(ndtr(-offset / sigma)), float(ndtr((offset - 1.0) / sigma))


def _judged(
    threshold: Threshold, fit: ProbitFit, counted: DecisionCounts, node: str | None
) -> tuple[str, ...]:
    """Warn of a comparator that does not tell the states apart, and of counts against the fit."""
    warnings = []
    if not threshold.rising:
        warnings.append(f"'{node}' is low for the greater signal, so that low is taken for |1>")
    if not 0.0 < threshold.offset < 1.0:
        warnings.append(
            "without noise |0> and |1> are decided alike: the decision changes at "
            f"{threshold.offset:.4g} times the distance of |1> from |0>"
        )
    if fit.noise_error == 0.0:
        warnings.append(
            f"no noisy decision was another than the clean one as near as {fit.noise:.2g} of the "
            "distance of the states to the threshold: the noise is less than that, and that is "
            "taken for it"
        )
    expected = _separation(fit.offset, fit.noise)
    trials = counted.trials.astype(int)
    wrong = (int(counted.ones[0]), int(trials[1] - counted.ones[1]))
    for state, (number, share) in enumerate(zip(wrong, expected, strict=True)):
        law = trials[state], share
        if min(bdtr(number, *law), bdtrc(number - 1, *law)) < UNLIKELY:
            warnings.append(
                f"of {trials[state]} decisions counted for |{state}> {number} are wrong, and the "
                f"fit around the threshold says {share * trials[state]:.3g}: the chain bends "
                "between the states, and the assignment error is not to be relied on"
            )
    return tuple(warnings)
