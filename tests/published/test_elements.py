"""State and classical elements against printed values: Vallado 2-5, 2-6; Curtis 4.3."""

from __future__ import annotations

import numpy as np

from firstarc.twobody.elements import elements_from_state, state_from_elements
from published.published_values import CASES, assert_published


def check(case, found, keys):
    for key, value in keys.items():
        assert_published(case, key, value)
    assert np.isfinite(found).all()


def test_state_to_elements():
    case = CASES["elements_vallado_2_5"]
    el = elements_from_state(case["inputs"]["r_km"], case["inputs"]["v_km_s"], case["inputs"]["mu_km3_s2"])
    keys = {"p_km": el.p_km, "a_km": el.a_km, "e": el.e, "i_deg": np.degrees(el.i_rad)}
    keys |= {"raan_deg": np.degrees(el.node_rad), "argp_deg": np.degrees(el.argp_rad)}
    check(case, el, keys | {"nu_deg": np.degrees(el.nu_rad)})


def test_retrograde_state_to_elements():
    case = CASES["elements_curtis_4_3"]
    gm = case["inputs"]["mu_km3_s2"]
    el = elements_from_state(case["inputs"]["r_km"], case["inputs"]["v_km_s"], gm)
    keys = {"h_km2_s": np.sqrt(gm * el.p_km), "a_km": el.a_km, "e": el.e, "i_deg": np.degrees(el.i_rad)}
    keys |= {"raan_deg": np.degrees(el.node_rad), "argp_deg": np.degrees(el.argp_rad)}
    check(case, el, keys | {"nu_deg": np.degrees(el.nu_rad)})


def test_elements_to_state():
    case = CASES["state_vallado_2_6"]
    given = case["inputs"]
    angles = np.radians([given[k] for k in ("i_deg", "raan_deg", "argp_deg", "nu_deg")])
    r, v = state_from_elements(given["p_km"], given["e"], *angles, given["mu_km3_s2"])
    assert_published(case, "r_km", r)
    assert_published(case, "v_km_s", v)


def test_circular_equatorial_and_parabolic_states_have_their_defined_elements():
    given = CASES["special_orbits_canonical"]["inputs"]
    circular = elements_from_state(given["circular_r0"], given["circular_v0"], 1.0)
    assert (circular.e, circular.argp_rad, circular.node_rad, circular.i_rad) == (0.0, 0.0, 0.0, 0.0)
    polar = elements_from_state(given["polar_circular_r0"], given["polar_circular_v0"], 1.0)
    assert abs(polar.i_rad - np.pi / 2) < 1e-15 and polar.argp_rad == 0.0
    parabola = elements_from_state(given["parabola_r0"], given["parabola_v0"], 1.0)
    assert parabola.e == 1.0 and np.isinf(parabola.a_km) and np.isnan(parabola.period_s)
    hyperbola = elements_from_state(given["hyperbola_r0"], given["hyperbola_v0"], 1.0)
    assert abs(hyperbola.a_km + 1.0) < 1e-14 and abs(hyperbola.e - 2.0) < 1e-14
