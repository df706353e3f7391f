"""The program that hosts libngspice: it loads the library once and forks one child per deck.

Run as `python -P host.py PARENT_PID SCRATCH_FOLDER` with a fresh folder that the host may remove;
`client.py` starts it. The host itself runs no deck: whatever a deck does to the library dies with
its child. Requests come on standard input and answers leave on standard output as frames: a JSON
header and raw bytes.

    caller -> host   run       lines, commands, data files, kind of plots, vectors, limits
                     load      the same, to be kept for sets; how many points to run at once
                     set       commands that change the loaded deck, vectors, limits
                     unload    nothing more is asked of the loaded deck
    host -> caller   ready     the library is loaded; or `failed` with the reason
                     log       lines of ngspice
                     progress  the simulated part of the run, from 0 to 1
                     vector    name; its float64 values follow
                     done      faults of load and run, names of new plots and vectors, wall time
                     loaded    lines of the log that the reading gave, time of the last point in s
                     end       how the child ended, or that the deck is not loaded; always the
                               last frame of an answer

A deck is loaded for many sets by a child that stays and is a host itself: it forks one child per
set. So a set has limits of its own, and takes nothing but itself down.

End of file on standard input, or another parent process, means that the caller is gone: the host
kills the child, removes the scratch folder and leaves. The client names this package's folder, so
that the host runs wherever the caller found the package.
"""

import ctypes
import gc
import os
import resource
import select
import shutil
import signal
import sys
import time
import traceback
from pathlib import Path
from typing import Any, NamedTuple, NoReturn

from cosim.circuit.frames import SCRATCH_PREFIX, Assembler, pack, send, unpack
from cosim.circuit.library import load_deck, load_library, run_deck

CHUNK = 2**16  # bytes read at a time: what a pipe holds; larger pipes count against a user limit
FILE_LIMIT = 2**26  # bytes that a child may write into one file: model checks, no more
ORPHAN_INTERVAL = 1.0  # s between two looks at the parent's process id
PR_SET_PDEATHSIG = 1  # from linux/prctl.h
LOST = {"kind": "end", "timeout": False, "code": 0, "peak": 0, "memory_limit": 0, "lost": True}
END_MARGIN = 10.0  # s beyond a set's own limit, which the loaded deck's process enforces


class CallerGoneError(Exception):
    """The process that asked for the run does not exist any more."""


def allowed(kind: int, wanted: int) -> int:
    """Give the wanted limit, or the hard one of this process, which it may not raise."""
    _, hard = resource.getrlimit(kind)
    return wanted if hard == resource.RLIM_INFINITY else min(wanted, hard)


def child(
    simulator: Any, request: dict[str, Any], data: memoryview, output: int, asked: int
) -> NoReturn:
    """Be the forked child: one deck under limits in an own folder, then leave.

    With a deck for many sets it does not leave but serves them, as they are asked of it.
    """
    status = 1
    try:
        # The host's end must not leave a child behind, whatever ends it.
        ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, signal.SIGKILL, 0, 0, 0)
        signal.signal(signal.SIGTERM, signal.SIG_DFL)
        folder = Path(request["folder"])
        folder.mkdir()
        os.chdir(folder)
        for name, size in request["data"]:
            # The lines of a loaded deck name files in its own folder.
            (folder.parent if request["kind"] == "set" else folder).joinpath(name).write_bytes(
                data[:size]
            )
            data = data[size:]
        resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
        resource.setrlimit(resource.RLIMIT_FSIZE, (allowed(resource.RLIMIT_FSIZE, FILE_LIMIT),) * 2)
        resource.setrlimit(
            resource.RLIMIT_AS, (allowed(resource.RLIMIT_AS, request["memory_limit"]),) * 2
        )
        if request["kind"] == "load":
            load_deck(simulator, request, output)
            Host(simulator, asked, output, os.getppid(), keeps=False).serve()
        run_deck(simulator, request, output)
        status = 0
    except CallerGoneError:
        pass
    except MemoryError:
        send(output, pack({"kind": "log", "lines": ["python: out of memory"]}))
    except BaseException:
        lines = [f"python: {line}" for line in traceback.format_exc().splitlines()]
        send(output, pack({"kind": "log", "lines": lines}))
    finally:
        os._exit(status)


class Loaded(NamedTuple):
    """A child that has loaded a deck and waits for sets."""

    token: str
    process: int
    requests: int
    answers: int
    frames: Assembler
    folder: str


