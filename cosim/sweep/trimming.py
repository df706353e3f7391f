"""What a sweep trims: the knobs of [calibrate], where they are found, and for which runs."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from cosim.calibration.table import NAME, read_calibrate
from cosim.errors import TestbenchError
from cosim.keys import NumberKey, nominal, number_key, with_number
from cosim.sweep.axes import Axis, Corner, read_corners
from cosim.sweep.columns import EACH, FROZEN
from cosim.sweep.samples import Variation
from cosim.sweep.table import SweepTable
from cosim.testbench import Bench, ReadoutBench

_MODES = {"frozen": (FROZEN,), "each": (EACH,), "both": (FROZEN, EACH)}


@dataclass(frozen=True, slots=True)
class Trimming:
    """The trims of a sweep.

    Parameters
    ----------
    modes : tuple of str
        "frozen", "each" or both: the slowest axis of the plan.
    study : mapping
        The table [calibrate] as given.
    knobs : tuple of NumberKey
        What it turns.
    at : tuple of (NumberKey, float)
        Conditions of the trims where they are not those of the testbench or the corner.
    nominal : Corner
        The testbench itself, which the frozen trim is made of.
    most_runs : int
        Runs of the circuit that one trim takes at most; of a readout each is many transients.
    """

    modes: tuple[str, ...]
    study: Mapping[str, Any]
    knobs: tuple[NumberKey, ...]
    at: tuple[tuple[NumberKey, float], ...]
    nominal: Corner
    most_runs: int

    def ready(self, bench: Bench) -> Bench:
        """Make a testbench one to be calibrated, without a last run at half the step.

        Parameters
        ----------
        bench : Bench
            The testbench.

        Returns
        -------
        Bench
        """
        return replace(
            bench,
            studies={NAME: self.study},
            accuracy=replace(bench.accuracy, floor=False),
        )


def read_trimming(
    bench: Bench,
    table: SweepTable,
    corners: tuple[Corner, ...],
    axes: tuple[Axis, ...],
    variations: tuple[Variation, ...],
) -> Trimming | None:
    """Read what a sweep trims.

    Parameters
    ----------
    bench : Bench
        The testbench.
    table : SweepTable
        Its table [sweep].
    corners, axes, variations
        From the readers of `cosim.sweep.axes`.

    Returns
    -------
    Trimming or None
        None where nothing is trimmed.

    Raises
    ------
    TestbenchError
        If [calibrate] is missing or wrong at a corner, a condition is no number of the testbench,
        or the sweep moves a number that the trim sets.
    """
    modes = _MODES.get(table.trim, ())
    if not modes:
        return None
    file = bench.source or "the testbench"
    if NAME not in bench.studies:
        raise TestbenchError(
            f'{file}, table [sweep]: trim = "{table.trim}" needs a table [{NAME}]',
            hint="it says what counts and which numbers may be turned; see the README",
        )
    own = read_corners(bench, replace(table, corners=()))[0]
    where = f"{file}, table [sweep.trim_at]"
    at = []
    for text, raw in table.trim_at:
        key = number_key(own.bench, own.deck, text, where)
        at.append((key, key.read(raw, f"{where}, key '{text}'")))
    found = Trimming(modes, bench.studies[NAME], (), tuple(at), own, 0)
    for corner in (own, *corners):
        settled = corner.bench
        for key, value in at:
            settled = with_number(settled, key, value)
        study, knobs = read_calibrate(found.ready(settled), corner.deck)
    # Of a gate the circuit runs once where no knob is its own.
    again = isinstance(bench, ReadoutBench) or any(knob.simulated for knob in knobs)
    most = 0 if bench.netlist is None else study.max_runs if again else 1
    found = replace(found, knobs=tuple(knob.key for knob in knobs), most_runs=most)
    _check_knobs(found, corners, axes, variations, file)
    _check_conditions(found, corners, axes, variations, where)
    return found


def _check_knobs(
    found: Trimming,
    corners: tuple[Corner, ...],
    axes: tuple[Axis, ...],
    variations: tuple[Variation, ...],
    file: str,
) -> None:
    """Refuse a sweep that moves what the trim then sets."""
    places = {axis.key.path: "[[sweep.grid]]" for axis in axes}
    places |= {item.key.path: "[[sweep.monte_carlo.vary]]" for item in variations}
    places |= {path: f"[sweep.corners.{item.name}]" for item in corners for path in item.moved}
    places |= {key.path: "[sweep.trim_at]" for key, _ in found.at}
    for key in found.knobs:
        if key.path in places:
            raise TestbenchError(
                f"{file}, table {places[key.path]}: '{key.path}' is a knob of [{NAME}], which the "
                "trim sets",
                hint="take it out of one of the two",
            )


def _check_conditions(
    found: Trimming,
    corners: tuple[Corner, ...],
    axes: tuple[Axis, ...],
    variations: tuple[Variation, ...],
    where: str,
) -> None:
    """See that what is drawn can be drawn at the trim too."""
    paths = {key.path for key, _ in found.at}
    for item in variations:
        if item.center is not None and item.key.path in paths:
            raise TestbenchError(
                f"{where}: '{item.key.path}' is drawn for each sample, which would undo it"
            )
        known = item.center is not None or item.key.path in paths
        if not known and any(axis.key.path == item.key.path for axis in axes):
            for corner in corners:
                if nominal(corner.bench, corner.deck, item.key) is None:
                    raise TestbenchError(
                        f"{where}: neither the testbench nor the deck says a value of "
                        f"'{item.key.path}' for the trim",
                        hint="say it in trim_at",
                    )
