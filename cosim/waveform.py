"""Waveforms and envelopes: the arrays that travel between the wings."""

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from cosim.errors import WaveformError

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class Waveform:
    """A real signal on any rising time grid.

    Parameters
    ----------
    t : ndarray, shape (n,)
        Time in s, strictly rising, finite.
    v : ndarray, shape (n,)
        Value in `unit`, finite.
    unit : str
        Unit of `v`, "V" or "A".

    Raises
    ------
    WaveformError
        If the shapes differ, fewer than two samples are given, a value is not finite or the
        time does not rise.
    """

    t: FloatArray = field(metadata={"unit": "s", "axes": ("t",)})
    v: FloatArray = field(metadata={"unit_from": "unit", "axes": ("t",)})
    unit: str = "V"

    def __post_init__(self) -> None:
        t = np.ascontiguousarray(self.t, dtype=np.float64)
        v = np.ascontiguousarray(self.v, dtype=np.float64)
        object.__setattr__(self, "t", t)
        object.__setattr__(self, "v", v)
        if t.ndim != 1 or t.shape != v.shape:
            raise WaveformError(
                f"time and value must be one-dimensional and of one length, got shapes "
                f"{t.shape} and {v.shape}"
            )
        if t.size < 2:
            raise WaveformError(f"a waveform needs at least two samples, got {t.size}")
        if not np.isfinite(t).all() or not np.isfinite(v).all():
            bad = int(np.flatnonzero(~(np.isfinite(t) & np.isfinite(v)))[0])
            raise WaveformError(f"the waveform is not finite at sample {bad} of {t.size}")
        steps = np.diff(t)
        if not (steps > 0).all():
            bad = int(np.flatnonzero(steps <= 0)[0])
            raise WaveformError(
                f"the time must rise, but sample {bad + 1} is at {t[bad + 1]:.6g} s "
                f"after {t[bad]:.6g} s"
            )


@dataclass(frozen=True, slots=True)
class Envelope:
    """A complex envelope I + jQ on a uniform grid, v(t) = Re[(I + jQ) exp(+j 2 pi f_c t)].

    Parameters
    ----------
    t0 : float
        Time of the first sample in s.
    dt : float
        Sample interval in s.
    iq : ndarray of complex, shape (n,)
        I + jQ as carrier peak amplitude in `unit`; the phase refers to t = 0, not to `t0`.
    carrier_frequency : float
        f_c in Hz.
    unit : str
        Unit of `iq`, "V" or "A".
    """

    t0: float = field(metadata={"unit": "s"})
    dt: float = field(metadata={"unit": "s"})
    iq: ComplexArray = field(
        metadata={"unit_from": "unit", "axes": ("t",), "axis_units": {"t": "s"}}
    )
    carrier_frequency: float = field(metadata={"unit": "Hz"})
    unit: str = "V"

    @property
    def t(self) -> FloatArray:
        """Times of the samples in s, shape (n,)."""
        return np.asarray(self.t0 + self.dt * np.arange(self.iq.size), dtype=np.float64)
