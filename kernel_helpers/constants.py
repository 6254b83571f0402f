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
