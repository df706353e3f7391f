"""The caller's side of the simulator's host: start it, ask it for runs, end it."""

import atexit
import contextlib
import ctypes.util
import importlib.util
import os
import select
import shutil
import site
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from cosim.circuit import frames
from cosim.circuit.deck import unique
from cosim.errors import MissingDependencyError, SimulationError, SimulatorCrashError
from cosim.waveform import FloatArray

INSTALL_HINT = "type: apt-get install ngspice libngspice0"
START_LIMIT = 60.0  # s; loading takes 0.2 s, on a network file system under load much more
ANSWER_MARGIN = 30.0  # s beyond the run's own limit, which the host itself enforces
LONGEST_WAIT = 3600.0  # s for one wait of a run that may last longer
CLOSE_LIMIT = 5.0  # s for the host to remove its folder

_HOST = str(Path(__file__).with_name("host.py"))
# Nothing else of the caller's environment reaches the simulator: no SPICE_* search path, no HOME
# with a start file.
_PASSED_VARIABLES = ("PATH", "TMPDIR", "LD_LIBRARY_PATH")
_FOLDERS = (
    "/usr/local/lib",
    "/usr/local/lib64",
    "/usr/lib/x86_64-linux-gnu",
    "/usr/lib/aarch64-linux-gnu",
    "/usr/lib64",
    "/usr/lib",
    "/lib64",
)
_LIBRARY_NAMES = ("libngspice.so.0", "libngspice.so")


@dataclass(slots=True)
class Answer:
    """All that the host sent about one run.

    Parameters
    ----------
    log : list of str
        Lines of ngspice, each with "stdout " or "stderr " in front.
    vectors : dict of ndarray
        Name in ngspice's plot -> values; "time" in s, "frequency" in Hz.
    done : dict or None
        Faults of load and run, names of new plots and vectors, wall time in s; None when the
        child did not come that far.
    loaded : dict or None
        Of a deck that was loaded for many sets: the fault, lines of the log that the reading gave,
        the simulated time in s that the sets share; None when it was not loaded.
    end : dict
        Exit code (negative: signal), whether the time limit ran out, peak memory in bytes.
    part : float
        The simulated part of the run as last reported, from 0 to 1.
    overhead_time : float
        Time in s of the exchange beyond ngspice's own.
    """

    log: list[str] = field(default_factory=list)
    vectors: dict[str, FloatArray] = field(default_factory=dict)
    done: dict[str, Any] | None = None
    end: dict[str, Any] = field(default_factory=dict)
    loaded: dict[str, Any] | None = None
    part: float = 0.0
    overhead_time: float = 0.0


def find_simulator() -> str:
    """Find ngspice's shared library.

    Returns
    -------
    str
        The value of the environment variable NGSPICE_LIBRARY_PATH if it is set, else the path of
        the library found beside this Python and in the system's folders.

    Raises
    ------
    MissingDependencyError
        If there is none; the message says what to type.
    """
    wanted = os.environ.get("NGSPICE_LIBRARY_PATH", "")
    if wanted:
        if os.sep in wanted and not Path(wanted).is_file():
            raise MissingDependencyError(
                f"NGSPICE_LIBRARY_PATH names {wanted!r}, which is not a file",
                hint=f"unset it to search the system's folders, or {INSTALL_HINT}",
            )
        return wanted
    listed = os.environ.get("LD_LIBRARY_PATH", "").split(os.pathsep)
    for folder in (*filter(None, listed), os.path.join(sys.prefix, "lib"), *_FOLDERS):
        for name in _LIBRARY_NAMES:
            path = os.path.join(folder, name)
            if os.path.isfile(path):
                return path
    found = ctypes.util.find_library("ngspice")
    if found is None:
        raise MissingDependencyError(
            "ngspice's shared library (libngspice.so.0) was not found on this system",
            hint=f"{INSTALL_HINT}; or set NGSPICE_LIBRARY_PATH to the library's full path",
        )
    return found


def _temporary_folder() -> str:
    """Make a fresh folder with a path in lower case, for ngspice lowers the names of data files."""
    for parent in (tempfile.gettempdir(), "/tmp", "/var/tmp"):
        if parent == parent.lower() and os.access(parent, os.W_OK):
            return tempfile.mkdtemp(prefix=frames.SCRATCH_PREFIX, dir=parent)
    raise SimulationError(
        f"no temporary folder with a path in lower case: {tempfile.gettempdir()!r} has capitals, "
        "/tmp and /var/tmp cannot be written",
        hint="set TMPDIR to a folder in lower case",
    )


