"""Waveforms from outside in place of a deck's own voltage and current sources.

What is put in the place of `vin a b sin(0 1 1g)`, measured on ngspice 39:

    vin a stimulus_vin dc 0                     keeps the name, so that i(vin), F, H, W and B follow
    estimulus_vin stimulus_vin b stimulus_vin_value 0 1
    astimulus_vin %v([stimulus_vin_value]) stimulus1
    .model stimulus1 filesource(file="{scratch}/stimulus1.txt" ...)

and of `iin a b 1m` the same with a G element, behind a 0 V source `vstimulus_iin` that gives
i(iin). At every accepted time point, also behind rejected steps, the value differs from the
linear interpolation of the samples by rounding only (2e-16 of 1 V), for 2 to 2,000,000 samples.
200,000 samples add 0.1 s to a run, each source 0.4 us to a time point, where a PWL source of
10,000 points takes 5 s to load. Before its first row a file source gives memory that nobody set,
and behind its last row 0: so the file starts at t = 0 and holds the last value.

The samples set no breakpoints, and the grid of a run stays as uniform as without them. So an edge
shorter than a few steps is only resolved to the step, see `sampling_error`: an edge of two steps
into an RC of 25 steps errs by up to 2e-3 of the edge, and one of 25 steps by 2e-4, where a PULSE
source with its breakpoints errs by 1e-4 and 5e-5; the area under the pulse comes out alike.
"""

import hashlib
import math
from collections.abc import Iterator, Mapping
from dataclasses import replace
from functools import lru_cache
from itertools import islice

import numpy as np

from cosim.circuit.cards import number_text
from cosim.circuit.copies import Edit, edited_lines
from cosim.circuit.deck import DataFile, Deck, DeckFile, SourceLine
from cosim.circuit.hierarchy import Structure, structure_of
from cosim.circuit.lookup import find_device, instances, own_nodes, stimulus_meter
from cosim.circuit.scope import Scope, element_of
from cosim.errors import DeckError, InputError, UnknownNameError, near_names
from cosim.waveform import FloatArray, Waveform

_MOST_OFFERED = 2000
_HOLD = 1e6  # s; the last row of a file stands at least here.
_UNITS = {"v": "V", "i": "A"}
_LONG = 5000  # rows of a file
_DIGITS = 17
_WIDTH = 25  # of a time: 24 characters at the most, and a space


def with_stimulus(deck: Deck, source: str, waveform: Waveform) -> Deck:
    """Let a waveform take the place of one voltage or current source; see `with_stimuli`.

    Parameters
    ----------
    deck : Deck
        The deck.
    source : str
        The source in any case: "vin", "x1.vin".
    waveform : Waveform
        In V for a voltage source, in A for a current source.

    Returns
    -------
    Deck
        The deck with the waveform as that source's value.

    Raises
    ------
    UnknownNameError, InputError
        As `with_stimuli`.
    """
    return with_stimuli(deck, {source: waveform})


