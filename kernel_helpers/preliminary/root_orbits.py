"""From lines of sight to the orbit of every root: the machinery behind one triple and a million alike."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.preliminary.gauss import (
    GaussEstimate,
    RangePolynomial,
    gauss_estimate,
    positive_roots,
    range_polynomial,
)
from firstarc.preliminary.gibbs import gibbs_velocity
from firstarc.preliminary.herrick_gibbs import herrick_gibbs_velocity
from firstarc.preliminary.lines_of_sight import Array, Lines, dot, norm
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.refine import Refined, joined, refine, untried
from firstarc.preliminary.textbook_loop import gauss_gibbs_loop

_EPS = float(np.finfo(float).eps)
#: Names of the starts of the refinement; tried in the order 0, 3, 2, 1 (the loop saves most of what is left).
STARTS = ("Gibbs", "Herrick-Gibbs", "Gauss", "averaged loop", "range scan")
LOOP_PASSES = 12
#: Slant ranges of the scan, in units of the observer's distance from the centre.
SCAN = np.array([0.03, 0.08, 0.2, 0.4, 0.7, 1.0, 1.5, 2.5, 5.0, 10.0])
#: gm t^2 / r^3 of the arc above which the truncated series may have lost a pair of roots (arc of about 8
#: deg).
LONG_ARC = 0.002
SCAN_ITERATIONS = 12
#: A perigee this little below the surface is kept: a grazing orbit, not an impossible one.
GRAZING_KM = 100.0
#: Largest hyperbolic excess taken for a body of the Solar System's surroundings.
EXCESS_LIMIT_KM_S = 100.0
#: The observer's own orbit: all slant ranges below this part of the observer's distance from the centre ...
OWN_RANGE = 0.02
#: ... and the velocity within this part of the observer's.
OWN_VELOCITY = 0.03
#: Two roots with middle ranges and velocities within this relative difference found the same orbit.
SAME = 1e-6


class RootOrbits(NamedTuple):
    """One lane per orbit: its triple, root, Gauss estimate, start used, refined orbit and outcome.

    Where ``start`` is the range scan there is no root: ``root_km`` is the middle distance of the orbit
    itself, and the Gauss estimate is the method's formula at that distance.
    """

    triple: Array
    root_km: Array
    double: Array
    lines: Lines
    poly: RangePolynomial
    gauss: GaussEstimate
    gibbs_v2: Array
    refined: Refined
    start: Array
    outcome: Array


def screen(lines: Lines) -> Array:
    """Outcome code per triple: CONVERGED (0) where it can be tried."""
    with np.errstate(all="ignore"):
        finite = (
            np.isfinite(lines.unit).all(axis=(0, 1))
            & np.isfinite(lines.effective).all(axis=(0, 1))
            & np.isfinite(lines.observer_km).all(axis=(0, 1))
            & np.isfinite(lines.t_s).all(axis=0)
        )
        distinct = (lines.t_s[0] < 0.0) & (lines.t_s[2] > 0.0)
    return np.where(finite, np.where(distinct, Outcome.CONVERGED, Outcome.EQUAL_TIMES), Outcome.BAD_INPUT).astype(int)


def coplanar(lines: Lines, poly: RangePolynomial) -> Array:
    """True where the determinant of the lines is lost in the rounding of the directions."""
    spread = norm(lines.unit[0] - lines.unit[1]) + norm(lines.unit[2] - lines.unit[1])
    lost: Array = ~(np.abs(poly.determinant) > 8.0 * _EPS * spread)
    return lost


def solve_roots(
    lines: Lines, body_radius_km: float, excess_limit_km_s: float, keep_history: bool, thorough: bool
) -> tuple[Array, RangePolynomial, RootOrbits]:
    """Orbits of all positive roots.

    Parameters
    ----------
    lines : Lines
        n triples.
    body_radius_km : float
        0 switches the surface check off.
    excess_limit_km_s : float
    keep_history : bool
    thorough : bool
        Scan the slant range also where a long arc may have lost a pair of roots, not only where no root is
        admissible.

    Returns
    -------
    codes : ndarray of int, shape (n,)
        Outcome of triples without roots; CONVERGED where there are some.
    poly : RangePolynomial
        Of the n triples.
    orbits : RootOrbits
        m roots, by triple and ascending root.
    """
    with np.errstate(all="ignore"):
        return _solve_roots(lines, body_radius_km, excess_limit_km_s, keep_history, thorough)


def _solve_roots(
    lines: Lines, body_radius_km: float, excess_limit_km_s: float, keep_history: bool, thorough: bool
) -> tuple[Array, RangePolynomial, RootOrbits]:
    codes = screen(lines)
    poly = range_polynomial(lines)
    codes = np.where((codes == Outcome.CONVERGED) & coplanar(lines, poly), Outcome.COPLANAR_LINES, codes)
    roots, double = positive_roots(*(np.where(codes == Outcome.CONVERGED, k, np.nan) for k in poly[:3]))
    triple, slot = np.nonzero(~np.isnan(roots))
    without = np.ones(codes.size, dtype=bool)
    without[triple] = False
    codes = np.where((codes == Outcome.CONVERGED) & without, Outcome.NO_POSITIVE_ROOT, codes)
    orbits = _orbits(lines, poly, triple, roots[triple, slot], double[triple, slot], keep_history)
    outcome = classify(orbits, body_radius_km, excess_limit_km_s)
    todo = _doubtful(lines, poly, codes, triple, outcome, roots, thorough)
    if todo.size:
        orbits = _with_scan(orbits, lines, poly, todo, keep_history)
        without[orbits.triple] = False
        codes = np.where((codes == Outcome.NO_POSITIVE_ROOT) & ~without, Outcome.CONVERGED, codes)
        outcome = classify(orbits, body_radius_km, excess_limit_km_s)
    return codes, poly, orbits._replace(outcome=outcome)


def _of_lanes(poly: RangePolynomial, lanes: Array) -> RangePolynomial:
    return RangePolynomial(*(part[..., lanes] for part in poly))


def _estimates(lanes: Lines, poly: RangePolynomial, root_km: Array) -> tuple[GaussEstimate, Array]:
    gauss = gauss_estimate(lanes, poly, root_km)
    return gauss, gibbs_velocity(gauss.r_km, lanes.gm_km3_s2)


def herrick_gibbs_of(lanes: Lines, gauss: GaussEstimate) -> Array:
    """Herrick-Gibbs velocity (3, m) at the estimated positions and their emission times."""
    return herrick_gibbs_velocity(gauss.r_km, lanes.t_s - gauss.range_km * lanes.per_c, lanes.gm_km3_s2)


def _orbits(
    lines: Lines, poly: RangePolynomial, triple: Array, root_km: Array, double: Array, keep_history: bool
) -> RootOrbits:
    """Orbit of every root, not yet classified."""
    lanes, lane_poly = lines.take(triple), _of_lanes(poly, triple)
    gauss, by_gibbs = _estimates(lanes, lane_poly, root_km)
    refined, start = _refined(lanes, lane_poly, gauss, by_gibbs, keep_history)
    outcome = np.zeros(triple.size, dtype=int)
    return RootOrbits(triple, root_km, double, lanes, lane_poly, gauss, by_gibbs, refined, start, outcome)


def _doubtful(
    lines: Lines,
    poly: RangePolynomial,
    codes: Array,
    triple: Array,
    outcome: Array,
    roots: Array,
    thorough: bool,
) -> Array:
    """Triples whose roots may not tell all: none admissible, or a long arc may have lost a pair."""
    with np.errstate(all="ignore"):
        tried = (codes == Outcome.CONVERGED) | (codes == Outcome.NO_POSITIVE_ROOT)
        none = np.ones(codes.size, dtype=bool)
        none[triple[outcome == Outcome.CONVERGED]] = False
        if not thorough:
            return np.flatnonzero(tried & none)
        turn = np.sqrt(-0.45 * poly.a)
        # A wave of the polynomial, or nearly one: where its quintic dips below 0.6 of its value at zero.
        wave = (poly.b > 0.0) & (8.0 * turn**5 + 6.0 * poly.a * turn**3 + 1.2 * poly.b < 0.0)
        shortest = np.where(np.isnan(roots[:, 0]), turn, roots[:, 0])
        arc = lines.gm_km3_s2 * (lines.t_s[2] - lines.t_s[0]) ** 2 / shortest**3
        lost = wave & np.isnan(roots[:, 2]) & (arc > LONG_ARC)
    return np.flatnonzero(tried & (none | lost))


def _with_scan(orbits: RootOrbits, lines: Lines, poly: RangePolynomial, todo: Array, keep_history: bool) -> RootOrbits:
    """Add the orbits that starts of equal slant ranges on all three lines lead to, where they are new."""
    triple = np.repeat(todo, SCAN.size)
    lanes = lines.take(triple)
    guess = np.tile(SCAN, todo.size) * norm(lanes.observer_km[1])
    ranges = np.stack((guess, guess, guess))
    with np.errstate(all="ignore"):
        r = positions(lanes, ranges)
        found = refine(lanes, ranges, (r[2] - r[0]) / (lanes.t_s[2] - lanes.t_s[0]), keep_history, SCAN_ITERATIONS)
    good = np.flatnonzero(found.converged & (found.range_km > 0.0).all(axis=0))
    # Side by side with what the roots gave, sorted by triple and range: neighbours are the same orbit.
    old = np.flatnonzero(orbits.refined.converged)
    which = np.concatenate((orbits.triple[old], triple[good]))
    middle = np.concatenate((orbits.refined.range_km[1, old], found.range_km[1, good]))
    sort = np.lexsort((np.arange(which.size), middle, which))
    near = np.abs(np.diff(middle[sort])) < SAME * np.abs(middle[sort][1:])
    group = np.concatenate(([0], np.cumsum(~(near & (np.diff(which[sort]) == 0)))))
    taken = np.zeros(group[-1] + 1 if group.size else 1, dtype=bool)
    is_new = sort >= old.size
    taken[group[~is_new]] = True
    first = np.concatenate(([True], np.diff(group) > 0)) if sort.size else np.zeros(0, dtype=bool)
    added = good[sort[is_new & first & ~taken[group]] - old.size] if sort.size else good
    if not added.size:
        return orbits
    new_triple, new_lanes = triple[added], lanes.take(added)
    new_poly = _of_lanes(poly, new_triple)
    new_range, _new_v = found.range_km[:, added], found.v2_km_s[:, added]
    root = norm(positions(new_lanes, new_range)[1])
    gauss, by_gibbs = _estimates(new_lanes, new_poly, root)
    refined = joined(orbits.refined, found, added)
    order = np.lexsort((np.concatenate((orbits.root_km, root)), np.concatenate((orbits.triple, new_triple))))
    both = np.concatenate((orbits.triple, new_triple))[order]

    def merged(a: Array, b: Array) -> Array:
        return np.concatenate((a, b), axis=-1)[..., order]

    return RootOrbits(
        both,
        merged(orbits.root_km, root),
        merged(orbits.double, np.zeros(added.size, dtype=bool)),
        lines.take(both),
        _of_lanes(poly, both),
        GaussEstimate(*(merged(a, b) for a, b in zip(orbits.gauss, gauss, strict=False))),
        merged(orbits.gibbs_v2, by_gibbs),
        refined.take(order),
        merged(orbits.start, np.full(added.size, len(STARTS) - 1)),
        np.zeros(both.size, dtype=int),
    )


def _refined(
    lanes: Lines, poly: RangePolynomial, gauss: GaussEstimate, by_gibbs: Array, keep_history: bool
) -> tuple[Refined, Array]:
    """Newton from each start in turn until one converges; middle ranges not positive are not tried."""
    m = gauss.range_km.shape[1]
    start = np.zeros(m, dtype=int)
    finite = np.isfinite(by_gibbs).all(axis=0)
    start[~finite] = 2
    first = np.where(finite, by_gibbs, gauss.v2_km_s)
    ahead = gauss.range_km[1] > 0.0
    if ahead.all():
        found = refine(lanes, gauss.range_km, first, keep_history)
    else:
        tried = np.flatnonzero(ahead)
        part = refine(lanes.take(tried), gauss.range_km[:, tried], first[:, tried], keep_history)
        order = np.arange(m)
        order[tried] = m + np.arange(tried.size)
        found = joined(untried(gauss.range_km, first), part, np.arange(tried.size)).take(order)
    # An estimate on the observer's own orbit is not worth more starts.
    own = (np.abs(gauss.range_km) < OWN_RANGE * norm(lanes.observer_km)).all(axis=0)
    failed = np.flatnonzero(~found.converged & ahead & ~own)
    tries = np.zeros((len(STARTS), m), dtype=bool)
    tries[start, np.arange(m)] = True
    for index in (3, 2, 1):
        todo = failed[~tries[index, failed]]
        if not todo.size:
            continue
        some = lanes.take(todo)
        estimate = GaussEstimate(*(part[..., todo] for part in gauss))
        ranges, v2 = estimate.range_km, herrick_gibbs_of(some, estimate) if index == 1 else estimate.v2_km_s
        if index == 3:
            some_poly = RangePolynomial(*(part[..., todo] for part in poly))
            loop = gauss_gibbs_loop(some, some_poly, ranges, v2, LOOP_PASSES, averaged=True)
            ranges, v2 = loop.range_km[-1], loop.v2_km_s
        again = refine(some, ranges, v2, keep_history)
        better = again.converged & (again.range_km[1] > 0.0)
        if better.any():
            good = todo[better]
            found.range_km[:, good] = again.range_km[:, better]
            found.v2_km_s[:, good] = again.v2_km_s[:, better]
            found.miss_rad[:, good] = again.miss_rad[:, better]
            found.converged[good] = True
            found.iterations[good] = again.iterations[better]
            start[good] = index
            if keep_history:
                order = np.arange(m)
                order[good] = m + np.flatnonzero(better)
                found = joined(found, again, np.arange(todo.size)).take(order)
        failed = failed[~found.converged[failed]]
    return found, start


def observer_velocity(lines: Lines) -> Array:
    """Velocity of the observer at the middle time from its three positions, (3, m) km/s."""
    return herrick_gibbs_velocity(lines.observer_km, lines.t_s, lines.gm_km3_s2)


def positions(lines: Lines, range_km: Array) -> Array:
    """Positions R + rho L' of the three observations, component-first (3, 3, m)."""
    result: Array = lines.observer_km + range_km[:, None, :] * lines.effective
    return result


