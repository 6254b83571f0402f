"""Perturbed motion with its partials: variation of the two-body orbit, segment by segment.

Within a segment the motion is a two-body orbit through the segment's first state plus a small deviation d.
Its equation, with Phi the analytic two-body transition matrix and g the attraction of the centre, is solved
for c = Phi^-1 d:

    c' = Phi^-1 [0, p],   p = perturbations(t, r + d) + g(r + d) - g(r) - (dg/dr) d,

by Picard's iteration on Chebyshev points. What is iterated is of the size of the perturbations, so a few passes
reach the last digits over half a revolution or over months about the Sun; every pass takes the forces at all
points at once. The independent variable is the universal anomaly (dt = r ds), so the points crowd where the
motion is fast. The variational equations are solved in the same way for W, where the partials of the segment
are Phi (I + W).

Step control: a segment is accepted when the last coefficients of d have fallen below ``tolerance`` times the
distance from the centre or from the nearest body, whichever is smaller. Else it is shortened, which is what
carries a body through a close approach of a planet with no change of origin. Segments end at the edges of the
Earth's shadow.

References
----------
C. W. Clenshaw and H. J. Norton 1963, Comput. J. 6, 88 (Picard's iteration in Chebyshev series); T. Feagin and
P. Nacozy 1983, Celest. Mech. 29, 107; R. H. Battin 1999, sections 9.4 (rectification) and 9.7. Recalled.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from firstarc.dynamics.accelerations import Forces, dot
from firstarc.dynamics.chebyshev import coefficients, integral, points
from firstarc.dynamics.force_models import ForceModel
from firstarc.dynamics.variational import partials, point_mass
from firstarc.twobody.kepler import Array, propagate_with_partials, stumpff

#: Points of a segment.
POINTS = 40
#: Largest relative error of d that a segment may add, a share of the distance from the centre or nearest body.
TOLERANCE = 1e-13
#: The nearest body counts down to this share of the distance from the centre: coordinates are rounded to 1e-16 of it.
FINEST = 3e-3
#: The same for the partials, relative to their dimensionless size.
PARTIALS_TOLERANCE = 1e-10
#: Passes after which a segment counts as too long.
MAX_PASSES = 20
#: A change that shrinks by less than this in a pass: the segment is too long.
SLOWEST = 0.35
#: Length of the first trial, in universal anomaly times sqrt(|beta|) or its like: about half a revolution.
FIRST_LENGTH = 3.0
#: A segment shorter than this share of the first trial steps over a shadow's edge, or ends the integration.
SHORTEST = 1e-6


class Segment(NamedTuple):
    """One stretch of a trajectory: first state, two-body orbit through it, and the series of the deviation."""

    t_s: float
    end_t_s: float
    state: Array
    length: float
    #: Series of d, shape (points, 6).
    deviation: Array
    #: Series of W and of the parameters' columns, shape (points, 6, 6 + p), or None.
    variation: Array | None
    end_state: Array
    #: Partials over the segment, shape (6, 6 + p), or None.
    end_partials: Array | None
    #: Tail of the series over what is allowed.
    excess: float


class Rejected(NamedTuple):
    """A segment that was too long, and the length to try next; ``edge`` when it was cut at a shadow's edge."""

    length: float
    edge: bool = False


def _central(r: Array, gm: float) -> Array:
    square = dot(r, r)
    return np.asarray((-gm / (square * np.sqrt(square)))[:, None] * r)


def first_length(state: Array, gm: float) -> float:
    """A length in the universal anomaly (s/km) to begin with."""
    r = float(np.linalg.norm(state[:3]))
    speed2 = float(state[3:] @ state[3:])
    # The local angular rate in s: sqrt(gm r) on a parabola's scale, r v when moving faster.
    return FIRST_LENGTH / max(np.sqrt(gm / r), np.sqrt(speed2))


