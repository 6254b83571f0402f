"""The border against astropy and skyfield, which take their own way to the same vectors."""

from __future__ import annotations

import io
import warnings

import astropy_iers_data
import erfa
import numpy as np
import pytest

import firstarc as fa
from firstarc.border import earth_orientation, frames
from firstarc.border.solar_system import Ephemeris, ephemeris
from firstarc.border.timescales import tdb_minus_tt_s
from firstarc.constants import ARCSEC_RAD, AU_KM

PLACES = [
    (0.0, 0.0, 0.0),
    (-106.66, 33.817, 1510.0),
    (149.0661, -31.2733, 1165.0),
    (12.5, 89.5, -20.0),
    (180.0, -75.0, 2800.0),
]
TIMES = [
    "1978-03-01T01:02:03.4",
    "1999-12-31T23:59:59.9",
    "2006-06-28T04:28:24",
    "2016-12-31T23:59:60.5",
    "2024-08-17T12:00:00",
]


def observations(center: str) -> fa.Observations:
    """One sighting from every place at every time."""
    text = ["time_utc,ra_deg,dec_deg,sigma_arcsec,station,lon_deg,lat_deg,height_m"]
    for i, (lon, lat, height) in enumerate(PLACES):
        text += [f"{t},10,20,1,S{i},{lon},{lat},{height}" for t in TIMES]
    return fa.load(io.StringIO("\n".join(text)), center=center)


def test_stations_agree_with_astropy() -> None:
    from astropy import units as u
    from astropy.coordinates import EarthLocation
    from astropy.time import Time
    from astropy.utils import iers

    found = observations("earth").sight_lines.observer_km.reshape(len(PLACES), len(TIMES), 3)
    bundled = iers.IERS_A.open(astropy_iers_data.IERS_A_FILE)
    with iers.conf.set_temp("auto_download", False), iers.earth_orientation_table.set(bundled):
        for i, (lon, lat, height) in enumerate(PLACES):
            place = EarthLocation.from_geodetic(lon * u.deg, lat * u.deg, height * u.m)
            position, _ = place.get_gcrs_posvel(Time(TIMES, scale="utc"))
            theirs = position.xyz.to_value(u.km).T
            # astropy leaves the celestial pole offsets out: up to 0.4 mas, 12 mm on the ground.
            assert np.abs(found[i] - theirs).max() < 5e-5


def test_station_velocity_agrees_with_differences() -> None:
    """What is left is precession and nutation, 5e-8 km/s, and the length of day."""
    obs = observations("earth")
    later = obs.with_what_if(fa.WhatIf(clock_s=1.0))
    earlier = obs.with_what_if(fa.WhatIf(clock_s=-1.0))
    by_difference = (later.sight_lines.observer_km - earlier.sight_lines.observer_km) / 2.0
    assert np.abs(obs.geometry.station_km_s - by_difference).max() < 1e-7


@pytest.mark.slow
def test_stations_and_directions_agree_with_skyfield() -> None:
    from skyfield.api import Loader, wgs84
    from skyfield.data import iers as tables
    from skyfield_data import get_skyfield_data_path

    with warnings.catch_warnings():
        # The data package warns that its own Earth-orientation file grows old; that does not matter for past
        # times.
        warnings.simplefilter("ignore")
        load = Loader(get_skyfield_data_path(), verbose=False)
        with load.open("finals2000A.all") as file:
            table = tables.parse_x_y_dut1_from_finals_all(file)
        timescale = load.timescale(builtin=True)
        tables.install_polar_motion_table(timescale, table)
        kernel = load("de421.bsp")
    obs = observations("sun")
    found = obs.sight_lines.observer_km.reshape(len(PLACES), len(TIMES), 3)
    usable = [k for k, t in enumerate(TIMES) if ":60" not in t]
    for i, (lon, lat, height) in enumerate(PLACES):
        for k in usable:
            date, clock = TIMES[k].split("T")
            year, month, day = map(int, date.split("-"))
            hour, minute, second = clock.split(":")
            t = timescale.utc(year, month, day, int(hour), int(minute), float(second))
            place = wgs84.latlon(lat, lon, elevation_m=height)
            theirs = (kernel["earth"] + place).at(t).position.km - kernel["sun"].at(t).position.km
            limit_km = 1e-3 if obs.ephemeris == "JPL DE421" else 1.0
            # skyfield's own UT1 table is rounded to 1e-4 s: 5 cm on the ground.
            assert np.abs(found[i, k] - theirs).max() < limit_km


