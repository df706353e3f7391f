"""What a specification of a gate says, declared for the archive and for machines."""

from dataclasses import dataclass, field

from cosim.waveform import FloatArray

# What varies little from run to run has no column of its own in an archive's table.
NOT_IN_TABLE = {"table": False}


@dataclass(frozen=True, slots=True)
class BlockLimit:
    """What one block must meet.

    Parameters
    ----------
    name : str
        As its table, [specify.NAME], is called.
    label : str
        For people.
    limit : float
        In `unit`.
    unit : str
        "1" for a ratio and for bits.
    given : bool
        Whether the testbench gave it.
    share : float
        What it costs alone at its limit, 1 - F_avg.
    formula : float
        The limit that the formula for small errors gives for the same share; NaN where there is
        none.
    power : float
        In W; NaN without a power law.
    note : str
        The same in other words: what it comes to, and in which unit a data sheet has it.
    """

    name: str
    label: str
    limit: float = field(metadata={"unit_from": "unit"})
    unit: str
    given: bool
    share: float = field(metadata={"unit": "1"})
    formula: float = field(metadata={"unit_from": "unit"})
    power: float = field(metadata={"unit": "W"})
    note: str


@dataclass(frozen=True, slots=True)
class LimitMask:
    """A limit that depends on the frequency.

    Parameters
    ----------
    name : str
        Of the block.
    label : str
        For people: what the mask means.
    unit : str
        Of the levels.
    low, high : ndarray, shape (n,)
        Offsets from the carrier in Hz between which the level holds; equal for a single one.
    levels : ndarray, shape (n,)
        In `unit`.
    """

    name: str
    label: str
    unit: str
    low: FloatArray = field(metadata={"unit": "Hz", "axes": ("band",)})
    high: FloatArray = field(metadata={"unit": "Hz", "axes": ("band",)})
    levels: FloatArray = field(metadata={"unit_from": "unit", "axes": ("band",)})


@dataclass(frozen=True, slots=True)
class Verification:
    """All blocks at their limits together, by simulation.

    Parameters
    ----------
    infidelity : float
        1 - F_avg with the limits as they are told, for the worst signs and phases of what stays the
        same, and seeded samples of what fluctuates; decoherence and the pulse itself included.
    standard_error : float
        Of it, from the samples.
    before_shrinking : float
        The same with the limits as the allocation gave them.
    shrinking : float
        Factor on the errors of all blocks that are not given, 1 where the allocation held.
    combinations : int
        Of signs and phases that were tried.
    samples : int
        Of all noise together.
    """

    infidelity: float = field(metadata={"unit": "1"})
    standard_error: float = field(metadata={"unit": "1"})
    before_shrinking: float = field(metadata={"unit": "1"})
    shrinking: float = field(metadata={"unit": "1"})
    combinations: int = field(metadata={"unit": "1"})
    samples: int = field(metadata={"unit": "1"})


@dataclass(frozen=True, slots=True)
class GateSpecification:
    """What each block of a gate's electronics must meet.

    Parameters
    ----------
    title : str
        Of the testbench.
    target : str
        The rotation in words.
    target_infidelity : float
        1 - F_avg that everything together may cost.
    allocation : str
        "weights" or "power".
    frame : str
        Against which frequency and phase noise of the carrier count.
    decoherence : float
        What T1, T2 and the thermal population cost: fixed.
    pulse_infidelity : float
        What the ideal pulse, calibrated, leaves by itself.
    numerical_floor : float
        1 - F_avg between the ideal pulse and the same on half as long cells.
    budget : float
        What is left for the blocks.
    combined : float
        What the blocks cost together by the rule of addition.
    blocks : tuple of BlockLimit
        What each must meet.
    masks : tuple of LimitMask
        Of those that depend on the frequency.
    verification : Verification
        By simulation.
    total_power : float
        In W, of the blocks with a power law; NaN without any.
    power_per_infidelity : float
        Power in W that one more unit of infidelity would save, where the power is least; NaN else.
    peak_rabi : float
        Of the ideal pulse at its peak in Hz.
    peak_voltage : float
        Carrier peak of the incident wave at the qubit in V.
    rule : str
        How infidelities were added.
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
    target: str
    target_infidelity: float = field(metadata={"unit": "1"})
    allocation: str
    frame: str
    decoherence: float = field(metadata={"unit": "1"})
    pulse_infidelity: float = field(metadata={"unit": "1"})
    numerical_floor: float = field(metadata={"unit": "1"})
    budget: float = field(metadata={"unit": "1"})
    combined: float = field(metadata={"unit": "1"})
    blocks: tuple[BlockLimit, ...]
    masks: tuple[LimitMask, ...]
    verification: Verification
    total_power: float = field(metadata={"unit": "W"})
    power_per_infidelity: float = field(metadata={"unit": "W"})
    peak_rabi: float = field(metadata={"unit": "Hz"})
    peak_voltage: float = field(metadata={"unit": "V"})
    rule: str
    warnings: tuple[str, ...]
    started: str
    wall_time: float = field(metadata={"unit": "s"})
    versions: dict[str, str] = field(metadata=NOT_IN_TABLE)
    testbench: str = field(metadata=NOT_IN_TABLE)

    def block(self, name: str) -> BlockLimit:
        """Give what one block must meet, by its name."""
        return next(item for item in self.blocks if item.name == name)

    def mask(self, name: str) -> LimitMask:
        """Give the mask of one block, by its name."""
        return next(item for item in self.masks if item.name == name)


SPECIFICATION_KINDS: dict[str, type] = {
    cls.__name__: cls for cls in (GateSpecification, BlockLimit, LimitMask, Verification)
}
