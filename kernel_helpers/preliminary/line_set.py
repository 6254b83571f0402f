"""Any number of lines of sight as one problem: checked, in order of time, with the misses of an orbit.

For methods that work on two, four or all observations of an arc. With light time the effective direction is
L' = L + Vc/c and r(t - rho/c) = R + rho L' holds with rho the light path; see
:mod:`firstarc.dynamics.light_time`.

Partials of a direction: the line d = r(t - rho/c) - R - Vc rho/c changes with the state x by
dd = P dx - (v + Vc) drho/c, P the upper half of the transition matrix and drho = L . dd, so that
drho = L . P dx / (1 + L . (v + Vc)/c).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S
from firstarc.dynamics.light_time import predicted_directions, residuals_rad, tangent_axes
from firstarc.errors import UsageError
from firstarc.preliminary.lines_of_sight import Array
from firstarc.preliminary.method_orbit import MethodOrbit, without_orbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.root_orbits import GRAZING_KM, OWN_RANGE, OWN_VELOCITY
from firstarc.twobody.kepler import propagate_with_partials

#: Sigma (rad) that weighs the observations among each other where none is stated: 1 arcsec.
NOMINAL_SIGMA_RAD = float(np.radians(1.0 / 3600.0))


@dataclass(frozen=True, eq=False)
class LineSet:
    """Lines of sight in order of time.

    Parameters
    ----------
    rows : tuple of int
        Position of each in the caller's arrays.
    unit, observer_km : ndarray, shape (k, 3)
    moving_km_s : ndarray, shape (k, 3)
        Barycentric velocity of the centre; zero without light time.
    t_s : ndarray, shape (k,)
        Reception times.
    gm_km3_s2 : float
    light_time : bool
    sigma_rad : ndarray, shape (k, 2), or None
    problem : Outcome or None
        BAD_INPUT or EQUAL_TIMES where no orbit can be sought.
    """

    rows: tuple[int, ...]
    unit: Array
    observer_km: Array
    moving_km_s: Array
    t_s: Array
    gm_km3_s2: float
    light_time: bool
    sigma_rad: Array | None
    problem: Outcome | None

    @property
    def per_c(self) -> float:
        """1/c (s/km) with light time, else 0."""
        return 1.0 / C_KM_S if self.light_time else 0.0

    @property
    def effective(self) -> Array:
        """L' = L + Vc/c, shape (k, 3)."""
        return self.unit + self.moving_km_s * self.per_c

    @property
    def middle(self) -> int:
        """Index of the observation whose reception time states refer to (the later one of a middle pair)."""
        return len(self.rows) // 2

    @property
    def weights_sigma(self) -> Array:
        """Sigmas (k, 2) used as weights: the stated ones, else 1 arcsec each."""
        if self.sigma_rad is None:
            return np.full((len(self.rows), 2), NOMINAL_SIGMA_RAD)
        return self.sigma_rad

    def take(self, rows: list[int]) -> LineSet:
        """Some of the lines, by index into this set, in rising order."""
        parts = (self.unit[rows], self.observer_km[rows], self.moving_km_s[rows], self.t_s[rows])
        sigma = None if self.sigma_rad is None else self.sigma_rad[rows]
        kept = tuple(self.rows[k] for k in rows)
        return LineSet(kept, *parts, self.gm_km3_s2, self.light_time, sigma, _problem(*parts))


def _problem(unit: Array, observer: Array, moving: Array, times: Array) -> Outcome | None:
    """What forbids an orbit, of lines in order of time."""
    if not all(np.isfinite(a).all() for a in (unit, observer, moving, times)):
        return Outcome.BAD_INPUT
    with np.errstate(over="ignore"):
        far = np.sum(observer * observer, axis=1)
    if not ((far > 0.0) & np.isfinite(far)).all():
        return Outcome.BAD_INPUT
    return None if (np.diff(times) > 0.0).all() else Outcome.EQUAL_TIMES


