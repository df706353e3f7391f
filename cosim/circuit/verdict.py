"""Whether a run counts: from what the host sent to a result, or to an error.

PySpice's exceptions and ngspice's return codes are no test of success in either direction. A run
counts if its log has no fatal line, a new plot of the analysis came, its time ends on the stop
time, and all requested vectors are there, of one length and finite.
"""

import signal
from dataclasses import dataclass

import numpy as np

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.client import Answer
from cosim.circuit.deck import PreparedDeck, shortened
from cosim.circuit.faults import LOG_SHOWN, clean, findings, raise_for_log
from cosim.errors import (
    ConvergenceError,
    SimulationError,
    SimulatorCrashError,
    SimulatorMemoryError,
    SimulatorTimeoutError,
    UnknownNameError,
    near_names,
)
from cosim.waveform import FloatArray

STOP_TOLERANCE = 1e-6  # of the stop time: ngspice ends on it to rounding, a truncated run far off
MEMORY_MARGIN = 0.8  # of the limit; a child that dies by a signal above it ran out of memory
_MEMORY_WORDS = ("can't allocate", "out of memory", "bad_alloc", "MemoryError")


@dataclass(frozen=True, slots=True)
class Extent:
    """What an analysis was to do, in the words of the messages on a run that was stopped.

    Parameters
    ----------
    analysis : str
        "transient" or "noise analysis".
    time_limit : float
        Wall-clock limit of the run in s.
    memory_limit : int
        Limit of the simulator's address space in bytes.
    points : float
        Number of points.
    reached : str
        How far it came, as far as that is known, with "; " in front.
    shorter : str
        What takes less time.
    smaller : str
        What takes less memory.
    """

    analysis: str
    time_limit: float
    memory_limit: int
    points: float
    reached: str
    shorter: str
    smaller: str


def judge(
    prepared: PreparedDeck, request: TransientRequest, answer: Answer, version: str, models: bool
) -> TransientResult:
    """Turn the host's answer into a result, or raise what went wrong.

    Parameters
    ----------
    prepared : PreparedDeck
        The deck as sent.
    request : TransientRequest
        What was asked for.
    answer : Answer
        What came back.
    version : str
        For example "ngspice-39".
    models : bool
        Whether ngspice found its start file, which loads the code models of A devices.

    Returns
    -------
    TransientResult
        Only if the run came to its end, with all vectors complete and finite.

    Raises
    ------
    SimulatorTimeoutError, SimulatorMemoryError, SimulatorCrashError
        If the process was stopped or died, or the run lost its way.
    ConvergenceError
        With the simulated time, if no solution was found or one is not finite.
    DeckError
        Or one of its kinds, with the author's file and line, if the deck is at fault.
    MissingDependencyError
        If the deck uses code models and they are not installed.
    """
    extent = Extent(
        "transient",
        request.time_limit,
        request.memory_limit,
        request.stop / request.step,
        f"; it had come to about {answer.part * request.stop:.3g} s of {request.stop:g} s",
        "take a shorter stop time or a longer step",
        "save fewer vectors, or take a longer step",
    )
    try:
        log = check_run(prepared, extent, answer, models)
        time = answer.vectors["time"]
        _check_time(request, time, log)
        vectors = {
            save.lower(): _vector(save, key, answer, log) for save, key in prepared.keys.items()
        }
    except SimulationError as error:
        # How far it came, and what it looked like there, is the best hint at what went wrong.
        error.partial = dict(answer.vectors)
        raise
    assert answer.done is not None
    remarks = findings(prepared, answer.log)
    return TransientResult(
        time=time,
        vectors=vectors,
        log=log,
        warnings=(*prepared.notices, *remarks),
        deck=prepared.lines,
        wall_time=answer.done["wall_time"],
        overhead_time=answer.overhead_time,
        simulator_version=version,
        commands=prepared.commands,
        data=prepared.data,
        origins=prepared.origins,
        remarks=remarks,
    )


