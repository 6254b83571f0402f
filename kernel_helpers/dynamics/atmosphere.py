"""Density of a simple static atmosphere.

The exponential atmosphere of Vallado 2013, *Fundamentals of Astrodynamics and Applications*, 4th ed., table 8-4
(after Wertz 1978; US Standard Atmosphere 1976 at the bottom, CIRA-72 above; recalled): base heights with their
densities. Between them ln(density) bends smoothly from one scale height to the next (softplus functions through
all table values), because a step or a kink in the density spoils partials and integration. It knows neither day
and night nor solar activity: at 500 km the real density may be several times larger or smaller, so a ballistic
coefficient fitted with it is a scale factor and no property of the satellite.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from firstarc.twobody.kepler import Array

#: Height above the ellipsoid in km and density in kg/m3.
TABLE = np.array(
    [
        (0.0, 1.225),
        (25.0, 3.899e-2),
        (30.0, 1.774e-2),
        (40.0, 3.972e-3),
        (50.0, 1.057e-3),
        (60.0, 3.206e-4),
        (70.0, 8.770e-5),
        (80.0, 1.905e-5),
        (90.0, 3.396e-6),
        (100.0, 5.297e-7),
        (110.0, 9.661e-8),
        (120.0, 2.438e-8),
        (130.0, 8.484e-9),
        (140.0, 3.845e-9),
        (150.0, 2.070e-9),
        (180.0, 5.464e-10),
        (200.0, 2.789e-10),
        (250.0, 7.248e-11),
        (300.0, 2.418e-11),
        (350.0, 9.518e-12),
        (400.0, 3.725e-12),
        (450.0, 1.585e-12),
        (500.0, 6.967e-13),
        (600.0, 1.454e-13),
        (700.0, 3.614e-14),
        (800.0, 1.170e-14),
        (900.0, 5.245e-15),
        (1000.0, 3.019e-15),
    ]
)
TABLE.setflags(write=False)
#: Scale height above the table, km (same source).
TOP_SCALE_KM = 268.0


#: Lowest height looked at, km: below, the density is held.
_LOWEST_KM = -50.0


@lru_cache(maxsize=1)
def _bends() -> tuple[float, float, Array, Array]:
    """Constant, slope at the bottom, and the bends and their widths (km) at the table's heights but the first."""
    height, log_density = TABLE[:, 0], np.log(TABLE[:, 1])
    gaps = np.diff(height)
    width = 0.5 * np.append(np.minimum(gaps[:-1], gaps[1:]), gaps[-1])
    matrix = np.empty((len(height) + 1, len(height) + 1))
    matrix[:-1, 0] = 1.0
    matrix[:-1, 1] = height
    matrix[:-1, 2:] = width * np.logaddexp(0.0, (height[:, None] - height[1:]) / width)
    # Far above, all bends have been taken.
    matrix[-1] = np.concatenate(([0.0], np.ones(len(height))))
    found = np.linalg.solve(matrix, np.append(log_density, -1.0 / TOP_SCALE_KM))
    return float(found[0]), float(found[1]), found[2:], width


def density_kg_m3(height_km: Array) -> tuple[Array, Array]:
    """Density and the derivative of its logarithm.

    Parameters
    ----------
    height_km : ndarray
        Above the ellipsoid.

    Returns
    -------
    density_kg_m3, slope_per_km : ndarray
    """
    constant, slope, bends, width = _bends()
    height = np.maximum(height_km, _LOWEST_KM)
    x = (height[..., None] - TABLE[1:, 0]) / width
    log_density = constant + slope * height + np.logaddexp(0.0, x) @ (bends * width)
    # tanh is the logistic function without overflow.
    by_height = slope + (0.5 + 0.5 * np.tanh(0.5 * x)) @ bends
    return np.exp(log_density), np.where(height_km < _LOWEST_KM, 0.0, by_height)