def line_set(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    center_velocity_km_s: ArrayLike | None,
    light_time: bool,
    sigma_rad: ArrayLike | None,
    least: int,
) -> LineSet:
    """Check the arguments of a method and put the observations in order of time.

    Raises
    ------
    UsageError
        Shapes that do not fit, fewer than ``least`` observations, a gravitational parameter or a sigma that is
        not positive. Numbers that are not finite are no misuse: ``problem`` says so.
    """
    if not (np.isfinite(gm_km3_s2) and gm_km3_s2 > 0.0):
        raise UsageError(f"gm_km3_s2 is {gm_km3_s2!r}; expected a positive number in km3/s2")
    given: dict[str, Array] = {}
    for name, value, width in (
        ("los", los, 3),
        ("observer_km", observer_km, 3),
        ("t_s", t_s, 0),
        ("center_velocity_km_s", center_velocity_km_s, 3),
        ("sigma_rad", sigma_rad, 2),
    ):
        if value is None:
            continue
        try:
            array = np.asarray(value, dtype=float)
        except (TypeError, ValueError) as error:
            raise UsageError(f"{name} is not an array of numbers ({error})") from None
        shape = (array.shape[0] if array.ndim else 0, width) if width else array.shape[:1]
        if array.shape != shape or not array.ndim:
            raise UsageError(f"{name} has shape {array.shape}; expected (k, {width})" if width else
                             f"{name} has shape {array.shape}; expected (k,)")  # fmt: skip
        given[name] = array
    count = len(given["los"])
    for name, array in given.items():
        if len(array) != count:
            raise UsageError(f"{name} has {len(array)} rows and los has {count}; expected one row per observation")
    if count < least:
        raise UsageError(f"{count} observation{'s' if count != 1 else ''} given; this method needs {least} or more")
    sigma = given.get("sigma_rad")
    if sigma is not None and not (np.isfinite(sigma).all() and (sigma > 0.0).all()):
        raise UsageError("sigma_rad holds a value that is not a positive number; expected sigmas in rad")
    order = np.argsort(given["t_s"], kind="stable")
    times = given["t_s"][order]
    unit, observer = given["los"][order], given["observer_km"][order]
    moving = np.zeros((count, 3))
    if light_time and "center_velocity_km_s" in given:
        moving = given["center_velocity_km_s"][order]
    with np.errstate(all="ignore"):
        unit = unit / np.sqrt(np.sum(unit * unit, axis=1))[:, None]
    rows = tuple(int(k) for k in order)
    ordered = None if sigma is None else sigma[order]
    problem = _problem(unit, observer, moving, times)
    return LineSet(rows, unit, observer, moving, times, float(gm_km3_s2), bool(light_time), ordered, problem)


class Misses(NamedTuple):
    """An orbit seen at the lines.

    ``residual`` (..., k, 2) rad observed minus computed, ``partials`` (..., k, 2, 6) of the residual by the
    state, ``range_km`` and ``emission_t_s`` (..., k), ``positions_km`` (..., k, 3) at emission.
    """

    residual: Array
    partials: Array
    range_km: Array
    emission_t_s: Array
    positions_km: Array


def misses(lines: LineSet, state: Array, t_state_s: float) -> Misses:
    """Residuals of states (..., 6) at the lines, with their partials by the state."""
    states = np.asarray(state, dtype=float)
    flat = states.reshape(-1, 6)
    seen, ranges, emission = predicted_directions(
        flat, t_state_s, lines.t_s, lines.observer_km, lines.moving_km_s, lines.gm_km3_s2, lines.light_time
    )
    with np.errstate(all="ignore"):
        r, v, stm = propagate_with_partials(flat[:, None, :3], flat[:, None, 3:], emission - t_state_s, lines.gm_km3_s2)
        east, north = tangent_axes(lines.unit)
        push = stm[..., :3, :]
        moved = (v + lines.moving_km_s) * lines.per_c
        along = np.einsum("mkc,mkcs->mks", seen, push)
        along = along / (1.0 + np.sum(seen * moved, axis=-1))[..., None]
        path = push - moved[..., :, None] * along[..., None, :]
        axes = np.stack((east, north), axis=1)
        # To first order in the residual the arc between both directions is its projection on the axes.
        across = axes[None] - np.einsum("kac,mkc->mka", axes, seen)[..., None] * seen[:, :, None, :]
        partials = -np.einsum("mkac,mkcs->mkas", across, path) / ranges[..., None, None]
        residual = residuals_rad(lines.unit, seen)
    lead, k = states.shape[:-1], len(lines.rows)
    return Misses(
        residual.reshape(*lead, k, 2),
        partials.reshape(*lead, k, 2, 6),
        ranges.reshape(*lead, k),
        emission.reshape(*lead, k),
        r.reshape(*lead, k, 3),
    )


