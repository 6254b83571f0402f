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
from math import isfinite, sqrt
from typing import Any, NamedTuple

import numpy as np

from firstarc.preliminary.lines_of_sight import Array, Lines
from firstarc.preliminary.sight_equations import Equations, Orbit, Sight, equations, middle_orbit, newton_step, sighted
from firstarc.preliminary.sight_look import (
    FINAL,
    TIGHT,
    Geometry,
    Lane,
    LaneLook,
    Look,
    Seen,
    angle_map,
    both_lines,
    geometry,
    lanes_of,
    look,
    look_alone,
    loose_alone,
    start_alone,
    start_anomalies,
)
from firstarc.twobody.near_anomaly import Anomaly, near_anomaly

__all__ = ["Geometry", "HistoryRow", "Look", "Refined", "angle_map", "geometry", "joined", "look", "refine", "untried"]

#: Aim for the miss of each line, rad; rounding usually allows it.
MISS_AIM_RAD = 1e-13
#: A miss that still counts as the exact orbit when rounding allows no less.
MISS_LIMIT_RAD = 1e-10
MAX_ITERATIONS = 25
_SMALLEST_STEP = 1.0 / 512.0
#: Lanes are repacked once fewer than this part of them still moves.
_WORTH_LEAVING = 0.8
#: Up to this many lanes plain floats are quicker than arrays; the digits are the same.
_FEW = 12
#: Lanes searched side by side: their rows stay in the cache.
_BLOCK = 4096
#: Steps of a block before what is left of all blocks goes on together.
_TOGETHER = 3


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
    looks : tuple
        With the history: what :class:`Look` keeps of each lane's orbit.
    """

    range_km: Array
    v2_km_s: Array
    miss_rad: Array
    converged: Array
    iterations: Array
    history: tuple[HistoryRow, ...] = ()
    looks: tuple[LaneLook | None, ...] = ()

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
            tuple(self.looks[k] for k in lanes) if self.looks else (),
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
        (*first.looks, *second.looks) if history else (),
    )


def untried(range_km: Array, v2_km_s: Array) -> Refined:
    """Lanes that are not refined at all."""
    m = range_km.shape[1]
    nothing = np.full((3, m), np.nan)
    history = (HistoryRow(np.array(range_km), np.full(m, np.nan), nothing),)
    none = np.zeros(m, dtype=int)
    return Refined(np.array(range_km), np.array(v2_km_s), nothing.copy(), none.astype(bool), none, history, (None,) * m)


def _step_alone(lane: Lane, state: tuple[float, ...], seen: Seen, far: float) -> tuple[float, ...]:
    """Newton's step, limited: it may not turn the range over, nor change the velocity by its own size."""
    one, _, two, _ = both_lines(lane, state, seen)
    drho, dx, dy, dz, outer1, outer3 = newton_step(one, two)
    orbit, rho2 = seen[0], abs(state[1])
    speed = sqrt(2.0 * lane.gm / orbit.r0) + sqrt(orbit.vx * orbit.vx + orbit.vy * orbit.vy + orbit.vz * orbit.vz)
    reach = 0.8 * rho2 if drho < 0.0 else 4.0 * rho2 + far
    limit, size, change = 1.0, abs(drho), sqrt(dx * dx + dy * dy + dz * dz)
    if size > reach:
        limit = reach / size
    if change > speed:
        limit = min(limit, speed / change)
    return limit * outer1, limit * drho, limit * outer3, limit * dx, limit * dy, limit * dz


def _far_alone(lane: Lane) -> float:
    x, y, z = lane.middle[3:]
    return 0.1 * max(abs(x), abs(y), abs(z))


