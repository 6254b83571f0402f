"""Each force on its own: against potentials, geometry, tables, and its own partials against differences."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import eval_legendre

from dynamics.made_up_tracks import ABOUT_EARTH, ABOUT_SUN, POLE
from firstarc.constants import AU_KM, EARTH_RADIUS_KM, EARTH_ZONALS, EARTH_ZONALS_RADIUS_KM, GM_EARTH_KM3_S2
from firstarc.dynamics import shadow
from firstarc.dynamics.accelerations import Forces
from firstarc.dynamics.atmosphere import TABLE, density_kg_m3
from firstarc.dynamics.force_models import PARAMETERS, Drag, ForceModel, RadiationPressure, full
from firstarc.dynamics.variational import partials

EVERYTHING = full("earth", ABOUT_EARTH, POLE, "", RadiationPressure(0.02, 1.3, None), Drag(0.022))
ABOUT_THE_SUN = full("sun", ABOUT_SUN, POLE, "", RadiationPressure(1e-3))
NOW = np.array([1000.0])

direction = st.tuples(*[st.floats(-1.0, 1.0)] * 3).filter(lambda x: np.linalg.norm(x) > 0.1)


def vector(d, size):
    d = np.array(d)
    return (size * d / np.linalg.norm(d))[None]


def differences(function, x, step):
    """Central differences of the fourth order; columns are the components of x."""
    out = []
    for k in range(3):
        e = np.zeros((1, 3))
        e[0, k] = step
        near = function(x + e) - function(x - e)
        far = function(x + 2 * e) - function(x - 2 * e)
        out.append((8.0 * near - far)[0] / (12.0 * step))
    return np.stack(out, axis=-1)


@given(direction, st.floats(6600.0, 50000.0))
def test_zonals_are_the_gradient_of_their_potential(d, size):
    model = ForceModel("earth", GM_EARTH_KM3_S2, EARTH_ZONALS, pole=POLE)
    r = vector(d, size)

    def potential(x):
        radius = np.linalg.norm(x)
        u = float(x[0] @ np.array(POLE)) / radius
        terms = [
            j * (EARTH_ZONALS_RADIUS_KM / radius) ** n * eval_legendre(n, u)
            for n, j in enumerate(EARTH_ZONALS, start=2)
        ]
        return np.array([[-GM_EARTH_KM3_S2 / radius * sum(terms)]])

    found = Forces(model, NOW).acceleration(r, r)[0]
    slope = differences(potential, r, size * 1e-3)[0]
    np.testing.assert_allclose(found, slope, rtol=0, atol=1e-8 * GM_EARTH_KM3_S2 / size**2 * 1e-3 + 1e-17)


@given(direction, st.floats(6600.0, 50000.0))
def test_gravity_gradients_have_no_trace_and_are_symmetric(d, size):
    """Laplace's equation outside the masses."""
    model = replace(EVERYTHING, radiation=None, drag=None)
    r = vector(d, size)
    by_r, by_v, _ = partials(Forces(model, NOW), r, r, ())
    assert by_v is None
    largest = np.abs(by_r).max()
    assert abs(np.trace(by_r[0])) <= 1e-12 * largest
    np.testing.assert_allclose(by_r[0], by_r[0].T, rtol=0, atol=1e-12 * largest)


@pytest.mark.parametrize(
    "part",
    [
        replace(EVERYTHING, bodies=(), radiation=None, drag=None),
        replace(EVERYTHING, zonals=(), radiation=None, drag=None),
        replace(EVERYTHING, zonals=(), drag=None),
        replace(EVERYTHING, zonals=(), bodies=(), radiation=None),
        EVERYTHING,
        replace(EVERYTHING, relativity=True, zonals=(), bodies=(), radiation=None, drag=None),
        ABOUT_THE_SUN,
    ],
    ids=["zonals", "third bodies", "light", "drag", "all", "relativity", "about the Sun"],
)
@given(direction, direction, st.floats(0.0, 1.0))
def test_partials_against_differences(part, d, w, share):
    far = part.center == "sun"
    size = (1.0 + 3.0 * share) * AU_KM if far else 6650.0 + 3000.0 * share
    r, v = vector(d, size), vector(w, 20.0 if far else 7.5)
    if far and np.linalg.norm(r - ABOUT_SUN["earth"](NOW)) < 0.05 * AU_KM:
        return
    forces = Forces(part, NOW)
    by_r, by_v, columns = partials(forces, r, v, part.parameters)
    step = 1e-3 * size if not (part.drag and part.drag.ballistic_m2_kg) else 0.3
    of_r = differences(lambda x: forces.acceleration(x, v), r, step)
    noise = 1e-15 * np.linalg.norm(forces.acceleration(r, v)) / step
    if part.bodies:
        # the difference of direct and indirect term
        noise += 1e-15 * np.linalg.norm(forces.indirect) / step
    np.testing.assert_allclose(by_r[0], of_r, rtol=0, atol=2e-8 * np.abs(by_r).max() + 10.0 * noise)
    of_v = differences(lambda x: forces.acceleration(r, x), v, 1e-2)
    if by_v is None:
        assert not of_v.any()
    else:
        scale = np.linalg.norm(forces.acceleration(r, v))
        np.testing.assert_allclose(by_v[0], of_v, rtol=0, atol=1e-6 * np.abs(by_v).max() + 1e-13 * scale)
    for k, name in enumerate(part.parameters):
        value = part.value_of(name)
        more = Forces(part.with_value(name, value * 1.5), NOW).acceleration(r, v)
        less = Forces(part.with_value(name, value * 0.5), NOW).acceleration(r, v)
        allowed = 1e-12 * np.abs(columns).max() + 1e-15 * np.abs(more).max() / value
        np.testing.assert_allclose(columns[0, :, k], (more - less)[0] / value, rtol=0, atol=allowed)


