"""Double-r iteration (Escobal): distances at the outer observations, until both times of flight fit.

Two slant ranges give the outer positions; the plane through them and the centre cuts the middle line in the
third. Three positions and the centre fix a conic (here by Gibbs' vectors, which keep the digits of short
arcs), and the conic gives the times between them. Conditions: their total and their ratio are the observed
ones. Escobal varies the distances r of two observations from the centre; the slant ranges are used here,
since one distance may belong to two points of a line. All solutions are sought by
:mod:`firstarc.preliminary.range_pairs`.

Source: P. R. Escobal 1965, *Methods of Orbit Determination*, section 7.4 (recalled); Vallado 2013,
*Fundamentals of Astrodynamics and Applications*, 4th ed., section 7.3.3 (recalled). Times by universal
variables, Battin 1999, section 4.5.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.preliminary.gibbs import gibbs_vectors, gibbs_velocity
from firstarc.preliminary.lines_of_sight import Array, Lines, cross, dot, norm
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.range_pairs import FARTHEST, NEAREST, grid, scale_km, zeros
from firstarc.preliminary.revolutions import Revolutions, possible_revolutions, revolution_keys, wanted_revolutions
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S
from firstarc.preliminary.through_lines import Estimates, Problem, finished, prepared
from firstarc.twobody.kepler import stumpff

METHOD = "double-r"
#: Positions that bend away from the centre more than this part of the wanted bend count alike.
LARGEST_BEND = 1.0


def time_between(r2: Array, v2: Array, r: Array, gm: float) -> tuple[Array, Array]:
    """Time from the state (r2, v2) to a position on its own conic, and the period.

    Parameters
    ----------
    r2, v2, r : ndarray, shape (3, m)
        Component-first lanes.
    gm : float

    Returns
    -------
    time_s : ndarray, shape (m,)
        Negative before; on an ellipse the passage nearest in eccentric anomaly, within half a revolution.
    period_s : ndarray, shape (m,)
        inf on open orbits.
    """
    size2, size = norm(r2), norm(r)
    h = cross(r2, v2)
    square = dot(h, h)
    beta = 2.0 * gm / size2 - dot(v2, v2)
    # r = f r2 + g v2; 1 - f from the difference of the positions, to the digits of short arcs.
    away = r - r2
    g = dot(cross(r2, away), h) / square
    lost = -dot(cross(away, v2), h) / square
    g2 = size2 * lost / gm
    g1 = (g - dot(r2, v2) * g2) / size2
    # tan of half the eccentric difference, over sqrt(beta).
    g0 = 1.0 - beta * g2
    half = np.where(g0 > -0.5, g1 / (1.0 + g0), g2 / g1)
    w = beta * half * half
    root = np.sqrt(np.abs(w))
    arc = np.where(w > 0.0, np.arctan(root), np.arctanh(np.minimum(root, 1.0))) / root
    arc = np.where(np.abs(w) < 1e-4, 1.0 - w / 3.0 + w * w / 5.0 - w**3 / 7.0, arc)
    s = 2.0 * half * arc
    time = g + gm * s**3 * stumpff(beta * s * s)[3]
    period = np.where(beta > 0.0, 2.0 * np.pi * gm / np.abs(beta) ** 1.5, np.inf)
    return np.where(np.isfinite(size), time, np.nan), period


def _whole(count: Array, period_s: Array) -> Array:
    """Time of whole revolutions, 0 for none (the period may be infinite)."""
    return np.where(count > 0, count * period_s, 0.0)


class _Conditions:
    """Errors of both times of flight as functions of the outer slant ranges, for one triple."""

    def __init__(self, lines: Lines, keys: list[Revolutions]):
        self.lines, self.gm, self.per_c = lines, lines.gm_km3_s2, lines.per_c
        self.backward = np.array([key.backward for key in keys])
        self.before = np.array([key.before for key in keys])
        self.after = np.array([key.after for key in keys])

    def orbits(self, x: Array, y: Array, key: Array) -> tuple[Array, Array, Array]:
        """Slant ranges (3, m), positions (3, 3, m) and Gibbs velocity (3, m) in the key's sense."""
        seen, effective = self.lines.observer_km, self.lines.effective
        rho1, rho3 = np.exp(x), np.exp(y)
        r1, r3 = seen[0] + rho1 * effective[0], seen[2] + rho3 * effective[2]
        plane = cross(r1, r3 - r1)
        rho2 = -dot(plane, seen[1]) / dot(plane, effective[1])
        r = np.stack((r1, seen[1] + rho2 * effective[1], r3))
        v2 = gibbs_velocity(r, self.gm)
        return np.stack((rho1, rho2, rho3)), r, np.where(self.backward[key], -v2, v2)

    def __call__(self, x: Array, y: Array, key: Array) -> Array:
        ranges, r, v2 = self.orbits(x, y, key)
        emission = self.lines.t_s - ranges * self.per_c
        wanted1, wanted3 = emission[1] - emission[0], emission[2] - emission[1]
        first, period = time_between(r[1], v2, r[0], self.gm)
        last, _ = time_between(r[1], v2, r[2], self.gm)
        # The passage before and the one after, then the whole revolutions.
        first = np.where(first >= 0.0, first - period, first) - _whole(self.before[key], period)
        last = np.where(last <= 0.0, last + period, last) + _whole(self.after[key], period)
        whole, wanted = last - first, wanted1 + wanted3
        bent = np.isfinite(whole)
        # Where no conic passes, the chords divide the time; its square is carried on through zero as
        # |r1 x r3|^2 / (gm p) with the negative p of positions that bend away from the centre.
        chord1, chord3 = norm(r[1] - r[0]), norm(r[2] - r[1])
        ratio = np.log(np.where(bent, -first / last, chord1 / chord3)) - np.log(wanted1 / wanted3)
        n, d, _ = gibbs_vectors(r)
        area = cross(r[0], r[2])
        away = dot(area, area) * dot(d, n) / (self.gm * dot(n, n) * wanted**2)
        square = np.where(bent, (whole / wanted) ** 2, np.clip(away, -LARGEST_BEND, 0.0))
        total = np.where(square < 1.0, square - 1.0, np.log(square))
        seen = ranges[1] > 0.0
        return np.stack((np.where(seen, ratio, np.nan), np.where(seen, total, np.nan)))


