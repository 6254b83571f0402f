"""Equations of an orbit (rho2, v2) seen across the two outer lines of sight, and their solution.

Every formula is written once, component by component, and works for one orbit in plain floats and for lanes
of arrays alike, with the same digits; NumPy's calls would cost one orbit ten times the arithmetic.

Each outer line has two axes e, n across L' and one, l, along it. The orbit from r2 = R2 + rho2 L2' and v2
arrives at p and w; the equations are e . (p - R) = 0 and n . (p - R) = 0, the path along l follows. Partials:
Battin 1999, *An Introduction to the Mathematics and Methods of Astrodynamics*, section 9.7.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

from firstarc.twobody.near_anomaly import Anomaly

#: A float or an array of lanes.
Number = Any
#: Rows of an outer line: e, n, l (three numbers each), observer (3), reception time, length of L'.
LINE_ROWS = 14
#: Rows of the middle line: L' (3), observer (3).
MIDDLE_ROWS = 6


class Orbit(NamedTuple):
    """State at the middle emission, its radius, r . v and 2 gm / r - v^2; and L2' . v2, L2' . r2."""

    x: Number
    y: Number
    z: Number
    vx: Number
    vy: Number
    vz: Number
    r0: Number
    eta: Number
    beta: Number
    on_v: Number
    on_r: Number


class Sight(NamedTuple):
    """The orbit at an outer line: miss along e and n (km), path along l (km), f, g and the position."""

    east: Number
    north: Number
    path: Number
    f: Number
    g: Number
    x: Number
    y: Number
    z: Number


class Equations(NamedTuple):
    """One outer line: two rows for v2, slopes for rho2, right sides; and what closes the own range.

    ``kappa`` is the part of the own range in each equation (light time; zero without).
    """

    row_e: tuple[Number, Number, Number]
    row_n: tuple[Number, Number, Number]
    slope_e: Number
    slope_n: Number
    right_e: Number
    right_n: Number
    along: tuple[Number, Number, Number] | None
    along_slope: Number
    along_rest: Number
    closing: Number
    kappa_e: Number
    kappa_n: Number


def middle_orbit(
    middle: Any, rho2: Number, vx: Number, vy: Number, vz: Number, gm: float, root: Callable[[Any], Any]
) -> Orbit:
    """The orbit of a middle range and velocity."""
    lx, ly, lz, ox, oy, oz = middle
    x, y, z = ox + rho2 * lx, oy + rho2 * ly, oz + rho2 * lz
    r0 = root(x * x + y * y + z * z)
    return Orbit(
        x,
        y,
        z,
        vx,
        vy,
        vz,
        r0,
        x * vx + y * vy + z * vz,
        2.0 * gm / r0 - (vx * vx + vy * vy + vz * vz),
        lx * vx + ly * vy + lz * vz,
        lx * x + ly * y + lz * z,
    )


def sighted(line: Any, orbit: Orbit, at: Anomaly, dt: Number, gm: float) -> Sight:
    """Where an outer observation would see the orbit."""
    ex, ey, ez, nx, ny, nz, lx, ly, lz, ox, oy, oz, _, _ = line
    f = 1.0 - gm * at[3] / orbit.r0
    g = dt - gm * at[4]
    x, y, z = f * orbit.x + g * orbit.vx, f * orbit.y + g * orbit.vy, f * orbit.z + g * orbit.vz
    ax, ay, az = x - ox, y - oy, z - oz
    return Sight(
        ex * ax + ey * ay + ez * az,
        nx * ax + ny * ay + nz * az,
        lx * ax + ly * ay + lz * az,
        f,
        g,
        x,
        y,
        z,
    )


class Flow(NamedTuple):
    """Velocity on arrival and the vectors that the partials are made of (see :func:`flow_of`)."""

    w: tuple[Number, Number, Number]
    d: tuple[Number, Number, Number]
    p: tuple[Number, Number, Number]
    q: tuple[Number, Number, Number]
    by_v: Number
    by_r: Number
    k_r: Number
    c_r: Number


def flow_of(orbit: Orbit, at: Anomaly, seen: Sight, dt: Number, gm: float) -> Flow:
    """d r / d v2 = p v2^T + q r2^T + g 1; d r by a displacement u of r2 is formed by :func:`_displaced`."""
    s, _, g1, g2, _, g4, g5, r = at
    x, y, z, vx, vy, vz, r0 = orbit[:7]
    k = gm * g2
    ft, gt = -gm * g1 / (r * r0), 1.0 - k / r
    wx, wy, wz = ft * x + gt * vx, ft * y + gt * vy, ft * z + gt * vz
    dx, dy, dz = wx - vx, wy - vy, wz - vz
    # k / gm is G2, and c / gm this:
    c = gm * (3.0 * g5 - s * g4) - dt * g2
    px, py, pz = g2 * (seen.x - x) + c * wx, g2 * (seen.y - y) + c * wy, g2 * (seen.z - z) + c * wz
    scale = r / gm
    cube = gm / (r0 * r0 * r0)
    return Flow(
        (wx, wy, wz),
        (dx, dy, dz),
        (px, py, pz),
        (-g2 * dx, -g2 * dy, -g2 * dz),
        scale * (gt - 1.0),
        scale * ft,
        g2 * cube,
        c * cube,
    )


def _displaced(
    flow: Flow, seen: Sight, on_v: Number, on_r: Number, ux: Number, uy: Number, uz: Number
) -> tuple[Number, Number, Number]:
    """Displacement on arrival by a displacement u of the middle position (on_v = u . v2, on_r = u . r2)."""
    a = flow.by_v * on_v + flow.by_r * on_r
    b, c, f = flow.k_r * on_r, flow.c_r * on_r, seen.f
    (dx, dy, dz), (wx, wy, wz) = flow.d, flow.w
    return (
        a * dx + b * seen.x + c * wx + f * ux,
        a * dy + b * seen.y + c * wy + f * uy,
        a * dz + b * seen.z + c * wz + f * uz,
    )


def equations(
    line: Any, middle: Any, orbit: Orbit, at: Anomaly, seen: Sight, dt: Number, rho: Number, gm: float, per_c: float
) -> tuple[Equations, Flow]:
    """Linearised equations of one outer line; ``rho`` is the own range that timed the light."""
    ex, ey, ez, nx, ny, nz, lx, ly, lz, _, _, _, _, size = line
    vx, vy, vz = orbit.vx, orbit.vy, orbit.vz
    flow = flow_of(orbit, at, seen, dt, gm)
    (px, py, pz), (qx, qy, qz), (wx, wy, wz) = flow.p, flow.q, flow.w
    sx, sy, sz = _displaced(flow, seen, orbit.on_v, orbit.on_r, middle[0], middle[1], middle[2])
    if per_c:
        # A longer middle range leaves more time to the outer sightings.
        sx, sy, sz = sx + per_c * wx, sy + per_c * wy, sz + per_c * wz
    g = seen.g
    a, b = ex * px + ey * py + ez * pz, ex * qx + ey * qy + ez * qz
    row_e = a * vx + b * orbit.x + g * ex, a * vy + b * orbit.y + g * ey, a * vz + b * orbit.z + g * ez
    a, b = nx * px + ny * py + nz * pz, nx * qx + ny * qy + nz * qz
    row_n = a * vx + b * orbit.x + g * nx, a * vy + b * orbit.y + g * ny, a * vz + b * orbit.z + g * nz
    slope_e, slope_n = ex * sx + ey * sy + ez * sz, nx * sx + ny * sy + nz * sz
    if not per_c:
        # The own range times no light: nothing else depends on it.
        return (
            Equations(row_e, row_n, slope_e, slope_n, -seen.east, -seen.north, None, 0.0, 0.0, 1.0, 0.0, 0.0),
            flow,
        )
    a, b = lx * px + ly * py + lz * pz, lx * qx + ly * qy + lz * qz
    along = a * vx + b * orbit.x + g * lx, a * vy + b * orbit.y + g * ly, a * vz + b * orbit.z + g * lz
    along_slope = lx * sx + ly * sy + lz * sz
    rest = seen.path - rho * size
    # The own range sets the light's departure: it is eliminated by the third axis.
    closing = size + per_c * (lx * wx + ly * wy + lz * wz)
    kappa_e = per_c * (ex * wx + ey * wy + ez * wz) / closing
    kappa_n = per_c * (nx * wx + ny * wy + nz * wz) / closing
    kx, ky, kz = along
    return (
        Equations(
            (row_e[0] - kappa_e * kx, row_e[1] - kappa_e * ky, row_e[2] - kappa_e * kz),
            (row_n[0] - kappa_n * kx, row_n[1] - kappa_n * ky, row_n[2] - kappa_n * kz),
            slope_e - kappa_e * along_slope,
            slope_n - kappa_n * along_slope,
            kappa_e * rest - seen.east,
            kappa_n * rest - seen.north,
            along,
            along_slope,
            rest,
            closing,
            kappa_e,
            kappa_n,
        ),
        flow,
    )


class Factored(NamedTuple):
    """The four equations made ready for any right side."""

    bn: tuple[Number, Number, Number]
    na: tuple[Number, Number, Number]
    n: tuple[Number, Number, Number]
    w: tuple[Number, Number, Number]
    last_e: tuple[Number, Number, Number]
    last_n: tuple[Number, Number, Number]
    p: tuple[Number, Number]
    q: tuple[Number, Number]
    det: Number


def factored(first: Equations, last: Equations) -> Factored:
    """Eliminate the velocity: the rows of the first line leave it free along their vector product only."""
    (ax, ay, az), (bx, by, bz) = first.row_e, first.row_n
    nx, ny, nz = ay * bz - az * by, az * bx - ax * bz, ax * by - ay * bx
    size = nx * nx + ny * ny + nz * nz
    bn = (by * nz - bz * ny) / size, (bz * nx - bx * nz) / size, (bx * ny - by * nx) / size
    na = (ny * az - nz * ay) / size, (nz * ax - nx * az) / size, (nx * ay - ny * ax) / size
    sa, sb = first.slope_e, first.slope_n
    wx, wy, wz = -sa * bn[0] - sb * na[0], -sa * bn[1] - sb * na[1], -sa * bn[2] - sb * na[2]
    (cx, cy, cz), (dx, dy, dz) = last.row_e, last.row_n
    p = cx * wx + cy * wy + cz * wz + last.slope_e, dx * wx + dy * wy + dz * wz + last.slope_n
    q = cx * nx + cy * ny + cz * nz, dx * nx + dy * ny + dz * nz
    det = p[0] * q[1] - p[1] * q[0]
    return Factored(bn, na, (nx, ny, nz), (wx, wy, wz), last.row_e, last.row_n, p, q, det)


def solution(
    f: Factored, first_e: Number, first_n: Number, last_e: Number, last_n: Number
) -> tuple[Number, Number, Number, Number]:
    """Change of rho2 (km) and of v2 (three numbers) for right sides of the first and last line."""
    (bx, by, bz), (ax, ay, az) = f.bn, f.na
    ux, uy, uz = first_e * bx + first_n * ax, first_e * by + first_n * ay, first_e * bz + first_n * az
    (cx, cy, cz), (dx, dy, dz) = f.last_e, f.last_n
    h0, h1 = last_e - (cx * ux + cy * uy + cz * uz), last_n - (dx * ux + dy * uy + dz * uz)
    (p0, p1), (q0, q1) = f.p, f.q
    drho = (h0 * q1 - h1 * q0) / f.det
    k = (p0 * h1 - p1 * h0) / f.det
    (wx, wy, wz), (nx, ny, nz) = f.w, f.n
    return drho, ux + wx * drho + nx * k, uy + wy * drho + ny * k, uz + wz * drho + nz * k


def newton_step(first: Equations, last: Equations) -> tuple[Number, Number, Number, Number, Number, Number]:
    """Newton's changes: rho2, v2 (three numbers), and the ranges that time the light of the outer lines."""
    drho, vx, vy, vz = solution(factored(first, last), first.right_e, first.right_n, last.right_e, last.right_n)
    outer = []
    for one in (first, last):
        if one.along is None:
            outer.append(0.0)
            continue
        ax, ay, az = one.along
        outer.append((one.along_rest + ax * vx + ay * vy + az * vz + one.along_slope * drho) / one.closing)
    return drho, vx, vy, vz, outer[0], outer[1]


