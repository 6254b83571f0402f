"""How much of the Sun a satellite sees past the Earth, a sphere of its equatorial radius.

Refraction and absorption by the atmosphere are left out (they widen the edge by some tens of kilometres).

References
----------
O. Montenbruck and E. Gill 2000, *Satellite Orbits*, section 3.4.2 (recalled).
"""

from __future__ import annotations

import numpy as np

from firstarc.constants import EARTH_RADIUS_KM, SUN_RADIUS_KM
from firstarc.twobody.kepler import Array


def _cross_size(a: Array, b: Array) -> Array:
    """Length of the cross products of rows."""
    x = a[..., 1] * b[..., 2] - a[..., 2] * b[..., 1]
    y = a[..., 2] * b[..., 0] - a[..., 0] * b[..., 2]
    z = a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0]
    return np.asarray(np.sqrt(x * x + y * y + z * z))


def _discs(from_earth_km: Array, sun_km: Array) -> tuple[Array, Array, Array]:
    """Apparent radii of Sun and Earth and the angle between their centres, as seen by the satellite, rad."""
    line = sun_km - from_earth_km
    far = np.sqrt(np.sum(line * line, axis=-1))
    near = np.sqrt(np.sum(from_earth_km * from_earth_km, axis=-1))
    a = np.arcsin(np.minimum(SUN_RADIUS_KM / far, 1.0))
    b = np.arcsin(np.minimum(EARTH_RADIUS_KM / near, 1.0))
    apart = np.arctan2(_cross_size(line, from_earth_km), -np.sum(line * from_earth_km, axis=-1))
    return a, b, apart


def conical(from_earth_km: Array, sun_km: Array) -> Array:
    """Visible fraction of the Sun's disc, 0 to 1, umbra, penumbra and ring included.

    Parameters
    ----------
    from_earth_km, sun_km : ndarray, shape (n, 3)
        Satellite and Sun from the Earth's centre.

    Returns
    -------
    ndarray, shape (n,)
    """
    a, b, c = _discs(from_earth_km, sun_km)
    inner = np.abs(a - b)
    partial = (c > inner) & (c < a + b)
    seen = np.where(c >= a + b, 1.0, np.where(b >= a, 0.0, 1.0 - (b / a) ** 2))
    if partial.any():
        ap, bp, cp = a[partial], b[partial], c[partial]
        x = (cp * cp + ap * ap - bp * bp) / (2.0 * cp)
        y = np.sqrt(np.maximum(ap * ap - x * x, 0.0))
        covered = ap * ap * np.arccos(np.clip(x / ap, -1.0, 1.0))
        covered += bp * bp * np.arccos(np.clip((cp - x) / bp, -1.0, 1.0)) - cp * y
        seen = seen.copy()
        seen[partial] = 1.0 - covered / (np.pi * ap * ap)
    return seen


def cylindrical(from_earth_km: Array, sun_km: Array) -> Array:
    """1 in sunlight and 0 in a cylinder behind the Earth; shapes as for :func:`conical`."""
    return np.where((_along(from_earth_km, sun_km) < 0.0) & (_beside(from_earth_km, sun_km) < 0.0), 0.0, 1.0)


def _along(from_earth_km: Array, sun_km: Array) -> Array:
    return np.asarray(np.sum(from_earth_km * sun_km, axis=-1))


def _beside(from_earth_km: Array, sun_km: Array) -> Array:
    """Squared distance from the line Earth - Sun in radii of the Earth, less 1: smooth on the line too."""
    size = _cross_size(from_earth_km, sun_km)
    return np.asarray(size * size / np.sum(sun_km * sun_km, axis=-1) / EARTH_RADIUS_KM**2 - 1.0)


#: Name of a shadow -> visible fraction.
SHADOWS = {"conical": conical, "cylindrical": cylindrical}


def edges(kind: str, from_earth_km: Array, sun_km: Array) -> Array:
    """Smooth functions that change sign where the light has a kink; shape (m, n)."""
    if kind == "cylindrical":
        return _beside(from_earth_km, sun_km)[None]
    a, b, c = _discs(from_earth_km, sun_km)
    cosine = np.cos(c)
    return np.stack((np.cos(a + b) - cosine, np.cos(a - b) - cosine))
