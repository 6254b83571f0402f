"""Laplace, double-r and the two-range method over the same cases: the truth is among the solutions."""

from __future__ import annotations

import importlib
from functools import cache

import numpy as np
import pytest

from firstarc.constants import ARCSEC_RAD, EARTH_RADIUS_KM, GM_EARTH_KM3_S2, SUN_RADIUS_KM
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.preliminary.outcome import Outcome
from firstarc.twobody.elements import state_from_elements
from firstarc.twobody.kepler import propagate
from pipeline.shared_cases import EARTH, SUN, case, directions_of, loaded, true_row
from properties.orbit_cases import REGIMES, triples
from properties.orbit_cases import SUN as SUN_REGIMES

METHODS = ("laplace", "double_r", "two_ranges")
#: Methods that know whole revolutions and wide arcs; Laplace's series does not.
WIDE = ("double_r", "two_ranges")


def method(name):
    return importlib.import_module(f"firstarc.preliminary.{name}").solve


@cache
def shared(name, pick):
    """Arguments and true state of a shared case; directions are those of the two-body orbit of the truth."""
    obs = loaded(name, "n0")
    lines, rows = obs.sight_lines, list(pick)
    truth = true_row(name, rows[1], obs)
    arguments = {
        "los": directions_of(truth, obs)[rows],
        "observer_km": lines.observer_km[rows],
        "t_s": lines.t_s[rows],
        "gm_km3_s2": truth.gm_km3_s2,
        "center_velocity_km_s": lines.center_velocity_km_s[rows],
        "light_time": lines.light_time,
        "sigma_rad": np.full((3, 2), ARCSEC_RAD),
        "body_radius_km": EARTH_RADIUS_KM if name in EARTH else SUN_RADIUS_KM,
    }
    return arguments, np.concatenate((truth.r_km, truth.v_km_s))


def assert_consistent(found, arguments):
    """What every result must be, whatever it found."""
    assert found
    assert [one.admissible for one in found] == sorted((one.admissible for one in found), reverse=True)
    rows = list(found[0].rows)
    t = np.asarray(arguments["t_s"])[rows]
    assert (np.diff(t) > 0.0).all() or not found[0].has_orbit
    for one in found:
        assert one.status.sentence.endswith(".")
        assert (one.outcome == Outcome.CONVERGED) == one.status.ok
        assert one.state.shape == one.estimate.shape == (6,)
        assert one.range_km.shape == one.miss_rad.shape == one.emission_t_s.shape == (len(rows),)
        assert one.positions_km.shape == (len(rows), 3)
        if not one.admissible:
            continue
        assert one.miss_rad.max() <= 1e-10
        moving = arguments.get("center_velocity_km_s")
        seen, ranges, emission = predicted_directions(
            one.state,
            one.t_state_s,
            t,
            np.asarray(arguments["observer_km"])[rows],
            None if moving is None else moving[rows],
            arguments["gm_km3_s2"],
            arguments.get("light_time", False),
        )
        los = np.asarray(arguments["los"])[rows]
        residual = residuals_rad(los / np.linalg.norm(los, axis=1)[:, None], seen)
        assert np.abs(residual).max() < 2e-10
        np.testing.assert_allclose(one.range_km, ranges, rtol=1e-7)
        np.testing.assert_allclose(one.emission_t_s, emission, rtol=0, atol=1e-6 * (1.0 + ranges.max() / 3e5))
        assert one.history[0].change != one.history[0].change
        assert len(one.history) == one.iterations + 1


def nearest(found, truth):
    """The admissible solution nearest to a state, and its relative distance."""
    good = [one for one in found if one.admissible]
    assert good, [one.status.sentence for one in found]
    apart = [np.linalg.norm(one.state[:3] - truth[:3]) / np.linalg.norm(truth[:3]) for one in good]
    return good[int(np.argmin(apart))], min(apart)


