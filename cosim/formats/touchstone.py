"""Touchstone files: the transmission of a measured or modelled line, filter or package.

scikit-rf parses the file. It is an extra, and is loaded when a file is read.
"""

import io
import os
import warnings
from dataclasses import dataclass, field
from importlib import import_module
from pathlib import Path
from types import ModuleType

import numpy as np

from cosim.errors import InputError, MissingDependencyError, WaveformError
from cosim.formats.files import read_text
from cosim.waveform import ComplexArray, FloatArray

Pair = tuple[int, int]
_Ends = tuple[tuple[int, ...], tuple[int, ...]]

# A passive network has no singular value above 1. Rounding in a file may pass it by the first
# bound; an instrument's calibration by some per cent; beyond the second the data are wrong.
PASSIVE = 1e-6
PASSIVE_LIMIT = 1.05


@dataclass(frozen=True, slots=True)
class LineResponse:
    """What a line does to an incident wave on its way from the near to the far end.

    Parameters
    ----------
    frequency : ndarray, shape (n,)
        In Hz, rising.
    transmission : ndarray of complex, shape (n,)
        S21, or SDD21 of a differential pair: outgoing over incident wave, both ends matched to
        `impedance`, for exp(+j omega t), so that a delay turns the phase backwards.
    near_reflection, far_reflection : ndarray of complex, shape (n,)
        S11 and S22, or SDD11 and SDD22: what comes back of a wave into either end.
    impedance : float
        Reference impedance of each port in ohm; a differential wave sees twice that.
    file_impedance : float
        Reference impedance of the near port in the file, in ohm.
    largest_singular_value : float
        Of the whole scattering matrix, over all frequencies; at most 1 for a passive network.
    below, above : str
        How the response is known below the first and above the last point, in words.
    warnings : tuple of str
        What to know before using it.
    """

    frequency: FloatArray = field(metadata={"unit": "Hz", "axes": ("frequency",)})
    transmission: ComplexArray = field(metadata={"unit": "1", "axes": ("frequency",)})
    near_reflection: ComplexArray = field(metadata={"unit": "1", "axes": ("frequency",)})
    far_reflection: ComplexArray = field(metadata={"unit": "1", "axes": ("frequency",)})
    impedance: float = field(metadata={"unit": "ohm"})
    file_impedance: float = field(metadata={"unit": "ohm"})
    largest_singular_value: float
    below: str
    above: str
    warnings: tuple[str, ...]


