"""The program that hosts libngspice: it loads the library once and forks one child per deck.

Run as `python -P host.py PARENT_PID SCRATCH_FOLDER` with a fresh folder that the host may remove;
`client.py` starts it. The host itself runs no deck: whatever a deck does to the library dies with
its child. Requests come on standard input and answers leave on standard output as frames: a JSON
header and raw bytes.

    caller -> host   run       lines, commands, data files, kind of plots, vectors, limits
    host -> caller   ready     the library is loaded; or `failed` with the reason
                     log       a line of ngspice
                     progress  the simulated part of the run, from 0 to 1
                     vector    name; its float64 values follow
                     done      faults of load and run, names of new plots and vectors, wall time
                     end       how the child ended; always the last frame of a run

End of file on standard input, or another parent process, means that the caller is gone: the host
kills the child, removes the scratch folder and leaves. PySpice is imported here and nowhere else.
The file imports nothing of this package, so that it runs wherever the caller found the package.
"""

import ctypes
import gc
import json
import logging
import os
import resource
import select
import shutil
import signal
import struct
import sys
import time
import traceback
from collections import deque
from pathlib import Path
from typing import Any, NoReturn

if __name__ == "__main__":
    # The client takes the frame functions from here and must not load PySpice by that.
    from PySpice.Spice.NgSpice.Shared import NgSpiceShared

SCRATCH_PREFIX = "qcosim-"
FRAME = struct.Struct("<IQ")  # bytes of the JSON header, bytes of the payload
CHUNK = 2**16  # bytes read at a time: what a pipe holds; larger pipes count against a user limit
FILE_LIMIT = 2**26  # bytes that a child may write into one file: model checks, no more
LOG_LIMIT = 20_000  # lines of a run's log that are passed on at once
LOG_TAIL = 200  # lines after these that are kept for the end of the run
PROGRESS_INTERVAL = 0.1  # s
ORPHAN_INTERVAL = 1.0  # s between two looks at the parent's process id
PR_SET_PDEATHSIG = 1  # from linux/prctl.h


class CallerGoneError(Exception):
    """The process that asked for the run does not exist any more."""


def pack(header: dict[str, Any], payload: bytes = b"") -> bytes:
    """Make one frame."""
    text = json.dumps(header).encode()
    return FRAME.pack(len(text), len(payload)) + text + payload


def send(descriptor: int, data: bytes) -> None:
    """Write all bytes to a blocking descriptor."""
    view = memoryview(data)
    while view:
        view = view[os.write(descriptor, view) :]


class Assembler:
    """Cuts complete frames out of a stream of bytes."""

    def __init__(self) -> None:
        self._buffer = bytearray()

    def feed(self, data: bytes) -> list[bytes]:
        """Take bytes in; give the frames that are complete now."""
        self._buffer += data
        frames = []
        while len(self._buffer) >= FRAME.size:
            header, payload = FRAME.unpack_from(self._buffer)
            size = FRAME.size + header + payload
            if len(self._buffer) < size:
                break
            frames.append(bytes(memoryview(self._buffer)[:size]))
            del self._buffer[:size]
        return frames


def unpack(frame: bytes) -> tuple[dict[str, Any], memoryview]:
    """Split a frame into its header and its payload."""
    size, _ = FRAME.unpack_from(frame)
    header: dict[str, Any] = json.loads(frame[FRAME.size : FRAME.size + size])
    return header, memoryview(frame)[FRAME.size + size :]


def load_library() -> tuple[Any, bool]:
    """Load libngspice through PySpice; give the instance and whether it found its code models."""
    said: list[str] = []
    # PySpice logs each line of ngspice as an error; the callback below collects them instead.
    logging.getLogger("PySpice").setLevel(logging.CRITICAL + 1)

    class Simulator(NgSpiceShared):  # type: ignore[misc]  # PySpice ships no types.
        """The library, with its log and its progress passed on to `listener`."""

        listener: "Listener | None" = None

        def send_char(self, message: str, ngspice_id: int) -> int:
            if self.listener is not None:
                self.listener.line(message)
            else:
                said.append(message)
            return 0

        def send_stat(self, message: str, ngspice_id: int) -> int:
            if self.listener is not None:
                self.listener.status(message)
            return 0

    simulator = Simulator.new_instance()
    # ngspice gives BSIM models two OpenMP threads, which spin and take a core from another run.
    simulator.exec_command("set num_threads=1")
    # Its start file loads the code models of A devices, and comes in a package of its own.
    return simulator, not any("can't find the initialization file" in line for line in said)


class Listener:
    """Passes ngspice's lines and its progress on as frames."""

    def __init__(self, output: int) -> None:
        self._output = output
        self._lines = 0
        self._tail: deque[str] = deque(maxlen=LOG_TAIL)
        self._next = time.monotonic() + PROGRESS_INTERVAL

    def line(self, text: str) -> None:
        """Pass a line of the log on at once: the next one may never come."""
        self._lines += 1
        if self._lines <= LOG_LIMIT:
            send(self._output, pack({"kind": "log", "text": text}))
        else:
            self._tail.append(text)

    def finish(self) -> None:
        """Pass on the last lines of a log that was too long."""
        left_out = self._lines - LOG_LIMIT - len(self._tail)
        if left_out > 0:
            self._tail.appendleft(f"({left_out} lines left out here)")
        for text in self._tail:
            send(self._output, pack({"kind": "log", "text": text}))

    def status(self, text: str) -> None:
        """Pass on a status such as "tran: 12.3%", a few times a second."""
        now = time.monotonic()
        if now < self._next or not text.startswith("tran:"):
            return
        self._next = now + PROGRESS_INTERVAL
        try:
            part = float(text.partition(":")[2].rstrip("% ")) / 100
        except ValueError:
            return
        send(self._output, pack({"kind": "progress", "part": part}))


