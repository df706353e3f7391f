"""The waveforms at the probe of many testbenches, with one load of the deck where that will do."""

from collections.abc import Callable, Iterator, Sequence

from cosim.capture import Capture, Plan, captured
from cosim.circuit.analysis import TransientResult
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.family import simulate_family
from cosim.circuit.preparation import prepare
from cosim.errors import CosimError


def capture_probes(
    plans: Sequence[Plan], *, progress: Callable[[int, float], None] | None = None
) -> Iterator[Capture | CosimError]:
    """Simulate the decks of many plans and read their probes.

    Parameters
    ----------
    plans : sequence of Plan
        From `make_plan`; they may differ in anything. Those whose decks differ only in numbers of
        parameters and in sources share a load.
    progress : callable or None
        Called with the place of a plan and its simulated time in s now and then.

    Yields
    ------
    Capture or CosimError
        In the order of the plans, one each: what `cosim.capture.capture_probe` gives or raises, but
        for the times that the simulator took.
    """
    faults: dict[int, CosimError] = {}
    ready: list[PreparedDeck] = []
    places: list[int] = []
    for place, plan in enumerate(plans):
        try:
            ready.append(prepare(plan.deck, plan.request))
            places.append(place)
        except CosimError as error:
            faults[place] = error
    told = None if progress is None else lambda number, time: progress(places[number], time)
    outcomes = simulate_family(ready, [plans[place].request for place in places], progress=told)
    for place, plan in enumerate(plans):
        yield faults[place] if place in faults else _read(plan, next(outcomes))


def _read(plan: Plan, outcome: TransientResult | CosimError) -> Capture | CosimError:
    if isinstance(outcome, CosimError):
        return outcome
    try:
        return captured(plan, outcome)
    except CosimError as error:
        return error
