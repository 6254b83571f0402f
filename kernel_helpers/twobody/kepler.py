"""Two-body propagation for every conic by universal variables, with its analytic partials.

With s the universal variable (ds = dt / r), beta = 2 gm / r0 - v0^2 and the Stumpff functions c_k,
G_k = s^k c_k(beta s^2), Kepler's equation is  dt = r0 G1 + (r0 . v0) G2 + gm G3  on ellipse, parabola
and hyperbola alike. It is solved by Laguerre's iteration (Conway 1986, Celest. Mech. 39, 199) inside a
bracket that is certain: dt/ds = r is never below the periapsis distance q, so s <= dt / q.

State-transition matrix: Battin, *An Introduction to the Mathematics and Methods of Astrodynamics*
(AIAA 1999), section 9.7, written with G_k in place of his U_k.

Numbers that are not finite give NaN, without warnings.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

#: Floats, and now and then integers or masks, of any shape.
Array = NDArray[Any]

#: Passes of Laguerre's iteration; three or four are usual, the bracket guarantees the rest.
MAX_PASSES = 60
#: Steps of time below this count as none, s.
_NO_STEP_S = 1e-200
_EPS = float(np.finfo(float).eps)
#: Relative size of a step of s that ends the iteration (third order: its cube is what is left).
_FINAL = 1e-6
#: Largest sqrt(-beta) s on a hyperbola before cosh leaves the range of a float.
_MAX_HYPERBOLIC = 690.0
_FACTORIAL = [1.0]
for _k in range(1, 26):
    _FACTORIAL.append(_FACTORIAL[-1] * _k)
#: Terms of the power series used for |x| < 1: the first left out is below 1e-19 of the sum.
_TERMS = 9


#: Row k - 2 holds the coefficients of the power series of c_k, k = 2..5.
_SERIES = np.array([[(-1.0) ** n / _FACTORIAL[k + 2 * n] for n in range(_TERMS)] for k in range(2, 6)])[:, :, None]


def _series(x: Array, count: int) -> Array:
    """c2, c3 (count 2) or c2 to c5 (count 4) by their power series, |x| < 1; shape (count, *x.shape)."""
    # A lone lane would be summed pairwise, in another order than one among many: give it company.
    powers = np.empty((_TERMS, 2 if x.size == 1 else x.size))
    powers[0] = 1.0
    powers[1] = x.reshape(-1)
    powers[2] = powers[1] * powers[1]
    powers[3:5] = powers[1:3] * powers[2]
    powers[5:9] = powers[1:5] * powers[4]
    # Not a matrix product: its rounding may depend on where in the array a lane stands.
    summed: Array = np.add.reduce(_SERIES[:count] * powers, axis=1)
    return summed[:, : x.size].reshape(count, *x.shape)


def stumpff(x: ArrayLike) -> tuple[Array, Array, Array, Array]:
    """Stumpff functions c0, c1, c2, c3.

    Parameters
    ----------
    x : array_like
        Argument beta s^2, any shape: positive on ellipses, negative on hyperbolas.

    Returns
    -------
    c0, c1, c2, c3 : ndarray
        c_k(x) = sum over n of (-x)^n / (k + 2 n)!; the power series is used for |x| < 1, where the
        closed forms lose digits.

    References
    ----------
    K. Stumpff 1959, *Himmelsmechanik* I, section 41 (recalled).
    """
    x = np.asarray(x, dtype=float)
    small = np.abs(x) < 1.0
    with np.errstate(all="ignore"):
        if small.all():
            c2, c3 = _series(x, 2)
            return 1.0 - x * c2, 1.0 - x * c3, c2, c3
        y = np.sqrt(np.abs(x))
        c0, sine = np.cos(y), np.sin(y)
        open_orbit = x < 0.0
        if open_orbit.any():
            c0 = np.where(open_orbit, np.cosh(y), c0)
            sine = np.where(open_orbit, np.sinh(y), sine)
        c1 = sine / y
        c2 = (1.0 - c0) / x
        c3 = (1.0 - c1) / x
        if small.any():
            near = _series(np.where(small, x, 0.0), 2)
            c2 = np.where(small, near[0], c2)
            c3 = np.where(small, near[1], c3)
            c0 = np.where(small, 1.0 - x * c2, c0)
            c1 = np.where(small, 1.0 - x * c3, c1)
    return c0, c1, c2, c3


def stumpff_4_5(x: Array, c2: Array, c3: Array) -> tuple[Array, Array]:
    """Stumpff functions c4 and c5 from the argument and c2, c3."""
    small = np.abs(x) < 1.0
    if small.all():
        near = _series(x, 4)
        return near[2], near[3]
    with np.errstate(all="ignore"):
        c4 = (0.5 - c2) / x
        c5 = (1.0 / 6.0 - c3) / x
        if small.any():
            near = _series(np.where(small, x, 0.0), 4)
            c4 = np.where(small, near[2], c4)
            c5 = np.where(small, near[3], c5)
    return c4, c5


class Universal(NamedTuple):
    """Solution of the universal Kepler equation: s (s/km), G0..G3 and the radius r (km)."""

    s: Array
    g0: Array
    g1: Array
    g2: Array
    g3: Array
    r: Array


def _near_guess(r0: Array, eta: Array, beta: Array, dt: Array, gm: Array) -> tuple[Array, Array]:
    """s from a series in dt >= 0, and the mask of lanes whose step is too long for it."""
    u = dt / r0
    w = 0.5 * eta * u / r0
    s = u * (1.0 - w * (1.0 - 2.0 * w))
    return s, ~((np.abs(w) < 0.3) & (np.abs(beta) * u * u < 2.25) & (gm * u * u < r0))


def _first_guess(
    s: Array, far: Array, r0: Array, eta: Array, beta: Array, dt: Array, gm: Array, low: Array, high: Array
) -> Array:
    """Start of the iteration for dt >= 0: the series where it holds, anomalies elsewhere."""
    root, cubic = np.sqrt(np.abs(beta)), np.cbrt(6.0 * dt / gm)
    if far.any():
        cos_part, sin_part = 1.0 - r0 * beta / gm, eta * root / gm
        # Ellipse: Danby's E = M + 0.85 e sign(sin M) (1987, Celest. Mech. 40, 303).
        e = np.hypot(cos_part, sin_part)
        start = np.arctan2(sin_part, cos_part)
        mean = start - sin_part + root * beta / gm * dt
        ellipse = (mean + 0.85 * e * np.sign(np.sin(mean)) - start) / root
        # Hyperbola: e sinh F dominates, so F - F0 ~ log of the growth of the mean anomaly.
        e = np.sqrt(np.maximum(cos_part**2 - sin_part**2, 1.0))
        start = np.arcsinh(sin_part / e)
        mean = sin_part - start + root * np.abs(beta) / gm * dt
        hyperbola = (np.arcsinh(mean / e) - start) / root
        # Near the parabola e is lost in rounding; this bound is not.
        growth = np.log1p(2.0 * np.abs(root * beta * dt / gm)) + 2.0 * np.log(2.0 + 2.0 * r0 * np.abs(beta) / gm)
        hyperbola = np.fmin(hyperbola, growth / root)
        # Nearly parabolic: gm s^3 / 6 dominates.
        guess = np.where(root * cubic < 0.3, cubic, np.where(beta > 0.0, ellipse, hyperbola))
        s = np.where(far, guess, s)
    inside = np.fmin(cubic, np.where(np.isfinite(high), 0.5 * (low + high), np.inf))
    return np.where((s > low) & (s < high), s, np.where(np.isfinite(inside), inside, low))


def solve_universal(
    r0_km: Array,
    eta_km2_s: Array,
    beta_km2_s2: Array,
    dt_s: Array,
    gm_km3_s2: Array | float,
    start: Array | None = None,
) -> Universal:
    """Solve Kepler's equation in universal variables, all lanes at once.

    Parameters
    ----------
    r0_km, eta_km2_s, beta_km2_s2 : ndarray
        Radius, r . v and 2 gm / r - v^2 at the start; equal shapes.
    dt_s : ndarray
        Time step, either sign, any number of revolutions.
    gm_km3_s2 : ndarray or float
    start : ndarray, optional
        A value of s known to be near (from a neighbouring orbit).

    Returns
    -------
    Universal
    """
    with np.errstate(all="ignore"):
        sign = np.where(dt_s < 0.0, -1.0, 1.0)
        eta = eta_km2_s * sign
        dt = np.abs(dt_s)
        # A step that underflows on the way is none.
        dt = np.where(dt < _NO_STEP_S, 0.0, dt)
        gm = np.full(dt.shape, gm_km3_s2) if np.ndim(gm_km3_s2) == 0 else np.asarray(gm_km3_s2)
        if start is not None:
            # Near the solution the bracket is only a guard.
            s = np.where(start * sign > 0.0, start * sign, dt / r0_km)
            low, high = np.zeros_like(dt), np.full(dt.shape, np.inf)
            near = _iterate(s, low, high, r0_km, eta, beta_km2_s2, dt, gm)
            return Universal(near.s * sign, near.g0, near.g1 * sign, near.g2, near.g3 * sign, near.r)
        s, far = _near_guess(r0_km, eta, beta_km2_s2, dt, gm)
        if not far.any():
            # Short steps: the series is close, a bracket would only be a guard.
            near = _iterate(s, np.zeros_like(dt), np.full(dt.shape, np.inf), r0_km, eta, beta_km2_s2, dt, gm)
            return Universal(near.s * sign, near.g0, near.g1 * sign, near.g2, near.g3 * sign, near.r)
        root = np.sqrt(np.abs(beta_km2_s2))
        closed = beta_km2_s2 > 0.0
        turn = np.where(closed, 2.0 * np.pi / root, np.inf)
        period = turn * gm / beta_km2_s2
        # Whole revolutions leave position and velocity unchanged: solve for the rest only.
        whole = np.where(closed & (dt >= period), np.floor(dt / period), 0.0)
        many = bool(whole.any())
        if many:
            dt = np.where(whole > 0.0, np.maximum(dt - whole * period, 0.0), dt)
            s, far = _near_guess(r0_km, eta, beta_km2_s2, dt, gm)
        # h^2 = r^2 v^2 - (r.v)^2, q = p / (1 + e).
        p = (r0_km * (2.0 * gm - beta_km2_s2 * r0_km) - eta * eta) / gm
        e = np.sqrt(np.maximum(1.0 - p * beta_km2_s2 / gm, 0.0))
        q = p / (1.0 + e)
        high = np.where(q > 0.0, dt / q * (1.0 + 1e-12), np.inf)
        high = np.minimum(high, np.where(closed, turn * (1.0 + 1e-12), _MAX_HYPERBOLIC / root))
        # Lanes of short steps go the same way as if they were alone.
        high = np.where(far, high, np.inf)
        low = np.zeros_like(dt)
        s = _first_guess(s, far, r0_km, eta, beta_km2_s2, dt, gm, low, high)
        s = np.where(np.isfinite(dt) & np.isfinite(beta_km2_s2) & np.isfinite(eta), s, np.nan)
        found = _iterate(s, low, high, r0_km, eta, beta_km2_s2, dt, gm)
        s = found.s + whole * np.where(closed, turn, 0.0) if many else found.s
        g3 = found.g3
        if many:
            # G3 grows with every revolution: s - beta G3 = G1 is periodic.
            g3 = np.where(whole > 0.0, (s - found.g1) / beta_km2_s2, g3)
        return Universal(s * sign, found.g0, found.g1 * sign, found.g2, g3 * sign, found.r)


def _iterate(s: Array, low: Array, high: Array, r0: Array, eta: Array, beta: Array, dt: Array, gm: Array) -> Universal:
    """Laguerre's iteration for dt >= 0; lanes that are done leave the loop once they are the majority."""
    shape = s.shape
    given = [
        a.reshape(-1) if a.shape == shape else np.broadcast_to(a, shape).reshape(-1)
        for a in (s, low, high, r0, eta, beta, dt, gm)
    ]
    s, low, high, r0, eta, beta, dt, gm = given
    out: tuple[Array, ...] | None = None
    lanes: Array | None = None
    for _ in range(MAX_PASSES):
        square = s * s
        c0, c1, c2, c3 = stumpff(beta * square)
        g1, g2, g3 = s * c1, square * c2, square * s * c3
        a, b, c = r0 * g1, eta * g2, gm * g3
        value = a + b + c - dt
        slope = r0 * c0 + eta * g1 + gm * g2
        curve = eta * c0 + (gm - beta * r0) * g1
        step = 5.0 * value / (slope + np.sqrt(np.abs(16.0 * slope * slope - 20.0 * value * curve)))
        size = np.abs(step)
        error, terms = np.abs(value), a + np.abs(b) + np.abs(c) + dt
        # Far from the solution Laguerre's step can be small without being right.
        final = (size <= _FINAL * s) & ((error <= 2.0 * size * slope) | (error <= 1e-12 * terms))
        # Written so that NaN counts as done.
        going = (error > 4.0 * _EPS * terms) & ~final
        count = int(np.count_nonzero(going))
        leaving = not count or (count * 2 < going.size and going.size > 16)
        now = (s, c0, g1, g2, g3, slope)
        if leaving:
            # The last step is taken by Taylor's series: with it below _FINAL its cube is beyond a float.
            h = np.where(final, -step, 0.0)
            half = 0.5 * h * h
            turn = beta * g1
            now = (
                s + h,
                c0 - h * turn - half * beta * c0,
                g1 + h * c0 - half * turn,
                g2 + h * g1 + half * c0,
                g3 + h * g2 + half * g1,
                slope + h * curve + half * (gm - beta * slope),
            )
        if out is None or lanes is None:
            out = now
        else:
            for target, values in zip(out, now, strict=False):
                target[lanes] = values
        if not count:
            break
        low = np.where(value < 0.0, s, low)
        high = np.where(value > 0.0, s, high)
        trial = s - step
        s_next = np.where((trial > low) & (trial < high), trial, 0.5 * (low + np.minimum(high, 2.0 * s + dt / r0)))
        s_next = np.where(going, s_next, s)
        if leaving:
            keep = np.flatnonzero(going)
            if lanes is None:
                lanes = keep
                out = tuple(np.array(values) for values in out)
            else:
                lanes = lanes[keep]
            s_next, low, high, r0, eta, beta, dt, gm = (
                values[keep] for values in (s_next, low, high, r0, eta, beta, dt, gm)
            )
        s = s_next
    else:
        # No solution found: no number rather than a wrong one.
        rest = np.flatnonzero(going)
        if lanes is not None:
            rest = lanes if leaving else lanes[rest]
        for values in out or ():
            values[rest] = np.nan
    assert out is not None
    return Universal(*(values.reshape(shape) for values in out))


