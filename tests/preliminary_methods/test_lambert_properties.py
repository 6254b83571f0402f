"""Lambert's problem: what must hold for any positions and times."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firstarc.errors import UsageError
from firstarc.preliminary.lambert import LambertCode, flight_time, lambert, least_time, most_revolutions, transfers
from firstarc.twobody.elements import elements_from_state
from firstarc.twobody.kepler import propagate

GM = 398600.4415


def drawn(n, seed):
    """States of random orbits, elliptic and hyperbolic, propagated over up to many revolutions."""
    rng = np.random.default_rng(seed)
    r = rng.normal(size=(n, 3))
    r *= (rng.uniform(6600.0, 50000.0, n) / np.linalg.norm(r, axis=1))[:, None]
    v = rng.normal(size=(n, 3))
    circular = np.sqrt(GM / np.linalg.norm(r, axis=1))
    v *= (rng.uniform(0.3, 1.8, n) * circular / np.linalg.norm(v, axis=1))[:, None]
    dt = 10.0 ** rng.uniform(0.0, 5.0, n)
    r2, v2 = propagate(r, v, dt, GM)
    period = elements_from_state(r, v, GM).period_s
    turns = np.where(np.isfinite(period), np.floor(dt / np.where(np.isfinite(period), period, 1.0)), 0).astype(int)
    long_way = np.sum(np.cross(r, r2) * np.cross(r, v), axis=1) < 0.0
    return r, v, r2, v2, dt, turns, long_way


def test_finds_the_orbit_that_was_propagated():
    r, v, r2, v2, dt, turns, long_way = drawn(4000, 1)
    speed = np.linalg.norm(v, axis=1)
    error = np.full((2, len(dt)), np.inf)
    for right in (False, True):
        found = lambert(r, r2, dt, GM, long_way=long_way, revolutions=turns, right_branch=right)
        assert (found.code == LambertCode.SOLVED).all()
        ends = np.linalg.norm(found.v1_km_s - v, axis=1), np.linalg.norm(found.v2_km_s - v2, axis=1)
        error[int(right)] = np.maximum(ends[0] / speed, ends[1] / np.linalg.norm(v2, axis=1))
    assert (turns > 0).sum() > 200
    # Rounding of positions over an arc of a second is 1e-12 of the speed; the end of a long arc carries the
    # rounding of the propagation as well.
    assert error.min(axis=0).max() < 2e-10


@pytest.mark.parametrize("revolutions", [0, 1, 2, 5])
def test_every_solution_arrives(revolutions):
    r, _, r2, _, _, _, _ = drawn(300, 2)
    rng = np.random.default_rng(3)
    dt = rng.uniform(0.1, 8.0, 300) * 2.0 * np.pi * np.sqrt(np.linalg.norm(r, axis=1) ** 3 / GM)
    for long_way in (False, True):
        for right in (False, True):
            found = lambert(r, r2, dt, GM, long_way=long_way, revolutions=revolutions, right_branch=right)
            good = found.code == LambertCode.SOLVED
            assert good.sum() > 50
            end, _ = propagate(r[good], found.v1_km_s[good], dt[good], GM)
            miss = np.linalg.norm(end - r2[good], axis=1) / np.linalg.norm(r2[good], axis=1)
            assert miss.max() < 1e-9
            turned = np.sum(np.cross(r, r2) * np.cross(r, found.v1_km_s), axis=1)[good]
            assert ((turned < 0.0) == long_way).all()


def test_both_branches_meet_at_the_least_time():
    """Just above the least time both branches exist and are close; just below there is no orbit."""
    r1, r2 = np.array([7000.0, 0.0, 0.0]), np.array([-2000.0, 9000.0, 1000.0])
    n1, n2, c = np.linalg.norm(r1), np.linalg.norm(r2), np.linalg.norm(r2 - r1)
    s = 0.5 * (n1 + n2 + c)
    lam = np.sqrt(n1 * n2) * np.sqrt(0.5 * (1.0 + r1 @ r2 / (n1 * n2))) / s
    x, least = least_time(np.array([lam]), np.array([c / s]), np.array([2.0]))
    assert abs(flight_time(x, np.array([lam]), np.array([c / s]), np.array([2.0]))[1][0]) < 1e-12
    dt = float(least[0]) * s / np.sqrt(2.0 * GM / s)
    above = [
        lambert(r1, r2, dt * (1.0 + 1e-6), GM, revolutions=2, right_branch=b, quickest_instead=False)
        for b in (False, True)
    ]
    assert all(one.code == LambertCode.SOLVED for one in above)
    assert above[0].x < x[0] < above[1].x
    assert above[1].x - above[0].x < 0.01
    assert lambert(r1, r2, dt * (1.0 - 1e-6), GM, revolutions=2).code == LambertCode.NO_ORBIT
    instead = lambert(r1, r2, dt * (1.0 - 1e-6), GM, revolutions=2, quickest_instead=True)
    assert instead.code == LambertCode.NO_ORBIT
    assert abs(instead.x - x[0]) < 1e-9


def test_derivatives_of_the_time_across_the_parabola():
    rng = np.random.default_rng(4)
    lam, x = rng.uniform(-0.999, 0.999, 3000), rng.uniform(-0.95, 2.5, 3000)
    x[:800] = rng.uniform(0.97, 1.03, 800)
    x[800:900] = 1.0
    args = lam, 1.0 - lam**2, np.zeros(3000)
    _, t1, t2, _ = flight_time(x, *args)
    h = 1e-5
    after, before = flight_time(x + h, *args), flight_time(x - h, *args)
    # Central differences with h = 1e-5 are good to 1e-6.
    np.testing.assert_allclose((after[0] - before[0]) / (2.0 * h), t1, rtol=1e-6)
    np.testing.assert_allclose((after[1] - before[1]) / (2.0 * h), t2, rtol=1e-6)


def test_time_of_the_parabola():
    """Euler's equation: T = 2 (1 - lam^3) / 3 (Battin 1999, section 7.5)."""
    lam = np.linspace(-0.99, 0.99, 41)
    t = flight_time(np.ones(41), lam, 1.0 - lam**2, np.zeros(41))[0]
    np.testing.assert_allclose(t, 2.0 / 3.0 * (1.0 - lam**3), rtol=1e-14)


