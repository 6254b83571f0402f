"""Direction and rates of a short arc: what the observations fix before the range is known.

The directions are mapped to the tangent plane (gnomonic) at the middle observation and fitted by a polynomial of
the first degree (two observations) or the second (three or more), weighted by their sigmas. Direction and rate at
that observation are the attributable of Milani, Gronchi, de' Michieli Vitturi and Knezevic 2004, Celest. Mech.
Dyn. Astron. 90, 57. With slant range and range rate chosen it becomes an orbit:

    r(t - rho/c) = R + rho L',        v (1 - rho'/c) = V + rho' L' + rho dL/dt.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.dynamics.light_time import tangent_axes
from firstarc.preliminary.line_set import LineSet, observer_velocity
from firstarc.preliminary.lines_of_sight import Array


class Attributable(NamedTuple):
    """Direction and rates at one reception time.

    ``unit`` (3,), ``rate_rad_s`` (3,) across it, ``axes`` (2, 3) east and north, ``covariance`` (4, 4) of
    (east, north, east rate, north rate) in rad and rad/s, ``curvature_rad_s2`` (2,) (NaN for two observations),
    ``chi2`` and ``dof`` of the fit, ``t_s``, and the observer then: ``observer_km``, ``velocity_km_s``,
    ``effective`` L'.
    """

    unit: Array
    rate_rad_s: Array
    axes: Array
    covariance: Array
    curvature_rad_s2: Array
    chi2: float
    dof: int
    t_s: float
    observer_km: Array
    velocity_km_s: Array
    effective: Array
    per_c: float


def attributable(lines: LineSet, most: int = 2) -> Attributable | None:
    """Attributable at the middle observation; None where the directions spread over a right angle or more.

    Parameters
    ----------
    lines : LineSet
        Two lines or more, without a problem.
    most : int
        Highest degree of the polynomial; never more than the observations allow.

    Returns
    -------
    Attributable or None
    """
    at = lines.middle
    origin = lines.unit[at]
    axes = np.stack([axis[0] for axis in tangent_axes(origin[None])])
    along = lines.unit @ origin
    if not (along > 1e-3).all():
        return None
    plane = (lines.unit @ axes.T) / along[:, None]
    t = lines.t_s - lines.t_s[at]
    span = float(t[-1] - t[0])
    degree = min(most, len(t) - 1)
    design = (t[:, None] / span) ** np.arange(degree + 1)
    sigma = lines.weights_sigma
    values, covariance, chi2 = np.zeros((max(degree, 2) + 1, 2)), np.zeros((4, 4)), 0.0
    values[2:] = np.nan
    for axis in (0, 1):
        weighted = design / sigma[:, axis : axis + 1]
        q, upper = np.linalg.qr(weighted)
        found = np.linalg.solve(upper, q.T @ (plane[:, axis] / sigma[:, axis]))
        inverse = np.linalg.inv(upper)
        noise = inverse @ inverse.T
        values[: degree + 1, axis] = found / span ** np.arange(degree + 1)
        two = np.ix_((axis, axis + 2), (axis, axis + 2))
        covariance[two] = noise[:2, :2] / np.outer((1.0, span), (1.0, span))
        chi2 += float(np.sum((plane[:, axis] / sigma[:, axis] - weighted @ found) ** 2))
    direction = origin + values[0] @ axes
    size = np.sqrt(direction @ direction)
    unit = direction / size
    # The rate of a point of the tangent plane is not quite across the fitted direction.
    rate = (values[1] @ axes) / size
    rate = rate - (rate @ unit) * unit
    across = np.stack([axis[0] for axis in tangent_axes(unit[None])])
    moving = lines.moving_km_s[at] * lines.per_c
    return Attributable(
        unit, rate, across, covariance, 2.0 * values[2], chi2, 2 * (len(t) - degree - 1), float(lines.t_s[at]),
        lines.observer_km[at], observer_velocity(lines, at), unit + moving, lines.per_c,
    )  # fmt: skip


def states_of(one: Attributable, range_km: Array, range_rate_km_s: Array) -> tuple[Array, Array]:
    """States (m, 6) at emission, and their emission times (m,), for slant ranges and range rates (m,)."""
    r = one.observer_km + range_km[:, None] * one.effective
    v = one.velocity_km_s + range_rate_km_s[:, None] * one.effective + range_km[:, None] * one.rate_rad_s
    v = v / (1.0 - range_rate_km_s * one.per_c)[:, None]
    return np.concatenate((r, v), axis=1), one.t_s - range_km * one.per_c