class _Search:
    """One lane of the search in plain floats."""

    def __init__(self, lane: Lane, state: tuple[float, ...], s: tuple[float, float]):
        self.lane, self.state, self.s = lane, state, s
        self.done, self.shrink, self.merit = 0, 1.0, float("nan")
        self.miss = (float("nan"), 0.0, float("nan"))
        self.ranges = state[:3]
        self.step: tuple[float, ...] | None = None
        self.seen: Seen | None = None
        self.history: list[tuple[tuple[float, ...], float, tuple[float, ...]]] = []
        self.far = _far_alone(lane)

    def begin(self) -> bool:
        """First look; True if there is something to improve."""
        try:
            seen = look_alone(self.lane, self.state, *self.s)
        except ZeroDivisionError:
            return False
        return self._keep(self.state, seen)

    def _keep(self, state: tuple[float, ...], seen: Seen) -> bool:
        """Take a look's orbit over and prepare the next step."""
        at1, seen1, miss1, at3, seen3, miss3 = seen[2], seen[3], seen[4], seen[6], seen[7], seen[8]
        loose = loose_alone(seen, *self.s)
        self.state, self.seen, self.s, self.merit = state, seen, (at1[0], at3[0]), miss1 + miss3
        before = self.ranges
        self.ranges = seen1.path / self.lane.first[13], state[1], seen3.path / self.lane.last[13]
        self.miss = sqrt(miss1), 0.0, sqrt(miss3)
        change = float("nan")
        if self.history:
            change = max(abs(a - b) / abs(a) if a else float("inf") for a, b in zip(self.ranges, before, strict=True))
        self.history.append((self.ranges, change, self.miss))
        if not (self.merit > MISS_AIM_RAD**2 or loose) or not isfinite(self.merit):
            return False
        try:
            self.step = _step_alone(self.lane, state, seen, self.far)
        except ZeroDivisionError:
            return False
        return True

    def run(self, iterations: int) -> None:
        """Iterate until there is nothing to improve, or no means."""
        while iterations > 0:
            iterations -= 1
            assert self.step is not None
            shrink = self.shrink
            trial = tuple([a + shrink * b for a, b in zip(self.state, self.step, strict=True)])
            try:
                seen = look_alone(self.lane, trial, *self.s)
                better = seen[4] + seen[8] < self.merit
            except ZeroDivisionError:
                better = False
            if better:
                self.done += 1
                self.shrink = min(1.0, shrink * 3.0)
                if not self._keep(trial, seen):
                    return
            elif self.merit < MISS_LIMIT_RAD**2:
                # What no longer improves below the limit has reached its rounding.
                return
            else:
                self.shrink = shrink * 0.25
                if self.shrink < _SMALLEST_STEP:
                    return