def turned_line(line: Any, one: Equations, rho: Number, ax: Number, ay: Number, az: Number) -> tuple[Number, Number]:
    """Right sides that turning an outer line by one radian along the unit vector a puts up."""
    ex, ey, ez, nx, ny, nz, lx, ly, lz = line[:9]
    along = lx * ax + ly * ay + lz * az
    return (
        rho * (ex * ax + ey * ay + ez * az - one.kappa_e * along),
        rho * (nx * ax + ny * ay + nz * az - one.kappa_n * along),
    )


def shifted_middle(
    line: Any, one: Equations, flow: Flow, orbit: Orbit, seen: Sight, ux: Number, uy: Number, uz: Number
) -> tuple[Number, Number]:
    """Right sides at an outer line that a displacement u (km) of the middle position puts up."""
    ex, ey, ez, nx, ny, nz, lx, ly, lz = line[:9]
    on_v = ux * orbit.vx + uy * orbit.vy + uz * orbit.vz
    on_r = ux * orbit.x + uy * orbit.y + uz * orbit.z
    sx, sy, sz = _displaced(flow, seen, on_v, on_r, ux, uy, uz)
    along = lx * sx + ly * sy + lz * sz
    return (
        one.kappa_e * along - (ex * sx + ey * sy + ez * sz),
        one.kappa_n * along - (nx * sx + ny * sy + nz * sz),
    )
