"""The noise of a comparator, from how often it decides otherwise in noisy runs."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.generators import NoiseCurrent, noise_grid, noise_samples
from cosim.circuit.injection import with_currents
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.simulator import simulate
from cosim.decision_result import DecisionCounts
from cosim.dsp.decisions import ProbitFit, fit_probit
from cosim.errors import InputError, TestbenchError
from cosim.noisy_circuit import modelled_settings, noise_settings
from cosim.outgoing import arriving_noise
from cosim.readout_chain import deck_with_answer
from cosim.readout_comparator import FINEST, Comparator, Threshold
from cosim.readout_entry import (
    noisy_input,
    readout_currents,
    readout_noise_tables,
    resistors_behind,
)
from cosim.testbench import ReadoutBench

INJECTION, ARRIVING = "injection", "arriving only"
PILOT = 4  # noisy runs to both sides of the threshold, until a decision is not the clean one
MOST_PILOTS = 40  # times that
ROUNDS = 8  # after that, each with so many seeds at two signals that tell offset and noise best
BEST = 1.14  # noises from the offset: there decisions tell most of the noise and the offset
SEEDS = 8  # where no table says more


@dataclass(frozen=True, slots=True)
class DecidingNoise:
    """What makes the runs noisy.

    Parameters
    ----------
    settings : NoiseSettings
        Temperatures and the rest.
    currents : tuple of NoiseCurrent
        Of the devices, with what arrives in place of the noise of the source's resistor.
    clean : CleanRun
        At the threshold.
    method : str
        "injection", or "arriving only".
    seeds : int
        Noisy runs at a signal.
    notices : tuple of str
        What the reader must know.
    """

    settings: NoiseSettings
    currents: tuple[NoiseCurrent, ...]
    clean: CleanRun
    method: str
    seeds: int
    notices: tuple[str, ...]


def deciding_noise(
    bench: ReadoutBench, comparator: Comparator, threshold: Threshold
) -> DecidingNoise:
    """Say what makes noise, by the bias of a clean run at the threshold.

    Parameters
    ----------
    bench : ReadoutBench
        With the tables [[noise]].
    comparator : Comparator
        The netlist.
    threshold : Threshold
        From `find_threshold`.

    Returns
    -------
    DecidingNoise

    Raises
    ------
    TestbenchError
        If the source has no resistor of the line's impedance behind it, or [[noise]] wants
        another method.
    SimulationError, DeckError
        If the run fails.
    """
    plan, table, answers = comparator.plan, comparator.table, comparator.answers
    deck = deck_with_answer(plan, table, answers, comparator.emf(threshold.offset))
    clean = clean_run(deck, plan.request, [probe.text for probe in plan.probes])
    arriving = arriving_noise(answers.line, [answers.drive.frequency])
    behind = resistors_behind(plan, noisy_input(arriving, table), clean, table)
    tables = readout_noise_tables(bench)
    if not tables:
        quiet = NoiseSettings()
        currents = readout_currents(clean, quiet, behind, tuple(behind))
        return DecidingNoise(quiet, tuple(currents), clean, ARRIVING, SEEDS, ())
    if tables[0].method not in ("auto", INJECTION):
        raise TestbenchError(
            f"[[noise]] with method = \"{tables[0].method}\" does not go with a 'decision'",
            hint=f'say method = "{INJECTION}"',
        )
    settings, notices = modelled_settings(
        clean,
        noise_settings(tables[0], plan.deck),
        tables[0],
        1.0 / comparator.instant,
        0.5 * comparator.instant,
    )
    currents = readout_currents(clean, settings, behind)
    return DecidingNoise(settings, tuple(currents), clean, INJECTION, tables[0].seeds, notices)


def count_ones(
    comparator: Comparator, threshold: Threshold, noise: DecidingNoise, x: float, seeds: range
) -> int:
    """Count the decisions for |1> at a signal, one noisy run for each seed.

    Parameters
    ----------
    comparator : Comparator
        The netlist.
    threshold : Threshold
        Says which level of the node is for |1>.
    noise : DecidingNoise
        What makes the runs noisy.
    x : float
        The signal: 0 for |0>, 1 for |1>.
    seeds : range
        Not negative.

    Returns
    -------
    int

    Raises
    ------
    SimulationError
        If a run fails.
    """
    plan = comparator.plan
    deck = deck_with_answer(plan, comparator.table, comparator.answers, comparator.emf(x))
    ends = [current.nodes for current in noise.currents]
    grid = noise_grid(noise.clean)
    levels = []
    for seed in seeds:
        samples = noise_samples(noise.clean, noise.settings, noise.currents, seed)
        result = simulate(with_currents(deck, ends, grid, samples), plan.request)
        plan.progress.end(plan.request.stop)
        levels.append(comparator.level(result))
    return int(np.sum(comparator.high(np.array(levels)) == threshold.rising))


def fit_decisions(
    comparator: Comparator, threshold: Threshold, noise: DecidingNoise
) -> tuple[ProbitFit, DecisionCounts]:
    """Find offset and noise: close in on the threshold until decisions err, then count there.

    Parameters
    ----------
    comparator : Comparator
        The netlist.
    threshold : Threshold
        From `find_threshold`.
    noise : DecidingNoise
        What makes the runs noisy.

    Returns
    -------
    ProbitFit
        On the scale of the signal. Where no decision errs, its noise is the distance at which
        none did, and the errors are 0.
    DecisionCounts
        What it was fitted to.

    Raises
    ------
    TestbenchError
        If the decisions do not follow the signal.
    SimulationError
        If a run fails.
    """
    found: list[tuple[float, int, int]] = []

    def count(x: float, trials: int) -> int:
        first = comparator.table.seed + sum(row[2] for row in found)
        ones = count_ones(comparator, threshold, noise, x, range(first, first + trials))
        found.append((x, ones, trials))
        return ones

    def fitted() -> ProbitFit | None:
        x, ones, trials = (np.array(column) for column in zip(*found, strict=True))
        try:
            return fit_probit(x, ones, trials)
        except InputError:  # The decisions do not overlap yet.
            return None

    away, near, middle, fit = 1.0, 0.5, threshold.offset, None
    while fit is None and near >= 2.0 * FINEST and len(found) < 2 * MOST_PILOTS:
        away = near
        right, wrong = count(middle + away, PILOT), count(middle - away, PILOT)
        fit = fitted()
        middle = _between(found, middle)
        if right == wrong:
            near = 2.0 * away  # The noise may move the threshold.
        else:
            near = away / (4.0 if right - wrong == PILOT else 2.0)
    if fit is None and near >= 2.0 * FINEST:
        raise TestbenchError(
            f"table [readout], key 'decision': {len(found) * PILOT} noisy decisions around the "
            f"clean threshold at {threshold.offset:.4g} of the distance of the states fix no "
            "noise: they do not follow the signal",
            hint="look at 'decide_at', and at what else the decision depends on",
        )
    if fit is None:
        # No decision erred as near as that: the noise is less, and is taken for no less.
        fit = ProbitFit(middle, away, 0.0, 0.0, len(found) * PILOT, 0.0, math.nan)
    else:
        for _ in range(ROUNDS):
            # Few decisions may tell a noise that is far off, and the next then tell nothing.
            sigma = min(max(fit.noise, away / 4.0), 4.0 * away)
            centre = min(max(fit.offset, middle - away), middle + away)
            for side in (-BEST, BEST):
                count(centre + side * sigma, noise.seeds)
            fit = fitted() or fit
    return fit, decision_counts(found)


def decision_counts(rows: Sequence[tuple[float, int, int]]) -> DecisionCounts:
    """Put counts in the order of the signals.

    Parameters
    ----------
    rows : sequence of (float, int, int)
        Signal, decisions for |1>, decisions.

    Returns
    -------
    DecisionCounts
    """
    x, ones, trials = (np.array(column, dtype=np.float64) for column in zip(*rows, strict=True))
    order = np.argsort(x, kind="stable")
    return DecisionCounts(x[order], ones[order], trials[order])


def _between(rows: list[tuple[float, int, int]], otherwise: float) -> float:
    """Give the signal half-way between the greatest that made a 0 and the least that made a 1."""
    zeros = [x for x, ones, trials in rows if ones < trials]
    hits = [x for x, ones, _ in rows if ones > 0]
    return 0.5 * (max(zeros) + min(hits)) if zeros and hits else otherwise
