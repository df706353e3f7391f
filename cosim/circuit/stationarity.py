"""Whether a circuit stays at one operating point, so that its noise is that of `.noise`."""

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from cosim.circuit.bias import CleanRun, junction_currents
from cosim.circuit.inventory import NoisyDevice
from cosim.errors import InputError
from cosim.waveform import FloatArray

LIMIT = 0.05
"""Greatest relative change of a leading device's bias in a circuit that counts as stationary."""

_LEADING_PART = 0.99  # of the noise; the devices that make the rest may do what they like
_LEADING_CURRENT = 0.05  # of the greatest current; a device with less leads no circuit
_SHOWN = 5


@dataclass(frozen=True, slots=True)
class Stationarity:
    """How far the leading devices of a circuit move in a window of time.

    Parameters
    ----------
    stationary : bool
        Whether none of them moves by more than the limit.
    limit : float
        Greatest relative change that counts as none.
    changes : dict of str to float
        Leading device in ngspice's name -> (greatest - least)/greatest magnitude of its bias in the
        window: of gm for field-effect transistors, of the current for diodes and of the
        collector's for bipolar transistors.
    breaking : tuple of str
        Those that move by more, the one that moves most first.
    """

    stationary: bool
    limit: float
    changes: dict[str, float]
    breaking: tuple[str, ...]

    def sentence(self) -> str:
        """Say in one sentence what was found.

        Returns
        -------
        str
        """
        if not self.changes:
            return "the circuit is without transistors and diodes"
        if self.stationary:
            most = max(self.changes.values())
            return f"no leading device's bias changes by more than {most:.2g} of itself"
        named = ", ".join(f"{name} by {self.changes[name]:.0%}" for name in self.breaking[:_SHOWN])
        more = len(self.breaking) - _SHOWN
        return (
            f"the bias of leading devices changes by more than {self.limit:.0%} of itself: {named}"
            + (f" and {more} more" if more > 0 else "")
        )


def check_stationarity(
    clean: CleanRun,
    start: float,
    stop: float,
    shares: Mapping[str, float] | None = None,
    *,
    limit: float = LIMIT,
) -> Stationarity:
    """Tell whether the devices of a circuit keep their bias in a window of time.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    start, stop : float
        The window in s.
    shares : mapping of str to float, optional
        Device in ngspice's name -> its part of the noise in any unit, from `.noise`. Those that
        make 99 % of it lead the circuit. Devices whose current reaches 5 % of the greatest one in
        the window lead it in any case: of a gated circuit `.noise` finds its sources silent.
    limit : float
        Greatest relative change that counts as none.

    Returns
    -------
    Stationarity
        A circuit without transistors and diodes is stationary.

    Raises
    ------
    InputError
        If fewer than two time points lie in the window, or the limit is not in (0, 1).
    """
    if not 0 < limit < 1:
        raise InputError(f"the limit of a relative change must lie in (0, 1), got {limit!r}")
    time = clean.result.time
    inside = (time >= start) & (time <= stop)
    if np.count_nonzero(inside) < 2:
        raise InputError(
            f"fewer than two time points of the run lie in the window from {start:g} s to "
            f"{stop:g} s",
            hint=f"The run goes from 0 s to {time[-1]:g} s.",
        )
    active = {item.name: item for item in clean.inventory.devices if item.kind != "resistor"}
    bias = {name: bias_of(clean, item)[inside] for name, item in active.items()}
    currents = {name: _peak(_current(clean, item)[inside]) for name, item in active.items()}
    greatest = max(currents.values(), default=0.0)
    leading = {name for name, peak in currents.items() if peak > _LEADING_CURRENT * greatest}
    leading |= _leading(shares or {}) & active.keys()
    changes = {name: _change(bias[name]) for name in active if name in leading}
    order = sorted(changes, key=lambda name: -changes[name])
    breaking = tuple(name for name in order if changes[name] > limit)
    return Stationarity(not breaking, limit, changes, breaking)


def _leading(shares: Mapping[str, float]) -> set[str]:
    """Give the devices that together make nearly all of the noise."""
    wanted = _LEADING_PART * math.fsum(shares.values())
    found: set[str] = set()
    reached = 0.0
    for name in sorted(shares, key=lambda name: -shares[name]):
        if reached >= wanted:
            break
        found.add(name)
        reached += shares[name]
    return found


def bias_of(clean: CleanRun, device: NoisyDevice) -> FloatArray:
    """Give what tells of a device whether it moves.

    Parameters
    ----------
    clean : CleanRun
        The clean run.
    device : NoisyDevice
        A transistor or diode.

    Returns
    -------
    ndarray, shape (n,)
        gm in S of a field-effect transistor, the collector's or the diode's current in A.
    """
    if device.kind in ("mos", "jfet"):
        return clean.vector(device, "gm")
    return _current(clean, device)


def _current(clean: CleanRun, device: NoisyDevice) -> FloatArray:
    if device.kind in ("mos", "jfet"):
        return clean.vector(device, "id")
    currents = junction_currents(clean, device)
    return currents.get("ic", next(iter(currents.values())))


def _peak(values: FloatArray) -> float:
    return float(np.max(np.abs(values)))


def _change(values: FloatArray) -> float:
    peak = _peak(values)
    return float(np.ptp(values)) / peak if peak > 0 else 0.0
