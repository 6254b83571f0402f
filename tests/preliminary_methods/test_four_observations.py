"""Four observations: coplanar lines solved where three say nothing, regimes, simulated sightings, bad input."""

from __future__ import annotations

import csv
import warnings

import numpy as np
import pytest

import firstarc as fa
from firstarc.constants import AU_KM, EARTH_RADIUS_KM, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.light_time import predicted_directions
from firstarc.errors import UsageError
from firstarc.preliminary.candidates import solve_triple
from firstarc.preliminary.four_observations import solve
from firstarc.results import Code
from preliminary_methods.short_arcs import all_statuses_speak, coplanar_arcs, noisy_arcs, seen, spoiled
from properties.orbit_cases import REGIMES, triples


def hit(found, range_km, index=2, tolerance=1e-5):
    return any(one.has_orbit and abs(one.range_km[index] / range_km - 1.0) < tolerance for one in found)


@pytest.mark.parametrize("kind", ["GEO", "ecliptic"])
def test_coplanar_lines_are_solved(kind):
    arcs = coplanar_arcs(kind, 20, 41)
    hits = 0
    for arc in arcs:
        three = solve_triple(arc.los[:3], arc.observer_km[:3], arc.t_s[:3], arc.gm)
        assert three.status.code == Code.COPLANAR_LINES
        found = solve(*arc.given, **arc.more)
        hits += hit(found, arc.range_km[2])
        for one in found:
            if one.admissible and one.covariance is not None:
                assert one.range_sigma_km > 0.0
    assert hits >= 19


def four_of(case, k):
    """Four lines over the arc of a triple, its observer on the parabola through the three."""
    t = np.linspace(case.t_s[k, 0], case.t_s[k, 2], 4)
    powers = np.arange(3)
    track = np.linalg.solve(case.t_s[k][:, None] ** powers, case.observer_km[k])
    moving = np.repeat(case.center_velocity_km_s[k, :1], 4, axis=0)
    state = np.concatenate((case.r2_km[k], case.v2_km_s[k]))
    return seen(state, t, (t[:, None] ** powers) @ track, moving, case.gm, 5e-6)


@pytest.mark.parametrize("regime", REGIMES)
def test_truth_is_found_in_every_regime(regime):
    case = triples(regime, 10, seed=42, arc_deg=(8.0, 30.0))
    hits = 0
    for k in range(10):
        arc = four_of(case, k)
        found = solve(*arc.given, **arc.more)
        hits += hit(found, arc.range_km[2])
        for one in found:
            if one.admissible:
                los, _, _ = predicted_directions(
                    one.state, one.t_state_s, arc.t_s, arc.observer_km, arc.moving, arc.gm, True
                )
                off = np.linalg.norm(los - arc.los, axis=1)
                np.testing.assert_allclose(off, one.miss_rad, rtol=1e-6, atol=1e-13)
    assert hits >= 9


def test_a_start_comes_from_the_equations():
    case = triples("meo", 10, seed=43, arc_deg=(8.0, 20.0))
    named = 0
    for k in range(10):
        arc = four_of(case, k)
        best = solve(*arc.given, **arc.more)[0]
        if np.isfinite(best.estimate).all():
            named += 1
            assert "Gauss' equations" in best.status.sentence
            # A truncated series over 20 deg: per cents of the radius.
            assert np.linalg.norm(best.estimate[:3] - best.state[:3]) < 0.2 * np.linalg.norm(best.state[:3])
    assert named >= 7


@pytest.mark.slow
def test_sigma_is_the_scatter():
    # 60 fits; 4 standard deviations of a sample sigma are 37 %.
    arc = coplanar_arcs("GEO", 3, 44)[2]
    rng = np.random.default_rng(9)
    pulls = []
    for _ in range(60):
        noisy = seen(arc.state, arc.t_s, arc.observer_km, arc.moving, arc.gm, 1e-6, rng)
        one = solve(*noisy.given, **noisy.more)[0]
        pulls.append((one.range_km[2] - arc.range_km[2]) / one.range_sigma_km)
    assert np.std(pulls) == pytest.approx(1.0, rel=0.37)
    assert abs(np.mean(pulls)) < 4.0 / np.sqrt(60.0)


@pytest.mark.parametrize(
    "name, noise", [(c, n) for c in ("sh-meo-vanguard", "sh-molniya-90min", "sh-mars-week", "sh-comet-parabolic")
                    for n in ("n0", "s1")]
)  # fmt: skip
def test_simulated_sightings(data_dir, name, noise):
    """Truth within four sigma (plus what the satellites' perturbations do over minutes: 0.3 %)."""
    obs = fa.load(data_dir / "cases" / f"{name}_{noise}.psv")
    s = obs.sight_lines
    about_earth = obs.center == "earth"
    found = solve(
        s.los, s.observer_km, s.t_s, GM_EARTH_KM3_S2 if about_earth else GM_SUN_KM3_S2,
        center_velocity_km_s=s.center_velocity_km_s, light_time=s.light_time, sigma_rad=s.sigma_rad,
        body_radius_km=EARTH_RADIUS_KM if about_earth else 0.0,
    )  # fmt: skip
    assert found[0].admissible
    row = found[0].rows[2]
    with (data_dir / "cases" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        one = list(csv.DictReader(file))[row]
    unit, target = (1.0, "sat_") if about_earth else (AU_KM, "tgt_")
    r = np.array([float(one[target + axis]) for axis in "xyz"]) * unit
    rho = np.linalg.norm(r - s.observer_km[row])
    good = [each for each in found if each.admissible]
    best = min(abs(each.range_km[2] - rho) / (4.0 * each.range_sigma_km + 3e-3 * rho) for each in good)
    assert best < 1.0


def test_which_four():
    t = np.array([0.0, 10.0, 350.0, 420.0, 640.0, 900.0, 1000.0])
    case = triples("leo", 1, seed=45, arc_deg=(20.0, 21.0))
    state = np.concatenate((case.r2_km[0], case.v2_km_s[0]))
    arc = seen(state, t, np.repeat(case.observer_km[0, 1:2], 7, axis=0), np.zeros((7, 3)), case.gm, 5e-6)
    assert solve(*arc.given, **arc.more)[0].rows == (0, 2, 4, 6)
    assert solve(*arc.given, rows=(5, 1, 0, 3), **arc.more)[0].rows == (0, 1, 3, 5)
    for rows in ((0, 1, 2), (0, 1, 2, 2), (0, 1, 2, 9), "abcd"):
        with pytest.raises(UsageError, match="rows is"):
            solve(*arc.given, rows=rows)
    with pytest.raises(UsageError, match="needs 4 or more"):
        solve(arc.los[:3], arc.observer_km[:3], arc.t_s[:3], arc.gm)


def test_permutation_and_rotation():
    arc = coplanar_arcs("ecliptic", 1, 46)[0]
    plain = solve(*arc.given)[0]
    order = [3, 1, 0, 2]
    moved = solve(arc.los[order], arc.observer_km[order], arc.t_s[order], arc.gm)[0]
    np.testing.assert_array_equal(moved.state, plain.state)
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    turned = solve(arc.los @ turn.T, arc.observer_km @ turn.T, arc.t_s, arc.gm)[0]
    np.testing.assert_allclose(turned.state[:3], turn @ plain.state[:3], rtol=1e-5)


@pytest.mark.parametrize("index", range(36))
def test_bad_input_gets_a_status(index):
    given, more = spoiled(noisy_arcs("LEO, 14 to 60 s", 1, 5)[0], index)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        all_statuses_speak(solve(*given, **more))
