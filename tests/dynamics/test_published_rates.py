"""Published secular rates, found by integrating: the nodes of an oblate Earth and Mercury's perihelion."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from firstarc.constants import AU_KM, C_KM_S, EARTH_ZONALS_RADIUS_KM, GM_SUN_KM3_S2
from firstarc.dynamics.force_models import ForceModel
from firstarc.dynamics.trajectory import Trajectory
from firstarc.twobody.elements import elements_from_state, state_from_elements
from published.published_values import CASES


def test_curtis_4_8():
    """Curtis's shuttle orbit: node -5.181 deg/day, perigee 3.920 deg/day (first order in J2).

    Integrated with J2 alone, rates from the slope of the elements averaged over whole revolutions; the
    terms of second order that the book's formula leaves out are of the size of J2 times e or sin i, half a percent.
    """
    case = CASES["j2_rates_curtis_4_8"]
    given, expected = case["inputs"], case["expected"]
    gm, radius = given["mu_km3_s2"], given["earth_radius_km"]
    zonal = given["J2"] * (radius / EARTH_ZONALS_RADIUS_KM) ** 2
    model = ForceModel("earth", gm, (zonal,))
    perigee, apogee = radius + given["perigee_altitude_km"], radius + given["apogee_altitude_km"]
    e = (apogee - perigee) / (apogee + perigee)
    p, incl = perigee * (1.0 + e), np.radians(given["i_deg"])
    r, v = state_from_elements(p, e, incl, 1.0, 0.5, 0.0, gm)
    days = 12.0
    t = np.linspace(0.0, days * 86400.0, 6000)
    r, v = Trajectory(model, np.concatenate((r, v)), partials=False).at(t)
    el = elements_from_state(r, v, gm)
    node = np.unwrap(el.node_rad)
    argument = np.unwrap(el.argp_rad)
    # The formula is in mean elements: the average a, e, i of the integrated orbit differ from the osculating ones.
    mean_a, mean_e, mean_i = el.a_km.mean(), el.e.mean(), el.i_rad.mean()
    factor = -1.5 * given["J2"] * radius**2 * np.sqrt(gm) / (mean_a**3.5 * (1.0 - mean_e**2) ** 2)
    by_formula = factor * np.array([np.cos(mean_i), 2.5 * np.sin(mean_i) ** 2 - 2.0]) * 86400.0
    node_rate, argument_rate = (np.polyfit(t / 86400.0, x, 1)[0] for x in (node, argument))
    assert node_rate == pytest.approx(by_formula[0], rel=3e-3)
    assert np.degrees(node_rate) == pytest.approx(expected["raan_rate_deg_day"], rel=1e-2)
    # Small e: the short-period terms of the perigee are large, and so is what averaging leaves of them.
    assert np.degrees(argument_rate) == pytest.approx(expected["argp_rate_deg_day"], rel=5e-2)


def test_perihelion_of_mercury():
    """42.98 arcsec a century (Einstein 1915; 6 pi gm / (c^2 p) a revolution), from one revolution."""
    a, e = 0.38709893 * AU_KM, 0.20563069
    p = a * (1.0 - e * e)
    period = 2.0 * np.pi * np.sqrt(a**3 / GM_SUN_KM3_S2)
    r, v = state_from_elements(p, e, 0.1, 0.3, 0.7, 0.0, GM_SUN_KM3_S2)
    state = np.concatenate((r, v))

    def perihelion(relativity):
        trajectory = Trajectory(ForceModel("sun", GM_SUN_KM3_S2, (), (), relativity), state)

        def radial(t):
            x, y = trajectory.at([t])
            return float(np.sum(x * y))

        t = brentq(radial, period - 3000.0, period + 3000.0, xtol=1e-7)
        return trajectory.at([t])[0][0]

    first, second = perihelion(False), perihelion(True)
    # in the plane of motion, forwards
    pole = np.cross(r, v)
    pole /= np.linalg.norm(pole)
    turned = np.arctan2(np.cross(first, second) @ pole, first @ second)
    expected = 6.0 * np.pi * GM_SUN_KM3_S2 / (C_KM_S**2 * p)
    assert turned == pytest.approx(expected, rel=1e-4)
    century = np.degrees(turned) * 3600.0 * 36525.0 * 86400.0 / period
    assert century == pytest.approx(42.98, abs=0.01)
