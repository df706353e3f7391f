"""How far the runs of a readout are: many short ones, whose simulated times are added up."""

from collections.abc import Callable

Report = Callable[[float], None]


class RunProgress:
    """Adds up what has been simulated, and reports it where somebody looks."""

    def __init__(self, report: Report | None = None) -> None:
        self._report = report
        self._done = 0.0

    def within(self, time: float) -> None:
        """Tell how far the run is that is going on, in s."""
        if self._report is not None:
            self._report(self._done + time)

    def end(self, time: float) -> None:
        """Tell that a run of this length in s has ended."""
        self._done += time
        self.within(0.0)
