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
from firstarc.preliminary.refine import Refined, joined, refine
from firstarc.preliminary.textbook_loop import gauss_gibbs_loop

_EPS = float(np.finfo(float).eps)
#: Names of the starts of the refinement: Gauss where Gibbs has no velocity, the loop where these fail, and the
#: scan where the roots leave a doubt.
STARTS = ("Gibbs", "Gauss", "averaged loop", "range scan")
LOOP_PASSES = 12
#: Slant ranges of the scan where no root is admissible, in units of the observer's distance from the centre ...
SCAN = np.array([0.03, 0.08, 0.2, 0.4, 0.55, 0.7, 0.85, 1.0, 1.5, 2.5, 5.0, 10.0])
#: ... those between, for triples where even these find nothing ...
SCAN_BETWEEN = np.array([0.05, 0.14, 0.3, 0.62, 0.92, 1.2, 2.0, 3.5, 7.0])
#: ... and, in units of the turn of the polynomial's quintic, where a pair of roots may be lost beside others.
SCAN_WAVE = np.array([0.35, 0.5, 0.8, 1.0, 1.5])
#: gm t^2 / r^3 of the arc above which the truncated series may have lost a pair of roots (arc of about 1
#: deg).
LONG_ARC = 3e-4
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
    codes, poly, parts = solve_parts(lines, body_radius_km, excess_limit_km_s, keep_history, thorough)
    orbits = parts[0]
    for added in parts[1:]:
        orbits = _merged(orbits, added, lines, poly)
    return codes, poly, orbits


def solve_parts(
    lines: Lines, body_radius_km: float, excess_limit_km_s: float, keep_history: bool, thorough: bool
) -> tuple[Array, RangePolynomial, list[RootOrbits]]:
    """As :func:`solve_roots`; the orbits of the roots, then those of each scan, each part by triple and root."""
    with np.errstate(all="ignore"):
        codes = screen(lines)
        poly = range_polynomial(lines)
        codes = np.where((codes == Outcome.CONVERGED) & coplanar(lines, poly), Outcome.COPLANAR_LINES, codes)
        usable = codes == Outcome.CONVERGED
        roots, double = positive_roots(*((k if usable.all() else np.where(usable, k, np.nan)) for k in poly[:3]))
        triple, slot = np.nonzero(~np.isnan(roots))
        without = np.ones(codes.size, dtype=bool)
        without[triple] = False
        codes = np.where((codes == Outcome.CONVERGED) & without, Outcome.NO_POSITIVE_ROOT, codes)
        orbits = _orbits(lines, poly, triple, roots[triple, slot], double[triple, slot], keep_history)
        parts = [orbits._replace(outcome=classify(orbits, body_radius_km, excess_limit_km_s))]
        nothing, waves = _doubtful(lines, poly, codes, parts[0], roots, thorough)
        for starts in (SCAN, SCAN_BETWEEN):
            if not nothing.size + waves.size:
                break
            triple = np.concatenate((np.repeat(nothing, starts.size), np.repeat(waves, SCAN_WAVE.size)))
            far, turn = norm(lines.observer_km[1][:, nothing]), np.sqrt(-0.45 * poly.a[waves])
            guess = np.concatenate(((far[:, None] * starts).ravel(), (turn[:, None] * SCAN_WAVE).ravel()))
            added = _scanned(parts, lines, poly, triple, guess, keep_history)
            if added is not None:
                added = added._replace(outcome=classify(added, body_radius_km, excess_limit_km_s))
                parts.append(added)
                without[added.triple] = False
                nothing = np.setdiff1d(nothing, added.triple[added.outcome == Outcome.CONVERGED])
            waves = nothing[:0]
        codes = np.where((codes == Outcome.NO_POSITIVE_ROOT) & ~without, Outcome.CONVERGED, codes)
        return codes, poly, parts


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
    lanes, lane_poly = lines, poly
    if triple.size != lines.t_s.shape[1] or (triple[1:] == triple[:-1]).any():
        lanes, lane_poly = lines.take(triple), _of_lanes(poly, triple)
    gauss, by_gibbs = _estimates(lanes, lane_poly, root_km)
    refined, start = _refined(lanes, lane_poly, gauss, by_gibbs, keep_history)
    outcome = np.zeros(triple.size, dtype=int)
    return RootOrbits(triple, root_km, double, lanes, lane_poly, gauss, by_gibbs, refined, start, outcome)


