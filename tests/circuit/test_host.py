"""Oracle: frames against their own parts, whatever the cuts; /proc for what many runs leave."""

import json
import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cosim.circuit.client import client_of_this_process
from cosim.circuit.frames import FRAME, Assembler, pack, unpack
from cosim.errors import CosimError
from tests.circuit.conftest import Runner

HEADERS = st.dictionaries(st.text(max_size=8), st.integers() | st.text(max_size=20), max_size=4)
FRAMES = st.lists(st.tuples(HEADERS, st.binary(max_size=200)), max_size=6)


@pytest.mark.full
@settings(derandomize=True, deadline=None, max_examples=40)
@given(frames=FRAMES, cuts=st.lists(st.integers(1, 60), min_size=1, max_size=20))
def test_frames_survive_any_cutting(
    frames: list[tuple[dict[str, int | str], bytes]], cuts: list[int]
) -> None:
    stream = b"".join(pack(header, payload) for header, payload in frames)
    assembler = Assembler()
    seen = []
    place, turn = 0, 0
    while place < len(stream):
        size = cuts[turn % len(cuts)]
        seen += assembler.feed(stream[place : place + size])
        place, turn = place + size, turn + 1
    parts = [(header, bytes(payload)) for header, payload in map(unpack, seen)]
    assert parts == frames


def test_a_frame_is_json_and_raw_numbers() -> None:
    values = np.linspace(0.0, 1.0, 5)
    frame = pack({"kind": "vector"}, values.tobytes())
    header, payload = FRAME.unpack_from(frame)
    assert json.loads(frame[FRAME.size : FRAME.size + header]) == {"kind": "vector"}
    assert payload == 8 * values.size
    assert np.array_equal(np.frombuffer(frame[FRAME.size + header :]), values)


def resident(process: int) -> int:
    """Resident memory in bytes."""
    pages = int(Path(f"/proc/{process}/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")


def descriptors(process: int) -> int:
    return len(list(Path(f"/proc/{process}/fd").iterdir()))


@pytest.mark.full
@pytest.mark.ngspice
def test_many_runs_and_failures_leave_nothing_behind(run_lines: Runner) -> None:
    good = ["v1 in 0 1", "r1 in out 1k", "c1 out 0 1p"]
    bad = [
        ["v1 in 0 1", "r1 in out {rx}"],
        ["v1 in 0 dc 0 external", "r1 in out 50", "c1 out 0 1p"],
        ["v1 out 0 1", "v2 out 0 2"],
    ]

    def session(runs: int) -> None:
        for number in range(runs):
            run_lines(good, {"v(out)": "out"}, 1e-8, 1e-12)
            with pytest.raises(CosimError):
                run_lines(bad[number % len(bad)], {"v(out)": "out"}, 1e-9, 1e-11)

    session(5)
    process = client_of_this_process()._process
    assert process is not None
    scratch = Path(os.readlink(f"/proc/{process.pid}/cwd"))
    places = (os.getpid(), process.pid)
    before = [(resident(place), descriptors(place)) for place in places]
    session(30)
    assert client_of_this_process()._process is process  # No failure cost the host its life.
    for place, (memory, files) in zip(places, before, strict=True):
        assert descriptors(place) == files
        # The waveforms alone of 30 runs are 5 MB; the allocator may keep a page or two.
        assert resident(place) - memory < 2 * 2**20
    children = Path(f"/proc/{process.pid}/task/{process.pid}/children").read_text()
    assert children == ""
    assert sorted(path.name for path in scratch.iterdir()) == [".spiceinit", "host.err"]
    assert (scratch / "host.err").stat().st_size < 2**16
