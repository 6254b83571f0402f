"""Laplace's method: the orbit from a direction and its first two derivatives at one instant.

With r = R + rho L and the two-body motion of r, the components of the second derivative along L x L' and
L x L'' give, [a, b, c] being triple products and gm the centre's parameter,

    rho  = A + gm B / r^3,   A = -[L, L', R''] / [L, L', L''],  B = -[L, L', R] / [L, L', L''],
    2 rho' = ([L, L'', R''] + gm [L, L'', R] / r^3) / [L, L', L''],

and with r^2 = |R + rho L|^2 an equation of the eighth degree, of which every positive root is taken.

The derivatives are those of the polynomial through the three directions (of a least-squares polynomial where
more are used). The observer's acceleration comes from the observer's own vectors by the same formula, so
that station and centre need no model and the positions stay on the lines. Light time: the equations hold in
the time of emission, hence the derivatives are taken once more by the emission times of each root.

Source: Bate, Mueller and White 1971, *Fundamentals of Astrodynamics*, section 5.11 (recalled); Escobal 1965,
*Methods of Orbit Determination*, section 7.2 (recalled).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S
from firstarc.preliminary.gauss import positive_roots, range_polynomial
from firstarc.preliminary.lines_of_sight import Array, determinant
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S, coplanar
from firstarc.preliminary.through_lines import Estimates, Problem, finished, prepared, usable_rows

METHOD = "laplace"
#: Passes over the emission times; each gains v/c.
LIGHT_PASSES = 2
#: Highest degree of the polynomial through more than three directions.
HIGHEST_DEGREE = 4


class _Motion(NamedTuple):
    """Direction and observer with their first two derivatives by time, (3,) each."""

    los: Array
    los1: Array
    los2: Array
    seen: Array
    seen1: Array
    seen2: Array


def derivative_weights(t_s: Array, degree: int) -> Array:
    """Weights (3, k) of k samples that give value, first and second derivative at t = 0 of their polynomial.

    Parameters
    ----------
    t_s : ndarray, shape (k,)
        Times of the samples, distinct.
    degree : int
        k - 1 interpolates; less is a least-squares fit.
    """
    unit = float(np.abs(t_s).max())
    powers = (t_s[:, None] / unit) ** np.arange(degree + 1)
    weights: Array = np.linalg.pinv(powers)[:3]
    return weights * np.array([1.0, 1.0 / unit, 2.0 / unit**2])[:, None]


def _motion(t_s: Array, effective: Array, observer: Array, degree: int) -> _Motion:
    weights = derivative_weights(t_s, degree)
    # From differences to the middle sample: the digits of short arcs are kept.
    middle = int(np.argmin(np.abs(t_s)))
    parts = []
    for rows in (effective, observer):
        value, first, second = weights @ (rows - rows[middle])
        parts += [rows[middle] + value, first, second]
    return _Motion(*parts)


def _solutions(motion: _Motion, gm: float) -> tuple[Array, Array, Array]:
    """Roots r, slant ranges rho and rates rho' (j,) of one set of derivatives."""
    plane, other = np.cross(motion.los, motion.los1), np.cross(motion.los, motion.los2)
    d = float(motion.los2 @ plane)
    big_a, big_b = -float(motion.seen2 @ plane) / d, -float(motion.seen @ plane) / d
    e, f = float(motion.seen @ motion.los), float(motion.los @ motion.los)
    u = gm * big_b
    a = -(f * big_a**2 + 2.0 * big_a * e + float(motion.seen @ motion.seen))
    roots, _ = positive_roots([a], [-2.0 * u * (e + f * big_a)], [-f * u**2])
    root = roots[0][~np.isnan(roots[0])]
    rho = big_a + u / root**3
    rate = (float(motion.seen2 @ other) + gm * float(motion.seen @ other) / root**3) / (2.0 * d)
    return root, rho, rate


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
    use_all: bool = False,
) -> tuple[MethodOrbit, ...]:
    """Orbits of every positive root of Laplace's equation.

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
    use_all : bool
        Take the derivatives from all k observations; the orbit is still the exact one through the three.

    Returns
    -------
    tuple of MethodOrbit
        One per positive root, admissible ones first; ``root_km`` is the root, ``estimate`` Laplace's own
        state. Outcomes without an orbit: NO_POSITIVE_ROOT, COPLANAR_LINES, EQUAL_TIMES, BAD_INPUT.

    Raises
    ------
    UsageError
        Shapes that do not fit, or a gravitational parameter that is not positive.
    """
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
        if coplanar(problem.used_lines, range_polynomial(problem.used_lines))[0]:
            return problem.rejected(
                Outcome.COPLANAR_LINES,
                f"The direction does not leave its plane (determinant {determinant(problem.used_lines.unit)[0]:.1e}, "
                "lost in rounding): the range is undetermined.",
            )
        estimates = _estimates(problem, use_all)
        if estimates is None:
            return problem.rejected(Outcome.NO_POSITIVE_ROOT, "Laplace's equation has no positive root.")
        return finished(problem, estimates, merge=False, excess_limit_km_s=excess_limit_km_s)


def _samples(problem: Problem, use_all: bool) -> tuple[Array, Array, Array]:
    """Reception times from the middle one, effective directions and observers of the samples."""
    if use_all:
        good = usable_rows(problem.los, problem.observer_km, problem.t_s, problem.center_velocity_km_s)
        good = np.flatnonzero(good)
        # Observations of one instant count once.
        good = good[np.unique(problem.t_s[good], return_index=True)[1]]
    if not use_all or good.size <= 3:
        good = np.array(problem.rows)
    unit = problem.los[good] / np.linalg.norm(problem.los[good], axis=1)[:, None]
    if problem.light_time and problem.center_velocity_km_s is not None:
        unit = unit + problem.center_velocity_km_s[good] / C_KM_S
    return problem.t_s[good] - problem.t_middle_s, unit, problem.observer_km[good]


def _estimates(problem: Problem, use_all: bool) -> Estimates | None:
    lines, gm = problem.used_lines, problem.gm_km3_s2
    t, effective, observer = _samples(problem, use_all)
    degree = min(len(t) - 1, HIGHEST_DEGREE)
    motion = _motion(t, effective, observer, degree)
    roots, rhos, rates = _solutions(motion, gm)
    if not roots.size:
        return None
    ranges, v2, kept = [], [], []
    for root, rho, rate in zip(roots, rhos, rates, strict=True):
        here = motion
        for _ in range(LIGHT_PASSES if lines.per_c else 0):
            emission = t - lines.per_c * rate * t
            again = _motion(emission, effective, observer, degree)
            found = _solutions(again, gm)
            if not found[0].size or not np.isfinite(found[1]).all():
                break
            near = int(np.argmin(np.abs(np.log(found[0] / root))))
            root, rho, rate, here = found[0][near], found[1][near], found[2][near], again
        kept.append(root)
        ranges.append(np.maximum(rho + rate * lines.t_s[:, 0], 0.1 * rho))
        v2.append(here.seen1 + rate * here.los + rho * here.los1)
    range_km, v2_km_s = np.array(ranges).T, np.array(v2).T
    words = tuple(f"the root at {root:.6g} km" for root in kept)
    return Estimates(range_km, v2_km_s, np.array(kept), words, range_km[1].copy(), v2_km_s.copy())
