"""From recorded values to lines of sight and observer vectors, what-ifs applied on the way."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from firstarc.border import earth_orientation, frames
from firstarc.border.solar_system import EarthAndSun, ephemeris
from firstarc.border.timescales import tai_from_tdb, tdb_minus_tt_s, tt_from_tai
from firstarc.constants import ARCSEC_RAD, DAY_S
from firstarc.errors import UsageError
from firstarc.observing.read_only_arrays import ReadOnlyArrays
from firstarc.observing.records import Records
from firstarc.observing.stations import Site
from firstarc.observing.what_if import WhatIf
from firstarc.results import same


@dataclass(frozen=True, eq=False)
class SightLines(ReadOnlyArrays):
    """Observations as the numeric core takes them: plain arrays, ICRF axes, km, s, rad.

    Attributes
    ----------
    epoch_tdb : tuple of float
        Two-part TDB Julian date from which ``t_s`` counts; one for all subsets of an input.
    t_s : ndarray, shape (n,)
        TDB seconds of reception.
    los : ndarray, shape (n, 3)
        Unit vectors; astrometric when ``light_time``, else same-instant geometric.
    observer_km : ndarray, shape (n, 3)
        Observer from the centre at reception.
    center_velocity_km_s : ndarray, shape (n, 3)
        Barycentric velocity of the centre at reception.
    sigma_rad : ndarray, shape (n, 2)
        Of RA times cos Dec and of Dec.
    corr : ndarray, shape (n,)
        Correlation of the two.
    sigma_time_s : ndarray, shape (n,)
        Sigma of the time tag, not part of ``sigma_rad``; 0 where not stated.
    range_km, sigma_range_km : ndarray, shape (n,)
        Measured slant ranges and their sigmas; NaN where none was measured.
    light_time : bool
        True when the light path is to be allowed for.
    """

    epoch_tdb: tuple[float, float]
    t_s: NDArray[np.float64]
    los: NDArray[np.float64]
    observer_km: NDArray[np.float64]
    center_velocity_km_s: NDArray[np.float64]
    sigma_rad: NDArray[np.float64]
    corr: NDArray[np.float64]
    sigma_time_s: NDArray[np.float64]
    range_km: NDArray[np.float64]
    sigma_range_km: NDArray[np.float64]
    light_time: bool

    def __len__(self) -> int:
        return len(self.t_s)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, SightLines):
            return NotImplemented
        return all(same(getattr(self, f.name), getattr(other, f.name)) for f in fields(self))

    __hash__ = None  # type: ignore[assignment]


@dataclass(frozen=True, eq=False)
class Instants:
    """What follows from the times alone, one row per observation."""

    tdb1: NDArray[np.float64]
    tdb2: NDArray[np.float64]
    orientation: earth_orientation.Orientation
    to_terrestrial: NDArray[np.float64]
    bodies: EarthAndSun


@dataclass(frozen=True, eq=False)
class Geometry:
    """Stations and times in force, and all that follows from them, one row per observation."""

    instants: Instants
    lon_deg: NDArray[np.float64]
    lat_deg: NDArray[np.float64]
    height_m: NDArray[np.float64]
    station_km: NDArray[np.float64]
    station_km_s: NDArray[np.float64]

    @property
    def orientation(self) -> earth_orientation.Orientation:
        return self.instants.orientation

    @property
    def to_terrestrial(self) -> NDArray[np.float64]:
        return self.instants.to_terrestrial

    @property
    def bodies(self) -> EarthAndSun:
        return self.instants.bodies


def places(records: Records, what_ifs: Sequence[WhatIf]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Longitude deg, latitude deg and height m (n, 3) and clock offsets s (n,) of the rows, what-ifs applied.

    Raises
    ------
    UsageError
        An offset moves a station beyond a pole.
    """
    recorded = np.array([[s.lon_deg, s.lat_deg, s.height_m] for s in records.sites])
    out = recorded[records.site_index]
    clock_s = np.zeros(len(records))
    for what_if in what_ifs:
        rows = np.ones(len(records), bool)
        if what_if.station is not None:
            rows = np.array([s.code == what_if.station for s in records.sites])[records.site_index]
        if what_if.rows is not None:
            rows &= np.isin(records.row, what_if.rows)
        out[rows] += (what_if.lon_deg, what_if.lat_deg, what_if.height_m)
        clock_s[rows] += what_if.clock_s
    if what_ifs and np.any(np.abs(out[:, 1]) > 90.0):
        worst = int(np.argmax(np.abs(out[:, 1])))
        raise UsageError(
            f"what-if: latitude of station {records.sites[records.site_index[worst]].code!r} becomes "
            f"{out[worst, 1]:.4f} deg; keep it from -90 to 90 deg"
        )
    return out, clock_s


