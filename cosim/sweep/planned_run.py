"""One run of a plan, by what sets it apart and what it shares with others."""

from collections.abc import Mapping
from dataclasses import dataclass

from cosim.sweep.columns import EACH


@dataclass(frozen=True, slots=True)
class SweepRun:
    """One run of a sweep.

    Parameters
    ----------
    number : int
        From 0, in the order of the plan.
    identity : str
        SHA-256 of all that determines its result, in hexadecimal: the same in every process, for
        every sweep that holds the run.
    seed : int
        Its own seed, from the identity, 1 to 2^31 - 1.
    values : mapping
        "corner", dotted keys, "sample", "perturbed" -> name or number in SI units.
    waveform_key : str
        SHA-256 of what determines the circuit's waveform: runs that differ in the qubit, the line
        behind the probe or the gate only share it; of a readout those that differ in what is done
        with its records.
    deck_key : str
        SHA-256 of the deck as read, without its parameters.
    trim : str
        "frozen" or "each"; empty where the sweep trims nothing.
    trim_key : str
        SHA-256 of all that determines its trim; empty as above.
    """

    number: int
    identity: str
    seed: int
    values: Mapping[str, float | str]
    waveform_key: str
    deck_key: str
    trim: str = ""
    trim_key: str = ""

    @property
    def family(self) -> str:
        """What it shares with runs of one task: a trim of their own, or a waveform."""
        return self.trim_key if self.trim == EACH else self.waveform_key
