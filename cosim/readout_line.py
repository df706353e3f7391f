"""The way from the resonator to the deck: attenuators, amplifiers, and two-ports of files."""

import hashlib
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from cosim.circuit.netlist import DeckFile
from cosim.dsp.line import envelope_at_far_end, line_delay, transmission_at
from cosim.dsp.noise.thermal import Attenuator
from cosim.formats.touchstone import LineResponse, Pair, read_line
from cosim.outgoing import Amplifier, OutputLine, emf_envelope
from cosim.readout_schema import ReadoutTable
from cosim.units import format_quantity
from cosim.waveform import ComplexArray, FloatArray

# Of the power: what may come back from an end of a two-port before it is said.
UNMATCHED = 0.1
# In dB: what a two-port may differ by over a record's band, in which its noise is taken for white.
UNEVEN = 1.0


@dataclass(frozen=True, slots=True)
class TwoPort:
    """A two-port of a file between resonator and deck.

    Parameters
    ----------
    stage : Attenuator or Amplifier
        What it is at the carrier: loss or gain, and noise.
    carrier_frequency : float
        In Hz.
    response : LineResponse
        Over frequency.
    file : DeckFile
        Where it comes from.
    """

    stage: Attenuator | Amplifier
    carrier_frequency: float = field(metadata={"unit": "Hz"})
    response: LineResponse
    file: DeckFile

    @property
    def relative(self) -> ComplexArray:
        """Transmission over the amplitude that `stage` passes at the carrier, shape (n,)."""
        if isinstance(self.stage, Amplifier):
            passed = 10.0 ** (self.stage.gain / 20.0)
        else:
            passed = 1.0 / math.sqrt(self.stage.power_ratio)
        return np.asarray(self.response.transmission / passed)


@dataclass(frozen=True, slots=True)
class WayOut:
    """All that lies between the resonator and the deck's source.

    Parameters
    ----------
    line : OutputLine
        As it is at the carrier.
    two_ports : tuple of TwoPort
        Those of its stages that a file describes.
    """

    line: OutputLine
    two_ports: tuple[TwoPort, ...] = ()

    @property
    def files(self) -> tuple[DeckFile, ...]:
        """The files of the two-ports."""
        return tuple(one.file for one in self.two_ports)

    def notices(self, half_band: float) -> tuple[str, ...]:
        """What the reader must know; `half_band` in Hz is that of what is read of the signal."""
        return tuple(text for one in self.two_ports for text in _notices(one, half_band))


def way_out(table: ReadoutTable, frequency: float, folder: str | Path = ".") -> WayOut:
    """Give the way from the resonator to the deck.

    From the resonator on: the two-port `line`, the attenuators `stages`, and an amplifier, given by
    gain and noise temperature, or by the file `amplifier` and its noise temperature.

    Parameters
    ----------
    table : ReadoutTable
        The table [readout].
    frequency : float
        Of the signal in Hz; files must cover it.
    folder : path
        That files are relative to.

    Returns
    -------
    WayOut

    Raises
    ------
    WaveformError, InputError
        If a file cannot be used.
    MissingDependencyError
        If the extra `rf` is not installed.

    Notes
    -----
    A passive two-port at one temperature T sends (1 - |S21|**2 - |S22|**2) N(T) out of its far end,
    N = (h f/2) coth(h f/2 k T): H. Bosma, "On the theory of linear noisy systems", Philips Res.
    Rep. Suppl. 10 (1967). What its far end reflects of that which comes back, |S22|**2, is taken to
    have the same temperature, so that (1 - |S21|**2) N(T) remains, a matched attenuator's.
    """
    two_ports: list[TwoPort] = []
    stages: list[Attenuator | Amplifier] = []
    if table.line is not None:
        assert table.line_temperature is not None  # The table insists on both.
        response, file = _read(table.line, table.line_ports, table, frequency, folder, True)
        # Rounding or calibration may pass what is free of loss by a little.
        ratio = max(1.0, 1.0 / _power(response, frequency))
        two_ports.append(
            TwoPort(Attenuator(ratio, table.line_temperature), frequency, response, file)
        )
        stages.append(two_ports[-1].stage)
    stages += [Attenuator(10.0 ** (decibels / 10.0), kelvin) for decibels, kelvin in table.stages]
    if table.amplifier is not None:
        response, file = _read(
            table.amplifier, table.amplifier_ports, table, frequency, folder, False
        )
        gain = 10.0 * math.log10(_power(response, frequency))
        stage = Amplifier(gain, table.noise_temperature)
        two_ports.append(TwoPort(stage, frequency, response, file))
        stages.append(stage)
    elif table.gain != 0.0 or table.noise_temperature != 0.0:
        stages.append(Amplifier(table.gain, table.noise_temperature))
    return WayOut(OutputLine(tuple(stages), impedance=table.impedance), tuple(two_ports))


