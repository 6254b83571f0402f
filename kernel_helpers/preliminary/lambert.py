"""Lambert's problem: the two-body orbits that lead from one position to another in a given time.

Every conic and any number of whole revolutions, all rows at once. With c the chord, s = (r1 + r2 + c) / 2,
lam = sqrt(r1 r2) cos(theta / 2) / s and T = sqrt(2 gm / s^3) dt, the one unknown is Lancaster and
Blanchard's x, smooth across the parabola (x = 1):

    T = ((psi + N pi) / sqrt(|1 - x^2|) - x + lam y) / (1 - x^2),   y = sqrt(1 - lam^2 (1 - x^2)),

near x = 1 by Battin's hypergeometric series, where that form loses its digits. Without a whole revolution
T falls with x and one orbit exists for every T. With N of them T has one least value; above it there are
two orbits, one on each side. Each is sought by Halley's iteration inside a bracket of monotone T, so that
none is missed.

Sources: E. R. Lancaster and R. C. Blanchard 1969, NASA TN D-5368; R. H. Gooding 1990, Celest. Mech. Dyn.
Astron. 48, 145; R. H. Battin 1999, *An Introduction to the Mathematics and Methods of Astrodynamics*,
sections 7.2 and 7.5; D. Izzo 2015, Celest. Mech. Dyn. Astron. 121, 1 (starts, derivatives, velocities).
"""

from __future__ import annotations

from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.lines_of_sight import Array

_EPS = float(np.finfo(float).eps)
MAX_PASSES = 60
#: |S1| up to which Battin's series is used; 26 terms leave less than a rounding.
_SERIES_LIMIT = 0.2
_TERMS = 26
#: Sine of the half transfer angle, and its cosine, below which the plane of the orbit is lost.
COLLINEAR = 1e-11
#: Longest dimensionless time that is tried: near x = -1 and 1 more is lost in the rounding of x.
_LONGEST = 1e10
#: Part of the limit N pi down to which the quickest orbit may stand in.
_NEARLY = 0.8
#: Nearest to x = -1 (an ellipse of endless period) that is tried.
_EDGE = 1e-9


class LambertCode(IntEnum):
    """What became of a row; 0 is a solution."""

    SOLVED = 0
    NO_ORBIT = 1
    NO_PLANE = 2
    BAD_INPUT = 3
    NOT_CONVERGED = 4

    @property
    def words(self) -> str:
        """The code in words."""
        return {
            LambertCode.SOLVED: "solved",
            LambertCode.NO_ORBIT: "no orbit with so many revolutions in this time",
            LambertCode.NO_PLANE: "both positions on one line through the centre: no plane",
            LambertCode.BAD_INPUT: "a position is zero or not finite, or the time is not positive",
            LambertCode.NOT_CONVERGED: "not converged (the time may be too long for the rounding)",
        }[self]


class LambertSolution(NamedTuple):
    """One orbit per row.

    Parameters
    ----------
    v1_km_s, v2_km_s : ndarray, shape (..., 3)
        Velocities at both ends; NaN where ``code`` is not SOLVED.
    x : ndarray, shape (...)
        Lancaster and Blanchard's x: below 1 an ellipse, 1 a parabola, above 1 a hyperbola.
    code : ndarray of int, shape (...)
        :class:`LambertCode`.
    """

    v1_km_s: Array
    v2_km_s: Array
    x: Array
    code: Array


def _series() -> tuple[Array, Array, Array]:
    """Coefficients, highest first, of Battin's hypergeometric function F(3, 1; 5/2; z), of F' and F''."""
    ratio = [1.0]
    for n in range(_TERMS - 1):
        ratio.append(ratio[-1] * (3.0 + n) / (2.5 + n))
    c = np.array(ratio)
    power = np.arange(_TERMS)
    return c[::-1], (power * c)[1:][::-1], (power * (power - 1) * c)[2:][::-1]


_F, _F1, _F2 = _series()


def _horner(coefficients: Array, z: Array) -> Array:
    out = np.full_like(z, coefficients[0])
    for c in coefficients[1:]:
        out *= z
        out += c
    return out


