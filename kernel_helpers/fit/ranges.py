"""Ranges and range rates of an orbit, one way or half of the way up and down, with partials.

Clocks of tracking stations keep the time of their own planet, so the light path is taken at rest with the
centre:  rho = \\|r(t - rho/c) - R(t)\\|, and up from  R(t - (rho + rho_up)/c).  What the centre's own motion
would add is of second order in its speed over c: 1e-8 of the range about the Earth.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.constants import C_KM_S
from firstarc.fit.measurements import Measurements
from firstarc.fit.motion import Array

#: Passes for the light path; each gains the speed over c, four digits or more.
_PASSES = 3


class RangeRows(NamedTuple):
    """Computed ranges (n,) and rates with their partials (n, j) and change per second of reception time (n,).

    The rate is None without the observer's velocity; its partials are then zero.
    """

    range_km: Array
    rate_km_s: Array | None
    range_by_x: Array
    rate_by_x: Array
    range_per_second: Array
    rate_per_second: Array


def _length(vectors: Array) -> Array:
    return np.asarray(np.sqrt(np.sum(vectors * vectors, axis=1)))


def range_rows(
    line_km: Array,
    light_path_km: Array,
    velocity_km_s: Array,
    pull_km_s2: Array,
    measurements: Measurements,
    dq: Array,
    dv: Array | None,
    relative_km_s: Array | None,
) -> RangeRows:
    """Ranges and rates of a known emission.

    Parameters
    ----------
    line_km : ndarray, shape (n, 3)
        Object at emission minus observer at reception, for a light path ``light_path_km`` (n,) that may hold
        the centre's motion; the emission is shifted to that of the path at rest with the centre.
    velocity_km_s, pull_km_s2 : ndarray, shape (n, 3)
        Velocity and acceleration of the object at emission.
    measurements : Measurements
        Light time or not, one way or two, the observer's velocity.
    dq, dv : ndarray, shape (n, 3, j)
        Displacements of the object (minus those of the observer) and of its velocity at fixed emission time.
    relative_km_s : ndarray, shape (n, 3), or None
        Velocity of the object minus that of the observer.

    Returns
    -------
    RangeRows
        Partials are those of the way down; for the way up and down they are good to the observer's speed
        over c (2e-6 on the Earth), as far as the fit needs them.
    """
    per_c = 1.0 / C_KM_S if measurements.light_time else 0.0
    line, rho = line_km, _length(line_km)
    if measurements.light_time:
        for _ in range(_PASSES):
            line = line_km - velocity_km_s * ((rho - light_path_km) * per_c)[:, None]
            rho = _length(line)
    los = line / rho[:, None]
    w = velocity_km_s * per_c
    facing = 1.0 + np.sum(los * w, axis=1)
    along = los / facing[:, None]
    range_by_x = (along[:, None] @ dq)[:, 0]
    nothing = np.zeros_like(rho)
    if relative_km_s is None or dv is None:
        return RangeRows(rho, None, range_by_x, np.zeros_like(range_by_x), nothing, nothing)
    rate = np.sum(along * relative_km_s, axis=1)

    def of_rate(shift: Array, speed: Array) -> Array:
        """Partials (n, j) of the range rate by displacements (n, 3, j)."""
        d_rho = (along[:, None] @ shift)[:, 0]
        d_line = shift - w[:, :, None] * d_rho[:, None]
        d_los = (d_line - los[:, :, None] * (los[:, None] @ d_line)) / rho[:, None, None]
        d_v = speed - pull_km_s2[:, :, None] * (d_rho * per_c)[:, None]
        above = (relative_km_s[:, None] @ d_los + los[:, None] @ d_v)[:, 0]
        below = (w[:, None] @ d_los + per_c * (los[:, None] @ d_v))[:, 0]
        return np.asarray((above - rate[:, None] * below) / facing[:, None])

    rate_by_x = of_rate(dq, dv)
    per_second = rate
    rate_per_second = of_rate(relative_km_s[:, :, None], pull_km_s2[:, :, None])[:, 0]
    if measurements.two_way and measurements.light_time:
        rho, rate = _with_the_way_up(line, rho, rate, relative_km_s, measurements)
    return RangeRows(rho, rate, range_by_x, rate_by_x, per_second, rate_per_second)


def _with_the_way_up(
    line: Array, rho: Array, rate: Array, relative_km_s: Array, measurements: Measurements
) -> tuple[Array, Array]:
    """Half of range and rate over both ways; the station stood elsewhere when it sent the signal."""
    own = measurements.observer_velocity_km_s
    assert own is not None
    up, up_rho = line, rho
    for _ in range(_PASSES):
        up = line + own * ((rho + up_rho) / C_KM_S)[:, None]
        up_rho = _length(up)
    up_los = up / up_rho[:, None]
    up_rate = np.sum(up_los * relative_km_s, axis=1) * (1.0 - rate / C_KM_S)
    up_rate = up_rate / (1.0 - np.sum(up_los * own, axis=1) / C_KM_S)
    return 0.5 * (rho + up_rho), 0.5 * (rate + up_rate)
