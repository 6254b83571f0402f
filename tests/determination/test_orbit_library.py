"""Handing states to and from the orbit library (boinor, or poliastro on Python 3.10), and against it."""

from __future__ import annotations

import sys

import numpy as np
import pytest
from astropy import units as u
from astropy.time import Time

import firstarc as fa
from firstarc.constants import AU_KM
from pipeline.shared_cases import SUN, truth

pytestmark = pytest.mark.slow

EPOCH = Time("2026-04-17T21:23:27.300", scale="utc")
STATES = {
    "satellite": fa.State([7000.0, -1200.0, 3400.0], [1.1, 6.9, 2.2], EPOCH, "earth"),
    "escape": fa.State([7000.0, -1200.0, 3400.0], [1.1, 10.9, 4.2], EPOCH, "earth"),
    "minor planet": fa.State([1.5 * AU_KM, 2e7, -3e7], [-3.0, 20.0, 9.0], EPOCH, "sun"),
}


@pytest.mark.parametrize("name", STATES)
def test_round_trip(name: str) -> None:
    state = STATES[name]
    back = fa.State.from_orbit(state.to_orbit())
    assert back.center == state.center
    np.testing.assert_allclose(back.r_km, state.r_km, rtol=1e-13)
    np.testing.assert_allclose(back.v_km_s, state.v_km_s, rtol=1e-13)
    assert abs((back.epoch - state.epoch).to_value(u.s)) < 1e-6


@pytest.mark.parametrize("name", STATES)
def test_elements_agree(name: str) -> None:
    """On the plane of the equator; gravity of the library differs by less than 1e-8 from ours."""
    state = STATES[name]
    orbit = state.to_orbit()
    ours = state.elements
    assert abs(ours.e - orbit.ecc.value) < 1e-7
    assert abs(ours.a_km / orbit.a.to_value(u.km) - 1.0) < 1e-7
    if state.center == "earth":
        assert abs(ours.i_deg - orbit.inc.to_value(u.deg)) < 1e-9
        assert abs((ours.node_deg - orbit.raan.to_value(u.deg) + 180.0) % 360.0 - 180.0) < 1e-9
        assert abs((ours.argp_deg - orbit.argp.to_value(u.deg) + 180.0) % 360.0 - 180.0) < 1e-4
        assert abs((ours.nu_deg - orbit.nu.to_value(u.deg) + 180.0) % 360.0 - 180.0) < 1e-4


def library() -> str:
    return "boinor" if sys.version_info >= (3, 11) else "poliastro"


def test_an_orbit_on_the_ecliptic_is_turned() -> None:
    """Classical elements given on the ecliptic plane come back as those elements, and as ICRF vectors."""
    bodies = pytest.importorskip(f"{library()}.bodies")
    frames = pytest.importorskip(f"{library()}.frames")
    twobody = pytest.importorskip(f"{library()}.twobody")
    orbit = twobody.Orbit.from_classical(
        bodies.Sun,
        1.62 * u.au,
        0.31 * u.one,
        9.4 * u.deg,
        241.0 * u.deg,
        318.0 * u.deg,
        28.0 * u.deg,
        epoch=EPOCH.tdb,
        plane=frames.Planes.EARTH_ECLIPTIC,
    )
    state = fa.State.from_orbit(orbit)
    elements = state.elements
    assert abs(elements.a_au - 1.62) < 1e-7 and abs(elements.e - 0.31) < 1e-7
    for found, given in (
        (elements.i_deg, 9.4),
        (elements.node_deg, 241.0),
        (elements.argp_deg, 318.0),
        (elements.nu_deg, 28.0),
    ):
        assert abs(found - given) < 1e-5
    # an orbit in the ecliptic never leaves it: height over the plane, from the obliquity of 84381.448 arcsec
    tilt = np.radians(84381.448 / 3600.0)
    pole = np.array([0.0, -np.sin(tilt), np.cos(tilt)])
    height = state.r_km @ pole / np.linalg.norm(state.r_km)
    assert abs(height - np.sin(np.radians(9.4)) * np.sin(np.radians(318.0 + 28.0))) < 1e-7
    # and back: the plane it is handed over on is the equator
    assert fa.State.from_orbit(state.to_orbit()).elements.i_deg == pytest.approx(9.4, abs=1e-5)


@pytest.mark.parametrize("name", ["satellite", "escape", "minor planet"])
def test_propagation_agrees(name: str) -> None:
    state = STATES[name]
    step = 2.5 * u.hour if state.center == "earth" else 40.0 * u.day
    theirs = state.to_orbit().propagate(step)
    ours = state.propagated(state.epoch + step)
    # the library's gravity differs in the ninth digit
    np.testing.assert_allclose(ours.r_km, theirs.r.to_value(u.km), rtol=0, atol=3e-8 * np.linalg.norm(ours.r_km))
    np.testing.assert_allclose(
        ours.v_km_s, theirs.v.to_value(u.km / u.s), rtol=0, atol=3e-8 * np.linalg.norm(ours.v_km_s)
    )


@pytest.mark.parametrize("name", SUN)
def test_truths_of_the_cases_pass_through(name: str) -> None:
    state = truth(name)
    back = fa.State.from_orbit(state.to_orbit())
    assert abs(back.elements.q_au / state.elements.q_au - 1.0) < 1e-12


def test_other_bodies_are_refused() -> None:
    bodies = pytest.importorskip(f"{library()}.bodies")
    twobody = pytest.importorskip(f"{library()}.twobody")
    orbit = twobody.Orbit.from_vectors(bodies.Mars, [4000.0, 0, 0] * u.km, [0, 3.0, 0] * u.km / u.s)
    with pytest.raises(fa.UsageError, match="the orbit is about Mars; firstarc knows the Earth and the Sun"):
        fa.State.from_orbit(orbit)