def _doubtful(
    lines: Lines, poly: RangePolynomial, codes: Array, orbits: RootOrbits, roots: Array, thorough: bool
) -> tuple[Array, Array]:
    """Triples with no admissible orbit, and those whose long arc may have cost the polynomial a pair of roots."""
    triple, outcome = orbits.triple, orbits.outcome
    nothing = (codes == Outcome.CONVERGED) | (codes == Outcome.NO_POSITIVE_ROOT)
    nothing[triple[outcome == Outcome.CONVERGED]] = False
    waves = np.zeros(codes.size, dtype=bool)
    if thorough:
        some = np.flatnonzero((poly.b > 0.0) & ~nothing & (codes == Outcome.CONVERGED))
        a, b, roots = poly.a[some], poly.b[some], roots[some]
        turn = np.sqrt(-0.45 * a)
        cube = turn * turn * turn
        # A wave of the polynomial, or nearly one: where its quintic dips below 0.6 of its value at zero.
        wave = (8.0 * turn * turn + 6.0 * a) * cube + 1.2 * b < 0.0
        shortest = roots[:, 0]
        arc = lines.gm_km3_s2 * (lines.t_s[2, some] - lines.t_s[0, some]) ** 2 / (shortest * shortest * shortest)
        waves[some] = wave & np.isnan(roots[:, 2]) & (arc > LONG_ARC)
        # Two roots that lead to one orbit: what the other was meant for is still to be found.
        waves[triple[outcome == Outcome.SAME_ORBIT]] = True
        waves &= ~nothing & (poly.b > 0.0)
    return np.flatnonzero(nothing), np.flatnonzero(waves)


def _scanned(
    parts: list[RootOrbits], lines: Lines, poly: RangePolynomial, triple: Array, guess: Array, keep_history: bool
) -> RootOrbits | None:
    """Orbits that starts of equal slant ranges on all three lines lead to, where they are new; unclassified."""
    lanes = lines.take(triple)
    ranges = np.stack((guess, guess, guess))
    r = positions(lanes, ranges)
    found = refine(lanes, ranges, (r[2] - r[0]) / (lanes.t_s[2] - lanes.t_s[0]), keep_history, SCAN_ITERATIONS)
    good = np.flatnonzero(found.converged & (found.range_km > 0.0).all(axis=0))
    if not good.size:
        return None
    # Side by side with what is known of these triples, sorted by triple and range: neighbours are the same orbit.
    known, middle = [], []
    for part in parts:
        old = np.flatnonzero(part.refined.converged & np.isin(part.triple, triple[good]))
        known.append(part.triple[old])
        middle.append(part.refined.range_km[1, old])
    count = sum(part.size for part in known)
    which = np.concatenate((*known, triple[good]))
    at = np.concatenate((*middle, found.range_km[1, good]))
    sort = np.lexsort((np.arange(which.size), at, which))
    near = np.abs(np.diff(at[sort])) < SAME * np.abs(at[sort][1:])
    group = np.concatenate(([0], np.cumsum(~(near & (np.diff(which[sort]) == 0)))))
    taken = np.zeros(group[-1] + 1, dtype=bool)
    is_new = sort >= count
    taken[group[~is_new]] = True
    # The first new one of each group without a known one.
    order = np.flatnonzero(is_new & ~taken[group])
    first = order[np.concatenate(([True], np.diff(group[order]) > 0))] if order.size else order
    added = good[sort[first] - count]
    if not added.size:
        return None
    refined = found.take(added)
    new_triple, new_lanes = triple[added], lanes.take(added)
    new_poly = _of_lanes(poly, new_triple)
    root = norm(positions(new_lanes, refined.range_km)[1])
    gauss, by_gibbs = _estimates(new_lanes, new_poly, root)
    nothing = np.zeros(added.size, dtype=int)
    scan = nothing + (len(STARTS) - 1)
    return RootOrbits(
        new_triple, root, nothing.astype(bool), new_lanes, new_poly, gauss, by_gibbs, refined, scan, nothing
    )


def _merged(orbits: RootOrbits, added: RootOrbits, lines: Lines, poly: RangePolynomial) -> RootOrbits:
    """Both parts, by triple and ascending root."""
    both = np.concatenate((orbits.triple, added.triple))
    order = np.lexsort((np.concatenate((orbits.root_km, added.root_km)), both))
    both = both[order]

    def merged(a: Array, b: Array) -> Array:
        return np.concatenate((a, b), axis=-1)[..., order]

    return RootOrbits(
        both,
        merged(orbits.root_km, added.root_km),
        merged(orbits.double, added.double),
        lines.take(both),
        _of_lanes(poly, both),
        GaussEstimate(*(merged(a, b) for a, b in zip(orbits.gauss, added.gauss, strict=True))),
        merged(orbits.gibbs_v2, added.gibbs_v2),
        joined(orbits.refined, added.refined, np.arange(added.root_km.size)).take(order),
        merged(orbits.start, added.start),
        merged(orbits.outcome, added.outcome),
    )


