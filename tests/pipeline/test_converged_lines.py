"""Converged orbits pass through their three lines of sight to 1e-10 rad, checked by numerical integration.

The check shares nothing with the solver: it takes the state, integrates the equation of motion and solves the
light-time equation by repeated substitution.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import firstarc as fa
from firstarc.constants import DAY_S
from pipeline.shared_cases import EARTH, SUN, case, csv_rows, frame_of, invented, loaded

#: IAU and IERS values (Conventions 2010): speed of light; km3/s2 of the Earth and of the Sun (nominal, DE421).
C_KM_S = 299792.458
MISS_RAD = 1e-10


def position(state: fa.State, gm: float, dt_s: float) -> np.ndarray:
    if dt_s == 0.0:
        return state.r_km

    def rate(_: float, y: np.ndarray) -> np.ndarray:
        return np.concatenate([y[3:], -gm * y[:3] / np.linalg.norm(y[:3]) ** 3])

    start = np.concatenate([state.r_km, state.v_km_s])
    scale = np.repeat([np.linalg.norm(state.r_km), np.linalg.norm(state.v_km_s)], 3)
    found = solve_ivp(rate, (0.0, dt_s), start, method="DOP853", rtol=1e-13, atol=1e-14 * scale)
    return found.y[:3, -1]


def miss_rad(candidate: object, obs: fa.Observations) -> np.ndarray:
    state, lines, misses = candidate.state, obs.sight_lines, []  # type: ignore[attr-defined]
    t_state = ((state.epoch_tdb[0] - lines.epoch_tdb[0]) + (state.epoch_tdb[1] - lines.epoch_tdb[1])) * DAY_S
    for i in candidate.picked:  # type: ignore[attr-defined]
        observer, moving = lines.observer_km[i], lines.center_velocity_km_s[i]
        tau, size = 0.0, np.inf
        for _ in range(12):
            # both ends of the light path from the barycentre; the centre moves evenly within the light time
            path = position(state, state.gm_km3_s2, lines.t_s[i] - tau - t_state) - moving * tau - observer
            size, before = np.linalg.norm(path), size
            if not lines.light_time or abs(size - before) < 1e-13 * size:
                break
            tau = size / C_KM_S
        misses.append(np.linalg.norm(np.cross(path / size, lines.los[i])))
    return np.array(misses)


@pytest.mark.parametrize("name", EARTH + SUN)
@pytest.mark.parametrize("noise", ["n0", "s5"])
def test_simulated_cases(name: str, noise: str) -> None:
    obs = loaded(name, noise)
    pick = None if name == "sh-geo-2nights" else case(name)["suggested_triplet"]
    solved = [c for c in fa.preliminary(obs, pick=pick).candidates if c.admissible]
    assert solved
    for candidate in solved:
        assert miss_rad(candidate, obs).max() < MISS_RAD, candidate.letter


@pytest.mark.parametrize("name", ["real-1990ha", "real-2020mk4", "real-1977ub"])
def test_real_cases(name: str) -> None:
    obs = loaded(name)
    best = fa.preliminary(obs).best
    assert miss_rad(best, obs).max() < MISS_RAD


def test_geometric_directions() -> None:
    name = "sh-molniya-90min"
    pairs = [(float(r["ra_geom"]), float(r["dec_geom"])) for r in csv_rows(name)]
    obs = fa.load(frame_of(loaded(name, "n0"), pairs), center="earth", directions="geometric")
    for candidate in fa.preliminary(obs, pick=(0, 3, 6)).candidates[:2]:
        assert candidate.admissible
        assert miss_rad(candidate, obs).max() < MISS_RAD


def test_what_if_moves_the_lines_that_are_met() -> None:
    obs = invented().with_what_if(fa.WhatIf(station="BRN", lat_deg=0.01, clock_s=0.4))
    best = fa.preliminary(obs, pick=(2, 4, 7)).best
    assert miss_rad(best, obs).max() < MISS_RAD
    assert miss_rad(best, invented()).max() > 1e-6, "the recorded lines are other lines"


def test_history_ends_at_the_converged_orbit() -> None:
    for kind in ("SATELLITE", "MINOR_PLANET"):
        best = fa.preliminary(invented(kind)).best
        np.testing.assert_array_equal(best.history[-1].ranges_km, best.ranges_km)
        assert best.history[-1].miss_arcsec < np.degrees(MISS_RAD) * 3600.0
        assert best.history[0].miss_arcsec > best.history[-1].miss_arcsec
        # the last step of a quadratic iteration is about the root of what is left after it
        assert np.isnan(best.history[0].change) and best.history[-1].change < 1e-5