def test_table_agrees_with_astropys_reader() -> None:
    from astropy.utils import iers

    table = iers.IERS_A.open(astropy_iers_data.IERS_A_FILE)
    rows = np.arange(0, len(table) - 400, 371)
    mjd = np.asarray(table["MJD"][rows].value)
    tai1, tai2 = erfa.utctai(np.full(len(mjd), 2400000.5), mjd)
    found = earth_orientation.table().at(tai1, tai2)
    tai_minus_utc_s = np.rint(((tai1 - 2400000.5) - mjd + tai2) * 86400.0)
    np.testing.assert_allclose(found.ut1_minus_tai_s + tai_minus_utc_s, table["UT1_UTC"][rows].value, atol=1e-9)
    np.testing.assert_allclose(found.xp_rad / ARCSEC_RAD, table["PM_x"][rows].value, atol=1e-9)
    np.testing.assert_allclose(found.yp_rad / ARCSEC_RAD, table["PM_y"][rows].value, atol=1e-9)


def test_interpolated_pole_is_that_of_the_full_series() -> None:
    rng = np.random.default_rng(20060)
    mjd = rng.uniform(41700.0, 62000.0, 400)
    tt1 = np.full(400, 2400000.5)
    full = np.stack(erfa.xys06a(tt1, mjd), axis=1)
    difference_arcsec = np.abs(earth_orientation.celestial_pole(tt1, mjd) - full) / ARCSEC_RAD
    assert difference_arcsec.max() < 2e-6


def test_interpolated_tdb_is_that_of_the_full_series() -> None:
    rng = np.random.default_rng(1990)
    mjd = rng.uniform(41700.0, 62000.0, 400)
    tt1 = np.full(400, 2400000.5)
    full_s = erfa.dtdb(tt1, mjd, 0.0, 0.0, 0.0, 0.0)
    assert np.abs(tdb_minus_tt_s(tt1, mjd) - full_s).max() < 1e-10


def test_series_stands_in_outside_the_ephemeris() -> None:
    """ERFA's series against the ephemeris where both reach (documented: 13 km), and the seam."""
    eph = ephemeris()
    assert isinstance(eph, Ephemeris)
    tdb1 = np.linspace(2451545.0, 2455000.0, 30)
    inside = eph.at(tdb1, np.zeros(30))
    heliocentric, _ = erfa.epv00(tdb1, 0.0)
    # Heliocentric, for the barycentre of DE440 lies 100 km from that of older ephemerides.
    assert np.abs(inside.earth_km - inside.sun_km - heliocentric["p"] * AU_KM).max() < 15.0
    far = np.array([eph.last_jd + 10.0, 2451545.0])
    mixed = eph.at(far, np.zeros(2))
    assert mixed.series.tolist() == [True, False]
    assert np.isfinite(mixed.earth_km).all() and np.isfinite(mixed.sun_km_s).all()
    np.testing.assert_array_equal(mixed.earth_km[1], inside.earth_km[0])


def test_aberration_is_the_inverse_of_erfa() -> None:
    rng = np.random.default_rng(7)
    natural = rng.normal(size=(50, 3))
    natural /= np.linalg.norm(natural, axis=1)[:, None]
    velocity_km_s = rng.normal(size=(50, 3)) * 18.0
    v = velocity_km_s / 299792.458
    apparent = erfa.ab(natural, v, np.ones(50), np.sqrt(1.0 - np.sum(v * v, axis=1)))
    assert np.linalg.norm(apparent - natural, axis=1).max() > 5.0 * ARCSEC_RAD
    found = frames.without_aberration(apparent, velocity_km_s, np.full(50, AU_KM))
    assert np.linalg.norm(found - natural, axis=1).max() < 1e-15 * 4
