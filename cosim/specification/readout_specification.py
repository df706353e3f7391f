"""From a target assignment error and the resonator to what the blocks of a readout must meet.

The blocks are switched on one after the other, in the order noise, length of the integration,
bandwidth, converters, and each is given its part of the error on top of those before it. So the
limits hold together by construction, and seeded shots of the chain with all of them say whether the
closed form does.
"""

import math
import time
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime

from scipy.constants import Boltzmann, Planck

from cosim.dsp.detection.assignment import AssignmentSplit
from cosim.dsp.detection.shots import integrated_shots, record_shots
from cosim.errors import TestbenchError
from cosim.outgoing import efficiency
from cosim.readout_schema import ReadoutTable, ResonatorTable
from cosim.record import package_versions
from cosim.specification.readout_formulas import (
    bits_for_noise,
    lost_time,
    noise_temperature_of,
    snr_for_error,
    steady_added_quanta,
)
from cosim.specification.readout_model import (
    ChainLimits,
    ReadoutTask,
    added_quanta_of,
    chain_output,
    detector_of,
    judge,
    make_task,
    steady_rate,
)
from cosim.specification.readout_request import ReadoutRequest, read_readout_request
from cosim.specification.readout_result import ReadoutSpecification
from cosim.specification.readout_search import (
    COARSEST,
    LABELS,
    REACH,
    Found,
    at_converter,
    integration_stop,
    longest_stop,
    search_limit,
    with_given,
)
from cosim.specification.result import BlockLimit
from cosim.testbench import Bench, DesignBench, ReadoutBench
from cosim.units import format_quantity

# The bits keep what they took, and this part of what they might have: with other limits before
# them they take a little more or less.
ROUNDING_ROOM = 0.1


def specify_readout(bench: Bench) -> ReadoutSpecification:
    """Work out what the blocks of a readout must meet.

    Parameters
    ----------
    bench : DesignBench or ReadoutBench
        With [resonator], [readout] and [specify]; a circuit, if there is one, is not looked at.

    Returns
    -------
    ReadoutSpecification
        A design estimate.

    Raises
    ------
    TestbenchError
        If there is no [specify] or no [resonator], a key is wrong, or the target cannot be met: the
        message names what forbids it.
    """
    clock = time.perf_counter()
    started = datetime.now().astimezone().isoformat(timespec="seconds")
    label = bench.source or "the testbench"
    pulse, table = readout_tables(bench)
    request = read_readout_request(bench.studies.get("specify", {}), label)
    rate = None if request.adc is None else request.adc.rate
    task = make_task(pulse, table, rate)
    ideal = ChainLimits(0.0, task.latest)
    ideal = replace(ideal, stop=integration_stop(task, request, ideal))
    base = judge(task, ideal)
    if base.assignment_error >= request.target:
        raise _infeasible(base, request.target)
    chain = with_given(task, request, ideal)
    error_given = judge(task, chain).assignment_error
    if error_given >= request.target:
        raise _given_too_bad(request, error_given, base.assignment_error)
    founds = _switched_on(task, request, chain, error_given)
    blocks = []
    error = error_given
    for name, found in founds.items():
        limit = _limit_of(name, task, found.chain)
        beside = _formula(name, task, pulse, base, found, error)
        blocks.append(_block(name, task, found.chain, limit, found.error - error, beside, False))
        chain, error = found.chain, found.error
    given = [name for name in LABELS if name not in founds and getattr(request, name) is not None]
    share = error_given - base.assignment_error
    for name in given:
        # Those that are given were worked out together, so that each is told with all of them.
        limit = _limit_of(name, task, chain)
        blocks.append(_block(name, task, chain, limit, share, math.nan, True))
    return _result(bench, task, request, base, chain, blocks, started, clock)


