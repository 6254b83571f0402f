"""Invented arcs of every regime, two-body truth, and noisy observations of them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from firstarc.constants import ARCSEC_RAD, AU_KM, DAY_S, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.light_time import predicted_directions, tangent_axes
from firstarc.fit.measurement_model import MeasurementModel
from firstarc.fit.measurements import Measurements
from firstarc.fit.motion import TwoBody
from firstarc.twobody.elements import state_from_elements
from firstarc.twobody.kepler import propagate

EARTH_RATE = 7.292115e-5
#: Barycentric velocity of the centre: the Earth's and the Sun's, roughly.
EARTH_MOVES, SUN_MOVES = np.array([12.0, 25.0, 10.0]), np.array([0.008, -0.011, 0.004])


@dataclass(frozen=True)
class Scene:
    """Truth and noise-free observations."""

    name: str
    gm: float
    state: np.ndarray
    t_state_s: float
    exact: Measurements

    def model(self, measurements: Measurements, **more) -> MeasurementModel:
        return MeasurementModel(measurements, TwoBody(self.gm), self.t_state_s, **more)


def turning(lat_deg: float, lon_deg: float, t_s: np.ndarray):
    """Place, velocity (km, km/s) and local axes (columns east, north, up) of a station on a round Earth."""
    lat, lon = np.radians(lat_deg), np.radians(lon_deg) + EARTH_RATE * t_s
    c, s, zero = np.cos(lon), np.sin(lon), 0.0 * t_s
    up = np.stack((np.cos(lat) * c, np.cos(lat) * s, np.sin(lat) + zero), axis=1)
    east = np.stack((-s, c, zero), axis=1)
    north = np.cross(up, east)
    place = 6371.0 * up
    speed = EARTH_RATE * np.cross([0.0, 0.0, 1.0], place)
    return place, speed, np.stack((east, north, up), axis=2)


def scene(name: str, sigma_arcsec: float = 1.0) -> Scene:
    """One of leo, meo, geo, near-earth, main-belt, or the arcs that fix nothing: one-night, distant."""
    rng = np.random.default_rng(77)
    if name in ("leo", "meo", "geo"):
        gm = GM_EARTH_KM3_S2
        a, e, inc, node, argp, nu, t, who = {
            "leo": (7100.0, 0.01, 0.9, 0.7, 0.3, -0.35, np.linspace(-240.0, 240.0, 25), 0),
            "meo": (26560.0, 0.02, 0.96, 0.2, 1.0, -0.9, np.linspace(-5400.0, 5400.0, 24), 0),
            "geo": (
                42164.0, 0.003, 0.05, 1.2, 2.0, -3.0,
                np.concatenate([np.linspace(-7200, 7200, 12) - 43000, np.linspace(-7200, 7200, 12) + 43100]), 0,
            ),
        }[name]  # fmt: skip
        r, v = state_from_elements(a * (1 - e * e), e, inc, node, argp, nu, gm)
        # The station lies below the track, some degrees aside.
        below = propagate(r, v, 0.0, gm)[0]
        lat = np.degrees(np.arcsin(below[2] / np.linalg.norm(below))) - 4.0
        lon = np.degrees(np.arctan2(below[1], below[0])) + 5.0
        who = np.zeros(t.size, int)
        if name != "geo":
            who[1::2] = 1
        sites = [turning(lat, lon, t), turning(lat + 6.0, lon - 8.0, t)]
        observer, speed, axes = (np.where((who == 0).reshape(-1, *([1] * (x.ndim - 1))), x, y)
                                 for x, y in zip(*sites, strict=True))  # fmt: skip
        moving = np.broadcast_to(EARTH_MOVES, (t.size, 3))
    else:
        gm = GM_SUN_KM3_S2
        a, e, inc, nu, night, each = {
            "near-earth": (1.35, 0.35, 0.15, 0.5, np.arange(0.0, 14.5, 2.0), 4),
            "main-belt": (2.6, 0.12, 0.1, 0.2, np.arange(0.0, 30.5, 5.0), 4),
            "one-night": (2.6, 0.12, 0.1, 0.2, np.array([0.0]), 6),
            "fourteen-minutes": (1.35, 0.35, 0.15, 0.5, np.array([0.0]), 3),
            "distant": (41.0, 0.1, 0.2, 0.1, np.array([0.0, 2.0]), 4),
        }[name]
        gap = 420.0 if name == "fourteen-minutes" else 1800.0
        t = ((night - night.mean())[:, None] * DAY_S + gap * (np.arange(each) - 0.5 * (each - 1))).ravel()
        t = t + (0.0 if name == "fourteen-minutes" else rng.uniform(-200.0, 200.0, t.size))
        r, v = state_from_elements(a * AU_KM * (1 - e * e), e, inc, 0.4, 1.0, nu, gm)
        # The Earth stands some 20 degrees behind the object's heliocentric longitude.
        longitude = np.arctan2(r[1], r[0]) - 0.35
        r_e, v_e = state_from_elements(AU_KM * (1 - 0.0167**2), 0.0167, 1e-4, 0.0, 1.8, longitude - 1.8, gm)
        earth, earth_speed = propagate(r_e, v_e, t, gm)
        # A station that has the object near its meridian in the middle of the arc.
        away = r - propagate(r_e, v_e, 0.0, gm)[0]
        place, spin, axes = turning(35.0, np.degrees(np.arctan2(away[1], away[0])), t)
        observer, speed, who = earth + place, earth_speed + spin, np.zeros(t.size, int)
        moving = np.broadcast_to(SUN_MOVES, (t.size, 3))
    state = np.concatenate([r, v])
    los, _, _ = predicted_directions(state, 0.0, t, observer, moving, gm, True)
    n = t.size
    exact = Measurements(
        t, los, observer, moving, np.full((n, 2), sigma_arcsec * ARCSEC_RAD), np.zeros(n), np.zeros(n), True,
        observer_velocity_km_s=speed, station=who, station_axes=axes,
    )  # fmt: skip
    return Scene(name, gm, state, 0.0, exact)


def shifted(exact: Measurements, angles_rad: np.ndarray) -> Measurements:
    """Directions moved by (d alpha cos delta, d delta), one row per observation."""
    east, north = tangent_axes(exact.los)
    los = exact.los + east * angles_rad[:, :1] + north * angles_rad[:, 1:]
    return replace(exact, los=los / np.linalg.norm(los, axis=1)[:, None])


def noisy(exact: Measurements, rng: np.random.Generator) -> Measurements:
    """Normal errors of the stated sigmas and correlation."""
    first, second = rng.normal(size=(2, len(exact)))
    second = exact.corr * first + np.sqrt(1.0 - exact.corr**2) * second
    return shifted(exact, np.stack((first, second), axis=1) * exact.sigma_rad)


def with_ranges(exact: Measurements) -> Measurements:
    """Room for ranges and range rates, all zero: the residuals are then minus what is computed."""
    n = len(exact)
    return replace(
        exact,
        range_km=np.zeros(n), sigma_range_km=np.full(n, 0.01),
        range_rate_km_s=np.zeros(n), sigma_range_rate_km_s=np.full(n, 1e-5),
    )  # fmt: skip
