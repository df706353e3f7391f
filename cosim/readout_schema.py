"""The tables of a testbench with a readout as frozen dataclasses in SI units."""

import math
from dataclasses import dataclass
from typing import Annotated, Literal

from cosim.config import Quantity
from cosim.errors import InputError
from cosim.quantum.qubit import Qubit
from cosim.quantum.readout_limits import check_chi
from cosim.quantum.resonator import Resonator
from cosim.schema import (
    DecayTime,
    Frequency,
    PositiveFrequency,
    PositiveTime,
    Resistance,
    Temperature,
    Time,
)

Stage = tuple[Annotated[float, Quantity("dB", least=0.0)], Temperature]
Rate = Annotated[float, Quantity("Hz", least=0.0)]
Ports = tuple[int, int] | tuple[tuple[int, int], tuple[int, int]]


MOST_PHOTONS = 1e6  # far beyond any critical number
ONE_OUTPUT = "give one of the outputs 'probe', 'i' with 'q', and 'decision'"


@dataclass(frozen=True, slots=True)
class ResonatorTable:
    """Table [resonator]: what answers, and the pulse that asks it.

    Parameters
    ----------
    geometry : "reflection", "transmission" or "hanger"
        How the resonator meets its line.
    frequency : float
        Midway between the resonances for |0> and |1>, in Hz.
    kappa_in, kappa_out, kappa_internal : float
        Decay rates over 2 pi in Hz: to the input, to the output, and inside. In reflection the one
        port is `kappa_in`; of a hanger `kappa_out` counts both directions.
    chi : float
        Half of the difference of the resonances for |1> and |0> over 2 pi, in Hz: negative for a
        transmon below its resonator.
    chi_2 : float or None
        Shift of the resonance for |2> from `frequency`, in Hz.
    drive_frequency : float or None
        In Hz; default: `frequency`.
    photons : float or None
        Photons in the resonator in steady state, the mean of those for |0> and |1>.
    power : float or None
        In place of `photons`: power at the resonator's input in dBm.
    pulse : str or None
        In place of both: file of a testbench whose [netlist] or [waveform] makes the pulse and
        whose [drive] says where it is read and how much it is attenuated, relative to this one.
    start, length : float
        Of the pulse, in s. One of a file is not cut to them: from `start` on the state counts, and
        the steady state is that of the second half of `length`.
    boost : float
        Factor on the pulse's field over its first part, which fills the resonator faster.
    boost_length : float
        Duration of that part in s; 0: there is none.
    ring_down : float
        Factor on the pulse's field behind it, negative to empty the resonator.
    ring_down_length : float
        Duration of that part in s; 0: there is none.
    qubit_frequency, coupling, anharmonicity : float or None
        The qubit's own, in Hz: what the critical photon number, the decay through the resonator
        and the sign of `chi` are judged by.
    filter_quality : float or None
        Quality of a bandpass filter at the resonator's frequency, between it and the line, that
        keeps the qubit from decaying through it.
    """

    geometry: Literal["reflection", "transmission", "hanger"]
    frequency: PositiveFrequency
    chi: Frequency
    start: Annotated[float, Quantity("s", least=0.0)]
    length: PositiveTime
    kappa_in: Rate = 0.0
    kappa_out: Rate = 0.0
    kappa_internal: Rate = 0.0
    chi_2: Frequency | None = None
    drive_frequency: PositiveFrequency | None = None
    photons: float | None = None
    power: Annotated[float, Quantity("dBm", least=-300.0, most=60.0)] | None = None
    pulse: str | None = None
    boost: float = 1.0
    boost_length: Annotated[float, Quantity("s", least=0.0)] = 0.0
    ring_down: float = 0.0
    ring_down_length: Annotated[float, Quantity("s", least=0.0)] = 0.0
    qubit_frequency: PositiveFrequency | None = None
    coupling: PositiveFrequency | None = None
    anharmonicity: Frequency | None = None
    filter_quality: float | None = None

    def __post_init__(self) -> None:
        resonator = self.resonator()
        if sum(one is not None for one in (self.photons, self.power, self.pulse)) != 1:
            raise InputError("give one of 'photons', 'power' and 'pulse'")
        if self.pulse is not None and (self.boost_length or self.ring_down_length):
            raise InputError("a 'pulse' of a file has its own steps: no 'boost', no 'ring_down'")
        if self.photons is not None and not 0.0 < self.photons <= MOST_PHOTONS:
            raise InputError(
                f"key 'photons': wanted more than 0 and at most {MOST_PHOTONS:.0e}, got "
                f"{self.photons:g}"
            )
        if not 0.0 < self.boost <= 100.0:
            raise InputError(f"key 'boost': wanted more than 0 and at most 100, got {self.boost:g}")
        if (self.boost != 1.0) != (self.boost_length > 0.0):
            raise InputError("'boost' and 'boost_length' go together")
        if self.boost_length >= self.length:
            raise InputError("key 'boost_length': wanted less than the pulse's 'length'")
        if (self.ring_down != 0.0) != (self.ring_down_length > 0.0):
            raise InputError("'ring_down' and 'ring_down_length' go together")
        if (self.coupling is None) != (self.qubit_frequency is None):
            raise InputError("'qubit_frequency' and 'coupling' go together")
        if self.filter_quality is not None and self.coupling is None:
            raise InputError("'filter_quality' goes with 'qubit_frequency' and 'coupling'")
        if self.filter_quality is not None and not 0.0 < self.filter_quality < math.inf:
            raise InputError(
                f"key 'filter_quality': wanted more than 0, got {self.filter_quality:g}"
            )
        qubit = self.qubit()
        if qubit is not None and self.coupling is not None:
            check_chi(resonator, qubit, 2.0 * math.pi * self.coupling)

    @property
    def drive(self) -> float:
        """Frequency of the drive in Hz."""
        return self.frequency if self.drive_frequency is None else self.drive_frequency

    @property
    def stop(self) -> float:
        """End of the pulse in s, the part that empties the resonator included."""
        return self.start + self.length + self.ring_down_length

    def qubit(self) -> Qubit | None:
        """Give the qubit that asks for its coupling to be judged; None without one."""
        if self.qubit_frequency is None:
            return None
        levels = 2 if self.anharmonicity is None else 3
        return Qubit(self.qubit_frequency, levels, self.anharmonicity or 0.0)

    def resonator(self) -> Resonator:
        """Give the resonator, with rates in rad/s."""
        turn = 2.0 * math.pi
        return Resonator(
            self.geometry,
            self.frequency,
            turn * self.kappa_in,
            turn * self.kappa_out,
            turn * self.kappa_internal,
            turn * self.chi,
            None if self.chi_2 is None else turn * self.chi_2,
        )


