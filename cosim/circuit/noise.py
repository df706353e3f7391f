"""Small-signal noise of a deck, by ngspice's `.noise`: the circuit's second kind of analysis."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.circuit.analysis import Tolerances
from cosim.circuit.cards import masked, number_text
from cosim.circuit.client import Answer
from cosim.circuit.deck import Deck, PreparedDeck, shortened
from cosim.circuit.faults import LOG_SHOWN, findings
from cosim.circuit.inventory import device_names
from cosim.circuit.lookup import find_device, find_node
from cosim.circuit.noise_parts import band_power, device_temperature, part_vectors
from cosim.circuit.preparation import Analysis, assembled, own_options
from cosim.circuit.probe import parse_probe
from cosim.circuit.simulator import send
from cosim.circuit.verdict import Extent, check_run
from cosim.errors import ConvergenceError, DeckError, InputError, ProbeError, SimulatorCrashError
from cosim.waveform import FloatArray

_AC = re.compile(r"(?<![\w.])ac(?![\w.])", re.IGNORECASE)
_VECTORS = ("onoise_spectrum", "inoise_spectrum", "onoise_total")
# ngspice divides the output's density by |gain|^2, but by no less than this: measured, a source
# that the output does not answer to gave an input density of 1e20 times that of the output.
_LEAST_GAIN = 1e-20
_ROUNDING = 1e-6  # of a frequency, or of a step: ngspice multiplies its way up the grid
# Measured: a point that passes the stop by less than reltol, or 1e-4, still counts for ngspice.
_MOST_POINTS = 5000  # per decade; their distance is four times that
_SUM = 1e-9  # of the density: what the parts may lack; ngspice adds up the same doubles


@dataclass(frozen=True, slots=True)
class NoiseRequest:
    """A noise analysis around the operating point, on a logarithmic grid.

    The grid is start 10^(k/points_per_decade), k = 0, 1 ... up to the last frequency that does not
    pass `stop`.

    Parameters
    ----------
    output : str
        The output voltage: "v(out)", "v(a,b)" or "v(a) - v(b)", hierarchical names with dots.
    source : str
        The independent source that the input-referred noise is referred to: "v1", "x1.i2". It
        needs an `ac` in the deck, whose size does not matter.
    start_frequency : float
        First frequency in Hz.
    stop_frequency : float
        Last frequency in Hz, at least one step of the grid above the first.
    points_per_decade : int
        Points per factor of ten in frequency, from 1 to 5000.
    temperature : float or None
        Device temperature in K, at which resistors make their noise too. None: the deck's own, or
        300.15 K.
    seed : int
        Seed of ngspice's own random functions (agauss and the like), from 1 to 2**31 - 1.
    time_limit : float
        Wall-clock limit of the run in s.
    memory_limit : int
        Limit of the simulator's address space in bytes.
    by_device : bool
        Whether the density comes by device and kind of contribution too.

    Raises
    ------
    InputError
        If a value is out of its range.
    """

    output: str
    source: str
    start_frequency: float = field(metadata={"unit": "Hz"})
    stop_frequency: float = field(metadata={"unit": "Hz"})
    points_per_decade: int = 20
    temperature: float | None = field(default=None, metadata={"unit": "K"})
    seed: int = 1
    time_limit: float = field(default=600.0, metadata={"unit": "s"})
    memory_limit: int = field(default=8 * 2**30, metadata={"unit": "byte"})
    by_device: bool = False

    def __post_init__(self) -> None:
        names = ["start_frequency", "stop_frequency", "time_limit", "memory_limit"]
        for name in names if self.temperature is None else [*names, "temperature"]:
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0):
                raise InputError(
                    f"NoiseRequest.{name} must be a positive finite number, got {value!r}"
                )
        if not 1 <= self.points_per_decade <= _MOST_POINTS:
            raise InputError(
                f"NoiseRequest.points_per_decade must be from 1 to {_MOST_POINTS}, "
                f"got {self.points_per_decade}"
            )
        if self.frequencies.size < 2:
            raise InputError(
                f"NoiseRequest.stop_frequency must be at least one of {self.points_per_decade} "
                f"steps per decade above the start of {self.start_frequency:g} Hz, got "
                f"{self.stop_frequency:g} Hz"
            )
        if not 1 <= self.seed < 2**31:
            raise InputError(f"NoiseRequest.seed must be from 1 to 2147483647, got {self.seed}")

    @property
    def frequencies(self) -> FloatArray:
        """The grid in Hz, shape (n,)."""
        decades = math.log10(self.stop_frequency / self.start_frequency)
        last = math.floor(decades * self.points_per_decade + _ROUNDING)
        exponents = np.arange(last + 1) / self.points_per_decade
        grid: FloatArray = self.start_frequency * 10.0**exponents
        return grid


@dataclass(frozen=True, slots=True)
class NoiseResult:
    """What a noise analysis gave.

    Parameters
    ----------
    frequency : ndarray, shape (n,)
        The grid in Hz, rising.
    output_density : ndarray, shape (n,)
        One-sided spectral density of the output voltage in V^2/Hz.
    input_density : ndarray, shape (n,)
        The same divided by |gain|^2 from the source: V^2/Hz for a voltage source, A^2/Hz for a
        current source. Infinite where the gain is 1e-10 or less: ngspice tells none smaller.
    total_output : float
        Rms voltage of the output in V, of the band from the first to the last frequency of the
        grid. ngspice integrates the density as a power law from point to point, h = ln(10)/
        points_per_decade apart; of a single pole's power that leaves out h^2/24, 5.5e-4 at 20.
    log : tuple of str
        The simulator's own words, line by line.
    warnings : tuple of str
        Findings that belong on the result: a resistor set to 1 mOhm, gmin stepping and the like.
    deck : tuple of str
        The lines exactly as sent.
    simulator_version : str
        For example "ngspice-39".
    by_device : dict of str to dict of str to ndarray, each of shape (n,)
        Device as ngspice names it ("r1", "m.x1.m1") -> kind of contribution ("thermal", "channel",
        "series", "shot", "flicker") -> density of the output voltage in V^2/Hz; all of them add up
        to `output_density`. Empty unless it was asked for.
    device_temperature : float or None
        At which the devices were simulated, in K; None where the parts were not asked for.
    """

    frequency: FloatArray = field(metadata={"unit": "Hz", "axes": ("frequency",)})
    output_density: FloatArray = field(metadata={"unit": "V^2/Hz", "axes": ("frequency",)})
    input_density: FloatArray = field(metadata={"unit": "V^2/Hz or A^2/Hz", "axes": ("frequency",)})
    total_output: float = field(metadata={"unit": "V"})
    log: tuple[str, ...]
    warnings: tuple[str, ...]
    deck: tuple[str, ...]
    simulator_version: str
    by_device: Mapping[str, Mapping[str, FloatArray]] = field(
        default_factory=dict, metadata={"unit": "V^2/Hz", "axes": ("frequency",)}
    )
    device_temperature: float | None = field(default=None, metadata={"unit": "K"})


def simulate_noise(deck: Deck, request: NoiseRequest) -> NoiseResult:
    """Analyse the noise of a deck around its operating point.

    All noise is that of the simulator's models at the device temperature: 4 k T R of a resistor,
    without quantum terms, and with ngspice's Boltzmann constant, which is 3.5e-7 below the SI
    value. The analysis is the request's own; `.noise` cards of the deck stay out.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : NoiseRequest
        Output, source, frequencies in Hz, temperature in K and limits.

    Returns
    -------
    NoiseResult
        Frequencies of shape (n,) in Hz, densities of shape (n,) in V^2/Hz, the total in V rms.

    Raises
    ------
    ProbeError
        If the output is not a voltage or a difference of two.
    UnknownNameError
        If a node of the output, or the source, does not exist.
    DeckError
        Or one of its kinds, with the author's file and line; also if the source is not an
        independent one with an `ac`.
    SimulationError
        Or one of its kinds: no convergence, crash, time limit, memory limit.
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    prepared = prepare_noise(deck, request)
    answer, version, models = send(prepared, request.time_limit, request.memory_limit)
    result = judge_noise(prepared, request, answer, version, models)
    if not request.by_device:
        return result
    return replace(
        result,
        by_device=_by_device(deck, answer, result),
        device_temperature=device_temperature(deck, request.temperature),
    )


