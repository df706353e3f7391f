"""Runs many decks that are nearly alike: each is loaded once, and every run is a fork of that.

What a deck changes reaches the loaded one by `alterparam` and `reset`, or by `alter` where only
sources differ (`cosim.circuit.likeness` decides). Where sources agree up to a time, the run up to
there is shared as well. Measured, bit by bit equal to fresh runs:

- `stop when time > t` puts a break point at t and so moves the grid; `stop after n` does not.
- `alter` reads numbers as text, but takes them from a vector as they are; a vector's element takes
  any double as an integer times a power of two.
- What a source's expressions are worth is asked of ngspice, in a deck of nothing but them.
"""

import math
import re
import uuid
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.client import client_of_this_process
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.faults import raise_for_log
from cosim.circuit.likeness import Kin, kindred
from cosim.circuit.simulator import check_cut, simulate_prepared
from cosim.circuit.values import exact_text, source_values
from cosim.circuit.verdict import judge
from cosim.circuit.waves import SourceWords, agreement
from cosim.errors import CosimError, SimulatorTimeoutError

LEAST_SHARE = 0.05  # of a run: a shorter common part does not pay for a load of its own
_SAFE_POINTS = 2  # the shared run ends this many steps before it must
_LOG_LIMIT = 10_000  # lines of a load's log; a longer one may not come in its order
_PAUSE = re.compile(r"stderr .*(?:condition met: stop|pause requested|simulation interrupted)")
_PREFIX = "qcosim"

Outcome = TransientResult | CosimError
Progress = Callable[[int, float], None]


@dataclass(frozen=True, slots=True)
class _Member:
    """One run out of a loaded deck: the commands that make it, and vectors to arrive exactly."""

    place: int
    commands: tuple[str, ...]
    exact: dict[str, list[float]]


@dataclass(frozen=True, slots=True)
class _Branching:
    """A load and the runs that branch off it.

    Parameters
    ----------
    first : int
        Place of the deck that is loaded.
    then : tuple of str
        Commands after the load.
    start : str
        "run", or "resume" after a shared part.
    until : float
        Time in s that the shared part must not reach.
    members : tuple of _Member
        The runs.
    """

    first: int
    then: tuple[str, ...]
    start: str
    until: float
    members: tuple[_Member, ...]


def simulate_family(
    prepared: Sequence[PreparedDeck],
    requests: Sequence[TransientRequest],
    *,
    progress: Progress | None = None,
) -> Iterator[Outcome]:
    """Run many transients, with one load for all that differ little enough.

    Parameters
    ----------
    prepared : sequence of PreparedDeck
        Decks as sent, of any kind. Results of decks that are alike are held back until their
        turn, so that a long sequence is better given in parts.
    requests : sequence of TransientRequest
        The request that each was prepared for. The time limit holds for a load, with the part of
        the run that is shared, and again for each run out of it.
    progress : callable or None
        Called with the place of a deck and its simulated time in s, now and then.

    Yields
    ------
    TransientResult or CosimError
        In the order of the decks, one each: equal to what `simulate_prepared` gives or raises, but
        for the times that it took.
    """
    decks = list(zip(prepared, requests, strict=True))
    waiting: dict[int, Outcome] = {}
    turn = 0
    for kin in kindred(prepared, requests):
        for place, outcome in _run(kin, decks, progress):
            waiting[place] = outcome
            while turn in waiting:
                yield waiting.pop(turn)
                turn += 1


_Decks = Sequence[tuple[PreparedDeck, TransientRequest]]


def _run(kin: Kin, decks: _Decks, progress: Progress | None) -> Iterator[tuple[int, Outcome]]:
    try:
        plan = _branchings(kin, decks) if kin.sources or kin.parameters else []
    except CosimError:  # The fresh runs will say it.
        plan = []
    left = set(kin.members)
    for branching in plan:
        for place, outcome in _branch(branching, decks, progress):
            left.remove(place)
            yield place, outcome
    for place in sorted(left):
        yield place, _fresh(place, decks, progress)


