"""Seeded, noise-free observation triples of every regime, made with the propagation but not with the solver."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.constants import AU_KM, C_KM_S, EARTH_RADIUS_KM, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.twobody.elements import state_from_elements
from firstarc.twobody.kepler import propagate

#: Ranges of semi-major axis (km about the Earth, au about the Sun) and eccentricity.
EARTH = {
    "leo": ((6800.0, 8500.0), (0.0, 0.05)),
    "meo": ((12000.0, 30000.0), (0.0, 0.3)),
    "geo": ((41000.0, 43000.0), (0.0, 0.05)),
    "molniya": ((24000.0, 27000.0), (0.6, 0.73)),
    "earth hyperbola": ((-40000.0, -6000.0), (1.2, 2.0)),
}
SUN = {
    "near-Earth": ((0.8, 2.5), (0.05, 0.6)),
    "main belt": ((2.1, 3.4), (0.0, 0.3)),
    "jupiter-like": ((5.0, 5.4), (0.0, 0.15)),
    "sun hyperbola": ((-3.0, -0.5), (1.1, 2.0)),
}
REGIMES = [*EARTH, *SUN]
EARTH_RATE = 7.292115e-5


class Triples(NamedTuple):
    """n triples: what the solver is given, and the true state at the middle emission time."""

    gm: float
    los: np.ndarray
    observer_km: np.ndarray
    t_s: np.ndarray
    center_velocity_km_s: np.ndarray
    r2_km: np.ndarray
    v2_km_s: np.ndarray
    range2_km: np.ndarray


def triples(regime: str, n: int, seed: int, light_time: bool = True, arc_deg=(1.0, 40.0)) -> Triples:
    """Random triples whose arc, at the middle rate, spans ``arc_deg``, the middle one at 30 to 70 % of it."""
    rng = np.random.default_rng(seed)
    about_earth = regime in EARTH
    gm = GM_EARTH_KM3_S2 if about_earth else GM_SUN_KM3_S2
    (a_low, a_high), (e_low, e_high) = (EARTH if about_earth else SUN)[regime]
    a = rng.uniform(a_low, a_high, n) * (1.0 if about_earth else AU_KM)
    e = rng.uniform(e_low, e_high, n)
    p = a * (1.0 - e * e)
    inclination = rng.uniform(0.02, 2.8, n) if about_earth else rng.uniform(0.01, 0.6, n)
    if regime == "geo":
        inclination = rng.uniform(0.02, 0.3, n)
    limit = np.where(e > 1.0, 0.8 * np.arccos(-1.0 / np.maximum(e, 1.0 + 1e-9)), np.pi)
    nu = rng.uniform(-1.0, 1.0, n) * limit
    if about_earth:
        # Start over above the surface where the draw lies in the ground.
        low = p / (1.0 + e * np.cos(nu)) < EARTH_RADIUS_KM + 200.0
        nu = np.where(low, limit * np.sign(nu), nu)
        p = np.where(low, np.maximum(p, (EARTH_RADIUS_KM + 200.0) * (1.0 + e * np.cos(nu))), p)
    node, argp = rng.uniform(0.0, 2.0 * np.pi, (2, n))
    r, v = state_from_elements(p, e, inclination, node, argp, nu, gm)
    distance = np.linalg.norm(r, axis=1)
    span = np.radians(rng.uniform(*arc_deg, n)) * distance**2 / np.sqrt(gm * p)
    part = rng.uniform(0.3, 0.7, n)
    t = np.stack((-part * span, np.zeros(n), (1.0 - part) * span), axis=1)
    if about_earth:
        observer = _stations(rng, r, distance, t)
        moving = np.array([12.0, 25.0, 10.0])
    else:
        observer = _earth(rng, r, t, gm)
        moving = np.array([0.008, -0.011, 0.004])
    moving = np.broadcast_to(moving, (n, 3, 3)).copy()
    los, ranges = np.empty((n, 3, 3)), np.zeros((3, n))
    per_c = 1.0 / C_KM_S if light_time else 0.0
    for k in range(3):
        rho = ranges[k]
        for _ in range(8):
            seen, _ = propagate(r, v, t[:, k] - rho * per_c, gm)
            line = seen - observer[:, k] - moving[:, k] * (rho * per_c)[:, None]
            rho = np.linalg.norm(line, axis=1)
        ranges[k] = rho
        los[:, k] = line / rho[:, None]
    r2, v2 = propagate(r, v, -ranges[1] * per_c, gm)
    return Triples(gm, los, observer, t, moving, r2, v2, ranges[1])


def _stations(rng, r, distance, t):
    """Stations that see the object well above the horizon at the middle time, carried round by the Earth."""
    up = r / distance[:, None]
    aside = np.cross(up, rng.normal(size=up.shape))
    aside /= np.linalg.norm(aside, axis=1)[:, None]
    angle = 0.7 * np.arccos(EARTH_RADIUS_KM / distance) * np.sqrt(rng.uniform(size=len(r)))
    site = 6371.0 * (up * np.cos(angle)[:, None] + aside * np.sin(angle)[:, None])
    turn = np.arctan2(site[:, 1], site[:, 0])[:, None] + EARTH_RATE * t
    across = np.hypot(site[:, 0], site[:, 1])[:, None]
    return np.stack((across * np.cos(turn), across * np.sin(turn), site[:, 2:] + 0.0 * t), axis=-1)


def _earth(rng, r, t, gm):
    """A station on an Earth with an eccentric orbit and the swing round its barycentre with the Moon."""
    longitude = np.arctan2(r[:, 1], r[:, 0]) + rng.uniform(-1.2, 1.2, len(r))
    mean = longitude[:, None] + np.sqrt(gm / AU_KM**3) * t
    radius = AU_KM * (1.0 - 0.0167 * np.cos(mean))
    true = mean + 2.0 * 0.0167 * np.sin(mean)
    earth = np.stack((radius * np.cos(true), radius * np.sin(true), 0.0 * t), axis=-1)
    day = np.stack((np.cos(EARTH_RATE * t), np.sin(EARTH_RATE * t), 0.5 + 0.0 * t), axis=-1)
    month = np.stack((np.cos(2.66e-6 * t), np.sin(2.66e-6 * t), 0.0 * t), axis=-1)
    return earth + 5700.0 * day + 4670.0 * month