def prepare_noise(deck: Deck, request: NoiseRequest) -> PreparedDeck:
    """Write the list of lines for one noise analysis.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : NoiseRequest
        What is asked for.

    Returns
    -------
    PreparedDeck
        The deck's circuit, with the bridge's title, options, temperature and `.noise`.

    Raises
    ------
    ProbeError, UnknownNameError, DeckError
        As `simulate_noise`, before ngspice runs: it takes a node that does not exist for a quiet
        one.
    """
    # The unit of the spectra depends on it: without the flag they are in V/sqrt(Hz).
    own = own_options(Tolerances()) | {"sqrnoise": ""}
    grid = request.frequencies
    first, last = number_text(float(grid[0])), number_text(float(grid[-1]))
    card = (
        f".noise {_output(deck, request.output)} {_source(deck, request.source)} "
        f"dec {request.points_per_decade:d} {first} {last}"
    )
    keys = {name: name for name in _VECTORS}
    if request.by_device:
        card += " 1"  # Points per summary, without which there are no vectors of devices.
        keys |= {name: name for name in part_vectors(device_names(deck))}
    analysis = Analysis("noise", (card,), keys, "noise", "frequency")
    return assembled(deck, analysis, own, request.temperature, request.seed)


def _output(deck: Deck, text: str) -> str:
    """Give ngspice's way to write the output, once all its nodes are found."""
    probe = parse_probe(text)
    sides = {weight: name for weight, name in probe.terms}
    if probe.unit != "V" or len(sides) < len(probe.terms) or not sides.keys() <= {1.0, -1.0}:
        raise ProbeError(
            f"the noise output '{shortened(text)}' is not a voltage or a difference of two",
            hint="Write for example 'v(out)' or 'v(a,b)'.",
        )
    high, low = (
        find_node(deck, sides[weight][2:-1]) if weight in sides else "0" for weight in (1.0, -1.0)
    )
    if high == low:
        raise ProbeError(f"both sides of the noise output '{shortened(text)}' are node '{high}'")
    return f"v({high})" if low == "0" else f"v({high},{low})"


