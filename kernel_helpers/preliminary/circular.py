"""Circular orbits through two lines of sight, all of them.

On a circle of radius a both positions R_i + rho_i L'_i have length a, and the angle between them is run through
at the rate n = sqrt(gm / a^3). The first slant range parametrises every circle: it gives a, the second line meets
the sphere of radius a in up to two points, and

    F = n (t2 - t1 - (rho2 - rho1)/c) - Theta = 0,     Theta = theta + 2 pi k  or  2 pi (k + 1) - theta

(theta the angle between the positions; the second form is the other sense of motion, the long way round) is
scanned over a grid of rho1 that includes the ranges at which the two points on the second line run together.
Sign changes are bisected; a minimum of |F| without one is searched for a pair of roots hidden between two nodes.

The circular orbit of two places: Gauss 1809, *Theoria Motus*; Escobal 1965, *Methods of Orbit Determination*;
Dubyago 1961, *The Determination of Orbits* (all recalled). The parametrisation by rho1 and the search are ours.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.family_fit import Family
from firstarc.preliminary.family_fit import covariance as family_covariance
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
from firstarc.preliminary.refine import MISS_LIMIT_RAD
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S
from firstarc.results import Status
from firstarc.twobody.kepler import propagate

METHOD = "circular"
#: Scan of the first slant range: nodes, and limits in units of the observer's distance from the centre.
NODES, LEAST, MOST = 3000, 1e-5, 300.0
#: Passes of the bisection: from a grid step to rounding.
BISECTIONS = 60


class _Trial(NamedTuple):
    """Circles of given first slant ranges on one branch: F and what leads to it."""

    f: Array
    rho2: Array
    r1: Array
    r2: Array
    a: Array


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
    pair: tuple[int, int] | None = None,
    max_revolutions: int = 0,
    long_way: bool = False,
) -> tuple[MethodOrbit, ...]:
    """Every circular orbit through two lines of sight.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions, ICRF axes, in any order of time; k two or more.
    observer_km : array_like, shape (k, 3)
    t_s : array_like, shape (k,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    center_velocity_km_s : array_like, shape (k, 3), optional
    light_time : bool
    sigma_rad : array_like, shape (k, 2), optional
    body_radius_km : float
        0 for no surface check.
    pair : (int, int), optional
        Which two observations; default the first and the last in time.
    max_revolutions : int
        Whole revolutions between the two observations to be tried, 0 to this number.
    long_way : bool
        Try the sense of motion in which more than half a revolution lies between the positions too; always tried
        with ``max_revolutions`` above 0.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first, by ascending radius, then the rejected ones. Status CONVERGED, OWN_ORBIT,
        BELOW_SURFACE, NOT_CONVERGED, NO_POSITIVE_ROOT (no circle passes through both lines) or BAD_INPUT. The
        covariance is that of the angles under the assumption: its rank is 4.

    Raises
    ------
    UsageError
        Shapes that do not fit, fewer than two observations, a pair that is none.
    """
    lines = line_set(los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, light_time, sigma_rad, 2)
    if max_revolutions < 0:
        raise UsageError(f"max_revolutions is {max_revolutions}; expected 0 or more")
    lines = lines.take(_pair(lines, pair))
    assumption = "circular orbit"
    if lines.problem is not None:
        return (rejected(METHOD, assumption, lines, lines.problem, problem_sentence(lines.problem)),)
    with np.errstate(all="ignore"):
        found = []
        turns = [(0, False)]
        if long_way or max_revolutions:
            turns.append((0, True))
        turns += [(k, long) for k in range(1, max_revolutions + 1) for long in (False, True)]
        rho1 = _grid(lines)
        nearest = np.inf, 0.0
        for branch in (1.0, -1.0):
            for whole, long in turns:
                roots, closest = _roots(lines, rho1, branch, whole, long)
                nearest = min(nearest, closest)
                found += [_orbit(lines, root, branch, whole, long, body_radius_km) for root in roots]
    if not found:
        text = "No circular orbit passes through both lines of sight"
        if np.isfinite(nearest[0]):
            text += f": nearest at radius {nearest[1]:.4g} km, {np.degrees(nearest[0]):.2g} deg off along the circle"
        return (rejected(METHOD, assumption, lines, Outcome.NO_POSITIVE_ROOT, text + "."),)
    return tuple(sorted(found, key=lambda one: (int(one.outcome), one.root_km)))


def _pair(lines: LineSet, pair: tuple[int, int] | None) -> list[int]:
    """Indices into the time-ordered set."""
    if pair is None:
        return [0, len(lines.rows) - 1]
    try:
        first, second = (int(k) for k in pair)
    except (TypeError, ValueError):
        raise UsageError(f"pair is {pair!r}; expected two row numbers") from None
    if first == second or not {first, second} <= set(lines.rows):
        raise UsageError(f"pair is {pair!r}; expected two different rows from 0 to {len(lines.rows) - 1}")
    return sorted((lines.rows.index(first), lines.rows.index(second)))


def _trial(lines: LineSet, rho1: Array, branch: float, whole: int, long: bool) -> _Trial:
    """F for first slant ranges (m,)."""
    l1, l2 = lines.effective
    o1, o2 = lines.observer_km
    r1 = o1 + rho1[:, None] * l1
    square = np.sum(r1 * r1, axis=1)
    # |o2 + rho2 l2|^2 = a^2; l2 is not quite a unit vector with light time.
    ll, lo = l2 @ l2, l2 @ o2
    under = lo * lo - ll * (o2 @ o2 - square)
    # Rounding where both points run together.
    under = np.where(np.abs(under) < 1e-13 * (lo * lo + ll * (o2 @ o2)), 0.0, under)
    root = np.sqrt(under)
    # The form without cancellation.
    plus = np.where(lo > 0.0, (square - o2 @ o2) / (lo + root), (root - lo) / ll)
    minus = np.where(lo > 0.0, -(lo + root) / ll, (o2 @ o2 - square) / (root - lo))
    rho2 = plus if branch > 0.0 else minus
    rho2 = np.where(rho2 > 0.0, rho2, np.nan)
    r2 = o2 + rho2[:, None] * l2
    a = np.sqrt(square)
    normal = np.cross(r1, r2)
    theta = np.arctan2(np.sqrt(np.sum(normal * normal, axis=1)), np.sum(r1 * r2, axis=1))
    total = 2.0 * np.pi * (whole + 1) - theta if long else theta + 2.0 * np.pi * whole
    dt = lines.t_s[1] - lines.t_s[0] - (rho2 - rho1) * lines.per_c
    return _Trial(np.sqrt(lines.gm_km3_s2 / (square * a)) * dt - total, rho2, r1, r2, a)


def _grid(lines: LineSet) -> Array:
    """Slant ranges of the scan, km, the ends of the branches among them."""
    l1, l2 = lines.effective
    o1, o2 = lines.observer_km
    far = np.sqrt(o1 @ o1)
    nodes = [np.geomspace(LEAST, MOST, NODES) * far]
    # Nearest point of line 1 to the centre: a is least there, and grows in rho1 beyond.
    nodes.append(np.atleast_1d(-(l1 @ o1) / (l1 @ l1)))
    # Where a is the distance of line 2 from the centre (both points together), or of its observer (rho2 = 0).
    for square in (o2 @ o2 - (l2 @ o2) ** 2 / (l2 @ l2), o2 @ o2):
        under = (l1 @ o1) ** 2 - (l1 @ l1) * (o1 @ o1 - square)
        for sign in (-1.0, 1.0):
            edge = (-(l1 @ o1) + sign * np.sqrt(under)) / (l1 @ l1)
            # Closer and closer to the edge: F falls off like a square root there.
            beside = edge * np.concatenate(([0.0], np.geomspace(1e-12, 1e-2, 60)))
            nodes += [edge + beside, edge - beside]
    rho = np.concatenate(nodes)
    rho = rho[np.isfinite(rho) & (rho > 0.0)]
    return np.unique(rho)


def _roots(lines: LineSet, rho1: Array, branch: float, whole: int, long: bool) -> tuple[Array, tuple[float, float]]:
    """First slant ranges of all roots of one branch, and the least |F| of the scan with its radius."""
    f, _, _, _, a = _trial(lines, rho1, branch, whole, long)
    size = np.abs(f)
    if not np.isfinite(f).any():
        return np.empty(0), (np.inf, 0.0)
    at = int(np.nanargmin(size))
    closest = (float(size[at]), float(a[at]))
    exact = rho1[f == 0.0]
    change = np.flatnonzero(f[:-1] * f[1:] < 0.0)
    low, high = rho1[change], rho1[change + 1]
    # A minimum of |F| inside: two roots between neighbouring nodes, or none.
    inner = np.flatnonzero((size[1:-1] < size[:-2]) & (size[1:-1] < size[2:]) & (f[1:-1] * f[:-2] > 0.0)
                           & (f[1:-1] * f[2:] > 0.0)) + 1  # fmt: skip
    if inner.size:
        left, right = rho1[inner - 1], rho1[inner + 1]
        sign = np.sign(f[inner])
        bottom = _least(lines, left, right, sign, branch, whole, long)
        value = _trial(lines, bottom, branch, whole, long).f * sign
        crossed = value < 0.0
        low = np.concatenate((low, left[crossed], bottom[crossed]))
        high = np.concatenate((high, bottom[crossed], right[crossed]))
        exact = np.concatenate((exact, bottom[value == 0.0]))
    sign_low = np.sign(_trial(lines, low, branch, whole, long).f) if low.size else low
    for _ in range(BISECTIONS):
        if not low.size:
            break
        mid = 0.5 * (low + high)
        same = np.sign(_trial(lines, mid, branch, whole, long).f) == sign_low
        low, high = np.where(same, mid, low), np.where(same, high, mid)
    roots = np.concatenate((exact, 0.5 * (low + high)))
    return np.unique(roots), closest


def _least(lines: LineSet, left: Array, right: Array, sign: Array, branch: float, whole: int, long: bool) -> Array:
    """Where sign F is least between two ranges, by golden section."""
    golden = (np.sqrt(5.0) - 1.0) / 2.0
    for _ in range(45):
        a = right - golden * (right - left)
        b = left + golden * (right - left)
        lower = _trial(lines, a, branch, whole, long).f * sign < _trial(lines, b, branch, whole, long).f * sign
        left, right = np.where(lower, left, a), np.where(lower, b, right)
    result: Array = 0.5 * (left + right)
    return result


def _orbit(lines: LineSet, rho1: float, branch: float, whole: int, long: bool, body_radius_km: float) -> MethodOrbit:
    """The result of one root."""
    one = _trial(lines, np.array([rho1]), branch, whole, long)
    r1, r2, a = one.r1[0], one.r2[0], float(one.a[0])
    normal = np.cross(r1, r2) * (-1.0 if long else 1.0)
    normal = normal / np.sqrt(normal @ normal)
    v2 = np.cross(normal, r2)
    v2 = v2 * np.sqrt(lines.gm_km3_s2 / a) / np.sqrt(v2 @ v2)
    t_state = float(lines.t_s[1])
    # From the emission of the second line to its reception.
    state = np.concatenate(propagate(r2, v2, float(one.rho2[0]) * lines.per_c, lines.gm_km3_s2))
    seen = misses(lines, state, t_state)
    miss = np.hypot(seen.residual[:, 0], seen.residual[:, 1])
    way = "the long way round" if long else "the short way"
    assumption = f"circular orbit, {whole} whole revolutions, {way}" if whole or long else "circular orbit"
    outcome, text, remark = judged(state, seen, lines, body_radius_km, EXCESS_LIMIT_KM_S)
    if not (miss <= MISS_LIMIT_RAD).all():
        worst = float(np.degrees(miss.max()) * 3600.0) if np.isfinite(miss).all() else float("nan")
        outcome, remark = Outcome.NOT_CONVERGED, ""
        text = f"The circle misses a line of sight by {worst:.2g} arcsec (both positions in line with the centre)."
    if outcome == Outcome.CONVERGED:
        text = f"Circle of radius {a:.6g} km through both lines of sight; circular by assumption."
    covariance, sigma = None, float("nan")
    if lines.sigma_rad is not None and outcome != Outcome.NOT_CONVERGED:
        covariance = family_covariance(lines, state, t_state, Family(lines, 0.0, "periapsis"))
        if covariance is not None:
            sigma = range_sigma(lines, state, seen, covariance)
    return MethodOrbit(
        METHOD, assumption, lines.rows, outcome, Status(outcome.code, text), remark, a, state, state.copy(), t_state,
        seen.range_km, seen.positions_km, seen.emission_t_s, miss, covariance, sigma, BISECTIONS,
    )  # fmt: skip
