"""Kepler's equation from a near start: one pass, rarely two, for plain floats and arrays alike.

A search that moves an orbit little by little knows the universal variable s of its last orbit. One pass of
Laguerre's iteration from there, whose small step is then taken by Taylor's series of G_0 .. G_5, is
enough. Every formula here is written once, for one float or an array, and gives the same digits for both.

Notation and sources as in :mod:`firstarc.twobody.kepler`.
"""

from __future__ import annotations

from collections.abc import Callable
from math import copysign, factorial, sqrt
from typing import Any

import numpy as np

from firstarc.twobody.kepler import Array

#: Passes allowed; the start is near, so that one or two are usual.
MAX_PASSES = 60
_EPS = float(np.finfo(float).eps)
_SIXTH = 1.0 / 6.0
#: (-1)^n / (4 + 2 n)! and (-1)^n / (5 + 2 n)!; the first term left out is below 1e-17 of the sum for |x| < 1.
_C4 = tuple((-1.0) ** n / factorial(4 + 2 * n) for n in range(8))
_C5 = tuple((-1.0) ** n / factorial(5 + 2 * n) for n in range(8))

#: s, G0, G1, G2, G3, G4, G5 and the radius r: floats or arrays.
Anomaly = tuple[Any, Any, Any, Any, Any, Any, Any, Any]


def _sum(x: Any, k: tuple[float, ...]) -> Any:
    """Horner's scheme of eight terms."""
    return ((((((x * k[7] + k[6]) * x + k[5]) * x + k[4]) * x + k[3]) * x + k[2]) * x + k[1]) * x + k[0]


def _near_terms(x: Any) -> tuple[Any, Any, Any, Any, Any, Any]:
    """c0 to c5 for |x| < 1, all from the series of the last two."""
    c4, c5 = _sum(x, _C4), _sum(x, _C5)
    c2, c3 = 0.5 - x * c4, _SIXTH - x * c5
    return 1.0 - x * c2, 1.0 - x * c3, c2, c3, c4, c5


def _terms_alone(x: float) -> tuple[float, float, float, float, float, float]:
    if -1.0 < x < 1.0:
        return _near_terms(x)
    # NumPy's functions, as for arrays: those of the math module may differ in the last digit.
    if x > 0.0:
        y = sqrt(x)
        c0, c1 = float(np.cos(y)), float(np.sin(y)) / y
    else:
        y = sqrt(-x)
        c0, c1 = float(np.cosh(y)), float(np.sinh(y)) / y
    c2, c3 = (1.0 - c0) / x, (1.0 - c1) / x
    return c0, c1, c2, c3, (0.5 - c2) / x, (_SIXTH - c3) / x


def _terms(x: Array) -> tuple[Array, Array, Array, Array, Array, Array]:
    small = np.abs(x) < 1.0
    if small.all():
        return _near_terms(x)
    y = np.sqrt(np.abs(x))
    c0, sine = np.cos(y), np.sin(y)
    closed = x > 0.0
    if not closed.all():
        c0, sine = np.where(closed, c0, np.cosh(y)), np.where(closed, sine, np.sinh(y))
    c1 = sine / y
    c2, c3 = (1.0 - c0) / x, (1.0 - c1) / x
    terms = c0, c1, c2, c3, (0.5 - c2) / x, (_SIXTH - c3) / x
    if small.any():
        near = _near_terms(np.where(small, x, 0.0))
        terms = tuple(np.where(small, a, b) for a, b in zip(near, terms, strict=True))  # type: ignore[assignment]
    return terms


def _step(
    s: Any,
    terms: tuple[Any, ...],
    r0: Any,
    eta: Any,
    beta: Any,
    dt: Any,
    gm: float,
    final: float,
    root: Callable[[Any], Any],
) -> tuple[Any, Any, Any, Any, Anomaly]:
    """Laguerre's step (to be subtracted), whether it may be the last, whether one is needed, dr/ds, and all at s."""
    c0, c1, c2, c3, c4, c5 = terms
    square = s * s
    cube = square * s
    g1, g2, g3 = s * c1, square * c2, cube * c3
    a, b, c = r0 * g1, eta * g2, gm * g3
    value = a + b + c - dt
    r = r0 * c0 + eta * g1 + gm * g2
    curve = eta * c0 + (gm - beta * r0) * g1
    step = 5.0 * value / (r + root(abs(16.0 * r * r - 20.0 * value * curve)))
    error, size = abs(value), abs(a) + abs(b) + abs(c) + abs(dt)
    # Far from the solution Laguerre's step can be small without being right.
    small = (abs(step) <= final * abs(s)) & ((error <= 2.0 * abs(step) * r) | (error <= 1e-12 * size))
    # Written so that NaN counts as done.
    needed = error > 4.0 * _EPS * size
    return step, small, needed, curve, (s, c0, g1, g2, g3, square * square * c4, square * cube * c5, r)


def _moved(h: Any, at: Anomaly, curve: Any, beta: Any, gm: float) -> Anomaly:
    """All quantities at s + h to the second order of h."""
    s, g0, g1, g2, g3, g4, g5, r = at
    half = 0.5 * h * h
    return (
        s + h,
        g0 - beta * (h * g1 + half * g0),
        g1 + h * g0 - half * beta * g1,
        g2 + h * g1 + half * g0,
        g3 + h * g2 + half * g1,
        g4 + h * g3 + half * g2,
        g5 + h * g4 + half * g3,
        r + h * curve + half * (gm - beta * r),
    )