def read_line(
    path: str | os.PathLike[str],
    *,
    ports: Pair | tuple[Pair, Pair] = (1, 2),
    impedance: float | None = None,
    carrier_frequency: float | None = None,
    passive: bool = True,
) -> LineResponse:
    """Read the transmission of a line from a Touchstone file.

    Parameters
    ----------
    path : path
        Touchstone 1 or 2, with a name that ends in .s2p, .s4p and so on, or .ts.
    ports : pair of int, or pair of pairs
        Near and far port, counted from 1. For a differential pair ((p, n), (p', n')): positive
        and negative port of the near end, then of the far end. ((1, 3), (2, 4)) is the numbering
        with odd ports on the near side; where 1 and 2 are on the near side, say ((1, 2), (3, 4)).
    impedance : float or None
        Wanted reference impedance of each port in ohm; default: the file's. Ports that are not
        named are matched to it.
    carrier_frequency : float or None
        In Hz; the file must cover it.
    passive : bool
        Whether a network that makes power is refused; False for an amplifier.

    Returns
    -------
    LineResponse
        Transmission between matched ends. SDD21 is (S[p',p] - S[p',n] - S[n',p] + S[n',n])/2
        (D. E. Bockelman and W. R. Eisenstadt, IEEE Trans. Microw. Theory Tech. 43, 1530 (1995)).

    Raises
    ------
    MissingDependencyError
        If scikit-rf is not installed.
    MissingFileError, InputError
        If there is no such file, or the ports or the impedance are impossible.
    WaveformError
        If the file is not a Touchstone file with scattering parameters, is not passive by more
        than 5 % where it should be, has fewer than two points, or does not cover the carrier.
    """
    file = str(path)
    f, s, z = _parse(Path(path))
    pairs = _pairs(ports, s.shape[1], file)
    _check_numbers(f, s, file)
    old = float(z[pairs[0][0]])
    if impedance is None and not np.allclose(z, old, rtol=1e-9, atol=0.0):
        raise WaveformError(
            f"{file}: the ports have the reference impedances "
            f"{', '.join(f'{value:g}' for value in z)} ohm, so one must be chosen",
            hint="give the wanted `impedance` in ohm",
        )
    new = old if impedance is None else impedance
    if not (np.isfinite(new) and new > 0.0):
        raise InputError(f"the reference impedance must be positive, got {new} ohm")
    largest = float(np.linalg.svd(s, compute_uv=False).max())
    s = _renormalised(s, z, new)
    if carrier_frequency is not None and not f[0] <= carrier_frequency <= f[-1]:
        raise WaveformError(
            f"{file}: the file covers {f[0] / 1e9:g} GHz to {f[-1] / 1e9:g} GHz, which does not "
            f"hold the carrier at {carrier_frequency / 1e9:g} GHz",
            hint="measure or export the line over a wider range",
        )
    return LineResponse(
        frequency=f,
        transmission=_wave(s, pairs[1], pairs[0]),
        near_reflection=_wave(s, pairs[0], pairs[0]),
        far_reflection=_wave(s, pairs[1], pairs[1]),
        impedance=float(new),
        file_impedance=old,
        largest_singular_value=largest,
        below="present"
        if f[0] == 0.0
        else f"extrapolated from {f[0]:.6g} Hz: magnitude held, phase to a multiple of pi at 0 Hz",
        above=f"beyond {f[-1]:.6g} Hz: magnitude held, phase by the line's delay",
        warnings=(*(_passivity(largest, file) if passive else ()), *_order(s, pairs, file)),
    )


def _scikit_rf() -> ModuleType:
    try:
        return import_module("skrf.io.touchstone")
    except ImportError as error:
        raise MissingDependencyError(
            f"Touchstone files need scikit-rf, which cannot be loaded: {error}",
            hint='type: pip install "qcosim[rf]"',
        ) from None


def _parse(path: Path) -> tuple[FloatArray, ComplexArray, FloatArray]:
    """Frequency (n,) in Hz, scattering matrix (n, p, p), reference impedances (p,) in ohm."""
    # scikit-rf's Network tries to unpickle a file first, which would run what is in it; its
    # parser alone does not, and gets the text only.
    parser = _scikit_rf().Touchstone
    text = io.StringIO(read_text(path))
    text.name = str(path)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # What is wrong with the numbers is checked below.
            data = parser(text)
        f, s = data.get_sparameter_arrays()
        z, modes = np.asarray(data.z0), "".join(str(mode)[:1] for mode in data.port_modes)
        f = np.ascontiguousarray(f, dtype=float)
        s = np.ascontiguousarray(s, dtype=complex)
        z = np.broadcast_to(z, s.shape[:2])
        kind = str(data.parameter).lower()
    except Exception as error:  # The parser meets a wrong file with whatever goes wrong first.
        raise WaveformError(
            f"{path}: the file cannot be read as Touchstone: {type(error).__name__}: {error}",
            hint="its name must end in .s2p, .s4p and so on, after the number of ports",
        ) from None
    if kind != "s":
        raise WaveformError(f"{path}: wanted scattering parameters, got {kind.upper()}-parameters")
    if modes.strip("S"):
        raise WaveformError(f"{path}: wanted single-ended ports, got mixed modes")
    if f.size < 2 or s.ndim != 3:
        raise WaveformError(f"{path}: wanted at least two frequencies, got {f.size}")
    if np.abs(z.imag).max() > 1e-9 * np.abs(z).max() or np.ptp(z.real, axis=0).max() > 0.0:
        raise WaveformError(
            f"{path}: wanted real and constant reference impedances, got {z[0, 0]:g} ohm",
            hint="export the file renormalised to 50 ohm",
        )
    if not (z.real > 0.0).all():
        raise WaveformError(f"{path}: wanted positive reference impedances, got {z[0].real} ohm")
    return f, s, np.ascontiguousarray(z[0].real)


