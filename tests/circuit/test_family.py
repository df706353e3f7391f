"""Oracle: fresh runs of the same decks, one by one, compared bit by bit.

No tolerance anywhere: that the two are equal to the last bit is what was measured, and what the
rules of `cosim.circuit.likeness` promise.
"""

import os
import signal
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cosim.circuit import family
from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.client import client_of_this_process
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.family import simulate_family
from cosim.circuit.likeness import kindred
from cosim.circuit.netlist import Deck, deck_from_text, load_deck, prepare, with_parameters
from cosim.circuit.simulator import simulate_prepared
from cosim.circuit.stimulus import with_stimulus
from cosim.errors import (
    ConvergenceError,
    CosimError,
    DeckError,
    MissingDependencyError,
    SimulatorCrashError,
    SimulatorTimeoutError,
)
from cosim.waveform import Waveform

pytestmark = pytest.mark.ngspice

NETLISTS = Path(__file__).parents[2] / "netlists"
MODULATOR = NETLISTS / "pulse_modulator" / "pulse_modulator.cir"
BSIM = NETLISTS / "pulse_modulator_bsim4" / "pulse_modulator_bsim4.cir"
STEP = 1 / 80 / 6.2e9

FILTER = """filter with its resistance inside a subcircuit
.param r=1k tau=1n level=1 c0={tau/r}
.subckt cell a b g=2
.param inner={g*r}
r1 a b {inner} m=2
c1 b 0 {c0}
.ends
v1 in 0 pulse(0 {level} 1n 0.1n 0.1n 10n)
x1 in mid cell
x2 mid out cell g=3
d1 out 0 dm
.model dm d(is=1e-14 cjo={c0/10})
.end
"""
DRAWN = """values that ngspice draws
.param r=1k s=0.1 level=1
.param rr={agauss(r,s*r,1)}
.subckt cell a b
.param inner={agauss(r,100,1)}
r1 a b {inner}
.ends
v1 in 0 sin(0 {level} 1g)
x1 in mid cell
x2 mid out cell
r7 out 0 {aunif(1k,500)}
r8 out 0 {gauss(1k,0.1,1)}
r9 out 0 {rr}
c1 out 0 1p
.end
"""
ANALOG = """samples from a file, and a code model
.param r=1k k=2
vin in 0 0
r1 in mid {r}
c1 mid 0 1p
a1 mid out amp
.model amp gain(gain={k})
r2 out 0 1k
.end
"""

Item = tuple[PreparedDeck, TransientRequest]


def request(stop: float = 3e-9, step: float = 1e-11, **changes: object) -> TransientRequest:
    return TransientRequest(**({"stop": stop, "step": step, "saves": ("v(out)",)} | changes))


def items(
    deck: Deck, sets: Sequence[dict[str, float]], asked: TransientRequest, *, seeds: bool = False
) -> list[Item]:
    found = []
    for number, values in enumerate(sets):
        own = request(asked.stop, asked.step, saves=asked.saves, seed=number + 1)
        one = own if seeds else asked
        found.append((prepare(with_parameters(deck, values), one), one))
    return found


def fresh(item: Item) -> TransientResult | CosimError:
    try:
        return simulate_prepared(*item)
    except CosimError as error:
        return error


def log(result: TransientResult) -> list[str]:
    # Lines on how far a run has come follow the clock.
    return [line for line in result.log if not line.startswith("Reference value")]


def assert_equal(warm: TransientResult | CosimError, cold: TransientResult | CosimError) -> None:
    assert type(warm) is type(cold)
    if isinstance(cold, CosimError):
        assert isinstance(warm, CosimError)
        assert (str(warm), warm.log) == (str(cold), cold.log)
        return
    assert isinstance(warm, TransientResult)
    assert np.array_equal(warm.time, cold.time)
    assert warm.vectors.keys() == cold.vectors.keys()
    for name, values in cold.vectors.items():
        assert np.array_equal(warm.vectors[name], values), name
    assert log(warm) == log(cold)
    for name in ("warnings", "deck", "simulator_version", "commands", "data", "origins", "remarks"):
        assert getattr(warm, name) == getattr(cold, name), name


def run(
    decks: Sequence[Item], progress: Callable[[int, float], None] | None = None
) -> list[object]:
    return list(simulate_family([d for d, _ in decks], [r for _, r in decks], progress=progress))


