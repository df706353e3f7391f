"""Runs with the noise of all devices whose result is no small signal: decisions of a comparator."""

from collections.abc import Collection
from dataclasses import replace

from cosim.circuit.analysis import TransientResult
from cosim.circuit.bias import CleanRun
from cosim.circuit.generators import noise_currents, noise_grid, noise_samples
from cosim.circuit.injection import with_currents
from cosim.circuit.noise_settings import NoiseSettings
from cosim.circuit.simulator import simulate
from cosim.errors import InputError


def run_with_noise(
    clean: CleanRun,
    seed: int,
    settings: NoiseSettings | None = None,
    *,
    devices: Collection[str] | None = None,
) -> TransientResult:
    """Simulate a deck with the noise of its devices, as it is and not less the clean run.

    `cosim.circuit.injection.device_noise` takes the clean run away, which asks for one time grid
    and gives the noise of a linear circuit. A latch near its threshold is neither: its decision is
    one or the other, and ngspice may take a time point more on the way.

    Parameters
    ----------
    clean : CleanRun
        From `clean_run`; the bias at every device, by which the noise currents are made.
    seed : int
        Not negative; equal seeds give equal noise.
    settings : NoiseSettings, optional
        Noise temperatures in K, band in Hz and the rest; its scale must be 1.
    devices : collection of str, optional
        Names in ngspice of the devices that make noise, all if left out.

    Returns
    -------
    TransientResult
        With the vectors of the clean run's probes, in V and A.

    Raises
    ------
    InputError, UnknownNameError
        If the settings, the seed or the devices are wrong, or the scale is not 1: what is not
        linear in the noise cannot be divided by it again.
    DeckError, SimulationError, MissingDependencyError
        As `simulate`.
    """
    settings = settings or NoiseSettings()
    if settings.scale != 1.0:
        raise InputError(
            "a run with noise that is not taken as a small signal needs "
            f"NoiseSettings.scale = 1, got {settings.scale:g}"
        )
    currents = noise_currents(clean, settings, devices)
    samples = noise_samples(clean, settings, currents, seed)
    ends = [current.nodes for current in currents]
    deck = with_currents(clean.deck, ends, noise_grid(clean), samples)
    names = tuple(dict.fromkeys(name for probe in clean.probes for _, name in probe.terms))
    return simulate(deck, replace(clean.request, saves=names))
