"""A deck whose sources stand still, for the noise around one operating point."""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.circuit.analysis import TransientRequest
from cosim.circuit.bias import CleanRun, clean_run
from cosim.circuit.cards import number_text
from cosim.circuit.copies import Edit, edited_lines
from cosim.circuit.deck import DataFile, Deck, SourceLine
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.lookup import own_nodes
from cosim.circuit.noise import NoiseRequest, NoiseResult, simulate_noise
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.circuit.noise_temperature import at_noise_temperatures
from cosim.circuit.probe import Probe
from cosim.circuit.scope import Scope, element_of
from cosim.circuit.stationarity import bias_of
from cosim.errors import ProbeError
from cosim.waveform import FloatArray

_STILL = 1e-9  # of its greatest magnitude; a source that moves by less, by rounding, stands
_HOLD = 1e6  # s; the last row of a file that a source reads
_STIMULUS = re.compile(r"stimulus\d+\.txt")
_STEPS = 4  # of the run that tells the bias of the sources at a standstill
_POINTS_PER_DECADE = 1000  # steps of 0.23 %
_LOWEST, _HIGHEST = 0.01, 1.99  # of the carrier: both of its sides


@dataclass(frozen=True, slots=True)
class RestingNoise:
    """The noise of a circuit whose sources stand still.

    Parameters
    ----------
    noise : NoiseResult
        Of the probe, around a carrier, by device, at the noise temperatures.
    shift : dict of str to float
        Device in ngspice's name -> by how much its bias there differs from the run's, over the
        greater of the two.
    """

    noise: NoiseResult
    shift: Mapping[str, float] = field(metadata={"unit": "1"})


def resting_noise(
    clean: CleanRun,
    probe: Probe,
    carrier_frequency: float,
    span: tuple[float, float],
    temperatures: NoiseTemperatures,
    band: tuple[float, float] | None = None,
) -> RestingNoise:
    """Analyse the noise of a deck whose sources stand at the values of a stretch of its run.

    Parameters
    ----------
    clean : CleanRun
        The run.
    probe : Probe
        Of voltages.
    carrier_frequency : float
        In Hz; the grid reaches to nearly zero and to nearly twice of it, in steps of 0.23 %.
        0 where a band is given.
    span : tuple of two floats
        The stretch in s, over which each source is averaged; an instant where both are equal.
    temperatures : NoiseTemperatures
        In K.
    band : tuple of two floats or None
        Ends of the grid in Hz in place of those around a carrier.

    Returns
    -------
    RestingNoise

    Raises
    ------
    ProbeError
        If the probe is a current.
    DeckError, SimulationError
        As `cosim.circuit.noise.simulate_noise`.
    """
    if probe.unit != "V":
        raise ProbeError(f"the noise around an operating point is of voltages, not of {probe.text}")
    still = deck_at_rest(clean, span)
    if band is None:
        band = _LOWEST * carrier_frequency, _HIGHEST * carrier_frequency
    noise = small_signal_noise(clean, still, probe, band, _POINTS_PER_DECADE)
    shift = _shift(clean, resting_run(clean, still), span)
    return RestingNoise(at_noise_temperatures(noise, temperatures), shift)


def small_signal_noise(
    clean: CleanRun, still: Deck, probe: Probe, band: tuple[float, float], points_per_decade: int
) -> NoiseResult:
    """Analyse the noise of a deck around its operating point, at the temperature of a run.

    Parameters
    ----------
    clean : CleanRun
        The run.
    still : Deck
        From `deck_at_rest`, or with elements added to it.
    probe : Probe
        Of voltages.
    band : tuple of two floats
        Frequencies in Hz.
    points_per_decade : int
        Of the grid.

    Returns
    -------
    NoiseResult
        By device.

    Raises
    ------
    DeckError, SimulationError
        As `cosim.circuit.noise.simulate_noise`.
    """
    deck, output, source = _with_output(still, probe)
    request = NoiseRequest(
        output,
        source,
        *band,
        points_per_decade,
        temperature=clean.request.temperature,
        seed=clean.request.seed,
        time_limit=clean.request.time_limit,
        by_device=True,
    )
    return simulate_noise(deck, request)


