"""Ranging: coverage of the truth, fits against the full model, limits, simulated sightings, bad input."""

from __future__ import annotations

import csv
import warnings

import numpy as np
import pytest

import firstarc as fa
from firstarc.constants import AU_KM, EARTH_RADIUS_KM, GM_EARTH_KM3_S2, GM_SUN_KM3_S2, SUN_RADIUS_KM
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.preliminary.admissible_region import EARTH_SPHERE_KM, RegionLimits, earth_limits, sun_limits
from firstarc.preliminary.attributable import attributable
from firstarc.preliminary.line_set import line_set
from firstarc.preliminary.ranging import sample, solve
from firstarc.results import Code
from firstarc.twobody.elements import elements_from_state
from preliminary_methods.short_arcs import KINDS, all_statuses_speak, noisy_arcs, spoiled


def sampled(arc, **more):
    radius = EARTH_RADIUS_KM if arc.gm == GM_EARTH_KM3_S2 else SUN_RADIUS_KM
    return sample(*arc.given, body_radius_km=radius, **arc.more, **more)


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_the_truth_lies_in_the_95_percent_range(kind):
    n, inside = 100, 0
    for arc in noisy_arcs(kind, n, 51):
        found = sampled(arc)
        assert found.status.code == Code.ESTIMATED
        low, high = found.quantiles(found.range_km, (0.025, 0.975))
        inside += low <= arc.range_km[len(arc.t_s) // 2] <= high
    assert inside >= 0.9 * n


@pytest.mark.parametrize("kind", KINDS)
def test_chi_square_of_a_node_is_that_of_its_orbit(kind):
    """Against the library's own prediction of directions, light time by iteration; and least at its direction."""
    arc = noisy_arcs(kind, 1, 52)[0]
    found = sampled(arc, shape=(20, 20))

    def chi2(states):
        los, _, _ = predicted_directions(states, found.t_state_s, arc.t_s, arc.observer_km, arc.moving, arc.gm, True)
        return np.sum((residuals_rad(arc.los, los) / arc.sigma_rad) ** 2, axis=(1, 2))

    use = found.weight > 1e-6
    np.testing.assert_allclose(chi2(found.states[use]), found.chi2[use], atol=2e-3)
    # No direction or rate nearby fits better: move each by a fifth of its own sigma.
    lines = line_set(*arc.given[:3], arc.gm, arc.moving, True, arc.sigma_rad, 2)
    one = attributable(lines)
    rho = found.range_km[use][:, None]
    for k in range(4):
        step = 0.2 * np.sqrt(one.covariance[k, k]) * one.axes[k % 2] * rho
        moved = found.states[use].copy()
        moved[:, 3 * (k // 2) : 3 * (k // 2) + 3] += step
        assert (chi2(moved) > found.chi2[use] - 2e-3).all()


@pytest.mark.parametrize("kind", KINDS)
def test_the_sample_is_what_it_says(kind):
    arc = noisy_arcs(kind, 1, 53)[0]
    found = sampled(arc)
    n = len(found.weight)
    assert found.states.shape == (n, 6) and found.weight.sum() == pytest.approx(1.0)
    assert found.effective_number == pytest.approx(1.0 / np.sum(found.weight**2))
    out = found.excluded.any
    assert (found.weight[out] == 0.0).all() and np.isnan(found.chi2[out]).all()
    el = elements_from_state(found.states[:, :3], found.states[:, 3:], arc.gm)
    inside = found.weight > 0.0
    assert (el.e[inside] < 1.0 + 1e-6).all()
    radius = EARTH_RADIUS_KM if arc.gm == GM_EARTH_KM3_S2 else SUN_RADIUS_KM
    assert (el.q_km[inside] > radius * (1.0 - 1e-3)).all()
    summary = found.summary()
    assert list(summary) == ["a_km", "e", "i_rad", "q_km", "range_km"]
    for values in summary.values():
        assert (np.diff(values) >= 0.0).all()
    assert found.best.admissible and "not a determined orbit" in found.best.status.sentence
    assert found.best.covariance is None
    assert solve(*arc.given, body_radius_km=radius, **arc.more)[0].range_km == pytest.approx(found.best.range_km)


def test_two_observations_leave_the_whole_region():
    arc = noisy_arcs("main belt, 1 h", 1, 54)[0]
    two = [0, 3]
    found = sample(arc.los[two], arc.observer_km[two], arc.t_s[two], arc.gm, center_velocity_km_s=arc.moving[two],
                   light_time=True, sigma_rad=arc.sigma_rad[two])  # fmt: skip
    assert found.dof == 0
    use = found.weight > 0.0
    assert np.nanmax(found.chi2[use]) < 1e-3
    los, _, _ = predicted_directions(
        found.states[use], found.t_state_s, arc.t_s[two], arc.observer_km[two], arc.moving[two], arc.gm, True
    )
    assert np.abs(residuals_rad(arc.los[two], los)).max() < 0.05 * arc.sigma_rad.min()


def test_limits():
    arc = noisy_arcs("main belt, 1 h", 1, 55)[0]
    near = RegionLimits(0.5 * AU_KM, 1.0 * AU_KM)
    found = sampled(arc, limits=near)
    use = found.weight > 0.0
    assert found.range_km[use].min() >= 0.5 * AU_KM and found.range_km[use].max() <= AU_KM
    open_too = sampled(arc, limits=RegionLimits(0.5 * AU_KM, 1.0 * AU_KM, excess_limit_km_s=30.0))
    el = elements_from_state(open_too.states[:, :3], open_too.states[:, 3:], arc.gm)
    assert (el.e[open_too.weight > 0.0] > 1.0).any()
    # No bound orbit beyond: at 90 au this rate is far above the velocity of escape.
    none = sampled(arc, limits=RegionLimits(90.0 * AU_KM, 99.0 * AU_KM))
    assert none.status.code == Code.NO_CANDIDATE and not len(none.weight)
    assert np.isnan(none.quantiles(none.range_km)).all()
    with pytest.raises(UsageError, match="range limits"):
        RegionLimits(2.0, 1.0)
    with pytest.raises(UsageError, match="excess"):
        RegionLimits(1.0, 2.0, excess_limit_km_s=-1.0)


def test_usual_limits_against_their_papers():
    # Sphere of influence about 0.0062 au (Milani et al. 2004 use 0.010044 au, Hill's; Laplace's is 924 000 km,
    # common practice). Shooting-star limit: a body of H = 34.5 seen at magnitude 20 is 10^-2.9 au away.
    assert pytest.approx(924_600.0, rel=1e-3) == EARTH_SPHERE_KM
    assert sun_limits(20.0).range_min_km / AU_KM == pytest.approx(10.0**-2.9, rel=1e-9)
    assert earth_limits(6378.137).periapsis_min_km == 6378.137


def test_a_satellite_of_the_earth_is_no_asteroid():
    """Inside the sphere of influence, slower than the escape from the Earth: left out of the Sun's region."""
    arc = noisy_arcs("main belt, 1 h", 1, 56)[0]
    limits = RegionLimits(2e4, 9e5, planet_gm_km3_s2=GM_EARTH_KM3_S2, planet_sphere_km=EARTH_SPHERE_KM)
    found = sampled(arc, limits=limits, shape=(40, 60))
    bound = found.excluded.planet
    rate = np.linalg.norm(attributable(
        line_set(*arc.given[:3], arc.gm, arc.moving, True, arc.sigma_rad, 2)).rate_rad_s)  # fmt: skip
    energy = found.range_rate_km_s**2 + (found.range_km * rate) ** 2 - 2.0 * GM_EARTH_KM3_S2 / found.range_km
    np.testing.assert_array_equal(bound, (energy < 0.0) & (found.range_km < EARTH_SPHERE_KM))
    assert bound.any() and not bound.all()


@pytest.mark.parametrize(
    "name", ["sh-geo-2nights", "sh-leo-pass", "sh-meo-vanguard", "sh-jupiter-month", "sh-mars-week"]
)
@pytest.mark.parametrize("noise", ["n0", "s1"])
def test_simulated_sightings(data_dir, name, noise):
    """The first three sightings of each case; the true range lies in the middle 98 %."""
    obs = fa.load(data_dir / "cases" / f"{name}_{noise}.psv")
    s = obs.sight_lines
    about_earth = obs.center == "earth"
    found = sample(
        s.los[:3], s.observer_km[:3], s.t_s[:3], GM_EARTH_KM3_S2 if about_earth else GM_SUN_KM3_S2,
        center_velocity_km_s=s.center_velocity_km_s[:3], light_time=s.light_time, sigma_rad=s.sigma_rad[:3],
        body_radius_km=EARTH_RADIUS_KM if about_earth else SUN_RADIUS_KM,
    )  # fmt: skip
    with (data_dir / "cases" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        row = list(csv.DictReader(file))[1]
    unit, target = (1.0, "sat_") if about_earth else (AU_KM, "tgt_")
    rho = np.linalg.norm(np.array([float(row[target + axis]) for axis in "xyz"]) * unit - s.observer_km[1])
    low, high = found.quantiles(found.range_km, (0.01, 0.99))
    assert low < rho < high


def test_what_does_not_fit_is_not_sampled(data_dir):
    """Two nights of a geosynchronous object are no single short arc: said, not sampled."""
    s = fa.load(data_dir / "cases" / "sh-geo-2nights_s1.psv").sight_lines
    found = sample(s.los, s.observer_km, s.t_s, GM_EARTH_KM3_S2, center_velocity_km_s=s.center_velocity_km_s,
                   light_time=True, sigma_rad=s.sigma_rad)  # fmt: skip
    assert found.status.code == Code.NOT_CONVERGED
    assert not found.best.admissible


def test_permutation_and_rotation():
    arc = noisy_arcs("GEO, 10 min", 1, 57)[0]
    plain = sampled(arc)
    order = np.random.default_rng(2).permutation(len(arc.t_s))
    moved = sample(arc.los[order], arc.observer_km[order], arc.t_s[order], arc.gm,
                   center_velocity_km_s=arc.moving[order], light_time=True, sigma_rad=arc.sigma_rad[order],
                   body_radius_km=EARTH_RADIUS_KM)  # fmt: skip
    np.testing.assert_array_equal(moved.weight, plain.weight)
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    turned = sample(arc.los @ turn.T, arc.observer_km @ turn.T, arc.t_s, arc.gm,
                    center_velocity_km_s=arc.moving @ turn.T, light_time=True, sigma_rad=arc.sigma_rad,
                    body_radius_km=EARTH_RADIUS_KM)  # fmt: skip
    np.testing.assert_allclose(turned.quantiles(turned.range_km), plain.quantiles(plain.range_km), rtol=0.01)
    np.testing.assert_allclose(turned.summary(turn.T)["i_rad"], plain.summary()["i_rad"], rtol=0.05)


def test_a_finer_raster_gives_the_same_ranges():
    for kind in KINDS:
        arc = noisy_arcs(kind, 1, 58)[0]
        coarse, fine = sampled(arc), sampled(arc, shape=(150, 150))
        a, b = (one.quantiles(np.log(one.range_km)) for one in (coarse, fine))
        width = b[2] - b[0]
        np.testing.assert_allclose(a, b, atol=0.06 * width)


@pytest.mark.parametrize("index", range(48))
def test_bad_input_gets_a_status(index):
    given, more = spoiled(noisy_arcs("LEO, 14 to 60 s", 1, 5)[0], index)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = sample(*given, **more)
        assert found.status.sentence.endswith(".")
        assert len(found.weight) == len(found.states) == len(found.chi2)
        all_statuses_speak((found.best,))


def test_misuse_is_named():
    arc = noisy_arcs("GEO, 10 min", 1, 5)[0]
    with pytest.raises(UsageError, match="shape is"):
        sample(*arc.given, shape=(4, 60))
    with pytest.raises(UsageError, match="prior_power is"):
        sample(*arc.given, prior_power=9.0)
    with pytest.raises(UsageError, match="sigma_rad holds"):
        sample(*arc.given, sigma_rad=0.0 * arc.sigma_rad)
    with pytest.raises(UsageError, match="sigma_rad has shape"):
        sample(*arc.given, sigma_rad=arc.sigma_rad[:, 0])
