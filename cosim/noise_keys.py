"""What the tables [[noise]] have in common."""

from collections.abc import Mapping

from cosim.dsp.noise.density import PowerLaw, SpectralDensity
from cosim.errors import InputError

# ngspice's flicker noise, and most data sheets, give the level of 1/f noise at this frequency.
_REFERENCE = 1.0  # Hz


def check_one(given: Mapping[str, bool], keys: str) -> None:
    """Refuse a table that gives no data, or more than one kind.

    Parameters
    ----------
    given : mapping of str to bool
        Kind of data -> whether it is there.
    keys : str
        All kinds, for the message.

    Raises
    ------
    InputError
        Naming what was given.
    """
    said = [name for name, there in given.items() if there]
    if len(said) != 1:
        raise InputError(f"give one of {keys}, got {' and '.join(said) if said else 'none'}")


def check_levels(white: float | None, flicker: float | None, low: float, high: float) -> None:
    """Refuse negative levels and bands that are none.

    Parameters
    ----------
    white, flicker : float or None
        Levels.
    low, high : float
        Band in Hz.

    Raises
    ------
    InputError
        Naming the key.
    """
    for name, level in (("white", white), ("flicker", flicker)):
        if level is not None and level < 0.0:
            raise InputError(f"key '{name}': a spectral density is not negative, got {level:g}")
    if not 0.0 <= low < high:
        raise InputError(f"wanted 0 <= low < high, got {low:g} Hz and {high:g} Hz")


def density_law(
    unit: str,
    factor: float,
    white: float | None,
    flicker: float | None,
    exponent: float,
    low: float,
    high: float,
) -> SpectralDensity:
    """Make the density of white and flicker noise in a band.

    Parameters
    ----------
    unit : str
        Of what fluctuates.
    factor : float
        On the density.
    white, flicker : float or None
        Levels, the second at 1 Hz.
    exponent : float
        By which flicker noise falls.
    low, high : float
        Band in Hz.

    Returns
    -------
    SpectralDensity
    """
    terms = []
    if white:
        terms.append(PowerLaw(factor * white, low=low, high=high))
    if flicker:
        terms.append(PowerLaw(factor * flicker, exponent, _REFERENCE, low, high))
    return SpectralDensity(unit, tuple(terms))
