"""Tracks of the bodies against jplephem's own reading, and planets integrated against the ephemeris."""

from __future__ import annotations

import pickle
from dataclasses import replace

import erfa
import numpy as np
import pytest

from firstarc.border import planets
from firstarc.border.solar_system import ephemeris
from firstarc.constants import DAY_S, GM_BODIES_KM3_S2
from firstarc.dynamics.force_models import Body, ForceModel, full
from firstarc.dynamics.trajectory import Trajectory
from firstarc.errors import UsageError

#: 2020 May 31, an epoch with a fraction that no binary number holds
EPOCH = (2459000.5, 0.123456)
WAYS = {"sun": [(0, 10)], "earth": [(0, 3), (3, 399)], "moon": [(0, 3), (3, 301)]}
WAYS |= {name: [(0, k)] for k, name in enumerate(planets.NAMES) if name in ("mercury", "venus")}
WAYS |= {"mercury": [(0, 1)], "venus": [(0, 2)], "mars": [(0, 4)], "jupiter": [(0, 5)]}
WAYS |= {"saturn": [(0, 6)], "uranus": [(0, 7)], "neptune": [(0, 8)]}


def from_file(name, t_s=0.0):
    """Barycentric state of a body, km and km/s, straight from jplephem."""
    r, v = np.zeros(3), np.zeros(3)
    for pair in WAYS[name]:
        position, velocity = ephemeris().kernel[pair].compute_and_differentiate(EPOCH[0], EPOCH[1] + t_s / DAY_S)
        r, v = r + position, v + velocity / DAY_S
    return r, v


@pytest.mark.parametrize("center", ["earth", "sun"])
def test_tracks_are_the_ephemeris(center):
    """Within the rounding of positions of up to 4.5e9 km (1e-6 km), the Moon's to a millimetre."""
    names = [name for name in planets.NAMES if name != center]
    tracks = planets.tracks(center, EPOCH, (-3.0 * DAY_S, 40.0 * DAY_S), names)
    assert list(tracks) == names
    # inside, on the grid of pieces, and outside the span
    t = np.array([-200.0, -3.0, 0.0, 0.376544, 3.376544, 7.376544, 17.0, 39.999, 300.0]) * DAY_S
    for name in names:
        r = tracks[name](t)
        expected = np.array([from_file(name, x)[0] - from_file(center, x)[0] for x in t])
        # a time of 3e7 s is known to 4e-9 s: 2e-7 km at 50 km/s; Julian dates in two parts to 2e-11 d
        allowed = 1e-6 if (center, name) == ("earth", "moon") else 1e-4
        np.testing.assert_allclose(r, expected, rtol=0, atol=allowed)
        alone = tracks[name](t[4])
        np.testing.assert_array_equal(alone[0], tracks[name](t[4:5])[0])


def test_default_names_and_pickle():
    assert set(planets.tracks("earth", EPOCH, (0.0, 1.0))) == {"sun", "moon"}
    tracks = planets.tracks("sun", EPOCH, (0.0, 1.0))
    assert set(tracks) == set(planets.NAMES) - {"sun"}
    again = pickle.loads(pickle.dumps(tracks["mars"]))
    t = np.array([0.0, 1000.0])
    np.testing.assert_array_equal(again(t), tracks["mars"](t))


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: planets.tracks("mars", EPOCH, (0.0, 1.0)), "center='mars'"),
        (lambda: planets.tracks("sun", EPOCH, (0.0, 1.0), ["pluto"]), "pluto"),
        (lambda: planets.tracks("sun", EPOCH, (0.0, 1.0), ["sun"]), "not itself"),
        (lambda: planets.tracks("sun", (2200000.5, 0.0), (0.0, 1.0)), "covers TDB Julian dates"),
        (lambda: planets.tracks("sun", EPOCH, (0.0, np.inf)), "finite"),
        (lambda: planets.tracks("sun", EPOCH, (0.0, 1.0))["mars"](np.array([1e11])), "two-body"),
        (lambda: planets.tracks("sun", EPOCH, (0.0, 1.0))["mars"](np.array([np.nan])), "not finite"),
    ],
)
def test_misuse_is_named(call, words):
    with pytest.raises(UsageError, match=words):
        call()


