"""Orbits from measured positions: directions with slant ranges (radar, laser).

Three or more: the velocity at the middle one of three positions by Gibbs' or Herrick-Gibbs' rule, whichever
has the smaller predicted error (:mod:`firstarc.preliminary.rule`); the other rule's orbit is listed after
it. Two: every orbit of Lambert's problem, both ways round, whole revolutions included. A measured range is the
light path, so that with light time the position R + rho L' belongs to the time t - rho / c.

Sources: those of :mod:`firstarc.preliminary.gibbs`, :mod:`firstarc.preliminary.herrick_gibbs` and
:mod:`firstarc.preliminary.lambert`.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import ARCSEC_RAD, C_KM_S
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.preliminary.gibbs import coplanarity_rad, gibbs_status, gibbs_vectors, gibbs_velocity
from firstarc.preliminary.herrick_gibbs import herrick_gibbs_velocity
from firstarc.preliminary.lambert import Transfer, lambert, transfers
from firstarc.preliminary.lines_of_sight import Array, angle, dot, tangent_frame
from firstarc.preliminary.method_orbit import MethodOrbit, without_orbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.revolutions import MOST_REVOLUTIONS
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S, GRAZING_KM, periapsis
from firstarc.preliminary.rule import GIBBS, HERRICK_GIBBS, position_choice
from firstarc.preliminary.through_lines import checked_observations, usable_rows
from firstarc.results import Status
from firstarc.twobody.kepler import propagate

METHOD = "measured positions"
#: A way from positions (k, 3), their times (k,) to the state (6,) at the reference time.
Formula = Callable[[Array, Array], Array]


def solve(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    range_km: ArrayLike,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    range_sigma_km: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    excess_limit_km_s: float = EXCESS_LIMIT_KM_S,
    middle: int | None = None,
    most_revolutions: int | None = None,
) -> tuple[MethodOrbit, ...]:
    """Orbits from two or three measured positions.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions, ICRF axes, any time order. k = 2: Lambert; more: the first, the last and one between.
    observer_km : array_like, shape (k, 3)
        Observer from the centre at reception.
    t_s : array_like, shape (k,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    range_km : array_like, shape (k,)
        Measured slant ranges (one way).
    center_velocity_km_s : array_like, shape (k, 3), optional
        Barycentric velocity of the centre; used with light time.
    light_time : bool
        True for astrometric directions and light paths, False for geometric ones.
    sigma_rad : array_like, shape (k, 2), optional
        Sigmas of (alpha cos delta, delta).
    range_sigma_km : float or array_like, shape (k,), optional
        Sigmas of the ranges; with ``sigma_rad`` they give the choice of the rule and the covariances.
    body_radius_km : float
        Radius of the central body; 0 for no surface check.
    excess_limit_km_s : float
        Larger hyperbolic excesses are rejected.
    middle : int, optional
        Position of the middle observation; None for the one nearest to half-time.
    most_revolutions : int, optional
        Largest number of whole revolutions between two positions; None for all that the time allows, at most
        :data:`firstarc.preliminary.revolutions.MOST_REVOLUTIONS`.

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first; the rule of the smaller predicted error, or the fewest revolutions, before the
        rest. ``miss_rad`` are the misses of the measured directions: three positions are more than an orbit
        needs. NOT_CONVERGED where the positions give no orbit; EQUAL_TIMES, NEGATIVE_RANGE and BAD_INPUT as
        usual.

    Raises
    ------
    UsageError
        Shapes that do not fit, or a gravitational parameter that is not positive.
    """
    directions, observer, times, moving, sigma = checked_observations(
        los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, sigma_rad, 2
    )
    count = len(times)
    ranges = np.asarray(range_km, dtype=float)
    if ranges.shape != (count,):
        raise UsageError(f"range_km has shape {ranges.shape}; expected ({count},)")
    try:
        range_sigma = None if range_sigma_km is None else np.broadcast_to(np.asarray(range_sigma_km, float), (count,))
    except ValueError as error:
        raise UsageError(f"range_sigma_km does not fit; expected one number or shape ({count},) ({error})") from None
    if middle is not None and not 0 <= int(middle) < count:
        raise UsageError(f"middle is {middle!r}; expected a position from 0 to {count - 1}")
    if most_revolutions is not None and int(most_revolutions) < 0:
        raise UsageError(f"most_revolutions is {most_revolutions!r}; expected 0 or more")
    with np.errstate(all="ignore"):
        usable = usable_rows(directions, observer, times, moving) & np.isfinite(ranges)
        rows, outcome, sentence = _chosen(usable, times, ranges, middle, 3 if count > 2 else 2)
        if outcome != Outcome.CONVERGED:
            return (without_orbit(METHOD, rows, outcome, sentence, float("nan")),)
        case = _Case(
            np.array(rows),
            directions,
            observer,
            times,
            ranges,
            moving if light_time else None,
            sigma,
            range_sigma,
            float(gm_km3_s2),
            light_time,
            body_radius_km,
            excess_limit_km_s,
        )
        return case.of_three() if len(rows) == 3 else case.of_two(most_revolutions)


def _chosen(
    usable: Array, times: Array, ranges: Array, middle: int | None, wanted: int
) -> tuple[tuple[int, ...], Outcome, str]:
    """Rows used, in order of time, or why there are none."""
    every = tuple(range(min(wanted, len(times))))
    good = np.flatnonzero(usable)
    if good.size < wanted:
        return every, Outcome.BAD_INPUT, "A direction, a range, an observer position or a time is zero or not finite."
    order = good[np.argsort(times[good], kind="stable")]
    rows = [int(order[0]), int(order[-1])]
    if wanted == 3:
        inner = [int(k) for k in order[1:-1] if middle is None or k == middle]
        inner = [k for k in inner if times[rows[0]] < times[k] < times[rows[1]]]
        if not inner:
            return every, Outcome.EQUAL_TIMES, "No three positions at different times: two of them have the same time."
        half = 0.5 * (times[rows[0]] + times[rows[1]])
        rows.insert(1, min(inner, key=lambda k: abs(times[k] - half)))
    elif not times[rows[0]] < times[rows[1]]:
        return every, Outcome.EQUAL_TIMES, "Both positions have the same time."
    for k in rows:
        if ranges[k] <= 0.0:
            return (
                tuple(rows),
                Outcome.NEGATIVE_RANGE,
                f"Measured slant range {ranges[k]:.4g} km at observation {k + 1}.",
            )
    return tuple(rows), Outcome.CONVERGED, ""


class _Case:
    """The positions used and what judges an orbit through them."""

    def __init__(
        self,
        rows: Array,
        los: Array,
        observer: Array,
        times: Array,
        ranges: Array,
        moving: Array | None,
        sigma: Array | None,
        range_sigma: Array | None,
        gm: float,
        light_time: bool,
        body_radius_km: float,
        excess_limit: float,
    ):
        self.rows, self.gm, self.light_time = rows, gm, light_time
        self.body_radius_km, self.excess_limit = body_radius_km, excess_limit
        self.unit = los[rows] / np.linalg.norm(los[rows], axis=1)[:, None]
        self.observer, self.reception, self.ranges = observer[rows], times[rows], ranges[rows]
        self.moving = None if moving is None else moving[rows]
        self.middle = len(rows) // 2 if len(rows) == 3 else 0
        self.t_state_s = float(self.reception[self.middle])
        self.r_km, self.t_s = self.placed(self.unit, self.ranges)
        self.columns: Array | None = None
        if sigma is not None and range_sigma is not None:
            self.columns = self._columns(sigma[rows], range_sigma[rows])

    def placed(self, unit: Array, ranges: Array) -> tuple[Array, Array]:
        """Positions (k, 3) and their times (k,), from the middle reception."""
        effective = unit if self.moving is None else unit + self.moving / C_KM_S
        delay = ranges / C_KM_S if self.light_time else 0.0 * ranges
        return self.observer + ranges[:, None] * effective, self.reception - self.t_state_s - delay

    def _columns(self, sigma: Array, range_sigma: Array) -> Array | None:
        """One-sigma changes (n, k, 4) of direction and range, one measured number at a time."""
        k = len(self.rows)
        if not (np.isfinite(sigma).all() and np.isfinite(range_sigma).all()):
            return None
        axes = tangent_frame(self.unit.T[None])[:2, 0]
        out = np.zeros((3 * k, k, 4))
        for row in range(k):
            for axis in range(2):
                out[3 * row + axis, row, :3] = sigma[row, axis] * axes[axis][:, row]
            out[3 * row + 2, row, 3] = range_sigma[row]
        return out

    def of_three(self) -> tuple[MethodOrbit, ...]:
        """Orbits by both rules, the better one first."""
        lanes = self.r_km[:, :, None]
        sigma_km = None
        if self.columns is not None:
            moved = self.columns[:, :, :3] * self.ranges[:, None] + self.columns[:, :, 3:] * self.unit
            sigma_km = np.sqrt(np.sum(moved**2, axis=0))
        choice = position_choice(self.r_km, self.t_s, self.gm, sigma_km)
        n, d, _ = gibbs_vectors(lanes)
        apart = np.array([angle(lanes[0], lanes[1])[0], angle(lanes[1], lanes[2])[0]])
        by_gibbs = gibbs_status(
            self.r_km,
            apart,
            float(np.degrees(coplanarity_rad(lanes)[0])),
            float(dot(n, d)[0]),
            gibbs_velocity(lanes, self.gm)[:, 0],
        )

        def at_middle(velocity: Callable[[Array, Array], Array]) -> Formula:
            def formula(r: Array, t: Array) -> Array:
                v2 = velocity(r[:, :, None], t[:, None])[:, 0]
                return np.concatenate(propagate(r[1], v2, -t[1], self.gm))

            return formula

        formulas = {
            GIBBS: at_middle(lambda r, t: gibbs_velocity(r, self.gm)),
            HERRICK_GIBBS: at_middle(lambda r, t: herrick_gibbs_velocity(r, t, self.gm)),
        }
        rules = sorted(formulas, key=lambda rule: rule != choice.rule)
        out = []
        for rule in rules:
            words = choice.reason if rule == choice.rule else f"{rule}: not the rule chosen."
            failure = "" if rule != GIBBS or by_gibbs.ok else by_gibbs.sentence
            out.append(self._orbit(formulas[rule], words, failure))
        return tuple(sorted(out, key=lambda one: not one.admissible))

    def of_two(self, most: int | None) -> tuple[MethodOrbit, ...]:
        """Every transfer, fewest revolutions first."""
        r, t = self.r_km, self.t_s
        limit = MOST_REVOLUTIONS if most is None else int(most)
        found = transfers(r[0], r[1], float(t[1] - t[0]), self.gm, most=limit)
        if not found:
            cosine = float(r[0] @ r[1])
            reason = "the same or opposite" if np.linalg.norm(np.cross(r[0], r[1])) < 1e-9 * abs(cosine) else "such"
            text = f"No orbit joins the two positions: they lie in {reason} directions from the centre."
            return (without_orbit(METHOD, tuple(map(int, self.rows)), Outcome.NOT_CONVERGED, text, self.t_state_s),)

        def of_transfer(one: Transfer) -> Formula:
            def formula(r: Array, t: Array) -> Array:
                v1 = lambert(
                    r[0], r[1], t[1] - t[0], self.gm,
                    long_way=one.long_way, revolutions=one.revolutions, right_branch=one.right_branch,
                ).v1_km_s  # fmt: skip
                return np.concatenate(propagate(r[0], v1, -t[0], self.gm))

            return formula

        out = [self._orbit(of_transfer(one), f"Lambert: {one.words}.", "") for one in found]
        return tuple(sorted(out, key=lambda one: not one.admissible))

    def _orbit(self, formula: Formula, words: str, failure: str) -> MethodOrbit:
        rows = tuple(int(k) for k in self.rows)
        state = formula(self.r_km, self.t_s)
        if not np.isfinite(state).all():
            text = failure or f"{words} No velocity at these positions."
            return without_orbit(METHOD, rows, Outcome.NOT_CONVERGED, text, self.t_state_s)
        seen, _, _ = predicted_directions(
            state, 0.0, self.reception - self.t_state_s, self.observer, self.moving, self.gm, self.light_time
        )
        miss = np.linalg.norm(residuals_rad(self.unit, seen), axis=1)
        q, excess = (float(k[0]) for k in periapsis(state[:3, None], state[3:, None], self.gm))
        lowest = float(np.linalg.norm(self.r_km, axis=1).min())
        radius, outcome, text, remark = self.body_radius_km, Outcome.CONVERGED, words, ""
        if failure:
            outcome, text = Outcome.NOT_CONVERGED, failure
        elif radius > 0.0 and lowest < radius:
            outcome, text = Outcome.BELOW_SURFACE, f"{radius - lowest:.0f} km below the surface when observed."
        elif radius > 0.0 and q < radius - GRAZING_KM:
            outcome, text = Outcome.BELOW_SURFACE, f"{words} Perigee {radius - q:.0f} km below the surface."
        elif excess > self.excess_limit**2:
            outcome = Outcome.TOO_FAST
            text = f"{words} Hyperbolic excess {excess**0.5:.0f} km/s, limit {self.excess_limit:g} km/s."
        elif 0.0 < q < radius:
            remark = f"Perigee {radius - q:.0f} km below the surface: grazing."
        if outcome == Outcome.CONVERGED and miss.max() > ARCSEC_RAD:
            text = f"{text} The orbit misses the measured directions by up to {miss.max() / ARCSEC_RAD:.2g} arcsec."
        covariance, range_sigma = self._covariance(formula, state)
        root = float(np.linalg.norm(self.r_km[self.middle]))
        return MethodOrbit(
            METHOD,
            "",
            rows,
            outcome,
            Status(outcome.code, text),
            remark,
            root,
            state,
            state,
            self.t_state_s,
            self.ranges,
            self.r_km,
            self.t_s + self.t_state_s,
            miss,
            covariance,
            range_sigma,
            0,
        )

    def _covariance(self, formula: Formula, state: Array) -> tuple[Array | None, float]:
        """Covariance of the state and sigma of the reference range, by differences of a tenth of a sigma."""
        if self.columns is None:
            return None, float("nan")
        changes = []
        for column in self.columns:
            ends = []
            for sign in (0.1, -0.1):
                unit = self.unit + sign * column[:, :3]
                unit = unit / np.linalg.norm(unit, axis=1)[:, None]
                ends.append(formula(*self.placed(unit, self.ranges + sign * column[:, 3])))
            changes.append((ends[0] - ends[1]) / 0.2)
        jacobian = np.array(changes)
        full = jacobian.T @ jacobian
        sigma = float(np.sqrt(np.sum(self.columns[:, self.middle, 3] ** 2)))
        return (full, sigma) if np.isfinite(full).all() else (None, float("nan"))
