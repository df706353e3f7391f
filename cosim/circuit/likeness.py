"""Which of many decks can share one load, told from their lines as they are sent.

Decks are alike if they differ in nothing but plain numbers of top-level `.param` cards, top-level
sources, and samples of file sources. There are two ways to make one of them out of another that is
loaded; where these rules let them, both gave every point of a fresh run bit by bit:

    alter   the values of top-level sources are set. Nothing else may depend on what differs.
    reset   `alterparam`, `setseed`, `reset`: ngspice works its lines out again, unread.

What is not certain runs fresh: parameters of the same name in a subcircuit (`alterparam` changes
these too), parameters set twice or within `.if`, those that `.if`, `.tran`, `.save`, `.temp`,
`.options` or `.csparam` depend on, sources of noise (no seed resets their pool), and the dialects
that ngspice translates while it reads.
"""

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.cards import assignments, card_word, model_card, word_spans
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.waves import SourceWords, source_words

_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:e[-+]?\d+)?(?:meg|[tgkmunpf])?", re.IGNORECASE)
_NAME = re.compile(r"(?<![\w.])[a-z_]\w*")
_ASSIGNED = re.compile(r"(?<![\w.])[a-z_]\w*\s*=(?!=)")  # Names of a model's or device's own.
_BRACES = re.compile(r"\{[^{}]*\}|'[^']*'|\"[^\"]*\"")
# Cards that are read once, or whose effect outlasts the circuit that they stand in.
_READ_ONCE = frozenset({".if", ".elseif", ".tran", ".save", ".temp", ".options", ".csparam"})
_NOISE = ("trnoise", "trrandom", "external")
_RANDOM = ("agauss", "aunif", "gauss", "unif", "limit", "random", "poisson", "exponential")
_DIALECTS = frozenset({"set ngbehavior=hsa"})
_SOURCES = frozenset("vViI")
# Words behind an element's name that are certainly nodes, where no parameter is looked for.
_NODES = {"q": 3, "m": 4, "j": 3, "z": 3, "s": 4, "t": 4, "o": 4} | dict.fromkeys("rclvidegwb", 2)


@dataclass(frozen=True, slots=True)
class Kin:
    """Decks that can share one load.

    Parameters
    ----------
    members : tuple of int
        Their places among all decks; the first one is what is loaded.
    parameters : tuple of dict
        Of each member, name in lower case -> text of the parameters in which they differ, for the
        way "reset"; empty where only "alter" or a fresh run will do.
    sources : tuple of tuple of SourceWords
        Of each member, the sources that depend on what differs, for the way "alter"; empty where
        another way is needed.
    """

    members: tuple[int, ...]
    parameters: tuple[Mapping[str, str], ...] = ()
    sources: tuple[tuple[SourceWords, ...], ...] = ()


@dataclass(frozen=True, slots=True)
class _View:
    """A deck's lines with what may differ cut out."""

    lines: tuple[str, ...]
    common: tuple[str, ...]
    numbers: dict[str, str]
    repeated: frozenset[str]
    sources: dict[int, str]


def kindred(prepared: Sequence[PreparedDeck], requests: Sequence[TransientRequest]) -> list[Kin]:
    """Sort decks into those that can share one load.

    Parameters
    ----------
    prepared : sequence of PreparedDeck
        Decks as sent.
    requests : sequence of TransientRequest
        The request of each.

    Returns
    -------
    list of Kin
        Every deck is in one of them, in the order of their first members; a deck that is alone
        runs fresh, and so do those that have neither parameters nor sources.
    """
    views: list[_View] = []
    for item in prepared:
        near = _near_view(item.lines, views[-1]) if views else None
        views.append(near or _view(item.lines))
    groups: dict[object, list[int]] = {}
    for place, (item, request, view) in enumerate(zip(prepared, requests, views, strict=True)):
        key = (
            view.common, tuple(view.numbers), tuple(view.sources), _settings(item),
            _data(item), tuple(item.keys.items()), item.plots, item.axis,
            request.start, request.time_limit, request.memory_limit,
        )  # fmt: skip
        groups.setdefault(key, []).append(place)
    found: list[Kin] = []
    for members in groups.values():
        found += _ways(prepared, views, tuple(members))
    return sorted(found, key=lambda kin: kin.members[0])


@dataclass(frozen=True, slots=True)
class Definition:
    """A parameter or function, and what it is worked out from.

    Parameters
    ----------
    name : str
        In lower case.
    card : str
        A card that defines this one only.
    used : frozenset of str
        Names in its text, in lower case, and arguments of its own among them.
    random : bool
        Whether it draws a number.
    """

    name: str
    card: str
    used: frozenset[str]
    random: bool


_short_card = lru_cache(maxsize=2**14)(card_word)