#: First, suggested and last picks; the two nights of the GEO only for methods that know whole revolutions.
PICKS = [
    (name, pick)
    for name in EARTH + SUN
    for pick in {(0, 1, 2), tuple(case(name)["suggested_triplet"])}
    if name != "sh-geo-2nights" or pick == (0, 1, 2)
]


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize(("case_name", "pick"), sorted(PICKS))
def test_truth_of_the_shared_cases(name, case_name, pick):
    arguments, truth = shared(case_name, pick)
    found = method(name)(**arguments)
    assert_consistent(found, arguments)
    best, apart = nearest(found, truth)
    # 1e-7 of the distance: for arcs of an hour the rounding of the directions, magnified by the geometry.
    assert apart < 1e-7
    # The linear sigma is that of one arcsecond; the rounding is 1e-9 of that.
    assert best.range_sigma_km > 0.0
    variances = np.diag(best.covariance)
    assert (variances > 0.0).all() and np.isfinite(best.covariance).all()


@pytest.mark.parametrize("name", WIDE)
@pytest.mark.parametrize("pick", [(0, 3, 5), (0, 2, 4), (1, 3, 5), (0, 1, 5), (2, 3, 4)])
def test_geostationary_across_two_nights(name, pick):
    """A revolution lies between the nights; the truth is found without being told how many."""
    arguments, truth = shared("sh-geo-2nights", pick)
    found = method(name)(**arguments)
    assert_consistent(found, arguments)
    assert nearest(found, truth)[1] < 1e-8


@pytest.mark.parametrize("name", WIDE)
def test_number_of_revolutions_can_be_given(name):
    arguments, truth = shared("sh-geo-2nights", (0, 3, 5))
    assert nearest(method(name)(**arguments, revolutions=1), truth)[1] < 1e-8
    assert nearest(method(name)(**arguments, revolutions=(0, 1)), truth)[1] < 1e-8
    none = method(name)(**arguments, revolutions=0)
    assert_consistent(none, arguments)
    away = [np.linalg.norm(one.state[:3] - truth[:3]) for one in none if one.admissible]
    assert all(km > 100.0 for km in away)


#: Of 12 cases of a heliocentric regime: Laplace's derivatives need arcs shorter than some of these.
LAPLACE_ABOUT_THE_SUN = 8


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize("regime", REGIMES)
def test_regimes(name, regime):
    """Arcs of 1 to 40 deg of every regime; rejected for their perigee or not, the true orbits are listed."""
    drawn = triples(regime, 12, 21)
    hits = 0
    for k in range(12):
        arguments = {
            "los": drawn.los[k],
            "observer_km": drawn.observer_km[k],
            "t_s": drawn.t_s[k],
            "gm_km3_s2": drawn.gm,
            "center_velocity_km_s": drawn.center_velocity_km_s[k],
            "light_time": True,
            "body_radius_km": 0.0,
        }
        found = method(name)(**arguments)
        assert_consistent(found, arguments)
        apart = [np.linalg.norm(one.positions_km[1] - drawn.r2_km[k]) for one in found if one.admissible]
        hits += bool(apart) and min(apart) < 1e-5 * drawn.range2_km[k]
    if name == "laplace" and regime in SUN_REGIMES:
        assert hits >= LAPLACE_ABOUT_THE_SUN
    else:
        assert hits == 12