def flight_time(
    x: Array, lam: Array, chord_part: Array, turns: Array, with_third: bool = False
) -> tuple[Array, Array, Array, Array]:
    """Dimensionless time T and its derivatives by x.

    Parameters
    ----------
    x, lam : ndarray, shape (m,)
    chord_part : ndarray, shape (m,)
        1 - lam^2 = c / s, which small transfer angles need to full precision.
    turns : ndarray, shape (m,)
        Whole revolutions N.
    with_third : bool
        Give the third derivative too; else its place holds the second.

    Returns
    -------
    t, t1, t2, t3 : ndarray, shape (m,)
    """
    with np.errstate(all="ignore"):
        u = (1.0 - x) * (1.0 + x)
        square = lam * lam
        y = np.sqrt(np.where(u > 0.5, chord_part + square * x * x, 1.0 - square * u))
        product = lam * x
        total = y + np.abs(product)
        # y - lam x without cancellation.
        eta = np.where(product > 0.0, chord_part / total, total)
        z = 0.5 * (1.0 - lam - x * eta)
        root = np.sqrt(np.abs(u))
        swing = np.where(u > 0.0, np.arctan2(eta * root, x * y + lam * u), np.arcsinh(eta * root))
        bend = chord_part * lam * square / (y * y * y)
        t = (swing / root - x + lam * y) / u
        t1 = (3.0 * t * x - 2.0 + 2.0 * square * product / y) / u
        t2 = (3.0 * t + 5.0 * x * t1 + 2.0 * bend) / u
        near = np.flatnonzero(np.abs(z) < _SERIES_LIMIT)
        if near.size:
            parts = (k[near] for k in (z, lam, square, x, y, eta))
            t[near], t1[near], t2[near] = _near_parabola(*parts)
        if turns.any():
            whole = turns * np.pi / (np.abs(u) * root)
            with_turns = turns > 0
            t = np.where(with_turns, t + whole, t)
            t1 = np.where(with_turns, t1 + 3.0 * x * whole / u, t1)
            t2 = np.where(with_turns, t2 + (3.0 + 12.0 * x * x) * whole / (u * u), t2)
        if not with_third:
            return t, t1, t2, t2
        return t, t1, t2, (7.0 * x * t2 + 8.0 * t1 - 6.0 * bend * square * x / (y * y)) / u


def _near_parabola(z: Array, lam: Array, square: Array, x: Array, y: Array, eta: Array) -> tuple[Array, Array, Array]:
    """T and two derivatives without whole revolutions by Battin's series in z."""
    q, q1, q2 = _horner(_F, z), _horner(_F1, z), _horner(_F2, z)
    # d eta / dx = -lam eta / y, dz / dx = -eta^2 / (2 y), dy / dx = lam^2 x / y.
    s2 = eta * eta
    cube, fifth = eta * s2, eta * s2 * s2
    t = 2.0 / 3.0 * cube * q + 2.0 * lam * eta
    slope = -2.0 * lam * cube * q - fifth * q1 / 3.0 - 2.0 * square * eta
    d_eta, d_z, d_y = -lam * eta / y, -0.5 * s2 / y, square * x / y
    d_slope = (
        -2.0 * lam * (3.0 * s2 * d_eta * q + cube * q1 * d_z)
        - (5.0 * s2 * s2 * d_eta * q1 + fifth * q2 * d_z) / 3.0
        - 2.0 * square * d_eta
    )
    return t, slope / y, (d_slope - slope / y * d_y) / y


def _start(lam: Array, t: Array, turns: Array, right: Array) -> Array:
    """Izzo's first guesses (2015, section 3.2)."""
    t00 = np.arccos(np.clip(lam, -1.0, 1.0)) + lam * np.sqrt(np.maximum(1.0 - lam * lam, 0.0))
    t1 = 2.0 / 3.0 * (1.0 - lam**3)
    slow = (t00 / t) ** (2.0 / 3.0) - 1.0
    fast = 2.5 * t1 * (t1 - t) / (t * (1.0 - lam**5)) + 1.0
    between = (t00 / t) ** (np.log2(np.maximum(t1 / t00, 1e-300))) - 1.0
    single = np.where(t >= t00, slow, np.where(t <= t1, fast, between))
    if not turns.any():
        return single
    left = ((turns + 1.0) * np.pi / (8.0 * t)) ** (2.0 / 3.0)
    other = (8.0 * t / (np.maximum(turns, 1.0) * np.pi)) ** (2.0 / 3.0)
    many = np.where(right, (other - 1.0) / (other + 1.0), (left - 1.0) / (left + 1.0))
    return np.where(turns > 0, many, single)


