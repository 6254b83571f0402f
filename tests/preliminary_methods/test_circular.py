"""Assumed circular orbits: truth found, assumption exact, symmetries, covariance, bad input."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from firstarc.constants import AU_KM, EARTH_RADIUS_KM
from firstarc.dynamics.light_time import predicted_directions, residuals_rad, tangent_axes
from firstarc.errors import UsageError
from firstarc.preliminary.circular import solve
from firstarc.preliminary.outcome import Outcome
from firstarc.twobody.elements import elements_from_state
from firstarc.twobody.kepler import propagate
from preliminary_methods.short_arcs import all_statuses_speak, circular_arc, noisy_arcs, spoiled

RADII = [6800.0, 7500.0, 26560.0, 42164.0, 0.7 * AU_KM, 1.4 * AU_KM, 2.7 * AU_KM, 5.2 * AU_KM]


def nearest(found, a_km):
    return min((one for one in found if one.has_orbit), key=lambda one: abs(one.root_km - a_km))


@pytest.mark.parametrize("span_deg", [0.3, 3.0, 40.0])
@pytest.mark.parametrize("a_km", RADII)
def test_truth_is_found_and_the_assumption_holds(a_km, span_deg):
    for seed in range(8):
        arc = circular_arc(a_km, seed, span_deg=span_deg)
        found = solve(*arc.given, **arc.more)
        one = nearest(found, a_km)
        # Two lines a fraction of a degree of orbit apart lose digits of the range by the parallax of the arc.
        assert one.root_km == pytest.approx(a_km, rel=1e-6)
        for each in found:
            if not each.admissible:
                continue
            el = elements_from_state(each.state[:3], each.state[3:], arc.gm)
            assert el.e < 1e-9
            los, _, _ = predicted_directions(
                each.state, each.t_state_s, arc.t_s, arc.observer_km, arc.moving, arc.gm, True
            )
            assert np.abs(residuals_rad(arc.los, los)).max() < 1e-10


def test_an_inner_planet_has_every_circle():
    """Seen from outside, a sphere is met twice: each line gives two points, and each root its own orbit."""
    counts = set()
    for seed in range(20):
        arc = circular_arc(0.7 * AU_KM, seed)
        found = solve(*arc.given, **arc.more)
        radii = [one.root_km for one in found if one.admissible]
        counts.add(len(radii))
        assert radii == sorted(radii)
        assert len(set(np.round(radii, 3))) == len(radii)
    assert max(counts) >= 2


def test_whole_revolutions():
    arc = circular_arc(7000.0, 3, span_deg=360.0 + 25.0)
    plain = solve(*arc.given, **arc.more)
    more = solve(*arc.given, max_revolutions=1, **arc.more)
    assert all(abs(one.root_km - 7000.0) > 1.0 for one in plain if one.has_orbit)
    one = nearest(more, 7000.0)
    assert one.root_km == pytest.approx(7000.0, rel=1e-9)
    assert "1 whole revolution" in one.assumption


def test_the_long_way_round():
    arc = circular_arc(9000.0, 4, span_deg=250.0)
    found = nearest(solve(*arc.given, long_way=True, **arc.more), 9000.0)
    assert found.root_km == pytest.approx(9000.0, rel=1e-9)
    np.testing.assert_allclose(found.state, np.concatenate(propagate(arc.state[:3], arc.state[3:], arc.t_s[1], arc.gm)),
                               rtol=1e-7)  # fmt: skip


def test_rotation_permutation_and_units():
    arc = circular_arc(42164.0, 5)
    plain = solve(*arc.given, **arc.more)[0]
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    turned = solve(
        arc.los @ turn.T, arc.observer_km @ turn.T, arc.t_s, arc.gm,
        center_velocity_km_s=arc.moving @ turn.T, light_time=True, sigma_rad=arc.sigma_rad,
    )[0]  # fmt: skip
    np.testing.assert_allclose(turned.state[:3], turn @ plain.state[:3], rtol=1e-8)
    back = slice(None, None, -1)
    swapped = solve(arc.los[back], arc.observer_km[back], arc.t_s[back], arc.gm, center_velocity_km_s=arc.moving[back],
                    light_time=True, sigma_rad=arc.sigma_rad)[0]  # fmt: skip
    np.testing.assert_array_equal(swapped.state, plain.state)
    assert swapped.rows == (1, 0) and plain.rows == (0, 1)
    scaled = solve(arc.los, 3.0 * arc.observer_km, arc.t_s, 27.0 * arc.gm)[0]
    geometric = solve(arc.los, arc.observer_km, arc.t_s, arc.gm)[0]
    np.testing.assert_allclose(scaled.state, 3.0 * geometric.state, rtol=1e-9)


def test_covariance_is_the_scatter():
    # 400 noisy repeats: sigmas agree within 4 standard deviations of a sample sigma, 4 / sqrt(2 * 399) = 14 %.
    arc = circular_arc(42164.0, 6, span_deg=5.0)
    truth = solve(*arc.given, **arc.more)[0]
    rng = np.random.default_rng(12)
    east, north = tangent_axes(arc.los)
    states, ranges = [], []
    for _ in range(400):
        los = arc.los + arc.sigma_rad[:, :1] * (rng.normal(size=(2, 1)) * east + rng.normal(size=(2, 1)) * north)
        one = nearest(solve(los, *arc.given[1:], **arc.more), 42164.0)
        states.append(one.state)
        ranges.append(one.range_km[1])
    np.testing.assert_allclose(np.std(states, axis=0), np.sqrt(np.diag(truth.covariance)), rtol=0.14)
    assert np.std(ranges) == pytest.approx(truth.range_sigma_km, rel=0.14)
    assert np.linalg.matrix_rank(truth.covariance / np.outer(*2 * [np.sqrt(np.diag(truth.covariance))]), 1e-7) == 4


def test_pair_and_rejections():
    arc = circular_arc(7000.0, 7, n=4)
    found = nearest(solve(*arc.given, pair=(3, 1), **arc.more), 7000.0)
    assert found.rows == (1, 3)
    assert found.root_km == pytest.approx(7000.0, rel=1e-7)
    low = solve(*arc.given, body_radius_km=7100.0, **arc.more)
    assert all(not one.admissible for one in low)
    assert any(one.outcome == Outcome.BELOW_SURFACE and "below the surface" in str(one.status) for one in low)


def test_no_circle_says_how_near():
    # A line that points into the ground under the observer: no satellite moves so fast.
    arc = circular_arc(7000.0, 8)
    found = solve(arc.los[[0, 0]] * [[1], [-1]], arc.observer_km, arc.t_s, arc.gm, body_radius_km=EARTH_RADIUS_KM)
    assert not any(one.admissible for one in found)
    assert all(one.status.sentence for one in found)


@pytest.mark.parametrize("index", range(36))
def test_bad_input_gets_a_status(index):
    given, more = spoiled(noisy_arcs("LEO, 14 to 60 s", 1, 5)[0], index)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        all_statuses_speak(solve(*given, max_revolutions=1, **more))


def test_misuse_is_named():
    arc = circular_arc(7000.0, 9, n=3)
    with pytest.raises(UsageError, match="pair is"):
        solve(*arc.given, pair=(0, 7))
    with pytest.raises(UsageError, match="gm_km3_s2"):
        solve(arc.los, arc.observer_km, arc.t_s, -1.0)
    with pytest.raises(UsageError, match="1 observation given"):
        solve(arc.los[:1], arc.observer_km[:1], arc.t_s[:1], arc.gm)
    with pytest.raises(UsageError, match="observer_km has 2 rows"):
        solve(arc.los, arc.observer_km[:2], arc.t_s, arc.gm)
    with pytest.raises(UsageError, match="max_revolutions"):
        solve(*arc.given, max_revolutions=-1)
