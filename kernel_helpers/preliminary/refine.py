"""The exact two-body orbit through three lines of sight, light time included.

Unknowns are the middle slant range and velocity (4); equations, the two components across each outer line of
sight of  r(t_i - rho_i/c) = R_i + rho_i L'_i  (4), the outer ranges being eliminated. Newton's iteration with
analytic partials of the two-body motion (Battin 1999, section 9.7), steps limited and shortened until the
misses of the outer lines decrease. The middle line is met by construction.

Replacing f and g outright, the textbook loop, diverges for most distant satellites; it is kept in
:mod:`firstarc.preliminary.textbook_loop` for the record only.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from firstarc.preliminary.lines_of_sight import Array, Lines, cross, dot, tangent_frame
from firstarc.twobody.kepler import Universal, battin_c, lagrange, solve_universal

#: Aim for the miss of each line, rad; rounding usually allows it.
MISS_AIM_RAD = 1e-13
#: A miss that still counts as the exact orbit when rounding allows no less.
MISS_LIMIT_RAD = 1e-10
MAX_ITERATIONS = 25
_SMALLEST_STEP = 1.0 / 512.0
#: Lanes are repacked once fewer than this part of them still moves.
_WORTH_LEAVING = 0.8


class HistoryRow(NamedTuple):
    """One iteration: slant ranges (3, m) km, largest relative change of a range, misses (3, m) rad."""

    range_km: Array
    change: Array
    miss_rad: Array


@dataclass(frozen=True)
class Refined:
    """Orbits through the lines; lanes last.

    Parameters
    ----------
    range_km : ndarray, shape (3, m)
    v2_km_s : ndarray, shape (3, m)
        Velocity at the middle emission time.
    miss_rad : ndarray, shape (3, m)
        Angle by which the orbit misses each line (the middle one is met by construction).
    converged : ndarray of bool, shape (m,)
    iterations : ndarray of int, shape (m,)
    history : tuple of HistoryRow
        Empty unless asked for.
    """

    range_km: Array
    v2_km_s: Array
    miss_rad: Array
    converged: Array
    iterations: Array
    history: tuple[HistoryRow, ...] = ()

    def take(self, lanes: Array) -> Refined:
        """The chosen lanes, in the given order."""
        history = tuple(HistoryRow(*(part[..., lanes] for part in row)) for row in self.history)
        return Refined(
            self.range_km[:, lanes],
            self.v2_km_s[:, lanes],
            self.miss_rad[:, lanes],
            self.converged[lanes],
            self.iterations[lanes],
            history,
        )


def joined(first: Refined, second: Refined, lanes: Array) -> Refined:
    """Lanes of the first, then the chosen ones of the second; a shorter history repeats its last row."""
    second = second.take(lanes)
    length = max(len(first.history), len(second.history)) if first.history and second.history else 0
    rows = [[one.history[min(k, len(one.history) - 1)] for k in range(length)] for one in (first, second)]
    history = tuple(
        HistoryRow(*(np.concatenate(pair, axis=-1) for pair in zip(a, b, strict=False)))
        for a, b in zip(rows[0], rows[1], strict=False)
    )
    return Refined(
        np.concatenate((first.range_km, second.range_km), axis=1),
        np.concatenate((first.v2_km_s, second.v2_km_s), axis=1),
        np.concatenate((first.miss_rad, second.miss_rad), axis=1),
        np.concatenate((first.converged, second.converged)),
        np.concatenate((first.iterations, second.iterations)),
        history,
    )


def untried(range_km: Array, v2_km_s: Array) -> Refined:
    """Lanes that are not refined at all."""
    m = range_km.shape[1]
    nothing = np.full((3, m), np.nan)
    history = (HistoryRow(np.array(range_km), np.full(m, np.nan), nothing),)
    none = np.zeros(m, dtype=int)
    return Refined(np.array(range_km), np.array(v2_km_s), nothing.copy(), none.astype(bool), none, history)


class Geometry(NamedTuple):
    """What stays fixed while an orbit is sought: frames of the lines and projections on them.

    Arc axis: first and last observation. ``frame`` (3 axes, 2 arcs, 3, m): east, north, along.
    """

    frame: Array
    on_r2: Array
    on_l2: Array
    on_observer: Array
    on_los: Array
    l2: Array
    observer2: Array
    t_s: Array
    gm: float
    per_c: float

    def take(self, lanes: Array | slice) -> Geometry:
        parts = {name: part[..., lanes] for name, part in self._asdict().items() if name not in ("gm", "per_c")}
        return self._replace(**parts)


def geometry(lines: Lines) -> Geometry:
    """Frames and projections of each lane."""
    frame = tangent_frame(lines.unit[::2])
    l2, observer2 = lines.effective[1], lines.observer_km[1]
    return Geometry(
        frame,
        dot(frame, observer2),
        dot(frame, l2),
        dot(frame, lines.observer_km[::2][None]),
        dot(frame, lines.effective[::2][None]),
        l2,
        observer2,
        lines.t_s[::2],
        lines.gm_km3_s2,
        lines.per_c,
    )


class Look(NamedTuple):
    """The orbit (rho2, v2) seen at the outer lines; arcs before lanes, axes of the frame first.

    ``residual`` (3, 2, m) km is r_i - R_i - rho_i L'_i on the frame; the rest is what the partials need.
    """

    residual: Array
    range_km: Array
    miss_rad: Array
    r2: Array
    v2: Array
    beta: Array
    dt: Array
    r0: Array
    u: Universal
    fg: tuple[Array, Array, Array, Array]
    b_r0: Array
    b_v0: Array
    b_r: Array
    b_v: Array


class System(NamedTuple):
    """Partials of the residuals by v2 (``rows``: 3 axes, 2 arcs, 3, m) and by rho2 (``slope``: 3, 2, m).

    ``closing`` (3, 2, m) is minus the partials by the own range of each outer line.
    """

    rows: Array
    slope: Array
    closing: Array
    along_r: Array
    along_v: Array


def look(geo: Geometry, range_km: Array, v2: Array, s_start: Array | None = None) -> Look:
    """Residuals of an orbit at the outer lines.

    ``range_km`` (3, m) holds the ranges used for light time; the misses are taken at the best own range,
    which ``Look.range_km`` returns.
    """
    gm, per_c = geo.gm, geo.per_c
    rho2 = range_km[1]
    r2 = geo.observer2 + rho2 * geo.l2
    dt = geo.t_s
    if per_c:
        dt = dt - (range_km[::2] - rho2) * per_c
    radius = np.sqrt(dot(r2, r2))
    beta = 2.0 * gm / radius - dot(v2, v2)
    twice = np.empty((3, *dt.shape))
    twice[0], twice[1], twice[2] = radius, dot(r2, v2), beta
    r0, eta, beta = twice
    u = solve_universal(r0, eta, beta, dt, gm, s_start)
    fg = f, g, ft, gt = lagrange(u, r0, dt, gm)
    b_r0 = geo.on_r2 + rho2 * geo.on_l2
    b_v0 = dot(geo.frame, v2)
    b_r = f * b_r0 + g * b_v0
    b_v = ft * b_r0 + gt * b_v0
    away = b_r - geo.on_observer
    own = away[2] / geo.on_los[2]
    across = away[:2] - own * geo.on_los[:2]
    residual = away - range_km[::2] * geo.on_los
    miss = np.zeros((3, radius.size))
    miss[::2] = np.sqrt(across[0] * across[0] + across[1] * across[1]) / np.abs(own)
    ranges = range_km.copy()
    ranges[::2] = own
    return Look(residual, ranges, miss, r2, v2, beta, dt, r0, u, fg, b_r0, b_v0, b_r, b_v)


def partials(geo: Geometry, seen: Look) -> System:
    """Partials of the residuals of a look."""
    gm = geo.gm
    f, g, ft, gt = seen.fg
    c = battin_c(seen.u, seen.beta, seen.dt, gm)
    k = seen.r0 * (1.0 - f)
    b_dv = seen.b_v - seen.b_v0
    alpha = (k * (seen.b_r - seen.b_r0) + c * seen.b_v) / gm
    gamma = (-1.0 / gm) * k * b_dv
    rows = alpha[..., None, :] * seen.v2 + gamma[..., None, :] * seen.r2 + g[:, None, :] * geo.frame
    # Effect of a displacement d of the middle position: along_v (v2 . d) + along_r (r2 . d) + f (frame . d).
    along_v = (seen.u.r / gm) * b_dv
    along_r = (k * seen.b_r + c * seen.b_v) / seen.r0**3 + ft * along_v
    along_v = (gt - 1.0) * along_v
    slope = along_v * dot(seen.v2, geo.l2) + along_r * dot(seen.r2, geo.l2) + f * geo.on_l2
    closing = geo.on_los
    if geo.per_c:
        slope += geo.per_c * seen.b_v
        closing = closing + geo.per_c * seen.b_v
    return System(rows, slope, closing, along_r, along_v)


def _eliminated(system: System) -> tuple[Array, Array, Array]:
    """kappa, rows (2, 2, 3, m) and slope (2, 2, m) once each outer range is eliminated."""
    kappa = system.closing[:2] / system.closing[2]
    rows = system.rows[:2] - kappa[:, :, None, :] * system.rows[2]
    slope = system.slope[:2] - kappa * system.slope[2]
    return kappa, rows, slope


def _solve(rows: Array, slope: Array, right: Array) -> tuple[Array, Array]:
    """Solve rows . dv + slope drho = right for dv (..., 3, m) and drho; ``right`` (k, 2, 2, m) for k cases.

    The two rows of an arc fix dv up to a multiple of their vector product, so that two equations remain.
    """
    a, b = rows[0, 0], rows[1, 0]
    n = cross(a, b)
    size = dot(n, n)
    bn, na = cross(b, n) / size, cross(n, a) / size
    w = -slope[0, 0] * bn - slope[1, 0] * na
    # Last arc: dv = base + w drho + n x.
    last = rows[:, 1]
    p = dot(last, w) + slope[:, 1]
    q = dot(last, n)
    det = p[0] * q[1] - p[1] * q[0]
    base = right[:, 0, 0, None, :] * bn + right[:, 1, 0, None, :] * na
    rest = right[:, :, 1] - np.add.reduce(last * base[:, None], axis=-2)
    drho = (rest[:, 0] * q[1] - rest[:, 1] * q[0]) / det
    x = (p[0] * rest[:, 1] - p[1] * rest[:, 0]) / det
    return base + w * drho[:, None, :] + n * x[:, None, :], drho


def newton_step(geo: Geometry, seen: Look) -> tuple[Array, Array, Array]:
    """Newton's correction: middle range (m,), velocity (3, m), and the outer ranges (2, m)."""
    system = partials(geo, seen)
    kappa, rows, slope = _eliminated(system)
    residual = seen.residual
    dv, drho = _solve(rows, slope, (kappa * residual[2] - residual[:2])[None])
    dv, drho = dv[0], drho[0]
    outer = (residual[2] + dot(system.rows[2], dv) + system.slope[2] * drho) / system.closing[2]
    return drho, dv, outer


