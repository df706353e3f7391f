"""The three fidelities of a gate, and their error bars from a second run of the circuit."""

import math
from dataclasses import dataclass, replace

from cosim.adjust import Calibration, Pulse
from cosim.quantum.fidelity import (
    average_gate_fidelity,
    channel_distance,
    incoherent_infidelity,
    process_fidelity,
)
from cosim.quantum.frame import FreeFrame, phase_frame
from cosim.result import Fidelity
from cosim.waveform import ComplexArray

# Error of a run over its change on halving the step: 4/3 for a method of second order, as the
# trapezoidal rule is, and 2 for one of first order. Circuits with fast edges lie in between:
# 1.9 was measured on a transistor-level modulator.
MARGIN = 2.0


@dataclass(frozen=True, slots=True)
class Views:
    """The channel of the first run as simulated, in its free frame and calibrated.

    Parameters
    ----------
    channel : ndarray of complex, shape (levels^2, levels^2)
        As simulated.
    free : FreeFrame
        Its best virtual Z angles.
    calibration : Calibration
        Its best amplitude scale and carrier offset.
    target : ndarray of complex, shape (2, 2)
        Target unitary.
    """

    channel: ComplexArray
    free: FreeFrame
    calibration: Calibration
    target: ComplexArray

    def fidelities(self, second: Pulse | None) -> tuple[Fidelity, Fidelity, Fidelity]:
        """Give the three fidelities.

        Parameters
        ----------
        second : Pulse or None
            The pulse of a run at half the step; its channels are seen through the frame and the
            calibration of the first run.

        Returns
        -------
        tuple of three Fidelity
            As simulated, free frame, calibrated; error bars are NaN without a second run.
        """
        best = self.calibration
        still = FreeFrame(0.0, 0.0, *self._pair(self.channel))
        other = tuned = None
        if second is not None:
            other = second.channel()
            tuned = second.channel(scale=best.scale, detuning=best.detuning)
        calibrated = self._fidelity(best.channel, best.frame, tuned)
        return (
            self._fidelity(self.channel, still, other),
            self._fidelity(self.channel, self.free, other),
            replace(calibrated, amplitude_scale=best.scale, detuning=best.detuning),
        )

    def floor(self, second: Pulse | None) -> float:
        """Give the distance of the channels of the two runs; NaN without a second run."""
        return math.nan if second is None else channel_distance(self.channel, second.channel())

    def _pair(self, channel: ComplexArray) -> tuple[float, float]:
        # Rounding may carry a perfect gate past 1.
        average = average_gate_fidelity(channel, self.target)
        return min(1.0, average), min(1.0, process_fidelity(channel, self.target))

    def _fidelity(
        self, channel: ComplexArray, frame: FreeFrame, other: ComplexArray | None
    ) -> Fidelity:
        average, process = self._pair(phase_frame(channel, frame.before, frame.after))
        bars = (math.nan, math.nan)
        if other is not None:
            again = self._pair(phase_frame(other, frame.before, frame.after))
            distance = channel_distance(channel, other)
            incoherent = incoherent_infidelity(channel)
            bars = (
                error_bar(average, again[0], distance, incoherent),
                # 1 - F_pro is (d + 1)/d = 3/2 of 1 - F_avg for one qubit.
                error_bar(process, again[1], 1.5 * distance, 1.5 * incoherent),
            )
        return Fidelity(average, process, *bars, z_before=frame.before, z_after=frame.after)


def error_bar(fidelity: float, again: float, distance: float, incoherent: float = 0.0) -> float:
    """Bound the error of a fidelity from two runs of the circuit simulator.

    Parameters
    ----------
    fidelity, again : float
        Of the first run, and of the one at half the step and tighter tolerances, in one frame.
    distance : float
        1 - F between the channels of the two runs.
    incoherent : float
        Part of the infidelity that no unitary could undo.

    Returns
    -------
    float
        max(e |change of F|, 2 sqrt(c d) + d + 6 i sqrt(d)): e = 2, d the distance times e^2, i the
        incoherent part of the infidelity and c the rest of it. The change alone is blind where
        errors cancel. 2 sqrt(c d) + d is what a coherent error of that size does to a coherent
        infidelity at most, for the angle arccos(sqrt(F)) obeys the triangle inequality; the last
        term bounds what decoherence, a contraction by at most 6 i in the Hilbert-Schmidt norm of
        the Pauli transfer matrix, can make of it by Cauchy and Schwarz.
    """
    distance = MARGIN**2 * distance
    coherent = max(0.0, 1.0 - fidelity - incoherent)
    root = math.sqrt(distance)
    spread = 2.0 * math.sqrt(coherent) * root + distance + 6.0 * incoherent * root
    return max(MARGIN * abs(again - fidelity), spread)