def segment(
    model: ForceModel,
    t_s: float,
    state: Array,
    length: float,
    with_partials: bool,
    parameters: Sequence[str],
    tolerance: float = TOLERANCE,
    over_edge: bool = False,
) -> Segment | Rejected:
    """Integrate one stretch.

    Parameters
    ----------
    model : ForceModel
    t_s : float
        Time of the first state.
    state : ndarray, shape (6,)
    length : float
        In the universal anomaly, s/km; negative backwards.
    with_partials : bool
    parameters : sequence of str
    tolerance : float
        Share of the distance from the centre.
    over_edge : bool
        Take a kink of the shadow's edge as it is: for a segment too short for it to matter.

    Returns
    -------
    Segment or Rejected
        Rejected carries a shorter length.
    """
    gm = model.gm_km3_s2
    r0, v0 = state[:3], state[3:]
    radius0 = float(np.sqrt(r0 @ r0))
    s = np.append(0.5 * length * (points(POINTS) + 1.0), length)
    beta = 2.0 * gm / radius0 - float(v0 @ v0)
    square = s * s
    _, c1, c2, c3 = stumpff(beta * square)
    dt = s * (radius0 * c1 + s * (float(r0 @ v0) * c2 + gm * s * c3))
    r, v, stm = propagate_with_partials(r0, v0, dt, gm)
    radius = np.sqrt(dot(r, r))
    scale = float(radius.min())
    pace = np.sqrt(scale**3 / gm)
    if not np.all(np.isfinite(stm)):
        return Rejected(0.25 * length)
    forces = Forces(model, t_s + dt[:-1])
    # Phi^-1 of a symplectic Phi, its last three columns, times dt/dx.
    weight = (0.5 * length) * radius[:-1, None, None]
    inverse = np.concatenate((-stm[:-1, :3, 3:].swapaxes(1, 2), stm[:-1, :3, :3].swapaxes(1, 2)), axis=1) * weight
    on_orbit = _central(r[:-1], gm)
    gradient = point_mass(r[:-1], gm)
    quadrature = integral(POINTS)
    nearest = min(scale, forces.nearest_km(r[:-1]))
    least = tolerance * max(nearest, FINEST * scale)
    # Rounded coordinates make the forces of a near body uncertain; nothing is gained by dividing further.
    rounding = 4e-16 * (1.0 + scale / nearest)
    d = np.zeros((POINTS + 1, 6))
    previous = np.inf
    for passed in range(MAX_PASSES):
        dr = d[:-1, :3]
        now = r[:-1] + dr
        pull = forces.acceleration(now, v[:-1] + d[:-1, 3:])
        if passed:
            pull += _central(now, gm) - on_orbit - (gradient @ dr[:, :, None])[:, :, 0]
        c = quadrature @ (inverse @ pull[:, :, None])[:, :, 0]
        fresh = (stm @ c[:, :, None])[:, :, 0]
        change = float(np.max(np.abs(fresh - d) * _units(pace)))
        d = fresh
        allowed = max(least, rounding * float(np.max(np.abs(d) * _units(pace))))
        if not change < 0.1 * scale:
            return Rejected(0.4 * length)
        if change <= 0.1 * allowed or (passed and change * min(change / previous, 1.0) <= 0.03 * allowed):
            break
        if passed > 1 and change > SLOWEST * previous:
            return Rejected(0.6 * length)
        previous = change
    else:
        return Rejected(0.7 * length)
    series = coefficients(POINTS) @ d[:-1]
    tail = float(np.max(np.abs(series[-3:]) * _units(pace)))
    if not over_edge and forces.has_edges(parameters):
        cut = _first_edge(forces.edges(r[:-1] + d[:-1, :3]))
        if cut is not None:
            return Rejected(cut * length, edge=True)
    excess = tail / allowed
    variation = end_partials = None
    if with_partials:
        solved = _variation(forces, r, v, d, stm, inverse, gradient, quadrature, parameters, pace)
        if solved is None:
            return Rejected(0.6 * length)
        w, excess_of_partials = solved
        excess = max(excess, excess_of_partials)
        variation = np.tensordot(coefficients(POINTS), w[:-1], axes=1)
        end_partials = stm[-1] @ (np.eye(6, 6 + len(parameters)) + w[-1])
    if excess > 1.0 and not over_edge:
        return Rejected(length * max(0.25, 0.9 * excess ** (-1.0 / (POINTS - 10))))
    end = np.concatenate((r[-1], v[-1])) + d[-1]
    return Segment(t_s, t_s + float(dt[-1]), state, length, series, variation, end, end_partials, excess)


