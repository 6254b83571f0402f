"""Orbits from measured positions (directions with ranges)."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from firstarc.constants import ARCSEC_RAD, EARTH_RADIUS_KM
from firstarc.dynamics.light_time import predicted_directions
from firstarc.errors import UsageError
from firstarc.preliminary.measured import solve
from firstarc.preliminary.outcome import Outcome
from firstarc.twobody.kepler import propagate
from pipeline.shared_cases import loaded, true_row
from properties.orbit_cases import triples
from published.published_values import CASES


def measured(regime="leo", k=0, seed=41, light_time=True, **arcs):
    """Exact measurements of a simulated orbit, and its state at the middle reception time."""
    drawn = triples(regime, k + 1, seed, light_time, **arcs)
    delay = drawn.range2_km[k] / 299792.458 if light_time else 0.0
    state = np.concatenate((drawn.r2_km[k], drawn.v2_km_s[k]))
    los, ranges, _ = predicted_directions(
        state, -delay, drawn.t_s[k], drawn.observer_km[k], drawn.center_velocity_km_s[k], drawn.gm, light_time
    )
    arguments = {
        "los": los,
        "observer_km": drawn.observer_km[k],
        "t_s": drawn.t_s[k],
        "gm_km3_s2": drawn.gm,
        "range_km": ranges,
        "center_velocity_km_s": drawn.center_velocity_km_s[k],
        "light_time": light_time,
    }
    return arguments, state, delay


def some(arguments, rows):
    return {key: value[rows] if isinstance(value, np.ndarray) else value for key, value in arguments.items()}


@pytest.mark.parametrize("light_time", [True, False])
@pytest.mark.parametrize("regime", ["leo", "meo", "geo", "molniya", "main belt"])
def test_three_exact_positions(regime, light_time):
    arguments, state, delay = measured(regime, 2, light_time=light_time)
    found = solve(**arguments)
    assert found[0].admissible
    assert "Gibbs" in found[0].status.sentence
    # The middle position, at its emission time, is the measured one; Gibbs is exact for two-body motion.
    np.testing.assert_allclose(found[0].positions_km[1], state[:3], rtol=1e-9)
    gibbs = next(one for one in found if one.status.sentence.startswith("Gibbs"))
    r, v = propagate(state[:3], state[3:], delay, arguments["gm_km3_s2"])
    np.testing.assert_allclose(gibbs.state[:3], r, rtol=0, atol=1e-8 * np.linalg.norm(r))
    np.testing.assert_allclose(gibbs.state[3:], v, rtol=0, atol=1e-6 * np.linalg.norm(v))


@pytest.mark.parametrize("regime", ["leo", "meo", "geo", "molniya", "near-Earth"])
def test_two_exact_positions(regime):
    """Lambert with light time: the truth is among the ways."""
    arguments, state, delay = measured(regime, 1)
    found = solve(**some(arguments, [0, 2]))
    assert found[0].rows == (0, 1)
    # Results belong to the first reception time, the truth to the middle emission.
    r, v = propagate(state[:3], state[3:], arguments["t_s"][0] + delay, arguments["gm_km3_s2"])
    apart = [np.linalg.norm(one.state[:3] - r) / np.linalg.norm(r) for one in found]
    slow = [np.linalg.norm(one.state[3:] - v) / np.linalg.norm(v) for one in found]
    assert min(apart) < 1e-9
    assert min(slow) < 1e-7
    assert len(found) >= 2
    for one in found:
        # Lambert's orbit passes both measured positions.
        assert one.miss_rad.max() < 1e-9


def test_radar_case_of_the_shared_data():
    """LEO pass with true ranges from the csv's geometry, noise-free."""
    obs = loaded("sh-leo-pass", "n0")
    lines, middle = obs.sight_lines, len(obs) // 2
    truth = true_row("sh-leo-pass", middle, obs)
    state = np.concatenate((truth.r_km, truth.v_km_s))
    los, ranges, _ = predicted_directions(
        state, lines.t_s[middle], lines.t_s, lines.observer_km, lines.center_velocity_km_s, truth.gm_km3_s2, True
    )
    found = solve(
        los, lines.observer_km, lines.t_s, truth.gm_km3_s2, range_km=ranges,
        center_velocity_km_s=lines.center_velocity_km_s, light_time=True, body_radius_km=EARTH_RADIUS_KM,
        sigma_rad=np.full((len(obs), 2), 5.0 * ARCSEC_RAD), range_sigma_km=0.01,
    )  # fmt: skip
    assert found[0].admissible and found[0].rows == (0, middle, len(obs) - 1)
    assert np.linalg.norm(found[0].state[:3] - state[:3]) < 1e-6
    assert found[0].range_sigma_km == pytest.approx(0.01)


def test_published_vallado_7_4_through_the_door():
    """Herrick-Gibbs example as measurements from the centre of the Earth: direction and range of each position."""
    case = CASES["herrick_gibbs_vallado_7_4"]
    r = np.array([case["inputs"][f"r{k}_km"] for k in (1, 2, 3)])
    ranges = np.linalg.norm(r, axis=1)
    found = solve(r, 0.0 * r, case["inputs"]["t_s"], case["inputs"]["mu_km3_s2"], range_km=ranges)
    by_rule = {one.status.sentence.split(":")[0]: one.state[3:] for one in found}
    np.testing.assert_allclose(by_rule["Herrick-Gibbs"], case["expected"]["v2_km_s"], atol=case["tolerance"]["v2_km_s"])
    np.testing.assert_allclose(
        by_rule["Gibbs"], case["expected"]["v2_gibbs_km_s"], atol=case["tolerance"]["v2_gibbs_km_s"]
    )


