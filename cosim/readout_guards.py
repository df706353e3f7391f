"""What the reader of a readout's result must know: warnings, each with its number."""

import math

from cosim.dsp.detection.assignment import AssignmentSplit
from cosim.dsp.detection.shots import ShotCounts
from cosim.outgoing import least_added_quanta
from cosim.quantum.readout_limits import DispersiveGuards, dispersive_guards, transmon_pulls
from cosim.readout_noise import ARRIVING, ChainNoise
from cosim.readout_schema import ResonatorTable
from cosim.units import format_quantity

UNEVEN = 0.05  # of the answers' sizes: beyond, the chain bends one state more than the other
SLACK = 3.0  # standard errors between a count and the closed form
COARSE = 0.05  # of the assignment error, that the interpolation of decays may be wrong by
CLIPPED = 1e-3  # of the samples
STEP = 2.0  # of the converter, over the noise of a sample
NEAR_CRITICAL = 0.1  # of the critical photon number
CHI_OFF = 0.2  # of chi, against what the coupling makes
BENT = 0.1  # of the noise, by which a run of all of it may differ from the sum of its parts
UNSURE = 0.2  # relative standard error of the noise


def dispersive_numbers(pulse: ResonatorTable, photons: float) -> DispersiveGuards | None:
    """Say in numbers how far the qubit only shifts its resonator.

    Parameters
    ----------
    pulse : ResonatorTable
        With `coupling` and `qubit_frequency`, or nothing is known.
    photons : float
        Largest mean photon number of the readout.

    Returns
    -------
    DispersiveGuards or None

    Raises
    ------
    InputError
        If chi has another sign than coupling, detuning and anharmonicity make.
    """
    qubit = pulse.qubit()
    if qubit is None or pulse.coupling is None:
        return None
    coupling = 2.0 * math.pi * pulse.coupling
    return dispersive_guards(pulse.resonator(), qubit, coupling, photons, pulse.filter_quality)


def dispersive_warnings(pulse: ResonatorTable, photons: float, t1: float) -> tuple[str, ...]:
    """Judge whether the qubit only shifts its resonator.

    Parameters
    ----------
    pulse : ResonatorTable
        With `coupling` and `qubit_frequency`, or nothing is judged.
    photons : float
        Largest mean photon number of the readout.
    t1 : float
        Decay time of |1> in s that the readout is given.

    Returns
    -------
    tuple of str

    Raises
    ------
    InputError
        If chi has another sign than coupling, detuning and anharmonicity make.
    """
    found = dispersive_numbers(pulse, photons)
    if found is None or pulse.coupling is None or pulse.qubit_frequency is None:
        return ()
    warnings = []
    if photons > NEAR_CRITICAL * found.critical_photons:
        warnings.append(
            f"up to {photons:.3g} photons, {photons / found.critical_photons:.2g} of the critical "
            f"number {found.critical_photons:.3g}: the dispersive picture overrates the readout"
        )
    expected = found.expected_chi / (2.0 * math.pi)
    if abs(pulse.chi - expected) > CHI_OFF * abs(expected):
        warnings.append(
            f"chi is {format_quantity(pulse.chi, 'Hz')}, and coupling, detuning and anharmonicity "
            f"make {format_quantity(expected, 'Hz')}"
        )
    if pulse.chi_2 is not None and pulse.anharmonicity is not None:
        delta = pulse.qubit_frequency - pulse.frequency
        # Second order in the coupling, hence in Hz as in rad/s.
        pulls = transmon_pulls(pulse.coupling, delta, pulse.anharmonicity)
        expected = pulls[2] - 0.5 * (pulls[0] + pulls[1])
        if abs(pulse.chi_2 - expected) > CHI_OFF * abs(expected):
            warnings.append(
                f"chi_2 is {format_quantity(pulse.chi_2, 'Hz')}, and coupling, detuning and "
                f"anharmonicity make {format_quantity(expected, 'Hz')}"
            )
    if t1 * found.purcell_rate > 1.0:
        given = "no 't1' is given" if math.isinf(t1) else f"'t1' is {format_quantity(t1, 's')}"
        warnings.append(
            f"{given}, and through the resonator alone the qubit decays in "
            f"{format_quantity(1.0 / found.purcell_rate, 's')}"
        )
    return tuple(warnings)


