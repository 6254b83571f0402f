"""Herrick-Gibbs: the velocity at the middle one of three close positions with their times.

A Taylor series of the motion about the middle position, two-body accelerations included, to fourth order.
Source: S. Herrick 1971, *Astrodynamics* I; Vallado 2013, algorithm 55 (recalled).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.gibbs import rows_to_lanes
from firstarc.preliminary.lines_of_sight import Array, norm
from firstarc.results import Code, Status


class HerrickGibbsSolution(NamedTuple):
    """Velocity (km/s) at the middle position, shape (..., 3), and one status per row."""

    v2_km_s: Array
    status: tuple[Status, ...]


def herrick_gibbs_velocity(r: Array, t: Array, gm: float) -> Array:
    """Velocity at the middle of component-first positions (3, 3, m) at times (3, m)."""
    with np.errstate(all="ignore"):
        first, last, whole = t[1] - t[0], t[2] - t[1], t[2] - t[0]
        size = norm(r)
        pull = gm / (12.0 * size * size * size)
        # The 1/dt terms as differences from the middle position: no cancellation.
        secant = (r[2] - r[1]) * (first / (last * whole)) - (r[0] - r[1]) * (last / (first * whole))
        velocity: Array = secant + (
            r[2] * (first * pull[2]) - r[0] * (last * pull[0]) + r[1] * ((last - first) * pull[1])
        )
        return velocity


def herrick_gibbs(r_km: ArrayLike, t_s: ArrayLike, gm_km3_s2: float) -> HerrickGibbsSolution:
    """Velocity at the middle one of three timed positions by the Herrick-Gibbs method.

    Parameters
    ----------
    r_km : array_like, shape (3, 3) or (m, 3, 3)
        Positions in time order.
    t_s : array_like, shape (3,) or (m, 3)
        Their times, seconds.
    gm_km3_s2 : float

    Returns
    -------
    HerrickGibbsSolution
        Status ESTIMATED or BAD_INPUT (not finite, zero, times equal or out of order).

    Raises
    ------
    UsageError
        The shapes do not fit.

    Examples
    --------
    >>> r = [[7000.0, -450.0, 0.0], [7014.4, 0.0, 0.0], [7000.0, 450.0, 0.0]]
    >>> [round(float(x), 4) for x in herrick_gibbs(r, [0.0, 60.0, 120.0], 398600.0).v2_km_s]
    [0.0, 7.5052, 0.0]
    """
    r, single = rows_to_lanes(r_km)
    times = np.asarray(t_s, dtype=float)
    if times.shape != ((3,) if single else (r.shape[-1], 3)):
        raise UsageError(f"t_s has shape {times.shape}; expected one time per position")
    t = np.atleast_2d(times).T
    v2 = herrick_gibbs_velocity(r, t, gm_km3_s2)
    status = []
    for k in range(r.shape[-1]):
        if not (np.isfinite(r[..., k]).all() and np.isfinite(t[:, k]).all()):
            status.append(Status(Code.BAD_INPUT, "A position or a time is not finite."))
        elif not (np.diff(t[:, k]) > 0.0).all():
            status.append(Status(Code.BAD_INPUT, "The times do not increase from the first position to the third."))
        elif not np.isfinite(v2[:, k]).all():
            status.append(Status(Code.BAD_INPUT, "A position is zero."))
        else:
            status.append(Status(Code.ESTIMATED, "Herrick-Gibbs velocity found."))
    usable = np.array([one.ok for one in status])
    rows = np.where(usable, v2, np.nan).T
    return HerrickGibbsSolution(rows[0] if single else rows, tuple(status))
