"""The record of a run: when, where, with what, from which deck, in what time."""

import platform
import time
from collections.abc import Mapping
from datetime import datetime
from functools import cache
from importlib.metadata import version

from cosim.capture import Capture
from cosim.result import RunRecord
from cosim.testbench import Bench

PACKAGES = ("qcosim", "numpy", "scipy", "qutip", "PySpice", "numba", "h5py")


class Clock:
    """Wall-clock times of the stages of a run, in s."""

    def __init__(self) -> None:
        self.started = datetime.now().astimezone().isoformat(timespec="seconds")
        self.laps: dict[str, float] = {}
        self._last = time.perf_counter()

    def lap(self, name: str) -> None:
        """End a stage; the time since the last one is its own."""
        now = time.perf_counter()
        self.laps[name] = self.laps.get(name, 0.0) + now - self._last
        self._last = now

    def lap_capture(self, shot: Capture, prefix: str = "") -> None:
        """End a capture; ngspice's own time is told from everything else around it."""
        if shot.result is None:
            self.lap(prefix + "import")
            return
        self.lap(prefix + "simulator_overhead")
        self.laps[prefix + "ngspice"] = shot.result.wall_time
        self.laps[prefix + "simulator_overhead"] -= shot.result.wall_time

    def note_laps(self, laps: Mapping[str, float]) -> None:
        """Take over stages that are not this run's alone; the next begins now."""
        self.laps |= laps
        self._last = time.perf_counter()

    def note_capture(self, shot: Capture, prefix: str = "") -> None:
        """Take over the time of a capture that was made before this run began."""
        if shot.result is not None:
            self.laps[prefix + "ngspice"] = shot.result.wall_time


def make_record(bench: Bench, shot: Capture, carrier_frequency: float, clock: Clock) -> RunRecord:
    """Write down what is needed to check a run in two years.

    Parameters
    ----------
    bench : Bench
        The testbench.
    shot : Capture
        The waveform and where it comes from.
    carrier_frequency : float
        In Hz.
    clock : Clock
        Times of the stages.

    Returns
    -------
    RunRecord
        The record.
    """
    versions = package_versions()
    result = shot.result
    if result is not None:
        versions["ngspice"] = result.simulator_version.removeprefix("ngspice-")
    return RunRecord(
        started=clock.started,
        host=f"{platform.node()} ({platform.platform()})",
        versions=versions,
        seed=bench.netlist.seed if bench.netlist is not None else 0,
        wall_times=clock.laps,
        testbench=bench.to_toml(),
        deck_files=shot.files,
        deck_sent="" if result is None else "\n".join(result.deck) + "\n",
        deck_data={} if result is None else _texts(result.data),
        deck_commands=() if result is None else result.commands,
        log=() if result is None else result.log,
        points=shot.waveform.t.size,
        step=shot.step,
        steps_per_period=1.0 / (shot.step * carrier_frequency),
    )


def package_versions() -> dict[str, str]:
    """Tell what this process computes with.

    Returns
    -------
    dict of str
        Package to version, and Python's own.
    """
    return {**{name: _version(name) for name in PACKAGES}, "python": platform.python_version()}


@cache
def _version(name: str) -> str:
    # Read from files of the package, which takes longer than a quick circuit.
    return version(name)


def _texts(data: dict[str, bytes]) -> dict[str, str]:
    # Data files of a deck are text, but not always UTF-8; Latin-1 keeps every byte.
    return {name: content.decode("latin-1") for name, content in data.items()}