def test_time_reversed():
    r, _, r2, _, dt, turns, long_way = drawn(400, 5)
    there = lambert(r, r2, dt, GM, long_way=long_way, revolutions=turns)
    back = lambert(r2, r, dt, GM, long_way=long_way, revolutions=turns)
    scale = np.linalg.norm(there.v1_km_s, axis=1).max()
    np.testing.assert_allclose(back.v1_km_s, -there.v2_km_s, rtol=0, atol=1e-10 * scale)


def test_turned_axes():
    r, _, r2, _, dt, turns, long_way = drawn(400, 6)
    turn, _ = np.linalg.qr(np.random.default_rng(7).normal(size=(3, 3)))
    turn *= np.sign(np.linalg.det(turn))
    one = lambert(r, r2, dt, GM, long_way=long_way, revolutions=turns)
    other = lambert(r @ turn.T, r2 @ turn.T, dt, GM, long_way=long_way, revolutions=turns)
    scale = np.linalg.norm(one.v1_km_s, axis=1).max()
    np.testing.assert_allclose(other.v1_km_s, one.v1_km_s @ turn.T, rtol=0, atol=1e-10 * scale)


@given(st.floats(1e-6, 1e6), st.floats(1e-6, 1e6))
def test_other_units(length, time):
    r1, r2, dt = np.array([7000.0, 100.0, -300.0]), np.array([-2000.0, 9000.0, 1000.0]), 30000.0
    one = lambert(r1, r2, dt, GM, revolutions=1)
    other = lambert(r1 * length, r2 * length, dt * time, GM * length**3 / time**2, revolutions=1)
    np.testing.assert_allclose(other.v1_km_s * time / length, one.v1_km_s, rtol=1e-12)