def solve(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    correlation: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    excess_limit_km_s: float = EXCESS_LIMIT_KM_S,
    middle: int | None = None,
    revolutions: int | tuple[int, ...] | None = None,
) -> tuple[MethodOrbit, ...]:
    """Every orbit that the double-r iteration finds from the starts of a scan.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions, ICRF axes, any time order, k >= 3. The first, the last and one between are used.
    observer_km : array_like, shape (k, 3)
        Observer from the centre at reception.
    t_s : array_like, shape (k,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    center_velocity_km_s : array_like, shape (k, 3), optional
        Barycentric velocity of the centre; used with light time.
    light_time : bool
        True for astrometric directions, False for geometric ones.
    sigma_rad : array_like, shape (k, 2), optional
        Sigmas of (alpha cos delta, delta); needed for covariances.
    correlation : array_like, shape (k,), optional
    body_radius_km : float
        Radius of the central body; 0 for no surface check.
    excess_limit_km_s : float
        Larger hyperbolic excesses are rejected.
    middle : int, optional
        Position of the middle observation; None for the one nearest to half-time.
    revolutions : int or tuple of int, optional
        Whole revolutions between first and last, as in :func:`firstarc.preliminary.two_ranges.solve`.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first; ``estimate`` is the conic of the scan's nearest pair of ranges. NOT_CONVERGED
        alone where there is none; COPLANAR_LINES where the plane through the outer positions holds the middle
        line; EQUAL_TIMES and BAD_INPUT as usual.

    Raises
    ------
    UsageError
        Shapes that do not fit, a gravitational parameter that is not positive, negative revolutions.
    """
    wanted = wanted_revolutions(revolutions)
    problem = prepared(
        METHOD,
        los,
        observer_km,
        t_s,
        gm_km3_s2,
        center_velocity_km_s,
        light_time,
        sigma_rad,
        correlation,
        body_radius_km,
        middle,
    )
    if problem.outcome != Outcome.CONVERGED:
        return problem.rejected(problem.outcome, problem.sentence)
    with np.errstate(all="ignore"):
        size = scale_km(problem.used_lines)
        if not size:
            return problem.rejected(
                Outcome.BAD_INPUT, "The observer stands at the centre or beyond all bounds: no scale for the ranges."
            )
        if _flat(problem.used_lines):
            return problem.rejected(
                Outcome.COPLANAR_LINES,
                "Observers and lines of sight lie in one plane through the centre: the plane of the orbit does not "
                "cut the middle line.",
            )
        estimates = _estimates(problem, wanted)
        if estimates is None:
            return problem.rejected(
                Outcome.NOT_CONVERGED,
                f"No pair of outer slant ranges from {NEAREST * size:.3g} to {FARTHEST * size:.3g} km has a conic "
                "with the observed times.",
            )
        return finished(problem, estimates, merge=True, excess_limit_km_s=excess_limit_km_s)


def _flat(lines: Lines) -> bool:
    """True where all observers and directions lie in one plane to rounding."""
    rows = np.concatenate((lines.observer_km[..., 0] / norm(lines.observer_km[1])[0], lines.unit[..., 0]))
    return bool(np.linalg.svd(rows, compute_uv=False)[-1] < 1e-13)


def _estimates(problem: Problem, wanted: tuple[int, ...] | None) -> Estimates | None:
    lines = problem.used_lines
    numbers = possible_revolutions(lines, *grid(lines, problem.body_radius_km), wanted, problem.body_radius_km)
    keys = revolution_keys(lines, numbers)
    if not keys:
        return None
    conditions = _Conditions(lines, keys)
    of_number = np.array([key.before + key.after + key.backward for key in keys])
    scans = [(*grid(lines, problem.body_radius_km, number), np.flatnonzero(of_number == number)) for number in numbers]
    start, nearest = zeros(conditions, scans, np.inf)
    if not start.key.size:
        return None
    ranges0, _, v0 = conditions.orbits(*start)
    ranges, r, v2 = conditions.orbits(*nearest)
    good = np.flatnonzero(np.isfinite(v2).all(axis=0) & np.isfinite(v0).all(axis=0) & (ranges > 0.0).all(axis=0))
    if not good.size:
        return None
    words = tuple(f"the pair {ranges0[0, k]:.4g} and {ranges0[2, k]:.4g} km ({keys[start.key[k]].words})" for k in good)
    return Estimates(ranges[:, good], v2[:, good], norm(r[1])[good], words, ranges0[1, good], v0[:, good])
