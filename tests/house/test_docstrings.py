"""Oracle: the signatures, as Python's inspect gives them, against the numpydoc sections."""

import dataclasses
import importlib
import inspect
import pkgutil
import re
from collections.abc import Iterator
from types import ModuleType

import pytest

import cosim

# The host is a program that is run as a script; importing it would start ngspice.
PROGRAMS = {"cosim.circuit.host", "cosim.__main__"}


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


@pytest.mark.parametrize("name", OBJECTS)
def test_every_public_name_is_documented(name: str) -> None:
    item = OBJECTS[name]
    doc = inspect.getdoc(item) or ""
    assert doc, f"{name} has no docstring"
    if name.startswith(("cosim.cli.", "cosim.sweep_cli.")):
        return  # The text of a command is its help.
    if inspect.isfunction(item):
        parameters = [p for p in inspect.signature(item).parameters]
        if parameters:
            assert "Parameters" in sections(doc), f"{name} documents no parameters"
        returns = inspect.signature(item).return_annotation not in (None, "None")
        if returns:
            assert sections(doc) & {"Returns", "Yields"}, f"{name} does not say what it returns"
    elif dataclasses.is_dataclass(item) and not issubclass(item, BaseException):
        parameters = [f.name for f in dataclasses.fields(item) if not f.name.startswith("_")]
    else:
        return
    for parameter in parameters:
        assert re.search(rf"\b{parameter}\b", doc), f"{name} does not document '{parameter}'"


@pytest.mark.parametrize("name", [name for name in OBJECTS if inspect.isfunction(OBJECTS[name])])
def test_a_function_that_raises_says_so(name: str) -> None:
    source = inspect.getsource(OBJECTS[name])
    raised = set(re.findall(r"\braise (\w+Error)\(", source))
    doc = inspect.getdoc(OBJECTS[name]) or ""
    if raised and not name.startswith(("cosim.cli.", "cosim.sweep_cli.")):
        assert "Raises" in sections(doc), f"{name} raises {sorted(raised)} without saying so"


@pytest.mark.parametrize("module", list(modules()), ids=lambda module: module.__name__)
def test_every_module_says_what_it_is(module: ModuleType) -> None:
    assert (module.__doc__ or "").strip()
