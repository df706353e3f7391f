"""What `qcosim check` looks at: testbench, deck, target and environment, in a second or so."""

import os
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from cosim.capture import make_plan
from cosim.circuit.netlist import resolve_saves
from cosim.circuit.preparation import prepare
from cosim.circuit.simulator import simulator_version
from cosim.gate import gate_target
from cosim.imported import import_waveform
from cosim.probe_run import Estimate, estimate_run, try_deck
from cosim.testbench import Testbench, load_testbench
from cosim.units import format_quantity


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


def check_testbench(path: str | os.PathLike[str], *, probe: bool = False) -> tuple[Finding, ...]:
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
        What was found. ngspice loads the deck and takes ten steps; without `probe`, no more.

    Raises
    ------
    InputError
        If the testbench, the deck or the probe is wrong.
    SimulationError
        If ngspice does not take the deck.
    MissingDependencyError
        If ngspice is not installed.
    """
    bench = load_testbench(path)
    target = gate_target(bench)
    found = [
        Finding("testbench", f"{path}: {bench.title}", "testbench", str(path)),
        Finding("target", target.name, "target", target.name),
    ]
    found += _waveform_findings(bench) if bench.netlist is None else _deck_findings(bench, probe)
    found.append(Finding("result", "ready to run", "ready", True))
    return tuple(found)


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


def _deck_findings(bench: Testbench, probe: bool) -> list[Finding]:
    plan = make_plan(bench)
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
        found += _estimates(estimate_run(plan, floor=bench.accuracy.floor))
    notices = (*plan.deck.notices, *prepared.notices, *plan.notices)
    return found + [Finding("notice", text, f"notice_{k}", text) for k, text in _count(notices)]


def _estimates(estimate: Estimate) -> list[Finding]:
    memory, disk = (f"{size / 2**20:.1f} MiB" for size in (estimate.memory, estimate.disk))
    return [
        Finding("time", f"about {estimate.time:.2g} s of ngspice", "time", estimate.time),
        Finding("memory", f"about {memory} for the vectors", "memory", estimate.memory),
        Finding("disk", f"about {disk} in an archive", "disk", estimate.disk),
    ]


def _count(notices: Iterable[str]) -> Iterable[tuple[int, str]]:
    return enumerate(dict.fromkeys(notices), 1)
