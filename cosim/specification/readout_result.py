"""What a specification of a readout says, declared for the archive and for machines."""

from dataclasses import dataclass, field

from cosim.dsp.detection.assignment import ErrorItems
from cosim.dsp.detection.shots import ShotCounts
from cosim.specification.result import NOT_IN_TABLE, SPECIFICATION_KINDS, BlockLimit


@dataclass(frozen=True, slots=True)
class ReadoutSpecification:
    """What each block of a readout must meet.

    Parameters
    ----------
    title : str
        Of the testbench.
    target_error : float
        Assignment error that everything together may cause.
    base_error : float
        That of a chain without noise, pole and converters: what is fixed.
    base : ErrorItems
        What it is made of; its separation error is that of the vacuum and of loss.
    blocks : tuple of BlockLimit
        What each must meet; a share is by how much the error grows with the block, on top of those
        before it, and of those that are given with all of these together.
    assignment_error : float
        With everything at its limit, in closed form.
    snr : float
        Signal over noise, distance of the means over the standard deviation.
    added_quanta, least_added_quanta : float
        What stages and chain add at the resonator's output, and the least that they could.
    full_scale : float
        Peak-to-peak range of the converters in V, behind the gain of [readout]; NaN without them.
    integration_time : float
        In s, the shortest with which the target is met.
    longest_integration : float
        In s, the longest within the window.
    clipped : float
        Expected share of samples outside the converters' range.
    lsb_over_sigma : float
        Step of the converters over the noise of a sample.
    shots : ShotCounts
        Integrated shots with everything at its limit.
    records : ShotCounts
        The same as whole records in time, rounded sample by sample.
    warnings : tuple of str
        What the reader must know.
    started : str
        ISO 8601 with UTC offset.
    wall_time : float
        In s.
    versions : dict of str
        Package to version.
    testbench : str
        As TOML, complete.
    """

    title: str
    target_error: float = field(metadata={"unit": "1"})
    base_error: float = field(metadata={"unit": "1"})
    base: ErrorItems
    blocks: tuple[BlockLimit, ...]
    assignment_error: float = field(metadata={"unit": "1"})
    snr: float = field(metadata={"unit": "1"})
    added_quanta: float = field(metadata={"unit": "1"})
    least_added_quanta: float = field(metadata={"unit": "1"})
    full_scale: float = field(metadata={"unit": "V"})
    integration_time: float = field(metadata={"unit": "s"})
    longest_integration: float = field(metadata={"unit": "s"})
    clipped: float = field(metadata={"unit": "1"})
    lsb_over_sigma: float = field(metadata={"unit": "1"})
    shots: ShotCounts
    records: ShotCounts
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata={"unit": "s"})
    versions: dict[str, str] = field(metadata=NOT_IN_TABLE)
    testbench: str = field(metadata=NOT_IN_TABLE)

    def block(self, name: str) -> BlockLimit:
        """Give what one block must meet, by its name."""
        return next(item for item in self.blocks if item.name == name)


READOUT_SPECIFICATION_KINDS: dict[str, type] = SPECIFICATION_KINDS | {
    cls.__name__: cls for cls in (ReadoutSpecification, ErrorItems, ShotCounts)
}
