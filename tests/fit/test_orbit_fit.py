"""The fit of an orbit to all observations."""

from __future__ import annotations

import pickle
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import least_squares

from firstarc.constants import C_KM_S, DAY_S
from firstarc.errors import UsageError
from firstarc.fit.measurement_model import MeasurementModel
from firstarc.fit.measurements import Measurements
from firstarc.fit.motion import TwoBody
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.parameters import ClockOffset, StationOffset
from firstarc.fit.predicted_residuals import predicted_residuals
from firstarc.preliminary.batch import solve_triples
from firstarc.results import Code
from firstarc.twobody.kepler import propagate
from fit.scenes import noisy, scene, shifted, with_ranges
from properties.orbit_cases import triples

REGIMES = ["leo", "meo", "geo", "near-earth", "main-belt"]


def size(state):
    return np.repeat([np.linalg.norm(state[:3]), np.linalg.norm(state[3:])], 3)


@pytest.mark.parametrize("regime", REGIMES)
def test_without_noise_the_truth_is_found_from_afar(regime: str) -> None:
    """Starts 5 % away in position and velocity; noise-free observations leave rounding only."""
    here = scene(regime)
    rng = np.random.default_rng(6)
    for _ in range(5):
        start = here.state + 0.05 * size(here.state) * rng.normal(size=6) / np.sqrt(3.0)
        fit = fit_orbit(here.model(here.exact), start, 0.0)
        assert fit.status.code is Code.CONVERGED
        assert fit.chi2 < 1e-12
        # What is left, in sigmas of the covariance (1 arcsec observations).
        error = fit.state - here.state
        assert error @ np.linalg.solve(fit.covariance, error) < 1e-10


@pytest.mark.parametrize("regime", REGIMES)
def test_scipy_finds_the_same_minimum(regime: str) -> None:
    """scipy.optimize.least_squares (MINPACK) with differences instead of our partials."""
    here = scene(regime)
    model = here.model(noisy(here.exact, np.random.default_rng(21)))
    fit = fit_orbit(model, here.state * (1.0 + 1e-4 * np.arange(6)), 0.0)
    scale = size(here.state)
    whitening = model.whitening(None)

    def white(y):
        return (whitening @ model.evaluate(y * scale).residual[:, :, None]).ravel()

    other = least_squares(white, here.state / scale, jac="3-point", method="lm", xtol=1e-15, ftol=1e-15, gtol=1e-15)
    assert fit.chi2 <= 2.0 * other.cost * (1.0 + 1e-9)
    away = other.x * scale - fit.state
    assert away @ np.linalg.solve(fit.covariance, away) < 1e-6
    covariance = np.linalg.inv(other.jac.T @ other.jac) * np.outer(scale, scale)
    sigma = np.sqrt(np.diag(fit.covariance))
    np.testing.assert_allclose(covariance / np.outer(sigma, sigma), fit.covariance / np.outer(sigma, sigma), atol=1e-3)


def test_the_start_may_stand_at_another_time() -> None:
    here = scene("meo")
    model = here.model(noisy(here.exact, np.random.default_rng(2)))
    r, v = propagate(here.state[:3], here.state[3:], 7000.0, here.gm)
    there = fit_orbit(model, np.concatenate([r, v]), 7000.0)
    direct = fit_orbit(model, here.state, 0.0)
    np.testing.assert_allclose(there.state, direct.state, rtol=1e-11)
    assert there.t_state_s == 0.0


def test_covariance_at_another_epoch_is_the_propagated_one() -> None:
    here = scene("leo")
    observed = noisy(here.exact, np.random.default_rng(2))
    first = fit_orbit(here.model(observed), here.state, 0.0)
    later = replace(here, t_state_s=600.0)
    second = fit_orbit(later.model(observed), here.state, 0.0)
    stm = TwoBody(here.gm).arc(first.state, 0.0, (0.0, 600.0), np.zeros(0)).with_partials(np.array([600.0]))
    np.testing.assert_allclose(second.state[:3], stm.r_km[0], rtol=1e-11)
    moved = stm.by_state[0] @ first.covariance @ stm.by_state[0].T
    sigma = np.sqrt(np.diag(second.covariance))
    np.testing.assert_allclose(moved / np.outer(sigma, sigma), second.covariance / np.outer(sigma, sigma), atol=1e-5)


def test_two_roots_of_three_observations_are_two_minima() -> None:
    """Three looks at a near-Earth object that two orbits meet exactly: both are reported."""
    many = triples("near-Earth", 200, 3, arc_deg=(3.0, 15.0))
    solved = solve_triples(
        many.los, many.observer_km, many.t_s, many.gm, center_velocity_km_s=many.center_velocity_km_s, light_time=True
    )
    count = np.bincount(solved.triple[solved.admissible], minlength=200)
    k = int(np.flatnonzero(count == 2)[0])
    rows = np.flatnonzero(solved.admissible & (solved.triple == k))
    seen = Measurements(
        many.t_s[k], many.los[k], many.observer_km[k], many.center_velocity_km_s[k],
        np.full((3, 2), 5e-6), np.zeros(3), np.zeros(3), True,
    )  # fmt: skip
    states = np.concatenate([solved.positions_km[rows, 1], solved.velocity_km_s[rows]], axis=1)
    distance = np.linalg.norm(solved.positions_km[rows, 1] - many.observer_km[k, 1], axis=1)
    fit = fit_orbit(MeasurementModel(seen, TwoBody(many.gm), 0.0), states, many.t_s[k, 1] - distance / C_KM_S)
    assert fit.status.ok and fit.dof == 0
    assert len(fit.others) == 1
    assert {fit.start, fit.others[0].start} == {0, 1}
    assert max(fit.chi2, fit.others[0].chi2) < 1e-9
    assert np.linalg.norm(fit.state[:3] - fit.others[0].state[:3]) > 1e4


