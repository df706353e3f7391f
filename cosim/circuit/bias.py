"""The clean run of a deck that saves the bias of everything that makes noise."""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.deck import Deck, unique
from cosim.circuit.flicker import card_flicker
from cosim.circuit.inventory import (
    IndependentSource,
    Inventory,
    NoisyDevice,
    independent_sources,
    noisy_devices,
)
from cosim.circuit.noise_parts import device_temperature
from cosim.circuit.probe import Probe, parse_probe
from cosim.circuit.simulator import simulate
from cosim.waveform import FloatArray

# Measured: the currents of junctions that ngspice saves hold those of their capacitances, which
# make no noise; "capcur", "cqbe" and "cqbc" give these. All count the multiplier m; the "r" of a
# resistor counts neither that nor a temperature coefficient.
_SAVED = {
    "mos": ("gm", "gds", "id"),
    "jfet": ("gm", "gds", "id"),
    "diode": ("id", "capcur"),
    "bipolar": ("ic", "ib", "cqbe", "cqbc"),
    "resistor": ("i", "r", "m"),
}
_FOR_FLICKER = ("w", "l", "m")  # of a MOS transistor
_LEAST_VOLTAGE = 1e-6  # V; over less a resistor's current is no measure of its conductance.


@dataclass(frozen=True, slots=True)
class CleanRun:
    """A run without noise, and what is known of each device that makes noise.

    Parameters
    ----------
    deck : Deck
        The deck.
    request : TransientRequest
        The request of the run.
    probes : tuple of Probe
        What is looked at.
    result : TransientResult
        Times of shape (n,) in s from 0 on, and all vectors.
    inventory : Inventory
        The devices, and what is left out.
    device_temperature : float
        Temperature of the devices in K.
    sources : tuple of IndependentSource
        The voltage and current sources, whose values the run has saved.
    """

    deck: Deck
    request: TransientRequest
    probes: tuple[Probe, ...]
    result: TransientResult
    inventory: Inventory
    device_temperature: float = field(metadata={"unit": "K"})
    sources: tuple[IndependentSource, ...] = ()

    def vector(self, device: NoisyDevice, name: str) -> FloatArray:
        """Give a quantity of a device, shape (n,).

        Parameters
        ----------
        device : NoisyDevice
            One of the inventory's.
        name : str
            ngspice's name of the quantity: "gm" in S, "id" in A and the like.

        Returns
        -------
        ndarray, shape (n,)
        """
        return self.result.vectors[f"@{device.name}[{name}]"]

    def value(self, source: IndependentSource) -> FloatArray:
        """Give the value of a source along the run, shape (n,).

        Parameters
        ----------
        source : IndependentSource
            One of the run's.

        Returns
        -------
        ndarray, shape (n,)
            In V or A.
        """
        if source.name[0] == "i":
            return self.result.vectors[source.saves[0]]
        high, low = (self.voltage(node) for node in source.nodes)
        return high - low

    def voltage(self, node: str) -> FloatArray:
        """Give the voltage of a net that the run has saved, shape (n,).

        Parameters
        ----------
        node : str
            As ngspice has it; "0" for ground.

        Returns
        -------
        ndarray, shape (n,)
            In V.
        """
        if node == "0":
            return np.zeros_like(self.result.time)
        return self.result.vectors[f"v({node})"]


def clean_run(deck: Deck, request: TransientRequest, probes: Sequence[str]) -> CleanRun:
    """Run a deck without noise and save the bias of every device that makes some.

    Measured on a modulator of 52 MOSFETs and 12 resistors, its 200 vectors double the run's time:
    each takes 0.3 us at a time point.

    Parameters
    ----------
    deck : Deck
        The deck, with its terminations and parameters.
    request : TransientRequest
        Times in s and the rest; its run is saved from t = 0 on, whatever `start` says.
    probes : sequence of str
        As `parse_probe` reads them, for example "v(out_p) - v(out_n)".

    Returns
    -------
    CleanRun

    Raises
    ------
    DeckError
        Or one of its kinds.
    ProbeError
        If a probe cannot be read.
    InputError
        If the device temperature cannot be told.
    SimulationError
        Or one of its kinds.
    MissingDependencyError
        If ngspice or PySpice is not installed.
    """
    kelvin = device_temperature(deck, request.temperature)
    inventory = noisy_devices(deck)
    parsed = tuple(parse_probe(text) for text in probes)
    saves = [*request.saves, *(name for probe in parsed for _, name in probe.terms)]
    for device in inventory.devices:
        names = _SAVED[device.kind]
        if device.kind == "mos" and card_flicker(deck, device) is not None:
            names += _FOR_FLICKER
        saves += [f"@{device.name}[{name}]" for name in names]
        if device.kind == "resistor":
            saves += [f"v({node})" for node in device.nodes if node != "0"]
    sources = independent_sources(deck)
    saves += [save for source in sources for save in source.saves]
    request = replace(request, start=0.0, saves=unique(save.strip().lower() for save in saves))
    result = simulate(deck, request)
    return CleanRun(deck, request, parsed, result, inventory, kelvin, sources)


def conductance(clean: CleanRun, device: NoisyDevice) -> float:
    """Give the conductance of a resistor as ngspice has it.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    device : NoisyDevice
        A resistor.

    Returns
    -------
    float
        In S: its current over its voltage where that is greatest, with all temperature
        coefficients; where no voltage stands over it, by its resistance and multiplier alone.
    """
    high, low = (clean.voltage(node) for node in device.nodes)
    voltage = high - low
    place = int(np.argmax(np.abs(voltage)))
    if abs(voltage[place]) > _LEAST_VOLTAGE:
        return float(clean.vector(device, "i")[place] / voltage[place])
    return float(clean.vector(device, "m")[-1] / clean.vector(device, "r")[-1])


def junction_currents(clean: CleanRun, device: NoisyDevice) -> dict[str, FloatArray]:
    """Give the currents of a diode or bipolar transistor that cross its junctions.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    device : NoisyDevice
        A diode or bipolar transistor.

    Returns
    -------
    dict of str to ndarray, each of shape (n,)
        "id", or "ic" and "ib", in A, without the currents of capacitances.
    """
    if device.kind == "diode":
        return {"id": clean.vector(device, "id") - clean.vector(device, "capcur")}
    emitter, collector = (clean.vector(device, name) for name in ("cqbe", "cqbc"))
    return {
        "ic": clean.vector(device, "ic") + collector,
        "ib": clean.vector(device, "ib") - emitter - collector,
    }
