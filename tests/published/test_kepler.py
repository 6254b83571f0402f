"""Two-body propagation against printed values: Vallado 2-1 to 2-4; Curtis 3.1, 3.2, 3.6, 3.7, 5.12; Meeus 30."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.twobody.elements import elements_from_state, state_from_elements
from firstarc.twobody.kepler import Universal, lagrange, propagate, solve_universal, stumpff
from published.published_values import CASES, assert_published


def true_anomaly_after(e, mean_rad):
    """True anomaly on a conic with q = 1, gm = 1 a mean anomaly after periapsis, by propagation."""
    r0 = np.array([1.0, 0.0, 0.0])
    v0 = np.array([0.0, np.sqrt(1.0 + e), 0.0])
    a = abs(1.0 / (1.0 - e))
    r, _ = propagate(r0, v0, mean_rad * a**1.5, 1.0)
    return np.arctan2(r[1], r[0])


def eccentric_deg(e, mean_deg):
    half = np.tan(0.5 * true_anomaly_after(e, np.radians(mean_deg)))
    return np.degrees(2.0 * np.arctan(np.sqrt((1.0 - e) / (1.0 + e)) * half)) % 360.0


def test_kepler_equation_ellipse():
    case = CASES["kepler_vallado_2_1"]
    assert_published(case, "E_deg", eccentric_deg(case["inputs"]["e"], case["inputs"]["M_deg"]))


def test_kepler_equation_meeus():
    case = CASES["kepler_meeus_30"]
    found = [eccentric_deg(e, m) for e, m in zip(case["inputs"]["e"], case["inputs"]["M_deg"], strict=True)]
    assert_published(case, "E_deg", found)


def test_kepler_equation_hyperbola():
    case = CASES["kepler_vallado_2_3"]
    e = case["inputs"]["e"]
    half = np.tan(0.5 * true_anomaly_after(e, np.radians(case["inputs"]["M_deg"])))
    assert_published(case, "H_rad", 2.0 * np.arctanh(np.sqrt((e - 1.0) / (e + 1.0)) * half))


def test_parabola_barker():
    case = CASES["kepler_vallado_2_2"]
    given = case["inputs"]
    r0, v0 = state_from_elements(given["p_km"], 1.0, 0.0, 0.0, 0.0, 0.0, given["mu_km3_s2"])
    r, v = propagate(r0, v0, given["dt_s"], given["mu_km3_s2"])
    nu = elements_from_state(r, v, given["mu_km3_s2"]).nu_rad
    assert_published(case, "B", np.tan(0.5 * nu))


@pytest.mark.parametrize("name", ["propagate_vallado_2_4", "propagate_curtis_3_7"])
def test_propagation(name):
    case = CASES[name]
    given = case["inputs"]
    r, v = propagate(given["r0_km"], given["v0_km_s"], given["dt_s"], given["mu_km3_s2"])
    assert_published(case, "r_km", r)
    assert_published(case, "v_km_s", v)


def test_time_of_flight_on_an_ellipse():
    case = CASES["kepler_curtis_3_1_3_2"]
    gm, q, far = (case["inputs"][k] for k in ("mu_km3_s2", "perigee_radius_km", "apogee_radius_km"))
    e = (far - q) / (far + q)
    assert_published(case, "e", e)
    r, v = state_from_elements(q * (1.0 + e), e, 0.3, 0.4, 0.5, np.radians(120.0), gm)
    found = elements_from_state(r, v, gm)
    assert_published(case, "h_km2_s", np.sqrt(gm * found.p_km))
    assert_published(case, "period_s", found.period_s)
    assert_published(case, "time_to_nu120_s", -found.t_periapsis_s)
    r0, v0 = state_from_elements(q * (1.0 + e), e, 0.3, 0.4, 0.5, 0.0, gm)
    later = elements_from_state(*propagate(r0, v0, 10800.0, gm), gm)
    assert_published(case, "nu_after_3h_deg", np.degrees(later.nu_rad))


def solved(r0, vr0, alpha, dt, gm) -> Universal:
    return solve_universal(np.array([r0]), np.array([r0 * vr0]), np.array([alpha * gm]), np.array([dt]), np.array([gm]))


def test_universal_anomaly_on_a_hyperbola():
    case = CASES["universal_curtis_3_6"]
    given = case["inputs"]
    gm = given["mu_km3_s2"]
    found = solved(given["r0_km"], given["vr0_km_s"], 1.0 / given["a_km"], given["dt_s"], gm)
    # Curtis's chi is sqrt(gm) times the universal variable used here.
    assert_published(case, "chi_sqrt_km", np.sqrt(gm) * found.s[0])


def test_stumpff_functions():
    case = CASES["stumpff_table"]
    _, _, c2, c3 = stumpff(case["inputs"]["z"])
    assert_published(case, "c2", c2)
    assert_published(case, "c3", c3)


@pytest.mark.parametrize("orbit", ["parabola", "circular", "polar_circular", "hyperbola"])
def test_closed_forms(orbit):
    case = CASES["special_orbits_canonical"]
    given = case["inputs"]
    r, v = propagate(given[f"{orbit}_r0"], given[f"{orbit}_v0"], given[f"{orbit}_dt"], given["mu"])
    assert_published(case, f"{orbit}_r", r)
    if f"{orbit}_v" in case["expected"]:
        assert_published(case, f"{orbit}_v", v)


def test_first_pass_of_the_improvement():
    case = CASES["universal_kepler_curtis_5_12_first_pass"]
    given, gm = case["inputs"], case["inputs"]["mu_km3_s2"]
    r, v = np.array(given["r_km"]), np.array(given["v_km_s"])
    radius = np.sqrt(r @ r)
    alpha = 2.0 / radius - v @ v / gm
    assert_published(case, "r2_mag_km", radius)
    assert_published(case, "vr2_km_s", r @ v / radius)
    assert_published(case, "alpha_per_km", alpha)
    one = solved(radius, r @ v / radius, alpha, given["dt1_s"], gm)
    three = solved(radius, r @ v / radius, alpha, given["dt3_s"], gm)
    chi1 = np.sqrt(gm) * one.s[0]
    assert_published(case, "chi1_sqrt_km", chi1)
    assert_published(case, "chi3_sqrt_km", np.sqrt(gm) * three.s[0])
    _, _, c2, c3 = stumpff(alpha * chi1**2)
    assert_published(case, "C_chi1", c2)
    assert_published(case, "S_chi1", c3)
    f, g, _, _ = lagrange(one, np.array([radius]), np.array([given["dt1_s"]]), gm)
    assert_published(case, "f1", f[0])
    assert_published(case, "g1_s", g[0])
