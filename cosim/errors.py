"""The errors of the package, one tree.

    CosimError
    ├── InputError (ValueError)                the input is wrong: exit code 2
    │   ├── UnitError                          a text with a unit that cannot be read
    │   ├── TestbenchError                     a key or value of the testbench file
    │   ├── ProbeError                         a probe expression that cannot be read
    │   ├── DeckError                          the deck, with file and line
    │   │   ├── MissingFileError (FileNotFoundError)   an include or data file is not there
    │   │   ├── ForbiddenDeckError (PermissionError)   would run, read or write what it must not
    │   │   ├── UnknownNameError (LookupError)         a node, parameter, instance, section or model
    │   │   └── UnsupportedDeckError                   encrypted, Verilog-A and the like
    │   ├── WaveformError                      too short, too coarse, not finite, no carrier
    │   └── ArchiveError (OSError)             an archive that cannot be read or written
    ├── SimulationError (RuntimeError)         the simulation failed: exit code 3
    │   ├── ConvergenceError                   no operating point, or the time step became too small
    │   ├── SimulatorCrashError                ngspice ended by a signal or lost its way
    │   ├── SimulatorTimeoutError (TimeoutError)   the wall-clock limit ran out
    │   ├── SimulatorMemoryError (MemoryError)     the memory limit ran out
    │   └── EvolutionError                     the quantum evolution is not physical or not accurate
    └── MissingDependencyError (ImportError)   ngspice or an extra is not installed: exit code 2

Each error is also the builtin that a user would catch. A message says what, where, wanted, got
and the next step. Every error pickles with its details, so that it survives process pools.
"""

import difflib
from collections.abc import Iterable, Mapping
from types import MappingProxyType
from typing import Any


def _rebuild(cls: type["CosimError"], args: tuple[Any, ...], state: dict[str, Any]) -> "CosimError":
    # The message is complete, so it is given alone; what stood beside it is in the state.
    error = cls(*args)
    error.__dict__.update(state)
    return error


class CosimError(Exception):
    """Base of all errors of this package.

    Parameters
    ----------
    message : str
        What went wrong, where, what was wanted and what was got.
    hint : str
        What to do next; printed on a line of its own.
    log : tuple of str
        Lines of the simulator's log that belong to the error.
    """

    def __init__(self, message: str, *, hint: str = "", log: Iterable[str] = ()) -> None:
        super().__init__(message)
        self.hint = hint
        self.log = tuple(log)

    @property
    def message(self) -> str:
        """The message without the hint."""
        return str(self.args[0]) if self.args else ""

    def __str__(self) -> str:
        return f"{self.message}\n  {self.hint}" if self.hint else self.message

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuild, (type(self), self.args, self.__dict__.copy())


class InputError(CosimError, ValueError):
    """The input is wrong."""


class UnitError(InputError):
    """A text with a unit that cannot be read."""


class TestbenchError(InputError):
    """A key or value of the testbench file."""

    __test__ = False  # The name starts with "Test"; pytest must not collect it.


class ProbeError(InputError):
    """A probe expression that cannot be read."""


class DeckError(InputError):
    """The deck, with the file and line of its author.

    Parameters
    ----------
    message, hint, log
        As in `CosimError`; the message gets "file:line: " in front when these are given.
    file : str
        File in which the fault stands.
    line : int
        Line number, from 1; 0 when unknown.
    """

    def __init__(
        self,
        message: str,
        *,
        hint: str = "",
        log: Iterable[str] = (),
        file: str = "",
        line: int = 0,
    ) -> None:
        where = f"{file}:{line}: " if file and line else f"{file}: " if file else ""
        super().__init__(where + message, hint=hint, log=log)
        self.file = file
        self.line = line


class MissingFileError(DeckError, FileNotFoundError):
    """An include or data file is not there."""


class ForbiddenDeckError(DeckError, PermissionError):
    """The deck would run a command, or read or write what it must not."""


class UnknownNameError(DeckError, LookupError):
    """A node, parameter, instance, section or model that does not exist."""


class UnsupportedDeckError(DeckError):
    """Something this ngspice cannot simulate: encrypted or Verilog-A models and the like."""


class WaveformError(InputError):
    """A waveform that is too short, too coarse, not finite or without a carrier."""


class ArchiveError(InputError, OSError):
    """An archive that cannot be read or written."""


class SimulationError(CosimError, RuntimeError):
    """The simulation failed.

    Attributes
    ----------
    partial : mapping of str to ndarray
        What the simulator had computed until then, "time" in s among it; often empty.
    """

    partial: Mapping[str, Any] = MappingProxyType({})


class ConvergenceError(SimulationError):
    """No operating point, or the time step became too small.

    Parameters
    ----------
    message, hint, log
        As in `CosimError`.
    time : float or None
        Simulated time in s at which the simulator gave up.
    """

    def __init__(
        self,
        message: str,
        *,
        hint: str = "",
        log: Iterable[str] = (),
        time: float | None = None,
    ) -> None:
        super().__init__(message, hint=hint, log=log)
        self.time = time


class SimulatorCrashError(SimulationError):
    """The simulator ended by a signal, or lost its way."""


class SimulatorTimeoutError(SimulationError, TimeoutError):
    """The wall-clock limit of a run ran out."""


class SimulatorMemoryError(SimulationError, MemoryError):
    """The memory limit of a run ran out."""


class EvolutionError(SimulationError):
    """The quantum evolution is not physical or not accurate."""


class MissingDependencyError(CosimError, ImportError):
    """Ngspice or an extra is not installed."""


def near_names(name: str, valid: Iterable[str], count: int = 3) -> str:
    """Give the valid names nearest to a wrong one, as the tail of a message.

    Parameters
    ----------
    name : str
        The name that was not found.
    valid : iterable of str
        The names that exist.
    count : int
        How many to give at most.

    Returns
    -------
    str
        "did you mean 'a', 'b'?", or a list of what exists when none is near.
    """
    names = sorted(set(valid))
    near = difflib.get_close_matches(name.lower(), names, n=count, cutoff=0.5)
    if near:
        return "did you mean " + ", ".join(f"'{item}'" for item in near) + "?"
    if not names:
        return "there are none"
    shown = ", ".join(f"'{item}'" for item in names[:12])
    return f"valid names: {shown}" + (f" and {len(names) - 12} more" if len(names) > 12 else "")
