"""The description of the forces: what it refuses, how it reads, and the constants behind it."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

from dynamics.made_up_tracks import ABOUT_EARTH, ABOUT_SUN, POLE
from firstarc.constants import EARTH_ZONALS, GM_BODIES_KM3_S2, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.force_models import Body, Drag, ForceModel, RadiationPressure, full, two_body
from firstarc.errors import UsageError
from published.published_values import CASES


def test_zonals_are_those_of_egm96():
    """Values and printed digits from the table of constants (EGM96, IERS Conventions 2010)."""
    case = CASES["constants"]
    for k, name in enumerate(("J2_egm96", "J3_egm96", "J4_egm96")):
        assert abs(EARTH_ZONALS[k] - case["expected"][name]) <= case["tolerance"][name]
        normalised = case["inputs"][f"egm96_C{k + 2}0_normalised"]
        assert EARTH_ZONALS[k] == pytest.approx(-np.sqrt(2 * (k + 2) + 1) * normalised, rel=1e-12)


def test_masses_of_the_bodies():
    """Mass ratios Sun / planet of IAU 2009 (Luzum et al. 2011, Celest. Mech. Dyn. Astr. 110, 293; recalled)."""
    ratios = {
        "mercury": 6.0236e6,
        "venus": 4.08523719e5,
        "mars": 3.09870359e6,
        "jupiter": 1.047348644e3,
        "saturn": 3.4979018e3,
        "uranus": 2.290298e4,
        "neptune": 1.941226e4,
    }
    for name, ratio in ratios.items():
        assert GM_BODIES_KM3_S2["sun"] / GM_BODIES_KM3_S2[name] == pytest.approx(ratio, rel=2e-5), name
    # Moon / Earth, same source
    assert GM_BODIES_KM3_S2["moon"] / GM_BODIES_KM3_S2["earth"] == pytest.approx(1.23000371e-2, rel=1e-7)
    assert GM_BODIES_KM3_S2["earth"] == pytest.approx(GM_EARTH_KM3_S2, rel=2e-8)


def test_what_reads_how():
    assert two_body("sun").sentence == "Two-body attraction of the Sun only."
    assert two_body("sun").two_body
    light = RadiationPressure(0.02, 1.3)
    text = full("earth", ABOUT_EARTH, POLE, "made-up ephemeris", light, Drag(0.022)).sentence
    assert text == (
        "Two-body attraction of the Earth; Earth zonals J2 to J4; attraction of Sun and Moon (made-up ephemeris); "
        "solar radiation pressure with 0.02 m2/kg times reflectivity 1.3, conical Earth shadow; drag with 0.022 m2/kg "
        "in a static atmosphere."
    )
    assert "relativistic" in full("sun", ABOUT_SUN).sentence
    for count, words in ((1, "zonal J2;"), (2, "zonals J2 and J3;"), (3, "zonals J2 to J4;")):
        model = ForceModel("sun", GM_SUN_KM3_S2, EARTH_ZONALS[:count], full("sun", ABOUT_SUN).bodies)
        assert words in model.sentence


def test_equality_and_pickle():
    model = full("earth", ABOUT_EARTH, POLE, "made-up", RadiationPressure(0.02))
    assert pickle.loads(pickle.dumps(model)) == model
    assert model != full("earth", ABOUT_EARTH, POLE, "another", RadiationPressure(0.02))
    assert model.with_value("area_to_mass_m2_kg", 0.03).value_of("area_to_mass_m2_kg") == 0.03
    assert model.with_value("area_to_mass_m2_kg", 0.02) == model


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: two_body("mars"), "center='mars'"),
        (lambda: full("mars", ABOUT_EARTH), "center='mars'"),
        (lambda: ForceModel("earth", -1.0), "gm_km3_s2=-1.0"),
        (lambda: ForceModel("earth", 4e5, zonals=(1e-3, np.nan)), "zonals"),
        (lambda: ForceModel("earth", 4e5, pole=(0.0, 0.0, 2.0)), "unit vector"),
        (lambda: ForceModel("sun", 1e11, zonals=(1e-3,)), "need the body 'earth'"),
        (lambda: ForceModel("earth", 4e5, radiation=RadiationPressure(0.1)), "needs the body 'sun'"),
        (lambda: ForceModel("sun", 1e11, drag=Drag(0.1)), "about the Earth only"),
        (lambda: ForceModel("sun", 1e11, bodies=(Body("sun", ABOUT_EARTH["sun"], 1.0),)), "is the centre"),
        (lambda: ForceModel("sun", 1e11, bodies=(Body("x", np.sin, 1.0), Body("x", np.sin, 2.0))), "twice"),
        (lambda: full("sun", ABOUT_EARTH), "tracks lack mercury"),
        (lambda: RadiationPressure(0.1, shadow="round"), "shadow='round'"),
        (lambda: RadiationPressure(np.inf), "area_to_mass_m2_kg"),
        (lambda: Drag(np.nan), "ballistic_m2_kg"),
        (lambda: two_body("sun").value_of("mass"), "expected one of"),
        (lambda: two_body("sun").with_value("area_to_mass_m2_kg", 1.0), "RadiationPressure"),
        (lambda: two_body("earth").value_of("ballistic_m2_kg"), "Drag"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(UsageError, match=words):
        make()
