"""The curve of an orbit in space, for drawing: no time in it."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.twobody.kepler import Array


def orbit_curve(
    r_km: ArrayLike, v_km_s: ArrayLike, gm_km3_s2: float, *, points: int = 181, farthest_km: float = np.inf
) -> Array:
    """Points along the conic through one state.

    Parameters
    ----------
    r_km, v_km_s : array_like, shape (3,)
    gm_km3_s2 : float
    points : int
    farthest_km : float
        Open orbits, and ellipses that reach farther, are cut at this distance from the centre.

    Returns
    -------
    ndarray, shape (points, 3)
        km, same axes as the state: closed for a whole ellipse; empty (0, 3) for rectilinear motion or NaN input.

    References
    ----------
    Conic in polar form, r = p / (1 + e cos nu); Battin 1999, section 3.3 (recalled).

    Examples
    --------
    >>> curve = orbit_curve([7000.0, 0.0, 0.0], [0.0, 7.546, 0.0], 398600.4415)
    >>> curve.shape
    (181, 3)
    """
    r = np.asarray(r_km, dtype=float)
    v = np.asarray(v_km_s, dtype=float)
    h = np.cross(r, v)
    p = h @ h / gm_km3_s2
    if not (np.isfinite(p) and p > 0.0):
        return np.empty((0, 3))
    size = np.sqrt(r @ r)
    eccentricity = np.cross(v, h) / gm_km3_s2 - r / size
    e = np.sqrt(eccentricity @ eccentricity)
    first = eccentricity / e if e > 1e-9 else r / size
    second = np.cross(h / np.sqrt(h @ h), first)
    # equal steps of the eccentric anomaly give smooth ends; a cut curve takes equal steps of the true anomaly
    reach = p / (1.0 - e) if e < 1.0 else np.inf
    if reach <= farthest_km:
        anomaly = np.linspace(-np.pi, np.pi, points)
        a = p / (1.0 - e * e)
        x, y = a * (np.cos(anomaly) - e), a * np.sqrt(1.0 - e * e) * np.sin(anomaly)
    else:
        farthest = min(float(farthest_km), 1e6 * float(p))
        edge = np.arccos(np.clip((p / farthest - 1.0) / e, -1.0, 1.0))
        nu = np.linspace(-edge, edge, points)
        distance = p / (1.0 + e * np.cos(nu))
        x, y = distance * np.cos(nu), distance * np.sin(nu)
    return np.asarray(x[:, None] * first + y[:, None] * second)
