"""A process that is ended, or a call that fails, at a chosen one of the calls that change files."""

import os
import signal
from collections.abc import Callable
from typing import Any

# The calls by which a file or folder appears, fills, reaches the disk, or goes.
CALLS = ("open", "write", "fsync", "replace", "unlink", "mkdir", "rmdir", "close")


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
