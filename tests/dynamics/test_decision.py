"""Which forces are chosen: what is left out must not matter, and the sentence must say what does."""

from __future__ import annotations

import re

import numpy as np
import pytest

from dynamics.made_up_tracks import (
    ABOUT_EARTH,
    ABOUT_SUN,
    DAY,
    GEOSYNCHRONOUS,
    LONG_ELLIPSE,
    LOW,
    MAIN_BELT,
    NEAR_EARTH,
    POLE,
)
from firstarc.constants import ARCSEC_RAD, EARTH_RADIUS_KM
from firstarc.dynamics.decision import SHARE, decide
from firstarc.dynamics.force_models import Drag, RadiationPressure, full
from firstarc.dynamics.trajectory import Trajectory
from firstarc.errors import UsageError

#: centre, state, arc in s, smallest sigma in arcsec
ARCS = {
    "low, two minutes": ("earth", LOW, 120.0, 10.0),
    "low, ten minutes": ("earth", LOW, 600.0, 5.0),
    "low, a day": ("earth", LOW, DAY, 1.0),
    "geosynchronous, an hour": ("earth", GEOSYNCHRONOUS, 3600.0, 1.0),
    "geosynchronous, two nights": ("earth", GEOSYNCHRONOUS, 1.3 * DAY, 0.5),
    "long ellipse, half a day": ("earth", LONG_ELLIPSE, 0.5 * DAY, 1.0),
    "near-Earth, one night": ("sun", NEAR_EARTH, 0.3 * DAY, 0.2),
    "near-Earth, two months": ("sun", NEAR_EARTH, 60.0 * DAY, 0.2),
    "main belt, a month": ("sun", MAIN_BELT, 30.0 * DAY, 0.3),
    "main belt, a year": ("sun", MAIN_BELT, 365.0 * DAY, 0.3),
}


@pytest.mark.parametrize("name", ARCS)
def test_what_is_left_out_does_not_matter(name):
    """Integrated with the forces chosen and with all, from the middle of the arc: the sky tells no difference."""
    center, state, arc, sigma = ARCS[name]
    tracks = ABOUT_EARTH if center == "earth" else ABOUT_SUN
    span = (-0.5 * arc, 0.5 * arc)
    model = decide(center, state, 0.0, span, sigma * ARCSEC_RAD, tracks, pole=POLE, source="made-up")
    t = np.linspace(*span, 60)
    all_of_it = Trajectory(full(center, tracks, POLE), state, partials=False).at(t)[0]
    chosen = Trajectory(model, state, partials=False).at(t)[0]
    if center == "earth":
        distance = np.maximum(np.linalg.norm(all_of_it, axis=1) - EARTH_RADIUS_KM, 100.0)
    else:
        distance = np.linalg.norm(all_of_it - ABOUT_SUN["earth"](t), axis=1)
    off = np.linalg.norm(chosen - all_of_it, axis=1) / distance / ARCSEC_RAD
    assert off.max() <= 1.5 * SHARE * sigma, model.reason
    if model.two_body:
        assert re.search(r"Two-body is enough: .* less than [\d.e-]+ arcsec over the arc of", model.reason)
        said = float(re.search(r"less than ([\d.e-]+) arcsec", model.reason).group(1))
        assert said <= SHARE * sigma and off.max() <= 1.5 * said
    else:
        assert model.reason.startswith("Kept for the arc of")
        # two-body motion alone would have been wrong by something like a tenth of the sigma or much more
        alone = Trajectory(full(center, tracks, POLE), state, partials=False).at(t)[0]
        two = Trajectory(decide(center, state, 0.0, span, 1e3, tracks), state).at(t)[0]
        assert (np.linalg.norm(two - alone, axis=1) / distance / ARCSEC_RAD).max() > 0.01 * SHARE * sigma
    assert f"smallest sigma {sigma:.2g} arcsec" in model.reason


def test_short_arcs_are_two_body_and_long_ones_are_not():
    assert decide("sun", MAIN_BELT, 0.0, (0.0, 10.0 * DAY), 0.5 * ARCSEC_RAD, ABOUT_SUN).two_body
    assert not decide("sun", MAIN_BELT, 0.0, (0.0, 400.0 * DAY), 0.5 * ARCSEC_RAD, ABOUT_SUN).two_body
    day = decide("earth", LOW, 0.0, (0.0, DAY), ARCSEC_RAD, ABOUT_EARTH)
    assert len(day.zonals) == 3 and {body.name for body in day.bodies} == {"sun", "moon"}


def test_sentences():
    day = decide("earth", LOW, 0.0, (0.0, DAY), ARCSEC_RAD, ABOUT_EARTH).reason
    assert "J2" in day and "24 h" in day
    assert "Drag is not included: 0.022 m2/kg would move it" in day
    assert "Radiation pressure is not included" in day
    given = decide("earth", LOW, 0.0, (0.0, DAY), ARCSEC_RAD, ABOUT_EARTH, drag=Drag(0.01))
    assert given.drag == Drag(0.01) and "Drag is not" not in given.reason
    light = decide("earth", GEOSYNCHRONOUS, 0.0, (0.0, 60.0), ARCSEC_RAD, ABOUT_EARTH, radiation=RadiationPressure(0.0))
    assert light.radiation == RadiationPressure(0.0) and [body.name for body in light.bodies] == ["sun"]
    assert "asked for" in light.reason
    blind = decide("earth", LOW, 0.0, (0.0, DAY), ARCSEC_RAD)
    assert "No ephemeris was given: the Sun and the Moon were not considered." in blind.reason
    assert "the planets were not considered" in decide("sun", MAIN_BELT, 0.0, (0.0, DAY), ARCSEC_RAD).reason


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: decide("moon", LOW, 0.0, (0.0, 1.0), 1e-6), "center='moon'"),
        (lambda: decide("earth", LOW * np.nan, 0.0, (0.0, 1.0), 1e-6), "six finite numbers"),
        (lambda: decide("earth", LOW, 0.0, (0.0, 1.0), 0.0), "sigma_rad=0.0"),
        (lambda: decide("earth", LOW, 0.0, (0.0, 1.0), 1e-6, {"sun": ABOUT_EARTH["sun"]}), "lack moon"),
    ],
)
def test_misuse_is_named(call, words):
    with pytest.raises(UsageError, match=words):
        call()
