"""The tables of a testbench file as frozen dataclasses in SI units."""

import math
from dataclasses import dataclass, field
from typing import Annotated, Literal

from cosim.config import NameOrTable, Parameter, Quantity
from cosim.errors import InputError

Time = Annotated[float, Quantity("s")]
PositiveTime = Annotated[float, Quantity("s", above=0.0)]
Step = Annotated[float, Quantity("s", least=1e-18)]
DecayTime = Annotated[float, Quantity("s", least=1e-12)]
Frequency = Annotated[float, Quantity("Hz")]
PositiveFrequency = Annotated[float, Quantity("Hz", above=0.0)]
Resistance = Annotated[float, Quantity("ohm", least=1e-3)]
Temperature = Annotated[float, Quantity("K", above=0.0)]
ParameterValue = Annotated[float, Parameter()]
ShiftName = Literal["threshold", "current_factor"]


@dataclass(frozen=True, slots=True)
class NetlistTable:
    """Table [netlist]: the deck and how it is simulated.

    Parameters
    ----------
    file : str
        Path of the deck, relative to the testbench. In Python a PySpice `Circuit` may stand here.
    stop : float or None
        End of the transient in s; default: that of the deck's .tran.
    max_step : float or None
        Largest time step in s, rounded down to carrier period / N; default: that of the deck's
        .tran, or what `steps_per_period` says.
    steps_per_period : int or None
        N itself, in place of `max_step`; 80 when neither the testbench nor the deck says more.
    temperature : float or None
        Device temperature of the simulator in K; default: that of the deck, else 300.15 K.
    parameters : mapping
        Values for the deck's .param, in SI units.
    sections : mapping
        Library file name to the .lib section used in place of the deck's; where the deck reads
        several sections of it, to a mapping from those to others.
    instances : mapping
        Instance path to parameters of that one instance, in SI units.
    mismatch : mapping
        MOS transistor ("m1", "x1.m3") to its `threshold` shift in V and its `current_factor`.
    initial : "op", "uic" or None
        Start from the operating point or from the initial conditions; default: as the deck.
    include_paths : tuple of str
        Folders that the deck may include from, besides its own, relative to the testbench.
    confidential : tuple of str
        Folders, relative to the testbench, whose files the record of a run keeps as path and
        SHA-256 only.
    compatibility : str or None
        The simulator's compatibility mode (its ngbehavior), such as "ps" or "hs".
    save : tuple of str
        Further vectors to keep in the archive, such as "v(x1.out)".
    seed : int
        Seed of the deck's random functions (agauss and the like), from 1 to 2**31 - 1.
    time_limit : float
        Wall-clock limit of one simulation in s.
    """

    file: str
    stop: PositiveTime | None = None
    max_step: Step | None = None
    steps_per_period: int | None = None
    temperature: Temperature | None = None
    parameters: dict[str, ParameterValue] = field(default_factory=dict)
    sections: dict[str, str | dict[str, str]] = field(default_factory=dict)
    instances: dict[str, dict[str, ParameterValue]] = field(default_factory=dict)
    mismatch: dict[str, dict[ShiftName, ParameterValue]] = field(default_factory=dict)
    initial: Literal["op", "uic"] | None = None
    include_paths: tuple[str, ...] = ()
    confidential: tuple[str, ...] = ()
    compatibility: str | None = None
    save: tuple[str, ...] = ()
    seed: int = 1
    time_limit: PositiveTime = 600.0

    def __post_init__(self) -> None:
        if self.max_step is not None and self.steps_per_period is not None:
            raise InputError("give 'max_step' or 'steps_per_period', not both")
        if self.steps_per_period is not None and not 20 <= self.steps_per_period <= 100_000:
            raise InputError(
                f"key 'steps_per_period': wanted 20 to 100000, got {self.steps_per_period}"
            )


@dataclass(frozen=True, slots=True)
class WaveformTable:
    """Table [waveform]: what was simulated or measured elsewhere, in place of a netlist.

    The probe of [drive] is then a combination of the file's columns or vectors.

    Parameters
    ----------
    file : str
        A text file with columns, or an ngspice raw file (ending .raw), relative to the testbench.
    time : str or None
        Name of the time column; default: the first.
    time_unit, unit : str or None
        Units of the time and of the values, such as "ns" and "mV", where the file names none.
    plot : str or None
        Which plot of a raw file; default: the only one.
    """

    file: str
    time: str | None = None
    time_unit: str | None = None
    unit: str | None = None
    plot: str | None = None


