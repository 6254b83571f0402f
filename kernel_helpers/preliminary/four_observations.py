"""Orbits from four lines of sight; works where they are coplanar and three lines say nothing.

Gauss' method for four observations (*Theoria Motus* 1809, book II, section 2, the orbit from four observations of
which two only are complete; recalled). With positions 1, 2, 3, 4 in one plane

    r2 = c1 r1 + c3 r3,        r3 = d2 r2 + d4 r4,

and to the first order in gm (Encke's form of the ratios of the triangles, here by distances r2 and r3)

    c1 = t23/t13 (1 + gm (t13^2 - t23^2) / (6 r2^3)),    c3 = t12/t13 (1 + gm (t13^2 - t12^2) / (6 r2^3)),

d2 and d4 likewise from times 2, 3, 4 and r3. The component of the first equation along N x L1 is free of the first
slant range, that of the second along N x L4 of the fourth (N: normal of the plane nearest to the lines). For given
c, d that leaves two linear equations in rho2 and rho3; c and d depend on them, so every solution is sought on a
grid: a sign change of both equations around a cell, or a least of their size, starts Newton's iteration. No
determinant of three directions is divided by: nothing is lost when all lines and the observers lie in one plane.

The orbit of each solution, its velocity by Herrick-Gibbs, then starts a fit to all eight angles
(:mod:`firstarc.preliminary.family_fit`): eight equations for six numbers, so the result is a least-squares orbit.
For lines in one plane four angles fix the motion in that plane and four the two numbers of the tilt. A scan of
range and range rate along the arc's own direction and rates adds starts where the series is too short.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.admissible_region import raster, usual_limits
from firstarc.preliminary.attributable import attributable
from firstarc.preliminary.family_fit import Coordinates, Family, Fitted, covariance, distinct, fit_lines, weighted
from firstarc.preliminary.herrick_gibbs import herrick_gibbs_velocity
from firstarc.preliminary.line_set import (
    LineSet,
    judged,
    line_set,
    misses,
    problem_sentence,
    range_sigma,
    rejected,
)
from firstarc.preliminary.lines_of_sight import Array
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S
from firstarc.results import Status
from firstarc.twobody.kepler import propagate

METHOD = "four observations"
#: Grid of each middle slant range, in units of the observer's distance from the centre; Newton's passes.
NODES, LEAST, MOST, PASSES = 90, 3e-3, 60.0, 25
#: Starts of the fit taken from the equations and from the scan of range and range rate, at most.
STARTS, SCANNED = 12, 24
#: Shape of that scan.
SCAN = (48, 24)
#: Fits whose chi-square per degree of freedom lies this far above the best's are no solutions of the same lines.
POOR = 1e3


def solve(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    rows: tuple[int, int, int, int] | None = None,
) -> tuple[MethodOrbit, ...]:
    """Orbits from four observations, least-squares fits of their eight angles.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions, ICRF axes, in any order of time; k four or more.
    observer_km : array_like, shape (k, 3)
    t_s : array_like, shape (k,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    center_velocity_km_s : array_like, shape (k, 3), optional
    light_time : bool
    sigma_rad : array_like, shape (k, 2), optional
        Without them all angles weigh the same and there is no covariance.
    body_radius_km : float
        0 for no surface check.
    rows : four int, optional
        Which observations; default the first, the last and the two nearest to the thirds of the arc between.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first, by their residuals, then the rejected ones. Status CONVERGED, NOT_CONVERGED,
        OWN_ORBIT, BELOW_SURFACE, TOO_FAST, NO_POSITIVE_ROOT (the equations and the scan give no start) or
        BAD_INPUT.

    Raises
    ------
    UsageError
        Shapes that do not fit, fewer than four observations, rows that are not four of them.
    """
    lines = line_set(los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, light_time, sigma_rad, 4)
    with np.errstate(all="ignore"):
        lines = lines.take(_four(lines, rows))
    if lines.problem is not None:
        return (rejected(METHOD, "", lines, lines.problem, problem_sentence(lines.problem)),)
    with np.errstate(all="ignore"):
        own = _estimates(lines)
        scanned = _scanned(lines)
        starts = np.concatenate((own, scanned))
        if not len(starts):
            text = "No pair of positive slant ranges fulfils the equations of the four lines."
            return (rejected(METHOD, "", lines, Outcome.NO_POSITIVE_ROOT, text),)
        t_state = float(lines.t_s[lines.middle])
        family = Family(lines)
        fitted = fit_lines(lines, starts, t_state, family)
        kept = [k for k in distinct(fitted) if (fitted.range_km[k] > 0.0).all()]
        if not kept:
            text = f"No fit to the four lines settled from any of {len(starts)} starts."
            return (rejected(METHOD, "", lines, Outcome.NOT_CONVERGED, text),)
        best = float(fitted.chi2[kept[0]])
        found = []
        for k in kept:
            reached = np.abs(fitted.range_km[: len(own)] / fitted.range_km[k] - 1.0).max(axis=1, initial=0.0) < 1e-5
            start = own[int(np.argmax(reached))] if reached.any() else None
            found.append(_orbit(lines, fitted, k, start, family, body_radius_km, best))
    return tuple(sorted(found, key=lambda one: int(one.outcome)))


def _four(lines: LineSet, rows: tuple[int, int, int, int] | None) -> list[int]:
    """Indices into the time-ordered set."""
    count = len(lines.rows)
    if rows is None:
        times = lines.t_s
        if count == 4 or not np.isfinite(times).all():
            return [0, 1, 2, 3]
        best, chosen = np.inf, (1, 2)
        thirds = times[0] + (times[-1] - times[0]) * np.array([1.0, 2.0]) / 3.0
        for pair in combinations(range(1, count - 1), 2):
            off = float(np.abs(times[list(pair)] - thirds).max())
            if off < best:
                best, chosen = off, pair
        return [0, *chosen, count - 1]
    try:
        wanted = [int(k) for k in rows]
    except (TypeError, ValueError):
        wanted = []
    if len(set(wanted)) != 4 or len(wanted) != 4 or not set(wanted) <= set(lines.rows):
        raise UsageError(f"rows is {rows!r}; expected four different rows from 0 to {count - 1}")
    return sorted(lines.rows.index(k) for k in wanted)


class _Equations:
    """The two equations in (rho2, rho3), vectorised over the last axis."""

    def __init__(self, lines: LineSet):
        self.lines, self.gm = lines, lines.gm_km3_s2
        effective, observer = lines.effective, lines.observer_km
        # Normal of the plane nearest to the four directions.
        normal = np.linalg.svd(lines.unit)[2][2]
        self.first, self.last = np.cross(normal, effective[0]), np.cross(normal, effective[3])
        self.unit_km = float(np.sqrt(observer[1] @ observer[1]))

    def times(self, rho: Array) -> Array:
        """Emission times (4, m); the outer ones with the light time of their neighbours."""
        return self.lines.t_s[:, None] - rho[[0, 0, 1, 1]] * self.lines.per_c

    def ratios(self, rho: Array) -> tuple[Array, Array, Array, Array]:
        """c1, c3, d2, d4 for slant ranges (2, m)."""
        t = self.times(rho)
        r = self.positions(rho)
        pull = self.gm / (6.0 * np.sum(r * r, axis=2) ** 1.5)
        t12, t23, t34 = t[1] - t[0], t[2] - t[1], t[3] - t[2]
        t13, t24 = t[2] - t[0], t[3] - t[1]
        return (
            t23 / t13 * (1.0 + pull[0] * (t13**2 - t23**2)),
            t12 / t13 * (1.0 + pull[0] * (t13**2 - t12**2)),
            t34 / t24 * (1.0 + pull[1] * (t24**2 - t34**2)),
            t23 / t24 * (1.0 + pull[1] * (t24**2 - t23**2)),
        )

    def positions(self, rho: Array) -> Array:
        """Middle positions (2, m, 3)."""
        observer, effective = self.lines.observer_km[1:3], self.lines.effective[1:3]
        result: Array = observer[:, None] + rho[:, :, None] * effective[:, None]
        return result

    def values(self, rho: Array) -> Array:
        """Both equations (2, m), in units of the observer's distance."""
        c1, c3, d2, d4 = self.ratios(rho)
        r2, r3 = self.positions(rho)
        observer = self.lines.observer_km
        one = (r2 - c3[:, None] * r3 - c1[:, None] * observer[0]) @ self.first
        two = (r3 - d2[:, None] * r2 - d4[:, None] * observer[3]) @ self.last
        return np.stack((one, two)) / self.unit_km

    def newton(self, rho: Array) -> Array:
        """Newton's iteration from starts (2, m), in the logarithm of the ranges; NaN where it fails."""
        rho = rho.copy()
        for _ in range(PASSES):
            value = self.values(rho)
            step = 1e-6
            by2 = (self.values(rho * np.array([[1.0 + step], [1.0]])) - value) / step
            by3 = (self.values(rho * np.array([[1.0], [1.0 + step]])) - value) / step
            det = by2[0] * by3[1] - by2[1] * by3[0]
            change = np.stack((by3[0] * value[1] - by3[1] * value[0], by2[1] * value[0] - by2[0] * value[1])) / det
            rho = rho * np.exp(np.clip(change, -0.5, 0.5))
        done = (np.abs(change) < 1e-5).all(axis=0)
        return np.where(done, rho, np.nan)


def _estimates(lines: LineSet) -> Array:
    """States (m, 6) at the middle reception time of all solutions of the equations."""
    equations = _Equations(lines)
    grid = np.geomspace(LEAST, MOST, NODES) * equations.unit_km
    pair = np.stack([part.reshape(-1) for part in np.meshgrid(grid, grid, indexing="ij")])
    value = equations.values(pair).reshape(2, NODES, NODES)
    corners = np.stack([value[:, i : NODES - 1 + i, k : NODES - 1 + k] for i in (0, 1) for k in (0, 1)])
    change = ((corners.min(axis=0) <= 0.0) & (corners.max(axis=0) >= 0.0)).all(axis=0)
    size = np.sum(value**2 / (np.abs(value) + 1e-12), axis=0)
    inner = size[1:-1, 1:-1]
    least = np.ones(inner.shape, dtype=bool)
    for i in (0, 1, 2):
        for k in (0, 1, 2):
            least &= inner <= size[i : NODES - 2 + i, k : NODES - 2 + k]
    at = np.concatenate((np.argwhere(change), np.argwhere(least) + 1))
    if not len(at):
        return np.empty((0, 6))
    # Both middle ranges of a short arc are nearly equal: try such cells first.
    at = at[np.argsort(np.abs(at[:, 0] - at[:, 1]), kind="stable")][:400]
    found = equations.newton(grid[at.T])
    found = found[:, np.isfinite(found).all(axis=0)]
    kept: list[Array] = []
    for one in found.T:
        if all(np.abs(one / other - 1.0).max() > 1e-4 for other in kept):
            kept.append(one)
    if not kept:
        return np.empty((0, 6))
    rho = np.stack(kept, axis=1)
    c1, c3, d2, d4 = equations.ratios(rho)
    r2, r3 = equations.positions(rho)
    # The outer ranges by projection on their lines.
    outer = []
    for line, place in ((0, (r2 - c3[:, None] * r3) / c1[:, None]), (3, (r3 - d2[:, None] * r2) / d4[:, None])):
        along = lines.effective[line]
        length = (place - lines.observer_km[line]) @ along / (along @ along)
        outer.append(lines.observer_km[line] + length[:, None] * along)
    t = equations.times(rho)
    states = []
    for places, at_times in (((r2, r3, outer[1]), t[1:]), ((outer[0], r2, r3), t[:3])):
        r = np.stack(places).transpose(0, 2, 1)
        v = herrick_gibbs_velocity(r, at_times, lines.gm_km3_s2)
        late = lines.t_s[lines.middle] - at_times[1]
        states.append(np.concatenate(propagate(r[1].T, v.T, late, lines.gm_km3_s2), axis=1))
    out = np.concatenate(states)
    chi2 = weighted(lines, out, float(lines.t_s[lines.middle]))[3]
    order = np.argsort(chi2, kind="stable")[:STARTS]
    return out[order[np.isfinite(chi2[order])]]


def _scanned(lines: LineSet) -> Array:
    """Starts from the scan of range and range rate, states (m, 6)."""
    one = attributable(lines, 3)
    if one is None:
        return np.empty((0, 6))
    # Open orbits too, up to the circular speed at the observer.
    speed = np.sqrt(lines.gm_km3_s2 / np.sqrt(one.observer_km @ one.observer_km))
    limits = replace(usual_limits(lines.gm_km3_s2), excess_limit_km_s=float(speed))
    whole = raster(one, lines.gm_km3_s2, limits, SCAN)
    if whole is None:
        return np.empty((0, 6))
    m = len(whole.range_km)
    unit, rate = np.broadcast_to(one.unit, (m, 3)), np.broadcast_to(one.rate_rad_s, (m, 3))
    states = Family(lines).state(Coordinates(unit, rate, whole.range_km, whole.range_rate_km_s))
    chi2 = weighted(lines, states, one.t_s)[3]
    # The best range rate of every range, so that no valley of the residuals is left without a start.
    starts = []
    for rho in np.unique(whole.range_km):
        row = np.flatnonzero(whole.range_km == rho)
        best = row[int(np.argmin(chi2[row]))]
        if np.isfinite(chi2[best]):
            starts.append(best)
    starts.sort(key=lambda k: float(chi2[k]))
    return states[starts[:SCANNED]]


def _orbit(
    lines: LineSet,
    fitted: Fitted,
    k: int,
    start: Array | None,
    family: Family,
    body_radius_km: float,
    best_chi2: float,
) -> MethodOrbit:
    """The result of one fit."""
    state, t_state = fitted.state[k].copy(), float(lines.t_s[lines.middle])
    seen = misses(lines, state, t_state)
    miss = np.hypot(seen.residual[:, 0], seen.residual[:, 1])
    outcome, text, remark = judged(state, seen, lines, body_radius_km, EXCESS_LIMIT_KM_S)
    worst = float(np.degrees(miss.max()) * 3600.0)
    chi2 = float(fitted.chi2[k])
    # Two angles are left over; a fit this bad is a valley of the residuals, not an orbit of these lines.
    if outcome == Outcome.CONVERGED and chi2 > POOR * max(best_chi2, 2.0):
        outcome, remark = Outcome.NOT_CONVERGED, ""
        text = f"The fit settles {worst:.3g} arcsec off the lines, far more than the best one."
    spread, sigma = None, float("nan")
    if outcome == Outcome.CONVERGED:
        source = "Gauss' equations for four observations" if start is not None else "a scan of range and range rate"
        text = f"Fitted to eight angles from {source}, largest miss {worst:.2g} arcsec."
    if outcome != Outcome.NOT_CONVERGED:
        spread = covariance(lines, state, t_state, family)
        sigma = float("nan") if spread is None else range_sigma(lines, state, seen, spread)
    rho = float(seen.range_km[lines.middle])
    if sigma > 0.3 * rho:
        weak = f"The lines hardly fix the slant range: {rho:.3g} km with a sigma of {sigma:.2g} km."
        remark = f"{remark} {weak}".strip()
    root = float(np.sqrt(np.sum(seen.positions_km[lines.middle] ** 2)))
    estimate = np.full(6, np.nan) if start is None else start.copy()
    return MethodOrbit(
        METHOD, "", lines.rows, outcome, Status(outcome.code, text), remark, root, estimate, state, t_state,
        seen.range_km, seen.positions_km, seen.emission_t_s, miss, spread, sigma, int(fitted.passes[k]),
    )  # fmt: skip