def periapsis(r: Array, v: Array, gm: float) -> tuple[Array, Array]:
    """Periapsis distance (km) and square of the hyperbolic excess (km^2/s^2, negative on an ellipse)."""
    square, radial = dot(r, r), dot(r, v)
    speed = dot(v, v)
    excess = speed - 2.0 * gm / np.sqrt(square)
    p = (square * speed - radial * radial) / gm
    e = np.sqrt(np.maximum(1.0 + p * excess / gm, 0.0))
    return p / (1.0 + e), excess


def classify(orbits: RootOrbits, body_radius_km: float, excess_limit: float) -> Array:
    """Outcome code of every root, by the first reason that applies."""
    triple, lanes, gauss, refined = orbits.triple, orbits.lines, orbits.gauss, orbits.refined
    scanned = orbits.start == len(STARTS) - 1
    with np.errstate(all="ignore"):
        code = np.zeros(triple.size, dtype=int)
        ranges = refined.range_km
        r = positions(lanes, ranges)
        q, excess = periapsis(r[1], refined.v2_km_s, lanes.gm_km3_s2)
        far = norm(lanes.observer_km)
        own_v = observer_velocity(lanes)
        own = (np.abs(ranges) < OWN_RANGE * far).all(axis=0)
        own &= norm(refined.v2_km_s - own_v) < OWN_VELOCITY * norm(own_v)
        own_estimate = (np.abs(gauss.range_km) < OWN_RANGE * far).all(axis=0)
        # The least binding first: later lines overrule.
        code[excess > excess_limit**2] = Outcome.TOO_FAST
        if body_radius_km > 0.0:
            code[(norm(r) < body_radius_km).any(axis=0) | (q < body_radius_km - GRAZING_KM)] = Outcome.BELOW_SURFACE
        code[own] = Outcome.OWN_ORBIT
        code[(ranges <= 0.0).any(axis=0)] = Outcome.NEGATIVE_RANGE
        failed = ~refined.converged
        code[failed] = Outcome.NOT_CONVERGED
        code[failed & own_estimate] = Outcome.OWN_ORBIT
        behind = (gauss.range_km[1] <= 0.0) & ~scanned
        code[behind] = Outcome.NEGATIVE_RANGE
        code[behind & own_estimate] = Outcome.OWN_ORBIT
        for back in (1, 2):
            if triple.size <= back:
                break
            same = (triple[back:] == triple[:-back]) & (code[back:] == 0) & (code[:-back] == 0)
            same &= np.abs(ranges[1, back:] - ranges[1, :-back]) < SAME * ranges[1, back:]
            difference = norm(refined.v2_km_s[:, back:] - refined.v2_km_s[:, :-back])
            same &= difference < SAME * norm(refined.v2_km_s[:, back:])
            code[back:][same] = Outcome.SAME_ORBIT
    return code