def _switched_on(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, error: float
) -> dict[str, Found]:
    """Switch the open blocks on one after the other, each with its part of the error."""

    def found_with(parts: Mapping[str, float]) -> dict[str, Found]:
        found: dict[str, Found] = {}
        last = Found(chain, error)
        for name, part in parts.items():
            last = search_limit(name, task, request, last.chain, last.error + part)
            found[name] = last
        return found

    weights = request.weights
    left = request.target - error
    parts = {name: left * weight / sum(weights.values()) for name, weight in weights.items()}
    found = found_with(parts)
    others = [name for name in weights if name != "adc"]
    if "adc" not in weights or not others:
        return found
    # Bits are whole: what the others can have is all but what they take.
    taken = max(0.0, found["adc"].error - found[others[-1]].error)
    kept = min(taken + ROUNDING_ROOM * parts["adc"], parts["adc"])
    unit = (left - kept) / sum(weights[name] for name in others)
    return found_with({name: unit * weights[name] for name in others} | {"adc": kept})


def readout_tables(bench: Bench) -> tuple[ResonatorTable, ReadoutTable]:
    """Give the tables [resonator] and [readout] of a testbench.

    Parameters
    ----------
    bench : Bench
        Of any kind.

    Returns
    -------
    tuple of ResonatorTable and ReadoutTable

    Raises
    ------
    TestbenchError
        If it has none.
    """
    resonator = bench.resonator if isinstance(bench, DesignBench | ReadoutBench) else None
    readout = bench.readout if isinstance(bench, DesignBench | ReadoutBench) else None
    if resonator is None or readout is None:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: the tables [resonator] and [readout] are missing",
            hint="a charge sensor is part of its circuit: there is no specification without it",
        )
    return resonator, readout


def _limit_of(name: str, task: ReadoutTask, chain: ChainLimits) -> float:
    if name == "noise":
        return chain.noise_temperature
    if name == "integration":
        return chain.stop - task.start
    if name == "bandwidth":
        return chain.bandwidth
    assert chain.adc is not None
    return float(chain.adc.bits)


def _block(
    name: str,
    task: ReadoutTask,
    chain: ChainLimits,
    limit: float,
    share: float,
    beside: float,
    given: bool,
) -> BlockLimit:
    label, unit = LABELS[name]
    return BlockLimit(
        name, label, limit, unit, given, share, beside, math.nan, _note(name, task, chain)
    )


def _note(name: str, task: ReadoutTask, chain: ChainLimits) -> str:
    if name == "noise":
        own = chain.noise_temperature * Boltzmann / (Planck * task.frequency)
        added, _ = added_quanta_of(task, chain.noise_temperature)
        return (
            f"{own:.3g} quanta at its input, {added:.3g} at the resonator with the stages: an "
            f"efficiency of {efficiency(max(added, 0.0)):.3g}"
        )
    if name == "integration":
        return "at the noise above; the best length is longer"
    if name == "bandwidth":
        kappa = task.resonator.kappa / (2.0 * math.pi)
        return (
            f"to each side of the carrier; the resonator has {format_quantity(kappa / 2, 'Hz', 3)}"
        )
    assert chain.adc is not None
    rate = format_quantity(chain.adc.rate, "Hz", 3)
    scale = format_quantity(chain.adc.full_scale, "V", 3)
    return f"at {rate}; full scale {scale} peak to peak behind a gain of {task.table.gain:g} dB"


def _formula(
    name: str,
    task: ReadoutTask,
    pulse: ResonatorTable,
    base: AssignmentSplit,
    found: Found,
    before: float,
) -> float:
    """The limit by the formulas for a steady state, for the same separation error."""
    rate = steady_rate(task, pulse)
    chain = found.chain
    separation = base.errors.separation + found.error - base.assignment_error
    earlier = base.errors.separation + before - base.assignment_error
    length = chain.stop - task.start
    added, _ = added_quanta_of(task, chain.noise_temperature)
    if not 0.0 < earlier <= separation < 0.5:
        earlier = 0.0
    if name == "noise":
        stages, _ = added_quanta_of(task, 0.0)
        loss = math.prod(10.0 ** (decibels / 10.0) for decibels, _ in task.table.stages)
        quanta = steady_added_quanta(separation, rate, length) - stages
        return noise_temperature_of(quanta / loss, task.frequency) if quanta > 0.0 else math.nan
    if name == "integration":
        return snr_for_error(separation) ** 2 * (1.0 + 2.0 * added) / rate
    if earlier == 0.0:
        return math.nan
    kept = (snr_for_error(separation) / snr_for_error(earlier)) ** 2
    if name == "bandwidth":
        return lost_time(length * (1.0 - kept)) if kept < 1.0 else math.nan
    assert chain.adc is not None
    mean, sigma = at_converter(task, replace(chain, adc=None), chain.adc.rate)
    return bits_for_noise(mean / sigma, 1.0 / kept - 1.0, REACH) if kept < 1.0 else math.nan