def _pairs(ports: Pair | tuple[Pair, Pair], count: int, file: str) -> _Ends:
    """Near and far ports from 0, each as a tuple of one or two."""
    ends = tuple(end if isinstance(end, tuple) else (end,) for end in ports)
    flat = [port for end in ends for port in end]
    if len(ends) != 2 or len(ends[0]) != len(ends[1]) or len(ends[0]) > 2:
        raise InputError(f"wanted two ports or two pairs of ports, got {ports}")
    if len(set(flat)) < len(flat) or not all(1 <= port <= count for port in flat):
        raise InputError(f"{file}: wanted different ports from 1 to {count}, got {ports}")
    near, far = (tuple(port - 1 for port in end) for end in ends)
    return near, far


def _check_numbers(f: FloatArray, s: ComplexArray, file: str) -> None:
    if not (np.isfinite(f).all() and np.isfinite(s).all()):
        raise WaveformError(f"{file}: a value is not finite")
    if f[0] < 0.0 or (np.diff(f) <= 0.0).any():
        raise WaveformError(f"{file}: the frequency must rise from 0 Hz or above")


def _renormalised(s: ComplexArray, old: FloatArray, new: float) -> ComplexArray:
    """Scattering matrices for real reference impedances `new` at all ports.

    S' = C (S - R) (1 - R S)^-1 C^-1 with r = (new - old)/(new + old) and c = 1/sqrt(1 - r^2), after
    K. Kurokawa, IEEE Trans. Microw. Theory Tech. 13, 194 (1965), for real impedances. Unlike the
    way over an impedance matrix, it stays regular for an ideal line.
    """
    if (old == new).all():
        return s
    ratio = (new - old) / (new + old)
    r = np.diag(ratio)
    c = 1.0 / np.sqrt(1.0 - ratio**2)
    inner = np.eye(old.size) - r @ s
    # X = (S - R) (1 - R S)^-1 solves (1 - R S)^T X^T = (S - R)^T.
    x = np.linalg.solve(inner.transpose(0, 2, 1), (s - r).transpose(0, 2, 1)).transpose(0, 2, 1)
    return np.asarray(x * (c[None, :, None] / c[None, None, :]), dtype=np.complex128)


def _wave(s: ComplexArray, out: tuple[int, ...], into: tuple[int, ...]) -> ComplexArray:
    """Outgoing wave at one end over the incident wave at an end; of a pair differential ones."""
    if len(into) == 1:
        return np.ascontiguousarray(s[:, out[0], into[0]])
    (p, n), (p_out, n_out) = into, out
    total = s[:, p_out, p] - s[:, p_out, n] - s[:, n_out, p] + s[:, n_out, n]
    return np.ascontiguousarray(total / 2.0)


def _passivity(largest: float, file: str) -> tuple[str, ...]:
    if largest > PASSIVE_LIMIT:
        raise WaveformError(
            f"{file}: the network is not passive: its largest singular value is {largest:.4g}",
            hint="an amplifier belongs into the netlist, or under 'amplifier' of a readout; else "
            "the file or its format is wrong",
        )
    if largest > 1.0 + PASSIVE:
        return (
            f"{file} is not quite passive: its largest singular value exceeds 1 by "
            f"{largest - 1.0:.1e}",
        )
    return ()


def _order(s: ComplexArray, pairs: _Ends, file: str) -> tuple[str, ...]:
    """A warning when most of what enters a pair leaves at another port than the one named."""
    near, far = pairs
    if len(near) == 1:
        return ()
    power = (np.abs(s[:, :, near[0]]) ** 2).mean(axis=0)
    power[near[0]] = 0.0  # What comes back says nothing about the numbering.
    loudest = int(power.argmax())
    if loudest == far[0]:
        return ()
    return (
        f"{file}: most of the wave into port {near[0] + 1} leaves at port {loudest + 1}, not at "
        f"port {far[0] + 1}: check the numbering of the ports",
    )