def refine(
    lines: Lines,
    range_km: Array,
    v2_km_s: Array,
    keep_history: bool = False,
    iterations: int = MAX_ITERATIONS,
    tried: Array | None = None,
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
    tried : ndarray of bool, shape (m,), optional
        Lanes to be refined; the others are returned as they are. All, by default.

    Returns
    -------
    Refined
        ``converged`` where every miss is at most ``MISS_LIMIT_RAD``.
    """
    with np.errstate(all="ignore"):
        if tried is not None and not keep_history:
            chosen, order = np.flatnonzero(tried), np.arange(tried.size)
            order[chosen] = tried.size + np.arange(chosen.size)
            some = refine(lines.take(chosen), range_km[:, chosen], v2_km_s[:, chosen], False, iterations)
            return joined(untried(range_km, v2_km_s), some, np.arange(chosen.size)).take(order)
        geo = geometry(lines)
        state = np.concatenate((range_km, v2_km_s), dtype=float)
        if keep_history or state.shape[1] <= _FEW:
            return _refined_alone(geo, state, keep_history, iterations, tried)
        return _refined_lanes(geo, state, start_anomalies(geo, state), iterations)


def _refined_alone(geo: Geometry, state: Array, keep_history: bool, iterations: int, tried: Array | None) -> Refined:
    searches = []
    wanted = [True] * state.shape[1] if tried is None else tried.tolist()
    for lane, orbit, want in zip(lanes_of(geo), state.T.tolist(), wanted, strict=True):
        search = _Search(lane, tuple(orbit), start_alone(lane, orbit))
        if not want:
            search.miss = (search.merit,) * 3
        elif search.begin():
            search.run(iterations)
        searches.append(search)
    m = len(searches)
    history: tuple[HistoryRow, ...] = ()
    if keep_history:
        nothing = (float("nan"),) * 3
        rows = [one.history or [(one.ranges, nothing[0], nothing)] for one in searches]
        longest = max(map(len, rows), default=0)
        table = np.array(
            [[(*r, change, *miss) for r, change, miss in one + one[-1:] * (longest - len(one))] for one in rows]
        ).reshape(m, longest, 7)
        history = tuple(HistoryRow(row[:3], row[3], row[4:]) for row in table.transpose(1, 2, 0))
    ranges = np.array([one.ranges for one in searches]).reshape(m, 3).T
    v2 = np.array([one.state[3:] for one in searches]).reshape(m, 3).T
    miss = np.array([one.miss for one in searches]).reshape(m, 3).T
    done = np.array([one.done for one in searches], dtype=int)
    looks: tuple[LaneLook | None, ...] = ()
    if keep_history:
        looks = tuple(None if one.seen is None else (one.lane, one.state, one.seen) for one in searches)
    return _result(ranges, v2, miss, done, history, looks)


def _result(
    ranges: Array,
    v2: Array,
    miss: Array,
    done: Array,
    history: tuple[HistoryRow, ...] = (),
    looks: tuple[LaneLook | None, ...] = (),
) -> Refined:
    converged = np.asarray((miss <= MISS_LIMIT_RAD).all(axis=0) & np.isfinite(v2).all(axis=0))
    return Refined(ranges, v2, miss, converged, done, history, looks)


def _look_lanes(geo: Geometry, state: Array, s: Array) -> tuple[Orbit, Array, Anomaly, Sight, Array]:
    """The same as :func:`look_alone` for lanes of arrays; both outer lines on the first axis."""
    orbit = middle_orbit(geo.middle, state[1], state[3], state[4], state[5], geo.gm, np.sqrt)
    dt = geo.lines[12]
    if geo.per_c:
        dt = dt - (state[0:3:2] - state[1]) * geo.per_c
    at = near_anomaly(s, orbit.r0, orbit.eta, orbit.beta, dt, geo.gm, FINAL)
    seen = sighted(geo.lines, orbit, at, dt, geo.gm)
    miss = (seen.east * seen.east + seen.north * seen.north) / (seen.path * seen.path)
    return orbit, dt, at, seen, miss


def _half(part: Any, which: int) -> Any:
    """One of the two outer lines of a row or of a vector of rows."""
    if isinstance(part, tuple):
        return tuple(one[which] for one in part)
    return part[which] if isinstance(part, np.ndarray) else part


def _step_lanes(geo: Geometry, state: Array, orbit: Orbit, dt: Array, at: Anomaly, seen: Sight, far: Array) -> Array:
    """Newton's limited steps, (6, m)."""
    both, _ = equations(geo.lines, geo.middle, orbit, at, seen, dt, state[0:3:2], geo.gm, geo.per_c)
    one, two = (Equations(*(_half(part, k) for part in both)) for k in (0, 1))
    drho, dx, dy, dz, outer1, outer3 = newton_step(one, two)
    rho2 = np.abs(state[1])
    speed = np.sqrt(2.0 * geo.gm / orbit.r0) + np.sqrt(orbit.vx * orbit.vx + orbit.vy * orbit.vy + orbit.vz * orbit.vz)
    reach = np.where(drho < 0.0, 0.8 * rho2, 4.0 * rho2 + far)
    size, change = np.abs(drho), np.sqrt(dx * dx + dy * dy + dz * dz)
    limit = np.where(size > reach, reach / size, 1.0)
    limit = np.where(change > speed, np.fmin(limit, speed / change), limit)
    step = np.empty((6, drho.size))
    step[0], step[1], step[2], step[3], step[4], step[5] = outer1, drho, outer3, dx, dy, dz
    step *= limit
    return step


class _Front(NamedTuple):
    """Lanes still searched: their place, geometry, state (6, m), universal variables, next step and its scale."""

    place: Array
    geo: Geometry
    state: Array
    s: Array
    step: Array
    merit: Array
    shrink: Array
    far: Array


class _Found(NamedTuple):
    """Where the lanes' best orbits are written."""

    range_km: Array
    v2_km_s: Array
    miss_rad: Array
    done: Array

    def write(self, place: Array | slice, state: Array, own: Array, miss: Array) -> None:
        """Orbits of one look: own ranges and squared misses of the outer lines."""
        self.range_km[0, place], self.range_km[1, place], self.range_km[2, place] = own[0], state[1], own[1]
        self.v2_km_s[:, place] = state[3:]
        self.miss_rad[0, place], self.miss_rad[2, place] = np.sqrt(miss[0]), np.sqrt(miss[1])
        self.miss_rad[1, place] = 0.0


def _refined_lanes(geo: Geometry, state: Array, s: Array, iterations: int) -> Refined:
    m = state.shape[1]
    found = _Found(state[:3].copy(), state[3:].copy(), np.full((3, m), np.nan), np.zeros(m, dtype=int))
    fronts = []
    # Blocks that stay in the cache; what is left of them after a few steps goes on together.
    together = min(_TOGETHER, iterations)
    for begin in range(0, m, _BLOCK):
        block = slice(begin, min(begin + _BLOCK, m))
        part = geo._replace(lines=geo.lines[:, :, block], middle=geo.middle[:, block])
        front = _begun(part, state[:, block], s[:, block], block, found)
        front = _advanced(front, found, together)
        if front is not None:
            fronts.append(front)
    if fronts:
        _advanced(_joined_fronts(fronts), found, iterations - together, last=True)
    return _result(*found)


def _joined_fronts(fronts: list[_Front]) -> _Front:
    if len(fronts) == 1:
        return fronts[0]
    parts = {
        name: np.concatenate([getattr(one, name) for one in fronts], axis=-1)
        for name in _Front._fields
        if name != "geo"
    }
    lines = np.concatenate([one.geo.lines for one in fronts], axis=-1)
    middle = np.concatenate([one.geo.middle for one in fronts], axis=-1)
    return _Front(geo=fronts[0].geo._replace(lines=lines, middle=middle), **parts)


def _begun(geo: Geometry, state: Array, s: Array, block: slice, found: _Found) -> _Front | None:
    """First look of a block of lanes."""
    orbit, dt, at, seen, miss = _look_lanes(geo, state, s)
    found.write(block, state, seen.path / geo.lines[13], miss)
    merit = miss[0] + miss[1]
    going = ((merit > MISS_AIM_RAD**2) | _loose(at, s)) & np.isfinite(merit)
    if not going.any():
        return None
    far = 0.1 * np.abs(geo.middle[3:]).max(axis=0)
    step = _step_lanes(geo, state, orbit, dt, at, seen, far)
    front = _Front(np.arange(block.start, block.stop), geo, state, at[0], step, merit, np.ones(merit.size), far)
    return front if going.all() else _kept(front, np.flatnonzero(going))


def _loose(at: Anomaly, s: Array) -> Array:
    far: Array = np.abs(at[0] - s) > TIGHT * np.abs(at[0])
    return far[0] | far[1]


def _kept(front: _Front, keep: Array) -> _Front:
    geo = front.geo
    return _Front(
        front.place[keep],
        geo._replace(lines=geo.lines.take(keep, -1), middle=geo.middle.take(keep, -1)),
        front.state.take(keep, -1),
        front.s.take(keep, -1),
        front.step.take(keep, -1),
        front.merit[keep],
        front.shrink[keep],
        front.far[keep],
    )


def _advanced(front: _Front | None, found: _Found, trials: int, last: bool = False) -> _Front | None:
    """Iterate; None once nothing is left to improve."""
    while front is not None and trials:
        if last and front.merit.size <= _FEW:
            _finished_alone(front, found, trials)
            return None
        trials -= 1
        place, geo, state, s, step, merit, shrink, far = front
        trial = state + shrink * step
        orbit, dt, at, seen, miss = _look_lanes(geo, trial, s)
        new = miss[0] + miss[1]
        better = new < merit
        own = seen.path / geo.lines[13]
        if better.all():
            found.write(place, trial, own, miss)
            found.done[place] += 1
            state, merit, shrink = trial, new, np.minimum(1.0, shrink * 3.0)
            going = (merit > MISS_AIM_RAD**2) | _loose(at, s)
            s = at[0]
        else:
            good = np.flatnonzero(better)
            found.write(place[good], trial[:, good], own[:, good], miss[:, good])
            found.done[place[good]] += 1
            # What no longer improves below the limit has reached its rounding; elsewhere the step is shortened.
            going = np.where(
                better,
                (new > MISS_AIM_RAD**2) | _loose(at, s),
                (merit >= MISS_LIMIT_RAD**2) & (shrink * 0.25 >= _SMALLEST_STEP),
            )
            shrink = np.where(better, np.minimum(1.0, shrink * 3.0), shrink * 0.25)
            state, s, merit = np.where(better, trial, state), np.where(better, at[0], s), np.where(better, new, merit)
        count = int(np.count_nonzero(going))
        if not count:
            return None
        if count < going.size and (count < _WORTH_LEAVING * going.size or count <= _FEW):
            keep = np.flatnonzero(going)
            front = _kept(_Front(place, geo, state, s, step, merit, shrink, far), keep)
            place, geo, state, s, step, merit, shrink, far = front
            orbit, dt = Orbit(*(k.take(keep) for k in orbit)), dt.take(keep, -1)
            better, going = better[keep], going[keep]
            at, seen = tuple(k.take(keep, -1) for k in at), Sight(*(k.take(keep, -1) for k in seen))
        fresh = _step_lanes(geo, state, orbit, dt, at, seen, far) if better.any() else step
        step = fresh if better.all() else np.where(better, fresh, step)
        if count < going.size:
            # Lanes that are done wait for the next repacking: a step of nothing is never better.
            step = np.where(going, step, 0.0)
            merit = np.where(going, merit, 0.0)
        front = _Front(place, geo, state, s, step, merit, shrink, far)
    return front


def _finished_alone(front: _Front, found: _Found, trials: int) -> None:
    """The last few lanes go on in plain floats, where arrays would cost more than the arithmetic."""
    state, s, step = front.state.T.tolist(), front.s.T.tolist(), front.step.T.tolist()
    for k, lane in enumerate(lanes_of(front.geo)):
        search = _Search(lane, tuple(state[k]), tuple(s[k]))
        search.merit, search.shrink, search.step = float(front.merit[k]), float(front.shrink[k]), tuple(step[k])
        search.run(trials)
        if search.done:
            place = front.place[k]
            found.range_km[:, place], found.v2_km_s[:, place] = search.ranges, search.state[3:]
            found.miss_rad[:, place] = search.miss
            found.done[place] += search.done