def _result(
    bench: Bench,
    task: ReadoutTask,
    request: ReadoutRequest,
    base: AssignmentSplit,
    chain: ChainLimits,
    blocks: list[BlockLimit],
    started: str,
    clock: float,
) -> ReadoutSpecification:
    split = judge(task, chain)
    table = task.table
    shots = integrated_shots(
        split, task.transitions, task.preparation, 2 * (table.shots // 2), table.seed
    )
    records = record_shots(
        chain_output(task, chain),
        detector_of(task, chain),
        split,
        task.transitions,
        task.preparation,
        2 * (table.records // 2),
        table.seed,
    )
    added, least = added_quanta_of(task, chain.noise_temperature)
    return ReadoutSpecification(
        title=bench.title,
        target_error=request.target,
        base_error=base.assignment_error,
        base=base.errors,
        blocks=tuple(blocks),
        assignment_error=split.assignment_error,
        snr=split.snr,
        added_quanta=added,
        least_added_quanta=least,
        full_scale=math.nan if chain.adc is None else chain.adc.full_scale,
        integration_time=chain.stop - task.start,
        longest_integration=longest_stop(task, chain, request.target) - task.start,
        clipped=split.clipped,
        lsb_over_sigma=split.lsb_over_sigma,
        shots=shots,
        records=records,
        warnings=_warnings(task, request, chain, split),
        started=started,
        wall_time=time.perf_counter() - clock,
        versions=package_versions(),
        testbench=bench.to_toml(),
    )


def _warnings(
    task: ReadoutTask, request: ReadoutRequest, chain: ChainLimits, split: AssignmentSplit
) -> tuple[str, ...]:
    found = []
    own = chain.noise_temperature * Boltzmann / (Planck * task.frequency)
    if request.noise is not None and own < 0.5:
        found.append(
            f"a noise temperature of {chain.noise_temperature:.3g} K is {own:.3g} quanta: less "
            "than the half that any chain of much gain adds which keeps the phase"
        )
    missing = [LABELS[name][0] for name in LABELS if getattr(request, name) is None]
    if missing:
        found.append(f"taken as perfect, for want of a table: {', '.join(missing)}")
    if split.lsb_over_sigma > COARSEST:
        found.append(
            f"a step of the converters is {split.lsb_over_sigma:.2g} standard deviations: rounding "
            "is no longer like noise, so that the whole records count, not the closed form"
        )
    return tuple(found)


def _infeasible(base: AssignmentSplit, target: float) -> TestbenchError:
    parts = {
        "the vacuum's noise and the loss behind the resonator": base.errors.separation,
        "decay (t1 of [readout])": base.errors.decay,
        "preparation (thermal_population and preparation_error of [readout])": (
            base.errors.preparation
        ),
        "excitation (thermal_population of [readout])": base.errors.excitation,
    }
    name, cost = max(parts.items(), key=lambda item: item[1])
    return TestbenchError(
        f"[specify]: a target of {target:g} cannot be met: a chain without noise of its own "
        f"already errs by {base.assignment_error:.3g}, most of it through {name}, {cost:.3g}",
        hint="more photons, a larger chi, or a shorter integration help against the first two",
    )


def _given_too_bad(request: ReadoutRequest, error: float, base: float) -> TestbenchError:
    given = [name for name in LABELS if getattr(request, name) is not None]
    given = [name for name in given if name not in request.weights]
    return TestbenchError(
        f"[specify]: a target of {request.target:g} cannot be met: what is given in "
        f"{', '.join(f'[specify.{name}]' for name in given)} takes the error from {base:.3g} to "
        f"{error:.3g}"
    )
