"""Gauss's method: slant ranges from three lines of sight by the eighth-degree polynomial.

With r the distance at the middle observation, rho2 = A + gm B / r^3 and r^2 = |R2 + rho2 L2|^2 give
x^8 + a x^6 + b x^3 + c = 0. (L may be slightly off unit length, L' = L + Vc/c; |L2|^2 enters a, b, c.)

All positive roots, with certainty: c <= 0 and a <= 0; the derivative is x^2 (8 x^5 + 6 a x^3 + 3 b), whose
bracketed quintic has its own only positive critical point at x = sqrt(-9 a / 20). Between these points the
polynomial is monotone, so each root is bracketed and none can be missed.

Source: Curtis, *Orbital Mechanics for Engineering Students*, section 5.10, algorithm 5.5.
"""

from __future__ import annotations

from collections.abc import Callable
from math import frexp, isfinite, ldexp, sqrt
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.preliminary.lines_of_sight import Array, Lines, crosses, dot

_EPS = float(np.finfo(float).eps)
_NONE = float("nan")
#: Up to this many lanes plain floats are quicker than arrays.
_FEW = 6


class RangePolynomial(NamedTuple):
    """Coefficients of x^8 + a x^6 + b x^3 + c and of rho2 = A + gm B / r^3, one lane per triple.

    Units: a km^2, b km^5, c km^8, A km, B km s^2. ``determinant`` is L1 . (L2 x L3); ``normals`` are
    L2 x L3, L1 x L3, L1 x L2, shape (3, 3, m).
    """

    a: Array
    b: Array
    c: Array
    big_a: Array
    big_b: Array
    determinant: Array
    normals: Array


def range_polynomial(lines: Lines) -> RangePolynomial:
    """The polynomial of each lane."""
    with np.errstate(all="ignore"):
        los, seen, gm = lines.effective, lines.observer_km, lines.gm_km3_s2
        l1, l2, l3 = los
        # L1 x L3 and the others from differences: the determinant of a short arc keeps its digits.
        ahead, back = l3 - l2, l1 - l2
        p1, by_back, folded = crosses((l2, l2, back), (ahead, back, ahead))
        p3 = -by_back
        p2 = folded + p1 + p3
        d0 = -dot(l2, folded)
        tau1, tau3 = lines.t_s[0], lines.t_s[2]
        tau = tau3 - tau1
        w1, w3 = tau3 / tau, -tau1 / tau
        first, last = dot(seen[0], p2), dot(seen[2], p2)
        big_a = dot(p2, seen[1] - w1 * seen[0] - w3 * seen[2]) / d0
        big_b = (first * (tau3**2 - tau**2) * w1 - last * (tau**2 - tau1**2) * w3) / (6.0 * d0)
        e, f, square = dot(seen[1], l2), dot(l2, l2), dot(seen[1], seen[1])
        u = gm * big_b
        return RangePolynomial(
            -(f * big_a**2 + 2.0 * big_a * e + square),
            -2.0 * u * (e + f * big_a),
            -f * u**2,
            big_a,
            big_b,
            d0,
            np.stack((p1, p2, p3)),
        )


def _safe_halley(
    derivatives: Callable[..., tuple[Any, Any, Any]],
    coefficients: tuple[Array, ...],
    low: Array,
    high: Array,
    rising: Array,
) -> Array:
    """Halley's iteration inside brackets of monotone lanes, else the geometric middle (low > 0)."""
    if low.size <= _FEW:
        lanes_of = zip(*(k.tolist() for k in (low, high, rising, *coefficients)), strict=True)
        return np.array([_safe_halley_alone(derivatives, *lane) for lane in lanes_of])
    out = np.sqrt(low * high)
    lanes = np.arange(out.size)
    x = out.copy()
    for _ in range(200):
        value, slope, curve = derivatives(x, *coefficients)
        below = (value < 0.0) == rising
        low = np.where(below, x, low)
        high = np.where(below, high, x)
        trial = x - value * slope / (slope * slope - 0.5 * value * curve)
        # With the ends: a step that rounding swallows is an arrival.
        inside = (trial >= low) & (trial <= high)
        following = np.where(inside, trial, np.sqrt(low * high))
        following = np.where(value == 0.0, x, following)
        # Third order: what a step of this size leaves is below a rounding.
        going = np.abs(following - x) > 1e-9 * x
        out[lanes] = following
        count = int(np.count_nonzero(going))
        if not count:
            break
        if count < going.size:
            lanes, low, high, rising = lanes[going], low[going], high[going], rising[going]
            following = following[going]
            coefficients = tuple(k[going] for k in coefficients)
        x = following
    return out