def with_stimuli(
    deck: Deck, waveforms: Mapping[str, Waveform], *, files: Mapping[str, DeckFile] | None = None
) -> Deck:
    """Let waveforms take the place of independent voltage and current sources.

    Parameters
    ----------
    deck : Deck
        The deck.
    waveforms : mapping of str to Waveform
        Source in any case ("vin", or inside a subcircuit instance, "x1.vin") -> waveform in V for
        a voltage source, in A for a current source, with the source's polarity. Between samples
        the value is interpolated linearly; before the first and after the last sample it holds.
        The operating point takes the value at t = 0.
    files : mapping of str to DeckFile, optional
        Source as in `waveforms` -> file that its waveform was read from; it joins the deck's files.

    Returns
    -------
    Deck
        Everything that the lines of these sources said besides their nodes is gone: DC and AC
        values, PULSE, SIN and the like. "i(vin)" and "i(iin)" can be saved as before. Only the
        one instance changes: the definitions on the way to it are copied.

    Raises
    ------
    UnknownNameError
        If a source does not exist.
    InputError
        If the name is no independent source, is given twice or has a stimulus already, or the
        waveform has the other unit.
    DeckError
        If a name that the stimulus needs is taken.
    """
    if not waveforms:
        return deck
    structure = structure_of(deck.lines)
    taken = {file.name for file in deck.data_files}
    origins = dict(files or {})
    edits: dict[str, Edit] = {}
    data: list[DataFile] = []
    models: list[SourceLine] = []
    number = 0
    for name, waveform in waveforms.items():
        path = _source_path(deck, name)
        if path in edits:
            raise InputError(f"the source '{path}' is given two stimuli")
        unit = _UNITS[path.rpartition(".")[2][0]]
        if waveform.unit != unit:
            raise InputError(f"the stimulus of '{path}' must be in {unit}, got {waveform.unit}")
        number += 1
        while f"stimulus{number}" in structure.root.models or f"stimulus{number}.txt" in taken:
            number += 1
        model = f"stimulus{number}"
        edits[path] = _replacement(model)
        models.append(SourceLine(_model_text(model), "", 0))
        data.append(_data_file(f"{model}.txt", waveform, origins.get(name)))
    return replace(
        deck,
        lines=(*edited_lines(deck, edits), *models),
        files=(*deck.files, *origins.values()),
        data_files=(*deck.data_files, *data),
    )


def source_names(deck: Deck) -> tuple[str, ...]:
    """Give the independent sources of a deck, flattened.

    Parameters
    ----------
    deck : Deck
        The deck.

    Returns
    -------
    tuple of str
        Names in lower case, "vin" and "x1.vin"; the first two thousand.
    """
    structure = structure_of(deck.lines)
    return tuple(islice(_sources(structure, structure.root, "", set()), _MOST_OFFERED))


def sampling_error(waveform: Waveform, step: float) -> float:
    """Bound what is lost between the time points of a run that do not know of the samples.

    Parameters
    ----------
    waveform : Waveform
        Samples of a stimulus.
    step : float
        Time step of the run in s.

    Returns
    -------
    float
        Greatest distance of a sample from the straight line between the values half a step before
        and half a step after it, in the unit of the waveform. A linear edge of length e and height
        d gives d min(1/2, step/(4 e)), a sine of amplitude A gives A (omega step)^2/8.
    """
    t = waveform.t[1:-1]
    before, after = (np.interp(t + half, waveform.t, waveform.v) for half in (-step / 2, step / 2))
    return float(np.max(np.abs(waveform.v[1:-1] - (before + after) / 2.0), initial=0.0))


def _sources(structure: Structure, scope: Scope, prefix: str, without: set[Scope]) -> Iterator[str]:
    """Give the sources inside an instance; `without` keeps the definitions that hold none."""
    if scope in without:
        return
    names = [prefix + name for name in scope.elements if name[0] in _UNITS]
    yield from names
    found = bool(names)
    for name, definition in instances(structure, scope):
        for inner in _sources(structure, definition, f"{prefix}{name}.", without):
            found = True
            yield inner
    if not found:
        without.add(scope)


def _source_path(deck: Deck, name: str) -> str:
    """Give the path of a source, "x1.vin"."""
    try:
        device = find_device(deck, name)
    except UnknownNameError:
        raise UnknownNameError(
            f"the source '{name.strip()}' does not exist",
            hint=near_names(name.strip(), source_names(deck)),
            file=deck.path,
        ) from None
    if device.letter not in _UNITS:
        raise InputError(
            f"'{name.strip()}' is no independent source, so that it takes no stimulus: "
            f"'{device.text[:60]}'",
            hint=near_names(name.strip(), source_names(deck)),
        )
    # ngspice names a device inside an instance "v.x1.vin".
    return device.name[2:] if "." in device.name else device.name


