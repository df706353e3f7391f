"""Oracle: exact evolutions under a weak tone of random phase, and the time integral of Parseval."""

import numpy as np
import pytest
from scipy.integrate import quad_vec

from cosim.errors import InputError
from cosim.quantum.filters import (
    FilterFunction,
    PathSegment,
    carrier_filter_function,
    filter_area,
    filter_function,
    noise_infidelity,
    phase_filter_functions,
    phase_operator,
)
from cosim.quantum.heating import flip_rate
from cosim.quantum.transforms import fourier_integral
from cosim.waveform import ComplexArray

ANHARMONICITY = 2 * np.pi * -0.3e9
TIME, SAMPLES = 20e-9, 401


def ladder(levels: int) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Give a, a^dag a and the anharmonic part of a ladder."""
    a = np.diag(np.sqrt(np.arange(1.0, levels)), k=1).astype(np.complex128)
    n = np.arange(float(levels))
    return a, np.diag(n).astype(complex), np.diag(ANHARMONICITY * n * (n - 1) / 2).astype(complex)


def drive(levels: int, t: np.ndarray) -> ComplexArray:
    """Give the Hamiltonian of a short raised-cosine pulse in both quadratures, which leaks."""
    a, _, _ = ladder(levels)
    envelope = 2 * np.pi * 40e6 * np.sin(np.pi * t / TIME) ** 2 * (1 + 0.3j * t / TIME)
    half = envelope[:, None, None] * a / 2
    return half + np.conj(np.swapaxes(half, 1, 2))


def exponential(h: ComplexArray, dt: float) -> ComplexArray:
    energies, basis = np.linalg.eigh(h)
    return (basis * np.exp(-1j * energies * dt)[..., None, :]) @ np.conj(np.swapaxes(basis, -1, -2))


def evolve(h: ComplexArray, middle: ComplexArray, dt: float) -> ComplexArray:
    """Give the unitaries at all samples from Hamiltonians at the samples and between them.

    Commutator-free steps of fourth order: S. Blanes, P. C. Moan, Appl. Numer. Math. 56, 1519
    (2006), with Simpson's values.
    """
    first = exponential(h[:-1] / 4 + middle / 3 - h[1:] / 12, dt)
    second = exponential(-h[:-1] / 12 + middle / 3 + h[1:] / 4, dt)
    steps = second @ first
    u = [np.eye(h.shape[-1], dtype=np.complex128)]
    for step in steps:
        u.append(step @ u[-1])
    return np.array(u)


def grids() -> tuple[np.ndarray, np.ndarray, float]:
    t = np.linspace(0.0, TIME, SAMPLES)
    return t, (t[1:] + t[:-1]) / 2, t[1]


def nominal(levels: int) -> PathSegment:
    t, between, dt = grids()
    still = ladder(levels)[2]
    return PathSegment(
        0.0, dt, evolve(drive(levels, t) + still, drive(levels, between) + still, dt)
    )


def infidelity(u: ComplexArray, ideal: ComplexArray) -> tuple[float, float]:
    """Give 1 - F_avg and the leaked population of a unitary against another, two lowest levels."""
    m = (ideal.conj().T @ u)[:2, :2]
    kept = np.trace(m @ m.conj().T).real
    return 1 - (kept + abs(np.trace(m)) ** 2) / 6, 1 - kept / 2


NOISES = {
    "detuning": lambda levels, t: np.broadcast_to(ladder(levels)[1], (t.size, levels, levels)),
    "amplitude": drive,
    "phase": lambda levels, t: phase_operator(ladder(levels)[1], drive(levels, t)),
}


class TestFilterFunction:
    @pytest.mark.parametrize("noise", NOISES)
    @pytest.mark.parametrize("levels", [2, 3, 6])
    def test_a_weak_tone(self, noise: str, levels: int) -> None:
        t, between, dt = grids()
        path, operator = nominal(levels), NOISES[noise](levels, t)
        size = 1e-2 / (TIME * np.abs(operator).max())
        # At the anharmonicity a tone drives |1> to |2>, and hardly moves a qubit of two levels.
        for f in (0.0, 20e6) if levels == 2 else (0.0, 20e6, 300e6):
            found = np.zeros(2)
            for phase in np.array([0.1, 0.6]) * np.pi:
                # Two phases a quarter turn apart average cos^2 and the squares of the error.
                wave, halfway = (size * np.cos(2 * np.pi * f * x + phase) for x in (t, between))
                h = drive(levels, t) + ladder(levels)[2] + wave[:, None, None] * operator
                middle = NOISES[noise](levels, between) * halfway[:, None, None]
                middle = middle + drive(levels, between) + ladder(levels)[2]
                u = evolve(h, middle, dt)[-1]
                found += np.array(infidelity(u, path.unitaries[-1])) / 2
            function = filter_function([path], [operator], np.array([f]))
            # A tone has the variance size^2/2; a constant that of cos^2 over the two phases.
            variance = size**2 / 2
            wanted = variance * np.array([function.total[0], function.leakage[0]])
            # The next order in the noise is 1e-4 of the first; where the first is suppressed, as
            # in most of the leakage, the square of the error inside counts. Rounding of the 400
            # steps is 1e-13.
            assert found == pytest.approx(wanted, rel=1e-3, abs=wanted[0] ** 2 + 1e-13)
            if f == 300e6:
                assert wanted[1] > 0.5 * wanted[0] > 1e-10

    def test_phase_operator_is_the_change_of_the_drive(self) -> None:
        levels, phi = 4, 1e-4
        _, number, _ = ladder(levels)
        h = drive(levels, np.array([7e-9]))[0]
        turn = np.diag(np.exp(-1j * phi * np.diag(number).real))
        change = (turn @ h @ turn.conj().T - turn.conj().T @ h @ turn) / (2 * phi)
        # Second order of the central difference.
        assert np.abs(change - phase_operator(number, h)).max() < 1e-7 * np.abs(h).max()
        # v = A cos(omega t + phi) rotates about (cos phi, -sin phi).
        x, y = np.array([[0, 1], [1, 0]]), np.array([[0, -1j], [1j, 0]])
        assert np.abs(phase_operator(number[:2, :2], x) + y).max() < 1e-15

    @pytest.mark.parametrize("levels", [2, 3, 5])
    def test_frames_differ_by_the_phases_at_the_ends(self, levels: int) -> None:
        """By parts: integral of phi dn/dt = [phi n] - integral of dphi/dt n, for each element."""
        t, _, dt = grids()
        path = nominal(levels)
        _, number, _ = ladder(levels)
        turned = np.conj(np.swapaxes(path.unitaries, 1, 2)) @ number @ path.unitaries
        frequencies = np.array([3e6, 70e6])
        filters = phase_filter_functions([path], [drive(levels, t)], number, frequencies)
        for k, f in enumerate(frequencies):
            shift = 2j * np.pi * f
            wave = np.exp(-shift * t)[:, None, None]
            ends = wave[-1] * turned[-1] - turned[0]
            values = (wave * turned).reshape(SAMPLES, -1)
            inner = (dt * (values.sum(axis=0) - (values[0] + values[-1]) / 2)).reshape(ends.shape)
            # The trapezoidal rule at 20 ps under 0.3 GHz, an end correction of second order.
            moved = ends + shift * inner
            block = moved[:2, :2] - np.trace(moved[:2, :2]) / 2 * np.eye(2)
            wanted = np.linalg.norm(block) ** 2 / 3
            assert filters.qubit_frame.inside[k] == pytest.approx(wanted, rel=2e-3)

    def test_subspace_of_a_pair(self) -> None:
        """A qubit beside an idle one: three more states, and the same error on the product."""
        path = nominal(2)
        eye = np.eye(2)
        pair = PathSegment(0.0, path.dt, np.array([np.kron(u, eye) for u in path.unitaries]))
        t, _, _ = grids()
        operator = NOISES["amplitude"](2, t)
        f = np.array([0.0, 40e6])
        one = filter_function([path], [operator], f)
        both = filter_function([pair], [np.kron(operator, eye)], f, subspace=(0, 1, 2, 3))
        # 1 - F_pro is the same and F_avg = (d F_pro + 1)/(d + 1): 4/5 against 2/3.
        assert both.total == pytest.approx(one.total * 1.2, rel=1e-12)
        # With the partner in |0> only: the states |00> and |10>.
        half = filter_function([pair], [np.kron(operator, eye)], f, subspace=(0, 2))
        assert half.total == pytest.approx(one.total, rel=1e-12)
        assert half.leakage == pytest.approx([0.0, 0.0], abs=1e-12 * one.total.max())

    def test_segments_are_one_path(self) -> None:
        path = nominal(3)
        t, _, dt = grids()
        operator = NOISES["amplitude"](3, t)
        parts = [
            PathSegment(1e-6, dt, path.unitaries[:151]),
            PathSegment(1e-6 + 150 * dt, dt, path.unitaries[150:]),
        ]
        f = np.array([0.0, 11e6, 300e6])
        whole = filter_function([path], [operator], f)
        split = filter_function(parts, [operator[:151], operator[150:]], f)
        # Fourth order at the new ends, 0.04 rad per step.
        assert split.inside == pytest.approx(whole.inside, rel=1e-6)
        assert split.leakage == pytest.approx(whole.leakage, abs=1e-6 * whole.leakage.max())
        areas = [filter_area([path], [operator]).infidelity]
        areas.append(filter_area(parts, [operator[:151], operator[150:]]).infidelity)
        assert areas[0] == pytest.approx(areas[1], rel=1e-6)

    def test_area_is_the_integral(self) -> None:
        path = nominal(3)
        t, _, _ = grids()
        operator = NOISES["amplitude"](3, t)  # Zero at both ends: the filter falls off fast.
        f = np.linspace(0.0, 2e9, 4001)
        function = filter_function([path], [operator], f)
        weights = np.full(f.size, f[1])
        weights[0] = weights[-1] = f[1] / 2
        got = noise_infidelity(function, np.ones(f.size), weights)
        area = filter_area([path], [operator])
        # Trapezoids are exact for a filter whose transform ends at 20 ns, but for the tail above
        # 2 GHz; both rules are of fourth order at up to 0.1 rad per step.
        assert got.infidelity == pytest.approx(area.infidelity, rel=1e-5)
        assert got.leakage == pytest.approx(area.leakage, rel=1e-5)
        assert area.leakage > 0.01 * area.infidelity


class TestFramesOfThePhase:
    @pytest.mark.parametrize("levels", [2, 3])
    def test_a_weak_phase_spur(self, levels: int) -> None:
        """The drive's phase wobbles; the oscillator's frame follows it, the qubit's does not."""
        t, between, dt = grids()
        path, size = nominal(levels), 1e-3
        _, number, still = ladder(levels)
        n = np.diag(number).real

        def wobbled(x: np.ndarray, phase: float, f: float) -> ComplexArray:
            turn = np.exp(-1j * np.outer(size * np.cos(2 * np.pi * f * x + phase), n))
            return turn[:, :, None] * drive(levels, x) * turn.conj()[:, None, :] + still

        for f in (5e6, 60e6):
            found = np.zeros(2)
            for phase in np.array([0.1, 0.6]) * np.pi:
                u = evolve(wobbled(t, phase, f), wobbled(between, phase, f), dt)[-1]
                ends = size * np.cos(2 * np.pi * f * np.array([0.0, TIME]) + phase)
                seen = np.exp(1j * ends[1] * n)[:, None] * u * np.exp(-1j * ends[0] * n)
                for k, matrix in enumerate((u, seen)):
                    found[k] += infidelity(matrix, path.unitaries[-1])[0] / 2
            filters = phase_filter_functions([path], [drive(levels, t)], number, np.array([f]))
            both = (filters.qubit_frame, filters.oscillator_frame)
            wanted = np.array([function.total[0] for function in both]) * size**2 / 2
            # The next order is size^2 of the first; rounding of the 400 steps is 1e-13.
            assert found == pytest.approx(wanted, rel=1e-4, abs=1e-13)
            assert not 0.5 < wanted[0] / wanted[1] < 2  # The frames are told apart.