def _prepared(
    r_km: ArrayLike, v_km_s: ArrayLike, dt_s: ArrayLike, gm: ArrayLike
) -> tuple[Array, Array, Array, Array, Array, Array]:
    r = np.asarray(r_km, dtype=float)
    v = np.asarray(v_km_s, dtype=float)
    dt = np.asarray(dt_s, dtype=float)
    gm_rows = np.asarray(gm, dtype=float)
    shape = np.broadcast_shapes(r.shape[:-1], v.shape[:-1], dt.shape, gm_rows.shape)
    r = np.broadcast_to(r, (*shape, 3))
    v = np.broadcast_to(v, (*shape, 3))
    dt = np.broadcast_to(dt, shape)
    gm_rows = np.broadcast_to(gm_rows, shape)
    with np.errstate(all="ignore"):
        radius = np.sqrt(np.add.reduce(r * r, axis=-1))
        radius = np.where(np.isfinite(radius), radius, np.nan)
        beta = 2.0 * gm_rows / radius - np.add.reduce(v * v, axis=-1)
    return r, v, dt, gm_rows, radius, beta


def propagate(r_km: ArrayLike, v_km_s: ArrayLike, dt_s: ArrayLike, gm_km3_s2: ArrayLike) -> tuple[Array, Array]:
    """Two-body motion over a time step.

    Parameters
    ----------
    r_km, v_km_s : array_like, shape (..., 3)
        Position (km) and velocity (km/s) about the centre, any inertial axes.
    dt_s : array_like, shape (...)
        Time step in seconds, either sign; leading shapes are broadcast against each other.
    gm_km3_s2 : array_like
        Gravitational parameter.

    Returns
    -------
    r_km, v_km_s : ndarray, shape (..., 3)
        State after dt; NaN where the input is not finite or the radius is zero.

    References
    ----------
    R. H. Battin 1999, sections 4.5 and 4.6.

    Examples
    --------
    A quarter of a circular orbit:

    >>> import numpy as np
    >>> r, v = propagate([1.0, 0.0, 0.0], [0.0, 1.0, 0.0], np.pi / 2, 1.0)
    >>> bool(np.allclose(r, [0.0, 1.0, 0.0], atol=1e-15))
    True
    """
    r, v, dt, gm, radius, beta = _prepared(r_km, v_km_s, dt_s, gm_km3_s2)
    with np.errstate(all="ignore"):
        u = solve_universal(radius, np.add.reduce(r * v, axis=-1), beta, dt, gm)
        f, g, ft, gt = lagrange(u, radius, dt, gm)
        return f[..., None] * r + g[..., None] * v, ft[..., None] * r + gt[..., None] * v