class Host:
    """Runs one deck after the other for the process that started it."""

    def __init__(
        self, simulator: Any, source: int, target: int, parent: int, *, keeps: bool = True
    ) -> None:
        self._simulator = simulator
        self._source = source
        self._target = target
        self._parent = parent
        self._keeps = keeps  # Whether decks are loaded here, or one is loaded and sets run.
        self._requests = Assembler()
        self._runs = 0
        self._loaded: Loaded | None = None

    def serve(self) -> NoReturn:
        """Answer requests until the caller is gone."""
        try:
            while True:
                for frame in self._requests.feed(self._read(None, None)):
                    header, data = unpack(frame)
                    if header["kind"] == "run" or not self._keeps:
                        self._run(header, data)
                    elif header["kind"] == "set":
                        self._pass_on(header, frame)
                    else:
                        self._unload()
                        if header["kind"] == "load":
                            self._load(header, data)
        finally:
            self._unload()

    def _read(self, child_output: int | None, deadline: float | None) -> bytes:
        """Wait for bytes: of the child while one runs (b"" at its end), else of the caller.

        Raises
        ------
        CallerGoneError
            When standard input ends or the parent process is another one.
        TimeoutError
            When the deadline passes first.
        """
        watched = select.poll()
        watched.register(self._source, select.POLLIN)
        if child_output is not None:
            watched.register(child_output, select.POLLIN)
        while True:
            wait = ORPHAN_INTERVAL if deadline is None else deadline - time.monotonic()
            if wait <= 0:
                raise TimeoutError
            ready = [item for item, _ in watched.poll(1000 * min(wait, ORPHAN_INTERVAL))]
            if os.getppid() != self._parent:
                raise CallerGoneError
            # The caller sends nothing while a run goes on, so that its pipe has only an end.
            if self._source in ready:
                data = os.read(self._source, CHUNK)
                if not data or child_output is not None:
                    raise CallerGoneError
                return data
            if ready:
                return os.read(ready[0], CHUNK)

    def _fork(self, request: dict[str, Any], data: memoryview, asked: int = -1) -> tuple[int, int]:
        """Start a child; give its process id and the descriptor of its frames."""
        self._runs += 1
        request["folder"] = os.path.join(os.getcwd(), f"run{self._runs}")
        if request["data"] and "lines" in request:
            # Without data files a parameter may well be named scratch.
            lines = request["lines"]
            request["lines"] = [line.replace("{scratch}", request["folder"]) for line in lines]
        source, output = os.pipe()
        process = os.fork()
        if process == 0:
            os.close(source)
            child(self._simulator, request, data, output, asked)
        os.close(output)
        return process, source

    def _run(self, request: dict[str, Any], data: memoryview) -> None:
        process, source = self._fork(request, data)
        timeout = False
        try:
            self._forward(source, Assembler(), time.monotonic() + request["time_limit"])
        except TimeoutError:
            timeout = True
            os.kill(process, signal.SIGKILL)
        except BaseException:
            os.kill(process, signal.SIGKILL)
            raise
        finally:
            os.close(source)
            _, status, usage = os.wait4(process, 0)
            shutil.rmtree(request["folder"], ignore_errors=True)
        code = os.waitstatus_to_exitcode(status)
        end = {"kind": "end", "timeout": timeout, "code": code, "peak": 1024 * usage.ru_maxrss}
        limit = allowed(resource.RLIMIT_AS, request["memory_limit"])
        send(self._target, pack(end | {"memory_limit": limit}))

    def _load(self, request: dict[str, Any], data: memoryview) -> None:
        asked, requests = os.pipe()
        process, answers = self._fork(request, data, asked)
        os.close(asked)
        self._loaded = Loaded(
            request["token"], process, requests, answers, Assembler(), request["folder"]
        )
        self._answer(request["time_limit"], "loaded")

    def _pass_on(self, request: dict[str, Any], frame: bytes) -> None:
        if self._loaded is not None and self._loaded.token == request["token"]:
            send(self._loaded.requests, frame)
            self._answer(request["time_limit"] + END_MARGIN, "end")
        else:
            send(self._target, pack(LOST))

    def _answer(self, time_limit: float, last: str) -> None:
        """Pass on what the loaded deck's process answers, or that it is lost."""
        assert self._loaded is not None
        process = self._loaded
        try:
            whole = self._forward(
                process.answers, process.frames, time.monotonic() + time_limit, last
            )
        except TimeoutError:
            whole = False
        if not whole:
            self._unload()
        if last != "end" or not whole:
            send(self._target, pack(LOST | {"lost": not whole}))

    def _unload(self) -> None:
        loaded, self._loaded = self._loaded, None
        if loaded is not None:
            os.kill(loaded.process, signal.SIGKILL)  # A set that still runs ends with it.
            os.close(loaded.requests)
            os.close(loaded.answers)
            os.waitpid(loaded.process, 0)
            shutil.rmtree(loaded.folder, ignore_errors=True)

    def _forward(self, source: int, frames: Assembler, deadline: float, last: str = "") -> bool:
        """Pass complete frames on, so that a child that dies in the middle spoils nothing.

        Up to the child's end, or to a frame of the kind `last`: then the value is True.
        """
        while data := self._read(source, deadline):
            whole = frames.feed(data)
            send(self._target, b"".join(whole))
            if last and any(unpack(frame)[0]["kind"] == last for frame in whole):
                return True
        return False


def main(arguments: list[str]) -> None:
    """Serve the process with the given id from the given scratch folder."""
    parent, scratch = int(arguments[0]), arguments[1]
    # The folder will be removed, so that a call by hand must not name any other.
    if not os.path.basename(scratch).startswith(SCRATCH_PREFIX):
        raise SystemExit(f"{scratch!r} is not a scratch folder of this program")
    os.chdir(scratch)
    # ngspice writes to the standard streams itself; the frames keep descriptors of their own.
    source, target = os.dup(0), os.dup(1)
    nothing = os.open(os.devnull, os.O_RDWR)
    os.dup2(nothing, 0)
    os.dup2(2, 1)
    # A SIGTERM to the whole job must not keep the host from removing its folder: the caller ends
    # by it, and then the host leaves by itself.
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    # A caller that ignores the end of its children passes that on, and the host must wait for its.
    signal.signal(signal.SIGCHLD, signal.SIG_DFL)
    try:
        try:
            simulator, models = load_library()
        except Exception as error:
            reason = f"{type(error).__name__}: {error}"
            send(target, pack({"kind": "failed", "reason": reason}))
            return
        # Copies made by a fork stay shared as long as the collector does not touch the objects.
        gc.collect()
        gc.freeze()
        gc.disable()
        ready = {"version": simulator.ngspice_version, "models": models}
        send(target, pack({"kind": "ready", **ready}))
        Host(simulator, source, target, parent).serve()
    except (CallerGoneError, BrokenPipeError):
        pass
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


if __name__ == "__main__":
    main(sys.argv[1:])
    # Nothing is left to save, and a library that deals in exit handlers is not asked for them.
    os._exit(0)