def refine(
    lines: Lines,
    range_km: Array,
    v2_km_s: Array,
    keep_history: bool = False,
    iterations: int = MAX_ITERATIONS,
) -> Refined:
    """Newton's iteration from a start to the two-body orbit through the three lines.

    Parameters
    ----------
    lines : Lines
        m lanes.
    range_km : ndarray, shape (3, m)
        Starting slant ranges; the outer ones only time the light.
    v2_km_s : ndarray, shape (3, m)
        Starting velocity at the middle.
    keep_history : bool
        Keep every accepted iteration of every lane.
    iterations : int
        Largest number of steps tried.

    Returns
    -------
    Refined
        ``converged`` where every miss is at most ``MISS_LIMIT_RAD``.
    """
    with np.errstate(all="ignore"):
        return _refine(lines, range_km, v2_km_s, keep_history, iterations)


def _refine(lines: Lines, range_km: Array, v2_km_s: Array, keep_history: bool, iterations: int) -> Refined:
    m = range_km.shape[1]
    out_range, out_v, out_miss = np.array(range_km, float), np.array(v2_km_s, float), np.full((3, m), np.nan)
    done_at = np.zeros(m, dtype=int)
    history: list[HistoryRow] = []
    lanes: Array | slice = slice(None)
    geo = geometry(lines)
    ranges, v2 = out_range.copy(), out_v.copy()
    now = look(geo, ranges, v2)
    merit = now.miss_rad[0] ** 2 + now.miss_rad[2] ** 2
    out_range[:], out_miss[:] = now.range_km, now.miss_rad
    if keep_history:
        history.append(HistoryRow(out_range.copy(), np.full(m, np.nan), out_miss.copy()))
    step: tuple[Array, Array, Array] | None = None
    shrink = np.ones(m)
    going = merit > MISS_AIM_RAD**2
    far = 0.1 * np.abs(geo.observer2).max(axis=0)
    for _ in range(iterations):
        if not going.any():
            break
        if np.count_nonzero(going) < _WORTH_LEAVING * going.size and going.size > 8:
            keep = np.flatnonzero(going)
            lanes = keep if isinstance(lanes, slice) else lanes[keep]
            shrink, merit, going, far = shrink[keep], merit[keep], going[keep], far[keep]
            ranges, v2, geo, now = ranges[:, keep], v2[:, keep], geo.take(keep), _take(now, keep)
            step = None
        if step is None:
            step = newton_step(geo, now)
        drho, dv, outer = step
        speed = np.sqrt(2.0 * lines.gm_km3_s2 / now.r0[0]) + np.sqrt(dot(v2, v2))
        # A step may not turn the range over, nor change the velocity by more than its own size.
        rho2 = np.abs(ranges[1])
        reach = np.where(drho < 0.0, 0.8 * rho2, 4.0 * rho2 + far)
        limit = np.fmin(reach / np.abs(drho), speed / np.sqrt(dot(dv, dv)))
        scale = shrink * np.fmin(1.0, limit)
        trial_range = ranges.copy()
        trial_range[1] += scale * drho
        trial_range[::2] += scale * outer
        trial_v = v2 + scale * dv
        trial = look(geo, trial_range, trial_v, now.u.s)
        new = trial.miss_rad[0] ** 2 + trial.miss_rad[2] ** 2
        better = (new < merit) & going
        whole = bool(better.all())
        # What no longer improves below the limit has reached its rounding; elsewhere the step is shortened.
        settled = ~better & (merit < MISS_LIMIT_RAD**2)
        shrink = np.where(better, np.minimum(1.0, shrink * 3.0), shrink * 0.25)
        if whole:
            ranges, v2, now, merit, step = trial_range, trial_v, trial, new, None
        elif better.any():
            ranges = np.where(better, trial_range, ranges)
            v2 = np.where(better, trial_v, v2)
            now = _merged(better, trial, now)
            merit = np.where(better, new, merit)
            step = None
        change = np.abs(now.range_km - out_range[:, lanes]) / np.abs(now.range_km) if keep_history else None
        out_range[:, lanes], out_v[:, lanes], out_miss[:, lanes] = now.range_km, v2, now.miss_rad
        done_at[lanes] += better
        if change is not None and better.any():
            largest = np.zeros(m)
            largest[lanes] = change.max(axis=0)
            history.append(HistoryRow(out_range.copy(), largest, out_miss.copy()))
        # A merit that is not finite ends its lane; a trial that is not finite was a step too long.
        going = going & ~settled & (merit > MISS_AIM_RAD**2) & (shrink >= _SMALLEST_STEP) & np.isfinite(merit)
    converged = (out_miss <= MISS_LIMIT_RAD).all(axis=0) & np.isfinite(out_v).all(axis=0)
    return Refined(out_range, out_v, out_miss, converged, done_at, tuple(history))


