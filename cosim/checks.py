"""What `qcosim check` looks at: testbench, deck, target and environment, in a second or so."""

import os
from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any

from cosim.capture import make_plan
from cosim.circuit.confidential import kept_lines
from cosim.circuit.netlist import resolve_saves
from cosim.circuit.preparation import prepare
from cosim.circuit.simulator import simulate_prepared, simulator_version
from cosim.decks import read_deck
from cosim.gate import gate_target
from cosim.imported import import_waveform
from cosim.noisy_circuit import noise_settings
from cosim.probe_run import TRIAL_POINTS, estimate_run, try_deck
from cosim.readout import readout_frequency
from cosim.readout_chain import make_inquiry
from cosim.readout_entry import readout_noise_tables
from cosim.readout_input import GROUND
from cosim.readout_output import make_readout_plan, record_grid
from cosim.readout_probe import estimate_readout, transients_of
from cosim.readout_pulse import pulse_source, silent_pulse
from cosim.study_checks import check_studies
from cosim.sweep.estimate import estimate_sweep
from cosim.sweep.plan import SweepPlan
from cosim.sweep.planning import make_sweep
from cosim.testbench import Bench, ReadoutBench, Testbench, gate_bench, load_testbench
from cosim.units import format_quantity
from cosim.voltage_noises import NetlistNoise


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that was looked at.

    Parameters
    ----------
    label : str
        Its name for people.
    text : str
        What was found, for people.
    name : str
        Its name for machines.
    value : int, float, str or list
        What was found, for machines, in SI units.
    """

    label: str
    text: str
    name: str
    value: Any


def check_testbench(
    path: str | os.PathLike[str], *, probe: bool = False
) -> tuple[tuple[Finding, ...], tuple[str, ...]]:
    """Validate a testbench with its deck, or its waveform, and the environment.

    Parameters
    ----------
    path : path
        The TOML file.
    probe : bool
        Also run the first 200 points, and estimate time, memory and disk space.

    Returns
    -------
    tuple of Finding
        What was found. ngspice loads the deck and takes ten steps; without `probe`, no more, but
        of a sweep it always runs the 200 points.
    tuple of str
        The deck as it will be sent, of a sweep that of its first run; without confidential lines.

    Raises
    ------
    InputError
        If the testbench, the deck or the probe is wrong.
    SimulationError
        If ngspice does not take the deck.
    MissingDependencyError
        If ngspice is not installed.
    """
    loaded = load_testbench(path)
    if isinstance(loaded, ReadoutBench):
        return _check_readout(loaded, path, probe)
    bench = gate_bench(loaded)
    target = gate_target(bench)
    found = [
        Finding("testbench", f"{path}: {bench.title}", "testbench", str(path)),
        Finding("target", target.name, "target", target.name),
    ]
    found += _study_findings(bench)
    plan = make_sweep(bench) if bench.studies.get("sweep") else None
    if plan is not None:
        bench = gate_bench(plan.testbench(plan.run(0)))
    deck: tuple[str, ...] = ()
    if bench.netlist is None:
        found += _waveform_findings(bench)
    else:
        more, deck = _deck_findings(bench, probe and plan is None)
        found += more
    if plan is not None:
        found += _sweep_findings(plan)
    found.append(Finding("result", "ready to run", "ready", True))
    return tuple(found), deck


def _check_readout(
    bench: ReadoutBench, path: str | os.PathLike[str], probe: bool
) -> tuple[tuple[Finding, ...], tuple[str, ...]]:
    studies = _study_findings(bench)
    sweep = make_sweep(bench) if bench.studies.get("sweep") else None
    if sweep is not None:
        first = sweep.testbench(sweep.run(0))
        assert isinstance(first, ReadoutBench)  # As the testbench that it is made of.
        bench = first
    plan = make_readout_plan(bench, readout_frequency(bench))
    source = pulse_source(bench)
    played = None
    if source is not None and bench.resonator is not None:
        played = silent_pulse(bench.resonator, plan.request.stop)
    inquiry = make_inquiry(bench, plan, played)
    for noise in readout_noise_tables(bench):
        noise_settings(noise, plan.deck)
    grid = record_grid(bench.readout, inquiry.begin)
    request = plan.request
    resolve_saves(plan.deck, request.saves)
    prepared = prepare(inquiry.deck_of(plan, GROUND), request)
    counts = transients_of(bench, plan, inquiry)
    points = round(request.stop / request.step) + 1
    short = replace(request, stop=min(request.stop, TRIAL_POINTS * request.step))
    simulate_prepared(prepare(inquiry.deck_of(plan, GROUND), short), short)
    found = [
        Finding("testbench", f"{path}: {bench.title}", "testbench", str(path)),
        Finding(
            "deck",
            f"{plan.deck.path}: {len(plan.deck.files)} files, {len(prepared.lines)} lines sent",
            "deck_files",
            [file.path for file in plan.deck.files],
        ),
        *(Finding("output", item.text, "output", item.text) for item in plan.probes),
        Finding(
            "transient",
            f"{format_quantity(request.stop, 's')} at {format_quantity(request.step, 's', 5)}, "
            f"{points} points",
            "points",
            points,
        ),
        Finding(
            "of the netlist",
            f"{counts.clean} transients, {counts.noisy} with noise, {counts.half} at half the step",
            "transients",
            counts.clean + counts.noisy + counts.half,
        ),
        Finding(
            "record",
            f"{grid.count} samples of {format_quantity(grid.step, 's', 4)}",
            "samples",
            grid.count,
        ),
        Finding("simulator", simulator_version(), "simulator", simulator_version()),
    ]
    if source is not None:
        found += _pulse_findings(source, bench.accuracy.floor)
    notices = (*prepared.notices, *plan.notices, *inquiry.notices)
    found += [
        *studies,
        *(Finding("notice", text, f"notice_{k}", text) for k, text in _count(notices)),
    ]
    if sweep is not None:
        found += _sweep_findings(sweep)
    elif probe:
        single = estimate_readout(bench, plan, inquiry)
        found += _estimates(single.time, single.memory, single.disk, "")
    found.append(Finding("result", "ready to run", "ready", True))
    lines = kept_lines(prepared.lines, prepared.origins, plan.deck.files, plan.confidential)
    return tuple(found), lines


def _study_findings(bench: Bench) -> list[Finding]:
    names = check_studies(bench, None if bench.netlist is None else read_deck(bench))
    if not names:
        return []
    text = f"{', '.join(names)}: keys and values in order"
    return [Finding("studies", text, "studies", list(names))]


def _pulse_findings(source: Testbench, floor: bool) -> list[Finding]:
    """Look at the netlist, or the file, that makes the pulse of a readout."""
    if source.netlist is None:
        return _waveform_findings(source)
    plan = make_plan(source)
    try_deck(plan)
    request, runs = plan.request, 2 if floor else 1
    text = (
        f"{plan.deck.path}: {format_quantity(request.stop, 's')} at "
        f"{format_quantity(request.step, 's', 5)}, {runs} run{'s' if runs > 1 else ''}"
    )
    return [Finding("pulse", text, "pulse_runs", runs)]


def _sweep_findings(plan: SweepPlan) -> list[Finding]:
    estimate = estimate_sweep(plan)
    parts = ["a frozen trim and each die's own"] if plan.table.trim == "both" else []
    parts += [f"{len(plan.corners)} corners"] if plan.table.corners else []
    parts += [f"{len(axis.values)} values of {axis.key.path}" for axis in plan.axes]
    parts += [f"{plan.samples} samples"] if plan.table.monte_carlo is not None else []
    if plan.perturbations:
        parts.append(f"1 + 2 x {len(plan.perturbations)} one at a time")
    text = f"{estimate.runs} runs ({' x '.join(parts)}), {estimate.waveforms} of the circuit"
    shared = "one per deck as altered"
    if plan.is_readout:
        shared = "one set for runs that differ in what is done with the records only"
    found = [
        Finding("sweep", text, "runs", estimate.runs),
        Finding("waveforms", shared, "waveforms", estimate.waveforms),
    ]
    if plan.trimming is not None:
        most = plan.trimming.most_runs
        many = f"{estimate.trims} calibrations, {most} runs of the circuit each at most"
        found.append(Finding("trims", f"{many}, counted in the time", "trims", estimate.trims))
    return found + _estimates(estimate.time, estimate.memory, estimate.disk, " on one worker")


def _waveform_findings(bench: Testbench) -> list[Finding]:
    shot = import_waveform(bench)
    span = format_quantity(float(shot.waveform.t[-1] - shot.waveform.t[0]), "s")
    points = shot.waveform.t.size
    step = format_quantity(shot.step, "s", 5)
    text = f"{shot.files[0].path}: {span} at {step}, {points} points"
    found = [Finding("waveform", text, "points", points)]
    return found + [
        Finding("notice", text, f"notice_{k}", text) for k, text in _count(shot.notices)
    ]


def _deck_findings(bench: Testbench, probe: bool) -> tuple[list[Finding], tuple[str, ...]]:
    plan = make_plan(bench)
    for noise in bench.noise:
        if isinstance(noise, NetlistNoise):
            noise_settings(noise, plan.deck)
    request = plan.request
    resolve_saves(plan.deck, request.saves)
    prepared = prepare(plan.deck, request)
    points = round(request.stop / request.step) + 1
    runs = 2 if bench.accuracy.floor else 1
    found = [
        Finding(
            "deck",
            f"{plan.deck.path}: {len(plan.deck.files)} files, {len(prepared.lines)} lines sent",
            "deck_files",
            [file.path for file in plan.deck.files],
        ),
        *(
            Finding("probe", f"{item.text} in {item.unit}", "probe", item.text)
            for item in plan.probes
        ),
        Finding(
            "transient",
            f"{format_quantity(request.stop, 's')} at {format_quantity(request.step, 's', 5)}, "
            f"{points} points, {runs} run{'s' if runs > 1 else ''}",
            "points",
            points,
        ),
        Finding("simulator", simulator_version(), "simulator", simulator_version()),
    ]
    try_deck(plan)
    if probe:
        single = estimate_run(plan, floor=bench.accuracy.floor)
        found += _estimates(single.time, single.memory, single.disk, "")
    notices = (*plan.deck.notices, *prepared.notices, *plan.notices)
    found += [Finding("notice", text, f"notice_{k}", text) for k, text in _count(notices)]
    lines = kept_lines(prepared.lines, prepared.origins, plan.deck.files, plan.confidential)
    return found, lines


def _estimates(time: float, memory: float, disk: float, where: str) -> list[Finding]:
    took, vectors, archive = _duration(time), _size(memory), _size(disk)
    return [
        Finding("time", f"about {took} of ngspice{where}", "time", time),
        Finding("memory", f"about {vectors} for the vectors{where}", "memory", memory),
        Finding("disk", f"about {archive} in an archive", "disk", disk),
    ]


def _size(size: float) -> str:
    return f"{size / 2**20:.1f} MiB" if size < 2**30 else f"{size / 2**30:.1f} GiB"


def _duration(seconds: float) -> str:
    for unit, name in ((86400.0, "days"), (3600.0, "hours"), (60.0, "min")):
        if seconds >= 2.0 * unit:
            return f"{seconds / unit:.1f} {name}"
    return f"{seconds:.2g} s"


def _count(notices: Iterable[str]) -> Iterable[tuple[int, str]]:
    return enumerate(dict.fromkeys(notices), 1)
