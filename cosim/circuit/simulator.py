"""Runs a deck in a child process; a crash, a hang or a bad deck becomes a clear error."""

from collections.abc import Callable

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.client import Answer, client_of_this_process, find_simulator
from cosim.circuit.deck import Deck, PreparedDeck, shortened
from cosim.circuit.preparation import prepare
from cosim.circuit.verdict import judge
from cosim.errors import ForbiddenDeckError

__all__ = ["find_simulator", "send", "simulate", "simulate_prepared", "simulator_version"]


def simulate(
    deck: Deck, request: TransientRequest, *, progress: Callable[[float], None] | None = None
) -> TransientResult:
    """Run a transient of a deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : TransientRequest
        Times in s, vectors to save, temperature in K, tolerances and limits.
    progress : callable or None
        Called with the simulated time in s, at most ten times a second; it must not simulate.

    Returns
    -------
    TransientResult
        Times of shape (n,) in s, vectors of shape (n,) in V or A.

    Raises
    ------
    SimulationError
        Or one of its kinds: no convergence, crash, time limit, memory limit.
    DeckError
        Or one of its kinds, with the author's file and line.
    ProbeError
        If a save expression cannot be read.
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    return simulate_prepared(prepare(deck, request), request, progress=progress)


def simulate_prepared(
    prepared: PreparedDeck,
    request: TransientRequest,
    *,
    progress: Callable[[float], None] | None = None,
) -> TransientResult:
    """Run a deck that is ready to be sent.

    Runs of one process follow one another, whatever threads they come from; more at a time need
    more processes.

    Parameters
    ----------
    prepared : PreparedDeck
        The lines as they are sent. What they do is not checked here: that is the work of
        `cosim.circuit.preparation.prepare`.
    request : TransientRequest
        The request that the deck was prepared for.
    progress : callable or None
        Called with the simulated time in s, at most ten times a second; it must not simulate.

    Returns
    -------
    TransientResult
        Times of shape (n,) in s, vectors of shape (n,) in V or A.

    Raises
    ------
    SimulationError
        Or one of its kinds: no convergence, crash, time limit, memory limit.
    DeckError
        Or one of its kinds, with the author's file and line.
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    part_done = None if progress is None else lambda part: progress(part * request.stop)
    answer, version, models = send(
        prepared, request.time_limit, request.memory_limit, progress=part_done
    )
    return judge(prepared, request, answer, version, models)


def send(
    prepared: PreparedDeck,
    time_limit: float,
    memory_limit: int,
    *,
    progress: Callable[[float], None] | None = None,
) -> tuple[Answer, str, bool]:
    """Let ngspice run a deck, whatever its analysis; the verdict is the caller's.

    Parameters
    ----------
    prepared : PreparedDeck
        The lines as they are sent.
    time_limit : float
        Wall-clock limit of the run in s.
    memory_limit : int
        Limit of the simulator's address space in bytes.
    progress : callable or None
        Called with the simulated part of a transient, from 0 to 1.

    Returns
    -------
    Answer
        What came back.
    str
        The simulator, for example "ngspice-39".
    bool
        Whether ngspice found its start file, which loads the code models of A devices.

    Raises
    ------
    ForbiddenDeckError
        If a line is empty or holds a control character.
    SimulatorCrashError
        If the host itself died.
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    check_cut(prepared)
    client = client_of_this_process()
    answer = client.run(
        lines=prepared.lines,
        commands=prepared.commands,
        plots=prepared.plots,
        keys=sorted({prepared.axis, *(key.lower() for key in prepared.keys.values())}),
        data=prepared.data,
        time_limit=time_limit,
        memory_limit=memory_limit,
        progress=progress,
    )
    return answer, f"ngspice-{client.ready['version']}", client.ready["models"]


def check_cut(prepared: PreparedDeck) -> None:
    """Refuse a deck whose lines the library would cut up again, and so could find a command.

    Parameters
    ----------
    prepared : PreparedDeck
        The lines as they are sent.

    Raises
    ------
    ForbiddenDeckError
        If a line is empty or holds a control character.
    """
    for line, (file, number) in zip(prepared.lines, prepared.origins, strict=True):
        # The library counts lines, and a line that it splits again could hold a command.
        if not line or line.splitlines() != [line] or "\0" in line:
            raise ForbiddenDeckError(
                f"an empty line or a control character in {shortened(line)!r}",
                file=file,
                line=number,
            )


def simulator_version() -> str:
    """Give the simulator's name and version; starts the host.

    Returns
    -------
    str
        For example "ngspice-39".

    Raises
    ------
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    client = client_of_this_process()
    client.start()
    return f"ngspice-{client.ready['version']}"
