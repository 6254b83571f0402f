"""Directions along a perturbed orbit: the light-time equation, and two-body motion as the limit."""

from __future__ import annotations

import numpy as np
import pytest

from dynamics.made_up_tracks import ABOUT_EARTH, ABOUT_SUN, LOW, MAIN_BELT, NEAR_EARTH, POLE
from firstarc.constants import C_KM_S, DAY_S
from firstarc.dynamics.force_models import full, two_body
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.dynamics.perturbed_directions import perturbed_directions
from firstarc.dynamics.trajectory import Trajectory
from firstarc.errors import UsageError

SETTINGS = {
    "low": ("earth", LOW, ABOUT_EARTH, 600.0),
    "near": ("sun", NEAR_EARTH, ABOUT_SUN, 20.0 * DAY_S),
    "far": ("sun", MAIN_BELT, ABOUT_SUN, 60.0 * DAY_S),
}


def observers(center, t):
    """A station on a sphere, or on the made-up Earth; and the velocity of the centre."""
    a = 7.292e-5 * t
    station = 6371.0 * np.stack([0.8 * np.cos(a), 0.8 * np.sin(a), 0.6 + 0.0 * a], axis=1)
    if center == "sun":
        return station + ABOUT_SUN["earth"](t), np.tile([0.01, -0.004, 0.002], (t.size, 1))
    return station, np.tile([10.0, -25.0, 8.0], (t.size, 1))


@pytest.mark.parametrize("name", SETTINGS)
@pytest.mark.parametrize("light_time", [True, False])
def test_without_perturbations_it_is_the_two_body_prediction(name, light_time):
    center, state, _, span = SETTINGS[name]
    t = np.linspace(-0.3, 1.0, 40) * span
    observer, velocity = observers(center, t)
    model = two_body(center)
    found = perturbed_directions(Trajectory(model, state), t, observer, velocity, light_time)
    other = predicted_directions(state, 0.0, t, observer, velocity, model.gm_km3_s2, light_time)
    assert np.abs(residuals_rad(other[0], found[0])).max() < 1e-13
    np.testing.assert_allclose(found[1], other[1], rtol=1e-13)
    np.testing.assert_allclose(found[2], other[2], rtol=0, atol=1e-8)


@pytest.mark.parametrize("name", SETTINGS)
def test_light_time_equation(name):
    """rho L = r(t - rho/c) - R - Vc rho/c, row by row."""
    center, state, tracks, span = SETTINGS[name]
    trajectory = Trajectory(full(center, tracks, POLE), state)
    t = np.linspace(0.0, 1.0, 25) * span
    observer, velocity = observers(center, t)
    los, distance, emission = perturbed_directions(trajectory, t, observer, velocity, True)
    np.testing.assert_allclose(np.linalg.norm(los, axis=1), 1.0, rtol=1e-15)
    np.testing.assert_allclose(emission, t - distance / C_KM_S, rtol=0, atol=1e-9)
    r, _ = trajectory.at(emission)
    left = distance[:, None] * los
    right = r - observer - velocity * (distance / C_KM_S)[:, None]
    assert np.max(np.linalg.norm(left - right, axis=1) / distance) < 1e-13
    # and it is not what geometry alone gives
    geometric = perturbed_directions(trajectory, t, observer, None, False)[0]
    assert np.abs(residuals_rad(geometric, los)).max() > 1e-6


def test_rows_must_match():
    with pytest.raises(UsageError, match="2 rows for 3 times"):
        perturbed_directions(Trajectory(two_body("sun"), MAIN_BELT), np.arange(3.0), np.zeros((2, 3)), None, True)


def test_unreachable_rows_are_nan():
    falling = Trajectory(full("earth", ABOUT_EARTH, POLE), [7000.0, 0.0, 0.0, 0.0, 0.5, 0.0])
    t = np.array([10.0, 5000.0])
    los, distance, _ = perturbed_directions(falling, t, *observers("earth", t), True)
    assert np.isfinite(los[0]).all() and np.isnan(los[1]).all() and np.isnan(distance[1])
    assert not falling.status.ok
