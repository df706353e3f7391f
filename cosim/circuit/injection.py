"""Noise at the output of switched and modulated circuits: currents injected at every device.

Around an operating point that moves with time a circuit converts noise from one frequency to
another, and ngspice's `.noise` knows nothing of that. So the deck runs once without noise, and once
per seed with a noise current beside every device; the difference of the two at a probe is the
noise. Both runs have the same time points, since error control never moves a step.

What is added to the deck, measured on ngspice 39:

    adevicenoise1 %id([(x1.a 0) (x1.b x1.c)]) devicenoise1
    .model devicenoise1 filesource(file="{scratch}/devicenoise1.txt" ...)

The ports are current sources between two nets each, also inner ones of subcircuits, and add no
unknown to the circuit: with currents of zero the vectors are those of the deck alone, bit by bit.
ngspice reads at most 511 characters of a row and what follows them as another row, without a word;
so a file has at most 40 columns, of 7 digits and a sign each.
"""

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from cosim.circuit.bias import CleanRun
from cosim.circuit.cards import number_text
from cosim.circuit.deck import DataFile, Deck, SourceLine, unique
from cosim.circuit.generators import (
    NoiseCurrent,
    left_out,
    noise_currents,
    noise_grid,
    noise_samples,
)
from cosim.circuit.hierarchy import structure_of
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.probe import evaluate_probe
from cosim.circuit.simulator import simulate
from cosim.errors import ConvergenceError, InputError
from cosim.waveform import FloatArray

_COLUMNS = 40  # 23 characters of the time and 9 for each value stay below 511.
_DIGITS = 7
_LARGEST = 10**_DIGITS - 1
_HOLD = 1e6  # s; behind its last row a file source gives 0, and so the last row stands far off.


@dataclass(frozen=True, slots=True)
class InjectedNoise:
    """The noise of one seed at the probes.

    Parameters
    ----------
    time : ndarray, shape (n,)
        The time points of the runs in s.
    samples : dict of str to ndarray, each of shape (n,)
        Probe as written -> noise in V or A. From t = 0 on it builds up as fast as the circuit
        forgets; what is slower than the run is in it only as far as 1/f noise is given.
    seed : int
        The seed.
    devices : tuple of str
        Names in ngspice of the devices that made noise.
    left_out : tuple of str
        What makes noise in the deck and did not in this run, with the reason.
    lowest_frequency, highest_frequency : float
        Band of the noise currents in Hz: one over the run's time, below which white noise is not
        told from a constant, and the end of the band.
    wall_time : float
        What the simulator took for the noisy run, in s.
    """

    time: FloatArray = field(metadata={"unit": "s", "axes": ("time",)})
    samples: dict[str, FloatArray] = field(metadata={"unit": "V or A", "axes": ("time",)})
    seed: int
    devices: tuple[str, ...]
    left_out: tuple[str, ...]
    lowest_frequency: float = field(metadata={"unit": "Hz"})
    highest_frequency: float = field(metadata={"unit": "Hz"})
    wall_time: float = field(metadata={"unit": "s"})


def device_noise(
    clean: CleanRun,
    seed: int,
    settings: NoiseSettings | None = None,
    *,
    devices: Collection[str] | None = None,
) -> InjectedNoise:
    """Simulate the noise of a deck's devices at the probes of a clean run.

    Measured on a modulator of 52 MOSFETs and 12 resistors, 32000 time points, a seed takes 1.45
    times as long as the deck alone, of which 1.2 are ngspice's.

    Parameters
    ----------
    clean : CleanRun
        From `clean_run`, which serves any number of seeds.
    seed : int
        Not negative; equal seeds give equal noise.
    settings : NoiseSettings, optional
        Noise temperatures in K, band in Hz and the rest.
    devices : collection of str, optional
        Names in ngspice of the devices that make noise, all if left out. A device alone makes the
        noise that it makes among all, so that of small noise the samples add up.

    Returns
    -------
    InjectedNoise

    Raises
    ------
    InputError, UnknownNameError
        If the settings, the seed or the devices are wrong.
    ConvergenceError
        If the noisy run has other time points than the clean one: the noise is too large.
    DeckError, SimulationError, MissingDependencyError
        As `simulate`.
    """
    settings = settings or NoiseSettings()
    currents = noise_currents(clean, settings, devices)
    samples = noise_samples(clean, settings, currents, seed)
    values = injected_difference(clean, currents, samples)
    request = clean.request
    return InjectedNoise(
        time=clean.result.time,
        samples={text: noise / settings.scale for text, noise in values.samples.items()},
        seed=seed,
        devices=unique(current.device for current in currents),
        left_out=left_out(clean, settings),
        lowest_frequency=1 / request.stop,
        highest_frequency=settings.bandwidth or 1 / (2 * request.step),
        wall_time=values.wall_time,
    )


@dataclass(frozen=True, slots=True)
class Difference:
    """A run with currents minus the clean run.

    Parameters
    ----------
    samples : dict of str to ndarray, each of shape (n,)
        Probe as written -> difference in V or A.
    wall_time : float
        What the simulator took, in s.
    """

    samples: dict[str, FloatArray] = field(metadata={"unit": "V or A", "axes": ("time",)})
    wall_time: float = field(metadata={"unit": "s"})