class TestCarrierFilterFunction:
    @pytest.mark.parametrize("levels", [2, 3, 6])
    @pytest.mark.parametrize("offset", [-300e6, -35e6, 0.0, 35e6])
    def test_a_weak_tone_beside_the_carrier(self, levels: int, offset: float) -> None:
        t, between, dt = grids()
        path, size = nominal(levels), 3e-3 / TIME / np.sqrt(levels)
        a, _, still = ladder(levels)

        def total(x: np.ndarray, phase: float) -> ComplexArray:
            half = size / 2 * np.exp(1j * (2 * np.pi * offset * x + phase))[:, None, None] * a
            return drive(levels, x) + still + half + np.conj(np.swapaxes(half, 1, 2))

        found = np.zeros(2)
        for phase in np.array([0.1, 0.6]) * np.pi:
            u = evolve(total(t, phase), total(between, phase), dt)[-1]
            found += np.array(infidelity(u, path.unitaries[-1])) / 2
        function = carrier_filter_function([path], a, np.array([offset]))
        # A tone of amplitude `size` has the variance size^2/2, all of it at its own frequency.
        wanted = size**2 / 2 * np.array([function.total[0], function.leakage[0]])
        # The next order is 1e-4 of the first; as for the tones above, and rounding of the 800
        # exponentials.
        assert found == pytest.approx(wanted, rel=1e-3, abs=wanted[0] ** 2 + 1e-12)
        if levels > 2 and offset == -300e6:
            assert wanted[1] > 0.5 * wanted[0]  # |1> to |2> is 300 MHz lower.

    def test_both_sidebands_are_both_quadratures(self) -> None:
        """Noise of density S on both sides of a carrier has 2 S in each quadrature."""
        path = nominal(3)
        a, _, _ = ladder(3)
        f = np.array([0.0, 20e6, 290e6])
        sides = [carrier_filter_function([path], a, sign * f) for sign in (1, -1)]
        quadratures = [
            filter_function([path], [operator], f)
            for operator in ((a + a.conj().T) / 2, 1j * (a - a.conj().T) / 2)
        ]
        for part in ("inside", "leakage"):
            first = sum(getattr(function, part) for function in sides)
            second = 2 * sum(getattr(function, part) for function in quadratures)
            assert first == pytest.approx(second, rel=1e-10)  # Rounding.

    def test_an_idle_is_heated(self) -> None:
        time, level = 1e-6, 1e3
        path = PathSegment(0.0, time / 400, np.broadcast_to(np.eye(3), (401, 3, 3)))
        a, _, _ = ladder(3)
        step = 0.5 / time
        offsets = step * np.arange(-4000, 4001)
        function = carrier_filter_function([path], a, offsets)
        weights = np.full(offsets.size, step)
        found = noise_infidelity(function, np.full(offsets.size, level), weights)
        # Both flips of |0> and |1>, and |1> to |2> at twice the rate from half of the states. The
        # sum over lines is exact but for the tails above 2 GHz, 1/(pi^2 f time) = 5e-5.
        rate = flip_rate(level)
        assert found.leakage == pytest.approx(2 * rate * time / 2, rel=1e-4)
        inside = found.infidelity - found.leakage
        assert inside == pytest.approx(2 / 3 * rate * time, rel=1e-4)

    def test_errors(self) -> None:
        path = nominal(2)
        with pytest.raises(InputError, match=r"lowering operator of shape \(2, 2\), got \(3, 3\)"):
            carrier_filter_function([path], ladder(3)[0], np.zeros(1))
        with pytest.raises(InputError, match=r"one number of levels, got \[\]"):
            carrier_filter_function([], ladder(2)[0], np.zeros(1))
        with pytest.raises(InputError, match=r"one number of levels, got \[\(2, 2\), \(3, 3\)\]"):
            carrier_filter_function([path, nominal(3)], ladder(2)[0], np.zeros(1))


