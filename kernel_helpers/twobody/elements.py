"""Classical elements from a state and back, circular to hyperbolic.

Conventions where an element is undefined:

* circular (e below :data:`TINY`): e = 0, argument of periapsis 0, true anomaly counted from the node;
* equatorial (sin i below :data:`TINY`): node 0 (its line along the x axis), i = 0 or pi, and the argument of
  periapsis counted from the x axis in the direction of motion;
* parabola (\\|1 - e^2\\| below :data:`TINY`): e = 1, a = inf, mean anomaly sqrt(gm / (2 q^3)) (t - T),
which is
  tan(nu/2) + tan(nu/2)^3 / 3 (Barker);
* hyperbola: a negative, mean anomaly sqrt(gm / \\|a\\|^3) (t - T), no period (NaN);
* rectilinear motion (no angular momentum) has only a and a period; a state that is not finite has nothing (NaN).

The mean anomaly lies in [0, 2 pi) on an ellipse and carries the sign of t - T on open orbits.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.twobody.kepler import Array, stumpff

#: Below this e and sin i count as zero and 1 - e^2 as parabolic: some hundred roundings of a float.
TINY = 1e-11
_TURN = 2.0 * np.pi


class ElementsRad(NamedTuple):
    """Osculating elements on the axes of the state; floats for one state, arrays for many.

    ``t_periapsis_s`` is the nearest periapsis passage, in seconds from the state's own epoch.
    """

    p_km: Array
    a_km: Array
    e: Array
    i_rad: Array
    node_rad: Array
    argp_rad: Array
    nu_rad: Array
    mean_anomaly_rad: Array
    q_km: Array
    period_s: Array
    t_periapsis_s: Array


def _time_from_periapsis(nu: Array, e: Array, alpha: Array, q: Array, gm: Array) -> Array:
    """Seconds since periapsis for nu in (-pi, pi]; alpha = gm / a (0 on a parabola). Smooth across e = 1."""
    d = np.tan(0.5 * nu)
    w = alpha * q / (gm * (1.0 + e)) * d * d
    root = np.sqrt(np.abs(w))
    arc = np.where(w > 0.0, np.arctan(root), np.arctanh(np.minimum(root, 1.0))) / root
    arc = np.where(np.abs(w) < 1e-4, 1.0 - w / 3.0 + w * w / 5.0 - w**3 / 7.0 + w**4 / 9.0, arc)
    s = 2.0 * np.sqrt(q / (gm * (1.0 + e))) * d * arc
    _, c1, _, c3 = stumpff(alpha * s * s)
    return s * (q * c1 + gm * s * s * c3)


def elements_from_state(r_km: ArrayLike, v_km_s: ArrayLike, gm_km3_s2: ArrayLike) -> ElementsRad:
    """Classical elements of a state.

    Parameters
    ----------
    r_km, v_km_s : array_like, shape (..., 3)
        Position and velocity about the centre; the elements refer to the same axes.
    gm_km3_s2 : array_like

    Returns
    -------
    ElementsRad
        Angles in [0, 2 pi), the true anomaly included; see the module text for undefined elements.

    References
    ----------
    Vallado 2013, *Fundamentals of Astrodynamics and Applications*, 4th ed., section 2.5 (recalled);
    time from periapsis in universal variables, Battin 1999, section 4.5.

    Examples
    --------
    >>> el = elements_from_state([8000.0, 0.0, 0.0], [0.0, 7.0, 1.0], 398600.4415)
    >>> round(float(el.q_km), 3), round(float(np.degrees(el.i_rad)), 3)
    (8000.0, 8.13)
    """
    r = np.asarray(r_km, dtype=float)
    v = np.asarray(v_km_s, dtype=float)
    gm = np.asarray(gm_km3_s2, dtype=float)
    with np.errstate(all="ignore"):
        radius = np.sqrt(np.sum(r * r, axis=-1))
        rv = np.sum(r * v, axis=-1)
        finite = np.isfinite(radius) & np.isfinite(rv)
        beta = np.where(finite, 2.0 * gm / radius - np.sum(v * v, axis=-1), np.nan)
        h = np.cross(r, v)
        h_size = np.sqrt(np.sum(h * h, axis=-1))
        h_size = np.where(finite & (h_size > 0.0), h_size, np.nan)
        w = h / h_size[..., None]
        p = h_size**2 / gm
        ecos = p / radius - 1.0
        esin = np.sqrt(p / gm) * rv / radius
        e = np.hypot(ecos, esin)
        circular = e < TINY
        parabola = np.abs(p * beta / gm) < TINY
        e = np.where(circular, 0.0, np.where(parabola, 1.0, e))
        beta = np.where(parabola, 0.0, beta)
        q = p / (1.0 + e)
        a = np.where(parabola, np.inf, gm / beta)

        sin_i = np.hypot(w[..., 0], w[..., 1])
        equatorial = sin_i < TINY
        inclination = np.where(equatorial, np.where(w[..., 2] > 0.0, 0.0, np.pi), np.arctan2(sin_i, w[..., 2]))
        inclination = np.where(np.isnan(h_size), np.nan, inclination)
        node_x = np.where(equatorial, 1.0, -w[..., 1] / sin_i)
        node_y = np.where(equatorial, 0.0, w[..., 0] / sin_i)
        node = np.where(equatorial, 0.0, np.arctan2(node_y, node_x) % _TURN)
        # Argument of latitude: angle from the node n to r in the direction of motion, with w x n as
        # second axis.
        along = node_x * r[..., 0] + node_y * r[..., 1]
        across = (
            -w[..., 2] * node_y * r[..., 0]
            + w[..., 2] * node_x * r[..., 1]
            + (w[..., 0] * node_y - w[..., 1] * node_x) * r[..., 2]
        )
        latitude = np.arctan2(across, along)
        nu = np.where(circular, latitude, np.arctan2(esin, ecos))
        argp = np.where(circular, 0.0, (latitude - nu) % _TURN)
        since = _time_from_periapsis(nu, e, beta, q, gm)
        period = np.where(beta > 0.0, _TURN * gm / np.abs(beta) ** 1.5, np.nan)
        motion = np.where(parabola, np.sqrt(gm / (2.0 * q**3)), np.abs(beta) ** 1.5 / gm)
        mean = motion * since
        mean = np.where(beta > 0.0, mean % _TURN, mean)
        out = (p, a, e, inclination, node, argp, nu % _TURN, mean, q, period, -since)
    return ElementsRad(*(np.asarray(x)[()] for x in out))


def state_from_elements(
    p_km: ArrayLike,
    e: ArrayLike,
    i_rad: ArrayLike,
    node_rad: ArrayLike,
    argp_rad: ArrayLike,
    nu_rad: ArrayLike,
    gm_km3_s2: ArrayLike,
) -> tuple[Array, Array]:
    """State of classical elements; the semi-latus rectum keeps parabolas regular.

    Parameters
    ----------
    p_km : array_like
        Semi-latus rectum, a (1 - e^2) or q (1 + e).
    e, i_rad, node_rad, argp_rad, nu_rad : array_like
        Eccentricity, inclination, node, argument of periapsis, true anomaly; shapes are broadcast.
    gm_km3_s2 : array_like

    Returns
    -------
    r_km, v_km_s : ndarray, shape (..., 3)
        NaN beyond the asymptote of a hyperbola.
    """
    p, e_, i, node, argp, nu, gm = np.broadcast_arrays(
        *(np.asarray(x, dtype=float) for x in (p_km, e, i_rad, node_rad, argp_rad, nu_rad, gm_km3_s2))
    )
    with np.errstate(all="ignore"):
        cn, sn, ci, si = np.cos(node), np.sin(node), np.cos(i), np.sin(i)
        cw, sw = np.cos(argp), np.sin(argp)
        first = np.stack((cn * cw - sn * sw * ci, sn * cw + cn * sw * ci, sw * si), axis=-1)
        second = np.stack((-cn * sw - sn * cw * ci, -sn * sw + cn * cw * ci, cw * si), axis=-1)
        radius = p / (1.0 + e_ * np.cos(nu))
        radius = np.where(radius > 0.0, radius, np.nan)
        r = (radius * np.cos(nu))[..., None] * first + (radius * np.sin(nu))[..., None] * second
        speed = np.sqrt(gm / p)
        v = (-speed * np.sin(nu))[..., None] * first + (speed * (e_ + np.cos(nu)))[..., None] * second
    return r, v