def gap(regime, seed):
    """Three looks from one station, the object above 5 deg, over one to three revolutions; the truth's state."""
    rng = np.random.default_rng(seed)
    (low, high), limit = {"leo": ((7000.0, 8500.0), 0.05), "geo": ((41000.0, 43000.0), 0.05)}.get(
        regime, ((24000.0, 27000.0), 0.73)
    )
    while True:
        a = rng.uniform(low, high)
        e = rng.uniform(0.6 if regime == "molniya" else 0.0, min(limit, 1.0 - 6600.0 / a))
        tilt = rng.uniform(0.02, 0.3) if regime == "geo" else rng.uniform(0.3, 2.8)
        r, v = state_from_elements(a * (1.0 - e * e), e, tilt, *rng.uniform(0.0, 6.28, 3), GM_EARTH_KM3_S2)
        period = 2.0 * np.pi * np.sqrt(a**3 / GM_EARTH_KM3_S2)
        t = np.sort(rng.uniform(0.0, 3.2 * period, 300))
        latitude, turn = rng.uniform(-1.0, 1.0), rng.uniform(0.0, 6.28) + 7.292115e-5 * t
        axis = np.cos(latitude) * np.cos(turn), np.cos(latitude) * np.sin(turn), np.sin(latitude) + 0.0 * t
        site = 6371.0 * np.stack(axis, axis=1)
        place, speed = propagate(r, v, t, GM_EARTH_KM3_S2)
        line = place - site
        distance = np.linalg.norm(line, axis=1)
        up = np.flatnonzero(np.sum(line * site, axis=1) > np.sin(np.radians(5.0)) * 6371.0 * distance)
        if up.size < 3:
            continue
        k = np.sort(rng.choice(up, 3, replace=False))
        steps = np.diff(t[k])
        if t[k[2]] - t[k[0]] < 0.9 * period or steps.min() < 0.01 * period:
            continue
        return line[k], site[k], t[k], np.concatenate((place[k[1]], speed[k[1]]))


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("regime", ["leo", "geo", "molniya"])
def test_gaps_of_whole_revolutions(regime, seed):
    los, site, t, truth = gap(regime, seed)
    arguments = {"los": los, "observer_km": site, "t_s": t, "gm_km3_s2": GM_EARTH_KM3_S2}
    found = method("two_ranges")(**arguments, body_radius_km=EARTH_RADIUS_KM)
    assert_consistent(found, arguments)
    assert nearest(found, truth)[1] < 1e-6


@pytest.mark.parametrize("name", METHODS)
def test_more_observations_decide_the_order(name):
    """With other observations the orbit that fits them comes first."""
    obs = loaded("sh-molniya-90min", "n0")
    lines = obs.sight_lines
    truth = true_row("sh-molniya-90min", len(obs) // 2, obs)
    arguments = {
        "los": directions_of(truth, obs),
        "observer_km": lines.observer_km,
        "t_s": lines.t_s,
        "gm_km3_s2": truth.gm_km3_s2,
        "center_velocity_km_s": lines.center_velocity_km_s,
        "light_time": True,
        "body_radius_km": EARTH_RADIUS_KM,
    }
    found = method(name)(**arguments)
    assert sum(one.admissible for one in found) > 1
    assert found[0].rows == (0, len(obs) // 2, len(obs) - 1)
    state = np.concatenate((truth.r_km, truth.v_km_s))
    assert np.linalg.norm(found[0].state[:3] - state[:3]) < 1e-6 * np.linalg.norm(state[:3])
    second = method(name)(**arguments, middle=1)
    assert second[0].rows[1] == 1


def test_laplace_estimate_gains_from_more_observations():
    """Derivatives from all nine directions beat those from three (the estimate, before any refinement)."""
    obs = loaded("sh-leo-pass", "n0")
    lines, middle = obs.sight_lines, len(obs) // 2
    truth = true_row("sh-leo-pass", middle, obs)
    arguments = {
        "los": directions_of(truth, obs),
        "observer_km": lines.observer_km,
        "t_s": lines.t_s,
        "gm_km3_s2": truth.gm_km3_s2,
        "center_velocity_km_s": lines.center_velocity_km_s,
        "light_time": True,
    }
    three, every = (method("laplace")(**arguments, use_all=flag)[0] for flag in (False, True))
    off = [np.linalg.norm(one.estimate[:3] - truth.r_km) for one in (three, every)]
    assert off[1] < 0.2 * off[0]
    np.testing.assert_allclose(every.state, three.state, rtol=1e-9)