def chain_warnings(
    compression: tuple[float, float],
    noise: ChainNoise,
    added: float,
    split: AssignmentSplit,
) -> tuple[str, ...]:
    """Judge the chain.

    Parameters
    ----------
    compression : tuple of two floats
        Size of the answer to |0> and to |1> over that of a linear chain.
    noise : ChainNoise
        At its output.
    added : float
        Quanta at the resonator's output; NaN where that has no meaning.
    split : AssignmentSplit
        The decisions.

    Returns
    -------
    tuple of str
    """
    warnings = []
    if abs(compression[0] - compression[1]) > UNEVEN:
        state = int(compression[1] < compression[0])
        warnings.append(
            f"the chain saturates for |{state}> more than for |{1 - state}>: its answers are "
            f"{compression[0]:.3g} (|0>) and {compression[1]:.3g} (|1>) of those of a linear chain"
        )
    # The chain ends in a digital record, with a gain that no limit depends on: half a quantum.
    if not math.isnan(added) and added < least_added_quanta(math.inf):
        warnings.append(
            f"the chain adds {added:.3g} quanta, less than the half that one which keeps the phase "
            "must add: a noise temperature is too low, or the netlist's noise is left out"
        )
    if noise.method == ARRIVING:
        warnings.append(
            "the netlist's own noise is not in it: add a table [[noise]] with acts_on = "
            '"probe" and from = "netlist"'
        )
    if noise.relative_error > UNSURE:
        warnings.append(
            f"the noise is known within {noise.relative_error:.0%} of its density: more 'seeds' "
            "in [[noise]] make it surer"
        )
    if noise.bent > BENT:
        warnings.append(
            "the noise of the devices and that which arrives do not add up: run together they "
            f"differ from their sum by {noise.bent:.0%}, so much do they bend the chain; the noise "
            "at its output is not to be relied on"
        )
    if split.clipped > CLIPPED:
        warnings.append(
            f"{split.clipped:.2%} of the samples are outside the converter's range: a larger "
            "'adc_full_scale', or less gain"
        )
    if split.lsb_over_sigma > STEP:
        warnings.append(
            f"a step of the converter is {split.lsb_over_sigma:.3g} of the noise of a sample, so "
            "that rounding is not like noise and the closed form does not hold: a smaller "
            "'adc_full_scale', more 'adc_bits', or more gain"
        )
    if split.interpolation_error > COARSE * split.assignment_error:
        warnings.append(
            f"too few times of decay are simulated: without every other one the error changes by "
            f"{split.interpolation_error:.2g}; more 'decay_times' in [readout]"
        )
    return tuple(warnings)


def shot_warnings(
    split: AssignmentSplit, shots: ShotCounts, records: ShotCounts
) -> tuple[str, ...]:
    """Compare counted decisions with those in closed form.

    Parameters
    ----------
    split : AssignmentSplit
        In closed form.
    shots, records : ShotCounts
        Counted, integrated and as whole records.

    Returns
    -------
    tuple of str
    """
    warnings = []
    for name, counts in (("integrated shots", shots), ("whole records", records)):
        expected = split.assignment_error
        # Without an error that is expected there is no scatter to compare with.
        off = counts.deviation(split.assignment_matrix) if expected > 0.0 else 0.0
        if abs(off) > SLACK:
            why = ""
            if split.lsb_over_sigma > 1.0:
                why = (
                    f"; a step of the converter is {split.lsb_over_sigma:.2g} of the noise, so "
                    "that rounding is not like noise"
                )
            warnings.append(
                f"{counts.count} {name} give an assignment error of "
                f"{counts.assignment_error:.3g}, {abs(off):.1f} standard errors from "
                f"{expected:.3g} in closed form{why}"
            )
    return tuple(warnings)
