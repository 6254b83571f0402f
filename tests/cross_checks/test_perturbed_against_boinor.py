"""Perturbed motion against boinor's force functions and its integrator (its import compiles: about ten seconds)."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.border import planets
from firstarc.constants import AU_KM, DAY_S, EARTH_ZONALS_RADIUS_KM, GM_BODIES_KM3_S2, GM_EARTH_KM3_S2
from firstarc.dynamics.accelerations import Forces
from firstarc.dynamics.atmosphere import density_kg_m3
from firstarc.dynamics.force_models import Body, Drag, ForceModel, RadiationPressure
from firstarc.dynamics.trajectory import Trajectory

pytestmark = pytest.mark.slow

EPOCH = (2459000.5, 0.25)
J2, J3 = 1.0826e-3, -2.532e-6
STATES = [
    np.array([6800.0, 0.0, 100.0, 0.1, 4.9, 5.85]),
    np.array([-1000.0, -6500.0, 2000.0, 9.5, -1.0, 2.5]),
    np.array([42164.0, 0.0, 0.0, 0.0, 3.0746, 0.1]),
]


@pytest.fixture(scope="module")
def boinor():
    """The compiled force functions."""
    return pytest.importorskip("boinor.core.perturbations")


@pytest.fixture(scope="module")
def tracks():
    return planets.tracks("earth", EPOCH, (0.0, 2.0 * DAY_S))


@pytest.mark.parametrize("state", STATES)
def test_forces_one_by_one(state, boinor, tracks):
    """J2, J3 and third bodies to 1e-10 or better.

    The reference takes sunlight parallel to the line Sun - Earth and of the strength at the Earth: 1e-3 beyond
    geosynchronous distance.
    """
    r, v = state[None, :3], state[None, 3:]
    now = np.array([5000.0])
    scale = EARTH_ZONALS_RADIUS_KM

    def ours(**terms):
        return Forces(ForceModel("earth", GM_EARTH_KM3_S2, **terms), now).acceleration(r, v)[0]

    two = boinor.J2_perturbation(5000.0, state, GM_EARTH_KM3_S2, J2, scale)
    np.testing.assert_allclose(ours(zonals=(J2,)), two, rtol=1e-12, atol=1e-20)
    three = boinor.J3_perturbation(5000.0, state, GM_EARTH_KM3_S2, J3, scale)
    np.testing.assert_allclose(ours(zonals=(0.0, J3)), three, rtol=1e-10, atol=1e-12 * np.linalg.norm(three))
    for name in ("sun", "moon"):
        gm = GM_BODIES_KM3_S2[name]
        other = boinor.third_body(5000.0, state, GM_EARTH_KM3_S2, gm, lambda t, n=name: tracks[n](np.array([t]))[0])
        found = ours(bodies=(Body(name, tracks[name], gm),))
        np.testing.assert_allclose(found, other, rtol=0, atol=1e-10 * np.linalg.norm(other))
    # sunlight: total power over c in kg km/s2, area-to-mass in km2/kg
    power = 1361.0 / 299792458.0 * 1e3 * AU_KM**2
    other = boinor.radiation_pressure(
        5000.0, state, GM_EARTH_KM3_S2, 6378.137, 1.3, 0.02e-6, power, lambda t: tracks["sun"](np.array([t]))[0]
    )
    sun = (Body("sun", tracks["sun"], 0.0),)
    found = ours(bodies=sun, radiation=RadiationPressure(0.02, 1.3, "cylindrical"))
    np.testing.assert_allclose(found, other, rtol=0, atol=2e-3 * np.linalg.norm(found))
    # the second state lies in the shadow, for both
    assert (np.linalg.norm(found) > 1e-10) == (state is not STATES[1])


def test_drag_in_still_air(boinor):
    """With the same density and the velocity against the air: -1/2 rho C_D A/m v^2."""
    state = STATES[0]
    model = ForceModel("earth", GM_EARTH_KM3_S2, drag=Drag(0.022))
    forces = Forces(model, np.zeros(1))
    height, _ = forces.height_km(state[None, :3])
    density, _ = density_kg_m3(height)
    relative = np.concatenate((state[:3], forces.air_speed(state[None, :3], state[None, 3:])[0]))
    # kg/km3 and km2/kg
    other = boinor.atmospheric_drag(0.0, relative, GM_EARTH_KM3_S2, 2.2, 0.01e-6, float(density[0]) * 1e9)
    np.testing.assert_allclose(forces.acceleration(state[None, :3], state[None, 3:])[0], other, rtol=1e-12)


@pytest.mark.parametrize("state", STATES)
def test_a_day_by_its_integrator(state, boinor, tracks):
    """J2, J3, Sun and Moon over a day with the reference's Cowell integration (relative tolerance 1e-12)."""
    from boinor.core.propagation import cowell
    from boinor.core.propagation.base import func_twobody

    def sun(t):
        return tracks["sun"](np.array([t]))[0]

    def moon(t):
        return tracks["moon"](np.array([t]))[0]

    def rhs(t, y, k):
        du = func_twobody(t, y, k)
        a = boinor.J2_perturbation(t, y, k, J2, EARTH_ZONALS_RADIUS_KM)
        a = a + boinor.J3_perturbation(t, y, k, J3, EARTH_ZONALS_RADIUS_KM)
        a = a + boinor.third_body(t, y, k, GM_BODIES_KM3_S2["sun"], sun)
        a = a + boinor.third_body(t, y, k, GM_BODIES_KM3_S2["moon"], moon)
        return du + np.array([0.0, 0.0, 0.0, *a])

    times = np.array([0.5, 1.0]) * DAY_S
    rr, _ = cowell(GM_EARTH_KM3_S2, state[:3], state[3:], times, rtol=1e-12, f=rhs)
    bodies = tuple(Body(name, tracks[name], GM_BODIES_KM3_S2[name]) for name in ("sun", "moon"))
    found = Trajectory(ForceModel("earth", GM_EARTH_KM3_S2, (J2, J3), bodies), state).at(times)[0]
    # a metre; two-body motion is off by hundreds of kilometres in low orbit
    np.testing.assert_allclose(found, np.array(rr), rtol=0, atol=1e-3)
