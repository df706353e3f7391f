"""Oracle: a published probit analysis, decisions of known noise, a general optimiser."""

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.stats import norm

from cosim.dsp.decisions import fit_probit
from cosim.errors import InputError
from tests import sources
from tests.validation import Validate

TOPIC = "signal"

# C. I. Bliss, Ann. Appl. Biol. 22, 134 (1935): log10 of the dose, insects exposed and killed.
DOSE = np.array([1.6907, 1.7242, 1.7552, 1.7842, 1.8113, 1.8369, 1.8610, 1.8839])
EXPOSED = np.array([59, 60, 62, 56, 63, 59, 62, 60])
KILLED = np.array([6, 13, 18, 28, 52, 53, 61, 60])


class TestFitProbit:
    def test_published_analysis(self, validate: Validate) -> None:
        fit = fit_probit(DOSE, KILLED, EXPOSED)
        # The works print two to four digits: intercept -34.94, slope 19.73, deviance 10.12.
        quantity = "slope of the probit line of the beetle data"
        validate(quantity, sources.BLISS, 19.73, 1 / fit.noise, abs=5e-3, digits=4)
        quantity = "intercept of the probit line of the beetle data"
        validate(quantity, sources.BLISS, -34.94, -fit.offset / fit.noise, abs=6e-3, digits=4)
        quantity = "deviance of the probit line of the beetle data"
        validate(quantity, sources.BLISS, 10.12, fit.deviance, abs=5e-3, digits=4)
        assert fit.trials == 481

    def test_is_the_maximum_that_an_optimiser_finds(self) -> None:
        fit = fit_probit(DOSE, KILLED, EXPOSED)

        def loss(p: np.ndarray) -> float:
            z = (DOSE - p[0]) / p[1]
            return -float(np.sum(KILLED * norm.logcdf(z) + (EXPOSED - KILLED) * norm.logsf(z)))

        options = {"xatol": 1e-10, "fatol": 1e-12}
        found = minimize(loss, [1.75, 0.1], method="Nelder-Mead", options=options).x
        # A simplex stops where the loss, of size 190, no longer changes in double precision.
        assert (fit.offset, fit.noise) == pytest.approx(tuple(found), rel=1e-7)

    def test_exact_shares_give_the_curve_back(self) -> None:
        levels = np.linspace(-1e-3, 1e-3, 21)
        trials = np.full(21, 10**12)
        ones = np.rint(trials * norm.cdf((levels - 2.3e-4) / 3.1e-4)).astype(int)
        fit = fit_probit(levels, ones, trials)
        # Shares are rounded to 1e-12; the likelihood is flat to 1e-12, the parameters to 1e-6.
        assert fit.offset == pytest.approx(2.3e-4, rel=1e-6, abs=0.0)
        assert fit.noise == pytest.approx(3.1e-4, rel=1e-6, abs=0.0)

    def test_errors_are_the_scatter_over_seeds(self) -> None:
        levels = np.linspace(-4e-4, 6e-4, 200)
        scores = []
        for seed in range(400):
            rng = np.random.default_rng(seed)
            ones = levels + rng.normal(0.0, 1.5e-4, levels.size) > 1e-4
            fit = fit_probit(levels, ones)
            scores.append(
                [(fit.offset - 1e-4) / fit.offset_error, (fit.noise - 1.5e-4) / fit.noise_error]
            )
        # Standard normal numbers: mean within 4/sqrt(400) and, for the bias of a maximum of the
        # likelihood with some 80 decisions near the offset, 0.15; deviation within 4/sqrt(800).
        assert np.abs(np.mean(scores, axis=0)).max() < 0.2 + 0.15
        assert np.std(scores, axis=0) == pytest.approx([1.0, 1.0], abs=0.15)

    def test_units_and_order_do_not_matter(self) -> None:
        fit = fit_probit(DOSE, KILLED, EXPOSED)
        turned = fit_probit(-1e-6 * DOSE[::-1], (EXPOSED - KILLED)[::-1], EXPOSED[::-1])
        # The same numbers in another order: rounding in the flat part of the likelihood.
        assert turned.offset == pytest.approx(-1e-6 * fit.offset, rel=1e-9, abs=0.0)
        assert turned.noise == pytest.approx(1e-6 * fit.noise, rel=1e-6, abs=0.0)
        split = fit_probit(np.repeat(DOSE, 2), np.repeat(KILLED, 2), np.repeat(EXPOSED, 2))
        assert split.noise_error == pytest.approx(fit.noise_error / np.sqrt(2), rel=1e-6)
        assert split.deviance == pytest.approx(2 * fit.deviance, rel=1e-6)

    def test_a_level_far_away_does_no_harm(self) -> None:
        near = fit_probit(DOSE, KILLED, EXPOSED)
        far = fit_probit(np.append(DOSE, 40.0), np.append(KILLED, 9), np.append(EXPOSED, 9))
        # It is decided with certainty either way.
        assert far.noise == pytest.approx(near.noise, rel=1e-5)

    @pytest.mark.parametrize(
        ("levels", "ones", "trials", "text"),
        [
            ([0.0, 1.0], [1, 1], None, "all 2 decisions are alike"),
            ([0.0, 1.0, 2.0], [0, 1, 1], None, "without overlap"),
            ([0.0, 1.0, 2.0, 3.0], [8, 6, 3, 1], [9, 9, 9, 9], "no more often"),
            ([0.0, 1.0], [1], None, "of one length"),
            ([0.0, 1.0], [1, 3], [2, 2], "counts must be whole"),
            ([0.0, np.nan], [1, 0], None, "not finite"),
        ],
    )
    def test_refuses(
        self, levels: list[float], ones: list[int], trials: list[int] | None, text: str
    ) -> None:
        counts = None if trials is None else np.array(trials)
        with pytest.raises(InputError, match=text):
            fit_probit(np.array(levels), np.array(ones), counts)
