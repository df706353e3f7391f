"""The port of the circuit: what is probed, and the load that the bridge adds there."""

from collections.abc import Iterator, Sequence

from cosim.circuit.expression import spice_number
from cosim.circuit.netlist import Deck, resolve_saves, with_terminations
from cosim.circuit.probe import Probe, parse_probe
from cosim.errors import DeckError, TestbenchError
from cosim.testbench import Testbench

GROUND = ("0", "gnd")

# A resistor to ground below this is a load of its own; in ohm.
LARGEST_LOAD = 1e3


def open_port(bench: Testbench, deck: Deck) -> tuple[Deck, tuple[Probe, ...], tuple[str, ...]]:
    """Read the probes of a testbench and add their termination to the deck.

    Parameters
    ----------
    bench : Testbench
        The testbench.
    deck : Deck
        The deck, with parameters and instances as the testbench wants them.

    Returns
    -------
    deck : Deck
        With the termination.
    probes : tuple of Probe
        The probe, or I and Q of a baseband pair.
    notices : tuple of str
        What the reader must know.

    Raises
    ------
    ProbeError, UnknownNameError
        If a probe cannot be read or names what is not in the deck.
    TestbenchError
        If a termination is to be added to a current.
    """
    drive = bench.drive
    probes = []
    for key in ("probe", "i", "q"):
        text = getattr(drive, key)
        if text is None:
            continue
        try:
            probe = parse_probe(text)
            resolve_saves(deck, [name for _, name in probe.terms])
        except DeckError as error:
            where = f"{bench.source or 'the testbench'}, table [drive], key '{key}'"
            error.args = (f"{where}: {error.message}",)
            raise
        probes.append(probe)
    if not isinstance(drive.termination, float):
        return deck, tuple(probes), ()
    nodes = _nodes(probes)
    loaded = [
        f"{place}: a resistor to ground stands at the probed node '{node}' already, and the "
        f"bridge adds {drive.termination:g} ohm: if that is one too many, say "
        'termination = "in deck"'
        for node, place in _loads(deck, nodes)
    ]
    return with_terminations(deck, nodes, drive.termination), tuple(probes), tuple(loaded)


def _nodes(probes: Sequence[Probe]) -> tuple[str, ...]:
    for probe in probes:
        if not probe.nodes:
            raise TestbenchError(
                f"the probe '{probe.text}' is a current, so no termination can be added to it",
                hint='say termination = "in deck", and the impedance as "impedance"',
            )
    return tuple(dict.fromkeys(node for probe in probes for node in probe.nodes))


def _loads(deck: Deck, nodes: Sequence[str]) -> Iterator[tuple[str, str]]:
    """Find small resistors from a probed node to ground, at the top level of the deck."""
    depth = 0
    for line in deck.lines:
        words = line.text.lower().split()
        if words[0] == ".subckt":
            depth += 1
        elif words[0] == ".ends":
            depth -= 1
        elif depth == 0 and words[0].startswith("r") and len(words) > 3:
            ends = set(words[1:3])
            value = spice_number(words[3])
            small = value is not None and value < LARGEST_LOAD
            node = next(iter(ends - set(GROUND)), "")
            if small and ends & set(GROUND) and node in nodes:
                yield node, f"{line.file}:{line.line}"
