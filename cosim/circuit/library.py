"""What is asked of libngspice in a child of the host: load a deck, run it, send what it gave.

PySpice is imported here and nowhere else, and only the host imports this module.
"""

import gc
import logging
import time
from collections import deque
from typing import Any

from PySpice.Spice.NgSpice.Shared import NgSpiceShared

from cosim.circuit.frames import pack, send

LOG_LIMIT = 20_000  # lines of a run's log that are passed on at once
LOG_TAIL = 200  # lines after these that are kept for the end of the run
PROGRESS_INTERVAL = 0.1  # s
LARGE = 2**16  # bytes; less than that waits for what follows
CONSTANTS = "const"  # the plot that ngspice starts with


def load_library() -> tuple[Any, bool]:
    """Load libngspice through PySpice.

    Returns
    -------
    NgSpiceShared
        The instance; its lines and its progress go to its attribute `listener`.
    bool
        Whether it found its code models.
    """
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
    """Passes ngspice's lines and its progress on as frames.

    Parameters
    ----------
    output : int
        Descriptor that the frames go to.
    at_once : bool
        Whether each line leaves at once, since the next one may never come. Else they wait for
        one another: each frame wakes three processes on its way.
    """

    def __init__(self, output: int, *, at_once: bool = True) -> None:
        self._output = output
        self._at_once = at_once
        self._held: list[str] = []
        self.count = 0
        self._tail: deque[str] = deque(maxlen=LOG_TAIL)
        self._next = time.monotonic() + PROGRESS_INTERVAL

    def line(self, text: str) -> None:
        """Pass on a line of the log.

        Parameters
        ----------
        text : str
            The line, with the name of its stream in front.
        """
        self.count += 1
        if self.count <= LOG_LIMIT:
            self._held.append(text)
            if self._at_once:
                self._flush()
        else:
            self._tail.append(text)

    def finish(self) -> None:
        """Pass on the last lines of a log that was too long."""
        left_out = self.count - LOG_LIMIT - len(self._tail)
        if left_out > 0:
            self._tail.appendleft(f"({left_out} lines left out here)")
        self._held += self._tail
        self._flush()

    def _flush(self) -> None:
        if self._held:
            held, self._held = self._held, []
            send(self._output, pack({"kind": "log", "lines": held}))

    def status(self, text: str) -> None:
        """Pass on the simulated part of a transient, a few times a second.

        Parameters
        ----------
        text : str
            A status such as "tran: 12.3%".
        """
        now = time.monotonic()
        if now < self._next or not text.startswith("tran:"):
            return
        self._next = now + PROGRESS_INTERVAL
        try:
            part = float(text.partition(":")[2].rstrip("% ")) / 100
        except ValueError:
            return
        self._flush()
        send(self._output, pack({"kind": "progress", "part": part}))


def run_deck(simulator: Any, request: dict[str, Any], output: int) -> None:
    """Load or change a deck, run it and send what it gave; the verdict is the caller's.

    Parameters
    ----------
    simulator : NgSpiceShared
        From `load_library`.
    request : dict
        Of the kind "run", or "set" for a deck that is loaded.
    output : int
        Descriptor that the frames go to.
    """
    # A set that ends early is run again alone, so that no line of its log is lost.
    simulator.listener = listener = Listener(output, at_once=request["kind"] == "run")
    faults = {"load": "", "run": ""}
    began = time.perf_counter()
    for command in request["commands"]:
        _quietly(simulator.exec_command, command)
    if request["kind"] == "run":
        faults["load"] = _quietly(simulator.load_circuit, "\n".join(request["lines"]))
    elif any(_values(simulator, name) != values for name, values in request["exact"].items()):
        faults["load"] = "a value did not reach ngspice as it is"
    if not faults["load"]:
        faults["run"] = _quietly(simulator.exec_command, request.get("start", "run"))
    wall_time = time.perf_counter() - began
    listener.finish()
    # The child's parent has run nothing, or the first points of this very run.
    plots = [name for name in simulator.plot_names if name != CONSTANTS]
    found: dict[str, Any] = {}
    # A noise analysis gives two plots, of spectra and of totals; the newest comes first.
    for plot in (name for name in reversed(plots) if name.startswith(request["plots"])):
        # The key of a node named 3 is "V(3)", that of all others is in lower case.
        vectors = simulator.plot(None, plot).items()
        found |= {name.lower(): vector._data for name, vector in vectors}
    last = b""
    for key in request["keys"]:
        data = found.get(key, found.get(f"v({key})"))
        if data is not None:
            last += pack({"kind": "vector", "name": key}, data.tobytes())
            if len(last) > LARGE:
                send(output, last)
                last = b""
    done = {"kind": "done", "faults": faults, "plots": plots, "wall_time": wall_time}
    send(output, last + pack(done | {"available": sorted(found)}))


def load_deck(simulator: Any, request: dict[str, Any], output: int) -> None:
    """Load a deck for many sets, and run the points that they share.

    Parameters
    ----------
    simulator : NgSpiceShared
        From `load_library`.
    request : dict
        Of the kind "load".
    output : int
        Descriptor that the frames go to.
    """
    simulator.listener = listener = Listener(output)
    for command in request["commands"]:
        _quietly(simulator.exec_command, command)
    fault = _quietly(simulator.load_circuit, "\n".join(request["lines"]))
    reading = listener.count
    for command in () if fault else request["then"]:
        fault = fault or _quietly(simulator.exec_command, command)
    listener.finish()
    times = [0.0]
    if request["then"] and (plots := [n for n in simulator.plot_names if n != CONSTANTS]):
        times = _values(simulator, "time", plots[0]) or times
    loaded = {"kind": "loaded", "fault": fault, "reading": reading, "reached": times[-1]}
    send(output, pack(loaded))
    gc.freeze()  # What the load has left must not be touched in each child either.


def _values(simulator: Any, name: str, plot: str = CONSTANTS) -> list[float]:
    vectors = simulator.plot(None, plot)
    return [float(value) for value in vectors[name]._data] if name in vectors else []


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