def _units(pace: float) -> Array:
    """Factors that turn a deviation in km and km/s into km."""
    return np.array([1.0, 1.0, 1.0, pace, pace, pace])


def _variation(
    forces: Forces,
    r: Array,
    v: Array,
    d: Array,
    stm: Array,
    inverse: Array,
    gradient: Array,
    quadrature: Array,
    parameters: Sequence[str],
    pace: float,
) -> tuple[Array, float] | None:
    """W at the points and the end, (points + 1, 6, 6 + p), and the size of its tail over what is allowed."""
    now, speed = r[:-1] + d[:-1, :3], v[:-1] + d[:-1, 3:]
    by_r, by_v, columns = partials(forces, now, speed, parameters)
    by_r += point_mass(now, forces.gm) - gradient
    forcing = by_r @ stm[:-1, :3]
    if by_v is not None:
        forcing += by_v @ stm[:-1, 3:]
    matrix = inverse @ forcing
    count = len(parameters)
    # The parameters' columns are forced by the acceleration itself and scaled to the size of the partials.
    start = np.concatenate((matrix, inverse @ columns), axis=2) if count else matrix
    unit = _units(pace)
    size = unit[:, None] / np.append(unit, np.ones(count))
    flat = (POINTS, 6 * (6 + count))
    first = (quadrature @ start.reshape(flat)).reshape(POINTS + 1, 6, 6 + count)
    if count:
        # Against what the force would do in a dynamical time: segments in the penumbra last seconds.
        largest = pace**2 * np.max(np.abs(columns), axis=(0, 1))
        size[:, 6:] = unit[:, None] / np.where(largest > 0.0, largest, 1.0)
    w = first
    previous = np.inf
    for _ in range(MAX_PASSES):
        fresh = first + (quadrature @ (matrix @ w[:-1]).reshape(flat)).reshape(w.shape)
        change = float(np.max(np.abs(fresh - w) * size))
        w = fresh
        if change <= 1e-12:
            break
        if not change < 10.0 or change > 0.8 * previous:
            return None
        previous = change
    tail = np.tensordot(coefficients(POINTS)[-3:], w[:-1], axes=1)
    return w, float(np.max(np.abs(tail) * size)) / PARTIALS_TOLERANCE


def _first_edge(values: Array) -> float | None:
    """Share of the segment at which the first of some smooth functions changes sign, or None."""
    first: float | None = None
    for row in values:
        crossed = np.flatnonzero(row[1:] * row[:-1] < 0.0)
        if not crossed.size:
            continue
        k = int(crossed[0])
        series = coefficients(POINTS) @ row
        low, high = points(POINTS)[k], points(POINTS)[k + 1]
        sign = np.sign(row[k])
        order = np.arange(POINTS)
        for _ in range(36):
            middle = 0.5 * (low + high)
            value = float(np.cos(order * np.arccos(middle)) @ series)
            low, high = (middle, high) if value * sign > 0.0 else (low, middle)
        share = 0.5 * (low + high) * 0.5 + 0.5
        # Next to either end it is the edge that the segment was cut at.
        if 1e-3 < share < 1.0 - 1e-3 and (first is None or share < first):
            first = share
    return first


def growth(part: Segment) -> float:
    """Factor from the length of a segment to that of the next, from how far its series has fallen."""
    return float(min(1.5, max(0.7, 0.9 * max(part.excess, 1e-30) ** (-1.0 / (POINTS - 10)))))