@dataclass(frozen=True, slots=True)
class DriveTable:
    """Table [drive]: where the drive leaves the circuit, and the line to the qubit.

    Parameters
    ----------
    carrier : float or "estimate"
        Carrier frequency in Hz, or taken from the waveform itself.
    probe : str or None
        Linear combination of node voltages, or of currents: "v(rf_p) - v(rf_n)", "i(l1)".
    i, q : str or None
        In place of `probe`: two probes of a circuit without carrier. The bridge upconverts them
        ideally, v = I cos(2 pi f t) - Q sin(2 pi f t); `q` may be left out.
    termination : float or "in deck"
        Resistance in ohm that the bridge adds from each probed node to ground, or "in deck".
        It must be given when there is a netlist.
    attenuation : float
        Between probe and qubit, in dB.
    line : str or None
        Touchstone file of the line between probe and attenuator, relative to the testbench;
        needs the extra `rf`. The window of the gate is then meant at the line's far end.
    line_ports : two integers, or two pairs of them
        Near and far port of the line, from 1; for a differential pair [[p, n], [p_far, n_far]].
    impedance : float or None
        Reference impedance in ohm that turns a probe current into an incident voltage;
        default: the termination, or 50 ohm when that is in the deck.
    """

    carrier: Annotated[float | str, Quantity("Hz", least=1.0, words=("estimate",))]
    probe: str | None = None
    i: str | None = None
    q: str | None = None
    termination: Annotated[float | str | None, Quantity("ohm", least=1e-3, words=("in deck",))] = (
        None
    )
    attenuation: Annotated[float, Quantity("dB", least=-200.0, most=1000.0)] = 0.0
    line: str | None = None
    line_ports: tuple[int, int] | tuple[tuple[int, int], tuple[int, int]] = (1, 2)
    impedance: Resistance | None = None

    def __post_init__(self) -> None:
        if self.probe is not None and (self.i is not None or self.q is not None):
            raise InputError("give 'probe', or 'i' and 'q' of a baseband pair, not both")
        if self.probe is None and self.i is None:
            raise InputError("the key 'probe' is missing; for a baseband pair give 'i' and 'q'")
        if self.probe is None and isinstance(self.carrier, str):
            raise InputError("key 'carrier': a baseband pair has none to estimate; give it in Hz")

    @property
    def reference_impedance(self) -> float:
        """The reference impedance in ohm."""
        if self.impedance is not None:
            return self.impedance
        return self.termination if isinstance(self.termination, float) else 50.0


@dataclass(frozen=True, slots=True)
class QubitTable:
    """Table [qubit]: the qubit at the end of the line.

    Parameters
    ----------
    kind : "spin", "transmon" or "operators"
        Two levels, a weakly anharmonic ladder, or operators given to `cosim.run` in Python.
    rabi_per_volt : float
        Rabi frequency in Hz per volt of carrier peak amplitude, on resonance.
    frequency : float, "carrier" or None
        Qubit frequency in Hz, or the carrier's; left out for operators, which have their own.
    detuning : float
        Added to `frequency`, in Hz.
    levels : int or None
        Levels kept for a transmon, 3 to 6; default 4.
    anharmonicity : float or None
        In Hz, negative; needed for a transmon.
    t1, t2 : float
        Relaxation and (Markovian) coherence time in s; default infinite, and twice t1.
    thermal_population : float
        Population of |1> in equilibrium, 0 to 0.5.
    """

    kind: Literal["spin", "transmon", "operators"]
    rabi_per_volt: Annotated[float, Quantity("Hz/V", above=0.0)]
    frequency: Annotated[float | str | None, Quantity("Hz", above=0.0, words=("carrier",))] = None
    detuning: Frequency = 0.0
    levels: int | None = None
    anharmonicity: Frequency | None = None
    t1: DecayTime = math.inf
    t2: DecayTime = math.inf
    thermal_population: float = 0.0

    def __post_init__(self) -> None:
        if self.kind == "operators":
            if self.frequency is not None or self.levels is not None or self.detuning != 0.0:
                raise InputError("operators bring their own frequency and levels")
            return
        if self.frequency is None:
            raise InputError("the key 'frequency' is missing")
        if self.kind == "spin":
            if self.levels not in (None, 2) or self.anharmonicity is not None:
                raise InputError(
                    "a spin has two levels and no anharmonicity; for more levels "
                    'say kind = "transmon"'
                )
        else:
            if self.anharmonicity is None:
                raise InputError("a transmon needs the key 'anharmonicity', such as \"-300 MHz\"")
            if self.anharmonicity >= 0.0:
                raise InputError(
                    f"key 'anharmonicity': wanted a negative one, got {self.anharmonicity:g} Hz"
                )
            if self.levels is not None and not 3 <= self.levels <= 6:
                raise InputError(f"key 'levels': wanted 3 to 6, got {self.levels}")
        if math.isfinite(self.t2) and self.t2 > 2.0 * self.t1:
            raise InputError(f"key 't2': at most twice t1 = {self.t1:g} s, got {self.t2:g} s")
        if not 0.0 <= self.thermal_population <= 0.5:
            raise InputError(
                f"key 'thermal_population': wanted 0 to 0.5, got {self.thermal_population}"
            )