def _replacement(model: str) -> Edit:
    def edit(structure: Structure, scope: Scope, line: SourceLine) -> tuple[SourceLine, ...]:
        element = element_of(scope, line.text)
        name, letter = element.name, element.letter
        plus, minus = element.nodes
        middle = f"stimulus_{name}"
        value = f"stimulus_{name}_value"
        transfer = "e" if letter == "v" else "g"
        meter = name if letter == "v" else stimulus_meter(name)
        added = {f"{transfer}{middle}", f"a{middle}", meter} - {name}
        nodes = own_nodes(structure, scope) | set(scope.ports) | structure.global_nodes
        taken = sorted((added & scope.elements.keys()) | ({middle, value} & nodes))
        if taken:
            raise DeckError(
                f"'{name}' cannot get a stimulus: there is a '{taken[0]}' already",
                hint="A source takes one stimulus.",
                file=line.file,
                line=line.line,
            )
        texts = (
            f"{meter} {plus} {middle} dc 0",
            f"{transfer}{middle} {middle} {minus} {value} 0 1",
            f"a{middle} %v([{value}]) {model}",
        )
        return tuple(SourceLine(text, line.file, line.line) for text in texts)

    return edit


def _model_text(model: str) -> str:
    return (
        f'.model {model} filesource(file="{{scratch}}/{model}.txt" timeoffset=0 timescale=1 '
        "timerelative=false amploffset=[0] amplscale=[1] amplstep=false)"
    )


def _data_file(name: str, waveform: Waveform, origin: DeckFile | None) -> DataFile:
    """Give the samples as the simulator reads them, under the path that they come from."""
    content = _rows(waveform)
    if origin is None:
        return DataFile("", name, content, hashlib.sha256(content).hexdigest())
    return DataFile(origin.path, name, content, origin.sha256)


def _rows(waveform: Waveform) -> bytes:
    """Write the samples from t = 0 on, and a last row that holds the value.

    Of samples in a row that are equal only the first and the last are written. Numbers have all
    digits; of a long waveform, 16 behind the first of the largest.
    """
    later = waveform.t > 0.0
    stop = max(_HOLD, 2.0 * float(waveform.t[-1]))
    first = float(np.interp(0.0, waveform.t, waveform.v))
    t: FloatArray = np.concatenate(([0.0], waveform.t[later]))
    v: FloatArray = np.concatenate(([first], waveform.v[later]))
    level = np.concatenate(([False], (v[1:-1] == v[:-2]) & (v[1:-1] == v[2:]), [False]))
    t, v = t[~level[: t.size]], v[~level[: v.size]]
    last = f"{number_text(stop)} {number_text(float(v[-1]))}\n".encode()
    if t.size > _LONG:
        return _long_rows(t, v) + last
    rows = zip(t.tolist(), v.tolist(), strict=True)
    return (
        "".join(f"{number_text(at)} {number_text(value)}\n" for at, value in rows).encode() + last
    )


def _long_rows(t: FloatArray, v: FloatArray) -> bytes:
    """Write times, and values as integers of one width with one exponent.

    The values are filled digit by digit for all rows at once: writing each number by itself takes
    a fifth of the time of the simulator's run.
    """
    peak = float(np.abs(v).max()) or 1.0
    exponent = math.floor(math.log10(peak)) - _DIGITS + 2
    left = np.rint(v / peak * (peak / 10.0**exponent)).astype(np.int64)
    digits = np.full((v.size, _DIGITS + 1), ord("0"), np.uint8)
    digits[:, 0] = np.where(left < 0, ord("-"), ord("0"))
    left = np.abs(left)
    for digit in range(_DIGITS):
        left, rest = np.divmod(left, 10)
        digits[:, _DIGITS - digit] += rest.astype(np.uint8)
    stamps = np.frombuffer(_stamps(t.tobytes()), np.uint8).reshape(t.size, _WIDTH)
    ending = np.frombuffer(f"e{exponent}\n".encode(), np.uint8)
    columns = (stamps, digits, np.broadcast_to(ending, (v.size, ending.size)))
    return np.concatenate(columns, axis=1).tobytes()


@lru_cache(maxsize=2)
def _stamps(times: bytes) -> bytes:
    """Write times in columns of one width; the waveforms of many runs stand on the same."""
    texts = map(number_text, np.frombuffer(times).tolist())
    return "".join(text.ljust(_WIDTH) for text in texts).encode()