def geometry(records: Records, what_ifs: Sequence[WhatIf], with_sun: bool) -> Geometry:
    """Where the stations were at the times in force, and where Earth and Sun."""
    place, clock_s = places(records, what_ifs)
    return _at_places(_recorded_instants(records, clock_s.tobytes(), with_sun), place)


@lru_cache(maxsize=16)
def _recorded_instants(records: Records, clock_s: bytes, with_sun: bool) -> Instants:
    """Kept because a slider that moves only the station asks for the same instants again and again."""
    return _instants(records.tai1, records.tai2 + np.frombuffer(clock_s) / DAY_S, with_sun)


def _instants(tai1: NDArray[np.float64], tai2: NDArray[np.float64], with_sun: bool) -> Instants:
    orientation = earth_orientation.table().at(tai1, tai2)
    tt1, tt2 = tt_from_tai(tai1, tai2)
    tdb2 = tt2 + tdb_minus_tt_s(tt1, tt2) / DAY_S
    to_terrestrial = earth_orientation.rotation_to_terrestrial(tai1, tai2, orientation)
    return Instants(tt1, tdb2, orientation, to_terrestrial, ephemeris().at(tt1, tdb2, with_sun))


def _at_places(instants: Instants, place: NDArray[np.float64]) -> Geometry:
    itrs_km = frames.itrs_km_from_geodetic(place[:, 0], place[:, 1], place[:, 2])
    station_km, station_km_s = frames.station_on_icrf_axes(
        instants.to_terrestrial, itrs_km, instants.orientation.xp_rad, instants.orientation.yp_rad
    )
    return Geometry(instants, place[:, 0], place[:, 1], place[:, 2], station_km, station_km_s)


def observer_from_center(g: Geometry, center: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Observer from the centre (n, 3) km, and the centre's barycentric velocity (n, 3) km/s."""
    if center == "sun":
        return (g.bodies.earth_km - g.bodies.sun_km) + g.station_km, g.bodies.sun_km_s
    return g.station_km, g.bodies.earth_km_s


def observer_velocity(g: Geometry, center: str) -> NDArray[np.float64]:
    """Velocity (n, 3) km/s of the observer from the centre, ICRF axes."""
    if center == "sun":
        return g.bodies.earth_km_s - g.bodies.sun_km_s + g.station_km_s
    return g.station_km_s


def station_axes(g: Geometry) -> NDArray[np.float64]:
    """Unit vectors east, north and up (n, 3, 3) of the stations on ICRF axes, one a row."""
    lon, lat = np.radians(g.lon_deg), np.radians(g.lat_deg)
    zero = np.zeros_like(lon)
    east = np.stack([-np.sin(lon), np.cos(lon), zero], axis=1)
    north = np.stack([-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)], axis=1)
    up = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=1)
    fixed = np.stack([east, north, up], axis=1)
    return np.asarray(np.einsum("naj,nji->nai", fixed, g.to_terrestrial))


def directions(records: Records, g: Geometry, kind: str) -> NDArray[np.float64]:
    """Unit vectors (n, 3); apparent directions lose their annual and diurnal aberration here."""
    los = frames.unit_vectors(records.ra_deg, records.dec_deg)
    if kind != "apparent":
        return los
    distance_km = np.linalg.norm(g.bodies.earth_km - g.bodies.sun_km, axis=1)
    return frames.without_aberration(los, g.bodies.earth_km_s + g.station_km_s, distance_km)


def sight_lines(records: Records, g: Geometry, center: str, kind: str, epoch_tdb: tuple[float, float]) -> SightLines:
    """Everything the numeric core needs of the observations."""
    observer_km, center_velocity_km_s = observer_from_center(g, center)
    t_s = ((g.instants.tdb1 - epoch_tdb[0]) + (g.instants.tdb2 - epoch_tdb[1])) * DAY_S
    sigma_rad = np.stack([records.sigma_ra_arcsec, records.sigma_dec_arcsec], axis=1) * ARCSEC_RAD
    return SightLines(
        epoch_tdb,
        t_s,
        directions(records, g, kind),
        observer_km,
        np.array(center_velocity_km_s),
        sigma_rad,
        records.corr,
        records.sigma_time_s,
        records.range_km,
        records.sigma_range_km,
        kind != "geometric",
    )


def observer_track(
    site: Site, t_s: NDArray[np.float64], center: str, epoch_tdb: tuple[float, float]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Observer from the centre, and the centre's barycentric velocity, at TDB seconds from the epoch."""
    t_s = np.atleast_1d(np.asarray(t_s, float))
    tai1, tai2 = tai_from_tdb(np.full(t_s.shape, epoch_tdb[0]), epoch_tdb[1] + t_s / DAY_S)
    place = np.tile([site.lon_deg, site.lat_deg, site.height_m], (len(t_s), 1))
    return observer_from_center(_at_places(_instants(tai1, tai2, center == "sun"), place), center)
