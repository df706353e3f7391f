"""Oracle: the signatures, as Python's inspect gives them, against the numpydoc sections."""

import dataclasses
import importlib
import inspect
import pkgutil
import re
from collections.abc import Iterator
from types import ModuleType

import cosim

# The host is a program that is run as a script; importing it would start ngspice.
PROGRAMS = {"cosim.circuit.host", "cosim.__main__"}
COMMANDS = ("cosim.cli.", "cosim.sweep_cli.", "cosim.study_cli.")


def modules() -> Iterator[ModuleType]:
    for info in pkgutil.walk_packages(cosim.__path__, "cosim."):
        if info.name not in PROGRAMS:
            yield importlib.import_module(info.name)


def public_objects() -> Iterator[tuple[str, object]]:
    for module in modules():
        for name, item in vars(module).items():
            home = getattr(item, "__module__", None) == module.__name__
            known = inspect.isfunction(item) or inspect.isclass(item)
            if home and known and not name.startswith("_"):
                yield f"{module.__name__}.{name}", item


OBJECTS = dict(public_objects())


def sections(doc: str) -> set[str]:
    return set(re.findall(r"^\s*(\w+)\n\s*-{3,}$", doc, flags=re.MULTILINE))


# One test goes through all names, of which there are well over a thousand: passing so many tests
# between processes takes longer than they do.
def what_is_missing(name: str) -> Iterator[str]:
    """Say what of an object is not documented."""
    item = OBJECTS[name]
    doc = inspect.getdoc(item) or ""
    if not doc:
        yield f"{name} has no docstring"
    if name.startswith(COMMANDS):
        return  # The text of a command is its help.
    if inspect.isfunction(item):
        parameters = [p for p in inspect.signature(item).parameters]
        if parameters and "Parameters" not in sections(doc):
            yield f"{name} documents no parameters"
        returns = inspect.signature(item).return_annotation not in (None, "None")
        if returns and not sections(doc) & {"Returns", "Yields"}:
            yield f"{name} does not say what it returns"
    elif dataclasses.is_dataclass(item) and not issubclass(item, BaseException):
        parameters = [f.name for f in dataclasses.fields(item) if not f.name.startswith("_")]
    else:
        return
    for parameter in parameters:
        if not re.search(rf"\b{parameter}\b", doc):
            yield f"{name} does not document '{parameter}'"


def test_every_public_name_is_documented() -> None:
    assert len(OBJECTS) > 100
    assert [words for name in OBJECTS for words in what_is_missing(name)] == []


def test_a_function_that_raises_says_so() -> None:
    silent = []
    for name, item in OBJECTS.items():
        if not inspect.isfunction(item) or name.startswith(
            ("cosim.cli.", "cosim.sweep_cli.", "cosim.study_cli.")
        ):
            continue
        raised = set(re.findall(r"\braise (\w+Error)\(", inspect.getsource(item)))
        if raised and "Raises" not in sections(inspect.getdoc(item) or ""):
            silent.append(f"{name} raises {sorted(raised)} without saying so")
    assert silent == []


def test_every_module_says_what_it_is() -> None:
    assert [item.__name__ for item in modules() if not (item.__doc__ or "").strip()] == []