def test_equal_starts_are_one_minimum() -> None:
    here = scene("leo")
    model = here.model(noisy(here.exact, np.random.default_rng(4)))
    fit = fit_orbit(model, np.stack([here.state, here.state * 1.01, here.state * 0.98]), 0.0)
    assert fit.others == ()


@pytest.mark.parametrize("regime", ["leo", "meo"])
def test_a_slow_clock_becomes_an_estimate(regime: str) -> None:
    """One of two stations is 0.2 s slow: the estimate is right within its sigma over 60 repeats."""
    here = scene(regime)
    late = 0.2 * (here.exact.station == 1)
    m = here.exact
    recorded = replace(m, t_s=m.t_s - late, observer_km=m.observer_km - late[:, None] * m.observer_velocity_km_s)
    rng = np.random.default_rng(3)
    scores = []
    for _ in range(60):
        model = here.model(noisy(recorded, rng), parameters=[ClockOffset(1)])
        fit = fit_orbit(model, here.state, 0.0)
        assert fit.parameter_names == ("clock[1]_s",)
        scores.append((fit.parameters[0] - 0.2) / fit.parameter_sigmas[0])
    # Mean and variance of 60 standard normal numbers, three sigmas wide.
    assert abs(np.mean(scores)) < 3.0 / np.sqrt(60)
    assert abs(np.var(scores) - 1.0) < 3.0 * np.sqrt(2.0 / 60)
    blind = fit_orbit(here.model(noisy(recorded, rng)), here.state, 0.0)
    assert blind.chi2 > 4.0 * blind.dof


def test_a_misplaced_station_becomes_an_estimate() -> None:
    """500 m east, 300 m south, 200 m up: found in station axes within its sigmas over 60 repeats."""
    here = scene("leo")
    m, offset = here.exact, np.array([0.5, -0.3, 0.2])
    mine = (m.station == 1)[:, None]
    recorded = replace(m, observer_km=m.observer_km - np.where(mine, m.station_axes @ offset, 0.0))
    rng = np.random.default_rng(4)
    scores = []
    for _ in range(60):
        fit = fit_orbit(here.model(noisy(recorded, rng), parameters=[StationOffset(1)]), here.state, 0.0)
        error = fit.parameters - offset
        scores.append(error @ np.linalg.solve(fit.covariance[6:, 6:], error))
    assert fit.parameter_names == ("east[1]_km", "north[1]_km", "up[1]_km")
    # Chi-square of 180 degrees of freedom, three sigmas wide.
    assert abs(np.sum(scores) - 180.0) < 3.0 * np.sqrt(360.0)


def test_a_prior_is_one_more_observation() -> None:
    """With a sharp prior the clock stays; with a vague one it is as good as none."""
    here = scene("leo")
    observed = noisy(here.exact, np.random.default_rng(9))

    def fitted(**prior):
        return fit_orbit(here.model(observed, parameters=[ClockOffset(1, **prior)]), here.state, 0.0)

    sharp = fitted(prior_s=0.1, prior_sigma_s=1e-7)
    assert sharp.parameters[0] == pytest.approx(0.1, abs=1e-6)
    assert sharp.parameter_sigmas[0] == pytest.approx(1e-7, rel=1e-3)
    free, vague = fitted(), fitted(prior_sigma_s=1e3)
    np.testing.assert_allclose(vague.parameters, free.parameters, rtol=1e-6)
    assert vague.dof == free.dof + 1
    # Precision adds up.
    middle = fitted(prior_s=0.0, prior_sigma_s=float(free.parameter_sigmas[0]))
    assert middle.parameter_sigmas[0] == pytest.approx(free.parameter_sigmas[0] / np.sqrt(2.0), rel=1e-3)
    assert middle.parameters[0] == pytest.approx(0.5 * free.parameters[0], rel=1e-2)


def ranged_truth(here):
    """Exact ranges and rates of a scene, sigmas 10 m and 1 cm/s."""
    m = with_ranges(here.exact)
    computed = -here.model(m).evaluate(here.state).residual
    return replace(m, range_km=computed[:, 2], range_rate_km_s=computed[:, 3])


def test_ranges_alone_fix_an_orbit() -> None:
    here = scene("leo")
    n = len(here.exact)
    ranged = replace(ranged_truth(here), los=np.full((n, 3), np.nan))
    fit = fit_orbit(here.model(ranged), here.state * (1.0 + 1e-4 * np.arange(6)), 0.0)
    assert fit.status.ok
    assert fit.dof == 2 * n - 6
    assert np.isnan(fit.rms_rad)
    assert np.isnan(fit.sigma[:, 0]).all()
    np.testing.assert_allclose(fit.state, here.state, rtol=1e-8)


