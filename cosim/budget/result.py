"""The declared result of an error budget."""

import math
from dataclasses import dataclass, field, fields
from typing import Any

from cosim.circuit.netlist import DeckFile
from cosim.result import RunRecord, as_plain
from cosim.waveform import Envelope

_NOT_IN_TABLE = {"table": False}


def _unit(unit: str) -> dict[str, Any]:
    return {"unit": unit}


@dataclass(frozen=True, slots=True)
class BudgetItem:
    """One imperfection, and what it costs.

    Parameters
    ----------
    name : str
        Of the imperfection.
    value : float
        How large it is, in `unit`; NaN where it has no number.
    unit : str
        "1" for a ratio, "dBc" for a level over that of the pulse.
    alone : float
        Infidelity of the ideal pulse with this imperfection, less that of the ideal pulse itself;
        negative where it makes good what the ideal pulse does wrong.
    removed : float
        Infidelity of the real pulse, less that of the real one with this imperfection undone;
        negative where it makes good what others do wrong. NaN for what cannot be removed.
    absorbed : bool
        Whether the calibrated fidelity is without it: alone it costs less than a tenth there of
        what it costs as simulated.
    absorbed_by : str
        "virtual Z" where the free frame does, "calibration" where it takes more; else empty.
    kind : str
        "coherent", "incoherent", "neighbour" or "numerical".
    counted : bool
        Whether it is part of the total.
    as_simulated, free_frame, calibrated : float
        `alone` in each of the three fidelities; NaN where it is known for the costed one only.
    error_vector : tuple of 3 floats
        The rotation in rad about x, y, z by which it alone makes the ideal gate go wrong, in the
        costed fidelity: small ones about one axis add in amplitude, orthogonal ones in infidelity,
        opposite ones cancel. NaN for what is no rotation.
    note : str
        Further numbers, for people.
    """

    name: str
    value: float
    unit: str
    alone: float = field(metadata=_unit("1"))
    removed: float = field(metadata=_unit("1"))
    absorbed: bool
    absorbed_by: str = ""
    kind: str = "coherent"
    counted: bool = True
    as_simulated: float = field(default=math.nan, metadata=_unit("1"))
    free_frame: float = field(default=math.nan, metadata=_unit("1"))
    calibrated: float = field(default=math.nan, metadata=_unit("1"))
    error_vector: tuple[float, float, float] = field(
        default=(math.nan, math.nan, math.nan), metadata=_unit("rad")
    )
    note: str = ""


@dataclass(frozen=True, slots=True)
class SpurLine:
    """A line beside the carrier.

    Parameters
    ----------
    offset : float
        From the carrier that is wanted, in Hz.
    level : float
        In dBc, over the pulse's amplitude.
    modulated : bool
        Whether it comes and goes with the pulse.
    alone, removed : float
        As in `BudgetItem`.
    """

    offset: float = field(metadata=_unit("Hz"))
    level: float = field(metadata=_unit("dBc"))
    modulated: bool
    alone: float = field(metadata=_unit("1"))
    removed: float = field(metadata=_unit("1"))


@dataclass(frozen=True, slots=True)
class PairInteraction:
    """Two imperfections that together cost more or less than the sum.

    Parameters
    ----------
    first, second : str
        Names of the items.
    interaction : float
        Infidelity of the ideal pulse with both, less that with each alone, plus that of the ideal.
    together : float
        Infidelity of the ideal pulse with both, less that of the ideal.
    relation : str
        "add in amplitude", "add in infidelity" or "cancel".
    """

    first: str
    second: str
    interaction: float = field(metadata=_unit("1"))
    together: float = field(metadata=_unit("1"))
    relation: str