def _fresh(place: int, decks: _Decks, progress: Progress | None) -> Outcome:
    try:
        told = None if progress is None else partial(progress, place)
        return simulate_prepared(*decks[place], progress=told)
    except CosimError as error:
        return error


def _branchings(kin: Kin, decks: _Decks) -> list[_Branching]:
    """Say what is loaded for decks that are alike, and what branches off; nothing if unsure."""
    check_cut(decks[kin.members[0]][0])
    values = source_values([decks[place][0] for place in kin.members], kin.sources)
    if values:
        return _by_sources(kin, decks, values)
    members = tuple(
        _Member(place, _reset_commands(decks[place][0], texts), {})
        for place, texts in zip(kin.members, kin.parameters, strict=False)
    )
    return [_Branching(kin.members[0], ("reset",), "run", math.inf, members)] if members else []


def _reset_commands(deck: PreparedDeck, texts: Mapping[str, str]) -> tuple[str, ...]:
    seed = [command for command in deck.commands if command.startswith("setseed")]
    return (*(f"alterparam {name}={text}" for name, text in texts.items()), *seed, "reset")


_Values = list[list[float]]  # of each source of a deck


def _by_sources(kin: Kin, decks: _Decks, values: Sequence[_Values]) -> list[_Branching]:
    """Let decks share the part of the run in which their sources agree, if it is long enough."""
    _, request = decks[kin.members[0]]
    groups: list[tuple[float, list[int]]] = []
    near: dict[tuple[float, ...], list[int]] = {}  # Others do not begin with the same value.
    for number in range(len(kin.members)):
        first = tuple(own[0] for own in values[number])
        for place in near.setdefault(first, []):
            until, group = groups[place]
            common = min(until, *map(agreement, kin.sources[0], values[group[0]], values[number]))
            one, other = (decks[kin.members[k]][0].data for k in (group[0], number))
            # A file is open once its run has begun.
            fits = request.start == 0.0 and one == other
            if fits and common >= LEAST_SHARE * request.stop:
                groups[place] = (common, [*group, number])
                break
        else:
            near[first].append(len(groups))
            groups.append((math.inf, [number]))
    alone = [number for _, group in groups if len(group) == 1 for number in group]
    found = [(0.0, alone)] if alone else []
    found += [(min(until, request.stop), group) for until, group in groups if len(group) > 1]
    return [_altering(kin, values, group, until, request.step) for until, group in found]


def _altering(
    kin: Kin, values: Sequence[_Values], group: Sequence[int], until: float, step: float
) -> _Branching:
    points = math.floor(until / step) - _SAFE_POINTS
    shared = points > 0
    then = (f"stop after {points}", "run") if shared else ()
    after = ("setplot tran1", "delete all") if shared else ()
    members = []
    for number in group:
        commands = ["setplot const"]
        exact: dict[str, list[float]] = {}
        sources = zip(kin.sources[0], values[group[0]], values[number], strict=True)
        for source, base, own in sources:
            for part, vector in _parts(source, own).items():
                if vector != _parts(source, base)[part]:
                    name = f"{_PREFIX}{len(exact)}"
                    exact[name] = vector
                    commands.append(f"let {name} = vector({len(vector)})")
                    commands += [f"let {name}[{i}] = {exact_text(x)}" for i, x in enumerate(vector)]
                    commands.append(f"alter @{source.name}[{part}] = {name}")
        members.append(_Member(kin.members[number], (*commands, *after), exact))
    start = "resume" if shared else "run"
    return _Branching(kin.members[group[0]], then, start, until, tuple(members))


def _parts(source: SourceWords, values: list[float]) -> dict[str, list[float]]:
    """Give ngspice's name of each part of a source, and its values."""
    constant = [] if source.constant is None else values[:1]
    parts = {"dc": constant, source.function: values[len(constant) :]}
    return {name: numbers for name, numbers in parts.items() if numbers}