def _refined(
    lanes: Lines, poly: RangePolynomial, gauss: GaussEstimate, by_gibbs: Array, keep_history: bool
) -> tuple[Refined, Array]:
    """Newton from each start in turn until one converges; middle ranges not positive are not tried."""
    m = gauss.range_km.shape[1]
    start = np.zeros(m, dtype=int)
    finite = np.isfinite(by_gibbs).all(axis=0)
    start[~finite] = STARTS.index("Gauss")
    first = np.where(finite, by_gibbs, gauss.v2_km_s)
    ahead = gauss.range_km[1] > 0.0
    if ahead.all():
        found = refine(lanes, gauss.range_km, first, keep_history)
    else:
        found = refine(lanes, gauss.range_km, first, keep_history, tried=ahead)
    # An estimate on the observer's own orbit is not worth more starts.
    failed = np.flatnonzero(~found.converged & ahead)
    if failed.size:
        near = np.abs(gauss.range_km[:, failed]) < OWN_RANGE * norm(lanes.observer_km[1][:, failed])
        failed = failed[~near.all(axis=0)]
    if not failed.size:
        return found, start
    # The averaged loop saves most of them; Gauss and Herrick-Gibbs, tried where it fails, saved 1 in 150 of the rest.
    some = lanes.take(failed)
    loop = gauss_gibbs_loop(
        some, _of_lanes(poly, failed), gauss.range_km[:, failed], gauss.v2_km_s[:, failed], LOOP_PASSES, averaged=True
    )
    again = refine(some, loop.range_km[-1], loop.v2_km_s, keep_history)
    better = again.converged & (again.range_km[1] > 0.0)
    if better.any():
        good = failed[better]
        start[good] = STARTS.index("averaged loop")
        order = np.arange(m)
        order[good] = m + np.flatnonzero(better)
        found = joined(found, again, np.arange(failed.size)).take(order)
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
    with np.errstate(all="ignore"):
        code = np.zeros(triple.size, dtype=int)
        ranges, v2 = refined.range_km, refined.v2_km_s
        r2 = lanes.observer_km[1] + ranges[1] * lanes.effective[1]
        far = norm(lanes.observer_km[1])
        # The least binding first: later lines overrule.
        if body_radius_km > 0.0:
            q, excess = periapsis(r2, v2, lanes.gm_km3_s2)
            lowest = np.minimum(norm(positions(lanes, ranges)[::2]).min(axis=0), norm(r2))
            code[excess > excess_limit**2] = Outcome.TOO_FAST
            code[(lowest < body_radius_km) | (q < body_radius_km - GRAZING_KM)] = Outcome.BELOW_SURFACE
        else:
            code[dot(v2, v2) - 2.0 * lanes.gm_km3_s2 / norm(r2) > excess_limit**2] = Outcome.TOO_FAST
        near = np.flatnonzero((np.abs(ranges) < OWN_RANGE * far).all(axis=0))
        if near.size:
            own_v = observer_velocity(lanes.take(near))
            code[near[norm(v2[:, near] - own_v) < OWN_VELOCITY * norm(own_v)]] = Outcome.OWN_ORBIT
        code[ranges.min(axis=0) <= 0.0] = Outcome.NEGATIVE_RANGE
        failed = ~refined.converged
        behind = (gauss.range_km[1] <= 0.0) & (orbits.start != len(STARTS) - 1)
        odd = failed | behind
        if odd.any():
            own_estimate = odd & (np.abs(gauss.range_km) < OWN_RANGE * far).all(axis=0)
            code[failed] = Outcome.NOT_CONVERGED
            code[behind] = Outcome.NEGATIVE_RANGE
            code[own_estimate] = Outcome.OWN_ORBIT
        for back in (1, 2):
            pairs = np.flatnonzero(triple[back:] == triple[:-back])
            if not pairs.size:
                break
            first, second = pairs, pairs + back
            same = (code[second] == 0) & (code[first] == 0)
            same &= np.abs(ranges[1, second] - ranges[1, first]) < SAME * ranges[1, second]
            difference = norm(v2[:, second] - v2[:, first])
            same &= difference < SAME * norm(v2[:, second])
            code[second[same]] = Outcome.SAME_ORBIT
    return code