def least_time(lam: Array, chord_part: Array, turns: Array) -> tuple[Array, Array]:
    """The x and T of the quickest orbit with N >= 1 whole revolutions; lanes (m,)."""
    out = np.zeros(lam.shape)
    lanes, x = np.arange(lam.size), out.copy()
    low, high = np.full(lam.shape, -1.0), np.ones(lam.shape)
    given = lam, chord_part, turns
    for _ in range(MAX_PASSES):
        _, slope, curve, third = flight_time(x, *given, with_third=True)
        low = np.where(slope < 0.0, x, low)
        high = np.where(slope > 0.0, x, high)
        trial = x - 2.0 * slope * curve / (2.0 * curve * curve - slope * third)
        following = np.where((trial > low) & (trial < high), trial, 0.5 * (low + high))
        following = np.where(slope == 0.0, x, following)
        out[lanes] = following
        # Third order: what a step of this size leaves is below a rounding.
        keep = np.flatnonzero(np.abs(following - x) > 1e-6)
        if not keep.size:
            break
        lanes, x, low, high = lanes[keep], following[keep], low[keep], high[keep]
        given = tuple(k[keep] for k in given)  # type: ignore[assignment]
    return out, flight_time(out, lam, chord_part, turns)[0]


def _solve(
    t: Array, lam: Array, chord_part: Array, turns: Array, low: Array, high: Array, rising: Array, x: Array
) -> tuple[Array, Array]:
    """x with the wanted T inside brackets of monotone T; and whether it settled."""
    x = np.where((x > low) & (x < high), x, np.where(np.isfinite(high), 0.5 * (low + high), low + 1.0))
    out, settled = x.copy(), np.zeros(x.shape, dtype=bool)
    lanes = np.arange(x.size)
    for _ in range(MAX_PASSES):
        found, slope, curve, _ = flight_time(x, lam, chord_part, turns)
        value = found - t
        above = (value > 0.0) == rising
        high = np.where(above & (value != 0.0), x, high)
        low = np.where(~above & (value != 0.0), x, low)
        trial = x - 2.0 * value * slope / (2.0 * slope * slope - value * curve)
        # Outside the bracket: the geometric middle of the distances from x = -1.
        middle = np.where(np.isfinite(high), np.sqrt((1.0 + low) * (1.0 + high)), 2.0 * (1.0 + x)) - 1.0
        # A step below the rounding of x ends the iteration, whatever the noise has done to the bracket.
        done = (np.abs(trial - x) <= 4.0 * _EPS * (1.0 + np.abs(x))) | (np.abs(value) <= _EPS * t)
        done |= (high - low) <= 4.0 * _EPS * (1.0 + np.abs(x))
        following = np.where((trial > low) & (trial < high), trial, np.where(done, x, middle))
        out[lanes] = following
        settled[lanes] = done & np.isfinite(value)
        going = ~done & np.isfinite(value)
        if not going.any():
            break
        keep = np.flatnonzero(going)
        lanes, x, low, high, rising = lanes[keep], following[keep], low[keep], high[keep], rising[keep]
        t, lam, chord_part, turns = t[keep], lam[keep], chord_part[keep], turns[keep]
    return out, settled


def lambert(
    r1_km: ArrayLike,
    r2_km: ArrayLike,
    dt_s: ArrayLike,
    gm_km3_s2: float,
    *,
    long_way: ArrayLike = False,
    revolutions: ArrayLike = 0,
    right_branch: ArrayLike = False,
    quickest_instead: bool = False,
) -> LambertSolution:
    """Velocities at both ends of a transfer, one orbit per row.

    Parameters
    ----------
    r1_km, r2_km : array_like, shape (..., 3)
        Positions about the centre, any inertial axes; leading shapes are broadcast against all others.
    dt_s : array_like
        Time from the first to the second, positive.
    gm_km3_s2 : float
    long_way : array_like of bool
        False: the transfer angle (whole revolutions apart) is below pi; True: above, the other way round.
    revolutions : array_like of int
        Whole revolutions on the way.
    right_branch : array_like of bool
        With revolutions: the orbit at the larger x, instead of that at the smaller.
    quickest_instead : bool
        Where the time is too short for the revolutions, but not by more than a fifth of the limit N pi of
        T: give the quickest orbit with so many, which both branches end in. Its code stays NO_ORBIT.

    Returns
    -------
    LambertSolution

    Raises
    ------
    UsageError
        Shapes that do not fit, negative revolutions, a gravitational parameter that is not positive.

    References
    ----------
    Gooding 1990; Battin 1999, chapter 7; Izzo 2015.

    Examples
    --------
    A quarter of a circular orbit:

    >>> import numpy as np
    >>> found = lambert([1.0, 0.0, 0.0], [0.0, 1.0, 0.0], np.pi / 2.0, 1.0)
    >>> bool(np.allclose(found.v1_km_s, [0.0, 1.0, 0.0], atol=1e-14))
    True
    """
    gm = float(gm_km3_s2)
    if not (np.isfinite(gm) and gm > 0.0):
        raise UsageError(f"gm_km3_s2 is {gm_km3_s2!r}; expected a positive number in km3/s2")
    r1, r2 = np.asarray(r1_km, dtype=float), np.asarray(r2_km, dtype=float)
    for name, r in (("r1_km", r1), ("r2_km", r2)):
        if r.shape[-1:] != (3,):
            raise UsageError(f"{name} has shape {r.shape}; expected (..., 3)")
    scalars = [np.asarray(dt_s, dtype=float), np.asarray(long_way, bool), np.asarray(revolutions)]
    scalars.append(np.asarray(right_branch, bool))
    if not np.issubdtype(scalars[2].dtype, np.integer) or (scalars[2] < 0).any():
        raise UsageError(f"revolutions is {revolutions!r}; expected whole numbers, 0 or more")
    try:
        shape = np.broadcast_shapes(r1.shape[:-1], r2.shape[:-1], *(k.shape for k in scalars))
    except ValueError as error:
        raise UsageError(f"r1_km, r2_km and the other arguments do not fit each other ({error})") from None
    r1, r2 = (np.broadcast_to(r, (*shape, 3)).reshape(-1, 3) for r in (r1, r2))
    dt, long_, turns, right = (np.broadcast_to(k, shape).reshape(-1) for k in scalars)
    with np.errstate(all="ignore"):
        v1, v2, x, code = _lambert(r1, r2, dt, gm, long_, turns.astype(float), right, quickest_instead)
    return LambertSolution(v1.reshape(*shape, 3), v2.reshape(*shape, 3), x.reshape(shape), code.reshape(shape))