@pytest.fixture
def only_warm(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Let a fresh run within a family fail the test; give how the runs started."""

    def refuse(place: int, *_: object) -> None:
        raise AssertionError(f"deck {place} ran fresh")

    starts: list[str] = []
    real = family._one

    def spy(branching: family._Branching, *rest: object) -> object:
        starts.append("reset" if branching.then == ("reset",) else branching.start)
        return real(branching, *rest)

    monkeypatch.setattr(family, "_fresh", refuse)
    monkeypatch.setattr(family, "_one", spy)
    return starts


def check(decks: Sequence[Item], starts: list[str], expected: str) -> None:
    warm = run(decks)
    assert starts == [expected] * len(decks)
    results = [fresh(item) for item in decks]
    for one, other in zip(warm, results, strict=True):
        assert_equal(one, other)
    ends = [result.vectors[next(iter(result.vectors))][-1] for result in results]
    assert len(set(ends)) == len(ends)  # The sets do differ in what they give.


def test_parameters_inside_a_subcircuit(only_warm: list[str]) -> None:
    deck = deck_from_text(FILTER, name="filter.cir")
    sets = [{"r": 1e3}, {"r": 1000 / 3, "tau": 1.23456789012345e-9}, {"tau": 3e-9}, {"r": 1e-2}]
    check(items(deck, sets, request(20e-9)), only_warm, "reset")


CONSTRUCTS = {
    "a function": (".func f(x) {a*x}", "r1 in out {f(1k)}"),
    "an initial condition": (".ic v(out)={a/10}", "r1 in out {a*1k}"),
    "a width of its own name": ("m1 in in out 0 nm w={w} l=1u", ".model nm nmos(vto=0.3 kp=1e-4)"),
    "a model": ("d1 in out dm", ".model dm d(is={a*1e-14} cjo=1p)"),
    "a bare name": ("r1 in out rbare", ".param rbare={a*1k}"),
    "a behavioural source": ("b1 out 0 i=-a*1m*v(in)", "r1 in out 1k"),
    "an expression in quotes": ("r1 in out 'a*1k'", "l1 out 0 1u"),
    "a branch that does not depend on it": (
        ".param kind=1", ".if (kind==1)", "r1 in out {a*1k}", ".else", "r1 in out 1", ".endif"
    ),
    "a ternary": ("r1 in out {a > 1.5 ? 1k : 2k*a}", "c2 in out {a*1f}"),
    "two levels": (
        ".subckt outer x y k=1", "xi x y inner h={k*a}", ".ends",
        ".subckt inner x y h=1", ".param loc={h*1k}", "r1 x y {loc} m=2", ".ends",
        "x1 in out outer k={a}",
    ),
}  # fmt: skip


@pytest.mark.parametrize("initial", ["op", "uic"])
@pytest.mark.parametrize("name", CONSTRUCTS)
def test_what_parameters_can_enter(name: str, initial: str, only_warm: list[str]) -> None:
    head = ["constructs", ".param a=1 w=1u", "v1 in 0 sin(0.5 1 1g)", "c1 out 0 1p"]
    deck = deck_from_text("\n".join([*head, *CONSTRUCTS[name], ".end"]), name="c.cir")
    sets = [{"a": a, "w": a * 1e-6} for a in (1.0, 2.0, 1 / 3)]
    check(items(deck, sets, request(initial=initial)), only_warm, "reset")


@pytest.mark.parametrize("initial", ["op", "uic"])
def test_initial_conditions_beside_altered_sources(initial: str, only_warm: list[str]) -> None:
    text = FILTER.replace("d1 out", ".ic v(out)=0.1\nd1 out")
    deck = deck_from_text(text, name="filter.cir")
    sets = [{"level": 1.0}, {"level": 0.3}, {"level": -1.0}]
    check(items(deck, sets, request(initial=initial)), only_warm, "resume")


def test_the_text_of_a_number_as_its_author_wrote_it(only_warm: list[str]) -> None:
    texts = ("1k", "0.5k", "2e3", "1.5meg", "+700", "3.3E2")
    asked = request(5e-9)
    decks = [
        (prepare(deck_from_text(FILTER.replace("r=1k", f"r={text}"), name="f.cir"), asked), asked)
        for text in texts
    ]
    check(decks, only_warm, "reset")


def test_negative_levels_and_times_of_sources(only_warm: list[str]) -> None:
    text = FILTER.replace("{level} 1n", "{level*0.7} {t0}").replace("tau=1n", "tau=1n t0=1n")
    deck = deck_from_text(text, name="filter.cir")
    sets = [{"level": 1.0}, {"level": -1 / 3}, {"level": 0.3, "t0": 2e-9}, {"t0": 1e-10 / 3}]
    check(items(deck, sets, request(20e-9)), only_warm, "run")


def test_codes_of_the_pulse_modulator(only_warm: list[str]) -> None:
    asked = request(1e-9, STEP, saves=("v(rf_p)", "i(vsup)"))
    sets = [{"vdd": 1.1}, {"vdd": 1.05, "amp": 20}, {"vdd": 1.15, "lo_amp": 0.3}]
    check(items(load_deck(MODULATOR), sets, asked), only_warm, "run")


def test_a_capacitance_and_a_current_of_the_pulse_modulator(only_warm: list[str]) -> None:
    asked = request(1e-9, STEP, saves=("v(rf_p)", "i(vsup)"))
    sets = [{"c_edge": 2e-13, "ibias": 2e-4}, {"c_edge": 1e-13, "ibias": 2.2e-4}, {"vdd": 1.0}]
    check(items(load_deck(MODULATOR), sets, asked, seeds=True), only_warm, "reset")


@pytest.mark.full
def test_settling_that_all_codes_share(only_warm: list[str]) -> None:
    asked = request(11e-9, STEP, saves=("v(rf_p)", "i(vsup)"))
    sets = [{"amp": 93}, {"amp": 1}, {"amp": 127}]
    check(items(load_deck(MODULATOR), sets, asked), only_warm, "resume")


@pytest.mark.full
def test_codes_and_supplies_share_what_they_can(only_warm: list[str]) -> None:
    asked = request(11e-9, STEP, saves=("v(rf_p)", "i(vsup)"))
    sets = [{"amp": a, "vdd": v} for a in (93, 1) for v in (1.1, 1.05)]
    check(items(load_deck(MODULATOR), sets, asked), only_warm, "resume")


@pytest.mark.full
@pytest.mark.parametrize(
    ("sets", "way"),
    [
        ([{"amp": 93.0, "vdd": 1.1}, {"amp": 20.0, "vdd": 1.0}], "run"),
        ([{"c_edge": 2e-13}, {"c_edge": 1e-13}], "reset"),
    ],
)
def test_a_bsim4_deck(sets: list[dict[str, float]], way: str, only_warm: list[str]) -> None:
    asked = request(1e-9, STEP, saves=("v(rf_p)", "i(vsup)"))
    check(items(load_deck(BSIM), sets, asked), only_warm, way)


def test_every_kind_of_source_branches_off_a_shared_start(only_warm: list[str]) -> None:
    text = """sources that agree for a time
.param b=0.7 a=1
v1 in 0 pulse(0 {b} 8n 0.1n 0.1n 5n)
v2 i2 0 dc 0 sin(0 {a} 1g 9n)
v4 i4 0 pwl(0 0 1n 1 9n 1 10n {b} 20n 0)
i5 0 i5 exp(0 {b*1m} 8n 1n 13n 1n)
r5 i5 0 1k
r1 in out 1k
r2 i2 out 1k
r4 i4 out 1k
r6 i5 out 1k
d1 out 0 dm
.model dm d(is=1e-14 cjo=1p)
.end
"""
    sets = [{"a": 1.0}, {"a": 1.3, "b": 1 / 3}, {"b": -0.1}, {"a": 1.234567890123}]
    decks = items(deck_from_text(text, name="sources.cir"), sets, request(20e-9))
    check(decks, only_warm, "resume")


def test_random_functions_draw_as_in_a_fresh_run(only_warm: list[str]) -> None:
    deck = deck_from_text(DRAWN, name="drawn.cir")
    sets = [{"r": 1e3}, {"r": 900.0}, {"s": 0.2}, {"s": 0.3}]
    check(items(deck, sets, request()), only_warm, "reset")
    only_warm.clear()
    check(items(deck, [{"r": 1e3}] * 4, request(), seeds=True), only_warm, "reset")
    only_warm.clear()
    check(items(deck, [{"level": 1.0}, {"level": 0.7}], request()), only_warm, "run")


def test_files_and_code_models(only_warm: list[str]) -> None:
    time = np.linspace(0.0, 3e-9, 301)
    wave = Waveform(time, np.sin(2e9 * np.pi * time), unit="V")
    deck = with_stimulus(deck_from_text(ANALOG, name="analog.cir"), "vin", wave)
    sets = [{"r": 1e3, "k": 2.0}, {"r": 2e3}, {"k": -0.5}]
    check(items(deck, sets, request()), only_warm, "reset")


def test_samples_of_each_deck_are_its_own(only_warm: list[str]) -> None:
    time = np.linspace(0.0, 3e-9, 301)
    text = ANALOG.replace("vin in", "v2 z 0 {level}\nr7 z mid 1k\nvin in")
    plain = deck_from_text(text.replace("k=2", "k=2 level=1"), name="analog.cir")
    decks = []
    for scale, values in ((1.0, {}), (2.0, {}), (1.0, {"level": 0.5}), (0.3, {"level": 2.0})):
        wave = Waveform(time, scale * np.sin(2e9 * np.pi * time), unit="V")
        decks += items(with_stimulus(plain, "vin", wave), [values], request())
    check(decks, only_warm, "run")
    only_warm.clear()
    check(decks[:2], only_warm, "reset")


FAULTY = """a logarithm of a parameter
.param r=1k k={k} t=1n
v1 in 0 pulse(0 1 0.1n {t/10} {t/10} {t/3} {t})
r1 in mid {r}
c1 mid 0 1p
b1 out 0 v=ln(v(mid)+{k})
r2 out 0 1k
.end
"""


def faulty(sets: Sequence[dict[str, float]], **changes: object) -> list[Item]:
    deck = deck_from_text(FAULTY.replace("k={k}", "k=2"), name="faulty.cir")
    asked = request(3e-9, **changes)
    return [(prepare(with_parameters(deck, values), asked), asked) for values in sets]


def test_a_set_that_does_not_converge_costs_itself_only() -> None:
    decks = faulty([{"k": 2.0}, {"k": -5.0}, {"k": 3.0}])
    assert [bool(kin.parameters) for kin in kindred(*zip(*decks, strict=True))] == [True]
    warm = run(decks)
    assert isinstance(warm[1], ConvergenceError | SimulatorCrashError)
    assert warm[1].log
    for one, item in zip(warm, decks, strict=True):
        assert_equal(one, fresh(item))


@pytest.mark.full
def test_a_set_that_takes_too_long_costs_itself_only() -> None:
    sets = [{"t": 1.5e-9}, {"t": 1e-14}, {"t": 2e-9}]
    decks = faulty(sets, time_limit=1.0)
    warm = run(decks)
    assert isinstance(warm[1], SimulatorTimeoutError)
    for place in (0, 2):
        assert_equal(warm[place], fresh(decks[place]))
    # The same behind a reset.
    sets = [values | {"r": 1e3 + 100 * number} for number, values in enumerate(sets)]
    again = run(faulty(sets, time_limit=1.0))
    assert [type(one) for one in again] == [type(one) for one in warm]


def children(process: int) -> list[int]:
    tasks = Path(f"/proc/{process}/task").glob("*/children")
    return [int(word) for task in tasks for word in task.read_text().split()]


def host() -> int:
    process = client_of_this_process()._process
    assert process is not None
    return process.pid


SLOW = [{"amp": a, "c_edge": c} for a, c in ((93, 2e-13), (1, 1e-13), (127, 3e-13))]


def slow() -> list[Item]:
    return items(load_deck(MODULATOR), SLOW, request(20e-9, STEP, saves=("v(rf_p)",)))


def youngest(process: int) -> int:
    """The process that simulates: the child of a child, or of the host."""
    while below := children(process):
        process = below[-1]
    return process


@pytest.mark.full
def test_a_set_that_crashes_costs_itself_only() -> None:
    def crash(place: int, time: float) -> None:
        if place == 1:  # In the warm run and in the fresh one that is to explain it.
            os.kill(youngest(host()), signal.SIGSEGV)

    decks = slow()
    warm = run(decks, crash)
    assert isinstance(warm[1], SimulatorCrashError)
    assert "signal 11" in str(warm[1])
    for place in (0, 2):
        assert_equal(warm[place], fresh(decks[place]))


@pytest.mark.full
@pytest.mark.parametrize("victim", ["loaded deck", "host"])
def test_the_end_of_a_process_in_the_middle_is_made_good(victim: str) -> None:
    killed: list[int] = []

    def kill(place: int, time: float) -> None:
        if place == 1 and not killed:
            killed.append(host() if victim == "host" else children(host())[0])
            os.kill(killed[0], signal.SIGKILL)

    decks = slow()
    warm = run(decks, kill)
    assert killed
    for one, item in zip(warm, decks, strict=True):
        assert_equal(one, fresh(item))


def test_a_deck_that_does_not_load_says_so_for_each() -> None:
    decks = items(deck_from_text(FILTER, name="f.cir"), [{"r": 1e3}, {"r": 2e3}], request())
    broken = [
        (
            replace(deck, lines=tuple(line.replace(" d(is", " nothing(is") for line in deck.lines)),
            one,
        )
        for deck, one in decks
    ]
    warm = run(broken)
    assert all(isinstance(one, DeckError) for one in warm)
    for one, item in zip(warm, broken, strict=True):
        assert_equal(one, fresh(item))


def test_decks_of_all_kinds_come_back_in_their_order() -> None:
    first = deck_from_text(FILTER, name="filter.cir")
    second = deck_from_text(DRAWN, name="drawn.cir")
    mixed = [
        item
        for r in (1e3, 2e3, 3e3)
        for deck in (first, second)
        for item in items(deck, [{"r": r}], request())
    ]
    mixed += items(first, [{"level": 0.5}], request(5e-9))
    warm = run(mixed)
    for one, item in zip(warm, mixed, strict=True):
        assert_equal(one, fresh(item))


def test_no_ngspice_is_an_error_for_each(monkeypatch: pytest.MonkeyPatch) -> None:
    client_of_this_process().close()
    monkeypatch.setenv("NGSPICE_LIBRARY_PATH", "/nowhere/libngspice.so")
    deck = deck_from_text(FILTER, name="filter.cir")
    warm = run(items(deck, [{"r": 1e3}, {"r": 2e3}], request()))
    assert [type(one) for one in warm] == [MissingDependencyError] * 2


@pytest.mark.full
def test_progress_names_the_deck() -> None:
    seen: list[tuple[int, float]] = []
    decks = items(load_deck(MODULATOR), SLOW[:2], request(20e-9, STEP, saves=("v(rf_p)",)))
    run(decks, lambda place, time: seen.append((place, time)))
    assert {place for place, _ in seen} == {0, 1}
    assert all(0.0 <= time <= 20e-9 for _, time in seen)


def test_a_family_that_is_given_up_leaves_no_process() -> None:
    deck = deck_from_text(FILTER, name="filter.cir")
    decks = items(deck, [{"r": 1e3}, {"r": 2e3}, {"r": 3e3}], request())
    results: Iterator[object] = simulate_family(*map(list, zip(*decks, strict=True)))
    next(results)
    assert children(host())
    results.close()
    fresh(decks[0])  # The host has read that the deck is not needed any more.
    assert not children(host())


@pytest.mark.full
def test_many_families_leave_nothing_behind() -> None:
    deck = deck_from_text(FILTER, name="filter.cir")
    decks = items(deck, [{"r": 1e3}, {"r": 2e3}], request(1e-9))
    run(decks)
    places = (os.getpid(), host())

    def state() -> list[tuple[int, list[int]]]:
        return [(len(os.listdir(f"/proc/{one}/fd")), children(one)) for one in places]

    fresh(decks[0])
    before = state()
    for _ in range(60):
        run(decks)
    fresh(decks[0])
    assert state() == before
    assert before[1][1] == []
    scratch = os.readlink(f"/proc/{host()}/cwd")
    assert [name for name in os.listdir(scratch) if name.startswith("run")] == []


def test_a_family_given_up_in_the_middle_of_another_run_does_not_stop_it() -> None:
    deck = deck_from_text(FILTER, name="filter.cir")
    decks = items(deck, [{"r": 1e3}, {"r": 2e3}, {"r": 3e3}], request())
    results: Any = simulate_family(*map(list, zip(*decks, strict=True)))
    next(results)
    other = items(load_deck(MODULATOR), SLOW[:1], request(20e-9, STEP, saves=("v(rf_p)",)))[0]
    ended: list[float] = []

    def give_up(time: float) -> None:
        results.close()
        ended.append(time)

    assert isinstance(simulate_prepared(*other, progress=give_up), TransientResult)
    assert ended
    assert_equal(run(decks)[2], fresh(decks[2]))
