"""Oracle: Python's own pickle, and the builtin classes that each error must also be."""

import inspect
import pickle

import pytest

from cosim import errors

ALL = [
    cls
    for _, cls in inspect.getmembers(errors, inspect.isclass)
    if issubclass(cls, errors.CosimError)
]


@pytest.mark.parametrize("cls", ALL, ids=lambda cls: cls.__name__)
def test_every_error_pickles_with_its_details(cls: type[errors.CosimError]) -> None:
    error = cls("what went wrong", hint="do this", log=["line 1"])
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is cls
    assert again.message == error.message
    assert str(again) == str(error)
    assert (again.hint, again.log) == ("do this", ("line 1",))
    assert again.__dict__ == error.__dict__


def test_extra_details_pickle() -> None:
    deck = pickle.loads(pickle.dumps(errors.DeckError("bad card", file="a.cir", line=7)))
    assert (deck.file, deck.line, deck.message) == ("a.cir", 7, "a.cir:7: bad card")
    time = pickle.loads(pickle.dumps(errors.ConvergenceError("stuck", time=1e-9)))
    assert time.time == 1e-9


def test_a_cause_survives_being_raised_again() -> None:
    with pytest.raises(errors.InputError, match="wanted") as caught:
        raise errors.UnitError("wanted a time")
    assert isinstance(pickle.loads(pickle.dumps(caught.value)), errors.UnitError)


@pytest.mark.parametrize(
    ("cls", "builtin"),
    [
        (errors.InputError, ValueError),
        (errors.MissingFileError, FileNotFoundError),
        (errors.ForbiddenDeckError, PermissionError),
        (errors.UnknownNameError, LookupError),
        (errors.ArchiveError, OSError),
        (errors.SimulationError, RuntimeError),
        (errors.SimulatorTimeoutError, TimeoutError),
        (errors.SimulatorMemoryError, MemoryError),
        (errors.MissingDependencyError, ImportError),
    ],
)
def test_each_error_is_the_builtin_a_user_would_catch(
    cls: type[Exception], builtin: type[Exception]
) -> None:
    with pytest.raises(builtin):
        raise cls("x")


def test_near_names() -> None:
    assert "'temperature'" in errors.near_names("temprature", ["temperature", "stop"])
    assert errors.near_names("zzz", ["a", "b"]) == "valid names: 'a', 'b'"
    assert errors.near_names("zzz", []) == "there are none"