@dataclass(frozen=True, slots=True)
class SensorTable:
    """Table [sensor]: a charge sensor whose state is the value of an element of the deck.

    Parameters
    ----------
    value_0, value_1 : float
        What the element is worth for |0> and for |1>, in SI units.
    parameter : str
        The deck's .param of its value from the start on.
    late_parameter : str
        The .param of its value from the event on.
    event_parameter : str
        The .param of the time in s of the event.
    start : float
        Time in s from which on the state counts.
    tunnel_time : float
        Mean time in s in which |1> tunnels, and only then looks like `value_1`; 0: at once.
    return_time : float
        Mean time in s in which it looks like `value_0` again after that.
    """

    value_0: float
    value_1: float
    parameter: str
    late_parameter: str
    event_parameter: str
    start: Annotated[float, Quantity("s", least=0.0)] = 0.0
    tunnel_time: Annotated[float, Quantity("s", least=0.0)] = 0.0
    return_time: DecayTime = math.inf

    def __post_init__(self) -> None:
        if self.value_0 == self.value_1:
            raise InputError("'value_0' and 'value_1' are equal, so that there is nothing to read")
        if math.isfinite(self.return_time) and self.tunnel_time == 0.0:
            raise InputError(
                "'return_time' goes with 'tunnel_time'; a state that is seen at once "
                "decays by 't1' in [readout]"
            )


