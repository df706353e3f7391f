"""Requests to the circuit simulator and the results it gives back."""

import math
from dataclasses import dataclass, field

from cosim.errors import InputError
from cosim.waveform import FloatArray


def _positive(name: str, value: float) -> None:
    if not (math.isfinite(value) and value > 0):
        raise InputError(f"{name} must be a positive finite number, got {value!r}")


@dataclass(frozen=True, slots=True)
class Tolerances:
    """Newton tolerances of a run, sent as `.options`.

    The time step stays fixed whatever they are (`trtol=1e6`). Measured on the 52-MOSFET pulse
    modulator, 64500 points, at T/80; error of the complex area of v(t) exp(-j omega t) against
    reltol 1e-7 on the same grid, cost against reltol 1e-3:

        reltol   error    cost
        1e-3     4e-4     1.00
        1e-4     1.6e-5   1.03    the default
        1e-5     1.5e-6   1.11    its `tighter()`; 4e-7 at half the step
        1e-6     5e-7     1.20

    Halving the step itself moves the area by 1.1e-3, so the default leaves the step in charge. A
    gated BSIM4 mixer gave 2e-5, 4e-6, 2e-7 and 4e-10. `vntol` from 1e-6 V to 1e-10 V changed
    none of these digits: 1e-8 V serves decks whose signals are microvolts. An `abstol` of 1e-15 A
    lies below the rounding of a supply's current and let a run fail, so `tighter()` keeps it.

    Parameters
    ----------
    reltol : float
        Relative tolerance of voltages and currents, without unit.
    vntol : float
        Absolute tolerance of voltages in V.
    abstol : float
        Absolute tolerance of currents in A.

    Raises
    ------
    InputError
        If a value is not positive and finite, or `reltol` is not below 1.
    """

    reltol: float = 1e-4
    vntol: float = 1e-8
    abstol: float = 1e-12

    def __post_init__(self) -> None:
        for name in ("reltol", "vntol", "abstol"):
            _positive(f"Tolerances.{name}", getattr(self, name))
        if self.reltol >= 1.0:
            raise InputError(f"Tolerances.reltol must be below 1, got {self.reltol:g}")

    def tighter(self) -> "Tolerances":
        """Give the tolerances of the half-step run: `reltol` and `vntol` ten times smaller."""
        return Tolerances(self.reltol / 10, self.vntol / 10, self.abstol)


@dataclass(frozen=True, slots=True)
class TransientRequest:
    """A transient analysis on a fixed grid.

    Parameters
    ----------
    stop : float
        Last simulated time in s.
    step : float
        The fixed time step in s.
    start : float
        First saved time in s; the simulation itself always starts at 0.
    initial : str
        "op": start from the operating point; "uic": from the deck's initial conditions.
    saves : tuple of str
        ngspice vector expressions to save: "v(x1.out)", "i(v1)", "@m.x1.m1[id]".
    temperature : float or None
        Device temperature in K. None: the deck's own, or 300.15 K.
    tolerances : Tolerances
        Newton tolerances.
    seed : int
        Seed of ngspice's own random functions (agauss and the like), from 1 to 2**31 - 1.
    time_limit : float
        Wall-clock limit of the run in s.
    memory_limit : int
        Limit of the simulator's address space in bytes.
    output_step : float or None
        What sources take for times that they leave out, in s, where the deck has no `.tran`; None:
        the step. A run that is compared with another one must share it.

    Raises
    ------
    InputError
        If a value is out of its range.
    """

    stop: float = field(metadata={"unit": "s"})
    step: float = field(metadata={"unit": "s"})
    start: float = field(default=0.0, metadata={"unit": "s"})
    initial: str = "op"
    saves: tuple[str, ...] = ()
    temperature: float | None = field(default=None, metadata={"unit": "K"})
    tolerances: Tolerances = Tolerances()
    seed: int = 1
    time_limit: float = field(default=600.0, metadata={"unit": "s"})
    memory_limit: int = field(default=8 * 2**30, metadata={"unit": "byte"})
    output_step: float | None = field(default=None, metadata={"unit": "s"})

    def __post_init__(self) -> None:
        for name in ("stop", "step", "time_limit", "memory_limit"):
            _positive(f"TransientRequest.{name}", getattr(self, name))
        if self.step > self.stop:
            raise InputError(
                f"TransientRequest.step must not exceed stop = {self.stop:g} s, got {self.step:g} s"
            )
        if not 0.0 <= self.start < self.stop:
            raise InputError(
                f"TransientRequest.start must lie in [0, {self.stop:g}) s, got {self.start:g} s"
            )
        if self.initial not in ("op", "uic"):
            raise InputError(
                f"TransientRequest.initial must be 'op' or 'uic', got {self.initial!r}"
            )
        if self.temperature is not None:
            _positive("TransientRequest.temperature", self.temperature)
        if self.output_step is not None:
            _positive("TransientRequest.output_step", self.output_step)
        if not 1 <= self.seed < 2**31:
            raise InputError(f"TransientRequest.seed must be from 1 to 2147483647, got {self.seed}")


@dataclass(frozen=True, slots=True)
class TransientResult:
    """What a transient analysis gave.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Accepted time points in s, strictly rising.
    vectors : dict of ndarray, each of shape (n,)
        Save expression as requested, in lower case -> values in V or A.
    log : tuple of str
        The simulator's own words, line by line.
    warnings : tuple of str
        Findings that belong on the result: a resistor set to 1 mOhm, gmin stepping and the like.
    deck : tuple of str
        The lines exactly as sent.
    wall_time : float
        Time in s that the simulator took to load and run the deck, measured in its process.
    overhead_time : float
        Everything else in s: starting the process, sending the deck and the vectors.
    simulator_version : str
        For example "ngspice-39".
    commands : tuple of str
        Commands given before the deck was loaded.
    data : dict of bytes
        Name in the scratch folder -> content, of the data files that the deck reads.
    origins : tuple of (str, int)
        File and line of each line of the deck; ("", 0) for the bridge's own.
    remarks : tuple of str
        Those of the warnings that come from the simulator, and may quote the deck.
    """

    time: FloatArray = field(metadata={"unit": "s", "axes": ("time",)})
    vectors: dict[str, FloatArray] = field(metadata={"unit": "V or A", "axes": ("time",)})
    log: tuple[str, ...]
    warnings: tuple[str, ...]
    deck: tuple[str, ...]
    wall_time: float = field(metadata={"unit": "s"})
    overhead_time: float = field(metadata={"unit": "s"})
    simulator_version: str
    commands: tuple[str, ...] = ()
    data: dict[str, bytes] = field(default_factory=dict)
    origins: tuple[tuple[str, int], ...] = ()
    remarks: tuple[str, ...] = ()
