"""Orbits of an assumed eccentricity, for arcs too short to give one.

What is imposed, and what the observations give:

- three or more lines, no apsis given: the eccentricity e exactly; the angles of all lines in least squares by
  their sigmas. Direction and rate of the arc with e leave one number free, the slant range; the curvature of the
  arc fixes it, well or badly, as the covariance says.
- an apsis given (always with two lines): r . v = 0 at the reception time of the middle observation (the later one
  of two) and r v^2 = gm (1 + e) at periapsis or gm (1 - e) at apoapsis, both exactly; with two lines their four
  angles then hold exactly too. With e = 0 this is the circular orbit.

Starts: along a grid of slant ranges the direction and rate of the arc turn e into an equation of the fourth
degree in the range rate (energy and angular momentum are quadratic in it), e^2 - 1 = 2 E h^2 / gm^2; all its real
roots are followed, those approaching and those receding from periapsis, and every local minimum of the residuals
along them starts a fit (:mod:`firstarc.preliminary.family_fit`).

An orbit through an apsis from few observations: Y. Vaisala 1939, Mitt. Sternw. Univ. Turku 1; assumed
eccentricity and orbits near it: Herget 1948, *The Computation of Orbits*; attributables: Milani et al. 2004 (all
recalled). The quartic in the range rate and the scan are ours.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.attributable import Attributable, attributable, states_of
from firstarc.preliminary.family_fit import Family, Fitted, covariance, distinct, fit_lines, weighted
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

METHOD = "assumed eccentricity"
APSIDES = ("periapsis", "apoapsis")
#: Slant ranges of the scan, in units of the observer's distance from the centre, and most starts taken from it.
NODES, LEAST, MOST, STARTS = 240, 3e-4, 60.0, 12
#: Turns of the true anomaly by which each start is varied.
TURNS = (0.5 * np.pi, np.pi, 1.5 * np.pi)
#: Below this eccentricity the fitted circular orbits start fits too.
NEARLY_CIRCULAR = 0.2


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
    eccentricity: float = 0.0,
    apsis: str | None = None,
) -> tuple[MethodOrbit, ...]:
    """Every orbit of an assumed eccentricity that fits the lines of sight.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions, ICRF axes, in any order of time; k two or more, all are used.
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
    eccentricity : float
        0 or more; 1 gives parabolas.
    apsis : {"periapsis", "apoapsis"}, optional
        Where the object is assumed to be at the middle observation. With two lines and None both are tried.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first, by their residuals (with exact solutions, by slant range), then the rejected ones.
        Status CONVERGED, NOT_CONVERGED, OWN_ORBIT, BELOW_SURFACE, TOO_FAST, NO_POSITIVE_ROOT (no orbit of this
        eccentricity is near the arc) or BAD_INPUT. ``assumption`` tells the branch: before or past periapsis.

    Raises
    ------
    UsageError
        Shapes that do not fit, fewer than two observations, an eccentricity that is not a number from 0, an apsis
        that is none.
    """
    lines = line_set(los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, light_time, sigma_rad, 2)
    e = _checked(eccentricity, apsis)
    plain = f"eccentricity {e:g}"
    if lines.problem is not None:
        return (rejected(METHOD, plain, lines, lines.problem, problem_sentence(lines.problem)),)
    with np.errstate(all="ignore"):
        one = attributable(lines)
        if one is None:
            text = "The directions spread over more than a right angle: not a short arc."
            return (rejected(METHOD, plain, lines, Outcome.BAD_INPUT, text),)
        if apsis is not None:
            apsides: tuple[str | None, ...] = (apsis,)
        elif e == 0.0:
            apsides = ("periapsis",)
        else:
            apsides = APSIDES if len(lines.rows) == 2 else (None,)
        found: list[MethodOrbit] = []
        for where in apsides:
            # An open orbit has no apoapsis.
            if where == "apoapsis" and e >= 1.0:
                continue
            found += _solutions(lines, one, e, where, body_radius_km)
    if not found:
        where = f" at {apsis}" if apsis else ""
        text = f"No orbit of eccentricity {e:g}{where} has the direction and rate of this arc at any slant range."
        return (rejected(METHOD, plain, lines, Outcome.NO_POSITIVE_ROOT, text),)
    return tuple(sorted(found, key=lambda orbit: int(orbit.outcome)))


def _checked(eccentricity: float, apsis: str | None) -> float:
    try:
        e = float(eccentricity)
    except (TypeError, ValueError):
        e = float("nan")
    if not (np.isfinite(e) and e >= 0.0):
        raise UsageError(f"eccentricity is {eccentricity!r}; expected a number from 0")
    if apsis is not None and apsis not in APSIDES:
        raise UsageError(f"apsis is {apsis!r}; expected None, 'periapsis' or 'apoapsis'")
    if apsis == "apoapsis" and e >= 1.0:
        raise UsageError(f"apsis is 'apoapsis' and eccentricity {e:g}; an open orbit has none")
    return e


def _range_rates(one: Attributable, e: float, rho: Array, gm: float) -> Array:
    """Range rates (m, 4) that give the eccentricity; NaN where there are fewer."""
    r = one.observer_km + rho[:, None] * one.effective
    w = one.velocity_km_s + rho[:, None] * one.rate_rad_s
    # In units of the local circular speed, so that the companion matrix is well scaled.
    radius = np.sqrt(np.sum(r * r, axis=1))
    unit = np.sqrt(gm / radius)[:, None]
    w, r = w / unit, r / radius[:, None]
    along = np.broadcast_to(one.effective, r.shape)
    h0, h1 = np.cross(r, w), np.cross(r, along)
    # v = w + x L: twice the energy, and h^2, as polynomials in x, highest power last.
    energy = np.stack((np.sum(w * w, axis=1) - 2.0, 2.0 * np.sum(w * along, axis=1), np.sum(along**2, axis=1)))
    square = np.stack((np.sum(h0 * h0, axis=1), 2.0 * np.sum(h0 * h1, axis=1), np.sum(h1 * h1, axis=1)))
    poly = np.zeros((5, len(rho)))
    for i in range(3):
        for k in range(3):
            poly[i + k] += energy[i] * square[k]
    poly[0] += 1.0 - e * e
    companion = np.zeros((len(rho), 4, 4))
    companion[:, 1:, :3] = np.eye(3)
    companion[:, :, 3] = -(poly[:4] / poly[4]).T
    good = np.isfinite(companion).all(axis=(1, 2))
    out = np.full((len(rho), 4), np.nan)
    if good.any():
        roots = np.linalg.eigvals(companion[good])
        # Of a pair off the real axis, the common real part: there e comes nearest to the one wanted.
        out[good] = np.sort(np.where(roots.imag >= 0.0, roots.real, np.nan), axis=1) * unit[good]
    return out


def _starts(lines: LineSet, one: Attributable, family: Family) -> Array:
    """States (m, 6) at the middle reception time from which fits begin."""
    assert family.e is not None
    gm = lines.gm_km3_s2
    far = np.sqrt(one.observer_km @ one.observer_km)
    rho = np.geomspace(LEAST, MOST, NODES) * far
    if family.at_apsis is None:
        rates = _range_rates(one, family.e, rho, gm)
    else:
        r = one.observer_km + rho[:, None] * one.effective
        w = one.velocity_km_s + rho[:, None] * one.rate_rad_s
        rates = (-np.sum(r * w, axis=1) / (r @ one.effective))[:, None]
    shape = rates.shape
    states, emission = states_of(one, np.repeat(rho, shape[1]), rates.reshape(-1))
    r0, v0 = propagate(states[:, :3], states[:, 3:], one.t_s - emission, gm)
    states = _member(family, np.concatenate((r0, v0), axis=1))
    score = weighted(lines, states, one.t_s)[3].reshape(shape)
    states = states.reshape(*shape, 6)
    best = sorted(_local_minima(score, rates), key=lambda at: float(score[at]))[:STARTS]
    chosen = np.array([states[at] for at in best]).reshape(-1, 6)
    if family.at_apsis is not None or not len(chosen):
        return chosen
    # Small eccentricities leave the phase open: also start a quarter of the anomaly before and after.
    turned = [_member(family, chosen, angle) for angle in TURNS]
    if family.e < NEARLY_CIRCULAR:
        circles = _circles(lines, one)
        turned += [_member(family, circles, angle) for angle in (0.0, *TURNS)]
    return np.concatenate([chosen, *(some[np.isfinite(some).all(axis=1)] for some in turned)])


def _circles(lines: LineSet, one: Attributable) -> Array:
    """Circular orbits (m, 6) fitted to the lines: near them lie those of a small eccentricity."""
    family = Family(lines, 0.0, "periapsis")
    starts = _starts(lines, one, family)
    if not len(starts):
        return starts
    fitted = fit_lines(lines, starts, one.t_s, family)
    return fitted.state[distinct(fitted)]


def _member(family: Family, state: Array, turned_rad: float = 0.0) -> Array:
    """Orbits of the family with the place and plane of given states, their anomaly turned by an angle."""
    assert family.e is not None
    r, v = state[:, :3], state[:, 3:]
    radius = np.sqrt(np.sum(r * r, axis=1))
    normal = np.cross(r, v)
    h = np.sqrt(np.sum(normal * normal, axis=1))
    p = h * h / family.gm
    nu = np.arctan2(np.sqrt(p / family.gm) * np.sum(r * v, axis=1) / radius, p / radius - 1.0) + turned_rad
    if family.at_apsis is not None:
        nu = np.full(len(state), 0.0 if family.at_apsis == "periapsis" else np.pi)
    radial, ahead = r / radius[:, None], np.cross(normal / h[:, None], r / radius[:, None])
    growth = 1.0 + family.e * np.cos(nu)
    speed = np.sqrt(family.gm / (radius * np.where(growth > 0.0, growth, np.nan)))
    outward = np.zeros(len(state)) if family.at_apsis is not None else speed * family.e * np.sin(nu)
    return np.concatenate((r, outward[:, None] * radial + (speed * growth)[:, None] * ahead), axis=1)


def _local_minima(score: Array, rates: Array) -> list[tuple[int, int]]:
    """Nodes that score no worse than the nearest root at the neighbouring ranges."""
    out = []
    last = len(score) - 1
    for i, k in zip(*np.nonzero(np.isfinite(score)), strict=True):
        lowest = True
        for near in (i - 1, i + 1):
            if 0 <= near <= last and np.isfinite(score[near]).any():
                gap = np.where(np.isfinite(score[near]), np.abs(rates[near] - rates[i, k]), np.inf)
                lowest = lowest and bool(score[i, k] <= score[near, int(np.argmin(gap))])
        if lowest:
            out.append((int(i), int(k)))
    return out


def _solutions(
    lines: LineSet, one: Attributable, e: float, apsis: str | None, body_radius_km: float
) -> list[MethodOrbit]:
    """All distinct orbits under one set of conditions."""
    family = Family(lines, e, apsis)
    starts = _starts(lines, one, family)
    if not len(starts):
        return []
    fitted = fit_lines(lines, starts, one.t_s, family)
    kept = [k for k in distinct(fitted) if (fitted.range_km[k] > 0.0).all()]
    exact = len(lines.rows) == 2
    if not kept:
        text = f"No fit of eccentricity {e:g} settled from any of {len(starts)} starts."
        return [rejected(METHOD, _words(e, apsis, None), lines, Outcome.NOT_CONVERGED, text)]
    orbits = [_orbit(lines, fitted, k, starts[k], e, apsis, family, body_radius_km) for k in kept]
    if exact:
        orbits.sort(key=lambda orbit: float(orbit.range_km[-1]))
    return orbits


def _words(e: float, apsis: str | None, receding: bool | None) -> str:
    text = f"eccentricity {e:g}"
    if e == 0.0 or (apsis is None and receding is None):
        return text
    if apsis is not None:
        return f"{text}, at {apsis} at the middle observation"
    return text + (", past periapsis" if receding else ", before periapsis")


def _orbit(
    lines: LineSet,
    fitted: Fitted,
    k: int,
    start: Array,
    e: float,
    apsis: str | None,
    family: Family,
    body_radius_km: float,
) -> MethodOrbit:
    """The result of one fit."""
    state, t_state = fitted.state[k].copy(), float(lines.t_s[lines.middle])
    seen = misses(lines, state, t_state)
    miss = np.hypot(seen.residual[:, 0], seen.residual[:, 1])
    outcome, text, remark = judged(state, seen, lines, body_radius_km, EXCESS_LIMIT_KM_S)
    exact = len(lines.rows) == 2
    worst = float(np.degrees(miss.max()) * 3600.0)
    count = len(lines.rows)
    if exact and not (miss <= MISS_LIMIT_RAD).all():
        outcome, remark = Outcome.NOT_CONVERGED, ""
        text = f"The nearest orbit of eccentricity {e:g} misses a line of sight by {worst:.2g} arcsec."
    spread = covariance(lines, state, t_state, family) if outcome != Outcome.NOT_CONVERGED else None
    sigma = float("nan") if spread is None else range_sigma(lines, state, seen, spread)
    if outcome == Outcome.CONVERGED:
        text = (
            f"Through both lines of sight; eccentricity {e:g} by assumption."
            if exact
            else f"Fitted to {count} lines of sight, largest miss {worst:.2g} arcsec; eccentricity {e:g} by assumption."
        )
    rho = float(seen.range_km[lines.middle])
    if sigma > 0.3 * rho:
        weak = f"The arc hardly fixes the slant range: {rho:.3g} km with a sigma of {sigma:.2g} km."
        remark = f"{remark} {weak}".strip()
    root = float(np.sqrt(np.sum(seen.positions_km[lines.middle] ** 2)))
    words = _words(e, apsis, bool(state[:3] @ state[3:] > 0.0))
    return MethodOrbit(
        METHOD, words, lines.rows, outcome, Status(outcome.code, text), remark, root, start.copy(), state, t_state,
        seen.range_km, seen.positions_km, seen.emission_t_s, miss, spread, sigma, int(fitted.passes[k]),
    )  # fmt: skip
