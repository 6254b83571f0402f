"""One orbit as its outer observations would see it, and what the six angles do to it.

The middle range and velocity are given; :mod:`firstarc.preliminary.refine` moves them until nothing is missed. Lanes
here are taken one by one in plain floats (see :mod:`firstarc.preliminary.sight_equations`).
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt
from typing import NamedTuple

import numpy as np

from firstarc.preliminary.lines_of_sight import Array, Lines
from firstarc.preliminary.sight_equations import (
    LINE_ROWS,
    Equations,
    Flow,
    Orbit,
    Sight,
    equations,
    factored,
    middle_orbit,
    shifted_middle,
    sighted,
    solution,
    turned_line,
)
from firstarc.twobody.near_anomaly import Anomaly, first_anomaly, first_anomaly_alone, near_anomaly_alone

#: Relative step of a universal variable that Taylor's series may take: its cube is what it leaves.
FINAL = 1e-3
#: A look that moved a universal variable by more than this is looked at again before it counts as final.
TIGHT = 3e-5


class Geometry(NamedTuple):
    """What stays fixed while an orbit is sought.

    ``lines`` (14, 2, m): the rows of the first and last line; ``middle`` (6, m): those of the middle one (see
    :mod:`firstarc.preliminary.sight_equations`).
    """

    lines: Array
    middle: Array
    gm: float
    per_c: float


def geometry(lines: Lines) -> Geometry:
    """Axes of the outer lines and the fixed rows of each lane."""
    m = lines.t_s.shape[1]
    rows = np.empty((LINE_ROWS, 2, m))
    outer = lines.effective[::2]
    size = np.sqrt(np.add.reduce(outer * outer, axis=1))
    along = outer / size[:, None]
    x, y, z = along[:, 0], along[:, 1], along[:, 2]
    flat = np.sqrt(x * x + y * y)
    polar = flat < 1e-300
    if polar.any():
        flat = np.where(polar, 1.0, flat)
        x = np.where(polar, 1.0, x)
    east_x, east_y = -y / flat, x / flat
    rows[0], rows[1], rows[2] = east_x, east_y, 0.0
    rows[3], rows[4], rows[5] = -z * east_y, z * east_x, np.where(polar, 0.0, flat)
    rows[6:9] = along.transpose(1, 0, 2)
    rows[9:12] = lines.observer_km[::2].transpose(1, 0, 2)
    rows[12] = lines.t_s[::2]
    rows[13] = size
    return Geometry(rows, np.concatenate((lines.effective[1], lines.observer_km[1])), lines.gm_km3_s2, lines.per_c)


class Lane(NamedTuple):
    """Geometry of one lane in plain floats."""

    first: list[float]
    last: list[float]
    middle: list[float]
    gm: float
    per_c: float


def lanes_of(geo: Geometry) -> list[Lane]:
    lines = geo.lines.transpose(2, 1, 0).tolist()
    return [
        Lane(first, last, middle, geo.gm, geo.per_c)
        for (first, last), middle in zip(lines, geo.middle.T.tolist(), strict=True)
    ]


def start_anomalies(geo: Geometry, state: Array) -> Array:
    """Universal variables (2, m) to start from."""
    orbit = middle_orbit(geo.middle, state[1], state[3], state[4], state[5], geo.gm, np.sqrt)
    dt = geo.lines[12]
    if geo.per_c:
        dt = dt - (state[0:3:2] - state[1]) * geo.per_c
    return first_anomaly(orbit.r0, orbit.eta, orbit.beta, dt, geo.gm)


def start_alone(lane: Lane, state: tuple[float, ...]) -> tuple[float, float]:
    """The same as :func:`start_anomalies` for one lane."""
    first, last, middle, gm, per_c = lane
    rho1, rho2, rho3, vx, vy, vz = state
    dt1, dt3 = first[12], last[12]
    if per_c:
        dt1, dt3 = dt1 - (rho1 - rho2) * per_c, dt3 - (rho3 - rho2) * per_c
    try:
        r0, eta, beta = middle_orbit(middle, rho2, vx, vy, vz, gm, sqrt)[6:9]
        return first_anomaly_alone(r0, eta, beta, dt1, gm), first_anomaly_alone(r0, eta, beta, dt3, gm)
    except ZeroDivisionError:
        return float("nan"), float("nan")


#: What one look yields: middle orbit, then per outer line time step, anomaly, sight and squared miss.
Seen = tuple[Orbit, float, Anomaly, Sight, float, float, Anomaly, Sight, float]


#: A lane's geometry, its orbit's ranges and velocity, and what one look yields.
LaneLook = tuple[Lane, tuple[float, ...], Seen]


def look_alone(lane: Lane, state: tuple[float, ...], s1: float, s3: float, final: float = FINAL) -> Seen:
    first, last, middle, gm, per_c = lane
    rho1, rho2, rho3, vx, vy, vz = state
    orbit = middle_orbit(middle, rho2, vx, vy, vz, gm, sqrt)
    dt1, dt3 = first[12], last[12]
    if per_c:
        dt1, dt3 = dt1 - (rho1 - rho2) * per_c, dt3 - (rho3 - rho2) * per_c
    r0, eta, beta = orbit.r0, orbit.eta, orbit.beta
    at1 = near_anomaly_alone(s1, r0, eta, beta, dt1, gm, final)
    at3 = near_anomaly_alone(s3, r0, eta, beta, dt3, gm, final)
    seen1, seen3 = sighted(first, orbit, at1, dt1, gm), sighted(last, orbit, at3, dt3, gm)
    miss1 = (seen1.east * seen1.east + seen1.north * seen1.north) / (seen1.path * seen1.path)
    miss3 = (seen3.east * seen3.east + seen3.north * seen3.north) / (seen3.path * seen3.path)
    return orbit, dt1, at1, seen1, miss1, dt3, at3, seen3, miss3


def both_lines(lane: Lane, state: tuple[float, ...], seen: Seen) -> tuple[Equations, Flow, Equations, Flow]:
    """Equations of both outer lines."""
    first, last, middle, gm, per_c = lane
    orbit, dt1, at1, seen1, _, dt3, at3, seen3, _ = seen
    one, flow1 = equations(first, middle, orbit, at1, seen1, dt1, state[0], gm, per_c)
    two, flow3 = equations(last, middle, orbit, at3, seen3, dt3, state[2], gm, per_c)
    return one, flow1, two, flow3


def loose_alone(seen: Seen, s1: float, s3: float) -> bool:
    """True if the universal variables moved so much that Taylor's series left more than rounding."""
    first, last = seen[2][0], seen[6][0]
    return abs(first - s1) > TIGHT * abs(first) or abs(last - s3) > TIGHT * abs(last)


