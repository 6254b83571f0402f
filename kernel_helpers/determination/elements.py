"""Osculating elements as an analyst reads them: degrees, km and au, with their frame."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..constants import ARCSEC_RAD, AU_KM, DAY_S, EARTH_RADIUS_KM, OBLIQUITY_J2000_ARCSEC
from ..report.rounding import DASH, fixed, significant
from ..results import Result
from ..twobody.elements import elements_from_state

if TYPE_CHECKING:
    from astropy.time import Time

FRAMES = {
    "earth": "ICRF equator, geocentric",
    "sun": "J2000 ecliptic (obliquity 84381.448″), heliocentric",
}


@lru_cache(maxsize=2)
def reference_axes(center: str) -> NDArray[np.float64]:
    """Rotation from ICRF axes to the axes in which elements about ``center`` are given, (3, 3)."""
    if center == "earth":
        return np.eye(3)
    obliquity = OBLIQUITY_J2000_ARCSEC * ARCSEC_RAD
    c, s = math.cos(obliquity), math.sin(obliquity)
    return np.array([[1.0, 0.0, 0.0], [0.0, c, s], [0.0, -s, c]])


@dataclass(frozen=True, eq=False, repr=False)
class Elements(Result):
    """Osculating two-body elements.

    Attributes
    ----------
    center : {"earth", "sun"}
    epoch_tdb : tuple of float
        Epoch as a two-part TDB Julian date.
    p_km, a_km, q_km : float
        Semi-latus rectum, semi-major axis (negative for a hyperbola, infinite for a parabola), periapsis distance.
    e : float
    i_deg, node_deg, argp_deg, nu_deg, M_deg : float
        Inclination, ascending node, argument of periapsis, true and mean anomaly. Circular orbits have
        ``argp_deg = 0`` and anomalies from the node; equatorial ones ``node_deg = 0``. For open orbits ``M_deg`` is
        the hyperbolic or parabolic mean anomaly, in degrees.
    period_s : float
        NaN for an open orbit.
    periapsis_after_s : float
        Time of the nearest periapsis passage minus the epoch, s.
    """

    center: str
    epoch_tdb: tuple[float, float]
    p_km: float
    a_km: float
    e: float
    i_deg: float
    node_deg: float
    argp_deg: float
    nu_deg: float
    M_deg: float
    q_km: float
    period_s: float
    periapsis_after_s: float

    @property
    def frame(self) -> str:
        """Axes and origin of the angles, in words."""
        return FRAMES[self.center]

    @property
    def a_au(self) -> float:
        return self.a_km / AU_KM

    @property
    def q_au(self) -> float:
        return self.q_km / AU_KM

    @property
    def periapsis_height_km(self) -> float:
        """Height of the periapsis above the Earth's equatorial radius, km (Earth orbits)."""
        return self.q_km - EARTH_RADIUS_KM

    @property
    def tp(self) -> Time:
        """Time of the nearest periapsis passage (astropy Time, TDB)."""
        from astropy.time import Time

        return Time(self.epoch_tdb[0], self.epoch_tdb[1] + self.periapsis_after_s / DAY_S, format="jd", scale="tdb")

    @property
    def shape(self) -> str:
        """``elliptic``, ``parabolic`` or ``hyperbolic``."""
        if math.isinf(self.a_km):
            return "parabolic"
        return "elliptic" if self.e < 1.0 else "hyperbolic"

    def report_lines(self) -> list[Any]:
        size = (
            [["a", fixed(self.a_km, 3), "km"], ["q", fixed(self.q_km, 3), "km"]]
            if self.center == "earth"
            else [["a", significant(self.a_au, 8), "au"], ["q", significant(self.q_au, 8), "au"]]
        )
        period = [] if math.isnan(self.period_s) else [["P", *period_text(self.period_s, self.center)]]
        return [
            f"Osculating elements, {self.shape}, {self.frame}, epoch {epoch_text(self.epoch_tdb)}",
            [
                ["element", "value", "unit"],
                *size,
                ["e", fixed(self.e, 8), ""],
                ["i", fixed(self.i_deg, 6), "°"],
                ["node", fixed(self.node_deg, 6), "°"],
                ["argument of periapsis", fixed(self.argp_deg, 6), "°"],
                ["true anomaly", fixed(self.nu_deg, 6), "°"],
                ["mean anomaly", fixed(self.M_deg, 6), "°"],
                *period,
            ],
        ]


def epoch_text(epoch_tdb: tuple[float, float], decimals: int = 3) -> str:
    """A two-part TDB Julian date as UTC for people."""
    from ..border.timescales import utc_text_from_tdb

    (stamp,) = utc_text_from_tdb(np.array([epoch_tdb[0]]), np.array([epoch_tdb[1]]), decimals)
    return f"{stamp[:10]} {stamp[11:].rstrip('Z')} UTC"


def period_text(period_s: float, center: str) -> tuple[str, str]:
    """Period and its unit: minutes about the Earth, years about the Sun (Julian, 365.25 d)."""
    if math.isnan(period_s):
        return DASH, ""
    if center == "earth":
        return fixed(period_s / 60.0, 4), "min"
    return significant(period_s / (365.25 * DAY_S), 7), "yr"


def elements_of(
    r_km: NDArray[np.float64],
    v_km_s: NDArray[np.float64],
    epoch_tdb: tuple[float, float],
    center: str,
    gm_km3_s2: float,
) -> Elements:
    """Elements of one state on ICRF axes (km, km/s)."""
    axes = reference_axes(center)
    plain = elements_from_state(axes @ r_km, axes @ v_km_s, gm_km3_s2)
    return Elements(
        center=center,
        epoch_tdb=epoch_tdb,
        p_km=float(plain.p_km),
        a_km=float(plain.a_km),
        e=float(plain.e),
        i_deg=math.degrees(plain.i_rad),
        node_deg=math.degrees(plain.node_rad) % 360.0,
        argp_deg=math.degrees(plain.argp_rad) % 360.0,
        nu_deg=math.degrees(plain.nu_rad) % 360.0,
        M_deg=math.degrees(plain.mean_anomaly_rad) % 360.0 if plain.e < 1.0 else math.degrees(plain.mean_anomaly_rad),
        q_km=float(plain.q_km),
        period_s=float(plain.period_s),
        periapsis_after_s=float(plain.t_periapsis_s),
    )
