"""How the noise of devices is made: temperatures, excess factors, 1/f noise and the band."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TypeVar

from cosim.circuit.flicker import Flicker
from cosim.circuit.inventory import NoisyDevice
from cosim.circuit.noise_parts import NoiseTemperatures
from cosim.errors import InputError

CHANNELS = ("conductance", "transconductance")
_Value = TypeVar("_Value")


@dataclass(frozen=True, slots=True)
class NoiseSettings:
    """How the noise of devices is made.

    Parameters
    ----------
    temperatures : NoiseTemperatures
        Of resistors and channels in K; None: the device temperature.
    gamma : float
        Excess factor of channels, 2/3 for a long one.
    gammas : mapping of str to float
        Excess factors of devices by their name in ngspice or their model's name; a device's own
        goes before its model's, and both before `gamma`.
    channel : str
        "conductance": S = 4 k T gamma (gm + gds)(1 + a + a^2)/(1 + a) with a = gds/(gm + gds), the
        charge-based noise of a long channel, which is that of its conductance at no voltage and
        2/3 of gm in saturation. "transconductance": 4 k T gamma gm, ngspice's formula for level 1
        to 3, by which a closed switch is silent. BSIM4's own noise, measured, is that of the first
        within 12 % in the triode region; in saturation it agrees for long channels at a low
        overdrive and grows with the saturation of the velocity, to 1.3 to 1.9 times at 0.2 um and
        1.8 to 3.4 times at 40 nm: excess factors that `gammas` takes.
    bandwidth : float or None
        Where the band ends, in Hz, at most half over the step; None: there.
    flicker : mapping of str to Flicker
        1/f noise of devices by their name in ngspice or their model's name; a name of a device
        goes before one of a model, and both before what the card says.
    slowest : float or None
        Where the band of 1/f noise begins, in Hz: below one over the run's time it is a constant
        of the run. None: half of that.
    scale : float
        Factor by which the currents are injected and the result is divided again: below 1 where
        the noise is so large that the circuit is not linear in it, above 1 where it is so small
        that the tolerances of the runs show, a few nV by default.

    Raises
    ------
    InputError
        If a value is out of its range.
    """

    temperatures: NoiseTemperatures = field(default_factory=NoiseTemperatures)
    gamma: float = 2 / 3
    gammas: Mapping[str, float] = field(default_factory=dict)
    channel: str = "conductance"
    bandwidth: float | None = field(default=None, metadata={"unit": "Hz"})
    flicker: Mapping[str, Flicker] = field(default_factory=dict)
    slowest: float | None = field(default=None, metadata={"unit": "Hz"})
    scale: float = 1.0

    def __post_init__(self) -> None:
        for name in ("gamma", "bandwidth", "slowest", "scale"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                raise InputError(
                    f"NoiseSettings.{name} must be a positive finite number, got {value!r}"
                )
        for name, gamma in self.gammas.items():
            if not (math.isfinite(gamma) and gamma > 0):
                raise InputError(
                    f"NoiseSettings.gammas: that of '{name}' must be a positive finite number, "
                    f"got {gamma!r}"
                )
        if self.channel not in CHANNELS:
            raise InputError(
                f"NoiseSettings.channel must be one of {', '.join(CHANNELS)}, got {self.channel!r}"
            )

    def flicker_of(self, device: NoisyDevice) -> Flicker | None:
        """Give the 1/f noise that is given for a device.

        Parameters
        ----------
        device : NoisyDevice
            The device.

        Returns
        -------
        Flicker or None
            None where the card says.
        """
        return _of(self.flicker, device)

    def gamma_of(self, device: NoisyDevice) -> float:
        """Give the excess factor of a device's channel.

        Parameters
        ----------
        device : NoisyDevice
            The device.

        Returns
        -------
        float
        """
        given = _of(self.gammas, device)
        return self.gamma if given is None else given


def _of(values: Mapping[str, _Value], device: NoisyDevice) -> _Value | None:
    """Find what is given for a device by its own name or its model's."""
    lowered = {name.lower(): value for name, value in values.items()}
    return lowered.get(device.name, lowered.get(device.model))