def lagrange(u: Universal, r0: Array, dt: Array, gm: Array | float) -> tuple[Array, Array, Array, Array]:
    """Lagrange coefficients f, g (s), df/dt (1/s), dg/dt of a solved step.

    g is the sum r0 G1 + eta G2 = dt - gm G3, taken in the second form.
    """
    return 1.0 - gm * u.g2 / r0, dt - gm * u.g3, -gm * u.g1 / (u.r * r0), 1.0 - gm * u.g2 / u.r


def battin_c(u: Universal, beta: Array, dt: Array, gm: Array | float) -> Array:
    """The quantity C of the partials (km^2 s^2 times gm): gm^2 (3 G5 - s G4) - gm dt G2."""
    square = u.s * u.s
    x = beta * square
    # c2 and c3 of the whole step (all revolutions), consistent with G2 and G3.
    with np.errstate(all="ignore"):
        c2 = np.where(square > 0.0, u.g2 / square, 0.5)
        c3 = np.where(square > 0.0, u.g3 / (square * u.s), 1.0 / 6.0)
    c4, c5 = stumpff_4_5(x, c2, c3)
    fourth = square * square
    return gm * (gm * u.s * fourth * (3.0 * c5 - c4) - dt * u.g2)


def propagate_with_partials(
    r_km: ArrayLike, v_km_s: ArrayLike, dt_s: ArrayLike, gm_km3_s2: ArrayLike
) -> tuple[Array, Array, Array]:
    """Two-body motion over a time step and its state-transition matrix.

    Parameters
    ----------
    r_km, v_km_s, dt_s, gm_km3_s2
        As for :func:`propagate`.

    Returns
    -------
    r_km, v_km_s : ndarray, shape (..., 3)
    stm : ndarray, shape (..., 6, 6)
        Partials of (r, v) after dt with respect to (r, v) before; units km, km/s, s.

    References
    ----------
    R. H. Battin 1999, section 9.7.
    """
    r0, v0, dt, gm, radius, beta = _prepared(r_km, v_km_s, dt_s, gm_km3_s2)
    with np.errstate(all="ignore"):
        u = solve_universal(radius, np.add.reduce(r0 * v0, axis=-1), beta, dt, gm)
        f, g, ft, gt = (k[..., None] for k in lagrange(u, radius, dt, gm))
        r, v = f * r0 + g * v0, ft * r0 + gt * v0
        dr, dv = r - r0, v - v0
        f, g, ft, gt = (k[..., None] for k in (f, g, ft, gt))
        c = battin_c(u, beta, dt, gm)[..., None, None]
        m, q0, q = gm[..., None, None], radius[..., None, None], u.r[..., None, None]

        def outer(a: Array, b: Array) -> Array:
            return a[..., :, None] * b[..., None, :]

        eye = np.eye(3)
        stm = np.empty((*r.shape[:-1], 6, 6))
        k = q0 * (1.0 - f)
        stm[..., :3, :3] = q / m * outer(dv, dv) + (k * outer(r, r0) + c * outer(v, r0)) / q0**3 + f * eye
        stm[..., :3, 3:] = k / m * (outer(dr, v0) - outer(dv, r0)) + c / m * outer(v, v0) + g * eye
        twist = (outer(r, v) - outer(v, r)) @ outer(r, dv)
        stm[..., 3:, :3] = (
            -outer(dv, r0) / q0**2
            - outer(r, dv) / q**2
            + ft * (eye - outer(r, r) / q**2 + twist / (m * q))
            - m * c / (q**3 * q0**3) * outer(r, r0)
        )
        stm[..., 3:, 3:] = q0 / m * outer(dv, dv) + (k * outer(r, r0) - c * outer(r, v0)) / q**3 + gt * eye
        return r, v, stm