def test_sunlight_is_what_it_should_be():
    """4.54e-6 N/m2 at 1 au (IAU 2015 Resolution B3: 1361 W/m2), falling with the square of the distance."""
    model = ForceModel("sun", 1.0, radiation=RadiationPressure(1.0, 1.0))
    forces = Forces(model, NOW)
    for distance, expected in ((AU_KM, 4.5398e-9), (2.0 * AU_KM, 4.5398e-9 / 4.0)):
        pull = forces.acceleration(np.array([[0.0, distance, 0.0]]), np.zeros((1, 3)))
        np.testing.assert_allclose(pull[0], [0.0, expected, 0.0], rtol=1e-4)


def test_air_table_is_met_and_slope_is_its_derivative():
    np.testing.assert_allclose(density_kg_m3(TABLE[:, 0])[0], TABLE[:, 1], rtol=1e-10)
    height = np.linspace(-80.0, 1500.0, 1001)
    density, slope = density_kg_m3(height)
    assert np.all(np.diff(density) <= 0.0)
    step = 1e-3
    numeric = (np.log(density_kg_m3(height + step)[0]) - np.log(density_kg_m3(height - step)[0])) / (2 * step)
    np.testing.assert_allclose(slope, numeric, rtol=0, atol=1e-8)


def test_air_turns_with_the_earth():
    """A point that turns with the Earth feels no wind."""
    model = ForceModel("earth", GM_EARTH_KM3_S2, drag=Drag(1.0), pole=POLE)
    r = np.array([[6500.0, 300.0, 1000.0]])
    v = np.cross(7.292115e-5 * np.array(POLE), r[0])[None]
    assert np.abs(Forces(model, NOW).acceleration(r, v)).max() < 1e-30
    faster = Forces(model, NOW).acceleration(r, v + np.array([[0.0, 1.0, 0.0]]))[0]
    assert faster[1] < 0.0
    assert faster[1] == pytest.approx(np.linalg.norm(faster) * -1.0)


SUN = np.array([[AU_KM, 0.0, 0.0]])


def test_shadow_by_places():
    """In front, beside, in the umbra, and beyond its tip where the Sun shows as a ring."""
    places = np.array([[7000.0, 0, 0], [-7000.0, 9000.0, 0], [-7000.0, 0, 0], [-2.0e6, 0, 0]])
    seen = shadow.conical(places, np.repeat(SUN, 4, axis=0))
    assert seen[0] == 1.0 and seen[1] == 1.0 and seen[2] == 0.0
    # Earth 6378 km at 2e6 km against the Sun's 695700 km at 1 au and 2e6 km
    ring = 1.0 - (np.arcsin(EARTH_RADIUS_KM / 2.0e6) / np.arcsin(695700.0 / (AU_KM + 2.0e6))) ** 2
    assert seen[3] == pytest.approx(ring, rel=1e-12) and 0.3 < ring < 0.7
    assert list(shadow.cylindrical(places, np.repeat(SUN, 4, axis=0))) == [1.0, 1.0, 0.0, 0.0]


@pytest.mark.parametrize("back_km", [7000.0, 42000.0, 1.0e6])
def test_penumbra_by_counting(back_km):
    """Visible fraction against a fine grid of points of the Sun's disc, line by line past the Earth's sphere."""
    grid = np.linspace(-1.0, 1.0, 401)
    y, z = (a.ravel() for a in np.meshgrid(grid, grid))
    disc = y * y + z * z <= 1.0
    half_width = 695700.0 / AU_KM * back_km
    for share in (-0.7, 0.0, 0.4):
        # Straight behind the limb, then to either side of it by a part of the penumbra's width.
        place = np.array([-back_km, EARTH_RADIUS_KM + share * half_width, 0.0])
        to_sun = SUN[0] - place
        points = np.stack([np.full(y.size, AU_KM), 695700.0 * y, 695700.0 * z], axis=1)[disc] - place
        unit = points / np.linalg.norm(points, axis=1, keepdims=True)
        along = -(unit @ place)
        miss = np.sqrt(place @ place - along**2)
        counted = 1.0 - np.mean((miss < EARTH_RADIUS_KM) & (along > 0.0))
        found = shadow.conical(place[None], SUN)[0]
        assert np.linalg.norm(to_sun) > AU_KM
        assert found == pytest.approx(counted, abs=0.01)
        assert 0.0 < found < 1.0


def test_cylinder_edge():
    places = np.array([[-7000.0, EARTH_RADIUS_KM - 1e-3, 0.0], [-7000.0, EARTH_RADIUS_KM + 1e-3, 0.0]])
    assert list(shadow.cylindrical(places, np.repeat(SUN, 2, axis=0))) == [0.0, 1.0]
    edge = shadow.edges("cylindrical", places, np.repeat(SUN, 2, axis=0))
    assert edge[0, 0] < 0.0 < edge[0, 1]


def test_parameters_must_exist():
    from firstarc.errors import UsageError

    forces = Forces(replace(EVERYTHING, drag=None), NOW)
    with pytest.raises(UsageError, match="no parameter 'ballistic_m2_kg'"):
        partials(forces, np.array([[7000.0, 0, 0]]), np.array([[0, 7.5, 0]]), PARAMETERS)