def injected_difference(
    clean: CleanRun, currents: Sequence[NoiseCurrent], samples: FloatArray
) -> Difference:
    """Run a deck with currents beside its devices and take the clean run away.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    currents : sequence of NoiseCurrent
        Between which nets they flow.
    samples : ndarray, shape (currents, n)
        Their values in A on the grid of `noise_grid`.

    Returns
    -------
    Difference

    Raises
    ------
    ConvergenceError
        If the run has other time points than the clean one.
    DeckError, SimulationError, MissingDependencyError
        As `simulate`.
    """
    ends = [current.nodes for current in currents]
    deck = with_currents(clean.deck, ends, noise_grid(clean), samples)
    names = tuple(dict.fromkeys(name for probe in clean.probes for _, name in probe.terms))
    noisy = simulate(deck, replace(clean.request, saves=names))
    if not np.array_equal(noisy.time, clean.result.time):
        raise ConvergenceError(
            f"with noise ngspice took {noisy.time.size} time points, without it "
            f"{clean.result.time.size}: its steps failed at other times, and the difference of the "
            "two runs is not the noise alone",
            hint="Take a smaller scale of the noise or a shorter step, or give switched nodes the "
            "capacitance that they have.",
        )
    before = clean.result.vectors
    return Difference(
        {
            probe.text: evaluate_probe(probe, noisy.vectors) - evaluate_probe(probe, before)
            for probe in clean.probes
        },
        noisy.wall_time,
    )


def with_currents(
    deck: Deck, nodes: Sequence[tuple[str, str]], times: FloatArray, samples: FloatArray
) -> Deck:
    """Let currents flow between nets of a deck.

    Parameters
    ----------
    deck : Deck
        The deck.
    nodes : sequence of (str, str)
        Nets as ngspice has them; a positive current leaves the first through the source and
        enters the second. A pair of one and the same net carries nothing.
    times : ndarray, shape (n,)
        In s, rising from 0.
    samples : ndarray, shape (len(nodes), n)
        Currents in A, linear between the times and constant behind them. They reach the simulator
        with an error of 5e-8 of the largest value of each.

    Returns
    -------
    Deck

    Raises
    ------
    InputError
        If the shapes do not fit, the times do not rise from 0, or a value is not finite.
    """
    if samples.shape != (len(nodes), times.size):
        raise InputError(
            f"{len(nodes)} currents at {times.size} times need samples of that shape, got "
            f"{samples.shape}"
        )
    if times.size < 2 or times[0] != 0.0 or not (np.diff(times) > 0).all():
        raise InputError("the times of injected currents must rise from 0 s, two at the least")
    if not np.isfinite(samples).all():
        raise InputError("an injected current is not finite")
    flowing = [place for place, (first, second) in enumerate(nodes) if first != second]
    root = structure_of(deck.lines).root
    taken = {file.name for file in deck.data_files}
    lines: list[SourceLine] = []
    data: list[DataFile] = []
    number = 0
    for start in range(0, len(flowing), _COLUMNS):
        part = flowing[start : start + _COLUMNS]
        number += 1
        while (
            f"devicenoise{number}" in root.models
            or f"adevicenoise{number}" in root.elements
            or f"devicenoise{number}.txt" in taken
        ):
            number += 1
        content, scales = _rows(times, samples[part])
        ports = " ".join(f"({nodes[place][0]} {nodes[place][1]})" for place in part)
        model = f"devicenoise{number}"
        zeros = " ".join("0" for _ in part)
        factors = " ".join(number_text(scale) for scale in scales)
        texts = (
            f"a{model} %id([{ports}]) {model}",
            f'.model {model} filesource(file="{{scratch}}/{model}.txt" timeoffset=0 timescale=1 '
            f"timerelative=false amploffset=[{zeros}] amplscale=[{factors}] amplstep=false)",
        )
        lines += [SourceLine(text, "", 0) for text in texts]
        data.append(DataFile("", f"{model}.txt", content, ""))
    return replace(deck, lines=(*deck.lines, *lines), data_files=(*deck.data_files, *data))


def _rows(times: FloatArray, samples: FloatArray) -> tuple[bytes, list[float]]:
    """Write times and whole numbers in columns; give the current that each number counts in.

    Columns of one width are filled digit by digit for all rows at once: writing each number by
    itself takes longer than the simulator's run.
    """
    peaks = np.abs(samples).max(axis=1)
    scales = np.where(peaks > 0, peaks, 1.0) / _LARGEST
    counts = np.rint(samples.T / scales).astype(np.int32)
    counts = np.vstack([counts, counts[-1:]])
    stamps = [*times.tolist(), max(_HOLD, 2.0 * float(times[-1]))]
    text = "".join(f"{stamp:.16e}".ljust(23) for stamp in stamps).encode()
    width = _DIGITS + 2
    shape = (len(stamps), 23 + width * len(samples) + 1)
    table: npt.NDArray[np.uint8] = np.full(shape, ord(" "), np.uint8)
    table[:, :23] = np.frombuffer(text, np.uint8).reshape(len(stamps), 23)
    left = np.abs(counts)
    for digit in range(_DIGITS):
        left, rest = np.divmod(left, 10)
        table[:, 23 + width - 1 - digit : -1 : width] = rest + ord("0")
    table[:, 24:-1:width] = np.where(counts < 0, ord("-"), ord("0"))
    table[:, -1] = ord("\n")
    return table.tobytes(), scales.tolist()
