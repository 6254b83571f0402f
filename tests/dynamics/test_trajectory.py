"""Perturbed orbits: against an independent integration, conserved quantities, time reversal, and partials."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from dynamics.independent_integration import integrated
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
    SHADED_ELLIPSE,
    Circle,
)
from firstarc.constants import EARTH_ZONALS, GM_BODIES_KM3_S2, GM_EARTH_KM3_S2
from firstarc.dynamics.force_models import Body, Drag, ForceModel, RadiationPressure, full, two_body
from firstarc.dynamics.trajectory import Perturbed, Trajectory
from firstarc.errors import UsageError
from firstarc.twobody.kepler import propagate, propagate_with_partials

SMOOTH = full("earth", ABOUT_EARTH, POLE)
LIT = full("earth", ABOUT_EARTH, POLE, "", RadiationPressure(0.02, 1.3, None))
DRAGGED = full("earth", ABOUT_EARTH, POLE, "", RadiationPressure(0.02, 1.3, None), Drag(0.022))
PLANETARY = full("sun", ABOUT_SUN, POLE)
#: model, state, span in s, and the allowed difference from DOP853 in km (what that integration is good for)
CASES = {
    "low": (SMOOTH, LOW, 0.3 * DAY, 3e-8),
    "low with drag": (DRAGGED, LOW, 0.2 * DAY, 1e-7),
    "geosynchronous": (LIT, GEOSYNCHRONOUS, 2.0 * DAY, 2e-7),
    "long ellipse backwards": (SMOOTH, LONG_ELLIPSE, -1.0 * DAY, 1e-5),
    "near-Earth object": (PLANETARY, NEAR_EARTH, 60.0 * DAY, 1e-4),
    "main belt backwards": (PLANETARY, MAIN_BELT, -400.0 * DAY, 1e-3),
    "hyperbola about the Earth": (SMOOTH, LOW * [1, 1, 1, 1.6, 1.6, 1.6], 2.0 * DAY, 1e-6),
}


@pytest.mark.parametrize("name", CASES)
def test_against_dop853(name):
    model, state, span, allowed = CASES[name]
    r, v = Trajectory(model, state, 100.0).at([100.0 + span])
    other = integrated(model, state, 100.0, 100.0 + span)
    np.testing.assert_allclose(r[0], other[:3], rtol=0, atol=allowed)
    scale = np.linalg.norm(v) / np.linalg.norm(r)
    np.testing.assert_allclose(v[0], other[3:], rtol=0, atol=10.0 * allowed * max(scale, 1e-3))
    # and the perturbation is something to be found
    on_orbit = propagate(state[:3], state[3:], span, model.gm_km3_s2)[0]
    assert np.linalg.norm(r[0] - on_orbit) > 1e3 * allowed


@pytest.mark.parametrize("kind", ["conical", "cylindrical"])
@pytest.mark.parametrize("state", [LOW, SHADED_ELLIPSE], ids=["low", "long ellipse"])
def test_through_the_shadow_against_dop853(kind, state):
    """Short steps take DOP853 over the edges; sunlight is made strong (1 m2/kg) so that an edge missed shows."""
    model = full("earth", ABOUT_EARTH, POLE, "", RadiationPressure(1.0, 1.3, kind))
    span = 9000.0
    r, _ = Trajectory(model, state, partials=False).at([span])
    other = integrated(model, state, 0.0, span, max_step=5.0)
    unlit = Trajectory(replace(model, radiation=RadiationPressure(1.0, 1.3, None)), state).at([span])[0]
    assert np.linalg.norm(r - unlit) > 0.01
    # DOP853 takes a jump of 5e-9 km/s2 inside a step of 5 s, thousands of seconds before the end
    np.testing.assert_allclose(r[0], other[:3], rtol=0, atol=5e-6)


@pytest.mark.parametrize("name", CASES)
def test_time_reversal(name):
    model, state, span, allowed = CASES[name]
    there = np.concatenate(Trajectory(model, state, partials=False).at([span]), axis=1)[0]
    back = Trajectory(model, there, span, partials=False).at([0.0])
    np.testing.assert_allclose(back[0][0], state[:3], rtol=0, atol=allowed)
    np.testing.assert_allclose(back[1][0], state[3:], rtol=0, atol=1e-9 * np.linalg.norm(state[3:]))


@pytest.mark.parametrize("name", ["low", "geosynchronous", "long ellipse backwards", "near-Earth object"])
def test_error_follows_the_tolerance(name):
    model, state, span, allowed = CASES[name]
    best = Trajectory(model, state, tolerance=1e-14, partials=False).at([span])[0]
    size = np.linalg.norm(state[:3])
    for tolerance in (1e-6, 1e-8, 1e-10, 1e-12):
        found = Trajectory(model, state, tolerance=tolerance, partials=False).at([span])[0]
        # errors of a state grow along the track: a hundred local errors are within the meaning of the word
        assert np.linalg.norm(found - best) <= 100.0 * tolerance * size + allowed


@pytest.mark.parametrize("name", CASES)
def test_between_segments_it_is_one_smooth_orbit(name):
    """Asked at many times at once, one by one, or in another order, the answers agree."""
    model, state, span, allowed = CASES[name]
    t = np.linspace(0.0, span, 23)
    at_once = Trajectory(model, state).at(t)[0]
    single = Trajectory(model, state)
    one_by_one = np.concatenate([single.at([x])[0] for x in t])
    np.testing.assert_allclose(one_by_one, at_once, rtol=0, atol=0.1 * allowed)
    both = Trajectory(model, state)
    mixed = both.at(np.concatenate((t[::-1], -t[1:4])))[0]
    np.testing.assert_allclose(mixed[:23][::-1], at_once, rtol=0, atol=0.1 * allowed)
    with_partials = both.with_partials(t)
    np.testing.assert_allclose(with_partials.r_km, at_once, rtol=0, atol=0.1 * allowed)


def test_energy_and_polar_momentum_about_an_oblate_earth():
    """Zonals alone keep the energy and the angular momentum along the pole."""
    model = ForceModel("earth", GM_EARTH_KM3_S2, EARTH_ZONALS, pole=POLE)
    r, v = Trajectory(model, LONG_ELLIPSE).at(np.linspace(0.0, 3.0 * DAY, 300))

    def potential(x):
        from scipy.special import eval_legendre

        radius = np.linalg.norm(x, axis=1)
        u = x @ np.array(POLE) / radius
        total = np.ones_like(u)
        for n, j in enumerate(EARTH_ZONALS, start=2):
            total -= j * (6378.1363 / radius) ** n * eval_legendre(n, u)
        return -GM_EARTH_KM3_S2 / radius * total

    energy = 0.5 * np.sum(v * v, axis=1) + potential(r)
    momentum = np.cross(r, v) @ np.array(POLE)
    np.testing.assert_allclose(energy, energy[0], rtol=1e-11)
    np.testing.assert_allclose(momentum, momentum[0], rtol=1e-12)
    two_body_energy = 0.5 * np.sum(v * v, axis=1) - GM_EARTH_KM3_S2 / np.linalg.norm(r, axis=1)
    assert np.ptp(two_body_energy) > 1e-4 * abs(energy[0])


def test_jacobi_constant_of_the_restricted_problem():
    """Earth and Moon on circles about each other: the third body keeps its Jacobi constant (Szebehely 1967)."""
    gm_moon, distance = GM_BODIES_KM3_S2["moon"], 384400.0
    rate = np.sqrt((GM_EARTH_KM3_S2 + gm_moon) / distance**3)
    moon = Circle(distance, rate)
    model = ForceModel("earth", GM_EARTH_KM3_S2, bodies=(Body("moon", moon, gm_moon),))
    state = np.array([324400.0, 0.0, 3000.0, 0.1, 0.9, 0.05])
    t = np.linspace(0.0, 25.0 * DAY, 200)
    r, v = Trajectory(model, state).at(t)
    # geocentric positions to barycentric, then to rotating axes
    center = moon(t) * gm_moon / (GM_EARTH_KM3_S2 + gm_moon)
    from_barycentre = r - center
    center_velocity = rate * np.stack([-center[:, 1], center[:, 0], 0.0 * t], axis=1)
    w = v - center_velocity
    turning = rate * np.stack([-from_barycentre[:, 1], from_barycentre[:, 0], 0.0 * t], axis=1)
    relative = w - turning
    attraction = GM_EARTH_KM3_S2 / np.linalg.norm(r, axis=1) + gm_moon / np.linalg.norm(r - moon(t), axis=1)
    jacobi = rate**2 * np.sum(from_barycentre[:, :2] ** 2, axis=1) + 2.0 * attraction - np.sum(relative**2, axis=1)
    assert np.linalg.norm(r - moon(t), axis=1).min() < 61000.0
    np.testing.assert_allclose(jacobi, jacobi[0], rtol=1e-11)


# ---------------------------------------------------------------- partials


def dimensionless(stm, state, gm):
    """Partials freed of km and s, so that one bound serves all."""
    size = np.linalg.norm(state[:3])
    speed = np.sqrt(gm / size)
    unit = np.array([size] * 3 + [speed] * 3)
    return stm / unit[:, None] * unit


@pytest.mark.parametrize("name", CASES)
def test_partials_by_the_state_against_differences(name):
    model, state, span, _ = CASES[name]
    t = np.array([0.31, 1.0]) * span
    found = Trajectory(model, state).with_partials(t).by_state
    size, speed = np.linalg.norm(state[:3]), np.linalg.norm(state[3:])
    steps = np.array([size] * 3 + [speed] * 3) * 3e-6
    numeric = np.empty_like(found)
    for k, h in enumerate(steps):
        e = np.zeros(6)
        e[k] = h
        sides = [np.hstack(Trajectory(model, state + x * e, partials=False).at(t)) for x in (1.0, -1.0, 2.0, -2.0)]
        numeric[:, :, k] = (8.0 * (sides[0] - sides[1]) - (sides[2] - sides[3])) / (12.0 * h)
    a, b = (dimensionless(x, state, model.gm_km3_s2) for x in (found, numeric))
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-7 * np.abs(b).max())


@pytest.mark.parametrize("name", ["low", "geosynchronous", "long ellipse backwards", "near-Earth object"])
def test_partials_are_symplectic(name):
    """Forces that derive from a potential: Phi^T J Phi = J (relativity of 1e-8 aside)."""
    model, state, span, _ = CASES[name]
    model = replace(model, relativity=False)
    stm = Trajectory(model, state).with_partials([span]).by_state[0]
    free = dimensionless(stm, state, model.gm_km3_s2)
    j = np.block([[np.zeros((3, 3)), np.eye(3)], [-np.eye(3), np.zeros((3, 3))]])
    np.testing.assert_allclose(free.T @ j @ free, j, rtol=0, atol=1e-12 * np.abs(free).max() ** 2 + 1e-11)


@pytest.mark.parametrize("state", [LOW, GEOSYNCHRONOUS, LONG_ELLIPSE], ids=["low", "geosynchronous", "long ellipse"])
@pytest.mark.parametrize("shadow", [None, "conical", "cylindrical"])
@pytest.mark.parametrize("value", [0.0, 0.03])
def test_partials_by_area_to_mass(state, shadow, value):
    model = full("earth", ABOUT_EARTH, POLE, "", RadiationPressure(value, 1.3, shadow))
    t = np.array([20000.0, -9000.0])
    found = Trajectory(model, state, parameters=model.parameters).with_partials(t).by_parameters[:, :, 0]
    h = 0.01
    sides = [
        np.hstack(Trajectory(model.with_value("area_to_mass_m2_kg", value + x * h), state, partials=False).at(t))
        for x in (1.0, -1.0)
    ]
    numeric = (sides[0] - sides[1]) / (2.0 * h)
    # the edge of the shadow moves with the orbit: that part is left out, and small
    atol = np.array([1e-6 if shadow is None else 1e-5]) * np.abs(numeric).max(axis=1, keepdims=True)
    assert np.all(np.abs(found - numeric) <= atol)
    assert np.abs(numeric[:, :3]).max() > 0.05


def test_partials_by_the_ballistic_coefficient():
    t = np.array([20000.0, -9000.0])
    for value in (0.0, 0.02):
        model = full("earth", ABOUT_EARTH, POLE, drag=Drag(value))
        found = Trajectory(model, LOW, parameters=("ballistic_m2_kg",)).with_partials(t).by_parameters[:, :, 0]
        h = 0.005
        sides = [
            np.hstack(Trajectory(model.with_value("ballistic_m2_kg", value + x * h), LOW, partials=False).at(t))
            for x in (1.0, -1.0)
        ]
        numeric = (sides[0] - sides[1]) / (2.0 * h)
        assert np.all(np.abs(found - numeric) <= 1e-5 * np.abs(numeric).max(axis=1, keepdims=True))
        assert np.abs(numeric[:, :3]).max() > 10.0


@pytest.mark.parametrize("kind", ["all terms off", "zonals of zero"])
@pytest.mark.parametrize("state", [LOW, LONG_ELLIPSE, LOW * [1, 1, 1, 1.6, 1.6, 1.6]], ids=["low", "long", "open"])
def test_without_perturbations_it_is_the_two_body_orbit(kind, state):
    """With zonals of zero the whole machinery runs, over many segments, and gives the analytic partials."""
    model = two_body("earth") if kind == "all terms off" else ForceModel("earth", GM_EARTH_KM3_S2, (0.0, 0.0, 0.0))
    assert model.two_body == (kind == "all terms off")
    t = np.linspace(-0.7, 1.0, 9) * DAY
    found = Trajectory(model, state).with_partials(t)
    r, v, stm = propagate_with_partials(state[:3], state[3:], t, GM_EARTH_KM3_S2)
    np.testing.assert_allclose(found.r_km, r, rtol=0, atol=1e-7)
    np.testing.assert_allclose(found.v_km_s, v, rtol=0, atol=1e-9)
    a, b = (dimensionless(x, state, GM_EARTH_KM3_S2) for x in (found.by_state, stm))
    np.testing.assert_allclose(a, b, rtol=0, atol=1e-10 * np.abs(b).max())
    assert found.by_parameters.shape == (9, 6, 0)


# ---------------------------------------------------------------- as the fit uses it, and what goes wrong


def test_motion_for_the_fit():
    motion = Perturbed(DRAGGED, ("ballistic_m2_kg",))
    assert motion.gm_km3_s2 == DRAGGED.gm_km3_s2 and motion.parameters == [0.022]
    t = np.array([3000.0])
    same = motion.arc(LOW, 0.0, (0.0, 4000.0))
    np.testing.assert_allclose(same.at(t)[0], Trajectory(DRAGGED, LOW).at(t)[0], rtol=0, atol=1e-8)
    other = motion.arc(LOW, 0.0, (0.0, 4000.0), np.array([0.05]))
    assert 1e-4 < np.linalg.norm(other.at(t)[0] - same.at(t)[0]) < 1.0
    assert other.with_partials(t).by_parameters.shape == (1, 6, 1)
    with pytest.raises(UsageError, match="2 values"):
        motion.arc(LOW, 0.0, (0.0, 1.0), np.array([0.1, 0.2]))


def test_a_fall_into_the_earth_stops_with_a_sentence():
    falling = np.array([7000.0, 0.0, 0.0, 0.0, 0.5, 0.0])
    trajectory = Trajectory(SMOOTH, falling)
    r, _ = trajectory.at([0.0, 100.0, 5000.0])
    assert np.all(np.isfinite(r[:2])) and np.all(np.isnan(r[2]))
    assert not trajectory.status.ok
    assert "stopped" in trajectory.status.sentence and "km of the centre" in trajectory.status.sentence
    assert np.all(np.isnan(trajectory.with_partials([5000.0]).by_state))


def test_times_that_are_not_numbers_are_not_answered():
    r, v = Trajectory(SMOOTH, LOW).at([np.nan, 10.0, np.inf])
    assert np.isnan(r[[0, 2]]).all() and np.isnan(v[[0, 2]]).all() and np.isfinite(r[1]).all()


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Trajectory(SMOOTH, LOW[:5]), "six finite numbers"),
        (lambda: Trajectory(SMOOTH, LOW * np.nan), "six finite numbers"),
        (lambda: Trajectory(SMOOTH, LOW * [0, 0, 0, 1, 1, 1]), "not at the centre"),
        (lambda: Trajectory(SMOOTH, LOW, np.inf), "t_state_s"),
        (lambda: Trajectory(SMOOTH, LOW, tolerance=0.0), "tolerance"),
        (lambda: Trajectory(SMOOTH, LOW, parameters=("ballistic_m2_kg",)), "Drag"),
        (lambda: Trajectory(SMOOTH, LOW, partials=False).with_partials([1.0]), "partials=False"),
    ],
)
def test_misuse_is_named(make, words):
    with pytest.raises(UsageError, match=words):
        make()