def test_the_rule_follows_the_noise():
    """Kilometre ranges over a short arc: Herrick-Gibbs; metre ranges over a wide one: Gibbs."""
    short, _, _ = measured("leo", 3, arc_deg=(3.0, 4.0))
    wide, _, _ = measured("leo", 3, arc_deg=(35.0, 36.0))
    rough = solve(**short, sigma_rad=np.full((3, 2), 1e-4), range_sigma_km=1.0)
    fine = solve(**wide, sigma_rad=np.full((3, 2), 1e-8), range_sigma_km=0.001)
    assert rough[0].status.sentence.startswith("Herrick-Gibbs")
    assert fine[0].status.sentence.startswith("Gibbs")


def test_covariance_by_repeated_noise():
    arguments, _, _ = measured("meo", 2)
    angle, along = 2e-5, 0.05
    rng = np.random.default_rng(12)
    noisy = []
    one = solve(**arguments, sigma_rad=np.full((3, 2), angle), range_sigma_km=along)[0]
    for _ in range(400):
        los = arguments["los"] + angle * rng.normal(size=(3, 3))
        ranges = arguments["range_km"] + along * rng.normal(size=3)
        same = [
            other
            for other in solve(**{**arguments, "los": los, "range_km": ranges})
            if other.status.sentence.split(":")[0] == one.status.sentence.split(":")[0]
        ]
        noisy.append(same[0].state)
    scatter = np.std(noisy, axis=0)
    # 400 repeats: 3.5 % of each sigma, six of them.
    np.testing.assert_allclose(scatter / np.sqrt(np.diag(one.covariance)), 1.0, atol=0.13)


def test_rejections_keep_their_reason():
    arguments, _, _ = measured("leo", 0)
    sunk = solve(**{**arguments, "range_km": arguments["range_km"] * 0.2}, body_radius_km=EARTH_RADIUS_KM + 2000.0)
    assert {one.outcome for one in sunk} <= {Outcome.BELOW_SURFACE, Outcome.NOT_CONVERGED}
    assert all("km" in one.status.sentence or "deg" in one.status.sentence for one in sunk)
    negative = solve(**{**arguments, "range_km": arguments["range_km"] * np.array([1.0, -1.0, 1.0])})
    assert [one.outcome for one in negative] == [Outcome.NEGATIVE_RANGE]
    assert "observation 2" in negative[0].status.sentence


BAD = {
    "range not a number": ("range_km", lambda a: a * np.array([1.0, np.nan, 1.0])),
    "infinite range": ("range_km", lambda a: a * np.array([1.0, 1.0, np.inf])),
    "zero ranges": ("range_km", lambda a: 0.0 * a),
    "direction not a number": ("los", lambda a: a * np.nan),
    "zero direction": ("los", lambda a: 0.0 * a),
    "equal times": ("t_s", lambda t: 0.0 * t),
    "two equal times": ("t_s", lambda t: t * np.array([1.0, 1.0, 0.0])),
    "time not a number": ("t_s", lambda t: t * np.nan),
    "one position three times": ("los", lambda a: a[[0, 0, 0]]),
    "observer not a number": ("observer_km", lambda a: a * np.nan),
    "huge ranges": ("range_km", lambda a: a * 1e200),
}


@pytest.mark.parametrize("rows", [[0, 1, 2], [0, 2]])
@pytest.mark.parametrize("bad", BAD)
def test_input_that_admits_no_orbit_has_a_status(bad, rows):
    arguments, _, _ = measured("leo", 0)
    key, change = BAD[bad]
    arguments[key] = change(arguments[key])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = solve(**some(arguments, rows), sigma_rad=np.full((len(rows), 2), 1e-5), range_sigma_km=0.01)
    assert found
    assert all(one.status.sentence.endswith(".") for one in found)
    assert all(one.has_orbit for one in found if one.admissible)


def test_positions_on_one_line_through_the_centre():
    up = np.array([[1.0, 0.0, 0.0]] * 2)
    found = solve(up, 6378.0 * up, [0.0, 100.0], 398600.4415, range_km=[500.0, 800.0])
    assert [one.outcome for one in found] == [Outcome.NOT_CONVERGED]
    assert "directions from the centre" in found[0].status.sentence


def test_misuse_is_named():
    arguments, _, _ = measured("leo", 0)
    with pytest.raises(UsageError, match="range_km"):
        solve(**{**arguments, "range_km": arguments["range_km"][:2]})
    with pytest.raises(UsageError, match="range_sigma_km"):
        solve(**arguments, range_sigma_km=[1.0, 2.0])
    with pytest.raises(UsageError, match="at least 2"):
        solve(**some(arguments, [0]))
    with pytest.raises(UsageError, match="most_revolutions"):
        solve(**arguments, most_revolutions=-1)
    with pytest.raises(UsageError, match="middle"):
        solve(**arguments, middle=3)
