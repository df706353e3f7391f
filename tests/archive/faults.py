"""A process that is ended, or a call that fails, at a chosen one of the calls that change files."""

import os
import re
import shutil
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

# The calls by which a file or folder appears, fills, reaches the disk, or goes.
CALLS = ("open", "write", "fsync", "replace", "unlink", "mkdir", "rmdir", "close")
# Stands in a report, of single bytes, for a call.
MARK = b"\xff"


class Fault:
    """Does something at the k-th of the calls by which files are changed."""

    def __init__(self, at: int, action: Callable[[str, tuple[Any, ...]], None]) -> None:
        self.left = at
        self.action = action

    def install(self) -> None:
        for name in CALLS:
            setattr(os, name, self._wrap(name, getattr(os, name)))

    def _wrap(self, name: str, original: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any) -> Any:
            self.left -= 1
            if self.left == 0:
                self.action(name, args)
            return original(*args)

        return call


real_write = os.write


def die(name: str, args: tuple[Any, ...]) -> None:
    """Die before the call; a write gets half of its bytes out first."""
    if name == "write":
        real_write(args[0], args[1][: len(args[1]) // 2])
    os.kill(os.getpid(), signal.SIGKILL)


class States:
    """Keeps a folder as it is at each of the calls, for so a kill at that call would leave it.

    The copies are the folders 1, 2, ... of `kept`; each is reported by MARK.
    """

    def __init__(self, folder: Path, kept: Path, pipe: int) -> None:
        self.folder, self.kept, self.pipe = folder, kept, pipe
        self.calls = 0
        self.copying = False

    def install(self) -> None:
        for name in CALLS:
            setattr(os, name, self._wrap(name, getattr(os, name)))

    def _wrap(self, name: str, original: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any) -> Any:
            if self.copying:
                return original(*args)
            done = 0
            if name == "write":
                done = real_write(args[0], args[1][: len(args[1]) // 2])
                args = (args[0], args[1][done:])
            self._keep()
            found = original(*args)
            return done + found if name == "write" else found

        return call

    def _keep(self) -> None:
        self.calls += 1
        self.copying = True
        shutil.copytree(self.folder, self.kept / str(self.calls))
        self.copying = False
        real_write(self.pipe, MARK)


# Drawn at random, and the time of day of a part, by which parts are in order.
_DRAWN = re.compile(r"[0-9]*[.-][0-9a-f]{8}m?(?=\.tmp$|\.h5$)")


def content(folder: Path) -> tuple[tuple[str, bytes], ...]:
    """Give the files of a folder in order, and their names without what is drawn at random."""
    return tuple(
        (
            _DRAWN.sub("", str(item.relative_to(folder))),
            item.read_bytes() if item.is_file() else b"",
        )
        for item in sorted(folder.rglob("*"))
    )


def lengths(folder: Path) -> list[tuple[str, int]]:
    """Give the names of the files of a folder, as `content` has them, and their lengths."""
    return [(name, len(held)) for name, held in content(folder)]


def run_in_child(work: Callable[[int], None], fault: Fault | None = None) -> tuple[int, bytes]:
    """Run `work` in a forked child; it gets a pipe to report on. Give its status and report."""
    reading, writing = os.pipe()
    pid = os.fork()
    if pid == 0:
        code = 1
        try:
            os.close(reading)
            if fault is not None:
                fault.install()
            work(writing)
            code = 0
        finally:
            os._exit(code)
    os.close(writing)
    with os.fdopen(reading, "rb") as pipe:
        report = pipe.read()
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]), report


def states_at_every_call(
    work: Callable[[Path, int], None], folder: Path
) -> list[tuple[Path, set[int]]]:
    """Give what a kill at each call leaves of `work`, and what it had reported by then.

    `work` gets the path of its archive, a.h5, and a pipe. It runs once as a whole; at every
    twelfth call it is killed in truth, which must leave the same.
    """
    path = folder / "work" / "a.h5"
    path.parent.mkdir()

    def keep(pipe: int) -> None:
        States(path.parent, folder / "kept", pipe).install()
        work(path, pipe)

    status, report = run_in_child(keep)
    assert status == 0
    reports = report.split(MARK)
    states = [
        (folder / "kept" / str(at), set(b"".join(reports[:at]))) for at in range(1, len(reports))
    ]
    for at in range(1, len(states) + 1, 12):
        shutil.rmtree(path.parent)
        path.parent.mkdir()
        status, report = run_in_child(lambda pipe: work(path, pipe), Fault(at, die))
        assert status == -signal.SIGKILL
        kept, reported = states[at - 1]
        assert set(report) == reported
        # Of the same lengths: in some of them stands the time of day.
        assert lengths(path.parent) == lengths(kept)
    return states
