"""Shared by the tests that start ngspice: a few lines of a deck, sent as they stand."""

from collections.abc import Callable, Mapping, Sequence

import pytest

from cosim.circuit.analysis import TransientRequest, TransientResult
from cosim.circuit.deck import PreparedDeck
from cosim.circuit.simulator import simulate_prepared

OPTIONS = ".options method=trap reltol=1e-4 vntol=1e-8 abstol=1e-12 trtol=1e6"

Runner = Callable[..., TransientResult]


def prepared_lines(
    body: Sequence[str],
    saves: Mapping[str, str],
    stop: float,
    step: float,
    *,
    options: str = OPTIONS,
    tran: str = "",
    data: Mapping[str, bytes] | None = None,
    commands: Sequence[str] = (),
) -> PreparedDeck:
    """Put a title, options, `.save`, `.tran` and `.end` around a body of "deck.cir"."""
    save = [".save " + " ".join(saves)] if saves else []
    card = f".tran {step!r} {stop!r} 0 {step!r}" if not tran else tran
    lines = ["* title", options, *body, *save, card, ".end"]
    own = ("", 0)
    numbered = [("deck.cir", number) for number in range(1, len(body) + 1)]
    origins = [own, own, *numbered, *[own] * (len(lines) - len(body) - 2)]
    return PreparedDeck(
        lines=tuple(lines),
        origins=tuple(origins),
        keys=dict(saves),
        commands=tuple(commands),
        data=dict(data or {}),
        notices=(),
    )


@pytest.fixture
def run_lines() -> Runner:
    """Send lines without the checks of `prepare`, as a faulty deck could slip through them."""

    def run(
        body: Sequence[str],
        saves: Mapping[str, str],
        stop: float,
        step: float,
        *,
        options: str = OPTIONS,
        tran: str = "",
        data: Mapping[str, bytes] | None = None,
        commands: Sequence[str] = (),
        time_limit: float = 60.0,
        memory_limit: int = 2**32,
        progress: Callable[[float], None] | None = None,
    ) -> TransientResult:
        deck = prepared_lines(
            body, saves, stop, step, options=options, tran=tran, data=data, commands=commands
        )
        request = TransientRequest(
            stop=stop, step=step, time_limit=time_limit, memory_limit=memory_limit
        )
        return simulate_prepared(deck, request, progress=progress)

    return run
