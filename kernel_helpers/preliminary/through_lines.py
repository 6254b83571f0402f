"""From a method's estimates to judged orbits through three lines of sight.

Shared by the methods that end on the exact two-body orbit (light time included): choice of the three
observations, refinement, reasons for rejection, covariance, order of the results.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import ARCSEC_RAD
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.preliminary.gauss import GaussEstimate, range_polynomial
from firstarc.preliminary.lines_of_sight import Array, Lines, angle_covariance, norm, time_ordered
from firstarc.preliminary.method_orbit import MethodOrbit, without_orbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.refine import Refined, angle_map, geometry, look, refine
from firstarc.preliminary.root_orbits import (
    EXCESS_LIMIT_KM_S,
    OWN_RANGE,
    SAME,
    STARTS,
    RootOrbits,
    classify,
    periapsis,
    positions,
)
from firstarc.preliminary.solution import Iteration
from firstarc.results import Status
from firstarc.twobody.kepler import propagate, propagate_with_partials


class Estimates(NamedTuple):
    """Estimates of one method for one triple, a lane each.

    Parameters
    ----------
    range_km : ndarray, shape (3, m)
        Slant ranges from which the refinement starts.
    v2_km_s : ndarray, shape (3, m)
        Velocity at the middle emission time, likewise.
    root_km : ndarray, shape (m,)
    words : tuple of str
        Where each came from, after "from".
    first_range_km : ndarray, shape (m,)
        Middle slant range of the method's own first state.
    first_v2_km_s : ndarray, shape (3, m)
        Its velocity at its middle emission time.
    """

    range_km: Array
    v2_km_s: Array
    root_km: Array
    words: tuple[str, ...]
    first_range_km: Array
    first_v2_km_s: Array

    def take(self, lanes: Array) -> Estimates:
        return Estimates(
            self.range_km[:, lanes],
            self.v2_km_s[:, lanes],
            self.root_km[lanes],
            tuple(self.words[int(k)] for k in lanes),
            self.first_range_km[lanes],
            self.first_v2_km_s[:, lanes],
        )


@dataclass(frozen=True, eq=False)
class Problem:
    """What every method is given, checked and in order.

    Parameters
    ----------
    method : str
    los, observer_km, t_s, center_velocity_km_s, sigma_rad
        All observations as given, as arrays.
    gm_km3_s2, light_time, body_radius_km
        As given.
    rows : tuple of int
        Positions of the three observations used, in order of time; empty where there are none.
    lines : Lines or None
        Those three lines, one lane, times from the middle one.
    t_middle_s : float
    covariance : ndarray, shape (3, 2, 2), or None
        Of the three directions in order of time.
    outcome : Outcome
        CONVERGED where the observations can be tried.
    sentence : str
        Why not, where they cannot.
    """

    method: str
    los: Array
    observer_km: Array
    t_s: Array
    center_velocity_km_s: Array | None
    sigma_rad: Array | None
    gm_km3_s2: float
    light_time: bool
    body_radius_km: float
    rows: tuple[int, ...]
    lines: Lines | None
    t_middle_s: float
    covariance: Array | None
    outcome: Outcome
    sentence: str

    @property
    def used_lines(self) -> Lines:
        """The three lines; only where the outcome is CONVERGED."""
        assert self.lines is not None
        return self.lines

    def rejected(self, outcome: Outcome, sentence: str, assumption: str = "") -> tuple[MethodOrbit, ...]:
        """The one result of a method that found no orbit at all."""
        rows = self.rows or tuple(range(min(3, len(self.t_s))))
        return (without_orbit(self.method, rows, outcome, sentence, self.t_middle_s, assumption),)


def checked_observations(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    center_velocity_km_s: ArrayLike | None,
    sigma_rad: ArrayLike | None,
    least: int,
) -> tuple[Array, Array, Array, Array | None, Array | None]:
    """The arrays of a method as float64; shapes that do not fit raise UsageError."""
    if not (np.isfinite(gm_km3_s2) and gm_km3_s2 > 0.0):
        raise UsageError(f"gm_km3_s2 is {gm_km3_s2!r}; expected a positive number in km3/s2")
    arrays: list[Array | None] = []
    count = -1
    given = (
        ("los", los, 3),
        ("observer_km", observer_km, 3),
        ("t_s", t_s, 0),
        ("center_velocity_km_s", center_velocity_km_s, 3),
        ("sigma_rad", sigma_rad, 2),
    )
    for name, value, width in given:
        if value is None:
            arrays.append(None)
            continue
        try:
            array = np.asarray(value, dtype=float)
        except (TypeError, ValueError) as error:
            raise UsageError(f"{name} is not an array of numbers ({error})") from None
        if count < 0 and array.ndim == 2:
            count = array.shape[0]
        expected = (count, width) if width else (count,)
        if array.shape != expected:
            wanted = f"(k, {width})" if count < 0 else str(expected)
            raise UsageError(f"{name} has shape {array.shape}; expected {wanted}")
        arrays.append(array)
    if count < least:
        raise UsageError(f"los has {count} rows; this method needs at least {least} observations")
    directions, observer, times, moving, sigma = arrays
    assert directions is not None and observer is not None and times is not None
    return directions, observer, times, moving, sigma


def usable_rows(los: Array, observer_km: Array, t_s: Array, center_velocity_km_s: Array | None) -> Array:
    """True for observations with finite numbers, a direction and an observer."""
    with np.errstate(all="ignore"):
        good = np.isfinite(los).all(axis=1) & np.isfinite(observer_km).all(axis=1) & np.isfinite(t_s)
        length = np.sqrt(np.sum(los * los, axis=1))
        good &= (length > 0.0) & np.isfinite(length)
        if center_velocity_km_s is not None:
            good &= np.isfinite(center_velocity_km_s).all(axis=1)
    return good


def prepared(
    method: str,
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    center_velocity_km_s: ArrayLike | None,
    light_time: bool,
    sigma_rad: ArrayLike | None,
    correlation: ArrayLike | None,
    body_radius_km: float,
    middle: int | None = None,
) -> Problem:
    """Check the observations and choose three: first, last, and the one nearest to half-time or ``middle``."""
    directions, observer, times, moving, sigma = checked_observations(
        los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, sigma_rad, 3
    )
    if middle is not None and not 0 <= int(middle) < len(times):
        raise UsageError(f"middle is {middle!r}; expected a position from 0 to {len(times) - 1}")
    good = np.flatnonzero(usable_rows(directions, observer, times, moving))
    rows: tuple[int, ...] = ()
    lines = covariance = None
    t_middle, sentence, outcome = float("nan"), "", Outcome.CONVERGED
    if good.size < 3:
        outcome = Outcome.BAD_INPUT
        sentence = "A direction, an observer position or a time is zero or not finite."
    else:
        order = good[np.argsort(times[good], kind="stable")]
        first, last = order[0], order[-1]
        inner = np.setdiff1d(order[1:-1], [] if middle is None else [k for k in order[1:-1] if k != middle])
        inner = inner[(times[inner] > times[first]) & (times[inner] < times[last])]
        if not inner.size:
            outcome = Outcome.EQUAL_TIMES
            sentence = "No three observations at different times: two of them have the same time."
        else:
            half = 0.5 * (times[first] + times[last])
            centre = inner[np.argmin(np.abs(times[inner] - half))]
            rows = int(first), int(centre), int(last)
            chosen = np.array(rows)
            lines, _, t2 = time_ordered(
                directions[chosen][None],
                observer[chosen][None],
                times[chosen][None],
                None if moving is None else moving[chosen][None],
                gm_km3_s2,
                light_time,
            )
            t_middle = float(t2[0])
            if sigma is not None and np.isfinite(sigma[chosen]).all():
                rho = None if correlation is None else np.asarray(correlation, dtype=float)[chosen]
                covariance = angle_covariance(sigma[chosen], rho)
    return Problem(
        method,
        directions,
        observer,
        times,
        moving,
        sigma,
        float(gm_km3_s2),
        light_time,
        float(body_radius_km),
        rows,
        lines,
        t_middle,
        covariance,
        outcome,
        sentence,
    )


def state_at_reception(r2: Array, v2: Array, delay_s: Array, gm: float) -> Array:
    """States (m, 6) at the middle reception time from component-first (3, m) at the emission."""
    r, v = propagate(r2.T, v2.T, delay_s, gm)
    return np.concatenate((r, v), axis=1)


def state_covariances(lines: Lines, range_km: Array, v2: Array, covariance: Array) -> tuple[Array, Array]:
    """Covariances (m, 6, 6) of the states at reception and sigmas (m,) km of the middle slant range."""
    geo = geometry(lines)
    seen = look(geo, range_km, v2)
    d_range, d_r, d_v = angle_map(lines, range_km, geo, seen)
    delay = range_km[1] * lines.per_c
    r2 = positions(lines, range_km)[1]
    r, v, stm = propagate_with_partials(r2.T, v2.T, delay, lines.gm_km3_s2)
    at_emission = np.concatenate((d_r, d_v), axis=1).transpose(2, 1, 0)
    pull = -lines.gm_km3_s2 * r / np.sum(r * r, axis=1, keepdims=True) ** 1.5
    # A longer range makes the light leave earlier: the step to the reception time grows with it.
    rate = np.concatenate((v, pull), axis=1)[:, :, None]
    jacobian = stm @ at_emission + rate * (d_range.T * lines.per_c)[:, None, :]
    block = np.zeros((6, 6))
    for line in range(3):
        block[2 * line : 2 * line + 2, 2 * line : 2 * line + 2] = covariance[line]
    full = jacobian @ block @ jacobian.transpose(0, 2, 1)
    sigma = np.sqrt(np.add.reduce(d_range * (block @ d_range), axis=0))
    return 0.5 * (full + full.transpose(0, 2, 1)), sigma


def _distinct(found: Refined, r2: Array) -> Array:
    """Lanes of converged orbits, each orbit once, by middle range."""
    good = np.flatnonzero(found.converged)
    good = good[np.argsort(found.range_km[1, good], kind="stable")]
    kept: list[int] = []
    for k in good:
        for other in reversed(kept):
            if found.range_km[1, k] - found.range_km[1, other] > SAME * abs(found.range_km[1, k]):
                same = False
                break
            gap = np.linalg.norm(found.v2_km_s[:, k] - found.v2_km_s[:, other])
            same = bool(gap < SAME * np.linalg.norm(found.v2_km_s[:, k]))
            if same:
                break
        else:
            same = False
        if not same:
            kept.append(int(k))
    return np.array(kept, dtype=int)


def finished(
    problem: Problem,
    estimates: Estimates,
    *,
    assumption: str = "",
    merge: bool,
    excess_limit_km_s: float = EXCESS_LIMIT_KM_S,
) -> tuple[MethodOrbit, ...]:
    """Refine, judge and order the estimates of a method.

    Parameters
    ----------
    problem : Problem
        With outcome CONVERGED.
    estimates : Estimates
        At least one lane.
    assumption : str
    merge : bool
        True where the lanes are trial starts of a scan: orbits found twice are one solution, and starts that
        lead nowhere are none. False where each lane is a solution of the method's own equation.
    excess_limit_km_s : float

    Returns
    -------
    tuple of MethodOrbit
        Admissible ones first; see :func:`ordered`.
    """
    with np.errstate(all="ignore"):
        lines = problem.used_lines
        m = estimates.root_km.size
        lanes = lines.take(np.zeros(m, dtype=int))
        found = refine(lanes, estimates.range_km, estimates.v2_km_s, keep_history=not merge)
        if merge:
            kept = _distinct(found, positions(lanes, found.range_km)[1])
            if not kept.size:
                worst = np.where(np.isfinite(found.miss_rad).all(axis=0), found.miss_rad.max(axis=0), np.inf)
                kept = np.array([int(np.argmin(worst))])
            # Once more from each start that counts, for the record of its iterations.
            estimates, lanes = estimates.take(kept), lanes.take(kept)
            found = refine(lanes, estimates.range_km, estimates.v2_km_s, keep_history=True)
        return _judged(problem, estimates, lanes, found, assumption, merge, excess_limit_km_s)


def _judged(
    problem: Problem,
    estimates: Estimates,
    lanes: Lines,
    found: Refined,
    assumption: str,
    merge: bool,
    excess_limit_km_s: float,
) -> tuple[MethodOrbit, ...]:
    m = estimates.root_km.size
    gm = problem.gm_km3_s2
    start = np.full(m, len(STARTS) - 1 if merge else 0)
    zero = np.zeros(m, dtype=int)
    guess = GaussEstimate(estimates.range_km, positions(lanes, estimates.range_km), estimates.v2_km_s)
    record = RootOrbits(
        zero, estimates.root_km, zero.astype(bool), lanes, range_polynomial(lanes), guess, guess.v2_km_s, found,
        start, zero,
    )  # fmt: skip
    codes = classify(record, problem.body_radius_km, excess_limit_km_s)
    placed = positions(lanes, found.range_km)
    q, excess = periapsis(placed[1], found.v2_km_s, gm)
    states = state_at_reception(placed[1], found.v2_km_s, found.range_km[1] * lanes.per_c, gm)
    first_r2 = lanes.observer_km[1] + estimates.first_range_km * lanes.effective[1]
    firsts = state_at_reception(first_r2, estimates.first_v2_km_s, estimates.first_range_km * lanes.per_c, gm)
    spread = None
    if problem.covariance is not None and found.converged.any():
        spread = state_covariances(lanes, found.range_km, found.v2_km_s, problem.covariance)
    reception = lanes.t_s[:, 0] + problem.t_middle_s
    out = []
    for k in range(m):
        outcome = Outcome(int(codes[k]))
        known = spread is not None and bool(found.converged[k])
        status, remark = _verdict(
            problem, estimates, found, placed, k, outcome, float(q[k]), float(excess[k]), excess_limit_km_s
        )
        out.append(
            MethodOrbit(
                problem.method,
                assumption,
                problem.rows,
                outcome,
                status,
                remark,
                float(estimates.root_km[k]),
                firsts[k],
                states[k],
                problem.t_middle_s,
                found.range_km[:, k],
                placed[:, :, k],
                reception - found.range_km[:, k] * lanes.per_c,
                found.miss_rad[:, k],
                spread[0][k] if known and spread is not None else None,
                float(spread[1][k]) if known and spread is not None else float("nan"),
                int(found.iterations[k]),
                _history(found, k),
            )
        )
    return ordered(problem, out)


def _history(found: Refined, k: int) -> tuple[Iteration, ...]:
    rows = found.history[: int(found.iterations[k]) + 1]
    return tuple(
        Iteration(
            tuple(float(x) for x in row.range_km[:, k]),  # type: ignore[arg-type]
            float(row.change[k]),
            tuple(float(x) for x in row.miss_rad[:, k]),  # type: ignore[arg-type]
        )
        for row in rows
    )


def _verdict(
    problem: Problem,
    estimates: Estimates,
    found: Refined,
    placed: Array,
    k: int,
    outcome: Outcome,
    q: float,
    excess: float,
    excess_limit: float,
) -> tuple[Status, str]:
    """Status and remark of one orbit."""
    ranges = found.range_km[:, k]
    radius = problem.body_radius_km
    came = f"{found.iterations[k]} iterations from {estimates.words[k]}"
    if outcome == Outcome.CONVERGED:
        remark = f"Perigee {radius - q:.0f} km below the surface: grazing." if 0.0 < q < radius else ""
        return Status(outcome.code, f"Two-body orbit through the three lines of sight, {came}."), remark
    if outcome == Outcome.NEGATIVE_RANGE:
        low = int(np.argmin(ranges))
        text = f"Slant range {ranges[low]:.4g} km at observation {problem.rows[low] + 1}, {came}."
        if estimates.range_km[1, k] <= 0.0:
            text = f"Slant range {estimates.range_km[1, k]:.4g} km at the middle observation from {estimates.words[k]}."
    elif outcome == Outcome.BELOW_SURFACE:
        lowest = float(norm(placed[:, :, k : k + 1]).min())
        text = f"{radius - lowest:.0f} km below the surface when observed."
        if lowest >= radius:
            text = f"Perigee {radius - q:.0f} km below the surface."
    elif outcome == Outcome.OWN_ORBIT:
        distance = float(norm(problem.used_lines.observer_km[1])[0])
        text = (
            f"The observer's own orbit: within {float(np.abs(ranges).max()) / distance * 100.0:.2g} % of the "
            f"observer's distance from the centre at all three times (limit {OWN_RANGE * 100.0:g} %)."
        )
    elif outcome == Outcome.SAME_ORBIT:
        text = "Converges to the same orbit as a smaller root."
    elif outcome == Outcome.TOO_FAST:
        text = f"Hyperbolic excess {np.sqrt(max(excess, 0.0)):.0f} km/s, limit {excess_limit:g} km/s."
    else:
        miss = found.miss_rad[:, k]
        worst = float(np.nanmax(miss)) if np.isfinite(miss).any() else float("nan")
        text = f"Not converged after {came}; nearest miss {worst / ARCSEC_RAD:.2g} arcsec."
    return Status(outcome.code, text), ""


def ordered(problem: Problem, orbits: list[MethodOrbit]) -> tuple[MethodOrbit, ...]:
    """Orbits best first.

    Admissible ones before rejected ones; among them by the residuals of the observations not used, where
    there are some; else closed orbits before open ones and smaller eccentricities before larger.
    """
    others = usable_rows(problem.los, problem.observer_km, problem.t_s, problem.center_velocity_km_s)
    if problem.rows:
        others[list(problem.rows)] = False
    residual = np.full(len(orbits), np.inf)
    good = [k for k, one in enumerate(orbits) if one.admissible]
    if others.any() and good:
        moving = problem.center_velocity_km_s
        seen, _, _ = predicted_directions(
            np.stack([orbits[k].state for k in good]),
            problem.t_middle_s,
            problem.t_s[others],
            problem.observer_km[others],
            None if moving is None else moving[others],
            problem.gm_km3_s2,
            problem.light_time,
        )
        los = problem.los[others]
        off = residuals_rad(los / np.linalg.norm(los, axis=1)[:, None], seen)
        rms = np.sqrt(np.mean(off**2, axis=(1, 2)))
        residual[good] = np.where(np.isfinite(rms), rms, np.inf)

    def place(k: int) -> tuple[bool, float, bool, float]:
        one = orbits[k]
        r, v = one.state[:3], one.state[3:]
        radius = float(np.sqrt(r @ r))
        energy = 0.5 * float(v @ v) - problem.gm_km3_s2 / radius
        vector = ((v @ v) / problem.gm_km3_s2 - 1.0 / radius) * r - (r @ v) * v / problem.gm_km3_s2
        e = float(np.sqrt(vector @ vector))
        return not one.admissible, float(residual[k]), not energy < 0.0, e if np.isfinite(e) else np.inf

    with np.errstate(all="ignore"):
        return tuple(orbits[k] for k in sorted(range(len(orbits)), key=place))