@dataclass(frozen=True, slots=True)
class IdealPulse:
    """The ideal pulse, and what was known of it.

    Parameters
    ----------
    family : str
        "square", "flat-top", "raised cosine" or "gaussian".
    amplitude : float
        Carrier peak amplitude at the probe that makes exactly the wanted rotation, in V (or A).
    phase : float
        Of the carrier at t = 0 in rad.
    duration : float
        Between the half heights in s.
    rise, fall : float
        From 10 to 90 % in s; NaN for a Gaussian.
    quadrature : float
        Weight of (dI/dt)/alpha; 0 without DRAG.
    from_fit : tuple of str
        What was not known and is taken from the real pulse.
    infidelity : float
        Of this pulse on this qubit without loss, in the costed fidelity.
    """

    family: str
    amplitude: float
    phase: float = field(metadata=_unit("rad"))
    duration: float = field(metadata=_unit("s"))
    rise: float = field(metadata=_unit("s"))
    fall: float = field(metadata=_unit("s"))
    quadrature: float = field(metadata=_unit("1"))
    from_fit: tuple[str, ...]
    infidelity: float = field(metadata=_unit("1"))


@dataclass(frozen=True, slots=True)
class BudgetResult:
    """Who costs how much of a gate.

    Parameters
    ----------
    title, target : str
        As in the gate's result.
    fidelity : str
        Which of the three fidelities is costed.
    total_infidelity : float
        That of the gate's result.
    error_bar : float
        Of it, from the circuit simulator; NaN without a second run.
    items : tuple of BudgetItem
        The most costly first, by what removing it gains.
    interaction : float
        `total_infidelity` less the sum of `alone` over the counted items.
    pairs : tuple of PairInteraction
        The strongest, of the costliest coherent items.
    spurs : tuple of SpurLine
        The lines beside the carrier.
    ideal : IdealPulse
        What the real pulse is held against.
    residual_share : float
        What no imperfection explains, by its root mean square, as a part of the pulse.
    rotating_wave_difference : float
        Infidelity of the full waveform less that of its envelope in the rotating wave, both
        without loss: what the fast path leaves out. The items "harmonics" and "counter-rotating
        wave" make it up.
    wall_time : float
        Of the budget alone, in s.
    advice : str
        What to change first.
    warnings : tuple of str
        What the reader must know.
    real, fitted, wanted : Envelope
        The pulse at the probe in the qubit's own frame; all named imperfections without what is
        left; the ideal pulse.
    run : RunRecord
        Of the gate's run.
    """

    title: str
    target: str
    fidelity: str
    total_infidelity: float = field(metadata=_unit("1"))
    error_bar: float = field(metadata=_unit("1"))
    items: tuple[BudgetItem, ...]
    interaction: float = field(metadata=_unit("1"))
    pairs: tuple[PairInteraction, ...]
    spurs: tuple[SpurLine, ...]
    ideal: IdealPulse
    residual_share: float = field(metadata=_unit("1"))
    rotating_wave_difference: float = field(metadata=_unit("1"))
    wall_time: float = field(metadata=_unit("s"))
    advice: str
    warnings: tuple[str, ...]
    real: Envelope = field(metadata=_NOT_IN_TABLE)
    fitted: Envelope = field(metadata=_NOT_IN_TABLE)
    wanted: Envelope = field(metadata=_NOT_IN_TABLE)
    run: RunRecord = field(metadata=_NOT_IN_TABLE)


# Classes by the tag that the archive keeps.
BUDGET_KINDS: dict[str, type] = {
    cls.__name__: cls
    for cls in (
        BudgetResult,
        BudgetItem,
        SpurLine,
        PairInteraction,
        IdealPulse,
        Envelope,
        RunRecord,
        DeckFile,
    )
}

_ARRAYS = ("real", "fitted", "wanted", "run")


def budget_numbers(result: BudgetResult) -> dict[str, Any]:
    """Turn a budget into plain numbers for machines.

    Parameters
    ----------
    result : BudgetResult

    Returns
    -------
    dict
        Its fields by name, without envelopes and record; a number that does not exist is None.
    """
    names = (item.name for item in fields(result) if item.name not in _ARRAYS)
    return {name: as_plain(getattr(result, name)) for name in names}