@dataclass(frozen=True, slots=True)
class ReadoutTable:
    """Table [readout]: the way into the netlist, what is read of it, and how it is judged.

    Parameters
    ----------
    window : tuple of two floats
        Start and end in s of the integration.
    source : str or None
        The deck's voltage source that the resonator's answer replaces: an EMF behind the
        impedance that stands in the deck. Not needed with a [sensor].
    source_q : str or None
        The source of Q, where the answer enters as a baseband pair.
    signal : "rf", "if" or "baseband"
        At which frequency it enters: the drive's, `intermediate_frequency`, or as a pair.
    intermediate_frequency : float or None
        In Hz, for "if".
    impedance : float
        Z0 of the line in ohm.
    line : str or None
        Touchstone file of a passive two-port next to the resonator, relative to the testbench;
        needs the extra `rf`.
    line_ports : two integers, or two pairs of them
        Its near and far port, from 1; for a differential pair [[p, n], [p_far, n_far]].
    line_temperature : float or None
        Of the line in K; needed with it.
    stages : tuple of (float, float)
        Attenuators between resonator and netlist: dB and temperature in K, from the resonator on.
    gain : float
        Of an amplifier in front of the netlist, after them, in dB.
    amplifier : str or None
        In place of `gain`: Touchstone file of that amplifier.
    amplifier_ports : two integers, or two pairs of them
        Its input and its output, as `line_ports`.
    noise_temperature : float
        Of that amplifier at its input, in K.
    probe : str or None
        Output at `output_frequency`, or in baseband where that is not given.
    i, q : str or None
        In place of `probe`: outputs I and Q, in baseband or both at `output_frequency`.
    decision : str or None
        In place of both: a node that stands for the circuit's own decision.
    output_frequency : float or None
        Frequency of `probe`, or of both `i` and `q`, in Hz.
    sideband : "upper", "lower" or None
        Of I and Q at `output_frequency`: which way I + jQ turns where the signal is, as exp(+j 2
        pi f t) or as exp(-j 2 pi f t); what turns the other way is the image. None: "upper".
    threshold : float or None
        Level in V that `decision` is compared with.
    decide_at : float or None
        Time in s at which it is read; default: the end of the window.
    output_rate : float or None
        Rate in Hz at which records are kept; default: that of the converter, else 400 samples in
        the window.
    weights : "boxcar" or "matched"
        How the record is weighted before it is summed.
    adc_bits : int or None
        Bits of the converter; None: none.
    adc_full_scale : float or None
        Peak-to-peak range of the converter in V.
    adc_rate : float or None
        Its rate in Hz.
    adc_cycles : int
        Of its clock, after the conversion of the last sample, until the decision stands.
    t1 : float
        Decay time of |1> in s during the readout.
    thermal_population : float
        Of |1> in equilibrium: excites |0> at thermal_population/t1.
    preparation_error : float
        Probability that the pulse which exchanges |0> and |1>, to prepare |1>, does not.
    decay_times : int
        Simulated times of decay.
    shots, records : int
        Integrated shots, and shots as whole records in time.
    seed : int
        Of all that is random.
    """

    window: tuple[Time, Time]
    source: str | None = None
    source_q: str | None = None
    signal: Literal["rf", "if", "baseband"] = "rf"
    intermediate_frequency: PositiveFrequency | None = None
    impedance: Resistance = 50.0
    line: str | None = None
    line_ports: Ports = (1, 2)
    line_temperature: Annotated[float, Quantity("K", least=0.0)] | None = None
    stages: tuple[Stage, ...] = ()
    gain: Annotated[float, Quantity("dB", least=-200.0, most=200.0)] = 0.0
    amplifier: str | None = None
    amplifier_ports: Ports = (1, 2)
    noise_temperature: Annotated[float, Quantity("K", least=0.0)] = 0.0
    probe: str | None = None
    i: str | None = None
    q: str | None = None
    decision: str | None = None
    output_frequency: PositiveFrequency | None = None
    sideband: Literal["upper", "lower"] | None = None
    threshold: Annotated[float, Quantity("V")] | None = None
    decide_at: Time | None = None
    output_rate: PositiveFrequency | None = None
    weights: Literal["boxcar", "matched"] = "matched"
    adc_bits: int | None = None
    adc_full_scale: Annotated[float, Quantity("V", above=0.0)] | None = None
    adc_rate: PositiveFrequency | None = None
    adc_cycles: int = 0
    t1: DecayTime = math.inf
    thermal_population: float = 0.0
    preparation_error: float = 0.0
    decay_times: int = 6
    shots: int = 1_000_000
    records: int = 20_000
    seed: int = 1

    def __post_init__(self) -> None:
        start, stop = self.window
        if start >= stop:
            raise InputError(
                f"key 'window': the end must come after the start, got {start:g} s to {stop:g} s"
            )
        self._check_input()
        self._check_output()
        self._check_converter()
        for name in ("thermal_population", "preparation_error"):
            value = getattr(self, name)
            if not 0.0 <= value <= 0.5:
                raise InputError(f"key '{name}': wanted 0 to 0.5, got {value:g}")
        for name, least, most in (
            ("decay_times", 2, 1000),
            ("shots", 1000, 10**8),
            ("records", 100, 10**6),
            ("adc_cycles", 0, 10**6),
        ):
            value = getattr(self, name)
            if not least <= value <= most:
                raise InputError(f"key '{name}': wanted {least} to {most}, got {value}")
        if not 0 <= self.seed < 2**63:
            raise InputError(f"key 'seed': wanted 0 to 2**63 - 1, got {self.seed}")

    @property
    def has_output(self) -> bool:
        """Whether it says what is read of a circuit."""
        return any(one is not None for one in (self.probe, self.i, self.decision))

    def _check_input(self) -> None:
        if (self.signal == "if") != (self.intermediate_frequency is not None):
            raise InputError("'intermediate_frequency' goes with signal = \"if\"")
        if (self.signal == "baseband") != (self.source_q is not None):
            raise InputError("'source_q' goes with signal = \"baseband\"")
        if (self.line is None) != (self.line_temperature is None):
            raise InputError("'line' and 'line_temperature' go together")
        if self.amplifier is not None and self.gain != 0.0:
            raise InputError("give 'gain' or 'amplifier', not both")

    def _check_output(self) -> None:
        given = [name for name in ("probe", "decision") if getattr(self, name) is not None]
        if self.i is not None or self.q is not None:
            given.append("i")
        # Without a circuit there is none; with one `cosim.testbench` misses it.
        if len(given) > 1:
            raise InputError(ONE_OUTPUT)
        if self.q is not None and self.i is None:
            raise InputError("'q' goes with 'i'")
        if self.output_frequency is not None and self.probe is None and self.q is None:
            raise InputError("'output_frequency' goes with 'probe', or with both 'i' and 'q'")
        if self.sideband is not None and (self.q is None or self.output_frequency is None):
            raise InputError("'sideband' goes with 'i' and 'q' at an 'output_frequency'")
        if (self.decision is not None) != (self.threshold is not None):
            raise InputError("'threshold' goes with 'decision'")
        if self.decide_at is not None and self.decision is None:
            raise InputError("'decide_at' goes with 'decision'")

    def _check_converter(self) -> None:
        parts = (self.adc_bits, self.adc_full_scale, self.adc_rate)
        if any(part is None for part in parts) and any(part is not None for part in parts):
            raise InputError("'adc_bits', 'adc_full_scale' and 'adc_rate' go together")
        if self.adc_bits is not None and self.decision is not None:
            raise InputError("'decision' and a converter do not go together")
        if self.adc_bits is not None and not 1 <= self.adc_bits <= 32:
            raise InputError(f"key 'adc_bits': wanted 1 to 32, got {self.adc_bits}")
        if self.q is not None and self.output_frequency is not None and self.adc_rate is not None:
            # One output at a carrier is digitised behind an ideal mixer; these two are as they are.
            if self.output_frequency >= 0.5 * self.adc_rate:
                raise InputError(
                    f"key 'output_frequency': wanted less than half of 'adc_rate', "
                    f"{0.5 * self.adc_rate:g} Hz, since 'i' and 'q' are digitised at it, got "
                    f"{self.output_frequency:g} Hz"
                )


READOUT_TABLES = {
    "resonator": ResonatorTable,
    "sensor": SensorTable,
    "readout": ReadoutTable,
}
