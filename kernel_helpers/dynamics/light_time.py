"""Directions in which an orbit is seen, light time and the moving centre included.

The astrometric direction L at reception time t, observer at R(t) from the centre, barycentric velocity of the
centre Vc(t), satisfies  rho L = r(t - rho/c) - R(t) - Vc(t) rho/c.  (Between emission and reception the
centre itself moves by Vc rho/c; its acceleration adds less than 1e-9 rad over an hour of light time about
the Sun.)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array, propagate

#: Passes of the light-time iteration; each gains v/c, four digits or more.
PASSES = 3


def predicted_directions(
    state: ArrayLike,
    t_state_s: ArrayLike,
    t_s: ArrayLike,
    observer_km: ArrayLike,
    center_velocity_km_s: ArrayLike | None,
    gm_km3_s2: float,
    light_time: bool,
) -> tuple[Array, Array, Array]:
    """Directions, slant ranges and emission times of two-body orbits as seen by an observer.

    Parameters
    ----------
    state : array_like, shape (6,) or (k, 6)
        Position (km) and velocity (km/s) about the centre, ICRF axes.
    t_state_s : float or array_like, shape (k,)
        Time of each state, TDB seconds.
    t_s : array_like, shape (n,)
        Reception times, same scale and origin.
    observer_km : array_like, shape (n, 3)
        Observer from the centre at reception.
    center_velocity_km_s : array_like, shape (n, 3), or None
        Barycentric velocity of the centre; None for zero. Used only with light time.
    gm_km3_s2 : float
    light_time : bool
        False gives geometric directions of the same instant.

    Returns
    -------
    los : ndarray, shape (k, n, 3)
        Unit vectors; (n, 3) for a single state.
    range_km : ndarray, shape (k, n)
        Slant ranges (light paths).
    emission_t_s : ndarray, shape (k, n)
        Emission times, the reception times themselves for geometric directions.

    Raises
    ------
    UsageError
        The state has no six numbers, or the shapes do not fit each other.
    """
    states = np.asarray(state, dtype=float)
    t = np.atleast_1d(np.asarray(t_s, dtype=float))
    observer = np.asarray(observer_km, dtype=float).reshape(-1, 3)
    if states.shape[-1] != 6 or states.ndim > 2:
        raise UsageError(f"state has shape {states.shape}; expected (6,) or (k, 6): km and km/s")
    if observer.shape[0] != t.size:
        raise UsageError(f"observer_km has {observer.shape[0]} rows for {t.size} times; expected one row per time")
    single = states.ndim == 1
    states = np.atleast_2d(states)
    t_state = np.broadcast_to(np.asarray(t_state_s, dtype=float), states.shape[:1])[:, None]
    r0, v0 = states[:, None, :3], states[:, None, 3:]
    moving = np.zeros(3)
    if light_time and center_velocity_km_s is not None:
        moving = np.asarray(center_velocity_km_s, dtype=float) / C_KM_S
    with np.errstate(all="ignore"):
        r, v = propagate(r0, v0, t - t_state, gm_km3_s2)
        line = r - observer
        distance = np.sqrt(np.sum(line * line, axis=-1))
        emission = np.broadcast_to(t, distance.shape)
        if light_time:
            # First correction with the line-of-sight rate, so that the passes start close.
            rate = np.sum((v + moving * C_KM_S) * line, axis=-1) / (distance * C_KM_S)
            distance = distance / (1.0 + rate)
            for _ in range(PASSES):
                r, _ = propagate(r0, v0, t - distance / C_KM_S - t_state, gm_km3_s2)
                line = r - observer - moving * distance[..., None]
                distance = np.sqrt(np.sum(line * line, axis=-1))
            emission = t - distance / C_KM_S
        los = line / distance[..., None]
    if single:
        return los[0], distance[0], emission[0]
    return los, distance, emission


def tangent_axes(los: Array) -> tuple[Array, Array]:
    """Unit vectors towards increasing right ascension and declination (right ascension 0 at a pole)."""
    x, y, z = los[..., 0], los[..., 1], los[..., 2]
    flat = np.hypot(x, y)
    polar = flat < 1e-300
    safe = np.where(polar, 1.0, flat)
    cos_ra, sin_ra = np.where(polar, 1.0, x / safe), np.where(polar, 0.0, y / safe)
    east = np.stack((-sin_ra, cos_ra, np.zeros_like(z)), axis=-1)
    north = np.stack((-z * cos_ra, -z * sin_ra, flat), axis=-1)
    return east, north


def residuals_rad(los_observed: ArrayLike, los_predicted: ArrayLike) -> Array:
    """Observed minus computed directions in the tangent plane of the observed one.

    Parameters
    ----------
    los_observed : array_like, shape (n, 3)
    los_predicted : array_like, shape (..., n, 3)
        Unit vectors.

    Returns
    -------
    ndarray, shape (..., n, 2)
        (delta alpha cos delta, delta delta) in rad: the arc between both directions, laid out along the
        observed direction's east and north. Safe at the poles and across 0h; a full arc up to pi.
    """
    seen = np.asarray(los_observed, dtype=float)
    computed = np.asarray(los_predicted, dtype=float)
    east, north = tangent_axes(seen)
    with np.errstate(all="ignore"):
        a = -np.sum(east * computed, axis=-1)
        d = -np.sum(north * computed, axis=-1)
        sine = np.hypot(a, d)
        arc = np.arctan2(sine, np.sum(seen * computed, axis=-1))
        scale = np.where(sine > 0.0, arc / np.where(sine > 0.0, sine, 1.0), 1.0)
    return np.stack((a * scale, d * scale), axis=-1)
