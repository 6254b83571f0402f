"""Places on the Earth, from the ellipsoid to ICRF axes, and the removal of aberration.

Ellipsoid WGS 84 (NGA.STND.0036), identified with ITRS, which agree within centimetres.
"""

from __future__ import annotations

import numpy as np
from erfa import ufunc as _erfa
from numpy.typing import NDArray

from firstarc.constants import AU_KM, C_KM_S, EARTH_RADIUS_KM, EARTH_ROTATION_RAD_S

_WGS84 = 1


def itrs_km_from_geodetic(
    lon_deg: NDArray[np.float64] | float,
    lat_deg: NDArray[np.float64] | float,
    height_m: NDArray[np.float64] | float,
) -> NDArray[np.float64]:
    """ITRS vector in km of east longitude, geodetic latitude and height above the WGS 84 ellipsoid."""
    xyz_m, _ = _erfa.gd2gc(_WGS84, np.radians(lon_deg), np.radians(lat_deg), height_m)
    return np.asarray(xyz_m) / 1000.0


def geodetic_from_itrs_km(itrs_km: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
    """East longitude deg (-180 to 180), geodetic latitude deg and height m of ITRS vectors in km."""
    lon, lat, height_m, _ = _erfa.gc2gd(_WGS84, np.asarray(itrs_km, float) * 1000.0)
    return np.degrees(lon), np.degrees(lat), np.asarray(height_m)


def itrs_km_from_parallax(lon_deg: float, rho_cos_phi: float, rho_sin_phi: float) -> NDArray[np.float64]:
    """ITRS vector in km of the parallax constants of the MPC station list (unit: 6378.137 km)."""
    lon = np.radians(lon_deg)
    return EARTH_RADIUS_KM * np.array([rho_cos_phi * np.cos(lon), rho_cos_phi * np.sin(lon), rho_sin_phi])


def parallax_from_geodetic(
    lat_deg: float,
    height_m: float,
    radius_m: float = EARTH_RADIUS_KM * 1000.0,
    flattening: float | None = None,
) -> tuple[float, float]:
    """rho cos phi' and rho sin phi' of a place, in equatorial radii (WGS 84 unless another is given)."""
    if flattening is None:
        x, _, z = itrs_km_from_geodetic(0.0, lat_deg, height_m)
        return float(x) / EARTH_RADIUS_KM, float(z) / EARTH_RADIUS_KM
    xyz_m, _ = _erfa.gd2gce(radius_m, flattening, 0.0, np.radians(lat_deg), height_m)
    return float(xyz_m[0]) / radius_m, float(xyz_m[2]) / radius_m


def station_on_icrf_axes(
    to_terrestrial: NDArray[np.float64],
    itrs_km: NDArray[np.float64],
    xp_rad: NDArray[np.float64],
    yp_rad: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Geocentric position (n, 3) km and velocity (n, 3) km/s of stations on ICRF axes.

    Parameters
    ----------
    to_terrestrial : ndarray, shape (n, 3, 3)
        GCRS to ITRS.
    itrs_km : ndarray, shape (n, 3)
    xp_rad, yp_rad : ndarray, shape (n,)
        Polar motion: the axis that the Earth turns about is ``(xp, -yp, 1)`` in ITRS.
    """
    position = np.einsum("nij,ni->nj", to_terrestrial, itrs_km)
    x, y, z = itrs_km.T
    turning = EARTH_ROTATION_RAD_S * np.stack([-yp_rad * z - y, x - xp_rad * z, xp_rad * y + yp_rad * x], axis=1)
    return position, np.einsum("nij,ni->nj", to_terrestrial, turning)


def altitude_rad(
    los: NDArray[np.float64],
    to_terrestrial: NDArray[np.float64],
    lon_deg: NDArray[np.float64],
    lat_deg: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Geometric altitude (n,) of ICRF unit vectors above the plane normal to the ellipsoid; no refraction."""
    lon, lat = np.radians(lon_deg), np.radians(lat_deg)
    up = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=1)
    sine = np.einsum("nij,nj,ni->n", to_terrestrial, los, up)
    return np.arcsin(np.clip(sine, -1.0, 1.0))


def unit_vectors(ra_deg: NDArray[np.float64], dec_deg: NDArray[np.float64]) -> NDArray[np.float64]:
    """Unit vectors (n, 3) of right ascension and declination."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    cos_dec = np.cos(dec)
    return np.stack([cos_dec * np.cos(ra), cos_dec * np.sin(ra), np.sin(dec)], axis=-1)


def without_aberration(
    apparent: NDArray[np.float64],
    observer_velocity_km_s: NDArray[np.float64],
    sun_distance_km: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Astrometric unit vectors (n, 3) of directions displaced by annual and diurnal aberration.

    ERFA's relativistic ``ab`` is inverted by iteration; each pass gains four digits. Gravitational deflection
    is not removed.

    Parameters
    ----------
    apparent : ndarray, shape (n, 3)
        Unit vectors on ICRF axes as seen by the moving observer.
    observer_velocity_km_s : ndarray, shape (n, 3)
        Barycentric, the diurnal part included.
    sun_distance_km : ndarray, shape (n,)
    """
    v = observer_velocity_km_s / C_KM_S
    s = sun_distance_km / AU_KM
    inverse_lorentz = np.sqrt(1.0 - np.sum(v * v, axis=1))
    out = np.array(apparent, float)
    for _ in range(6):
        out += apparent - _erfa.ab(out, v, s, inverse_lorentz)
        out /= np.linalg.norm(out, axis=1, keepdims=True)
    return out
