"""Two-range method: slant ranges at the outer observations, Lambert's problem between, the middle line met.

Each pair of outer slant ranges gives two positions and, both ways round, for every number of whole
revolutions and both of its branches, one orbit (Lambert). The two angles by which it misses the middle line
are the conditions; all their zeros are sought by :mod:`firstarc.preliminary.range_pairs`. Since the ends are
held fixed, gaps of many revolutions are no harder than short arcs.

Source: the boundary-value form of three-line orbit determination, R. H. Gooding 1997, Celest. Mech. Dyn.
Astron. 66, 387 (recalled); D. L. Karimi and D. Mortari 2011, Celest. Mech. Dyn. Astron. 109, 107 for the
two ranges as unknowns (recalled). The scan is our own.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.preliminary.lambert import lambert, way_words
from firstarc.preliminary.lines_of_sight import Array, Lines, tangent_frame
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.range_pairs import FARTHEST, NEAREST, grid, scale_km, zeros
from firstarc.preliminary.revolutions import possible_revolutions, wanted_revolutions
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S
from firstarc.preliminary.through_lines import Estimates, Problem, finished, prepared
from firstarc.twobody.kepler import propagate

METHOD = "two ranges"
#: Misses (rad) that add up to this are on the far side of the sky: no change of sign.
FAR_SIDE = 3.5


class _Conditions:
    """Misses of the middle line as functions of both outer ranges, for one triple."""

    def __init__(self, lines: Lines, keys: list[tuple[bool, int, bool]]):
        self.gm, self.per_c = lines.gm_km3_s2, lines.per_c
        self.observer = lines.observer_km[..., 0]
        self.effective, self.unit = lines.effective[..., 0], lines.unit[..., 0]
        self.t = lines.t_s[:, 0]
        self.long_way, self.turns, self.right = (np.array(part) for part in zip(*keys, strict=True))
        # Axes across the middle line: along the track, and square to it.
        track = self.unit[2] - self.unit[0]
        track = track - (track @ self.unit[1]) * self.unit[1]
        size = float(np.linalg.norm(track))
        if not size > 1e-14:
            track, size = tangent_frame(self.unit[1][:, None])[0, :, 0], 1.0
        self.track = track / size
        self.square = np.cross(self.unit[1], self.track)

    def orbits(self, x: Array, y: Array, key: Array, passes: int = 4) -> tuple[Array, Array, Array, Array]:
        """Ranges (3, m), middle position and velocity (m, 3) at its emission, and r2 - R2 on the line's scale."""
        rho1, rho3 = np.exp(x), np.exp(y)
        r1 = self.observer[0] + rho1[:, None] * self.effective[0]
        r3 = self.observer[2] + rho3[:, None] * self.effective[2]
        t1, t3 = self.t[0] - rho1 * self.per_c, self.t[2] - rho3 * self.per_c
        found = lambert(
            r1, r3, t3 - t1, self.gm,
            long_way=self.long_way[key], revolutions=self.turns[key], right_branch=self.right[key],
            quickest_instead=True,
        )  # fmt: skip
        # Lanes without an orbit would only keep the propagation busy. Beyond the fold, in which both branches
        # end, the quickest orbit carries the misses on, so that the scan sees zeros next to it.
        good = np.flatnonzero(np.isfinite(found.x))
        ranges = np.stack((rho1, np.full(x.size, np.nan), rho3))
        r2, v2, seen = (np.full((x.size, 3), np.nan) for _ in range(3))
        if good.size:
            at, v1, since = r1[good], found.v1_km_s[good], self.t[1] - t1[good]
            rho2 = np.sqrt(rho1[good] * rho3[good])
            for _ in range(passes if self.per_c else 1):
                place, velocity = propagate(at, v1, since - rho2 * self.per_c, self.gm)
                line = place - self.observer[1] - rho2[:, None] * (self.effective[1] - self.unit[1])
                rho2 = np.sqrt(np.add.reduce(line * line, axis=1))
            ranges[1, good], r2[good], v2[good], seen[good] = rho2, place, velocity, line / rho2[:, None]
        return ranges, r2, v2, seen

    def __call__(self, x: Array, y: Array, key: Array) -> Array:
        _, _, _, seen = self.orbits(x, y, key, 2)
        along, aside, ahead = seen @ self.track, seen @ self.square, seen @ self.unit[1]
        # The arc to the line, laid out on both axes.
        sine = np.hypot(along, aside)
        arc = np.arctan2(sine, ahead) / np.where(sine > 0.0, sine, 1.0)
        arc = np.where(sine > 0.0, arc, 1.0)
        return np.stack((along * arc, aside * arc))


def _keys(numbers: list[int]) -> list[tuple[bool, int, bool]]:
    """The ways to scan: (long way, whole revolutions, right branch)."""
    keys = []
    for n in numbers:
        for long_way in (False, True):
            keys += [(long_way, n, right) for right in ((False, True) if n else (False,))]
    return keys


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
    """Every two-body orbit through three lines of sight, whole revolutions between them included.

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
        Whole revolutions between first and last: that number, those numbers, or None for all that the time
        allows above the surface, at most :data:`firstarc.preliminary.revolutions.MOST_REVOLUTIONS`.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first; ``estimate`` is the orbit of the scan's nearest pair of ranges. NOT_CONVERGED
        alone where no pair of ranges meets the middle line; EQUAL_TIMES and BAD_INPUT as usual.

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
        estimates = _estimates(problem, wanted)
        if estimates is None:
            return problem.rejected(
                Outcome.NOT_CONVERGED,
                f"No pair of outer slant ranges from {NEAREST * size:.3g} to {FARTHEST * size:.3g} km has an orbit "
                "that meets the middle line of sight.",
            )
        return finished(problem, estimates, merge=True, excess_limit_km_s=excess_limit_km_s)


def _estimates(problem: Problem, revolutions: tuple[int, ...] | None) -> Estimates | None:
    lines = problem.used_lines
    numbers = possible_revolutions(lines, *grid(lines, problem.body_radius_km), revolutions, problem.body_radius_km)
    keys = _keys(numbers)
    if not keys:
        return None
    conditions = _Conditions(lines, keys)
    scans = [
        (*grid(lines, problem.body_radius_km, number), np.flatnonzero(conditions.turns == number)) for number in numbers
    ]
    start, nearest = zeros(conditions, scans, FAR_SIDE)
    if not start.key.size:
        return None
    ranges0, _, v0, _ = conditions.orbits(*start)
    ranges, r2, v2, _ = conditions.orbits(*nearest)
    good = np.flatnonzero(np.isfinite(v2).all(axis=1) & np.isfinite(ranges).all(axis=0))
    if not good.size:
        return None
    words = tuple(
        f"the pair {ranges0[0, k]:.4g} and {ranges0[2, k]:.4g} km ({way_words(*keys[start.key[k]])})" for k in good
    )
    root = np.sqrt(np.add.reduce(r2 * r2, axis=1))
    return Estimates(ranges[:, good], v2[good].T, root[good], words, ranges0[1, good], v0[good].T)
