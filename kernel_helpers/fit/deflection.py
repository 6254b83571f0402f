"""Bending of light by the Sun for an object at a finite distance."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S, GM_SUN_KM3_S2
from firstarc.fit.motion import Array

#: The formula fails where the line of sight passes behind the Sun's disc; there it is held at this 1 + cos.
_LEAST = 1e-6


def solar_deflection(
    los: ArrayLike, sun_to_observer_km: ArrayLike, range_km: ArrayLike, relative_to_stars: bool = True
) -> Array:
    """What the Sun's light bending adds to unit directions.

    Parameters
    ----------
    los : array_like, shape (n, 3)
        Unit directions from the observer to the object, unbent.
    sun_to_observer_km : array_like, shape (n, 3)
        Observer from the Sun.
    range_km : array_like, shape (n,)
        Distance of the object from the observer.
    relative_to_stars : bool
        True: for directions measured against catalogue stars of the same field. The catalogue is free of
        bending, the field's stars are bent fully, the object only on its own part of the path; what is left
        is the difference of the two, towards the Sun. False: the whole bending of the object, away from it.

    Returns
    -------
    ndarray, shape (n, 3)
        Vectors to be added to ``los``, in its tangent plane; 0.0041 arcsec at 90 degrees from the Sun for a
        star.

    References
    ----------
    Kaplan, Hughes, Seidelmann, Smith and Yallop 1989, Astron. J. 97, 1197, from Murray 1981 (recalled):
    with u observer to object, q Sun to object, e Sun to observer (unit vectors), E the Sun's distance,
    du = 2 GM / (c^2 E) ((u . q) e - (e . u) q) / (1 + q . e).
    """
    u = np.asarray(los, float)
    observer = np.asarray(sun_to_observer_km, float)
    distance = np.linalg.norm(observer, axis=-1, keepdims=True)
    e = observer / distance
    size = 2.0 * GM_SUN_KM3_S2 / (C_KM_S**2 * distance)

    def bent(q: Array) -> Array:
        eu = np.sum(e * u, axis=-1, keepdims=True)
        uq = np.sum(u * q, axis=-1, keepdims=True)
        facing = 1.0 + np.sum(q * e, axis=-1, keepdims=True)
        return np.asarray(size * (uq * e - eu * q) / np.maximum(facing, _LEAST))

    body = observer + np.asarray(range_km, float)[..., None] * u
    out = bent(body / np.linalg.norm(body, axis=-1, keepdims=True))
    return out - bent(u) if relative_to_stars else out