class Look(NamedTuple):
    """Orbits seen at the outer lines: ranges (3, m) km, misses (3, m) rad, and what the partials need."""

    range_km: Array
    miss_rad: Array
    lanes: Sequence[LaneLook | None]


def look(geo: Geometry, range_km: Array, v2: Array) -> Look:
    """Orbits of given middle range and velocity as the outer observations would see them.

    ``range_km`` (3, m) holds the ranges used for light time; the misses are taken at the best own range,
    which ``Look.range_km`` returns.
    """
    with np.errstate(all="ignore"):
        state = np.concatenate((range_km, v2), dtype=float)
        ranges, misses = np.array(range_km, dtype=float), np.full(range_km.shape, np.nan)
        lanes: list[LaneLook | None] = []
        for k, (lane, orbit) in enumerate(zip(lanes_of(geo), state.T.tolist(), strict=True)):
            s1, s3 = start_alone(lane, orbit)
            try:
                seen = look_alone(lane, orbit, s1, s3, TIGHT)
            except ZeroDivisionError:
                lanes.append(None)
                continue
            ranges[0, k], ranges[2, k] = seen[3].path / lane.first[13], seen[7].path / lane.last[13]
            misses[:, k] = sqrt(seen[4]), 0.0, sqrt(seen[8])
            lanes.append((lane, orbit, seen))
    return Look(ranges, misses, lanes)


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
        The converged orbits seen at the outer lines.

    Returns
    -------
    d_range : ndarray, shape (6, m)
        Partials of the middle range (km/rad) by (d alpha cos delta, d delta) of lines 1, 2, 3 in turn.
    d_r2 : ndarray, shape (6, 3, m)
        Partials of the middle position at its emission time.
    d_v2 : ndarray, shape (6, 3, m)
        Partials of the middle velocity. All are NaN where there is no orbit.
    """
    m = range_km.shape[1]
    out = np.full((m, 6, 7), np.nan)
    # Axes east and north of each line (observation, axis, component), by lane.
    axes = lines.frame[:2].transpose(3, 1, 0, 2).tolist()
    for k, given in enumerate(seen.lanes):
        if given is None:
            continue
        try:
            out[k] = _columns(*given, axes[k], range_km[:, k].tolist())
        except ZeroDivisionError:
            continue
    return out[:, :, 0].T, out[:, :, 1:4].transpose(1, 2, 0), out[:, :, 4:].transpose(1, 2, 0)


def _columns(
    lane: Lane, state: tuple[float, ...], seen: Seen, axes: list[list[list[float]]], ranges: list[float]
) -> list[tuple[float, ...]]:
    """Per angle: change of the middle range, position and velocity."""
    one, flow1, two, flow3 = both_lines(lane, state, seen)
    orbit, seen1, seen3 = seen[0], seen[3], seen[7]
    f = factored(one, two)
    lx, ly, lz = lane.middle[:3]
    rows: list[tuple[float, ...]] = []
    for line in range(3):
        rho = ranges[line]
        for ax, ay, az in axes[line]:
            first = last = (0.0, 0.0)
            ux = uy = uz = 0.0
            if line == 0:
                first = turned_line(lane.first, one, rho, ax, ay, az)
            elif line == 2:
                last = turned_line(lane.last, two, rho, ax, ay, az)
            else:
                # Turning the middle line displaces the middle position.
                ux, uy, uz = rho * ax, rho * ay, rho * az
                first = shifted_middle(lane.first, one, flow1, orbit, seen1, ux, uy, uz)
                last = shifted_middle(lane.last, two, flow3, orbit, seen3, ux, uy, uz)
            drho, dx, dy, dz = solution(f, *first, *last)
            rows.append((drho, ux + drho * lx, uy + drho * ly, uz + drho * lz, dx, dy, dz))
    return rows
