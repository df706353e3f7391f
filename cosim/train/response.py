"""What a run of a train tells: slots, histories, memory, settling, the whole sequence."""

import math

import numpy as np

from cosim.capture import Capture
from cosim.dsp.settling import Settling, fit_tail
from cosim.dsp.trains import pulse_span
from cosim.quantum.fidelity import channel_distance
from cosim.train.memory import find_memory, find_settling, history_of, memory_floor
from cosim.train.playing import Train, sampled
from cosim.train.result import History, StepSettling, Tail, TrainResponse
from cosim.train.slots import Evolved, evolve_slots, shift_rate
from cosim.waveform import ComplexArray, Envelope, FloatArray

# Histories are told up to this length, so that the table stays readable.
_LONGEST_HISTORY = 4
# A tail begins when the pulse has fallen to this part of its peak.
_FALLEN = 0.1
# and is over after so many times that.
_RINGS = 3
_FIT_SAMPLES = 400
# Below this part of a pulse's peak a tail is rounding.
_TAIL_FLOOR = 1e-7
# A step has settled when it stays this close to its ideal.
_SETTLED = 0.01


def respond(
    train: Train,
    shot: Capture,
    envelope: Envelope,
    second: Capture | None,
    *,
    late: float = 0.0,
    ideal: ComplexArray | None = None,
) -> TrainResponse:
    """Judge a run of a train.

    Parameters
    ----------
    train : Train
        What was played.
    shot : Capture
        What came out.
    envelope : Envelope
        Of that.
    second : Capture or None
        The same at half the step.
    late : float
        By how much the slots begin later, in s.
    ideal : ndarray of complex, shape (n,), or None
        What the envelope ought to be, on its own grid, from its rest on; default: in each slot
        what the first pulse is in its own.

    Returns
    -------
    TrainResponse
        Of all slots.
    """
    evolved = evolve_slots(train, shot, late=late)
    vectors, factors = evolved.vectors(), train.factors
    floor, again = math.nan, None
    if second is not None:
        other = evolve_slots(train, second, late=late, frame=evolved.frame)
        again = other.vectors()
        pairs = zip(evolved.framed, other.framed, strict=True)
        floor = max(channel_distance(one, two) for one, two in pairs)
    memory = find_memory(vectors, factors, memory_floor(vectors, again, factors))
    infidelity = evolved.infidelities()
    worst = int(np.argmax(infidelity))
    first_kind = np.array(factors) == factors[train.first]
    turns = evolved.turns()
    departure = envelope.iq
    wanted = _repeated(train, envelope, late) if ideal is None else ideal
    size = float(np.linalg.norm(wanted))
    length = min(max(memory.depth, 1), _LONGEST_HISTORY)
    return TrainResponse(
        as_simulated=evolved.infidelities(raw=True),
        infidelity=infidelity,
        leakage=evolved.leakages(),
        turn=turns,
        amplitude_scale=evolved.frame.scale,
        detuning=evolved.frame.detuning,
        late=late,
        numerical_floor=floor,
        lag_costs=memory.lag_costs,
        memory_depth=memory.depth,
        memory_deeper=memory.deeper,
        memory_floor=memory.floor,
        spread=float(np.ptp(infidelity[first_kind])),
        worst_slot=worst + 1,
        worst_history=history_of(factors, worst, max(length, 1)),
        histories=_histories(train, infidelity, turns, length),
        settling=find_settling(
            turns,
            factors,
            train.table.spacing,
            train.first,
            # An infidelity is a turn squared over six.
            math.sqrt(6.0 * memory.floor),
        ),
        tail=_tail(train, envelope, late),
        sequence=evolved.sequence(evolved.framed),
        product=1.0 - float(np.prod(1.0 - infidelity)),
        memoryless=_memoryless(train, evolved),
        envelope=envelope,
        ideal=Envelope(envelope.t0, envelope.dt, wanted, train.carrier, envelope.unit),
        residual=float(np.linalg.norm(departure - wanted)) / size if size > 0.0 else math.nan,
    )


def _memoryless(train: Train, evolved: Evolved) -> float:
    """The sequence of which no slot knows of another; slots of other factors as they are."""
    first = train.factors[train.first]
    alike = {0.0: evolved.rest, first: evolved.framed[train.first]}
    pairs = zip(train.factors, evolved.framed, strict=True)
    return evolved.sequence(tuple(alike.get(factor, own) for factor, own in pairs))


def _histories(
    train: Train, infidelity: FloatArray, turns: FloatArray, length: int
) -> tuple[History, ...]:
    first = train.factors[train.first]
    slots: dict[str, list[int]] = {}
    for slot, factor in enumerate(train.factors):
        if factor == first:
            slots.setdefault(history_of(train.factors, slot, length), []).append(slot)
    found = []
    for name, own in sorted(slots.items()):
        turn = turns[own].mean(axis=0) - turns[train.first]
        found.append(
            History(
                name,
                len(own),
                float(infidelity[own].mean()),
                float(infidelity[own].max()),
                (float(turn[0]), float(turn[1]), float(turn[2])),
            )
        )
    return tuple(found)


