"""Orbits of an assumed eccentricity: published orbit, truth found, assumption exact, apsides, bad input."""

from __future__ import annotations

import sys
import warnings

import numpy as np
import pytest

import firstarc as fa
from firstarc.constants import EARTH_RADIUS_KM, GM_SUN_KM3_S2
from firstarc.errors import UsageError
from firstarc.preliminary import circular
from firstarc.preliminary.assumed_eccentricity import solve
from firstarc.twobody.elements import elements_from_state, state_from_elements
from firstarc.twobody.kepler import propagate
from preliminary_methods.short_arcs import all_statuses_speak, circular_arc, noisy_arcs, seen, spoiled
from properties.orbit_cases import REGIMES, triples

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

SIGMA = np.full((3, 2), 5e-6)


def test_vallado_7_2(data_dir):
    """The orbit the example was made from has e = 0.2; the lines are rounded to 1e-6 deg, the sites to 1 m."""
    one = tomllib.loads((data_dir / "check_values.toml").read_text(encoding="utf-8"))["cases"]["gauss_vallado_7_2"]
    given, expected, tolerance = one["inputs"], one["expected"], one["tolerance"]
    ra, dec = np.radians(given["ra_deg"]), np.radians(given["dec_deg"])
    los = np.stack((np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)), axis=1)
    sites = [given[f"site{k}_km"] for k in (1, 2, 3)]
    found = solve(
        los, sites, given["t_s"], given["mu_km3_s2"], eccentricity=expected["e"], body_radius_km=EARTH_RADIUS_KM
    )
    assert found[0].admissible
    np.testing.assert_allclose(found[0].state[:3], expected["r2_final_km"], atol=tolerance["r2_final_km"])
    np.testing.assert_allclose(found[0].state[3:], expected["v2_final_km_s"], atol=tolerance["v2_final_km_s"])
    el = elements_from_state(found[0].state[:3], found[0].state[3:], given["mu_km3_s2"])
    assert el.a_km == pytest.approx(expected["a_km"], abs=tolerance["a_km"])
    assert np.degrees(el.i_rad) == pytest.approx(expected["i_deg"], abs=tolerance["i_deg"])


@pytest.mark.parametrize("arc_deg", [(1.0, 5.0), (5.0, 20.0)])
@pytest.mark.parametrize("regime", REGIMES)
def test_truth_is_found_by_its_own_eccentricity(regime, arc_deg):
    n = 12
    case = triples(regime, n, seed=31, arc_deg=arc_deg)
    hits = 0
    for k in range(n):
        e = float(elements_from_state(case.r2_km[k], case.v2_km_s[k], case.gm).e)
        found = solve(
            case.los[k], case.observer_km[k], case.t_s[k], case.gm, center_velocity_km_s=case.center_velocity_km_s[k],
            light_time=True, sigma_rad=SIGMA, eccentricity=e,
        )  # fmt: skip
        hits += any(one.has_orbit and abs(one.range_km[1] / case.range2_km[k] - 1.0) < 1e-5 for one in found)
        for one in found:
            if one.has_orbit:
                assert elements_from_state(one.state[:3], one.state[3:], case.gm).e == pytest.approx(e, abs=1e-9)
                receding = one.state[:3] @ one.state[3:] > 0.0
                assert ("past periapsis" in one.assumption) == receding
    assert hits >= n - 1


@pytest.mark.parametrize("apsis", ["periapsis", "apoapsis"])
@pytest.mark.parametrize("e", [0.05, 0.4, 0.72])
def test_two_lines_at_an_apsis(apsis, e):
    arc = circular_arc(20000.0, 3)
    nu = 0.0 if apsis == "periapsis" else np.pi
    a = 9000.0 / (1.0 - e)
    r, v = state_from_elements(a * (1.0 - e * e), e, 0.6, 1.0, 0.5, nu, arc.gm)
    up = r / np.linalg.norm(r)
    t = np.array([-300.0, 0.0])
    turn = np.arctan2(up[1], up[0]) + 0.1 + 7.292115e-5 * t
    flat = np.hypot(up[0], up[1]) * 6371.0
    observer = np.stack((flat * np.cos(turn), flat * np.sin(turn), 6371.0 * up[2] + 0 * t), axis=1)
    arc = seen(np.concatenate((r, v)), t, observer, arc.moving, arc.gm, 5e-6)
    found = solve(*arc.given, eccentricity=e, apsis=apsis, **arc.more)
    best = min((one for one in found if one.has_orbit), key=lambda one: abs(one.range_km[1] - arc.range_km[1]))
    assert best.range_km[1] == pytest.approx(arc.range_km[1], rel=1e-7)
    for one in found:
        if one.admissible:
            assert one.miss_rad.max() < 1e-10
            r, v = one.state[:3], one.state[3:]
            assert abs(r @ v) < 1e-8 * np.linalg.norm(r) * np.linalg.norm(v)
            assert apsis in one.assumption
    both = solve(*arc.given, eccentricity=e, **arc.more)
    assert {word for one in both for word in ("periapsis", "apoapsis") if word in one.assumption} >= {apsis}


def test_zero_is_the_circular_orbit():
    for seed in range(6):
        arc = circular_arc(42164.0, seed)
        ours, theirs = solve(*arc.given, **arc.more), circular.solve(*arc.given, **arc.more)
        best = min(ours, key=lambda one: abs(one.root_km - 42164.0))
        np.testing.assert_allclose(best.state, theirs[0].state, rtol=1e-7)
        np.testing.assert_allclose(best.covariance, theirs[0].covariance, rtol=1e-4, atol=1e-18)