def emf_at_source(
    field_out: ComplexArray, step: float, frequency: float, way: WayOut
) -> ComplexArray:
    """Turn the field that leaves the resonator into the EMF of the deck's source.

    Parameters
    ----------
    field_out : ndarray of complex, shape (n,)
        In sqrt(photon/s), of exp(-i 2 pi f t).
    step : float
        Sample interval in s.
    frequency : float
        Of the carrier in Hz.
    way : WayOut
        What lies between.

    Returns
    -------
    ndarray of complex, shape (n,)
        I + jQ of the EMF in V, peak; delayed, turned and filtered by the two-ports of files.

    Raises
    ------
    WaveformError
        If a file's response is not causal.
    """
    emf = emf_envelope(field_out, frequency, way.line)
    for one in way.two_ports:
        emf = envelope_at_far_end(emf, step, frequency, one.response.frequency, one.relative)
    return emf


def _read(
    name: str,
    ports: Pair | tuple[Pair, Pair],
    table: ReadoutTable,
    frequency: float,
    folder: str | Path,
    passive: bool,
) -> tuple[LineResponse, DeckFile]:
    path = Path(folder) / Path(name).expanduser()
    response = read_line(
        path,
        ports=ports,
        impedance=table.impedance,
        carrier_frequency=frequency,
        passive=passive,
    )
    return response, DeckFile(str(path), "", hashlib.sha256(path.read_bytes()).hexdigest())


def _power(response: LineResponse, frequency: float) -> float:
    """Power out over power in at a frequency; next to nothing where nothing passes."""
    at = transmission_at(response.frequency, response.transmission, np.array([frequency]))
    return max(float(np.abs(at[0]) ** 2), 1e-30)


def _at(response: LineResponse, values: ComplexArray, frequencies: Sequence[float]) -> FloatArray:
    return np.asarray(np.interp(frequencies, response.frequency, np.abs(values)))


def _notices(one: TwoPort, half_band: float) -> tuple[str, ...]:
    response, path = one.response, one.file.path
    delay = line_delay(response.frequency, response.transmission)
    found = [
        f"{path} delays by {format_quantity(delay, 's')}: the window is meant behind it",
        *response.warnings,
    ]
    for end, values in (("near", response.near_reflection), ("far", response.far_reflection)):
        back = float(_at(response, values, [one.carrier_frequency])[0])
        if back**2 > UNMATCHED:
            found.append(
                f"{path} sends {back**2:.0%} of the power back at its {end} end, and its neighbour "
                "there is taken for matched: what travels to and fro between the two is not counted"
            )
    band = one.carrier_frequency + np.linspace(-half_band, half_band, 41)
    inside = band[(band >= response.frequency[0]) & (band <= response.frequency[-1])]
    level = 20.0 * np.log10(np.maximum(_at(response, response.transmission, list(inside)), 1e-15))
    if np.ptp(level) > UNEVEN:
        found.append(
            f"{path}: its transmission varies by {np.ptp(level):.2g} dB within "
            f"{format_quantity(half_band, 'Hz')} of the carrier; the signal is filtered by it, and "
            "the noise that arrives is taken for white, as at the carrier"
        )
    return tuple(found)