def _branch(
    branching: _Branching, decks: _Decks, progress: Progress | None
) -> Iterator[tuple[int, Outcome]]:
    """Load a deck and run what branches off it; what is not given has to run fresh."""
    loaded: _Load | None = None
    try:
        for member in branching.members:
            deck, request = decks[member.place]
            loaded = loaded or _load(branching, decks)
            if loaded is None:
                return
            told = None
            if progress is not None:
                told = partial(_tell, progress, member.place, request.stop)
            outcome = _one(branching, member, loaded, deck, request, told)
            if outcome is None:
                # Whatever it was, a fresh run says it as it is: with its own log, and as an error
                # only if it is one there too.
                loaded, outcome = None, _fresh(member.place, decks, progress)
            yield member.place, outcome
    finally:
        client_of_this_process().unload()


def _tell(progress: Progress, place: int, stop: float, part: float) -> None:
    progress(place, part * stop)


@dataclass(frozen=True, slots=True)
class _Load:
    """A loaded deck: its token, and the lines of the log that belong to each of its runs.

    Parameters
    ----------
    token : str
        By which the host knows it.
    log : list of str
        The lines.
    rewrites : bool
        Whether each run puts its own data files in the place of the loaded deck's.
    """

    token: str
    log: list[str]
    rewrites: bool


def _load(branching: _Branching, decks: _Decks) -> _Load | None:
    deck, request = decks[branching.first]
    token = uuid.uuid4().hex
    asked = _asked("load", token, request, deck) | {
        "lines": list(deck.lines),
        "commands": list(deck.commands),
        "then": list(branching.then),
    }
    client = client_of_this_process()
    try:
        answer = client.exchange(asked, deck.data)
        loaded = answer.loaded
        if loaded is None or loaded["fault"] or len(answer.log) > _LOG_LIMIT:
            return None
        shared = branching.start == "resume"
        paused = [line for line in answer.log if _PAUSE.match(line)]
        if shared and (not paused or not 0.0 < loaded["reached"] < branching.until):
            return None
        log = [line for line in answer.log if line not in paused]
        raise_for_log(deck, log, client.ready["models"])
    except CosimError:
        return None
    if not shared and branching.then:
        # What the reading alone says comes once; what `reset` says again comes from each run.
        reading, again = log[: loaded["reading"]], Counter(log[loaded["reading"] :])
        log = [line for line in reading if not _taken(again, line)]
    rewrites = any(decks[member.place][0].data != deck.data for member in branching.members)
    return _Load(token, log, rewrites)


def _taken(lines: Counter[str], line: str) -> bool:
    lines[line] -= 1
    return lines[line] >= 0


def _asked(kind: str, token: str, request: TransientRequest, deck: PreparedDeck) -> dict[str, Any]:
    return {
        "kind": kind,
        "token": token,
        "plots": deck.plots,
        "keys": sorted({deck.axis, *(key.lower() for key in deck.keys.values())}),
        "time_limit": request.time_limit,
        "memory_limit": request.memory_limit,
    }


def _one(
    branching: _Branching,
    member: _Member,
    loaded: _Load,
    deck: PreparedDeck,
    request: TransientRequest,
    progress: Callable[[float], None] | None,
) -> Outcome | None:
    asked = _asked("set", loaded.token, request, deck) | {
        "commands": list(member.commands),
        "exact": member.exact,
        "start": branching.start,
    }
    client = client_of_this_process()
    try:
        answer = client.exchange(asked, deck.data if loaded.rewrites else {}, progress)
        if answer.end.get("lost"):
            return None
        own = [line for line in answer.log if not line.startswith("stdout Reset re-loads circuit")]
        if branching.start == "resume":
            own = [line for line in own if not line.startswith("stdout Doing analysis")]
        answer.log = [*loaded.log, *own]
        return judge(
            deck, request, answer, f"ngspice-{client.ready['version']}", client.ready["models"]
        )
    except SimulatorTimeoutError as error:
        return error  # A fresh run would take as long.
    except CosimError:
        return None