def _repeated(train: Train, envelope: Envelope, late: float) -> ComplexArray:
    """Put what the first pulse is in its own slot into every slot, by its factor."""
    wanted = np.zeros(envelope.iq.size, dtype=np.complex128)
    begin, _ = train.span(train.first, late)
    for slot, factor in enumerate(train.factors):
        start, stop = train.span(slot, late)
        inside = (envelope.t >= start) & (envelope.t < stop)
        if factor != 0.0 and inside.any():
            own = sampled(envelope, envelope.t[inside] - start + begin)
            wanted[inside] = factor / train.factors[train.first] * own
    return wanted


def _tail(train: Train, envelope: Envelope, late: float) -> Tail | None:
    """Look at the longest stretch without a pulse that follows one."""
    ends = max(pulse_span(shape)[1] for shape in train.shapes.values())
    begins = min(pulse_span(shape)[0] for shape in train.shapes.values())
    played = [slot for slot, factor in enumerate(train.factors) if factor]
    following = [*played[1:], len(train.factors)]
    gap, slot = max((after - slot, -slot) for slot, after in zip(played, following, strict=True))
    if gap < 2:
        return None
    begin = ends - slot * train.table.spacing + late
    stop = begins - slot * train.table.spacing + late + gap * train.table.spacing
    stop = min(stop, float(envelope.t[-1]))
    departure = envelope.iq
    peak = float(np.abs(departure).max())
    inside = np.flatnonzero((envelope.t >= begin) & (envelope.t <= stop))
    size = np.abs(departure[inside]) / peak
    high = np.flatnonzero(size > _FALLEN)
    # The edge rings for about as long again as it takes.
    fallen = int(high[-1]) + 1 if high.size else 0
    inside = inside[_RINGS * fallen :]
    if inside.size < 6 or peak == 0.0:
        return None
    left = departure[inside] / peak
    per_unit = (
        math.nan
        if train.table.shift_per_volt is None
        else shift_rate(train, envelope.unit) * peak / (2.0 * math.pi)
    )
    start, end = float(np.abs(left[0])), float(np.abs(left[-1]))
    settling = _fitted(envelope.t[inside] - begin, left, _TAIL_FLOOR)
    signed = float(left[0].real), float(left[-1].real)
    return Tail(
        begin, stop - begin, start, end, signed[0] * per_unit, signed[1] * per_unit, settling
    )


def _fitted(times: FloatArray, values: ComplexArray, floor: float) -> Settling:
    """Fit exponentials to real and imaginary part, of so many samples as that takes."""
    chosen = np.unique(np.linspace(0, times.size - 1, _FIT_SAMPLES).astype(np.intp))
    parts = np.column_stack((values.real, values.imag))[chosen]
    return fit_tail(times[chosen], parts, floor=floor)


def settle_step(
    train: Train,
    envelope: Envelope,
    *,
    delay: float,
    height: complex | None,
    ideal: FloatArray | None,
) -> StepSettling:
    """Judge a step at the sources by what it makes at the probe.

    Parameters
    ----------
    train : Train
        What was played.
    envelope : Envelope
        What came out.
    delay : float
        Of the ideal step behind the sources, in s.
    height : complex or None
        Of the ideal step, in the envelope's unit; default: where the measured one ends.
    ideal : ndarray, shape (n,), or None
        The ideal step from 0 to 1 on the envelope's grid; default: a sharp one.

    Returns
    -------
    StepSettling
        From the step to the end of its length.
    """
    begin = train.pulse_begin + delay
    stop = begin + (train.table.step or 0.0)
    inside = (envelope.t >= begin) & (envelope.t <= stop)
    departure = envelope.iq[inside]
    t = envelope.t[inside] - begin
    top = departure[-1] if height is None else height
    wanted = np.ones(t.size) if ideal is None else ideal[inside]
    error = np.asarray((departure / top).real - wanted)
    outside = np.flatnonzero(np.abs(error) > _SETTLED)
    never = outside.size and outside[-1] == t.size - 1
    settled = math.nan if never else float(t[outside[-1] + 1]) if outside.size else 0.0
    # The edge itself is no exponential.
    up = np.flatnonzero(np.abs(departure) >= (1.0 - _FALLEN) * np.abs(top))
    behind = slice(_RINGS * int(up[0]) if up.size and _RINGS * up[0] < t.size - 6 else 0, None)
    settling = _fitted(t[behind], error[behind].astype(np.complex128), _TAIL_FLOOR)
    return StepSettling(t, error, settled, settling)