def observer_velocity(lines: LineSet, at: int) -> Array:
    """Velocity (km/s) of the observer at one of the times, from its own positions; shape (3,).

    Derivative of the parabola through the observation, the farthest earlier one and the farthest later one;
    at either end, and with two observations, of the nearest three or the chord.
    """
    k = len(lines.rows)
    r, t = lines.observer_km, lines.t_s
    if k == 2:
        return (r[1] - r[0]) / (t[1] - t[0])
    low, mid, high = (0, at, k - 1) if 0 < at < k - 1 else ((0, 1, 2) if at == 0 else (k - 3, k - 2, k - 1))
    before, after = (r[mid] - r[low]) / (t[mid] - t[low]), (r[high] - r[mid]) / (t[high] - t[mid])
    bend = (after - before) / (t[high] - t[low])
    velocity: Array = before + bend * (2.0 * t[at] - t[low] - t[mid])
    return velocity


def rejected(method: str, assumption: str, lines: LineSet, outcome: Outcome, sentence: str) -> MethodOrbit:
    """A result without an orbit."""
    return without_orbit(method, lines.rows, outcome, sentence, float(lines.t_s[lines.middle]), assumption)


def problem_sentence(problem: Outcome) -> str:
    """Why a set cannot be tried."""
    if problem == Outcome.EQUAL_TIMES:
        return "Two of the observations have the same time: leave one out."
    return "A direction, an observer position, a velocity of the centre or a time is zero or not finite."


def judged(
    state: Array, seen: Misses, lines: LineSet, body_radius_km: float, excess_limit_km_s: float
) -> tuple[Outcome, str, str]:
    """Physical verdict on an orbit: outcome, sentence, remark."""
    gm = lines.gm_km3_s2
    r, v = state[:3], state[3:]
    radius = float(np.sqrt(r @ r))
    excess2 = float(v @ v) - 2.0 * gm / radius
    h = np.cross(r, v)
    p = float(h @ h) / gm
    q = p / (1.0 + np.sqrt(max(1.0 + p * excess2 / gm, 0.0)))
    lowest = float(np.sqrt(np.sum(seen.positions_km**2, axis=-1)).min())
    far = np.sqrt(np.sum(lines.observer_km**2, axis=1))
    own_v = observer_velocity(lines, lines.middle)
    close = float((np.abs(seen.range_km) / far).max())
    if close < OWN_RANGE and np.linalg.norm(v - own_v) < OWN_VELOCITY * np.linalg.norm(own_v):
        text = f"The observer's own orbit: within {close * 100.0:.2g} % of the observer's distance from the centre."
        return Outcome.OWN_ORBIT, text, ""
    if body_radius_km > 0.0 and lowest < body_radius_km:
        return Outcome.BELOW_SURFACE, f"{body_radius_km - lowest:.0f} km below the surface when observed.", ""
    if body_radius_km > 0.0 and q < body_radius_km - GRAZING_KM:
        return Outcome.BELOW_SURFACE, f"Periapsis {body_radius_km - q:.0f} km below the surface.", ""
    if excess2 > excess_limit_km_s**2:
        speed = float(np.sqrt(excess2))
        return Outcome.TOO_FAST, f"Hyperbolic excess {speed:.0f} km/s, limit {excess_limit_km_s:g} km/s.", ""
    remark = ""
    if 0.0 < q < body_radius_km:
        remark = f"Periapsis {body_radius_km - q:.0f} km below the surface: grazing."
    return Outcome.CONVERGED, "Admissible.", remark


def range_sigma(lines: LineSet, state: Array, seen: Misses, covariance: Array) -> float:
    """Sigma (km) of the middle slant range, to first order, of an orbit with this covariance."""
    at = lines.middle
    line = seen.positions_km[at] - lines.observer_km[at]
    along = line / np.sqrt(line @ line)
    return float(np.sqrt(max(along @ covariance[:3, :3] @ along, 0.0)))
