"""What model cards say of 1/f noise."""

from collections.abc import Mapping
from dataclasses import dataclass, field

from cosim.circuit.cards import assignments
from cosim.circuit.deck import Deck
from cosim.circuit.hierarchy import structure_of
from cosim.circuit.inventory import NoisyDevice
from cosim.circuit.settings import number_of
from cosim.errors import InputError

_PERMITTIVITY = 3.9 * 8.854187817e-12  # F/m of the oxide, as ngspice has it
_USUAL_OXIDE = 1e-7  # m
_SIMPLE_LEVELS = (1.0, 2.0, 3.0)
_CARD_FIELDS = ("kf", "af", "ld", "tox", "level")


@dataclass(frozen=True, slots=True)
class Flicker:
    """A density of the device's current of coefficient |I|^current_exponent / f^frequency_exponent.

    Parameters
    ----------
    coefficient : float
        In A^2/Hz at 1 A and 1 Hz, not negative.
    current_exponent : float
        Power of the current, at least 0.
    frequency_exponent : float
        From 0.5 to 1.5.

    Raises
    ------
    InputError
        If a value is out of its range.
    """

    coefficient: float = field(metadata={"unit": "A^2/Hz at 1 A and 1 Hz"})
    current_exponent: float = 1.0
    frequency_exponent: float = 1.0

    def __post_init__(self) -> None:
        if not 0 <= self.coefficient < float("inf"):
            raise InputError(
                f"Flicker.coefficient must be finite and at least 0, got {self.coefficient!r}"
            )
        if not 0 <= self.current_exponent < float("inf"):
            raise InputError(
                f"Flicker.current_exponent must be finite and at least 0, got "
                f"{self.current_exponent!r}"
            )
        if not 0.5 <= self.frequency_exponent <= 1.5:
            raise InputError(
                f"Flicker.frequency_exponent must be from 0.5 to 1.5, got "
                f"{self.frequency_exponent!r}"
            )


@dataclass(frozen=True, slots=True)
class CardFlicker:
    """The 1/f noise of a card, before the size of the device is known.

    Parameters
    ----------
    kf, af : float
        ngspice's KF and AF.
    per_area : float
        Square of the oxide's capacitance per area in F^2/m^4, by which KF is divided beside the
        area of a MOS transistor; 0 for other devices.
    overlap : float
        What the length of a MOS transistor loses, in m.
    multiplied : bool
        Whether the multiplier m counts in the area: measured, in level 1 and 2, not in level 3.
    """

    kf: float
    af: float
    per_area: float
    overlap: float = field(metadata={"unit": "m"})
    multiplied: bool


def card_flicker(deck: Deck, device: NoisyDevice) -> CardFlicker | None:
    """Read the 1/f noise of a device's card.

    Parameters
    ----------
    deck : Deck
        The deck.
    device : NoisyDevice
        The device.

    Returns
    -------
    CardFlicker or None
        None where the card has none, or has it in a form that is not read, see `flicker_unread`.
    """
    values = _values(deck, device)
    kf = values["kf"]
    if not kf or (device.kind == "mos" and values["level"] not in _SIMPLE_LEVELS):
        return None
    capacitance = _PERMITTIVITY / (values["tox"] or _USUAL_OXIDE)
    return CardFlicker(
        kf,
        1.0 if values["af"] is None else values["af"],
        capacitance**2 if device.kind == "mos" else 0.0,
        2.0 * (values["ld"] or 0.0),
        values["level"] != 3.0,
    )


def flicker_unread(deck: Deck, device: NoisyDevice) -> str:
    """Say why the 1/f noise of a device is not read from its card.

    Parameters
    ----------
    deck : Deck
        The deck.
    device : NoisyDevice
        The device.

    Returns
    -------
    str
        "" where there is none, or it is read.
    """
    if device.kind == "resistor":
        return ""
    values = _values(deck, device)
    if device.kind == "mos" and values["level"] not in _SIMPLE_LEVELS:
        return f"the 1/f noise of its model '{device.model}'"
    written = {item.name for item in assignments(device.card)}
    unread = [name for name in _CARD_FIELDS if name in written and values[name] is None]
    return f"the 1/f noise of its model, whose {unread[0]} cannot be told" if unread else ""


def _values(deck: Deck, device: NoisyDevice) -> Mapping[str, float | None]:
    parameters = structure_of(deck.lines).parameters
    found: dict[str, float | None] = dict.fromkeys(_CARD_FIELDS)
    found["level"] = 1.0
    for item in assignments(device.card):
        if item.name in found:
            found[item.name] = number_of(item.value, parameters)
    return found