def test_ranges_sharpen_the_orbit() -> None:
    here = scene("geo")
    angles = fit_orbit(here.model(here.exact), here.state, 0.0)
    both = fit_orbit(here.model(ranged_truth(here)), here.state, 0.0)
    assert np.all(np.diag(both.covariance) < np.diag(angles.covariance))


@pytest.mark.parametrize("regime", ["distant", "one-night", "fourteen-minutes"])
def test_an_arc_too_short_is_not_a_fit(regime: str) -> None:
    """Whatever the noise, either nothing converges or the sigma of the weak direction says what it is worth."""
    here = scene(regime)
    for seed in range(5):
        fit = fit_orbit(here.model(noisy(here.exact, np.random.default_rng(seed))), here.state, 0.0)
        weak = np.linalg.norm(fit.weak_direction[:6] / size(fit.state))
        assert not fit.status.ok or weak > 0.1
        # The held fit describes the sky as well as the data allow.
        assert fit.chi2 < 4.0 * max(fit.dof, 1) + 20.0


def test_time_errors_count_along_the_track() -> None:
    """A time sigma of 10 ms blurs a fast satellite; the fit weights accordingly and its errors follow."""
    here = scene("leo")
    n = len(here.exact)
    rng = np.random.default_rng(30)
    blurred = replace(here.exact, sigma_time_s=np.full(n, 0.01))
    rate = here.model(here.exact).evaluate(here.state).per_second
    scores, chi2 = [], []
    for _ in range(100):
        late = 0.01 * rng.normal(size=n)
        observed = shifted(noisy(blurred, rng), rate * late[:, None])
        fit = fit_orbit(here.model(observed), here.state * 1.0001, 0.0)
        error = fit.state - here.state
        scores.append(error @ np.linalg.solve(fit.covariance, error))
        chi2.append(fit.chi2)
    assert abs(np.mean(scores) - 6.0) < 3.0 * np.sqrt(12.0 / 100)
    assert abs(np.mean(chi2) - fit.dof) < 3.0 * np.sqrt(2.0 * fit.dof / 100)
    assert fit.sigma[0].max() > 3.0 * here.exact.sigma_rad[0, 0]


def test_observations_outside_the_fit_are_predicted_with_their_sigma() -> None:
    """Fit the first week, predict the second: chi-square of the O-C over 100 repeats."""
    here = scene("near-earth")
    rng = np.random.default_rng(40)
    early = here.exact.t_s < 0.05 * DAY_S
    total, count = [], 0
    for _ in range(100):
        observed = noisy(here.exact, rng)
        fit = fit_orbit(here.model(observed.take(early)), here.state, 0.0)
        later = predicted_residuals(fit, here.model(observed.take(~early)))
        total.append(later.chi2[0])
        count += 2
        assert np.all(later.sigma > here.exact.sigma_rad[0, 0])
    assert abs(np.sum(total) - count) < 4.0 * np.sqrt(2.0 * count)


def test_results_are_frozen_and_survive_pickling() -> None:
    here = scene("leo")
    fit = fit_orbit(here.model(noisy(here.exact, np.random.default_rng(1))), here.state, 0.0)
    again = pickle.loads(pickle.dumps(fit))
    np.testing.assert_array_equal(again.covariance, fit.covariance)
    assert again.status == fit.status and again.reasons == fit.reasons
    with pytest.raises(AttributeError):
        fit.chi2 = 0.0  # type: ignore[misc]


def test_the_same_call_gives_the_same_digits() -> None:
    here = scene("geo")
    observed = noisy(here.exact, np.random.default_rng(1))
    model = here.model(observed)
    first = fit_orbit(model, here.state * 1.001, 0.0)
    model.evaluate(here.state * 1.1)
    for other in (fit_orbit(model, here.state * 1.001, 0.0), fit_orbit(here.model(observed), here.state * 1.001, 0.0)):
        np.testing.assert_array_equal(first.state, other.state)
        np.testing.assert_array_equal(first.covariance, other.covariance)


def test_misuse_is_named() -> None:
    here = scene("leo")
    model = here.model(here.exact)
    with pytest.raises(UsageError, match="starts has shape"):
        fit_orbit(model, np.zeros(5), 0.0)
    with pytest.raises(UsageError, match="manual has shape"):
        fit_orbit(model, here.state, 0.0, np.zeros(3, int))
    with pytest.raises(UsageError, match="4 observed numbers cannot fix 6 unknowns"):
        fit_orbit(here.model(here.exact.take([0, 9])), here.state, 0.0)
    with pytest.raises(UsageError, match="none of these orbits"):
        fit_orbit(model, np.zeros(6), 0.0)
    fit = fit_orbit(model, here.state, 0.0)
    with pytest.raises(UsageError, match="the fit's epoch"):
        predicted_residuals(fit, replace(here, t_state_s=5.0).model(here.exact))