@dataclass(frozen=True, slots=True)
class SpectatorTable:
    """A table [[spectator]]: another qubit on the same line, which sees the same waveform.

    Parameters
    ----------
    kind, rabi_per_volt, levels, anharmonicity, t1, t2, thermal_population
        As in `QubitTable`; "operators" is not one of the kinds.
    frequency : float or None
        In Hz.
    offset : float or None
        In place of `frequency`: from that of [qubit], in Hz.
    name : str
        For results.
    target : str
        Name of the rotation that it is meant to make.
    """

    kind: Literal["spin", "transmon"]
    rabi_per_volt: Annotated[float, Quantity("Hz/V", above=0.0)]
    frequency: Annotated[float, Quantity("Hz", above=0.0)] | None = None
    offset: Frequency | None = None
    name: str = ""
    target: str = "identity"
    levels: int | None = None
    anharmonicity: Frequency | None = None
    t1: DecayTime = math.inf
    t2: DecayTime = math.inf
    thermal_population: float = 0.0

    def __post_init__(self) -> None:
        if (self.frequency is None) == (self.offset is None):
            raise InputError("give 'frequency' or 'offset', one of them")
        self.qubit(1.0)

    def qubit(self, frequency: float) -> QubitTable:
        """Give the table [qubit] of this one; `frequency` in Hz is that of the gate's qubit."""
        own = self.frequency if self.frequency is not None else frequency + (self.offset or 0.0)
        return QubitTable(
            self.kind,
            self.rabi_per_volt,
            own,
            0.0,
            self.levels,
            self.anharmonicity,
            self.t1,
            self.t2,
            self.thermal_population,
        )


@dataclass(frozen=True, slots=True)
class TargetTable:
    """A target rotation as { axis, angle }.

    Parameters
    ----------
    axis : tuple of three floats
        Direction; its length does not matter.
    angle : float
        Angle in rad.
    """

    axis: tuple[float, float, float]
    angle: Annotated[float, Quantity("rad")]


@dataclass(frozen=True, slots=True)
class GateTable:
    """Table [gate]: what the pulse is meant to do.

    Parameters
    ----------
    target : str or TargetTable
        Name of a rotation ("x90", "-y90", "identity"), or { axis = [x, y, z], angle = "90 deg" }.
    window : tuple of two floats or None
        Start and end of the gate in s; default: the whole run.
    idle : tuple of two floats or None
        Start and end in s of a stretch without a pulse, to be judged as such.
    calibrate : tuple of str
        What the calibrated fidelity may adjust beside the frame: "amplitude", "detuning".
    """

    target: Annotated[str | TargetTable, NameOrTable(TargetTable)]
    window: tuple[Time, Time] | None = None
    idle: tuple[Time, Time] | None = None
    calibrate: tuple[Literal["amplitude", "detuning"], ...] = ("amplitude",)

    def __post_init__(self) -> None:
        for name, span in (("window", self.window), ("idle", self.idle)):
            if span is not None and span[0] >= span[1]:
                raise InputError(
                    f"key '{name}': the end must come after the start, got {span[0]:g} s "
                    f"to {span[1]:g} s"
                )


@dataclass(frozen=True, slots=True)
class AccuracyTable:
    """Table [accuracy]: what is spent on error bars.

    Parameters
    ----------
    floor : bool
        Run the deck a second time at half the step and tighter tolerances, for the numerical
        floor and the error bars. The two runs cost four to five times one.
    reference : bool
        Also evolve the full waveform with QuTiP's master-equation solver, and tell the difference.
    noise_samples : int
        Seeded samples of what fluctuates during the gate, where the testbench has such noise; they
        come in pairs of opposite sign.
    noise_seed : int
        Their seed.
    """

    floor: bool = True
    reference: bool = False
    noise_samples: int = 1000
    noise_seed: int = 1

    def __post_init__(self) -> None:
        if not 4 <= self.noise_samples <= 1_000_000:
            raise InputError(f"key 'noise_samples': wanted 4 to 1000000, got {self.noise_samples}")
        if not 0 <= self.noise_seed < 2**63:
            raise InputError(f"key 'noise_seed': wanted 0 to 2**63 - 1, got {self.noise_seed}")


TABLES = {
    "netlist": NetlistTable,
    "waveform": WaveformTable,
    "drive": DriveTable,
    "qubit": QubitTable,
    "gate": GateTable,
    "accuracy": AccuracyTable,
}

# The tables of which one says where the waveform comes from.
SOURCES = ("netlist", "waveform")
