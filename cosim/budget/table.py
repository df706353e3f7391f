"""The table [budget]."""

from dataclasses import dataclass
from typing import Annotated, Literal

from cosim.config import Quantity, read_table
from cosim.dsp.anatomy.fitting import Wanted
from cosim.errors import InputError
from cosim.testbench import Testbench

NAME = "budget"


@dataclass(frozen=True, slots=True)
class BudgetTable:
    """Table [budget]: what is costed, and what is known of the ideal pulse.

    Parameters
    ----------
    fidelity : str
        Which of the three fidelities is costed.
    pulse : str
        Family of the ideal pulse; "auto" leaves it to the fit, and "drag" says that it has a DRAG
        quadrature, whatever its family.
    duration : float or None
        Between the half heights in s.
    edge : float or None
        Whole length of each raised-cosine edge in s, of a "flat-top".
    drag : float or None
        Weight of the quadrature (dI/dt)/alpha; 0 for none.
    step_rate : float or None
        Clock of the converter in Hz, for its steps and its feed-through.
    baseband_frequency : float
        Wanted tone minus local oscillator in Hz, negative for the lower sideband; 0 where the
        carrier itself is wanted.
    misfit : float
        Part of the pulse, by its root mean square, that may be left over without a warning.
    """

    fidelity: Literal["as_simulated", "free_frame", "calibrated"] = "free_frame"
    pulse: Literal["auto", "square", "flat-top", "raised cosine", "gaussian", "drag"] = "auto"
    duration: Annotated[float, Quantity("s", above=0.0)] | None = None
    edge: Annotated[float, Quantity("s", least=0.0)] | None = None
    drag: float | None = None
    step_rate: Annotated[float, Quantity("Hz", above=0.0)] | None = None
    baseband_frequency: Annotated[float, Quantity("Hz")] = 0.0
    misfit: float = 0.05

    def __post_init__(self) -> None:
        if self.edge is not None and self.pulse not in ("auto", "flat-top", "drag"):
            raise InputError(f"key 'edge': a {self.pulse} pulse has no edges of its own")
        if self.edge is not None and self.duration is not None and self.edge > self.duration:
            raise InputError(
                f"key 'edge': at most the duration of {self.duration:g} s between the half "
                f"heights, got {self.edge:g} s"
            )
        if self.pulse == "drag" and self.drag == 0.0:
            raise InputError("key 'drag': a pulse = \"drag\" has a weight other than 0")
        if not 0.0 < self.misfit < 1.0:
            raise InputError(f"key 'misfit': wanted a number between 0 and 1, got {self.misfit}")

    def wanted(self) -> Wanted:
        """Give what is known of the ideal pulse, for the fit."""
        return Wanted(
            family="auto" if self.pulse == "drag" else self.pulse,
            drag=True if self.pulse == "drag" else None,
            duration=self.duration,
            edge=self.edge,
            weight=self.drag,
            step_rate=self.step_rate,
            baseband_frequency=self.baseband_frequency,
        )


def budget_table(bench: Testbench) -> BudgetTable:
    """Read the table [budget] of a testbench.

    Parameters
    ----------
    bench : Testbench
        Without the table all keys have their defaults.

    Returns
    -------
    BudgetTable

    Raises
    ------
    TestbenchError
        If a key or value is wrong.
    """
    file = bench.source or "the testbench"
    return read_table(bench.studies.get(NAME, {}), BudgetTable, file=file, name=NAME)