def test_rows_do_not_depend_on_their_neighbours():
    r, _, r2, _, dt, turns, long_way = drawn(300, 8)
    together = lambert(r, r2, dt, GM, long_way=long_way, revolutions=turns)
    for k in range(0, 300, 37):
        alone = lambert(r[k], r2[k], dt[k], GM, long_way=long_way[k], revolutions=turns[k])
        np.testing.assert_allclose(alone.v1_km_s, together.v1_km_s[k], rtol=1e-13)


def test_all_transfers_are_listed():
    found = transfers([7000.0, 0.0, 0.0], [0.0, 8000.0, 500.0], 30000.0, GM)
    assert len({(one.long_way, one.revolutions, one.right_branch) for one in found}) == len(found)
    most = max(one.revolutions for one in found)
    assert 3 <= most <= most_revolutions([7000.0, 0.0, 0.0], [0.0, 8000.0, 500.0], 30000.0, GM)
    for one in found:
        end, _ = propagate([7000.0, 0.0, 0.0], one.v1_km_s, 30000.0, GM)
        np.testing.assert_allclose(end, [0.0, 8000.0, 500.0], atol=1e-6)
        assert ("long way" in one.words) == one.long_way


@pytest.mark.parametrize(
    ("r1", "r2", "dt", "code"),
    [
        ([7000.0, 0.0, 0.0], [8000.0, 0.0, 0.0], 1000.0, LambertCode.NO_PLANE),
        ([7000.0, 0.0, 0.0], [-8000.0, 0.0, 0.0], 1000.0, LambertCode.NO_PLANE),
        ([7000.0, 0.0, 0.0], [7000.0, 0.0, 0.0], 1000.0, LambertCode.NO_PLANE),
        ([7000.0, 0.0, 0.0], [0.0, 8000.0, 0.0], 0.0, LambertCode.BAD_INPUT),
        ([7000.0, 0.0, 0.0], [0.0, 8000.0, 0.0], -5.0, LambertCode.BAD_INPUT),
        ([7000.0, 0.0, 0.0], [0.0, np.nan, 0.0], 1000.0, LambertCode.BAD_INPUT),
        ([7000.0, np.inf, 0.0], [0.0, 8000.0, 0.0], 1000.0, LambertCode.BAD_INPUT),
        ([0.0, 0.0, 0.0], [0.0, 8000.0, 0.0], 1000.0, LambertCode.BAD_INPUT),
        ([7000.0, 0.0, 0.0], [0.0, 8000.0, 0.0], np.inf, LambertCode.BAD_INPUT),
    ],
)
def test_what_cannot_be_solved_has_a_code(r1, r2, dt, code):
    found = lambert(r1, r2, dt, GM)
    assert found.code == code
    assert np.isnan(found.v1_km_s).all()
    assert LambertCode(int(found.code)).words
    assert transfers(r1, r2, dt, GM) == ()


def test_misuse_is_named():
    r1, r2 = [7000.0, 0.0, 0.0], [0.0, 8000.0, 0.0]
    with pytest.raises(UsageError, match="gm_km3_s2"):
        lambert(r1, r2, 100.0, -1.0)
    with pytest.raises(UsageError, match="r1_km"):
        lambert([1.0, 2.0], r2, 100.0, GM)
    with pytest.raises(UsageError, match="revolutions"):
        lambert(r1, r2, 100.0, GM, revolutions=-1)
    with pytest.raises(UsageError, match="revolutions"):
        lambert(r1, r2, 100.0, GM, revolutions=0.5)
    with pytest.raises(UsageError, match="fit"):
        lambert(np.ones((4, 3)), np.ones((3, 3)), 100.0, GM)
