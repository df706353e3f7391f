"""What `qcosim check` looks at: testbench, deck, target and environment, in a second or so."""

import os
from dataclasses import dataclass
from typing import Any

from cosim.capture import make_plan
from cosim.circuit.netlist import resolve_saves
from cosim.circuit.preparation import prepare
from cosim.circuit.simulator import simulator_version
from cosim.gate import gate_target
from cosim.testbench import load_testbench
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


def check_testbench(path: str | os.PathLike[str]) -> tuple[Finding, ...]:
    """Validate a testbench with its deck and the environment.

    Parameters
    ----------
    path : path
        The TOML file.

    Returns
    -------
    tuple of Finding
        What was found; nothing was simulated.

    Raises
    ------
    InputError
        If the testbench, the deck or the probe is wrong.
    MissingDependencyError
        If ngspice is not installed.
    """
    bench = load_testbench(path)
    target = gate_target(bench)
    plan = make_plan(bench)
    request = plan.request
    resolve_saves(plan.deck, request.saves)
    prepared = prepare(plan.deck, request)
    points = round(request.stop / request.step) + 1
    notices = dict.fromkeys([*plan.deck.notices, *prepared.notices, *plan.notices])
    runs = 2 if bench.accuracy.floor else 1
    found = [
        Finding("testbench", f"{path}: {bench.title}", "testbench", str(path)),
        Finding(
            "deck",
            f"{plan.deck.path}: {len(plan.deck.files)} files, {len(prepared.lines)} lines sent",
            "deck_files",
            [file.path for file in plan.deck.files],
        ),
        *(
            Finding("probe", f"{probe.text} in {probe.unit}", "probe", probe.text)
            for probe in plan.probes
        ),
        Finding("target", target.name, "target", target.name),
        Finding(
            "transient",
            f"{format_quantity(request.stop, 's')} at {format_quantity(request.step, 's', 5)}, "
            f"{points} points, {runs} run{'s' if runs > 1 else ''}",
            "points",
            points,
        ),
        Finding("simulator", simulator_version(), "simulator", simulator_version()),
    ]
    found += [Finding("notice", text, f"notice_{k}", text) for k, text in enumerate(notices, 1)]
    found.append(Finding("result", "ready to run", "ready", True))
    return tuple(found)