def _lambert(
    r1: Array, r2: Array, dt: Array, gm: float, long_way: Array, turns: Array, right: Array, quickest: bool
) -> tuple[Array, Array, Array, Array]:
    m = len(dt)
    n1, n2 = (np.sqrt(np.add.reduce(r * r, axis=1)) for r in (r1, r2))
    u1, u2 = r1 / n1[:, None], r2 / n2[:, None]
    away = r2 - r1
    chord = np.sqrt(np.add.reduce(away * away, axis=1))
    s = 0.5 * (n1 + n2 + chord)
    # Half the angle between the positions, from the chord and the sum of the unit vectors.
    apart, together = u2 - u1, u2 + u1
    sin_half = 0.5 * np.sqrt(np.add.reduce(apart * apart, axis=1))
    cos_half = 0.5 * np.sqrt(np.add.reduce(together * together, axis=1))
    flip = np.where(long_way, -1.0, 1.0)
    lam = flip * np.sqrt(n1 * n2) * cos_half / s
    chord_part = chord / s
    t = dt * np.sqrt(2.0 * gm / s) / s
    code = np.zeros(m, dtype=int)
    code[(sin_half < COLLINEAR) | (cos_half < COLLINEAR)] = LambertCode.NO_PLANE
    good = np.isfinite(s) & (n1 > 0.0) & (n2 > 0.0) & (dt > 0.0) & np.isfinite(t) & (t > 0.0)
    code[~good] = LambertCode.BAD_INPUT
    code[(code == LambertCode.SOLVED) & (t > _LONGEST)] = LambertCode.NOT_CONVERGED
    x = np.full(m, np.nan)
    k = np.flatnonzero(code == 0)
    if k.size:
        low, high = np.full(k.size, -1.0 + _EDGE), np.full(k.size, np.inf)
        rising = np.zeros(k.size, dtype=bool)
        many = np.flatnonzero(turns[k] > 0)
        impossible = np.zeros(k.size, dtype=bool)
        if many.size:
            # N whole revolutions never take less than N pi: no need of the exact least time there.
            shortest = np.pi * turns[k[many]] * (_NEARLY if quickest else 1.0)
            impossible[many] = ~(t[k[many]] > shortest)
            many = many[~impossible[many]]
            lanes = k[many]
            bottom, t_least = least_time(lam[lanes], chord_part[lanes], turns[lanes])
            impossible[many] = ~(t[lanes] >= t_least)
            if quickest:
                x[lanes] = np.where(impossible[many], bottom, np.nan)
            low[many] = np.where(right[lanes], bottom, low[many])
            high[many] = np.where(right[lanes], 1.0, bottom)
            rising[many] = right[lanes]
        code[k[impossible]] = LambertCode.NO_ORBIT
        tried = np.flatnonzero(~impossible)
        k, low, high, rising = k[tried], low[tried], high[tried], rising[tried]
        if k.size:
            first = _start(lam[k], t[k], turns[k], right[k])
            x[k], settled = _solve(t[k], lam[k], chord_part[k], turns[k], low, high, rising, first)
            code[k[~settled]] = LambertCode.NOT_CONVERGED
    solved = code == LambertCode.SOLVED
    x = np.where(solved | (code == LambertCode.NO_ORBIT), x, np.nan)
    square = lam * lam
    u = (1.0 - x) * (1.0 + x)
    y = np.sqrt(np.where(u > 0.5, chord_part + square * x * x, 1.0 - square * u))
    forward = lam * x > 0.0
    plus = np.where(forward, y + lam * x, chord_part / (y - lam * x))
    # lam y - x and lam y + x, each in the form without cancellation.
    same = x * lam > 0.0
    product = chord_part * (square - x * x * (1.0 + square))
    minus_part = np.where(same, product / (lam * y + x), lam * y - x)
    plus_part = np.where(same, lam * y + x, product / (lam * y - x))
    pace = np.sqrt(0.5 * gm * s)
    ratio = (n1 - n2) / chord
    sigma = 2.0 * np.sqrt(n1 * n2) * sin_half / chord
    normal = np.cross(u1, u2) * flip[:, None]
    normal = normal / np.sqrt(np.add.reduce(normal * normal, axis=1))[:, None]
    across = pace * sigma * plus
    v1 = (pace * (minus_part - ratio * plus_part) / n1)[:, None] * u1
    v1 = v1 + (across / n1)[:, None] * np.cross(normal, u1)
    v2 = (-pace * (minus_part + ratio * plus_part) / n2)[:, None] * u2
    v2 = v2 + (across / n2)[:, None] * np.cross(normal, u2)
    return v1, v2, x, code


