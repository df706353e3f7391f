"""Oracle: Python's own parser reading every import of the package."""

import ast
from functools import cache
from pathlib import Path

import pytest

import cosim

PACKAGE = Path(cosim.__file__).parent
FILES = sorted(PACKAGE.rglob("*.py"))

# Floor of each room; imports go downwards, or sideways only within the same room.
FLOORS = {
    "errors": 0,
    "units": 0,
    "config": 0,
    "toml_writing": 0,
    "waveform": 0,
    "archive": 1,
    "circuit": 1,
    "dsp": 1,
    "formats": 1,
    "quantum": 1,
    "coupling": 2,
    "outgoing": 2,
    "schema": 3,
    "stimuli": 3,
    "testbench": 3,
    "result": 3,
    "capture": 4,
    "captures": 4,
    "decks": 4,
    "adjust": 4,
    "fidelities": 4,
    "guards": 4,
    "imported": 4,
    "qubit_drive": 4,
    "record": 4,
    "gate": 4,
    "dispatch": 4,
    "port": 4,
    "keys": 4,
    "probe_run": 5,
    "readout_probe": 5,
    "comparison": 5,
    "exporting": 5,
    "calibration": 5,
    "sensitivity": 5,
    "drift": 5,
    "specification": 5,
    "budget": 5,
    "train": 5,
    "study_archive": 6,
    "sweep": 6,
    "line": 4,
    "noises": 3,
    "noise_keys": 3,
    "voltage_noises": 3,
    "noise_effect": 4,
    "noise_frame": 4,
    "noise_setup": 4,
    "noise_spectra": 4,
    "netlist_noise": 4,
    "added_noise": 4,
    "noisy_circuit": 4,
    "neighbours": 4,
    "readout_schema": 3,
    "readout_result": 3,
    "readout_input": 4,
    "readout_output": 4,
    "readout_noise": 4,
    "readout_chain": 4,
    "readout_sensor": 4,
    "readout_guards": 4,
    "readout_progress": 3,
    "readout_aftermath": 4,
    "readout_line": 4,
    "readout_pulse": 4,
    "readout": 4,
    "readout_entry": 4,
    "readout_injection": 4,
    "readout_stationary": 4,
    "readout_comparator": 4,
    "readout_decisions": 4,
    "decision_noise": 4,
    "decision_result": 3,
    "side_results": 3,
    "checks": 7,
    "noise_figures": 7,
    "terminal": 7,
    "sweep_figures": 7,
    "sweep_terminal": 7,
    "trim_terminal": 7,
    "figures": 7,
    "cli": 7,
    "command_options": 7,
    "side_terminal": 7,
    "figure_frame": 7,
    "tornado": 7,
    "drift_terminal": 7,
    "drift_figures": 7,
    "sensitivity_terminal": 7,
    "sensitivity_figures": 7,
    "readout_figures": 7,
    "readout_terminal": 7,
    "decision_terminal": 7,
    "decision_figures": 7,
    "result_show": 7,
    "result_figures": 7,
    "sweep_cli": 7,
    "study_cli": 7,
    "study_show": 7,
    "study_figures": 7,
    "study_checks": 7,
    "calibration_terminal": 7,
    "calibration_figures": 7,
    "specification_terminal": 7,
    "specification_figures": 7,
    "budget_terminal": 7,
    "budget_figures": 7,
    "train_terminal": 7,
    "train_figures": 7,
    "sweep_show": 7,
    "sweep_progress": 7,
    "__main__": 7,
}
WINGS = {"circuit", "dsp", "quantum", "archive", "formats"}

# Imports inside functions that start-up time asks for, and no others.
LATE = {"cli.py", "study_cli.py", "sweep_cli.py", "units.py"}


def room(file: Path) -> str:
    return file.relative_to(PACKAGE).parts[0].removesuffix(".py")


# One test goes through all files: with a test for each of them, the tests of this folder were
# two fifths of all tests, and passing so many between processes took longer than they did.
@cache
def parsed(file: Path) -> ast.Module:
    return ast.parse(file.read_text(encoding="utf-8"))


@cache
def imported_rooms(file: Path) -> set[str]:
    found = set()
    for node in ast.walk(parsed(file)):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{file}: relative import in line {node.lineno}"
            names = [node.module or ""]
            if node.module == "cosim":
                names = [f"cosim.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        else:
            continue
        found |= {name.split(".")[1] for name in names if name.startswith("cosim.")}
    return found


def test_imports_go_downwards() -> None:
    wrong = []
    # The door names all rooms, for type checkers only; the next tests see to it.
    for file in (file for file in FILES if file != PACKAGE / "__init__.py"):
        here = room(file)
        for other in imported_rooms(file):
            if FLOORS[other] > FLOORS[here]:
                wrong.append(f"{file}: {here} imports {other}, which is above it")
            if here != other and here in WINGS and other in WINGS:
                wrong.append(f"{file}: the wings {here} and {other} import one another")
    assert wrong == []


def test_rooms_of_one_floor_do_not_import_in_circles() -> None:
    edges = {name: set() for name in FLOORS}
    for file in FILES:
        if room(file) in edges:
            edges[room(file)] |= imported_rooms(file) - {room(file)}
    done: set[str] = set()
    while len(done) < len(edges):
        ready = {name for name, others in edges.items() if name not in done and others <= done}
        assert ready, f"a circle among {sorted(set(edges) - done)}"
        done |= ready


def test_every_room_has_a_floor() -> None:
    assert {room(file) for file in FILES} - {"__init__"} == set(FLOORS)


@pytest.mark.parametrize("wing", ["circuit", "dsp", "dsp/detection", "formats", "quantum", "sweep"])
def test_a_wings_init_holds_a_docstring_only(wing: str) -> None:
    body = ast.parse((PACKAGE / wing / "__init__.py").read_text(encoding="utf-8")).body
    assert len(body) == 1
    assert isinstance(body[0], ast.Expr)


def test_imports_stand_at_the_top() -> None:
    wrong = [
        f"{file}:{node.lineno}: import inside {function.name}"
        for file in FILES
        if file.name not in LATE
        for function in ast.walk(parsed(file))
        if isinstance(function, (ast.FunctionDef, ast.AsyncFunctionDef))
        for node in ast.walk(function)
        if isinstance(node, (ast.Import, ast.ImportFrom))
    ]
    assert wrong == []


def test_modules_stay_readable() -> None:
    # A module over this length is split by noun (a rule of the house, see DEVELOPERS.md).
    lengths = {file: len(file.read_text(encoding="utf-8").splitlines()) for file in FILES}
    assert {file: length for file, length in lengths.items() if length > 420} == {}


def test_no_keyword_catch_all_and_no_function_named_like_its_module() -> None:
    wrong = []
    for file in FILES:
        tree = parsed(file)
        for node in ast.walk(tree):
            if isinstance(node, ast.FunctionDef) and node.args.kwarg is not None:
                wrong.append(f"{file}:{node.lineno}: **{node.args.kwarg.arg}")
        for node in tree.body:
            if isinstance(node, ast.FunctionDef) and not node.name.startswith("_"):
                if (file.parent / f"{node.name}.py").exists():
                    wrong.append(f"{file}: importing the module {node.name} shadows the function")
    assert wrong == []
