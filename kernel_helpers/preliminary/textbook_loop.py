"""The textbook's iterative improvement of Gauss's method, for the record.

Each pass takes f and g from the universal variable of the present orbit, forms new slant ranges and a new
middle velocity. Replaced outright the loop overshoots and diverges for most satellites beyond low orbit;
averaging old and new coefficients converges in some 25 to 55 passes. :mod:`firstarc.preliminary.refine`
needs neither; the loop serves the convergence view and as a last resort.

Source: Curtis, *Orbital Mechanics for Engineering Students*, algorithm 5.6.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.preliminary.gauss import RangePolynomial, ranges_of_weights
from firstarc.preliminary.lines_of_sight import Array, Lines, dot, norm
from firstarc.twobody.kepler import lagrange, solve_universal


class LoopPasses(NamedTuple):
    """Passes of the loop: ranges (k, 3, m) km, largest relative change (k, m), final velocity (3, m) km/s."""

    range_km: Array
    change: Array
    v2_km_s: Array


def _outer_coefficients(lines: Lines, range_km: Array, r2: Array, v2: Array) -> tuple[Array, Array]:
    dt = lines.t_s[::2] - (range_km[::2] - range_km[1]) * lines.per_c
    radius = norm(r2)
    beta = 2.0 * lines.gm_km3_s2 / radius - dot(v2, v2)
    r0, eta, beta = (np.broadcast_to(k, dt.shape) for k in (radius, dot(r2, v2), beta))
    gm = np.full(dt.shape, lines.gm_km3_s2)
    f, g, _, _ = lagrange(solve_universal(r0, eta, beta, dt, gm), r0, dt, gm)
    return f, g


def gauss_gibbs_loop(
    lines: Lines, poly: RangePolynomial, range_km: Array, v2_km_s: Array, passes: int, averaged: bool
) -> LoopPasses:
    """Run the loop a fixed number of passes; lanes that diverge turn NaN and stay so.

    Parameters
    ----------
    lines, poly
        Geometry of each lane, see :func:`firstarc.preliminary.gauss.range_polynomial`.
    range_km : ndarray, shape (3, m)
        Starting slant ranges.
    v2_km_s : ndarray, shape (3, m)
        Starting middle velocity.
    passes : int
    averaged : bool
        Average old and new f and g (True) or replace them outright (False).

    Returns
    -------
    LoopPasses
        ``range_km[0]`` is the start.
    """
    with np.errstate(all="ignore"):
        ranges, v2 = np.array(range_km, dtype=float), np.array(v2_km_s, dtype=float)
        kept, changes = [ranges], [np.full(ranges.shape[1], np.nan)]
        previous: tuple[Array, Array] | None = None
        for _ in range(passes):
            r2 = lines.observer_km[1] + ranges[1] * lines.effective[1]
            f, g = _outer_coefficients(lines, ranges, r2, v2)
            if averaged and previous is not None:
                f, g = 0.5 * (f + previous[0]), 0.5 * (g + previous[1])
            previous = f, g
            wedge = f[0] * g[1] - f[1] * g[0]
            new = ranges_of_weights(lines, poly, g[1] / wedge, -g[0] / wedge)
            outer = lines.observer_km[::2] + new[::2, None, :] * lines.effective[::2]
            v2 = (f[0] * outer[1] - f[1] * outer[0]) / wedge
            changes.append(np.max(np.abs(new - ranges) / np.abs(new), axis=0))
            ranges = new
            kept.append(ranges)
        return LoopPasses(np.stack(kept), np.stack(changes), v2)
