"""Making the plan of a sweep, with all that can be found wrong before anything runs."""

import numpy as np

from cosim.circuit.deck import Deck
from cosim.circuit.mismatch import mosfets
from cosim.decks import altered_deck
from cosim.errors import TestbenchError
from cosim.sweep.axes import (
    Corner,
    read_axes,
    read_corners,
    read_perturbations,
    read_variations,
)
from cosim.sweep.plan import SweepPlan
from cosim.sweep.samples import unit_samples
from cosim.sweep.table import read_sweep
from cosim.sweep.trimming import read_trimming
from cosim.testbench import Bench, Testbench

# Functions whose values ngspice draws from the deck's seed.
_RANDOM = ("gauss(", "unif(", "limit(")
_MOST_POINTS = 64  # points of corners and grid whose extreme samples are looked at


def make_sweep(bench: Bench) -> SweepPlan:
    """Make the plan of a testbench with a table [sweep]; nothing is simulated.

    Parameters
    ----------
    bench : Bench
        The testbench.

    Returns
    -------
    SweepPlan
        The same testbench and files give the same plan in every process.

    Raises
    ------
    TestbenchError
        If a key or value of the table is wrong, or nothing would differ between runs.
    DeckError
        If a deck cannot be read, or a name in it does not exist.
    """
    table = read_sweep(bench)
    where = f"{bench.source or 'the testbench'}, table [sweep]"
    if isinstance(bench, Testbench) and bench.qubit.kind == "operators":
        raise TestbenchError(
            f"{where}: operators given in Python have no identity that a sweep could resume by",
            hint="call cosim.run in a loop of your own",
        )
    corners = read_corners(bench, table)
    axes = read_axes(corners, table)
    variations = read_variations(corners, axes, table)
    perturbations = read_perturbations(corners, axes, table)
    seeded = any(_is_random(corner.deck) for corner in corners)
    if table.mismatch is not None:
        _check_mismatch(corners, where)
    elif table.monte_carlo is not None and not variations and not seeded:
        raise TestbenchError(
            f"{where}: the samples of [sweep.monte_carlo] would all be the same",
            hint="add [[sweep.monte_carlo.vary]] or [sweep.mismatch]",
        )
    points = np.empty((1 + 2 * len(perturbations), 0))
    if table.monte_carlo is not None:
        points = unit_samples(table.monte_carlo)
    trimming = read_trimming(bench, table, corners, axes, variations)
    plan = SweepPlan(table, corners, axes, variations, points, perturbations, seeded, trimming)
    _check_extremes(plan)
    return plan


def _is_random(deck: Deck | None) -> bool:
    texts = (line.text.lower().replace(" ", "") for line in deck.lines) if deck else ()
    return any(name in text for text in texts for name in _RANDOM)


def _check_mismatch(corners: tuple[Corner, ...], where: str) -> None:
    for corner in corners:
        if corner.deck is None or corner.bench.netlist is None:
            raise TestbenchError(f"{where}: there is no [netlist] whose transistors could mismatch")
        if corner.bench.netlist.mismatch:
            raise TestbenchError(
                f"{where}: [netlist] has a mismatch of its own, which [sweep.mismatch] would undo"
            )
        if not mosfets(altered_deck(corner.bench, corner.deck)):
            raise TestbenchError(f"{where}: {corner.deck.path} has no MOS transistors to mismatch")


def _check_extremes(plan: SweepPlan) -> None:
    """Look at the samples with the least and the greatest of each number, for their errors."""
    if not plan.variations:
        return
    ends = {int(at) for at in (*plan.points.argmin(axis=0), *plan.points.argmax(axis=0))}
    for start in range(0, len(plan), plan.samples):
        for sample in sorted(ends):
            plan.run(start + sample)
        if start // plan.samples >= _MOST_POINTS:
            break