class TestFourierIntegral:
    @pytest.mark.parametrize("n", [8, 9, 50, 53])
    def test_cubics_are_exact(self, n: int) -> None:
        dt = 0.3
        t = dt * np.arange(n)
        c = np.array([1.0, -0.4, 0.2, -0.01])
        values = np.polyval(c[::-1], t)[None]
        f = np.array([0.0, 0.01, 0.4, 1.0, 5.0])
        wanted = [
            quad_vec(
                lambda x, w=w: np.polyval(c[::-1], x) * np.exp(-2j * np.pi * w * x),
                0.0,
                t[-1],
                epsabs=1e-10,
                epsrel=1e-12,
                limit=5000,
            )[0]
            for w in f
        ]
        got = fourier_integral(values, dt, f)[0]
        # Rounding of sums over values of up to 30 times the largest.
        assert np.abs(got - wanted).max() < 1e-9 * np.abs(values).max()

    def test_fourth_order(self) -> None:
        def error(n: int) -> float:
            t = np.linspace(0.0, 1.0, n)
            f, w = np.array([0.0, 3.0, 40.0]), 2 * np.pi * np.array([0.0, 3.0, 40.0])
            got = fourier_integral(np.cos(9 * t)[None], t[1], f)[0]
            wanted = sum(np.expm1(1j * (s - w)) / (2j * (s - w)) for s in (9.0, -9.0))
            return float(np.abs(got - wanted).max())

        assert error(41) / error(81) > 2**4 * 0.8  # The next order is still felt.
        assert error(81) < 1e-5


