"""Physical constants, each with its unit in its name and its source beside it.

Core time is TDB seconds, so gravitational parameters are the TDB- or TT-compatible
values, never the TCB or TCG ones (they differ by 1.5e-8 and 7e-10).
"""

from __future__ import annotations

#: Speed of light, exact by the definition of the metre (SI).
C_KM_S = 299792.458

#: Astronomical unit, exact (IAU 2012 Resolution B2).
AU_KM = 149597870.700

#: Seconds in a day of the SI (exact).
DAY_S = 86400.0

#: Sun, TDB-compatible (DE440; Park et al. 2021, AJ 161, 105).
GM_SUN_KM3_S2 = 132712440041.279

#: Earth, TT-compatible (EGM96; IERS Conventions 2010, TN 36, note to table 1.1).
GM_EARTH_KM3_S2 = 398600.4415

#: Ellipsoid of WGS 84 (NGA.STND.0036).
EARTH_RADIUS_KM = 6378.137
EARTH_FLATTENING = 1.0 / 298.257223563

#: Nominal solar radius (IAU 2015 Resolution B3).
SUN_RADIUS_KM = 695700.0

#: Obliquity of the J2000 ecliptic (IAU 1976), the convention of published heliocentric elements.
OBLIQUITY_J2000_ARCSEC = 84381.448

ARCSEC_RAD = 4.84813681109535993589914102357e-6

#: Zonal harmonics J2, J3, J4 of the Earth and the radius that goes with them (EGM96, tide-free; Lemoine et al.
#: 1998, NASA/TP-1998-206861): J_n = -sqrt(2 n + 1) C_n0 of the normalised coefficients -0.484165371736e-3,
#: 0.957254173792e-6 and 0.539873863789e-6.
EARTH_ZONALS = (1.0826266835531513e-3, -2.5326564853322355e-6, -1.619621591367e-6)
EARTH_ZONALS_RADIUS_KM = 6378.1363

#: Gravitational parameters, TDB-compatible (DE440; Park et al. 2021, AJ 161, 105). Mars, Jupiter, Saturn, Uranus
#: and Neptune with their moons.
GM_BODIES_KM3_S2 = {
    "sun": GM_SUN_KM3_S2,
    "mercury": 22031.868551,
    "venus": 324858.592,
    "earth": 398600.435507,
    "moon": 4902.800118,
    "mars": 42828.375816,
    "jupiter": 126712764.1,
    "saturn": 37940584.8418,
    "uranus": 5794556.4,
    "neptune": 6836527.10058,
}

#: Pressure of sunlight at 1 au: the nominal total solar irradiance 1361 W/m2 (IAU 2015 Resolution B3) over c.
SUNLIGHT_PRESSURE_N_M2 = 1361.0 / 299792458.0

#: Rotation rate of the Earth (IERS Conventions 2010, TN 36, table 1.2).
EARTH_ROTATION_RAD_S = 7.292115e-5