def check_run(
    prepared: PreparedDeck, extent: Extent, answer: Answer, models: bool
) -> tuple[str, ...]:
    """Raise what kept a run from its end, whatever its analysis.

    Parameters
    ----------
    prepared : PreparedDeck
        The deck as sent.
    extent : Extent
        What was asked for.
    answer : Answer
        What came back.
    models : bool
        Whether ngspice found its start file, which loads the code models of A devices.

    Returns
    -------
    tuple of str
        ngspice's log.

    Raises
    ------
    SimulationError, DeckError, MissingDependencyError
        As `judge`, but for what the vectors themselves say.
    """
    log = clean(answer.log)
    _check_process(extent, answer, log)
    raise_for_log(prepared, answer.log, models)
    assert answer.done is not None
    faults = [text for text in answer.done["faults"].values() if text]
    if faults or prepared.axis not in answer.vectors:
        what = faults[0] if faults else f"there is no {extent.analysis} among its plots"
        raise SimulatorCrashError(
            f"ngspice gave no {extent.analysis}: {what}", log=log[-LOG_SHOWN:]
        )
    return log


def _check_process(extent: Extent, answer: Answer, log: tuple[str, ...]) -> None:
    code, tail = answer.end["code"], log[-LOG_SHOWN:]
    if answer.end["timeout"]:
        raise SimulatorTimeoutError(
            f"ngspice did not finish within {extent.time_limit:g} s{extent.reached}",
            hint=f"raise the time limit, or {extent.shorter}",
            log=tail,
        )
    limit = answer.end["memory_limit"]
    full = code < 0 and answer.end["peak"] > MEMORY_MARGIN * limit
    if full or any(word in line for line in log for word in _MEMORY_WORDS):
        own = limit == extent.memory_limit
        which = "memory limit" if own else "system's memory limit (ulimit -v)"
        raise SimulatorMemoryError(
            f"ngspice needs more than the {which} of {limit / 2**20:.0f} MiB "
            f"for {extent.points:.3g} points",
            hint=f"raise {'the memory limit' if own else 'it'}, or {extent.smaller}",
            log=tail,
        )
    if code < 0:
        raise SimulatorCrashError(
            f"ngspice ended by signal {-code} ({signal.strsignal(-code)}){extent.reached}",
            hint="the log's last lines say how far it came with the deck",
            log=tail,
        )
    if answer.done is None:
        raise SimulatorCrashError(
            f"ngspice's process ended with code {code} and without a result", log=tail
        )


def _check_time(request: TransientRequest, time: FloatArray, log: tuple[str, ...]) -> None:
    reached = float(time[-1]) if time.size else 0.0
    if time.size < 2 or abs(reached - request.stop) > STOP_TOLERANCE * request.stop:
        raise SimulatorCrashError(
            f"ngspice stopped at {reached:.6g} s of {request.stop:g} s, after {time.size} points, "
            "and did not say why",
            log=log[-LOG_SHOWN:],
        )
    if not (np.diff(time) > 0).all():
        place = int(np.flatnonzero(np.diff(time) <= 0)[0])
        raise SimulatorCrashError(
            f"ngspice's time does not rise after {time[place]:.9g} s", log=log[-LOG_SHOWN:]
        )


def _vector(save: str, key: str, answer: Answer, log: tuple[str, ...]) -> FloatArray:
    assert answer.done is not None
    time = answer.vectors["time"]
    values = answer.vectors.get(key.lower())
    if values is None or values.size == 0:
        # ngspice leaves a node that does not exist out without a word, and gives a device
        # quantity that does not exist as an empty vector.
        near = near_names(key, set(answer.done["available"]) - {"time", key.lower()})
        raise UnknownNameError(
            f"ngspice gave no vector for {shortened(save)!r}", hint=near, log=log[-LOG_SHOWN:]
        )
    if values.size != time.size:
        raise SimulatorCrashError(
            f"ngspice gave {values.size} values of {shortened(save)!r} for {time.size} times",
            log=log[-LOG_SHOWN:],
        )
    if not np.isfinite(values).all():
        first = float(time[np.flatnonzero(~np.isfinite(values))[0]])
        raise ConvergenceError(
            f"{shortened(save)!r} is not finite from t = {first:.6g} s on",
            log=log[-LOG_SHOWN:],
            time=first,
        )
    return values
