"""A textbook angles-only loop in NumPy, one triple at a time: what the batch solver is measured against.

Written from the algorithms as printed (Curtis, *Orbital Mechanics for Engineering Students*, algorithms
5.5 and 5.6: Gauss, roots of the polynomial by ``numpy.roots``, improvement by universal variables with
averaged f and g, Newton for the universal Kepler equation, algorithm 3.3), as a careful analyst would type
it: vectors by ``np.cross``, ``np.dot`` and ``np.linalg.norm``, every real positive root followed, the passes
ended once no slant range changes by more than 1e-8 of the largest, after 200 passes at the latest, roots
with a negative range dropped. Neither slowed down nor tuned. Geometric directions.
"""

from __future__ import annotations

import numpy as np
from numpy import cos, cosh, sin, sinh, sqrt

#: Relative change of the slant ranges that ends the loop, change of the universal variable that ends Newton's.
TOLERANCE, KEPLER_TOLERANCE = 1e-8, 1e-8
PASSES = 200


def stumpff_s(z):
    if z > 0.0:
        return (sqrt(z) - sin(sqrt(z))) / sqrt(z) ** 3
    if z < 0.0:
        return (sinh(sqrt(-z)) - sqrt(-z)) / sqrt(-z) ** 3
    return 1.0 / 6.0


def stumpff_c(z):
    if z > 0.0:
        return (1.0 - cos(sqrt(z))) / z
    if z < 0.0:
        return (cosh(sqrt(-z)) - 1.0) / -z
    return 0.5


def universal_anomaly(dt, r0, vr0, alpha, mu):
    x = sqrt(mu) * abs(alpha) * dt
    for _ in range(100):
        z = alpha * x * x
        c, s = stumpff_c(z), stumpff_s(z)
        f = r0 * vr0 / sqrt(mu) * x * x * c + (1.0 - alpha * r0) * x**3 * s + r0 * x - sqrt(mu) * dt
        df = r0 * vr0 / sqrt(mu) * x * (1.0 - z * s) + (1.0 - alpha * r0) * x * x * c + r0
        step = f / df
        x -= step
        if abs(step) < KEPLER_TOLERANCE * max(abs(x), 1.0):
            break
    return x


def f_and_g(x, dt, r0, alpha, mu):
    z = alpha * x * x
    return 1.0 - x * x / r0 * stumpff_c(z), dt - x**3 / sqrt(mu) * stumpff_s(z)


def solve(los, observer, t, mu, tolerance=TOLERANCE, passes=PASSES):
    """(root, positions (3, 3), middle velocity) of every root with positive ranges that converges."""
    l1, l2, l3 = los
    tau1, tau3 = t[0] - t[1], t[2] - t[1]
    tau = tau3 - tau1
    p = np.cross(l2, l3), np.cross(l1, l3), np.cross(l1, l2)
    d0 = np.dot(l1, p[0])
    d = np.array([[np.dot(r, q) for q in p] for r in observer])
    a = (-d[0, 1] * tau3 / tau + d[1, 1] + d[2, 1] * tau1 / tau) / d0
    b = (d[0, 1] * (tau3**2 - tau**2) * tau3 / tau + d[2, 1] * (tau**2 - tau1**2) * tau1 / tau) / (6.0 * d0)
    e = np.dot(observer[1], l2)
    square = np.dot(observer[1], observer[1])
    roots = np.roots(
        [
            1.0,
            0.0,
            -(a * a + 2.0 * a * e + square),
            0.0,
            0.0,
            -2.0 * mu * b * (a + e),
            0.0,
            0.0,
            -((mu * b) ** 2),
        ]
    )
    out = []
    for root in roots[(np.abs(roots.imag) < 1e-6 * np.abs(roots)) & (roots.real > 0.0)].real:
        u = mu / root**3
        f1, f3 = 1.0 - 0.5 * u * tau1**2, 1.0 - 0.5 * u * tau3**2
        g1, g3 = tau1 - u * tau1**3 / 6.0, tau3 - u * tau3**3 / 6.0
        rho = np.full(3, np.inf)
        for _ in range(passes):
            wedge = f1 * g3 - f3 * g1
            c1, c3 = g3 / wedge, -g1 / wedge
            new = np.array(
                [
                    (-d[0, 0] + d[1, 0] / c1 - c3 / c1 * d[2, 0]) / d0,
                    (-c1 * d[0, 1] + d[1, 1] - c3 * d[2, 1]) / d0,
                    (-c1 / c3 * d[0, 2] + d[1, 2] / c3 - d[2, 2]) / d0,
                ]
            )
            r = observer + new[:, None] * los
            v2 = (-f3 * r[0] + f1 * r[2]) / wedge
            if np.max(np.abs(new - rho)) < tolerance * np.max(np.abs(new)):
                if (new > 0.0).all():
                    out.append((root, r, v2))
                break
            rho = new
            r2 = np.linalg.norm(r[1])
            vr = np.dot(r[1], v2) / r2
            alpha = 2.0 / r2 - np.dot(v2, v2) / mu
            x1, x3 = universal_anomaly(tau1, r2, vr, alpha, mu), universal_anomaly(tau3, r2, vr, alpha, mu)
            ff1, gg1 = f_and_g(x1, tau1, r2, alpha, mu)
            ff3, gg3 = f_and_g(x3, tau3, r2, alpha, mu)
            f1, f3 = 0.5 * (f1 + ff1), 0.5 * (f3 + ff3)
            g1, g3 = 0.5 * (g1 + gg1), 0.5 * (g3 + gg3)
    return out
