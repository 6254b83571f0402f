"""Seeded short arcs, noisy, and coplanar arcs of four sight lines: made with the propagation, not with a solver."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from firstarc.constants import ARCSEC_RAD, AU_KM, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.light_time import predicted_directions, tangent_axes
from firstarc.twobody.elements import state_from_elements
from properties import orbit_cases as oc


class Arc(NamedTuple):
    """One arc: what a method is given, and the true state at time 0 with its slant ranges."""

    los: np.ndarray
    observer_km: np.ndarray
    t_s: np.ndarray
    moving: np.ndarray
    sigma_rad: np.ndarray
    state: np.ndarray
    range_km: np.ndarray
    gm: float

    @property
    def given(self) -> tuple[Any, ...]:
        return self.los, self.observer_km, self.t_s, self.gm

    @property
    def more(self) -> dict[str, Any]:
        return {"center_velocity_km_s": self.moving, "light_time": True, "sigma_rad": self.sigma_rad}


def seen(state, t, observer, moving, gm, sigma_rad, rng=None) -> Arc:
    """Directions of an orbit, with noise if a generator is given."""
    los, rho, _ = predicted_directions(state, 0.0, t, observer, moving, gm, True)
    if rng is not None:
        east, north = tangent_axes(los)
        los = los + sigma_rad * (rng.normal(size=(len(t), 1)) * east + rng.normal(size=(len(t), 1)) * north)
        los /= np.linalg.norm(los, axis=1)[:, None]
    return Arc(los, observer, t, moving, np.full((len(t), 2), sigma_rad), state, rho, gm)


#: kind: regime, span of the arc (s), observations, sigma (arcsec)
KINDS = {
    "LEO, 14 to 60 s": ("leo", (14.0, 60.0), 6, 5.0),
    "GEO, 10 min": ("geo", (600.0, 600.0), 6, 1.0),
    "main belt, 1 h": ("main belt", (3600.0, 3600.0), 4, 0.3),
    "near-Earth, 2 to 6 h": ("near-Earth", (7200.0, 21600.0), 6, 0.3),
}


def noisy_arcs(kind: str, n: int, seed: int) -> list[Arc]:
    """Arcs from one station of random orbits."""
    regime, spans, count, sigma = KINDS[kind]
    rng = np.random.default_rng(seed)
    base = oc.triples(regime, n, seed, arc_deg=(1, 2))
    arcs = []
    for k in range(n):
        span = rng.uniform(*spans)
        t = np.linspace(-span / 2, span / 2, count)
        if regime in oc.EARTH:
            x, y, z = base.observer_km[k, 1]
            turn = np.arctan2(y, x) + oc.EARTH_RATE * t
            observer = np.stack((np.hypot(x, y) * np.cos(turn), np.hypot(x, y) * np.sin(turn), z + 0 * t), axis=1)
        else:
            observer = oc._earth(np.random.default_rng(seed + k), base.r2_km[k][None], t[None], base.gm)[0]
        moving = np.repeat(base.center_velocity_km_s[k, :1], count, axis=0)
        state = np.concatenate((base.r2_km[k], base.v2_km_s[k]))
        arcs.append(seen(state, t, observer, moving, base.gm, sigma * ARCSEC_RAD, rng))
    return arcs


def coplanar_arcs(kind: str, n: int, seed: int) -> list[Arc]:
    """Four lines, observers and object in one plane: an equatorial GEO from the equator, a body in the ecliptic."""
    rng = np.random.default_rng(seed)
    arcs = []
    for _ in range(n):
        nu, argp = rng.uniform(0.0, 2.0 * np.pi, 2)
        if kind == "GEO":
            gm, a, e, span = GM_EARTH_KM3_S2, 42164.0 * rng.uniform(0.98, 1.02), rng.uniform(0.0, 0.02), 3600.0
            span *= rng.uniform(1.5, 6.0)
        else:
            gm, a, e, span = GM_SUN_KM3_S2, AU_KM * rng.uniform(2.1, 3.3), rng.uniform(0.02, 0.3), 86400.0
            span *= rng.uniform(20.0, 60.0)
        t = np.linspace(-span / 2, span / 2, 4) + rng.uniform(-0.05, 0.05, 4) * span
        r, v = state_from_elements(a * (1.0 - e * e), e, 0.0, 0.0, argp, nu, gm)
        turn = np.arctan2(r[1], r[0]) + rng.uniform(-0.9, 0.9)
        if kind == "GEO":
            turn, far = turn + oc.EARTH_RATE * t, 6378.137 + 0 * t
        else:
            turn = turn + np.sqrt(gm / AU_KM**3) * t
            far = AU_KM * (1.0 - 0.0167 * np.cos(turn - 1.0))
        observer = np.stack((far * np.cos(turn), far * np.sin(turn), 0 * t), axis=1)
        moving = np.zeros((4, 3))
        moving[:, 0] = 20.0 if kind == "GEO" else 0.01
        arcs.append(seen(np.concatenate((r, v)), t, observer, moving, gm, 5e-6))
    return arcs


def circular_arc(a_km: float, seed: int, n: int = 2, span_deg: float = 3.0, sigma_rad: float = 5e-6) -> Arc:
    """A circular orbit about the Earth or the Sun, told apart by its size, seen without noise."""
    rng = np.random.default_rng(seed)
    about_earth = a_km < 1e6
    gm = GM_EARTH_KM3_S2 if about_earth else GM_SUN_KM3_S2
    r, v = state_from_elements(a_km, 0.0, rng.uniform(0.1, 1.2), *rng.uniform(0.0, 6.0, 3), gm)
    t = np.linspace(-0.5, 0.5, n) * np.radians(span_deg) * np.sqrt(a_km**3 / gm)
    if about_earth:
        observer = oc._stations(rng, r[None], np.array([a_km]), t[None])[0]
    else:
        observer = oc._earth(rng, r[None], t[None], gm)[0]
    moving = np.full((n, 3), 12.0 if about_earth else 0.01)
    return seen(np.concatenate((r, v)), t, observer, moving, gm, sigma_rad)


def spoiled(arc: Arc, index: int) -> tuple[tuple[Any, ...], dict[str, Any]]:
    """Unusable or degenerate input, many kinds; every index is another one."""
    rng = np.random.default_rng(index)
    los, observer, t = arc.los.copy(), arc.observer_km.copy(), arc.t_s.copy()
    value = [np.nan, np.inf, -np.inf, 0.0, 1e308, -1e308, 1e-308][index % 7]
    row, column = rng.integers(len(t)), rng.integers(3)
    kind = index % 12
    if kind == 0:
        los[row, column] = value
    elif kind == 1:
        observer[row, column] = value
    elif kind == 2:
        t[row] = value
    elif kind == 3:
        los[:] = los[0]
    elif kind == 4:
        observer[:] = 0.0
    elif kind == 5:
        t[:] = t[0]
    elif kind == 6:
        los[1] = -los[0]
    elif kind == 7:
        los = rng.normal(size=los.shape)
    elif kind == 8:
        observer = rng.normal(size=observer.shape) * 10.0 ** rng.uniform(-5.0, 12.0)
    elif kind == 9:
        t = np.sort(rng.normal(size=t.shape)) * 10.0 ** rng.uniform(-9.0, 9.0)
    elif kind == 10:
        los[:] = observer / np.linalg.norm(observer, axis=1)[:, None]
    else:
        los[:] = -observer / np.linalg.norm(observer, axis=1)[:, None]
    more = arc.more | {"light_time": bool(index % 2), "body_radius_km": 6378.0}
    return (los, observer, t, arc.gm), more


def all_statuses_speak(found) -> None:
    """What every result must keep, whatever the input."""
    assert found
    for one in found:
        assert one.status.sentence.endswith(".")
        assert one.outcome.code == one.status.code or one.status.code.ok
        if one.admissible:
            assert np.isfinite(one.state).all() and (one.range_km > 0.0).all()