def run_deck(simulator: Any, request: dict[str, Any], output: int) -> None:
    """Load and run a deck, and send what it gave; the verdict is the caller's."""
    simulator.listener = listener = Listener(output)
    before = set(simulator.plot_names)
    faults = {"load": "", "run": ""}
    began = time.perf_counter()
    for command in request["commands"]:
        _quietly(simulator.exec_command, command)
    faults["load"] = _quietly(simulator.load_circuit, "\n".join(request["lines"]))
    if not faults["load"]:
        faults["run"] = _quietly(simulator.exec_command, "run")
    wall_time = time.perf_counter() - began
    listener.finish()
    # A failed load leaves the old plots current, so that only a plot that is new counts.
    plots = [name for name in simulator.plot_names if name not in before]
    found: dict[str, Any] = {}
    # A noise analysis gives two plots, of spectra and of totals; the newest comes first.
    for plot in (name for name in reversed(plots) if name.startswith(request["plots"])):
        # The key of a node named 3 is "V(3)", that of all others is in lower case.
        vectors = simulator.plot(None, plot).items()
        found |= {name.lower(): vector._data for name, vector in vectors}
    for key in request["keys"]:
        data = found.get(key, found.get(f"v({key})"))
        if data is not None:
            send(output, pack({"kind": "vector", "name": key}, data.tobytes()))
    done = {"kind": "done", "faults": faults, "plots": plots, "wall_time": wall_time}
    send(output, pack(done | {"available": sorted(found)}))


def _quietly(function: Any, argument: str) -> str:
    """Call PySpice; give the text of a fault that counts.

    PySpice raises when any line that is not a warning comes on ngspice's error stream, and also
    when a title contains "error". Only a return code of the library itself is a fault.
    """
    try:
        function(argument)
    except NameError as error:  # the base of all errors that PySpice raises here
        return str(error) if "returned" in str(error) else ""
    return ""


def allowed(kind: int, wanted: int) -> int:
    """Give the wanted limit, or the hard one of this process, which it may not raise."""
    _, hard = resource.getrlimit(kind)
    return wanted if hard == resource.RLIM_INFINITY else min(wanted, hard)


def child(simulator: Any, request: dict[str, Any], data: memoryview, output: int) -> NoReturn:
    """Be the forked child: one deck under limits in an own folder, then leave."""
    status = 1
    try:
        # The host's end must not leave a child behind, whatever ends it.
        ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, signal.SIGKILL, 0, 0, 0)
        signal.signal(signal.SIGTERM, signal.SIG_DFL)
        folder = Path(request["folder"])
        folder.mkdir()
        os.chdir(folder)
        for name, size in request["data"]:
            (folder / name).write_bytes(data[:size])
            data = data[size:]
        resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
        resource.setrlimit(resource.RLIMIT_FSIZE, (allowed(resource.RLIMIT_FSIZE, FILE_LIMIT),) * 2)
        resource.setrlimit(
            resource.RLIMIT_AS, (allowed(resource.RLIMIT_AS, request["memory_limit"]),) * 2
        )
        run_deck(simulator, request, output)
        status = 0
    except MemoryError:
        send(output, pack({"kind": "log", "text": "python: out of memory"}))
    except BaseException:
        for line in traceback.format_exc().splitlines():
            send(output, pack({"kind": "log", "text": f"python: {line}"}))
    finally:
        os._exit(status)


class Host:
    """Runs one deck after the other for the process that started it."""

    def __init__(self, simulator: Any, source: int, target: int, parent: int) -> None:
        self._simulator = simulator
        self._source = source
        self._target = target
        self._parent = parent
        self._requests = Assembler()
        self._runs = 0

    def serve(self) -> None:
        """Answer requests until the caller is gone."""
        while True:
            for frame in self._requests.feed(self._read(None, None)):
                header, data = unpack(frame)
                self._run(header, data)

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

    def _run(self, request: dict[str, Any], data: memoryview) -> None:
        self._runs += 1
        request["folder"] = os.path.join(os.getcwd(), f"run{self._runs}")
        if request["data"]:  # Without data files a parameter may well be named scratch.
            lines = request["lines"]
            request["lines"] = [line.replace("{scratch}", request["folder"]) for line in lines]
        source, output = os.pipe()
        process = os.fork()
        if process == 0:
            os.close(source)
            child(self._simulator, request, data, output)
        os.close(output)
        timeout = False
        try:
            self._forward(source, time.monotonic() + request["time_limit"])
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

    def _forward(self, source: int, deadline: float) -> None:
        """Pass complete frames on, so that a child that dies in the middle spoils nothing."""
        assembler = Assembler()
        while data := self._read(source, deadline):
            for frame in assembler.feed(data):
                send(self._target, frame)


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
