"""Are the stated uncertainties true? Seeded noisy repeats in every regime against a two-body truth."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import chi2 as chi_square
from scipy.stats import kstest

from firstarc.fit.orbit_fit import fit_orbit
from fit.scenes import noisy, scene

REPEATS = 300


@pytest.mark.parametrize("regime", ["leo", "meo", "geo", "near-earth", "main-belt"])
def test_errors_are_as_large_as_stated(regime: str) -> None:
    """Mean normalised error squared in its 95 % band; errors at the Cramér-Rao bound; chi-square as it should be.

    Bar-Shalom, Li and Kirubarajan 2001, *Estimation with Applications to Tracking and Navigation*, section 5.4
    (recalled) for the test of the normalised estimation error squared.
    """
    here = scene(regime)
    # The bound: the information of the noise-free observations at the truth.
    bound = np.linalg.inv(fit_orbit(here.model(here.exact), here.state, 0.0).covariance)
    rng = np.random.default_rng(12)
    stated, at_bound, chi2 = [], [], []
    for _ in range(REPEATS):
        fit = fit_orbit(here.model(noisy(here.exact, rng)), here.state, 0.0)
        assert fit.status.ok
        error = fit.state - here.state
        stated.append(error @ np.linalg.solve(fit.covariance, error))
        at_bound.append(error @ bound @ error)
        chi2.append(fit.chi2)
    low, high = chi_square.ppf([0.025, 0.975], 6 * REPEATS) / REPEATS
    assert low < np.mean(stated) < high
    assert abs(np.sqrt(np.mean(at_bound) / 6.0) - 1.0) < 0.05
    assert kstest(chi2, chi_square(fit.dof).cdf).pvalue > 0.01
    low, high = chi_square.ppf([0.025, 0.975], fit.dof * REPEATS) / REPEATS
    assert low < np.mean(chi2) < high