def _source(deck: Deck, name: str) -> str:
    """Give ngspice's name of the source, once it is seen to be one that ngspice takes."""
    device = find_device(deck, name)
    line = next(line for line in deck.lines if line.text == device.text)
    fault = ""
    if device.letter not in "vi":
        fault = "is no independent source"
    elif not _AC.search(masked(line.text).split(maxsplit=3)[-1]):
        fault = "has no ac value, without which ngspice computes no gain"
    if fault:
        raise DeckError(
            f"the noise source '{shortened(name)}' {fault}",
            hint="Name a voltage or current source, and write 'ac 1' behind its value; the size "
            "does not matter.",
            file=line.file,
            line=line.line,
        )
    return device.name


def judge_noise(
    prepared: PreparedDeck, request: NoiseRequest, answer: Answer, version: str, models: bool
) -> NoiseResult:
    """Turn the host's answer into a result, or raise what went wrong.

    Parameters
    ----------
    prepared, request, answer, version, models
        As in `cosim.circuit.verdict.judge`.

    Returns
    -------
    NoiseResult
        Only if the whole grid is there, with all its densities finite.

    Raises
    ------
    SimulationError, DeckError, MissingDependencyError
        As `cosim.circuit.verdict.judge`.
    """
    wanted = request.frequencies
    extent = Extent(
        "noise analysis",
        request.time_limit,
        request.memory_limit,
        wanted.size,
        "",
        "take a narrower band or fewer points",
        "take fewer points",
    )
    log = check_run(prepared, extent, answer, models)
    tail = log[-LOG_SHOWN:]
    frequency = answer.vectors["frequency"]
    if frequency.shape != wanted.shape or not np.allclose(frequency, wanted, _ROUNDING, 0.0):
        raise SimulatorCrashError(
            f"ngspice gave {frequency.size} frequencies of {wanted.size} from {wanted[0]:g} Hz to "
            f"{wanted[-1]:g} Hz, and did not say why",
            log=tail,
        )
    for name, size in zip(_VECTORS, (wanted.size, wanted.size, 1), strict=True):
        values = answer.vectors.get(name)
        if values is None or values.size != size:
            found = 0 if values is None else values.size
            raise SimulatorCrashError(
                f"ngspice gave {found} values of {name}, not {size}", log=tail
            )
        if name != "onoise_total" and not np.isfinite(values).all():
            raise ConvergenceError(f"{name} is not finite", log=tail)
    output, referred, total = (answer.vectors[name] for name in _VECTORS)
    # Measured: where a density is steep, as at a notch, the power law overflows inside ngspice.
    power = float(total[0]) if np.isfinite(total[0]) else band_power(frequency, output)
    # Where both are zero nothing makes noise, and zero is right whatever the gain.
    deaf = (referred * _LEAST_GAIN * (1 + _ROUNDING) >= output) & (output > 0)
    return NoiseResult(
        frequency=frequency,
        output_density=output,
        input_density=np.where(deaf, np.inf, referred),
        total_output=math.sqrt(power),
        log=log,
        warnings=(*prepared.notices, *findings(prepared, answer.log)),
        deck=prepared.lines,
        simulator_version=version,
    )


def _by_device(deck: Deck, answer: Answer, result: NoiseResult) -> dict[str, dict[str, FloatArray]]:
    """Collect the densities of each device, and see that they are the whole."""
    found: dict[str, dict[str, FloatArray]] = {}
    total = np.zeros_like(result.output_density)
    for vector, (device, part) in part_vectors(device_names(deck)).items():
        density = answer.vectors.get(vector)
        if density is not None:
            parts = found.setdefault(device, {})
            parts[part] = parts.get(part, 0.0) + density
            total += density
    if not np.allclose(total, result.output_density, _SUM, 0.0):
        asked = part_vectors(device_names(deck))
        assert answer.done is not None
        names = [name for name in answer.done["available"] if name.startswith("onoise")]
        unknown = [name for name in names if name not in asked and "total" not in name]
        raise SimulatorCrashError(
            "the noise of the devices does not add up to that of the output; ngspice also gave "
            f"{shortened(', '.join(unknown))}",
            log=result.log[-LOG_SHOWN:],
        )
    return found