def card_of(line: str) -> str:
    """Give a line's card as `card_word` does, quickly for the long lines of a kit.

    Parameters
    ----------
    line : str
        A line of a deck.

    Returns
    -------
    str
    """
    return _short_card(line[:16]) if line[:1] == "." else ""


@lru_cache(maxsize=2**14)  # A kit has hundreds of these lines, the same ones in each deck.
def definitions(line: str) -> tuple[Definition, ...]:
    """Give what a line defines.

    Parameters
    ----------
    line : str
        A line of a deck.

    Returns
    -------
    tuple of Definition
        Of `.param`, `.csparam` and `.func` cards; else none.
    """
    card = card_word(line)
    if card == ".func":
        name, _, text = line[len(".func") :].partition("(")
        return (Definition(name.strip().lower(), line, names_in(text), _is_random(text)),)
    if card not in (".param", ".csparam"):
        return ()
    return tuple(
        Definition(
            item.name.partition("(")[0],
            f"{card} {line[item.start : item.stop]}",
            names_in(item.value),
            _is_random(item.value),
        )
        for item in assignments(line)
    )


def needed(lines: Sequence[str], used: Iterable[str]) -> set[str]:
    """Give the names of all parameters and functions that some are worked out from.

    Parameters
    ----------
    lines : sequence of str
        Lines of a deck.
    used : iterable of str
        Names in lower case.

    Returns
    -------
    set of str
        These, and all that their definitions name.
    """
    uses: dict[str, set[str]] = {}
    for line in lines:
        for item in definitions(line) if card_of(line) else ():
            uses.setdefault(item.name, set()).update(item.used)
    known: set[str] = set()
    waiting = set(used)
    while waiting:
        name = waiting.pop()
        known.add(name)
        waiting |= uses.get(name, set()) - known
    return known


def names_in(text: str) -> frozenset[str]:
    """Give the identifiers of an expression.

    Parameters
    ----------
    text : str
        The expression.

    Returns
    -------
    frozenset of str
        In lower case.
    """
    return frozenset(_NAME.findall(text.lower()))


def _data(item: PreparedDeck) -> tuple[tuple[str, bytes], ...]:
    """Give the data files; of those that are read as a run begins the names only."""
    late: set[str] = set()
    early: set[str] = set()
    for line in item.lines if item.data else ():
        if "{scratch}" in line:
            is_source = card_of(line) == ".model" and model_card(line)[1] == "filesource"
            (late if is_source else early).update(name for name in item.data if name in line)
    late -= early
    return tuple((name, b"" if name in late else data) for name, data in item.data.items())


def _settings(item: PreparedDeck) -> tuple[str, ...]:
    return tuple(command for command in item.commands if not command.startswith("setseed"))


def _view(lines: tuple[str, ...]) -> _View:
    common: list[str] = list(lines)
    numbers: dict[str, str] = {}
    seen: set[str] = set()
    repeated: set[str] = set()
    sources, depth = {}, 0
    for index, line in enumerate(lines):
        card = card_of(line)
        if card in (".subckt", ".if"):
            depth += 1
        elif card in (".ends", ".endif"):
            depth -= 1
        elif card in (".param", ".csparam"):
            names = {item.name for item in definitions(line)}
            again = names & seen if len(names) == len(definitions(line)) else names
            repeated |= again
            seen |= names
            if depth == 0 and card == ".param" and not again:
                common[index], found = _without_numbers(line)
                numbers |= found
        elif depth == 0 and line[:1] in _SOURCES and index > 0:  # The first line is the title.
            sources[index] = line
            common[index] = ""
    return _View(lines, tuple(common), numbers, frozenset(repeated), sources)


def _near_view(lines: tuple[str, ...], other: _View) -> _View | None:
    """Give the view of a deck that is like another one, quickly; None if it is not."""
    if len(lines) != len(other.lines):
        return None
    numbers, sources = dict(other.numbers), dict(other.sources)
    for index, (own, known) in enumerate(zip(lines, other.lines, strict=True)):
        if own is known or own == known:
            continue
        if index in sources and own[:1] in _SOURCES:
            sources[index] = own
        elif other.common[index] != known and _without_numbers(own)[0] == other.common[index]:
            numbers |= _without_numbers(own)[1]
        else:
            return None
    return _View(lines, other.common, numbers, other.repeated, sources)


@lru_cache(maxsize=2**14)
def _without_numbers(line: str) -> tuple[str, dict[str, str]]:
    """Cut the plain numbers out of a `.param` card; give them by name."""
    numbers = {}
    text = line
    for item in reversed(assignments(line)):
        if _NUMBER.fullmatch(item.value):
            text = f"{text[: item.value_start]}#{text[item.stop :]}"
            numbers[item.name] = item.value.lower()
    return text, numbers


