"""Least-squares fits of lines of sight within a family of orbits: all of them, or those of one eccentricity.

Short arcs fix direction and rate far better than slant range and range rate, so a fit moves in these: the
coordinates of a state are its direction L and rate dL/dt as seen by the observer of the middle observation, the
logarithm of its slant range rho and its range rate x,

    v (1 - x/c) = V + x L' + rho dL/dt,        r(t - rho/c) = R + rho L',

and the narrow valley of the residuals runs along (rho, x) nearly straight. A family holds one condition on the
state (its eccentricity), two (an apsis too) or none; each step moves along what the conditions leave free and is
brought back to them by Newton's iteration on (rho, x) alone, direction and rate kept. Gauss-Newton with Levenberg's
damping: the residuals decrease at every accepted step.

References: Levenberg 1944, Quart. Appl. Math. 2, 164; Lawson and Hanson 1974, *Solving Least Squares Problems*,
chapters 18 and 20 (equality constraints); coordinates: attributable elements, Milani and Gronchi 2010, *Theory of
Orbit Determination*, section 8.2 (all recalled).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.dynamics.light_time import tangent_axes
from firstarc.preliminary.line_set import LineSet, Misses, misses, observer_velocity
from firstarc.preliminary.lines_of_sight import Array

MAX_PASSES = 60
#: Step, in radians, parts of the slant range and of the circular speed, that ends the iteration.
FINAL_STEP = 1e-11
#: Largest step in the same units; with a condition on a small eccentricity e, this part of e.
LONGEST_STEP = 0.4
#: Passes after which a lane is given up whose chi-square is this much above the best lane's.
PATIENCE, LOST = 15, 1e5
#: Misses that rounding makes.
ROUNDING_RAD = 1e-14
#: Newton passes that bring a step back to the conditions.
BACK_PASSES = 8


class Coordinates(NamedTuple):
    """Direction (m, 3), rate across it (m, 3) rad/s, slant range (m,) km, range rate (m,) km/s."""

    unit: Array
    rate: Array
    rho: Array
    x: Array


class Family:
    """Orbits seen from the middle observation of a set of lines.

    Parameters
    ----------
    lines : LineSet
    eccentricity : float, optional
        None for every orbit.
    at_apsis : {"periapsis", "apoapsis"}, optional
        Also stand at an apsis at the middle reception time; needed for eccentricity 0.
    """

    def __init__(self, lines: LineSet, eccentricity: float | None = None, at_apsis: str | None = None):
        at = lines.middle
        self.gm, self.per_c = lines.gm_km3_s2, lines.per_c
        self.observer, self.velocity = lines.observer_km[at], observer_velocity(lines, at)
        self.moving = lines.moving_km_s[at]
        self.e, self.at_apsis = eccentricity, at_apsis

    def coordinates(self, state: Array) -> Coordinates:
        """Coordinates of states (m, 6) at the middle reception time."""
        r, v = state[:, :3], state[:, 3:]
        line = r - self.observer
        rho = np.sqrt(np.sum(line * line, axis=1))
        # From the reception back to the emission the motion is straight to better than the fit needs.
        for _ in range(4 if self.per_c else 1):
            path = line - (rho * self.per_c)[:, None] * (v + self.moving)
            rho = np.sqrt(np.sum(path * path, axis=1))
        unit = path / rho[:, None]
        effective = unit + self.moving * self.per_c
        along = np.sum(v * unit, axis=1)
        x = (along - unit @ self.velocity) / (np.sum(effective * unit, axis=1) + along * self.per_c)
        rate = (v * (1.0 - x * self.per_c)[:, None] - self.velocity - x[:, None] * effective) / rho[:, None]
        return Coordinates(unit, rate, rho, x)

    def state(self, q: Coordinates) -> Array:
        """States (m, 6) of coordinates."""
        effective = q.unit + self.moving * self.per_c
        v = self.velocity + q.x[:, None] * effective + q.rho[:, None] * q.rate
        v = v / (1.0 - q.x * self.per_c)[:, None]
        r = self.observer + q.rho[:, None] * effective + (q.rho * self.per_c)[:, None] * v
        return np.concatenate((r, v), axis=1)

    def _unit(self, q: Coordinates) -> Array:
        """Circular speed (km/s) at the object, the unit of velocities."""
        r = self.observer + q.rho[:, None] * q.unit
        return np.sqrt(self.gm / np.sqrt(np.sum(r * r, axis=1)))

    def _columns(self, q: Coordinates, state: Array) -> Array:
        """Partials (m, 6, 6) of the state by the coordinates, in units of 1 rad, rho and the circular speed."""
        speed, v = self._unit(q), state[:, 3:]
        rho, x = q.rho[:, None], q.x[:, None]
        left = 1.0 / (1.0 - x * self.per_c)
        effective = q.unit + self.moving * self.per_c
        out = np.zeros((len(state), 6, 6))
        for k, axis in enumerate(tangent_axes(q.unit)):
            turn = x * axis * left
            out[:, :3, k], out[:, 3:, k] = rho * axis + rho * self.per_c * turn, turn
            push = axis * speed[:, None] * left
            out[:, :3, 2 + k], out[:, 3:, 2 + k] = rho * self.per_c * push, push
        push = rho * q.rate * left
        out[:, :3, 4], out[:, 3:, 4] = rho * (effective + self.per_c * (v + push)), push
        push = (effective + v * self.per_c) * speed[:, None] * left
        out[:, :3, 5], out[:, 3:, 5] = rho * self.per_c * push, push
        return out

    def conditions(self, state: Array) -> tuple[Array, Array]:
        """Values (m, p) and gradients by the state (m, p, 6) of the p conditions, all without dimension."""
        gm = self.gm
        r, v = state[:, :3], state[:, 3:]
        radius, rv, vv = np.sqrt(np.sum(r * r, axis=1)), np.sum(r * v, axis=1), np.sum(v * v, axis=1)
        if self.e is None:
            return np.zeros((len(state), 0)), np.zeros((len(state), 0, 6))
        if self.at_apsis is not None:
            factor = 1.0 + self.e if self.at_apsis == "periapsis" else 1.0 - self.e
            unit = np.sqrt(gm * radius)
            across = np.concatenate((v, r), axis=1) / unit[:, None]
            across[:, :3] -= (0.5 * rv / unit / radius**2)[:, None] * r
            speed = np.concatenate(((vv / radius)[:, None] * r, (2.0 * radius)[:, None] * v), axis=1) / gm
            return np.stack((rv / unit, radius * vv / gm - factor), axis=1), np.stack((across, speed), axis=1)
        lead = (vv - gm / radius)[:, None]
        vector = (lead * r - rv[:, None] * v) / gm
        size = np.sqrt(np.sum(vector * vector, axis=1))
        u = vector / size[:, None]
        ur, uv = np.sum(u * r, axis=1)[:, None], np.sum(u * v, axis=1)[:, None]
        by_r = lead * u + ur * (gm / radius**3)[:, None] * r - uv * v
        by_v = 2.0 * ur * v - uv * r - rv[:, None] * u
        return (size - self.e)[:, None], (np.concatenate((by_r, by_v), axis=1) / gm)[:, None, :]

    def tangent(self, state: Array) -> Array:
        """Motions (m, 6, d) that keep the conditions: direction and rate, and what is free of (rho, x)."""
        columns = self._columns(self.coordinates(state), state)
        _, gradient = self.conditions(state)
        if not gradient.shape[1]:
            return columns
        slope = gradient @ columns
        by_a, by_z = slope[:, :, :4], slope[:, :, 4:]
        motions = columns[:, :, :4] - columns[:, :, 4:] @ _least_norm(by_z, by_a)
        if gradient.shape[1] == 2:
            return motions
        free = np.stack((-by_z[:, 0, 1], by_z[:, 0, 0]), axis=1)
        free = free / np.sqrt(np.sum(free * free, axis=1))[:, None]
        return np.concatenate((motions, columns[:, :, 4:] @ free[:, :, None]), axis=2)

    def moved(self, state: Array, step: Array) -> Array:
        """States after a step (m, d) along :meth:`tangent`."""
        q = self.coordinates(state)
        full = step
        if self.e is not None:
            columns = self._columns(q, state)
            slope = self.conditions(state)[1] @ columns
            by_a, by_z = slope[:, :, :4], slope[:, :, 4:]
            z = -(_least_norm(by_z, by_a) @ step[:, :4, None])[:, :, 0]
            if step.shape[1] > 4:
                free = np.stack((-by_z[:, 0, 1], by_z[:, 0, 0]), axis=1)
                z = z + step[:, 4:] * free / np.sqrt(np.sum(free * free, axis=1))[:, None]
            full = np.concatenate((step[:, :4], z), axis=1)
        speed = self._unit(q)
        east, north = tangent_axes(q.unit)
        unit = q.unit + full[:, :1] * east + full[:, 1:2] * north
        unit = unit / np.sqrt(np.sum(unit * unit, axis=1))[:, None]
        rate = q.rate + (speed / q.rho)[:, None] * (full[:, 2:3] * east + full[:, 3:4] * north)
        rate = rate - np.sum(rate * unit, axis=1)[:, None] * unit
        q = Coordinates(unit, rate, q.rho * np.exp(full[:, 4]), q.x + speed * full[:, 5])
        return self.settled(q)

    def settled(self, q: Coordinates, passes: int = BACK_PASSES) -> Array:
        """States with the direction and rate of the coordinates, (rho, x) moved until the conditions hold."""
        state = self.state(q)
        if self.e is None:
            return state
        for _ in range(passes):
            value, gradient = self.conditions(state)
            by_z = gradient @ self._columns(q, state)[:, :, 4:]
            z = -(_least_norm(by_z, value[:, :, None]))[:, :, 0]
            z = z * np.fmin(1.0, LONGEST_STEP / np.fmax(np.sqrt(np.sum(z * z, axis=1)), 1e-300))[:, None]
            q = q._replace(rho=q.rho * np.exp(z[:, 0]), x=q.x + self._unit(q) * z[:, 1])
            state = self.state(q)
        return state

    def holds(self, state: Array) -> Array:
        """Whether states keep the conditions, (m,)."""
        value = self.conditions(state)[0]
        return np.asarray((np.abs(value) < 1e-10).all(axis=1))

    @property
    def longest(self) -> float:
        """Longest step: a small eccentricity is a small loop of (rho, x)."""
        if self.e is None or self.at_apsis is not None:
            return LONGEST_STEP
        return LONGEST_STEP * min(1.0, self.e)


def _least_norm(matrix: Array, right: Array) -> Array:
    """Shortest solutions (m, 2, k) of matrix (m, p, 2) z = right (m, p, k), p = 1 or 2."""
    if matrix.shape[1] == 1:
        size = np.sum(matrix * matrix, axis=2)[:, :, None]
        result: Array = matrix.transpose(0, 2, 1) @ right / size
        return result
    a, b, c, d = matrix[:, 0, 0], matrix[:, 0, 1], matrix[:, 1, 0], matrix[:, 1, 1]
    inverse = np.stack((np.stack((d, -b), axis=1), np.stack((-c, a), axis=1)), axis=1)
    solved: Array = inverse @ right / (a * d - b * c)[:, None, None]
    return solved


class Fitted(NamedTuple):
    """Lanes: final states (m, 6), chi-square (m,), converged (m,), passes (m,), slant ranges (m, k)."""

    state: Array
    chi2: Array
    converged: Array
    passes: Array
    range_km: Array


def weighted(lines: LineSet, state: Array, t_state_s: float) -> tuple[Misses, Array, Array, Array]:
    """Misses of states (m, 6), residuals over sigmas (m, 2k), their partials (m, 2k, 6), chi-square (m,)."""
    seen = misses(lines, state, t_state_s)
    sigma = lines.weights_sigma
    m, count = len(state), 2 * len(lines.rows)
    residual = (seen.residual / sigma).reshape(m, count)
    slope = (seen.partials / sigma[..., None]).reshape(m, count, 6)
    chi2 = np.sum(residual * residual, axis=1)
    usable = np.isfinite(chi2) & np.isfinite(slope).all(axis=(1, 2))
    return seen, residual, slope, np.where(usable, chi2, np.inf)


def fit_lines(lines: LineSet, state: Array, t_state_s: float, family: Family, passes: int = MAX_PASSES) -> Fitted:
    """Fit orbits of a family to lines of sight, from several starts at once.

    Parameters
    ----------
    lines : LineSet
    state : ndarray, shape (m, 6)
        Starts at ``t_state_s``, members of the family.
    t_state_s : float
    family : Family
    passes : int
        Most steps tried.

    Returns
    -------
    Fitted
        ``converged`` where a step became negligible or no longer changes the residuals.
    """
    with np.errstate(all="ignore"):
        state = np.array(state, dtype=float)
        seen, residual, slope, chi2 = weighted(lines, state, t_state_s)
        ranges = seen.range_km.copy()
        m = len(state)
        damping = np.full(m, 1e-4)
        # What misses of rounding size amount to.
        floor = float(np.sum((ROUNDING_RAD / lines.weights_sigma) ** 2))
        done, count = np.zeros(m, dtype=bool), np.zeros(m, dtype=int)
        going = np.isfinite(chi2)
        for index in range(passes):
            if index >= PATIENCE:
                going &= chi2 <= LOST * max(float(np.min(chi2)), float(residual.shape[1]))
            at = np.flatnonzero(going)
            if not at.size:
                break
            u, s, vt = _decomposed(slope[at] @ family.tangent(state[at]))
            # Damping against the largest singular value: steps along weak directions start short.
            weight = s / (s * s + (damping[at] * s[:, 0] ** 2)[:, None])
            pull = (u.transpose(0, 2, 1) @ residual[at][..., None])[..., 0]
            step = -(vt.transpose(0, 2, 1) @ (weight * pull)[..., None])[..., 0]
            size = np.sqrt(np.sum(step * step, axis=1))
            step *= np.fmin(1.0, family.longest / np.fmax(size, 1e-300))[:, None]
            trial = family.moved(state[at], step)
            new_seen, new_residual, new_slope, new_chi2 = weighted(lines, trial, t_state_s)
            old_chi2 = chi2[at]
            better = (new_chi2 < old_chi2) & family.holds(trial)
            won = at[better]
            state[won], residual[won], slope[won] = trial[better], new_residual[better], new_slope[better]
            chi2[won], ranges[won] = new_chi2[better], new_seen.range_km[better]
            # Gain that the step promised: nothing left to gain means arrived, or undamped it would be.
            promised = np.sum(pull**2 * (1.0 - (1.0 - s * weight) ** 2), axis=1)
            light = damping[at] < 1e-12
            finished = (size < FINAL_STEP) & (light | (np.sum(pull**2, axis=1) < 1e-10 * old_chi2))
            finished |= light & (promised < 1e-12 * old_chi2 + 1e-18) & (size < 1e-4)
            finished |= light & ~better & (np.abs(new_chi2 - old_chi2) < 1e-11 * old_chi2 + 1e-17)
            finished |= ~better & (old_chi2 < floor)
            damping[at] = np.where(better, damping[at] * 0.03, np.fmax(damping[at], 1e-16) * 10.0)
            done[at] |= finished
            count[at] += 1
            going[at] = ~(finished | (damping[at] > 1e6))
    return Fitted(state, chi2, done & family.holds(state), count, ranges)


def _decomposed(slope: Array) -> tuple[Array, Array, Array]:
    slope = np.where(np.isfinite(slope), slope, 0.0)
    u, s, vt = np.linalg.svd(slope, full_matrices=False)
    return u, np.fmax(s, 1e-300), vt


def covariance(lines: LineSet, state: Array, t_state_s: float, family: Family) -> Array | None:
    """Covariance (6, 6) of a fitted state (6,) from the stated sigmas, to first order, within its family.

    None without sigmas, or where the lines leave a motion of the family free.
    """
    if lines.sigma_rad is None:
        return None
    with np.errstate(all="ignore"):
        one = np.asarray(state, dtype=float)[None]
        _, _, slope, chi2 = weighted(lines, one, t_state_s)
        if not np.isfinite(chi2[0]):
            return None
        motions = family.tangent(one)
        _, s, vt = _decomposed(slope @ motions)
        if vt.shape[1] < motions.shape[2] or s[0, -1] < 1e-13 * s[0, 0]:
            return None
        root = motions[0] @ (vt[0].T / s[0])
        result: Array = root @ root.T
    return result if np.isfinite(result).all() else None


def distinct(fitted: Fitted, tie: float = 1e-5) -> list[int]:
    """Converged lanes, best first, without repetitions of the same orbit."""
    kept: list[int] = []
    for k in sorted(np.flatnonzero(fitted.converged), key=lambda k: float(fitted.chi2[k])):
        r, v = fitted.state[k, :3], fitted.state[k, 3:]
        others = fitted.state[kept]
        off = np.linalg.norm(others[:, :3] - r, axis=1) / np.linalg.norm(r)
        off += np.linalg.norm(others[:, 3:] - v, axis=1) / np.linalg.norm(v)
        if not (off < tie).any():
            kept.append(int(k))
    return kept