def _safe_halley_alone(
    derivatives: Callable[..., tuple[Any, Any, Any]], low: float, high: float, rising: bool, *given: float
) -> float:
    """The same iteration for one lane in plain floats: quicker for a few, and the same to the last bit."""
    x = sqrt(low * high)
    for _ in range(200):
        value, slope, curve = derivatives(x, *given)
        if value == 0.0 or not low < high:
            return x
        if (value < 0.0) == rising:
            low = x
        else:
            high = x
        bottom = slope * slope - 0.5 * value * curve
        following = x - value * slope / bottom if bottom != 0.0 else _NONE
        if not low <= following <= high:
            following = sqrt(low * high)
        if not abs(following - x) > 1e-9 * x:
            return following
        x = following
    return x


def _eighth_root(x: Array) -> Array:
    root: Array = np.sqrt(np.sqrt(np.sqrt(x)))
    return root


def _octic(x: Any, a: Any, b: Any, c: Any) -> tuple[Any, Any, Any]:
    square = x * x
    cube = square * x
    return (
        ((square + a) * cube + b) * cube + c,
        ((8.0 * square + 6.0 * a) * cube + 3.0 * b) * square,
        ((56.0 * square + 30.0 * a) * cube + 6.0 * b) * x,
    )


def _height(x: Any, a: Any, b: Any, c: Any) -> tuple[Any, Any]:
    """The polynomial at a critical point, and whether it is zero to rounding."""
    square = x * x
    cube = square * x
    size = ((square - a) * cube + abs(b)) * cube - c
    value = ((square + a) * cube + b) * cube + c
    return value, abs(value) <= 32.0 * _EPS * size


def _quintic(x: Any, a: Any, b: Any) -> tuple[Any, Any, Any]:
    square = x * x
    cube = square * x
    return (
        (8.0 * square + 6.0 * a) * cube + 3.0 * b,
        (40.0 * square + 18.0 * a) * square,
        160.0 * cube + 36.0 * a * x,
    )


def positive_roots(a: ArrayLike, b: ArrayLike, c: ArrayLike) -> tuple[Array, Array]:
    """Every positive root of x^8 + a x^6 + b x^3 + c for a <= 0 and c <= 0.

    Parameters
    ----------
    a, b, c : array_like, shape (m,)
        In km^2, km^5, km^8 (or any unit); the roots come in that unit. Scaled inside.

    Returns
    -------
    roots : ndarray, shape (m, 3)
        Ascending, NaN where there are fewer than three.
    double : ndarray of bool, shape (m, 3)
        Marks a root that is double to rounding (two roots run together); it is listed once.
    """
    roots, double, _ = roots_and_waves(*(np.atleast_1d(np.asarray(k, dtype=float)) for k in (a, b, c)))
    return roots, double