def resting_run(clean: CleanRun, still: Deck) -> CleanRun:
    """Run a few steps of a deck whose sources stand still, for the bias of its devices.

    Parameters
    ----------
    clean : CleanRun
        The run from which it was made.
    still : Deck
        From `deck_at_rest`.

    Returns
    -------
    CleanRun
        At the operating point.

    Raises
    ------
    DeckError, SimulationError
        As `cosim.circuit.bias.clean_run`.
    """
    step = clean.request.step
    request: TransientRequest = replace(
        clean.request, stop=_STEPS * step, initial="op", output_step=None, saves=()
    )
    return clean_run(still, request, [probe.text for probe in clean.probes])


def deck_at_rest(clean: CleanRun, span: tuple[float, float]) -> Deck:
    """Let the sources of a deck stand at their values in a stretch of its run.

    Parameters
    ----------
    clean : CleanRun
        The run.
    span : tuple of two floats
        Over which each source is averaged, in s; an instant where both are equal.

    Returns
    -------
    Deck
        Voltage and current sources that move, and stimuli, are constants.
    """
    time = clean.result.time
    edits: dict[str, Edit] = {}
    for source in clean.sources:
        values = clean.value(source)
        if float(np.ptp(values)) > _STILL * float(np.max(np.abs(values))):
            edits[source.path] = _constant(mean_of(time, values, span))
    files = tuple(_still_file(file, time, span) for file in clean.deck.data_files)
    lines = edited_lines(clean.deck, edits) if edits else clean.deck.lines
    return replace(clean.deck, lines=lines, data_files=files)


def mean_of(time: FloatArray, values: FloatArray, span: tuple[float, float]) -> float:
    """Average a quantity over a stretch of a run.

    Parameters
    ----------
    time, values : ndarray, shape (n,)
        Times in s and the quantity, linear between them.
    span : tuple of two floats
        In s; an instant where both are equal.

    Returns
    -------
    float
    """
    start, stop = span
    if start == stop:
        return float(np.interp(start, time, values))
    inside = time[(time > start) & (time < stop)]
    grid = np.concatenate([[start], inside, [stop]])
    return float(np.trapezoid(np.interp(grid, time, values), grid) / (stop - start))


def _constant(value: float) -> Edit:
    def edit(structure: Structure, scope: Scope, line: SourceLine) -> tuple[SourceLine, ...]:
        element = element_of(scope, line.text)
        text = f"{element.name} {' '.join(element.nodes[:2])} dc {number_text(value)}"
        return (SourceLine(text, line.file, line.line),)

    return edit


def _still_file(file: DataFile, time: FloatArray, span: tuple[float, float]) -> DataFile:
    """Let the samples of a stimulus stand still; the operating point takes their value at t = 0."""
    if not _STIMULUS.fullmatch(file.name):
        return file
    at, values = np.array(file.content.split(), dtype=np.float64).reshape(-1, 2).T
    value = number_text(mean_of(time, np.interp(time, at, values), span))
    return replace(file, content=f"0 {value}\n{_HOLD:g} {value}\n".encode())


def _with_output(deck: Deck, probe: Probe) -> tuple[Deck, str, str]:
    """Add a silent source for `.noise` to refer to, and a node that has the probe's voltage."""
    structure = structure_of(deck.lines)
    taken = own_nodes(structure, structure.root) | structure.root.elements.keys()
    number = 1
    while any(name.endswith(f"standstill{number}") for name in taken):
        number += 1
    end = f"standstill{number}"
    texts = [f"v{end} in{end} 0 dc 0 ac 1"]
    below = "0"
    for place, (weight, name) in enumerate(probe.terms):
        node = f"o{place}{end}"
        texts.append(f"e{place}{end} {node} {below} {name[2:-1]} 0 {number_text(weight)}")
        below = node
    added = tuple(SourceLine(text, "", 0) for text in texts)
    return replace(deck, lines=(*deck.lines, *added)), f"v({below})", f"v{end}"


def _shift(clean: CleanRun, resting: CleanRun, span: tuple[float, float]) -> dict[str, float]:
    found: dict[str, float] = {}
    for device in clean.inventory.devices:
        if device.kind != "resistor":
            moving = mean_of(clean.result.time, np.abs(bias_of(clean, device)), span)
            standing = float(np.abs(bias_of(resting, device)[0]))
            greatest = max(moving, standing)
            found[device.name] = abs(moving - standing) / greatest if greatest > 0.0 else 0.0
    return found
