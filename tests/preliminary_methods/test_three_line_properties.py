"""Laplace, double-r and the two-range method: symmetries, agreement, and input that admits no orbit."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firstarc.constants import EARTH_RADIUS_KM
from firstarc.errors import UsageError
from firstarc.preliminary.candidates import solve_triple
from firstarc.preliminary.outcome import Outcome
from firstarc.results import Code
from preliminary_methods.test_three_line_methods import METHODS, WIDE, assert_consistent, method
from properties.orbit_cases import triples


def one_case(regime="meo", k=1, seed=31):
    drawn = triples(regime, k + 1, seed)
    return {
        "los": drawn.los[k],
        "observer_km": drawn.observer_km[k],
        "t_s": drawn.t_s[k],
        "gm_km3_s2": drawn.gm,
        "center_velocity_km_s": drawn.center_velocity_km_s[k],
        "light_time": True,
    }


def best(found):
    assert found[0].admissible, [one.status.sentence for one in found]
    return found[0]


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize("regime", ["leo", "geo", "main belt"])
def test_agrees_with_gauss(name, regime):
    """Every admissible orbit of Gauss' way is among the method's."""
    arguments = one_case(regime)
    gauss = [one for one in solve_triple(**arguments).candidates if one.admissible]
    found = [one for one in method(name)(**arguments) if one.admissible]
    assert gauss
    for one in gauss:
        apart = [np.linalg.norm(other.state - one.converged.state) for other in found]
        assert min(apart) < 1e-6 * np.linalg.norm(one.converged.state)


@pytest.mark.parametrize("name", METHODS)
def test_turned_axes(name):
    arguments = one_case()
    turn, _ = np.linalg.qr(np.random.default_rng(5).normal(size=(3, 3)))
    turn *= np.sign(np.linalg.det(turn))
    turned = {**arguments}
    for key in ("los", "observer_km", "center_velocity_km_s"):
        turned[key] = arguments[key] @ turn.T
    one, other = best(method(name)(**arguments)), best(method(name)(**turned))
    np.testing.assert_allclose(other.state[:3], turn @ one.state[:3], rtol=0, atol=1e-8 * np.linalg.norm(one.state[:3]))
    np.testing.assert_allclose(other.state[3:], turn @ one.state[3:], rtol=0, atol=1e-8 * np.linalg.norm(one.state[3:]))


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize(("length", "time"), [(1e-4, 1.0), (1e-8, 1e-6), (50.0, 3.0)])
def test_other_units(name, length, time):
    """Geometric directions: light fixes a speed."""
    arguments = one_case("main belt")
    arguments |= {"light_time": False, "center_velocity_km_s": None}
    scaled = {
        **arguments,
        "observer_km": arguments["observer_km"] * length,
        "t_s": arguments["t_s"] * time,
        "gm_km3_s2": arguments["gm_km3_s2"] * length**3 / time**2,
        "excess_limit_km_s": 100.0 * length / time,
    }
    one, other = best(method(name)(**arguments)), best(method(name)(**scaled))
    np.testing.assert_allclose(
        other.state[:3] / length, one.state[:3], rtol=0, atol=1e-7 * np.linalg.norm(one.state[:3])
    )
    np.testing.assert_allclose(
        other.state[3:] * time / length, one.state[3:], rtol=0, atol=1e-7 * np.linalg.norm(one.state[3:])
    )


@pytest.mark.parametrize("name", METHODS)
def test_time_reversed(name):
    """Played backwards the velocities change sign (geometric directions)."""
    arguments = one_case()
    arguments |= {"light_time": False, "center_velocity_km_s": None}
    one, back = best(method(name)(**arguments)), best(method(name)(**{**arguments, "t_s": -arguments["t_s"]}))
    assert back.rows == one.rows[::-1]
    np.testing.assert_allclose(back.state[:3], one.state[:3], rtol=0, atol=1e-8 * np.linalg.norm(one.state[:3]))
    np.testing.assert_allclose(back.state[3:], -one.state[3:], rtol=0, atol=1e-8 * np.linalg.norm(one.state[3:]))


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize("order", [(2, 1, 0), (1, 2, 0), (0, 2, 1)])
def test_any_order_of_the_observations(name, order):
    arguments = one_case()
    chosen = list(order)
    mixed = {key: value[chosen] if isinstance(value, np.ndarray) else value for key, value in arguments.items()}
    mixed["sigma_rad"] = np.array([[1e-6, 2e-6], [3e-6, 4e-6], [5e-6, 6e-6]])[chosen]
    plain = {**arguments, "sigma_rad": np.array([[1e-6, 2e-6], [3e-6, 4e-6], [5e-6, 6e-6]])}
    one, other = best(method(name)(**plain)), best(method(name)(**mixed))
    assert tuple(np.array(order)[list(other.rows)]) == one.rows
    np.testing.assert_array_equal(other.state, one.state)
    np.testing.assert_array_equal(other.covariance, one.covariance)


@pytest.mark.parametrize("name", METHODS)
def test_covariance_is_that_of_gauss_way(name):
    """Same orbit, same noise: the same covariance, from code that shares only the partials."""
    arguments = {**one_case(), "sigma_rad": np.full((3, 2), 5e-6), "correlation": np.array([0.3, 0.0, -0.5])}
    one = best(method(name)(**arguments))
    gauss = [c for c in solve_triple(**arguments).candidates if c.admissible]
    match = min(gauss, key=lambda c: np.linalg.norm(c.converged.state - one.state))
    size = np.sqrt(np.diag(match.converged.covariance))
    np.testing.assert_allclose(
        one.covariance / np.outer(size, size), match.converged.covariance / np.outer(size, size), atol=1e-5
    )
    assert one.range_sigma_km == pytest.approx(match.converged.range2_sigma_km, rel=1e-5)


@pytest.mark.parametrize("name", METHODS)
def test_covariance_by_repeated_noise(name):
    """Sigma of the middle range against the scatter of 60 noisy repeats (its own sigma: 9 %)."""
    arguments = one_case("leo", 2)
    sigma = 2e-6
    rng = np.random.default_rng(9)
    one = best(method(name)(**arguments, sigma_rad=np.full((3, 2), sigma)))
    middle = []
    for _ in range(60):
        los = arguments["los"] + sigma * rng.normal(size=(3, 3))
        found = best(method(name)(**{**arguments, "los": los}))
        middle.append(found.range_km[1])
    assert np.std(middle) / one.range_sigma_km == pytest.approx(1.0, abs=0.3)


BAD = {
    "two directions alike": ("los", lambda a: a[[0, 0, 2]]),
    "all directions alike": ("los", lambda a: a[[1, 1, 1]]),
    "opposite directions": ("los", lambda a: np.stack((a[0], -a[0], a[2]))),
    "zero direction": ("los", lambda a: a * np.array([[1.0], [0.0], [1.0]])),
    "direction not a number": ("los", lambda a: a + np.array([[0.0], [np.nan], [0.0]])),
    "infinite direction": ("los", lambda a: a + np.array([[0.0], [np.inf], [0.0]])),
    "equal times": ("t_s", lambda t: t * np.array([1.0, 0.0, 0.0])),
    "all times equal": ("t_s", lambda t: 0.0 * t),
    "time not a number": ("t_s", lambda t: t + np.array([np.nan, 0.0, 0.0])),
    "infinite time": ("t_s", lambda t: t + np.array([0.0, 0.0, np.inf])),
    "huge times": ("t_s", lambda t: t * 1e30),
    "tiny times": ("t_s", lambda t: t * 1e-30),
    "observer at the centre": ("observer_km", lambda a: 0.0 * a),
    "observer not a number": ("observer_km", lambda a: a * np.nan),
    "observer far away": ("observer_km", lambda a: a * 1e30),
    "centre's velocity not a number": ("center_velocity_km_s", lambda a: a * np.nan),
    "zenith": ("los", lambda a: np.array([[0.0, 0.0, 1.0]] * 3)),
}


@pytest.mark.parametrize("name", METHODS)
@pytest.mark.parametrize("bad", BAD)
def test_input_that_admits_no_orbit_has_a_status(name, bad):
    arguments = {**one_case(), "body_radius_km": EARTH_RADIUS_KM, "sigma_rad": np.full((3, 2), 1e-6)}
    key, change = BAD[bad]
    arguments[key] = change(arguments[key])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = method(name)(**arguments)
    assert_consistent(found, arguments)


@pytest.mark.parametrize("name", ["laplace", "double_r"])
def test_coplanar_lines_are_said_to_be(name):
    """Observers and lines in one plane through the centre: neither method can find the range."""
    angle = np.array([0.1, 0.2, 0.31])
    los = np.stack((np.cos(angle), np.sin(angle), 0.0 * angle), axis=1)
    turn = np.array([0.3, 0.31, 0.32])
    site = 6378.0 * np.stack((np.cos(turn), np.sin(turn), 0.0 * turn), axis=1)
    found = method(name)(los, site, np.array([0.0, 300.0, 700.0]), 398600.4415)
    assert [one.outcome for one in found] == [Outcome.COPLANAR_LINES]
    assert found[0].status.code == Code.COPLANAR_LINES


@pytest.mark.parametrize("name", METHODS)
@given(data=st.data())
@settings(max_examples=25)
def test_fuzzed_arrays(name, data):
    wild = st.one_of(st.sampled_from([np.nan, np.inf, -np.inf, 1e300, -1e-300]), st.floats(-2.0, 2.0))
    numbers = np.array(data.draw(st.lists(wild, min_size=21, max_size=21)))
    arguments = {
        "los": numbers[:9].reshape(3, 3),
        "observer_km": numbers[9:18].reshape(3, 3) * 8192.0,
        "t_s": numbers[18:] * 1024.0,
        "gm_km3_s2": 398600.4415,
    }
    options = {"revolutions": (0, 1)} if name in WIDE else {}
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = method(name)(**arguments, **options, body_radius_km=EARTH_RADIUS_KM)
    assert found
    assert all(one.status.sentence for one in found)


@pytest.mark.parametrize("name", METHODS)
def test_misuse_is_named(name):
    arguments = one_case()
    with pytest.raises(UsageError, match="gm_km3_s2"):
        method(name)(**{**arguments, "gm_km3_s2": 0.0})
    with pytest.raises(UsageError, match="los"):
        method(name)(**{**arguments, "los": arguments["los"][:, :2]})
    with pytest.raises(UsageError, match="at least 3"):
        method(name)(arguments["los"][:2], arguments["observer_km"][:2], arguments["t_s"][:2], 398600.0)
    with pytest.raises(UsageError, match="t_s"):
        method(name)(**{**arguments, "t_s": [0.0, 1.0]})
    with pytest.raises(UsageError, match="sigma_rad"):
        method(name)(**arguments, sigma_rad=[1.0, 2.0, 3.0])
    with pytest.raises(UsageError, match="middle"):
        method(name)(**arguments, middle=7)


@pytest.mark.parametrize("name", WIDE)
@pytest.mark.parametrize("value", [-1, 0.5, (0, -2), ()])
def test_revolutions_are_whole_numbers(name, value):
    with pytest.raises(UsageError, match="revolutions"):
        method(name)(**one_case(), revolutions=value)