class TestErrors:
    def test_paths(self) -> None:
        u = np.broadcast_to(np.eye(2), (10, 2, 2))
        with pytest.raises(InputError, match=r"shape \(n, d, d\), got \(7, 2, 2\)"):
            PathSegment(0.0, 1.0, u[:7])
        with pytest.raises(InputError, match="positive interval"):
            PathSegment(0.0, 0.0, u)
        wrong = np.array(u)
        wrong[4] *= 1.001
        with pytest.raises(InputError, match=r"matrix 4 .* not unitary, .* by 0\.002"):
            PathSegment(0.0, 1.0, wrong)

    def test_operators_and_subspaces(self) -> None:
        u = np.broadcast_to(np.eye(2), (10, 2, 2))
        path, f, n = [PathSegment(0.0, 1.0, u)], np.ones(1), np.diag([0, 1]).astype(complex)
        with pytest.raises(InputError, match="one operator for each segment"):
            filter_function(path, [n, n], f)
        with pytest.raises(InputError, match=r"operator of shape \(2, 2\) or \(10, 2, 2\)"):
            filter_function(path, [np.eye(3)], f)
        with pytest.raises(InputError, match="not Hermitian"):
            filter_function(path, [1j * n], f)
        with pytest.raises(InputError, match=r"subspace of at least two of 2 levels, got \(0, 2\)"):
            filter_function(path, [n], f, subspace=(0, 2))
        with pytest.raises(InputError, match="start with the identity"):
            filter_function([PathSegment(0.0, 1.0, u @ np.array([[0, 1], [1, 0]]))], [n], f)

    def test_densities(self) -> None:
        function = FilterFunction(np.array([1.0, 2.0]), np.ones(2), np.zeros(2))
        with pytest.raises(InputError, match="got shapes"):
            noise_infidelity(function, np.ones(3), np.ones(2))
        with pytest.raises(InputError, match=r"at least zero, got -1\.0 at 2 Hz"):
            noise_infidelity(function, np.array([1.0, -1.0]), np.ones(2))