def roots_and_waves(a: Array, b: Array, c: Array) -> tuple[Array, Array, Array]:
    """As :func:`positive_roots`, and the two critical points (2, m): peak and valley, NaN without a wave."""
    m = a.size
    if m <= _FEW:
        alone = [_roots_alone(*lane) for lane in zip(a.tolist(), b.tolist(), c.tolist(), strict=True)]
        return (
            np.array([one[0] for one in alone]).reshape(m, 3),
            np.array([one[1] for one in alone], dtype=bool).reshape(m, 3),
            np.array([one[2] for one in alone]).reshape(m, 2).T,
        )
    waves = np.full((2, m), np.nan)
    roots = np.full((m, 3), np.nan)
    double = np.zeros((m, 3), dtype=bool)
    with np.errstate(all="ignore"):
        least = np.maximum(np.maximum(np.sqrt(np.abs(a)), np.abs(b) ** 0.2), _eighth_root(np.abs(c)))
        good = np.isfinite(a) & np.isfinite(b) & np.isfinite(c) & (least > 0.0) & (a <= 0.0) & (c <= 0.0)
        if not good.any():
            return roots, double, waves
        lanes = np.flatnonzero(good)
        # A power of two scales without rounding.
        least = least[lanes]
        unit = np.ldexp(1.0, np.frexp(least)[1])
        least = least / unit * (1.0 - 1e-9)
        square = unit * unit
        fourth = square * square
        a, b, c = a[lanes] / square, b[lanes] / (fourth * unit), c[lanes] / (fourth * fourth)
        # Cauchy-like bound: each other term is below x^8 / 3.
        top = np.maximum(np.maximum(np.sqrt(3.0 * -a), np.abs(3.0 * b) ** 0.2), _eighth_root(3.0 * -c)) * (1.0 + 1e-9)
        floor = np.minimum(_eighth_root(-0.5 * c), np.where(b > 0.0, np.cbrt(-0.5 * c / b), np.inf)) * (1.0 - 1e-9)
        floor = np.maximum(floor, 1e-60)
        turn = np.sqrt(-0.45 * a)
        dip = _quintic(turn, a, b)[0]
        humps = (b > 0.0) & (dip < 0.0)
        upper = np.full(lanes.size, np.nan)
        k = np.flatnonzero(humps)
        if k.size:
            start = np.maximum(turn[k], 1e-60)
            upper[k] = _safe_halley(_quintic, (a[k], b[k]), start, top[k], np.ones(k.size, bool))
        lower = np.full(lanes.size, np.nan)
        h = np.flatnonzero(humps)
        if h.size:
            # On (0, turn) the quintic exceeds 3 b - 6 |a| x^3, so its root lies above this.
            start = np.cbrt(0.5 * b[h] / -a[h]) * (1.0 - 1e-9)
            lower[h] = _safe_halley(_quintic, (a[h], b[h]), start, turn[h], np.zeros(h.size, bool))

        peak, peak_zero = _height(lower, a, b, c)
        valley, valley_zero = _height(upper, a, b, c)
        peak_zero &= humps
        valley_zero &= humps & ~peak_zero & (peak > 0.0)
        high_peak = humps & (peak > 0.0) & ~peak_zero
        # Slots 0, 1, 2: below the peak, on the way down, after the valley.
        slot = np.full((3, lanes.size), False)
        slot[0] = high_peak
        slot[1] = high_peak & (valley < 0.0) & ~valley_zero
        slot[2] = (b <= 0.0) | (humps & (valley < 0.0) & ~valley_zero) | ((b > 0.0) & ~humps)
        # Without a positive term but the first the root is above that with each other term alone.
        lows = np.stack((floor, lower, np.where(humps, upper, np.where(b <= 0.0, least, floor))))
        highs = np.stack((lower, upper, top))
        which, lane = np.nonzero(slot)
        found = np.full((3, lanes.size), np.nan)
        found[which, lane] = _safe_halley(
            _octic, (a[lane], b[lane], c[lane]), lows[which, lane], highs[which, lane], which != 1
        )
        found[0] = np.where(peak_zero, lower, found[0])
        found[1] = np.where(valley_zero, upper, found[1])
        marks = np.zeros((3, lanes.size), bool)
        marks[0], marks[1] = peak_zero, valley_zero
        order = np.argsort(found, axis=0)
        roots[lanes] = (np.take_along_axis(found, order, 0) * unit).T
        double[lanes] = np.take_along_axis(marks, order, 0).T
        waves[:, lanes] = np.where(humps, np.stack((lower, upper)) * unit, np.nan)
    return roots, double, waves


_ROW = tuple[list[float], list[bool], tuple[float, float]]