def _ways(
    prepared: Sequence[PreparedDeck], views: Sequence[_View], members: tuple[int, ...]
) -> list[Kin]:
    """Find the way for decks that are alike; by their sources they may fall into several."""
    first = views[members[0]]
    changed = {
        name
        for name, text in first.numbers.items()
        if any(views[place].numbers[name] != text for place in members)
    }
    if len(members) == 1 or changed & first.repeated or not _is_known(prepared[members[0]]):
        return [Kin((place,)) for place in members]
    tainted = _tainted(prepared[members[0]].lines, changed)
    sources = _alterable(prepared, views, members, tainted)
    groups: dict[tuple[str, ...], list[int]] = {}
    for place in members:
        groups.setdefault(tuple(views[place].sources.values()), []).append(place)
    resettable = _resettable(prepared[members[0]].lines, changed, tainted)
    if sources:
        texts = _texts(views, members, changed) if resettable and len(groups) == 1 else ()
        return [Kin(members, texts, sources)]
    if not resettable:
        return [Kin((place,)) for place in members]
    kin = [tuple(group) for group in groups.values()]
    return [Kin(group, _texts(views, group, changed) if len(group) > 1 else ()) for group in kin]


def _texts(
    views: Sequence[_View], members: Iterable[int], changed: set[str]
) -> tuple[Mapping[str, str], ...]:
    names = sorted(changed)
    return tuple({name: views[place].numbers[name] for name in names} for place in members)


def _is_known(item: PreparedDeck) -> bool:
    text = "\n".join(item.lines).lower()
    return not any(word in text for word in _NOISE) and all(
        command in _DIALECTS for command in _settings(item)
    )


def _tainted(lines: Sequence[str], changed: set[str]) -> set[str]:
    """Give the names of all parameters and functions that depend on some, and these."""
    known = [item for line in lines for item in definitions(line)]
    tainted = set(changed)
    before = -1
    while len(tainted) > before:
        before = len(tainted)
        tainted |= {item.name for item in known if item.used & tainted}
    return tainted


def _resettable(lines: Sequence[str], changed: set[str], tainted: set[str]) -> bool:
    inside = 0
    for line in lines:
        card = card_word(line)
        inside += (card == ".subckt") - (card == ".ends")
        if card == ".subckt" or (inside and card == ".param"):
            if changed & {item.name for item in assignments(line)}:
                return False
        elif card in _READ_ONCE and _uses(line, tainted):
            return False
    return True


def _alterable(
    prepared: Sequence[PreparedDeck],
    views: Sequence[_View],
    members: tuple[int, ...],
    tainted: set[str],
) -> tuple[tuple[SourceWords, ...], ...]:
    """Give the sources that make the whole difference, of each member; none if there is more."""
    first = views[members[0]]
    lines = prepared[members[0]].lines
    affected = {
        index
        for index, text in first.sources.items()
        if _uses(text, tainted) or any(views[place].sources[index] != text for place in members)
    }
    if any(map(_is_random, lines)):
        # What is drawn depends on all that is drawn before; and one load has one seed.
        texts = [views[place].sources[index] for place in members for index in affected]
        wanted = needed(lines, names_in(" ".join(texts)))
        if any(item.random and item.name in wanted for line in lines for item in definitions(line)):
            return ()
        if len({prepared[place].commands for place in members}) > 1:
            return ()
    for index, line in enumerate(lines):
        if index not in affected and card_word(line) not in (".param", ".func"):
            if _uses(line, tainted):
                return ()
    found = []
    for place in members:
        read = [source_words(views[place].sources[index]) for index in sorted(affected)]
        found.append(tuple(item for item in read if item is not None))
        if len(found[-1]) < len(read):
            return ()
    shapes = {tuple(item.shape for item in member) for member in found}
    return tuple(found) if len(shapes) == 1 and affected else ()


def _is_random(text: str) -> bool:
    lower = text.lower()
    return any(word in lower for word in _RANDOM)


def _uses(line: str, names: set[str]) -> bool:
    """Tell whether a line may depend on some parameters; nodes of the same name do not count."""
    lower = line.lower()
    if not any(name in lower for name in names):
        return False
    return bool(names & names_in(_value_part(lower)))


def _value_part(line: str) -> str:
    """Give the part of a line in which ngspice may take a word for a parameter."""
    card = card_word(line)
    if card in (".save", ".global", ".ends"):
        return " ".join(_BRACES.findall(line))
    if card == ".subckt" or line[0] == "x":
        found = assignments(line)
        return line[found[0].start :] if found else " ".join(_BRACES.findall(line))
    if card in (".if", ".elseif"):
        return line
    if card:
        return _ASSIGNED.sub(" ", line)
    spans = word_spans(line)
    nodes = 1 + _NODES.get(line[0], 0)
    return _ASSIGNED.sub(" ", line[spans[nodes][0] :]) if len(spans) > nodes else ""
