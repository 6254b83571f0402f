"""Places and frames against printed values: SOFA cookbook 2007, Vallado 3-14/3-15, Meeus 11.a and 26.b."""

from __future__ import annotations

import erfa
import numpy as np

from firstarc.border import frames
from firstarc.border.earth_orientation import Orientation, rotation_to_terrestrial
from firstarc.border.solar_system import ephemeris
from firstarc.border.timescales import tai_from_utc_text, tt_from_tai
from firstarc.constants import ARCSEC_RAD, AU_KM
from published.published_values import CASES, assert_published


def given_orientation(case: dict, dx_arcsec: float, dy_arcsec: float) -> Orientation:
    """Orientation from the values printed with an example instead of the bundled table."""
    given = case["inputs"]
    one = np.ones(1)
    return Orientation(
        one * (given["ut1_minus_utc_s"] - given["tai_minus_utc_s"]),
        one * given["xp_arcsec"] * ARCSEC_RAD,
        one * given["yp_arcsec"] * ARCSEC_RAD,
        one * dx_arcsec * ARCSEC_RAD,
        one * dy_arcsec * ARCSEC_RAD,
        one < 0,
        one < 0,
    )


def instant(case: dict) -> tuple[np.ndarray, np.ndarray]:
    read = tai_from_utc_text([case["inputs"]["utc"].replace(" ", "T") + "Z"])
    assert read.problems == {}
    return read.tai1, read.tai2


def test_celestial_to_terrestrial_matrix_of_the_sofa_cookbook() -> None:
    case = CASES["frames_sofa_cookbook_2007"]
    tai1, tai2 = instant(case)
    mas = 1e-3
    orientation = given_orientation(case, case["inputs"]["dX_2006_mas"] * mas, case["inputs"]["dY_2006_mas"] * mas)
    tt1, tt2 = tt_from_tai(tai1, tai2)
    # The document takes the pole from the series for X and Y, the library from the precession-nutation
    # matrix.
    x, y = erfa.xy06(tt1, tt2)
    pole = np.stack([x, y, erfa.s06(tt1, tt2, x, y)], axis=1)
    assert_published(case, "X", pole[0, 0] + orientation.dx_rad[0])
    assert_published(case, "Y", pole[0, 1] + orientation.dy_rad[0])
    assert_published(case, "s_arcsec", pole[0, 2] / ARCSEC_RAD)
    era = erfa.era00(tai1, tai2 + orientation.ut1_minus_tai_s / 86400.0)
    assert_published(case, "era_deg", np.degrees(era[0]))
    # Fed with the pole of the full series every printed digit must come out ...
    assert_published(case, "gcrs_to_itrs_2006", rotation_to_terrestrial(tai1, tai2, orientation, pole)[0])
    # ... and with the interpolated pole the matrix may differ by 2e-6 arcsec, 1e-11.
    interpolated = rotation_to_terrestrial(tai1, tai2, orientation)[0]
    np.testing.assert_allclose(interpolated, case["expected"]["gcrs_to_itrs_2006"], atol=1e-11)


def test_position_and_velocity_of_vallado_3_14() -> None:
    case = CASES["frames_vallado_3_14_3_15"]
    tai1, tai2 = instant(case)
    orientation = given_orientation(case, case["inputs"]["dX_arcsec"], case["inputs"]["dY_arcsec"])
    matrix = rotation_to_terrestrial(tai1, tai2, orientation)
    itrf_km = np.array([case["inputs"]["itrf_km"]])
    position_km, turning_km_s = frames.station_on_icrf_axes(matrix, itrf_km, orientation.xp_rad, orientation.yp_rad)
    assert_published(case, "gcrf06_km", position_km[0])
    own_km_s = np.einsum("nij,ni->nj", matrix, np.array([case["inputs"]["itrf_km_s"]]))
    assert_published(case, "gcrf06_km_s", (own_km_s + turning_km_s)[0])


def test_palomar_of_meeus_11a() -> None:
    case = CASES["site_meeus_11a_palomar"]
    given = case["inputs"]
    rho_cos, rho_sin = frames.parallax_from_geodetic(
        given["latitude_deg"], given["altitude_m"], given["earth_radius_m"], 1.0 / given["flattening_inverse"]
    )
    assert_published(case, "rho_cos_phi", rho_cos)
    assert_published(case, "rho_sin_phi", rho_sin)


def test_parallax_constants_and_geodetic_place_agree() -> None:
    """Meeus 11.a again, on WGS 84: the other ellipsoid moves the constants by less than 1e-6."""
    case = CASES["site_meeus_11a_palomar"]
    rho_cos, rho_sin = frames.parallax_from_geodetic(case["inputs"]["latitude_deg"], case["inputs"]["altitude_m"])
    itrs_km = frames.itrs_km_from_parallax(-116.8625, rho_cos, rho_sin)
    lon, lat, height_m = frames.geodetic_from_itrs_km(itrs_km)
    np.testing.assert_allclose([lon, lat], [-116.8625, case["inputs"]["latitude_deg"]], atol=1e-12)
    assert abs(height_m - case["inputs"]["altitude_m"]) < 1e-6
    assert_published(case, "rho_cos_phi", rho_cos)


def test_sun_vector_of_meeus_26b() -> None:
    case = CASES["sun_vector_meeus_26b"]
    bodies = ephemeris().at(np.array([case["inputs"]["jd_td"]]), np.zeros(1))
    # The book's axes are FK5, turned from ICRF by 0.02 arcsec: 1e-7 au.
    sun_au = (bodies.sun_km - bodies.earth_km)[0] / AU_KM
    expected = np.array(case["expected"]["sun_equatorial_j2000_au"])
    assert np.max(np.abs(sun_au - expected)) < case["tolerance"]["sun_equatorial_j2000_au"] + 1e-7