def _roots_alone(a: float, b: float, c: float) -> _ROW:
    """Roots, marks and wave of one lane in plain floats: the same steps, and the same to the last bit."""
    if not (isfinite(a) and isfinite(b) and isfinite(c) and a <= 0.0 and c <= 0.0):
        return [_NONE] * 3, [False] * 3, (_NONE, _NONE)
    least = max(sqrt(abs(a)), float(np.power(abs(b), 0.2)), sqrt(sqrt(sqrt(abs(c)))))
    if not least > 0.0:
        return [_NONE] * 3, [False] * 3, (_NONE, _NONE)
    unit = ldexp(1.0, frexp(least)[1])
    least = least / unit * (1.0 - 1e-9)
    square = unit * unit
    fourth = square * square
    a, b, c = a / square, b / (fourth * unit), c / (fourth * fourth)
    top = max(sqrt(3.0 * -a), float(np.power(abs(3.0 * b), 0.2)), sqrt(sqrt(sqrt(3.0 * -c)))) * (1.0 + 1e-9)
    floor = sqrt(sqrt(sqrt(-0.5 * c)))
    if b > 0.0:
        floor = min(floor, float(np.cbrt(-0.5 * c / b)))
    floor = max(floor * (1.0 - 1e-9), 1e-60)
    turn = sqrt(-0.45 * a)
    wave = b > 0.0 and _quintic(turn, a, b)[0] < 0.0
    peak = valley = _NONE
    if wave:
        valley = _safe_halley_alone(_quintic, max(turn, 1e-60), top, True, a, b)
    if wave:
        # On (0, turn) the quintic exceeds 3 b - 6 |a| x^3, so its root lies above this.
        peak = _safe_halley_alone(_quintic, float(np.cbrt(0.5 * b / -a)) * (1.0 - 1e-9), turn, False, a, b)
    found: list[tuple[float, bool]] = []
    if not wave:
        found.append((_safe_halley_alone(_octic, least if b <= 0.0 else floor, top, True, a, b, c), False))
    else:
        high, at_peak = _height(peak, a, b, c)
        low, at_valley = _height(valley, a, b, c)
        at_valley = at_valley and not at_peak and high > 0.0
        if at_peak:
            found.append((peak, True))
        elif high > 0.0:
            found.append((_safe_halley_alone(_octic, floor, peak, True, a, b, c), False))
        if at_valley:
            found.append((valley, True))
        elif low < 0.0:
            if high > 0.0 and not at_peak:
                found.append((_safe_halley_alone(_octic, peak, valley, False, a, b, c), False))
            found.append((_safe_halley_alone(_octic, valley, top, True, a, b, c), False))
    found.sort()
    blank = 3 - len(found)
    roots = [x * unit for x, _ in found] + [_NONE] * blank
    marks = [mark for _, mark in found] + [False] * blank
    return roots, marks, (peak * unit, valley * unit) if wave else (_NONE, _NONE)


class GaussEstimate(NamedTuple):
    """Per lane: slant ranges (3, m) km, positions (3, 3, m) km, velocity (3, m) km/s at the middle."""

    range_km: Array
    r_km: Array
    v2_km_s: Array


def ranges_of_weights(lines: Lines, poly: RangePolynomial, c1: Array, c3: Array) -> Array:
    """Slant ranges (3, m) of coplanar positions with r2 = c1 r1 + c3 r3."""
    seen = lines.observer_km
    rest = seen[1] - c1 * seen[0] - c3 * seen[2]
    along = dot(poly.normals, rest[None]) / poly.determinant
    along[0] /= c1
    along[2] /= c3
    return along


def gauss_estimate(lines: Lines, poly: RangePolynomial, root_km: Array) -> GaussEstimate:
    """Slant ranges, positions and the Lagrange-series velocity for one root per lane.

    The series are those of the method: f = 1 - u t^2 / 2, g = t - u t^3 / 6 with u = gm / r^3.
    """
    with np.errstate(all="ignore"):
        tau1, tau3 = lines.t_s[0], lines.t_s[2]
        tau = tau3 - tau1
        u = lines.gm_km3_s2 / (root_km * root_km * root_km)
        c1 = tau3 / tau * (1.0 + u / 6.0 * (tau**2 - tau3**2))
        c3 = -tau1 / tau * (1.0 + u / 6.0 * (tau**2 - tau1**2))
        along = ranges_of_weights(lines, poly, c1, c3)
        r = lines.observer_km + along[:, None, :] * lines.effective
        f1, f3 = 1.0 - 0.5 * u * tau1**2, 1.0 - 0.5 * u * tau3**2
        g1, g3 = tau1 - u * (tau1 * tau1 * tau1) / 6.0, tau3 - u * (tau3 * tau3 * tau3) / 6.0
        v2 = (f1 * r[2] - f3 * r[0]) / (f1 * g3 - f3 * g1)
    return GaussEstimate(along, r, v2)


def root_function(a: float, b: float, c: float, x_km: ArrayLike, unit_km: float) -> Array:
    """x^8 + a x^6 + b x^3 + c at x, divided by unit^8: a number of order one to draw."""
    y = np.asarray(x_km, dtype=float) / unit_km
    a, b, c = a / unit_km**2, b / unit_km**5, c / unit_km**8
    value: Array = ((y * y + a) * y**3 + b) * y**3 + c
    return value