def short_partials(r_km: Array, v_km_s: Array, dt_s: Array, gm_km3_s2: float) -> tuple[Array, Array, Array]:
    """State and transition matrix over a step that is short against the motion, such as the light time.

    Taylor's series in n dt (n the angular rate): the errors are of order (n dt)^3 in the matrix, made
    dimensionless with r and v, and (n dt)^4 in the state; n dt is 1e-5 to 1e-3 for light times.

    Parameters
    ----------
    r_km, v_km_s : ndarray, shape (m, 3)
    dt_s : ndarray, shape (m,)
    gm_km3_s2 : float

    Returns
    -------
    r_km, v_km_s : ndarray, shape (m, 3)
    stm : ndarray, shape (m, 6, 6)
    """
    with np.errstate(all="ignore"):
        dt = dt_s[:, None]
        square = np.add.reduce(r_km * r_km, axis=-1)
        acceleration = (-gm_km3_s2 / (square * np.sqrt(square)))[:, None] * r_km
        # Gravity's gradient half-way makes the matrix good to the second order of the step.
        middle = r_km + 0.5 * dt * v_km_s
        square = np.add.reduce(middle * middle, axis=-1)
        pull = gm_km3_s2 / (square * np.sqrt(square))
        gradient = (3.0 * pull / square)[:, None, None] * (middle[:, :, None] * middle[:, None, :])
        gradient -= pull[:, None, None] * np.eye(3)
        jerk = (gradient @ v_km_s[:, :, None])[:, :, 0]
        r = r_km + dt * (v_km_s + dt * (0.5 * acceleration + dt / 6.0 * jerk))
        v = v_km_s + dt * (acceleration + 0.5 * dt * jerk)
        step = dt[:, :, None]
        stm = np.empty((len(r_km), 6, 6))
        stm[:, :3, :3] = stm[:, 3:, 3:] = np.eye(3) + 0.5 * step * step * gradient
        stm[:, :3, 3:] = step * (np.eye(3) + step * step / 6.0 * gradient)
        stm[:, 3:, :3] = step * gradient
    return r, v, stm
