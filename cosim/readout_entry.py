"""How noise enters the netlist of a readout: in place of that of the resistor behind the source."""

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from cosim.circuit.bias import CleanRun, conductance
from cosim.circuit.generators import NoiseCurrent, noise_currents
from cosim.circuit.inventory import NoisyDevice, independent_sources
from cosim.circuit.noise_settings import NoiseSettings
from cosim.errors import TestbenchError
from cosim.outgoing import ArrivingNoise
from cosim.readout_output import ReadoutPlan
from cosim.readout_schema import ReadoutTable
from cosim.testbench import ReadoutBench
from cosim.voltage_noises import NetlistNoise


@dataclass(frozen=True, slots=True)
class NoisyInput:
    """Where the noise that arrives enters the netlist.

    Parameters
    ----------
    sources : tuple of str
        The deck's sources.
    emf_density : float
        One-sided density of the EMF of each in V^2/Hz.
    frequency : float
        At which the signal enters in Hz; 0 as a pair in baseband.
    """

    sources: tuple[str, ...]
    emf_density: float = field(metadata={"unit": "V^2/Hz"})
    frequency: float = field(metadata={"unit": "Hz"})


def readout_noise_tables(bench: ReadoutBench) -> list[NetlistNoise]:
    """Give the table [[noise]] of a readout.

    Parameters
    ----------
    bench : ReadoutBench
        The testbench.

    Returns
    -------
    list of NetlistNoise
        One, or none.

    Raises
    ------
    TestbenchError
        If there are more, or of another kind.
    """
    tables = [one for one in bench.noise if isinstance(one, NetlistNoise)]
    if len(tables) != len(bench.noise) or len(tables) > 1:
        raise TestbenchError(
            f"{bench.source or 'the testbench'}: a readout takes one table [[noise]], with "
            'acts_on = "probe" and from = "netlist"; what arrives with the signal is said in '
            "[readout]"
        )
    return tables


def noisy_input(arriving: ArrivingNoise, table: ReadoutTable) -> NoisyInput:
    """Say how what arrives enters the netlist.

    Parameters
    ----------
    arriving : ArrivingNoise
        At the signal's frequency.
    table : ReadoutTable
        With the sources.

    Returns
    -------
    NoisyInput
    """
    # The EMF's one-sided density; the two sources of a baseband pair have twice that, since both
    # sides of the carrier fall on the same frequency.
    density = float(arriving.emf_density[0]) / (1.0 if table.signal == "baseband" else 2.0)
    sources = tuple(name for name in (table.source, table.source_q) if name is not None)
    frequency = float(arriving.frequencies[0])
    if table.signal == "baseband":
        frequency = 0.0
    elif table.intermediate_frequency is not None:
        frequency = table.intermediate_frequency
    return NoisyInput(sources, density, frequency)


def resistors_behind(
    plan: ReadoutPlan, entry: NoisyInput, clean: CleanRun, table: ReadoutTable
) -> dict[str, float]:
    """Find the resistors behind the sources, and the current that stands for what arrives there.

    Parameters
    ----------
    plan : ReadoutPlan
        With the deck.
    entry : NoisyInput
        The sources.
    clean : CleanRun
        Any run of it.
    table : ReadoutTable
        With the impedance.

    Returns
    -------
    dict of str to float
        Resistor in ngspice's name -> one-sided density in A^2/Hz.

    Raises
    ------
    TestbenchError
        If a source has not one resistor of the impedance behind it.
    """
    nets = {source.path: source.nodes for source in independent_sources(plan.deck)}
    found = {}
    for name in entry.sources:
        ends = {net for net in nets.get(name.lower(), ()) if net != "0"}
        devices = [one for one in clean.inventory.devices if _is_behind(one, ends)]
        if len(devices) != 1:
            raise TestbenchError(
                f"table [readout]: wanted one resistor behind the source '{name}', whose noise is "
                f"that of the line, found {len(devices)}",
                hint=f"let the deck have one of {table.impedance:g} ohm from the source to the "
                "input of the circuit",
            )
        siemens = conductance(clean, devices[0])
        if not math.isclose(siemens * table.impedance, 1.0, rel_tol=0.01):
            raise TestbenchError(
                f"table [readout]: behind the source '{name}' stands a resistor of "
                f"{1.0 / siemens:.4g} ohm, and the 'impedance' is {table.impedance:g} ohm"
            )
        found[devices[0].name] = entry.emf_density * siemens**2
    return found


def readout_currents(
    clean: CleanRun,
    settings: NoiseSettings,
    behind: Mapping[str, float],
    devices: Collection[str] | None = None,
) -> list[NoiseCurrent]:
    """Give the devices' noise currents; a resistor behind a source makes what arrives instead.

    Parameters
    ----------
    clean : CleanRun
        Gives the bias of the devices.
    settings : NoiseSettings
        Temperatures and the rest.
    behind : mapping of str to float
        From `resistors_behind`.
    devices : collection of str or None
        Those that are wanted; None: all.

    Returns
    -------
    list of NoiseCurrent

    Raises
    ------
    UnknownNameError
        If there is no such device.
    """
    found = []
    for current in noise_currents(clean, settings, devices):
        if current.device in behind:
            white = np.full_like(current.white, behind[current.device])
            current = replace(current, white=white, slow=np.zeros_like(current.slow))
        found.append(current)
    return found


def _is_behind(device: NoisyDevice, ends: set[str]) -> bool:
    return device.kind == "resistor" and len(ends & set(device.nodes)) == 1