class Transfer(NamedTuple):
    """One orbit between two positions: how it goes, and its velocities (3,) km/s."""

    long_way: bool
    revolutions: int
    right_branch: bool
    v1_km_s: Array
    v2_km_s: Array

    @property
    def words(self) -> str:
        """The way in words."""
        return way_words(self.long_way, self.revolutions, self.right_branch)


def way_words(long_way: bool, revolutions: int, right_branch: bool) -> str:
    """How an orbit leads from one position to another, in words."""
    way = "long way" if long_way else "short way"
    if not revolutions:
        return way
    turns = f"{revolutions} revolution{'s' if revolutions > 1 else ''}"
    return f"{way}, {turns}, {'right' if right_branch else 'left'} branch"


def most_revolutions(r1_km: ArrayLike, r2_km: ArrayLike, dt_s: float, gm_km3_s2: float) -> int:
    """Upper bound of the whole revolutions in a time: no ellipse through both has a < (r1 + r2 + c) / 4."""
    r1, r2 = np.asarray(r1_km, dtype=float), np.asarray(r2_km, dtype=float)
    least = 0.25 * (np.linalg.norm(r1) + np.linalg.norm(r2) + np.linalg.norm(r2 - r1))
    with np.errstate(all="ignore"):
        period = 2.0 * np.pi * np.sqrt(least**3 / gm_km3_s2)
        count = dt_s / period
    return int(count) if np.isfinite(count) and count > 0.0 else 0


def transfers(
    r1_km: ArrayLike, r2_km: ArrayLike, dt_s: float, gm_km3_s2: float, *, most: int | None = None
) -> tuple[Transfer, ...]:
    """Every orbit from one position to another: both ways round, all revolutions, both branches.

    Parameters
    ----------
    r1_km, r2_km : array_like, shape (3,)
    dt_s : float
    gm_km3_s2 : float
    most : int, optional
        Largest number of whole revolutions; None for all that exist.

    Returns
    -------
    tuple of Transfer
        Fewest revolutions first; empty where no orbit exists or the input is unusable.

    Raises
    ------
    UsageError
        As for :func:`lambert`.
    """
    bound = most_revolutions(r1_km, r2_km, dt_s, gm_km3_s2)
    count = bound if most is None else min(bound, int(most))
    keys = [(way, 0, False) for way in (False, True)]
    keys += [(way, n, right) for n in range(1, count + 1) for way in (False, True) for right in (False, True)]
    ways, turns, rights = (np.array(part) for part in zip(*keys, strict=True))
    found = lambert(r1_km, r2_km, dt_s, gm_km3_s2, long_way=ways, revolutions=turns.astype(int), right_branch=rights)
    return tuple(
        Transfer(*key, found.v1_km_s[k], found.v2_km_s[k])
        for k, key in enumerate(keys)
        if found.code[k] == LambertCode.SOLVED
    )