def _take(seen: Look, lanes: Array | slice) -> Look:
    u, fg = Universal(*(k[..., lanes] for k in seen.u)), tuple(k[..., lanes] for k in seen.fg)
    parts = {name: part[..., lanes] for name, part in seen._asdict().items() if name not in ("u", "fg")}
    return Look(**parts, u=u, fg=fg)  # type: ignore[arg-type]


def _merged(mask: Array, new: Look, old: Look) -> Look:
    u = Universal(*(np.where(mask, a, b) for a, b in zip(new.u, old.u, strict=False)))
    fg = tuple(np.where(mask, a, b) for a, b in zip(new.fg, old.fg, strict=False))
    old_parts = old._asdict()
    parts = {
        name: np.where(mask, part, old_parts[name]) for name, part in new._asdict().items() if name not in ("u", "fg")
    }
    return Look(**parts, u=u, fg=fg)  # type: ignore[arg-type]


def last_lanes(geo: Geometry, seen: Look, begin: int) -> tuple[Geometry, Look]:
    """The lanes from ``begin`` on, as views."""
    lanes = slice(begin, None)
    return geo.take(lanes), _take(seen, lanes)


def angle_map(lines: Lines, range_km: Array, geo: Geometry, seen: Look) -> tuple[Array, Array, Array]:
    """First-order effect of the six angles on the orbit through the lines.

    Parameters
    ----------
    lines : Lines
    range_km : ndarray, shape (3, m)
        Slant ranges of the converged orbit.
    geo : Geometry
        Of the lines.
    seen : Look
        The converged orbit seen at the outer lines.

    Returns
    -------
    d_range : ndarray, shape (6, m)
        Partials of the middle range (km/rad) by (d alpha cos delta, d delta) of lines 1, 2, 3 in turn.
    d_r2 : ndarray, shape (6, 3, m)
        Partials of the middle position at its emission time.
    d_v2 : ndarray, shape (6, 3, m)
        Partials of the middle velocity.
    """
    with np.errstate(all="ignore"):
        system = partials(geo, seen)
        kappa, rows, slope = _eliminated(system)
        axes = tangent_frame(lines.unit[1])[:2]
        right = np.zeros((6, 2, 2, range_km.shape[1]))
        for arc, line in ((0, 0), (1, 2)):
            for axis in (0, 1):
                # The frame stays, the line turns; along the frame's third axis nothing changes.
                right[2 * line + axis, axis, arc] = range_km[line]
        for axis in (0, 1):
            # Turning the middle line displaces the middle position.
            shift = axes[axis] * range_km[1]
            effect = (
                system.along_v * dot(seen.v2, shift)
                + system.along_r * dot(seen.r2, shift)
                + seen.fg[0] * dot(geo.frame, shift)
            )
            right[2 + axis] = kappa * effect[2] - effect[:2]
        dv, drho = _solve(rows, slope, right)
        d_r2 = drho[:, None, :] * lines.effective[1]
        d_r2[2:4] += axes * range_km[1]
        return drho, d_r2, dv