def _environment(library: str, scratch: str) -> dict[str, str]:
    """Give the host's environment: an allow-list, so that no start file or search path gets in."""
    spec = importlib.util.find_spec("PySpice")
    if spec is None or spec.origin is None:
        raise MissingDependencyError("PySpice is not installed", hint="type: pip install PySpice")
    environment = {name: os.environ[name] for name in _PASSED_VARIABLES if name in os.environ}
    environment |= {name: text for name, text in os.environ.items() if name[:9] == "OPENBLAS_"}
    environment |= {
        "HOME": scratch,
        "LC_ALL": "C",
        "OMP_NUM_THREADS": "1",
        "OPENBLAS_NUM_THREADS": "1",
        "NGSPICE_LIBRARY_PATH": library,
    }
    # Installed for one user, or found through PYTHONPATH, neither of which the host inherits.
    folders = (str(Path(_HOST).parents[2]), str(Path(spec.origin).parents[1]))
    named = [folder for folder in unique(folders) if folder not in site.getsitepackages()]
    if named:
        environment["PYTHONPATH"] = os.pathsep.join(named)
    return environment


class Client:
    """One host process and the pipes to it; for one process, one run at a time."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._owner = os.getpid()
        self._process: subprocess.Popen[bytes] | None = None
        self._scratch = ""
        self.ready: dict[str, Any] = {}

    def start(self) -> None:
        """Start the host unless it runs."""
        with self._lock:
            self._start()

    def run(
        self,
        lines: Sequence[str],
        commands: Sequence[str],
        plots: str,
        keys: Sequence[str],
        data: Mapping[str, bytes],
        time_limit: float,
        memory_limit: int,
        progress: Callable[[float], None] | None,
    ) -> Answer:
        """Let the host run a deck; parameters as in `PreparedDeck` and `TransientRequest`.

        Raises
        ------
        MissingDependencyError
            If there is no ngspice or no PySpice.
        SimulatorCrashError
            If the host itself died; the next run gets a new one.
        """
        request = {
            "kind": "run",
            "lines": list(lines),
            "commands": list(commands),
            "plots": plots,
            "keys": list(keys),
            "time_limit": time_limit,
            "memory_limit": memory_limit,
        }
        return self.exchange(request, data, progress)

    def exchange(
        self,
        request: dict[str, Any],
        data: Mapping[str, bytes],
        progress: Callable[[float], None] | None = None,
    ) -> Answer:
        """Send a request that the host answers, and collect the answer.

        Parameters
        ----------
        request : dict
            As `cosim.circuit.host` describes it; "data" is filled in.
        data : mapping of str to bytes
            Name in the scratch folder -> content.
        progress : callable or None
            Called with the simulated part of a transient, from 0 to 1.

        Raises
        ------
        MissingDependencyError, SimulatorCrashError
            As `run`.
        """
        request["data"] = [[name, len(content)] for name, content in data.items()]
        frame = frames.pack(request, b"".join(data.values()))
        with self._lock:
            began = time.perf_counter()
            try:
                self._ask(frame)
                limit = time.monotonic() + request["time_limit"] + ANSWER_MARGIN
                answer = self._collect(limit, progress)
            except BaseException:
                # An interrupt or a fault in the middle leaves a run going on and half a frame in
                # the pipe: the host goes, and the next run starts another.
                self._stop()
                raise
            elapsed = time.perf_counter() - began
        answer.overhead_time = elapsed - (answer.done["wall_time"] if answer.done else 0.0)
        return answer

    def unload(self) -> None:
        """Let go of the deck that is loaded for many sets, unless a run is going on."""
        # The collector may end a generator in the middle of another run, which must not wait here.
        if not self._lock.acquire(blocking=False):
            return
        try:
            if self._owner == os.getpid() and self._process is not None:
                with contextlib.suppress(BrokenPipeError):
                    self._write(frames.pack({"kind": "unload"}))
        finally:
            self._lock.release()

    def close(self) -> None:
        """End the host and remove its scratch folder."""
        self._stop()

    def abandon(self) -> None:
        """Let go of a host that belongs to the process this one was forked from."""
        process, self._process = self._process, None
        if process is not None and process.stdin is not None and process.stdout is not None:
            process.stdin.close()
            process.stdout.close()
            process.returncode = 0  # It is not our child, so that there is nothing to wait for.

    def _start(self) -> None:
        if self._process is not None and self._process.poll() is None:
            return
        self._stop()
        library = find_simulator()
        self._scratch = _temporary_folder()
        try:
            self._process = self._launch(library)
            header, _ = self._receive(time.monotonic() + START_LIMIT)
            if header["kind"] == "failed":
                raise MissingDependencyError(
                    f"ngspice's shared library {library!r} does not load: {header['reason']}",
                    hint=INSTALL_HINT,
                )
        except BaseException:
            self._stop()
            raise
        self.ready = header

    def _launch(self, library: str) -> "subprocess.Popen[bytes]":
        environment = _environment(library, self._scratch)
        Path(self._scratch, ".spiceinit").touch()
        atexit.register(self.close)
        with open(os.path.join(self._scratch, "host.err"), "wb") as errors:
            return subprocess.Popen(
                [sys.executable, "-P", _HOST, str(os.getpid()), self._scratch],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=errors,
                bufsize=0,
                env=environment,
                start_new_session=True,
            )

    def _ask(self, frame: bytes) -> None:
        self._start()
        try:
            self._write(frame)
        except BrokenPipeError:
            # Somebody ended the host while it was idle. Nothing has run, so another one may try.
            self._stop()
            self._start()
            self._write(frame)

    def _write(self, frame: bytes) -> None:
        assert self._process is not None
        assert self._process.stdin is not None
        frames.send(self._process.stdin.fileno(), frame)

    def _collect(self, deadline: float, progress: Callable[[float], None] | None) -> Answer:
        answer = Answer()
        while not answer.end:
            header, payload = self._receive(deadline)
            match header.pop("kind"):
                case "log":
                    answer.log += header["lines"]
                case "progress":
                    answer.part = header["part"]
                    if progress is not None:
                        progress(answer.part)
                case "vector":
                    answer.vectors[header["name"]] = payload
                case "done":
                    answer.done = header
                case "loaded":
                    answer.loaded = header
                case "end":
                    answer.end = header
        return answer

    def _receive(self, deadline: float) -> tuple[dict[str, Any], FloatArray]:
        sizes = frames.FRAME.unpack(self._read(bytearray(frames.FRAME.size), deadline))
        header, _ = frames.unpack(
            frames.FRAME.pack(*sizes) + self._read(bytearray(sizes[0]), deadline)
        )
        payload = np.empty(sizes[1] // 8)
        self._read(payload.view(np.uint8), deadline)
        return header, payload

    def _read(self, buffer: Any, deadline: float) -> Any:
        """Fill a buffer from the host."""
        assert self._process is not None
        assert self._process.stdout is not None
        pipe = self._process.stdout
        watched = select.poll()
        watched.register(pipe, select.POLLIN)
        view = memoryview(buffer)
        while view:
            # A poll takes at most 2**31 ms.
            wait = min(max(0.0, deadline - time.monotonic()), LONGEST_WAIT)
            if not watched.poll(1000 * wait):
                if time.monotonic() < deadline:
                    continue
                raise SimulatorCrashError("the simulator's host process does not answer")
            size = os.readv(pipe.fileno(), [view])
            if size == 0:
                code = self._process.wait()
                log = self._errors()
                raise SimulatorCrashError(
                    f"the simulator's host process ended unexpectedly with code {code}"
                    + (f": {log[-1]}" if log else ""),
                    hint="the next run starts a new one",
                    log=log,
                )
            view = view[size:]
        return buffer

    def _errors(self) -> list[str]:
        with contextlib.suppress(OSError):
            text = Path(self._scratch, "host.err").read_text(errors="replace")
            return text.splitlines()[-20:]
        return []

    def _stop(self) -> None:
        if self._owner != os.getpid():
            self.abandon()
            return
        process, self._process = self._process, None
        scratch, self._scratch = self._scratch, ""
        atexit.unregister(self.close)
        if process is None:
            shutil.rmtree(scratch, ignore_errors=True)
            return
        assert process.stdin is not None
        assert process.stdout is not None
        try:
            # End of file tells the host to kill its child and to remove its folder.
            process.stdin.close()
            with contextlib.suppress(subprocess.TimeoutExpired):
                process.wait(CLOSE_LIMIT)
        finally:
            process.stdout.close()
            process.kill()
            process.wait()
            shutil.rmtree(scratch, ignore_errors=True)


# By process id, because a forked child must not talk to the host of its parent.
_clients: dict[int, Client] = {}


def client_of_this_process() -> Client:
    """Give the one client of the running process, new after a fork.

    Returns
    -------
    Client
        Its host starts with the first run.
    """
    process = os.getpid()
    client = _clients.get(process)
    if client is None:
        client = _clients.setdefault(process, Client())
        for other in [key for key in _clients if key != process]:
            stale = _clients.pop(other, None)
            if stale is not None:
                stale.abandon()
    return client
