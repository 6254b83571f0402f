"""Propagation against a numerical integration (scipy, DOP853) and against boinor's own propagators."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from firstarc.twobody.elements import elements_from_state, state_from_elements
from firstarc.twobody.kepler import propagate

GM = 398600.4415

#: p (km), e, i, node, argp, nu (rad) and time steps (s): circular to hyperbolic, either sign.
ORBITS = [
    (7000.0, 0.0, 0.9, 1.0, 0.0, 0.3, 5000.0),
    (11067.79, 0.83285, 1.5336, 3.9775, 0.9317, 1.6116, -40000.0),
    (25512.0, 1.0, 0.4, 0.1, 2.0, -1.0, 30000.0),
    (13000.0, 1.0 - 1e-6, 2.2, 5.0, 4.0, 1.0, 20000.0),
    (20000.0, 1.8, 1.1, 0.3, 1.0, -1.5, 25000.0),
    (42164.0, 0.01, 0.001, 0.0, 0.0, 3.0, 300000.0),
]


def acceleration(_, y):
    return np.concatenate((y[3:], -GM * y[:3] / (y[:3] @ y[:3]) ** 1.5))


@pytest.mark.parametrize("orbit", ORBITS)
def test_numerical_integration(orbit):
    r, v = state_from_elements(*orbit[:6], GM)
    end = solve_ivp(acceleration, (0.0, orbit[6]), np.concatenate((r, v)), method="DOP853", rtol=1e-13, atol=1e-10)
    found = propagate(r, v, orbit[6], GM)
    # a centimetre and ten micrometres per second: what the integration is good for
    np.testing.assert_allclose(found[0], end.y[:3, -1], rtol=0, atol=1e-5)
    np.testing.assert_allclose(found[1], end.y[3:, -1], rtol=0, atol=1e-8)


@pytest.fixture(scope="module")
def reference():
    """boinor's compiled core (the import and compilation take about ten seconds)."""
    elements = pytest.importorskip("boinor.core.elements")
    farnocchia = pytest.importorskip("boinor.core.propagation.farnocchia")
    return elements.rv2coe, farnocchia.farnocchia_rv


@pytest.mark.slow
@pytest.mark.parametrize("orbit", ORBITS)
def test_boinor(orbit, reference):
    rv2coe, farnocchia_rv = reference
    r, v = state_from_elements(*orbit[:6], GM)
    other_r, other_v = farnocchia_rv(GM, r, v, orbit[6])
    found = propagate(r, v, orbit[6], GM)
    size = np.linalg.norm(found[0])
    # Near e = 1 the reference switches to a series: metre level.
    allowed = 1e-3 if abs(orbit[1] - 1.0) < 1e-3 else 1e-9 * size
    np.testing.assert_allclose(found[0], other_r, rtol=0, atol=allowed)
    np.testing.assert_allclose(found[1], other_v, rtol=0, atol=allowed * np.linalg.norm(found[1]) / size)
    p, e, i, node, argp, nu = rv2coe(GM, r, v)
    el = elements_from_state(r, v, GM)
    assert el.p_km == pytest.approx(p, rel=1e-12)
    assert el.e == pytest.approx(e, abs=1e-12)
    assert el.i_rad == pytest.approx(i, abs=1e-12)
    # The sum of the angles exists for circular and equatorial orbits too.
    turn = (node + argp + nu) - (el.node_rad + el.argp_rad + el.nu_rad)
    assert abs((turn + np.pi) % (2.0 * np.pi) - np.pi) < 1e-9