def first_anomaly_alone(r0: float, eta: float, beta: float, dt: float, gm: float) -> float:
    """:func:`first_anomaly` of one lane in plain floats."""
    u = dt / r0
    w = 0.5 * (eta / r0) * u
    if abs(w) < 0.3 and abs(beta) * u * u < 2.25 and gm * u * u < r0:
        return u * (1.0 - w * (1.0 - 2.0 * w))
    cubic = float(np.cbrt(6.0 * dt / gm))
    x = beta * cubic * cubic
    if x > 4.0:
        return beta * dt / gm
    if x < -4.0:
        root = sqrt(-beta)
        growth = float(np.log1p(2.0 * abs(root * beta * dt / gm))) + 2.0 * float(np.log(2.0 - 2.0 * r0 * beta / gm))
        return copysign(min(abs(cubic), growth / root), dt)
    return cubic


def first_anomaly(r0: Array, eta: Array, beta: Array, dt: Array, gm: float) -> Array:
    """A start of the universal variable without any neighbour.

    A series for short steps; else the mean motion on ellipses, gm s^3 / 6 near the parabola, and on
    hyperbolas the logarithm that the anomaly grows with.
    """
    u = dt / r0
    w = 0.5 * (eta / r0) * u
    near = (np.abs(w) < 0.3) & (np.abs(beta) * u * u < 2.25) & (gm * u * u < r0)
    s: Array = u * (1.0 - w * (1.0 - 2.0 * w))
    if not near.all():
        cubic = np.cbrt(6.0 * dt / gm)
        x = beta * cubic * cubic
        root = np.sqrt(np.abs(beta))
        growth = np.log1p(2.0 * np.abs(root * beta * dt / gm)) + 2.0 * np.log(2.0 - 2.0 * r0 * beta / gm)
        opened = np.copysign(np.fmin(np.abs(cubic), growth / root), dt)
        s = np.where(near, s, np.where(x > 4.0, beta * dt / gm, np.where(x < -4.0, opened, cubic)))
    return s


def near_anomaly_alone(s: float, r0: float, eta: float, beta: float, dt: float, gm: float, final: float) -> Anomaly:
    """:func:`near_anomaly` of one lane in plain floats, the same to the last digit.

    Raises
    ------
    ZeroDivisionError
        Where an array would turn infinite.
    """
    for _ in range(MAX_PASSES):
        step, small, needed, curve, at = _step(s, _terms_alone(beta * (s * s)), r0, eta, beta, dt, gm, final, sqrt)
        if small or not needed:
            return _moved(-step if small else 0.0, at, curve, beta, gm)
        trial = s - step
        if not trial * dt > 0.0:
            trial = 0.5 * s
        reach = 2.0 * abs(s) + abs(dt) / r0
        if not abs(trial) <= reach:
            trial = reach if dt > 0.0 else -reach
        s = trial
    nan = float("nan")
    return nan, nan, nan, nan, nan, nan, nan, nan


def near_anomaly(s: Array, r0: Array, eta: Array, beta: Array, dt: Array, gm: float, final: float) -> Anomaly:
    """Solve Kepler's equation from a near start.

    Parameters
    ----------
    s : ndarray
        Start of the universal variable, s/km, of the sign of ``dt``.
    r0, eta, beta : ndarray
        Radius (km), r . v (km^2/s) and 2 gm / r - v^2 (km^2/s^2) where the step begins; shapes that
        broadcast against ``s``.
    dt : ndarray
        Step of time, s; the shape of ``s``.
    gm : float
    final : float
        Relative size of a step of s that is taken by Taylor's series and ends the iteration: its cube
        is what is left.

    Returns
    -------
    s, g0, g1, g2, g3, g4, g5, r : ndarray
        NaN where no solution is found.
    """
    shape = s.shape
    r0, eta, beta = (np.broadcast_to(k, shape) for k in (r0, eta, beta))
    out: Anomaly | None = None
    lanes: tuple[Array, ...] | None = None
    for _ in range(MAX_PASSES):
        step, small, needed, curve, at = _step(s, _terms(beta * (s * s)), r0, eta, beta, dt, gm, final, np.sqrt)
        going = needed & ~small
        now = _moved(np.where(small, -step, 0.0), at, curve, beta, gm)
        if out is None or lanes is None:
            out = now
        else:
            for target, values in zip(out, now, strict=True):
                target[lanes] = values
        if not going.any():
            return out
        keep = np.nonzero(going)
        lanes = keep if lanes is None else tuple(k[keep[0]] for k in lanes)
        s, step, r0, eta, beta, dt = (k[keep] for k in (s, step, r0, eta, beta, dt))
        trial = s - step
        trial = np.where(trial * dt > 0.0, trial, 0.5 * s)
        reach = 2.0 * np.abs(s) + np.abs(dt) / r0
        s = np.where(np.abs(trial) <= reach, trial, np.where(dt > 0.0, reach, -reach))
    assert out is not None and lanes is not None
    for target in out:
        target[lanes] = np.nan
    return out