def test_a_parabola_is_found_from_noisy_sightings(data_dir):
    """Simulated comet, 21 days, 1 arcsec; the truth in its csv is a parabola."""
    obs = fa.load(data_dir / "cases" / "sh-comet-parabolic_s1.psv")
    s = obs.sight_lines
    found = solve(
        s.los, s.observer_km, s.t_s, GM_SUN_KM3_S2, center_velocity_km_s=s.center_velocity_km_s, light_time=True,
        sigma_rad=s.sigma_rad, eccentricity=1.0,
    )  # fmt: skip
    truth = tomllib.loads((data_dir / "cases" / "sh-comet-parabolic.toml").read_text(encoding="utf-8"))["truth"]
    el = elements_from_state(found[0].state[:3], found[0].state[3:], GM_SUN_KM3_S2)
    q_au = truth["q_au"] if "q_au" in truth else truth["a_au"] * (1.0 - truth["e"])
    # Four sigma of the fit, propagated to q by differences.
    steps = np.linalg.cholesky(found[0].covariance + 1e-12 * np.diag(np.diag(found[0].covariance)))
    moved = [elements_from_state(*(found[0].state + 1e-3 * one).reshape(2, 3), GM_SUN_KM3_S2).q_km for one in steps.T]
    sigma = np.sqrt(np.sum(((np.array(moved) - el.q_km) / 1e-3) ** 2))
    assert abs(el.q_km - q_au * 149597870.7) < 4.0 * sigma


@pytest.mark.slow
def test_noisy_fit_is_least_squares_and_its_sigma_true():
    # chi-square of k lines with 5 free numbers: mean 2 k - 5; sigmas by scatter of 60 fits (4 sd: 37 %).
    case = triples("meo", 1, seed=8, arc_deg=(8.0, 8.001))
    e = float(elements_from_state(case.r2_km[0], case.v2_km_s[0], case.gm).e)
    rng = np.random.default_rng(5)
    t = case.t_s[0]
    state = np.concatenate((case.r2_km[0], case.v2_km_s[0]))
    chi2, pulls = [], []
    for _ in range(60):
        arc = seen(state, t, case.observer_km[0], case.center_velocity_km_s[0], case.gm, 1e-5, rng)
        found = solve(*arc.given, eccentricity=e, **arc.more)
        best = min(found, key=lambda one: abs(one.range_km[1] - arc.range_km[1]))
        chi2.append(np.sum((best.miss_rad / 1e-5) ** 2))
        pulls.append((best.range_km[1] - arc.range_km[1]) / best.range_sigma_km)
    assert np.mean(chi2) == pytest.approx(1.0, abs=4.0 * np.sqrt(2.0 / 60.0))
    assert np.std(pulls) == pytest.approx(1.0, rel=0.37)


def test_rotation_and_permutation():
    case = triples("main belt", 1, seed=33, arc_deg=(8.0, 9.0))
    e = float(elements_from_state(case.r2_km[0], case.v2_km_s[0], case.gm).e)
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    plain = solve(case.los[0], case.observer_km[0], case.t_s[0], case.gm, eccentricity=e)
    turned = solve(case.los[0] @ turn.T, case.observer_km[0] @ turn.T, case.t_s[0], case.gm, eccentricity=e)
    np.testing.assert_allclose(turned[0].state[:3], turn @ plain[0].state[:3], rtol=1e-6)
    order = [2, 0, 1]
    moved = solve(case.los[0][order], case.observer_km[0][order], case.t_s[0][order], case.gm, eccentricity=e)
    np.testing.assert_array_equal(moved[0].state, plain[0].state)
    assert moved[0].rows == (1, 2, 0)


def test_reaches_other_times_as_the_two_body_orbit_it_is():
    case = triples("geo", 1, seed=3, arc_deg=(10.0, 11.0))
    e = float(elements_from_state(case.r2_km[0], case.v2_km_s[0], case.gm).e)
    one = solve(case.los[0], case.observer_km[0], case.t_s[0], case.gm, eccentricity=e)[0]
    r, _ = propagate(one.state[:3], one.state[3:], case.t_s[0] - one.t_state_s, case.gm)
    line = r - case.observer_km[0]
    np.testing.assert_allclose(np.linalg.norm(line, axis=1), one.range_km, rtol=1e-9)


@pytest.mark.parametrize("e", [0.0, 0.1, 1.0])
@pytest.mark.parametrize("index", range(24))
def test_bad_input_gets_a_status(index, e):
    given, more = spoiled(noisy_arcs("LEO, 14 to 60 s", 1, 5)[0], index)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        all_statuses_speak(solve(*given, eccentricity=e, **more))


def test_misuse_is_named():
    arc = circular_arc(7000.0, 9)
    for value in (-0.1, np.nan, "round"):
        with pytest.raises(UsageError, match="eccentricity is"):
            solve(*arc.given, eccentricity=value)
    with pytest.raises(UsageError, match="apsis is 'top'"):
        solve(*arc.given, eccentricity=0.1, apsis="top")
    with pytest.raises(UsageError, match="open orbit has none"):
        solve(*arc.given, eccentricity=1.2, apsis="apoapsis")
