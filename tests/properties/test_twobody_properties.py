"""What two-body motion must obey whatever the orbit: conservation, reversal, symmetry, partials, round trips."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from firstarc.twobody.elements import elements_from_state, state_from_elements
from firstarc.twobody.kepler import propagate, propagate_with_partials, short_partials, stumpff

GM = 398600.4415
shape = st.one_of(st.floats(0.0, 0.95), st.floats(1.05, 4.0), st.sampled_from([0.0, 1.0, 1.0 - 1e-7, 1.0 + 1e-7]))
angle = st.floats(0.0, 2.0 * np.pi)


@st.composite
def orbits(draw):
    e = draw(shape)
    limit = np.pi * 0.999 if e < 0.99 else min(2.6, 0.9 * np.arccos(-1.0 / max(e, 1.0)))
    nu = draw(st.floats(-limit, limit))
    p = draw(st.floats(7000.0, 90000.0))
    i = draw(st.one_of(st.floats(0.0, np.pi), st.sampled_from([0.0, np.pi, np.pi / 2])))
    return p, e, i, draw(angle), draw(angle), nu


@given(orbits())
def test_elements_give_back_the_state(orbit):
    r, v = state_from_elements(*orbit, GM)
    el = elements_from_state(r, v, GM)
    again = state_from_elements(el.p_km, el.e, el.i_rad, el.node_rad, el.argp_rad, el.nu_rad, GM)
    # Near-parabolic orbits far out lose digits of nu: 1e-9 of the distance allows for that.
    np.testing.assert_allclose(again[0], r, atol=1e-9 * np.linalg.norm(r))
    np.testing.assert_allclose(again[1], v, atol=1e-9 * np.linalg.norm(v))
    assert abs(el.e - orbit[1]) < 1e-11


@given(orbits(), st.floats(-3e5, 3e5))
def test_energy_and_angular_momentum_stay(orbit, dt):
    r, v = state_from_elements(*orbit, GM)
    r2, v2 = propagate(r, v, dt, GM)
    kinetic = v @ v / 2.0 + GM / np.linalg.norm(r)
    kinetic = max(kinetic, v2 @ v2 / 2.0)
    energies = [b @ b / 2.0 - GM / np.linalg.norm(a) for a, b in ((r, v), (r2, v2))]
    assert abs(energies[1] - energies[0]) < 1e-9 * kinetic
    np.testing.assert_allclose(np.cross(r2, v2), np.cross(r, v), rtol=0, atol=1e-9 * np.linalg.norm(np.cross(r, v)))


@given(orbits(), st.floats(-1e5, 1e5))
def test_time_reversal(orbit, dt):
    r, v = state_from_elements(*orbit, GM)
    there = propagate(r, v, dt, GM)
    back = propagate(*there, -dt, GM)
    mirrored = propagate(r, -v, -dt, GM)
    # A fly-by spreads a rounding of the far end over the near one: compare on the longer of both distances.
    size = np.linalg.norm(r) + np.linalg.norm(there[0])
    assert np.linalg.norm(back[0] - r) < 1e-8 * size
    np.testing.assert_allclose(mirrored[0], there[0], atol=1e-12 * size)
    np.testing.assert_allclose(mirrored[1], -there[1], atol=1e-12 * np.linalg.norm(there[1]))


@given(orbits(), st.integers(1, 400))
def test_whole_revolutions_change_nothing(orbit, turns):
    assume(orbit[1] < 0.95)
    r, v = state_from_elements(*orbit, GM)
    period = elements_from_state(r, v, GM).period_s
    r2, _ = propagate(r, v, turns * period, GM)
    # The period carries a rounding of a few eps, each turn adds it anew.
    moved = 1e-14 * turns * period * np.linalg.norm(v) + 1e-9
    assert np.linalg.norm(r2 - r) < 10.0 * moved


@given(orbits(), st.floats(-2e4, 2e4))
def test_partials_match_differences(orbit, dt):
    r, v = state_from_elements(*orbit, GM)
    assume(np.linalg.norm(propagate(r, v, dt, GM)[0]) > 500.0)
    _, _, stm = propagate_with_partials(r, v, dt, GM)
    step = np.repeat([1e-5 * np.linalg.norm(r), 1e-5 * np.linalg.norm(v)], 3)
    moved = np.concatenate((r, v)) + np.concatenate((np.diag(step), -np.diag(step)))
    ends = np.concatenate(propagate(moved[:, :3], moved[:, 3:], dt, GM), axis=1)
    numeric = ((ends[:6] - ends[6:]) / (2.0 * step[:, None])).T
    size = np.array([np.linalg.norm(r)] * 3 + [np.linalg.norm(v)] * 3)
    # Each block on the scale of the motion itself; the truncation of the differences is (1e-5)^2 times
    # the third derivatives, which a close passage raises.
    scaled, wanted = stm * size / size[:, None], numeric * size / size[:, None]
    assert np.abs(scaled - wanted).max() < 1e-5 * np.abs(wanted).max()


@given(orbits(), st.floats(-1e4, 1e4))
def test_partials_are_symplectic(orbit, dt):
    r, v = state_from_elements(*orbit, GM)
    _, _, stm = propagate_with_partials(r, v, dt, GM)
    unit = np.zeros((6, 6))
    unit[:3, 3:], unit[3:, :3] = np.eye(3), -np.eye(3)
    size = np.repeat([np.linalg.norm(r), np.linalg.norm(v)], 3)
    stm = stm * size / size[:, None]
    found = stm.T @ unit @ stm
    assert np.abs(found - unit).max() < 1e-10 * np.abs(stm).max() ** 2


def test_short_partials_agree_with_the_full_ones():
    r, v = state_from_elements(7000.0, 0.1, 0.5, 1.0, 2.0, 0.3, GM)
    size = np.repeat([np.linalg.norm(r), np.linalg.norm(v)], 3)
    for dt in (0.05, 0.5):
        short = short_partials(r[None], v[None], np.array([dt]), GM)
        full = propagate_with_partials(r, v, dt, GM)
        turned = dt * np.linalg.norm(v) / np.linalg.norm(r)
        np.testing.assert_allclose(short[0][0], full[0], atol=size[0] * (turned**4 + 1e-15))
        np.testing.assert_allclose(short[1][0], full[1], atol=size[3] * (turned**3 + 1e-15))
        assert np.abs((short[2][0] - full[2]) * size / size[:, None]).max() < turned**3 + 1e-15


@given(orbits(), st.floats(-1e5, 1e5), st.floats(1e-3, 1e3), st.floats(1e-3, 1e3))
def test_units_of_length_and_time_do_not_matter(orbit, dt, length, time):
    r, v = state_from_elements(*orbit, GM)
    plain, _ = propagate(r, v, dt, GM)
    scaled, _ = propagate(r * length, v * length / time, dt * time, GM * length**3 / time**2)
    np.testing.assert_allclose(scaled / length, plain, atol=1e-8 * (np.linalg.norm(plain) + np.linalg.norm(r)))


@given(st.floats(-600.0, 600.0))
def test_stumpff_identities(x):
    c0, c1, c2, c3 = stumpff(x)
    assert abs(c0 - (1.0 - x * c2)) <= 1e-13 * max(abs(c0), 1.0)
    assert abs(c1 - (1.0 - x * c3)) <= 1e-13 * max(abs(c1), 1.0)
    # c0^2 + x c1^2 = 1 is cos^2 + sin^2; on the hyperbolic branch both terms are large.
    assert abs(c0 * c0 + x * c1 * c1 - 1.0) <= 1e-12 * max(c0 * c0, 1.0)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("place", range(7))
def test_what_is_not_finite_gives_nan_in_silence(bad, place):
    numbers = np.array([7000.0, 100.0, 50.0, 0.3, 7.5, 1.0, 600.0])
    numbers[place] = bad
    with np.errstate(all="raise"):
        r, _ = propagate(numbers[:3], numbers[3:6], numbers[6], GM)
        el = elements_from_state(numbers[:3], numbers[3:6], GM)
    assert np.isnan(r).all()
    assert place == 6 or np.isnan(el.e)


def test_zero_radius_and_rectilinear_motion():
    assert np.isnan(propagate([0.0, 0.0, 0.0], [1.0, 0.0, 0.0], 10.0, GM)[0]).all()
    assert np.isnan(elements_from_state([7000.0, 0.0, 0.0], [1.0, 0.0, 0.0], GM).e)
    # Falling straight in is still a motion that can be followed until the centre: energy holds.
    r, v = propagate([7000.0, 0.0, 0.0], [0.0, 0.0, 0.0], 500.0, GM)
    assert abs(v @ v / 2.0 - GM / r[0] + GM / 7000.0) < 1e-9


def test_rows_equal_single_calls():
    rng = np.random.default_rng(4)
    r, v = rng.normal(size=(50, 3)) * 9000.0, rng.normal(size=(50, 3)) * 5.0
    dt = rng.uniform(-1e5, 1e5, 50)
    rows = propagate(r, v, dt, GM)
    for k in range(50):
        one = propagate(r[k], v[k], dt[k], GM)
        np.testing.assert_allclose(rows[0][k], one[0], rtol=1e-9, atol=1e-6)
