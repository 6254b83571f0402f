"""One orbit in plain floats and lanes of arrays are the same formulas: the same digits, whatever the orbit."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.preliminary import refine
from firstarc.preliminary.gauss import positive_roots, range_polynomial
from firstarc.preliminary.lines_of_sight import time_ordered
from firstarc.preliminary.root_orbits import positions
from firstarc.twobody.kepler import propagate
from firstarc.twobody.near_anomaly import first_anomaly, first_anomaly_alone, near_anomaly, near_anomaly_alone
from properties.orbit_cases import REGIMES, triples


def conics(count, seed):
    """Starts on conics of every kind (q = gm = 1): radius, r . v, beta and a time step of either sign."""
    rng = np.random.default_rng(seed)
    third = count // 3
    e = np.concatenate(
        (
            rng.uniform(0.0, 1.0, third),
            1.0 - 10.0 ** rng.uniform(-8.0, -1.0, third),
            1.0 + 10.0 ** rng.uniform(-8.0, 1.0, third),
        )
    )
    limit = np.where(e > 1.0, 0.98 * np.arccos(-1.0 / np.maximum(e, 1.0 + 1e-16)), np.pi)
    nu = rng.uniform(-1.0, 1.0, 3 * third) * limit
    r0 = (1.0 + e) / (1.0 + e * np.cos(nu))
    eta = r0 * e * np.sin(nu) / np.sqrt(1.0 + e)
    dt = rng.choice([-1.0, 1.0], 3 * third) * 10.0 ** rng.uniform(-3.0, 2.0, 3 * third) * np.sqrt(r0**3)
    return r0, eta, 1.0 - e, dt


def test_near_anomaly_solves_keplers_equation_on_every_conic():
    r0, eta, beta, dt = conics(6000, seed=61)
    with np.errstate(all="ignore"):
        start = first_anomaly(r0, eta, beta, dt, 1.0)
        loose = near_anomaly(start, r0, eta, beta, dt, 1.0, 1e-3)
        s, g0, g1, g2, g3, g4, g5, r = near_anomaly(loose[0], r0, eta, beta, dt, 1.0, 1e-3)
    # Kepler's equation itself, and what ties the functions G together: g_k + beta g_(k+2) = s^k / k!.
    size = np.abs(r0 * g1) + np.abs(eta * g2) + np.abs(g3) + np.abs(dt)
    assert np.all(np.abs(r0 * g1 + eta * g2 + g3 - dt) <= 1e-13 * size)
    for low, high, power in ((g0, g2, 1.0), (g1, g3, s), (g2, g4, s * s / 2.0), (g3, g5, s**3 / 6.0)):
        term = np.abs(low) + np.abs(beta * high) + np.abs(power)
        assert np.all(np.abs(low + beta * high - power) <= 1e-12 * term)
    assert np.all(r > 0.0)


def test_near_anomaly_of_one_lane_has_the_same_digits():
    r0, eta, beta, dt = conics(600, seed=62)
    with np.errstate(all="ignore"):
        start = first_anomaly(r0, eta, beta, dt, 1.0)
        lanes = near_anomaly(start, r0, eta, beta, dt, 1.0, 1e-3)
        for k in range(600):
            lane = [float(part[k]) for part in (r0, eta, beta, dt)]
            s = first_anomaly_alone(*lane, 1.0)
            assert s == start[k]
            alone = near_anomaly_alone(s, *lane, 1.0, 1e-3)
            np.testing.assert_array_equal(alone, [part[k] for part in lanes])


def test_far_steps_on_nearly_parabolic_orbits():
    """Steps that pass from far inward to far outward: r and v obey energy and angular momentum."""
    r0, eta, beta, dt = conics(6000, seed=63)
    speed2 = 2.0 / r0 - beta
    radial = eta / r0
    across = np.sqrt(np.maximum(speed2 - radial * radial, 0.0))
    zero = np.zeros_like(r0)
    r, v = np.stack((r0, zero, zero), axis=1), np.stack((radial, across, zero), axis=1)
    r2, v2 = propagate(r, v, dt, 1.0)
    assert np.isfinite(r2).all()
    size = np.linalg.norm(r2, axis=1)
    energy = 2.0 / size - np.sum(v2 * v2, axis=1)
    assert np.all(np.abs(energy - beta) <= 1e-9 * (2.0 / size + np.abs(beta) + 2.0 / r0))
    momentum = np.cross(r2, v2)[:, 2]
    assert np.all(np.abs(momentum - r0 * across) <= 1e-9 * (size * np.linalg.norm(v2, axis=1) + r0 * across))


@pytest.mark.parametrize("regime", REGIMES)
@pytest.mark.parametrize("light_time", [True, False])
def test_refinement_of_one_lane_has_the_same_digits(regime, light_time, monkeypatch):
    case = triples(regime, 60, seed=64, light_time=light_time, arc_deg=(1.0, 40.0))
    moving = case.center_velocity_km_s if light_time else None
    lines, _, _ = time_ordered(case.los, case.observer_km, case.t_s, moving, case.gm, light_time)
    # Starts from good to hopeless.
    far = case.range2_km * np.geomspace(0.3, 3.0, 60)
    ranges = np.stack((far, far, far))
    r = positions(lines, ranges)
    v2 = (r[2] - r[0]) / (lines.t_s[2] - lines.t_s[0])
    alone = refine.refine(lines, ranges, v2, keep_history=True)
    monkeypatch.setattr(refine, "_FEW", 0)
    monkeypatch.setattr(refine, "_BLOCK", 16)
    lanes = refine.refine(lines, ranges, v2)
    assert alone.converged.sum() > 0
    np.testing.assert_array_equal(alone.converged, lanes.converged)
    done = alone.converged
    np.testing.assert_array_equal(alone.iterations[done], lanes.iterations[done])
    for one, other in zip(alone.take(np.flatnonzero(done)).history[-1], ("range_km", None, "miss_rad"), strict=True):
        if other is not None:
            np.testing.assert_array_equal(one, getattr(lanes, other)[:, done])
    np.testing.assert_array_equal(alone.v2_km_s[:, done], lanes.v2_km_s[:, done])


@pytest.mark.parametrize("regime", ["leo", "near-Earth", "main belt", "sun hyperbola"])
def test_roots_of_one_lane_have_the_same_digits(regime):
    case = triples(regime, 200, seed=65)
    lines, _, _ = time_ordered(case.los, case.observer_km, case.t_s, None, case.gm, False)
    poly = range_polynomial(lines)
    many = positive_roots(poly.a, poly.b, poly.c)
    for k in range(200):
        one = positive_roots(poly.a[k], poly.b[k], poly.c[k])
        np.testing.assert_array_equal(one[0][0], many[0][k])
        np.testing.assert_array_equal(one[1][0], many[1][k])
