"""Gibbs: the velocity at the middle one of three coplanar positions, exact for two-body motion.

With r1, r2, r3 positions and r their lengths,
N = r1 (r2 x r3) + r2 (r3 x r1) + r3 (r1 x r2),  D = r1 x r2 + r2 x r3 + r3 x r1,
S = r1 (r2 - r3) + r2 (r3 - r1) + r3 (r1 - r2),  v2 = sqrt(gm / (N . D)) (D x r2 / r2 + S).
Here they are formed from differences of the positions, which keeps the digits of short arcs.

Source: Bate, Mueller and White 1971, *Fundamentals of Astrodynamics*, section 2.5; Curtis, *Orbital
Mechanics for Engineering Students*, algorithm 5.1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.lines_of_sight import Array, cross, crosses, dot, norm, separations_rad
from firstarc.results import Code, Status

#: Largest angle of r1 out of the plane of r2 and r3 that still counts as coplanar (common practice: 2 to
#: 3 deg).
COPLANARITY_LIMIT_DEG = 3.0
#: Sine of a separation below which two positions count as collinear.
COLLINEAR_SINE = 1e-11


@dataclass(frozen=True)
class GibbsSolution:
    """Result of Gibbs' method; one lane per row, or plain vectors for a single triple.

    Parameters
    ----------
    v2_km_s : ndarray, shape (..., 3)
        NaN where no orbit exists.
    n_km3, d_km2, s_km2 : ndarray, shape (..., 3)
        The vectors N, D, S.
    coplanarity_deg : ndarray, shape (...)
        Signed angle of r1 out of the plane of r2 and r3.
    separations_deg : ndarray, shape (..., 3)
        Angles r1-r2, r2-r3, r1-r3.
    status : tuple of Status
        One per row.
    """

    v2_km_s: Array
    n_km3: Array
    d_km2: Array
    s_km2: Array
    coplanarity_deg: Array
    separations_deg: Array
    status: tuple[Status, ...]


def gibbs_vectors(r: Array) -> tuple[Array, Array, Array]:
    """N, D, S of component-first positions (3, 3, m)."""
    r1, r2, r3 = r
    back, ahead = r1 - r2, r3 - r2
    size = norm(r)
    # Differences of lengths without cancellation.
    s12 = dot(back, r1 + r2) / (size[0] + size[1])
    s32 = dot(ahead, r3 + r2) / (size[2] + size[1])
    d, by_ahead, by_back = crosses((ahead, r2, r2), (back, ahead, back))
    n = size[1] * d + s12 * by_ahead - s32 * by_back
    s = -back * s32 + ahead * s12
    return n, d, s


def gibbs_velocity(r: Array, gm: float) -> Array:
    """Velocity at the middle of component-first positions (3, 3, m); NaN where N . D is not positive."""
    with np.errstate(all="ignore"):
        n, d, s = gibbs_vectors(r)
        velocity: Array = np.sqrt(gm / dot(n, d)) * (cross(d, r[1]) / norm(r[1]) + s)
        return velocity


def coplanarity_rad(r: Array) -> Array:
    """Signed angle of r1 out of the plane of r2 and r3; component-first (3, 3, m)."""
    with np.errstate(all="ignore"):
        plane = cross(r[1], r[2])
        out: Array = np.arctan2(dot(r[0], plane), norm(cross(r[0], plane)))
        return out


def rows_to_lanes(r_km: ArrayLike) -> tuple[Array, bool]:
    """Positions (3, 3) or (m, 3, 3) as component-first lanes."""
    rows = np.asarray(r_km, dtype=float)
    if rows.ndim not in (2, 3) or rows.shape[-2:] != (3, 3):
        raise UsageError(f"r_km has shape {rows.shape}; expected (3, 3) or (m, 3, 3): three positions in km, one a row")
    single = rows.ndim == 2
    return np.ascontiguousarray(np.moveaxis(np.atleast_3d(rows[None] if single else rows), 0, -1)), single


def gibbs(r_km: ArrayLike, gm_km3_s2: float) -> GibbsSolution:
    """Velocity at the middle one of three positions by Gibbs' method.

    Parameters
    ----------
    r_km : array_like, shape (3, 3) or (m, 3, 3)
        Positions in time order, one a row, any inertial axes about the centre.
    gm_km3_s2 : float

    Returns
    -------
    GibbsSolution
        Status ESTIMATED, COLLINEAR, NOT_COPLANAR (the velocity is still given), SINGULAR or BAD_INPUT.

    Raises
    ------
    UsageError
        The positions are not three rows of three numbers.

    References
    ----------
    Bate, Mueller and White 1971, section 2.5.

    Examples
    --------
    >>> found = gibbs([[0, 0, 1.0], [0, -0.7, -0.8], [0, 0.9, 0.5]], 1.0)
    >>> [round(float(x), 3) for x in found.v2_km_s]
    [0.0, 0.7, -0.657]
    """
    r, single = rows_to_lanes(r_km)
    with np.errstate(all="ignore"):
        n, d, s = gibbs_vectors(r)
        v2 = gibbs_velocity(r, gm_km3_s2)
        out_of_plane = np.degrees(coplanarity_rad(r))
        parts = separations_rad(r)
        products = dot(n, d)
    status = tuple(
        gibbs_status(r[..., k], parts[:, k], float(out_of_plane[k]), float(products[k]), v2[:, k])
        for k in range(r.shape[-1])
    )
    usable = np.array([one.code in (Code.ESTIMATED, Code.NOT_COPLANAR) for one in status])
    v2 = np.where(usable, v2, np.nan)
    rows: list[Array] = [v2.T, n.T, d.T, s.T, out_of_plane, np.degrees(parts).T]
    if single:
        rows = [row[0] for row in rows]
    return GibbsSolution(rows[0], rows[1], rows[2], rows[3], rows[4], rows[5], status)


def gibbs_status(r: Array, separations: Array, out_of_plane_deg: float, n_dot_d: float, v2: Array) -> Status:
    """What Gibbs' method came to for one triple of positions (3, 3)."""
    if not np.isfinite(r).all():
        return Status(Code.BAD_INPUT, "A position is not finite.")
    if (np.abs(r).max(axis=1) == 0.0).any():
        return Status(Code.BAD_INPUT, "A position is zero.")
    if (np.abs(np.sin(separations[:2])) < COLLINEAR_SINE).any():
        return Status(Code.COLLINEAR, "Two neighbouring positions point the same or the opposite way: no plane.")
    if not n_dot_d > 0.0 or not np.isfinite(v2).all():
        return Status(Code.SINGULAR, "N and D are opposed or vanish: no conic about the centre joins these positions.")
    if abs(out_of_plane_deg) > COPLANARITY_LIMIT_DEG:
        return Status(
            Code.NOT_COPLANAR,
            f"The first position stands {abs(out_of_plane_deg):.1f} deg out of the plane of the other two "
            f"(limit {COPLANARITY_LIMIT_DEG:g} deg).",
        )
    return Status(Code.ESTIMATED, "Gibbs velocity found.")
