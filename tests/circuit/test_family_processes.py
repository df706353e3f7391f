"""Oracle: the operating system: what a family leaves whose caller or host ends in the middle."""

import os
import signal
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest

from tests.circuit.test_host_processes import (
    ROOT,
    assert_nothing_left,
    simulators,
    wait_until,
)

pytestmark = pytest.mark.ngspice

PREAMBLE = """
import sys
from cosim.circuit.analysis import TransientRequest
from cosim.circuit.family import simulate_family
from cosim.circuit.netlist import deck_from_text, prepare, with_parameters

TEXT = '''t
.param r=50 b=1
v1 in 0 sin(0 1 5g)
b2 i2 0 v={b}
r1 in out {r}
c1 out 0 1p
.end
'''

def family(stops):
    deck = deck_from_text(TEXT, name="deck.cir")
    asked = [TransientRequest(stop=stop, step=1e-12, saves=("v(out)",)) for stop in stops]
    sets = [with_parameters(deck, {"r": 50.0 + number}) for number in range(len(stops))]
    return simulate_family([prepare(*item) for item in zip(sets, asked)], asked, progress=tell)

def say(*words):
    print(*words, flush=True)

def tell(place, time):
    say("runs", place)
"""


def begin(body: str, tmp_path: Path) -> "subprocess.Popen[str]":
    return subprocess.Popen(
        [sys.executable, "-c", PREAMBLE + textwrap.dedent(body)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=tmp_path,
        env=os.environ | {"PYTHONPATH": str(ROOT), "TMPDIR": str(tmp_path)},
    )


@pytest.mark.parametrize("end", [signal.SIGKILL, signal.SIGTERM])
def test_the_end_of_the_caller_ends_the_loaded_deck_and_its_run(
    tmp_path: Path, end: signal.Signals
) -> None:
    process = begin("list(family([1e-4, 1e-4]))", tmp_path)  # Each would run for hours.
    try:
        assert process.stdout is not None
        assert process.stdout.readline() == "runs 0\n"
        # The host, the process that holds the loaded deck, and the run.
        assert len(simulators(tmp_path)) == 3
        process.send_signal(end)
        process.wait(60)
        assert_nothing_left(tmp_path)
    finally:
        process.kill()
        process.communicate()


@pytest.mark.full
def test_the_end_of_the_host_ends_the_loaded_deck_and_its_run(tmp_path: Path) -> None:
    process = begin("list(family([1e-4, 1e-4]))", tmp_path)
    try:
        assert process.stdout is not None
        process.stdout.readline()
        host = min(simulators(tmp_path))
        others = set(simulators(tmp_path)) - {host}
        assert len(others) == 2
        os.kill(host, signal.SIGKILL)
        assert wait_until(lambda: not others & set(simulators(tmp_path)))
    finally:
        process.kill()
        process.communicate()


@pytest.mark.full
def test_an_interrupt_in_the_middle_leaves_nothing_and_the_next_family_works(
    tmp_path: Path,
) -> None:
    body = """
        import signal
        def tell(place, time):
            signal.raise_signal(signal.SIGINT)
        try:
            list(family([1e-4, 1e-4]))
        except KeyboardInterrupt:
            say("interrupted")
        say([type(one).__name__ for one in family([1e-9, 1e-9])])
    """
    process = begin(body, tmp_path)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 0, err
    assert out == "interrupted\n['TransientResult', 'TransientResult']\n"
    assert_nothing_left(tmp_path)


@pytest.mark.full
def test_a_family_in_a_forked_process_has_a_host_of_its_own(tmp_path: Path) -> None:
    body = """
        import multiprocessing
        def last(stop):
            return [float(one.vectors["v(out)"][-1]) for one in family([stop, stop])]
        first = last(1e-9)
        with multiprocessing.get_context("fork").Pool(2) as pool:
            say(pool.map(last, [1e-9] * 3) == [first] * 3, len(set(first)))
    """
    out, err = begin(body, tmp_path).communicate(timeout=60)
    assert out == "True 2\n", err
    assert_nothing_left(tmp_path)
