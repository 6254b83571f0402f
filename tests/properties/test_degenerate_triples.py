"""Geometries at the edge: coplanar, retrograde, polar, through perigee, parabola; equal directions and times."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.constants import C_KM_S, GM_EARTH_KM3_S2
from firstarc.preliminary.batch import solve_triples
from firstarc.preliminary.candidates import solve_triple
from firstarc.preliminary.outcome import Outcome
from firstarc.results import Code
from firstarc.twobody.elements import state_from_elements
from firstarc.twobody.kepler import propagate

SITE_KM = np.array([4200.0, 900.0, 4700.0])
EARTH_RATE = 7.292115e-5


def sighted(p_km, e, inclination, nu, minutes, light_time=True):
    """Directions, observers, times and the true middle position and velocity for a site on a turning Earth."""
    t = np.array(minutes) * 60.0
    turn = EARTH_RATE * t
    x, y, z = SITE_KM
    observer = np.stack((x * np.cos(turn) - y * np.sin(turn), x * np.sin(turn) + y * np.cos(turn), z + 0.0 * t), 1)
    best = None
    # The node that brings the object nearest to the site's zenith at the middle time.
    for node in np.linspace(0.0, 2.0 * np.pi, 73):
        for argp in np.linspace(0.0, 2.0 * np.pi, 73):
            r, v = state_from_elements(p_km, e, inclination, node, argp, nu, GM_EARTH_KM3_S2)
            height = (r - SITE_KM) @ SITE_KM / np.linalg.norm(r - SITE_KM)
            if best is None or height > best[0]:
                best = height, r, v
    _, r, v = best
    los, ranges = np.empty((3, 3)), np.zeros(3)
    for k in range(3):
        for _ in range(8 if light_time else 1):
            place, _ = propagate(r, v, t[k] - ranges[k] / C_KM_S * light_time, GM_EARTH_KM3_S2)
            ranges[k] = np.linalg.norm(place - observer[k])
        los[k] = (place - observer[k]) / ranges[k]
    return los, observer, t, *propagate(r, v, t[1] - ranges[1] / C_KM_S * light_time, GM_EARTH_KM3_S2)


CASES = {
    "retrograde": (9000.0, 0.1, 2.6, 0.4, (-5.0, 0.0, 6.0)),
    "polar": (9000.0, 0.1, np.pi / 2.0, 0.4, (-5.0, 0.0, 6.0)),
    "equatorial, station off the plane": (20000.0, 0.05, 0.0, 0.4, (-15.0, 0.0, 17.0)),
    "through perigee": (12000.0, 0.6, 1.1, 0.0, (-6.0, 0.0, 6.0)),
    "circular": (11000.0, 0.0, 0.9, 1.0, (-6.0, 0.0, 7.0)),
    "parabola": (16000.0, 1.0, 0.8, 0.5, (-8.0, 0.0, 9.0)),
    "nearly parabolic": (16000.0, 1.0 - 1e-9, 0.8, 0.5, (-8.0, 0.0, 9.0)),
    "hyperbola through perigee": (16000.0, 1.4, 0.8, 0.0, (-8.0, 0.0, 9.0)),
}


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("light_time", [True, False])
def test_the_true_orbit_is_among_the_candidates(name, light_time):
    los, observer, t, r2, v2 = sighted(*CASES[name], light_time)
    with np.errstate(all="raise"):
        one = solve_triple(los, observer, t, GM_EARTH_KM3_S2, light_time=light_time, sigma_rad=np.full((3, 2), 1e-6))
    good = [c for c in one.candidates if c.admissible]
    near = min(good, key=lambda c: np.linalg.norm(c.converged.positions_km[1] - r2))
    np.testing.assert_allclose(near.converged.positions_km[1], r2, atol=1e-3)
    np.testing.assert_allclose(near.converged.v2_km_s, v2, atol=1e-6)
    assert near.converged.miss_rad.max() <= 1e-10
    assert np.isfinite(near.converged.covariance).all()


def spoiled():
    """Triples that admit no orbit, and the code each must get."""
    los, observer, t, _, _ = sighted(*CASES["polar"])
    turn = np.radians([10.0, 20.0, 30.0])
    flat = np.stack((np.cos(turn), np.sin(turn), 0.0 * turn), axis=1)
    nan, inf = np.full(3, np.nan), np.full(3, np.inf)
    return {
        "identical directions": (np.tile(los[1], (3, 1)), observer, t, Outcome.COPLANAR_LINES),
        "two identical directions": (los[[0, 0, 2]], observer, t, Outcome.COPLANAR_LINES),
        "opposite directions": (los * [[1.0], [1.0], [0.0]] - [[0.0], [0.0], [1.0]] * los[0], observer, t, None),
        "coplanar": (flat, observer * [1.0, 1.0, 0.0], t, Outcome.COPLANAR_LINES),
        "equal times": (los, observer, t[[0, 1, 1]], Outcome.EQUAL_TIMES),
        "all times equal": (los, observer, t * 0.0, Outcome.EQUAL_TIMES),
        "zero vector": (los * [[1.0], [0.0], [1.0]], observer, t, Outcome.BAD_INPUT),
        "not a number": (np.stack((los[0], nan, los[2])), observer, t, Outcome.BAD_INPUT),
        "infinite observer": (los, np.stack((observer[0], inf, observer[2])), t, Outcome.BAD_INPUT),
        "observer in the centre": (los, observer * 0.0, t, None),
        "times apart by nothing but rounding": (los, observer, t[1] + np.array([-1e-12, 0.0, 1e-12]), None),
        "times apart by ages": (los, observer, t * 1e12, None),
    }


@pytest.mark.parametrize("name", spoiled())
def test_degenerate_input_gets_a_status_in_silence(name):
    los, observer, t, code = spoiled()[name]
    with np.errstate(all="raise"):
        one = solve_triple(los, observer, t, GM_EARTH_KM3_S2, light_time=True, sigma_rad=np.full((3, 2), 1e-6))
        many = solve_triples(los[None], observer[None], t[None], GM_EARTH_KM3_S2, light_time=True)
    assert one.status.sentence
    if code is None:
        for c in one.candidates:
            assert not c.admissible or c.converged.miss_rad.max() <= 1e-10
        return
    assert many.status.tolist() == [code]
    assert one.status.code == code.code and one.status.code != Code.CONVERGED
    assert not one.candidates
