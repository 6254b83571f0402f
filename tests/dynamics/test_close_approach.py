"""A body that passes the Earth, integrated about the Sun and again about the Earth: one path, two origins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from dynamics.made_up_tracks import POLE, Circle
from firstarc.border import planets
from firstarc.constants import AU_KM, DAY_S, EARTH_ZONALS, GM_BODIES_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.force_models import Body, ForceModel, full
from firstarc.dynamics.trajectory import Trajectory

GM_EARTH = GM_BODIES_KM3_S2["earth"]
#: Sun and Earth on the exact two-body circle, so that both origins see the same physics to the last digit.
RATE = np.sqrt((GM_SUN_KM3_S2 + GM_EARTH) / AU_KM**3)
EARTH = Circle(AU_KM, RATE, 0.7, 0.4)


@dataclass(frozen=True)
class SunFromEarth:
    def __call__(self, t_s):
        return -EARTH(t_s)


ABOUT_SUN = ForceModel("sun", GM_SUN_KM3_S2, EARTH_ZONALS, (Body("earth", EARTH, GM_EARTH),), pole=POLE)
ABOUT_EARTH = ForceModel("earth", GM_EARTH, EARTH_ZONALS, (Body("sun", SunFromEarth(), GM_SUN_KM3_S2),), pole=POLE)

#: Invented passages: position and velocity from the Earth at the nearest point, km and km/s.
PASSAGES = {
    "grazing": ([6400.0, 0.0, 1500.0], [1.5, 2.0, 16.0]),
    "two Earth radii": ([9000.0, 3000.0, 7000.0], [-4.0, 11.0, 0.4285714]),
    "the Moon's distance": ([100000.0, -300000.0, 200000.0], [6.0, 2.0, 0.0]),
    "slow, 30000 km": ([20000.0, 20000.0, 10000.0], [-3.0, 3.0, 1.5]),
}


def heliocentric(near):
    """The state about the Sun at t = 0 of a state about the Earth."""
    c, s = np.cos(0.7), np.sin(0.7)
    velocity = AU_KM * RATE * np.array([-s, c * np.cos(0.4), c * np.sin(0.4)])
    return near + np.concatenate((EARTH(np.zeros(1))[0], velocity))


@pytest.mark.parametrize("name", PASSAGES)
def test_the_origin_does_not_matter(name):
    near = np.concatenate(PASSAGES[name])
    t = np.array([-30.0, -1.0, -0.1, -0.01, 0.0, 0.01, 0.1, 1.0, 30.0]) * DAY_S
    found = Trajectory(ABOUT_SUN, heliocentric(near)).with_partials(t)
    other = Trajectory(ABOUT_EARTH, near).with_partials(t)
    off = np.linalg.norm(found.r_km - EARTH(t) - other.r_km, axis=1)
    # Coordinates of 1.5e8 km are rounded to 3e-8 km, velocities of 40 km/s to 7e-15 km/s; the passage magnifies that.
    by_state = other.by_state
    by_r = np.linalg.norm(by_state[:, :3, :3], 2, axis=(1, 2))
    by_v = np.linalg.norm(by_state[:, :3, 3:], 2, axis=(1, 2))
    assert np.all(off <= 3.0 * (3e-8 * by_r + 7e-15 * by_v)), off
    assert off.max() < 1e-3
    size = np.abs(by_state).max(axis=(1, 2), keepdims=True)
    assert np.all(np.abs(found.by_state - by_state) <= 1e-7 * size)


@pytest.mark.parametrize("name", PASSAGES)
def test_through_the_passage_and_back(name):
    """Among the planets of the ephemeris: in, past the Earth, out, and back again, to a metre."""
    epoch, passage, end = (2459000.5, 0.123456), 10.0 * DAY_S, 45.0 * DAY_S
    tracks = planets.tracks("sun", epoch, (0.0, end))
    model = full("sun", tracks, planets.earth_pole(epoch))
    step = 60.0
    earth = tracks["earth"](np.array([passage - step, passage, passage + step]))
    near = np.concatenate(PASSAGES[name])
    state = near + np.concatenate((earth[1], (earth[2] - earth[0]) / (2.0 * step)))
    before = np.concatenate(Trajectory(model, state, passage, partials=False).at([0.0]), axis=1)[0]
    through = Trajectory(model, before, 0.0, partials=False)
    np.testing.assert_allclose(through.at([passage])[0][0], state[:3], rtol=0, atol=1e-3)
    after = np.concatenate(through.at([end]), axis=1)[0]
    back = Trajectory(model, after, end, partials=False).at([0.0])[0][0]
    np.testing.assert_allclose(back, before[:3], rtol=0, atol=1e-3)
    # without the Earth it would be elsewhere
    bodies = tuple(body for body in model.bodies if body.name != "earth")
    without = Trajectory(ForceModel("sun", GM_SUN_KM3_S2, (), bodies), before, partials=False).at([end])[0][0]
    assert np.linalg.norm(without - after[:3]) > 1e4