def test_pole_is_that_of_the_rotation():
    """Third row of the celestial-to-intermediate matrix (ERFA's c2i06a)."""
    pole = np.array(planets.earth_pole(EPOCH))
    np.testing.assert_allclose(pole, erfa.c2i06a(*EPOCH)[2], rtol=0, atol=1e-12)
    # 20 arcsec a year of precession since 2000, to the nearest nutation
    assert np.degrees(np.hypot(*pole[:2])) * 3600.0 == pytest.approx(20.0 * 20.41, abs=20.0)


#: Integrated minus ephemeris in km after 10, 60 and 365 days. What is left is the asteroids' attraction, the
#: ephemeris' own constants (DE421 is not DE440), and for the outer planets the Sun's reaction to them.
ALLOWED = {
    "mercury": (0.003, 0.05, 0.5),
    "venus": (0.003, 0.05, 0.5),
    "mars": (0.003, 0.1, 2.0),
    "jupiter": (0.01, 0.1, 2.0),
    "saturn": (0.01, 0.1, 2.0),
    "uranus": (0.01, 0.1, 2.0),
    "neptune": (0.01, 0.1, 2.0),
}


@pytest.fixture(scope="module")
def around_the_sun():
    tracks = planets.tracks("sun", EPOCH, (0.0, 366.0 * DAY_S))
    return full("sun", tracks, planets.earth_pole(EPOCH), ephemeris().name)


def of_planet(model, name):
    """The forces on a planet: without itself, and with its own mass drawing the Sun."""
    others = tuple(body for body in model.bodies if body.name != name)
    return replace(model, bodies=others, gm_km3_s2=model.gm_km3_s2 + GM_BODIES_KM3_S2[name])


@pytest.mark.parametrize("name", ALLOWED)
def test_planets_follow_the_ephemeris_for_a_year(name, around_the_sun):
    track = next(body.position_km for body in around_the_sun.bodies if body.name == name)
    model = of_planet(around_the_sun, name)
    state = np.concatenate([a - b for a, b in zip(from_file(name), from_file("sun"), strict=True)])
    t = np.array([10.0, 60.0, 365.0]) * DAY_S
    off = np.linalg.norm(Trajectory(model, state, partials=False).at(t)[0] - track(t), axis=1)
    assert np.all(off <= ALLOWED[name]), off
    if name in ("mercury", "venus", "mars"):
        # the relativistic term is what does it
        without = Trajectory(replace(model, relativity=False), state, partials=False).at(t)[0]
        assert np.linalg.norm(without - track(t), axis=1)[1] > 5.0 * ALLOWED[name][1]


def test_the_moon_about_the_earth():
    """Sun, planets and J2 of the Earth; lunar figure and tides are left out: some 100 m in ten days."""
    names = [name for name in planets.NAMES if name != "earth"]
    tracks = planets.tracks("earth", EPOCH, (0.0, 31.0 * DAY_S), names)
    bodies = tuple(Body(n, tracks[n], GM_BODIES_KM3_S2[n]) for n in names if n != "moon")
    gm = GM_BODIES_KM3_S2["earth"] + GM_BODIES_KM3_S2["moon"]
    model = ForceModel("earth", gm, (1.0826267e-3,), bodies, pole=planets.earth_pole(EPOCH))
    state = np.concatenate([a - b for a, b in zip(from_file("moon"), from_file("earth"), strict=True)])
    t = np.array([1.0, 10.0, 30.0]) * DAY_S
    off = np.linalg.norm(Trajectory(model, state, partials=False).at(t)[0] - tracks["moon"](t), axis=1)
    assert np.all(off <= [0.005, 0.2, 1.0]), off
