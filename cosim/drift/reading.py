"""Texts of drift: "0.2 mV/min", "3 kHz/sqrt(s)", "10 uV/sqrt(Hz)", read as what they belong to."""

from collections.abc import Callable

from cosim.errors import UnitError
from cosim.units import parse_quantity

Read = Callable[[str], float]

# Times that a trim lasts; "min" and what is shorter is known to `cosim.units`.
_LONG = {"h": 3600.0, "day": 86400.0}
_WALK = "/sqrt(s)"
_ROOT, _SQUARE = "/sqrt(Hz)", "^2/Hz"


def read_rate(raw: object, read: Read) -> float:
    """Read a linear drift, such as "0.2 mV/min" or "1e-10 /day".

    Parameters
    ----------
    raw : object
        What the file says.
    read : callable
        Reads the part before the time.

    Returns
    -------
    float
        Per s.

    Raises
    ------
    UnitError
        If it is no such text.
    """
    text = _text(raw, "a drift per time", "0.2 mV/min")
    value, slash, time = text.rpartition("/")
    if not slash:
        raise UnitError(
            f"wanted a drift per time, got {raw!r}", hint='write the time, such as "0.2 mV/min"'
        )
    return read(value.strip()) / read_time(f"1 {time.strip()}")


def read_time(raw: object) -> float:
    """Read a time: "10 ms", "15 min", "8 h", "1 day".

    Parameters
    ----------
    raw : object
        What the file says.

    Returns
    -------
    float
        In s, positive.

    Raises
    ------
    UnitError
        If it is none.
    """
    text, scale = raw, 1.0
    if isinstance(raw, str):
        number, _, unit = raw.strip().partition(" ")
        if unit.strip() in _LONG:
            text, scale = f"{number} s", _LONG[unit.strip()]
    value = scale * parse_quantity(text, "s")
    if not value > 0.0:
        raise UnitError(f"wanted a time above zero, got {raw!r}")
    return value


def read_walk(raw: object, read: Read) -> float:
    """Read a random walk, such as "3 kHz/sqrt(s)".

    Parameters
    ----------
    raw : object
        What the file says.
    read : callable
        Reads the part before the root.

    Returns
    -------
    float
        Standard deviation after 1 s.

    Raises
    ------
    UnitError
        If it is no such text, or negative.
    """
    text = _text(raw, "a random walk", f"3 kHz{_WALK}")
    if not text.endswith(_WALK):
        raise UnitError(
            f"wanted a random walk per root of time, got {raw!r}",
            hint=f'end it with {_WALK}, such as "3 kHz{_WALK}"',
        )
    return _not_negative(read(text.removesuffix(_WALK).strip()), raw)


def read_density(raw: object, read: Read) -> float:
    """Read a density at 1 Hz, such as "10 uV/sqrt(Hz)", "1e3 Hz^2/Hz" or "1e-14 1/Hz".

    Parameters
    ----------
    raw : object
        What the file says.
    read : callable
        Reads a value of the quantity itself.

    Returns
    -------
    float
        In the square of its unit per Hz.

    Raises
    ------
    UnitError
        If it is no such text, or negative.
    """
    text = _text(raw, "a spectral density", f"10 uV{_ROOT}")
    if text.endswith(_ROOT):
        return _not_negative(read(text.removesuffix(_ROOT).strip()), raw) ** 2
    number, _, unit = text.partition(" ")
    try:
        size = float(number)
    except ValueError:
        raise UnitError(f"{raw!r} is no number with the unit of a density") from None
    _not_negative(size, raw)
    if unit.strip() == "1/Hz":
        return size * read("1") ** 2
    if unit.endswith(_SQUARE):
        return size * read(f"1 {unit.removesuffix(_SQUARE).strip()}") ** 2
    raise UnitError(
        f"wanted a spectral density at 1 Hz, got {raw!r}",
        hint=f'such as "10 uV{_ROOT}", "1e3 Hz{_SQUARE}", or "1e-14 1/Hz" of a plain number',
    )


def read_deviation(raw: object, read: Read) -> float:
    """Read a standard deviation.

    Parameters
    ----------
    raw : object
        What the file says.
    read : callable
        Reads a value of the quantity.

    Returns
    -------
    float

    Raises
    ------
    UnitError
        If it is negative, or of another unit.
    """
    return _not_negative(read(raw if isinstance(raw, str) else repr(raw)), raw)


def _text(raw: object, wanted: str, example: str) -> str:
    if not isinstance(raw, str):
        raise UnitError(f"wanted {wanted} with its unit, got {raw!r}", hint=f'such as "{example}"')
    return raw.strip()


def _not_negative(value: float, raw: object) -> float:
    if value < 0.0:
        raise UnitError(f"wanted at least zero, got {raw!r}")
    return value
