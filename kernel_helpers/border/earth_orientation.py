"""UT1, polar motion and celestial pole offsets from the bundled IERS table, and the rotation from Earth to
ICRF axes.

The table is ``finals2000A.all`` of the package astropy-iers-data: daily from 1973, with predictions one year
ahead. UT1 and polar motion are those of IERS Bulletin B where it gives them, else of Bulletin A; pole offsets
are those of Bulletin A. It is read once, from the installed package, never from the network, and astropy's
own settings are not touched. The rotation is IAU 2006/2000A, CIO based (IERS Conventions 2010,
chapter 5).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files

import numpy as np
from erfa import ufunc as _erfa
from numpy.typing import NDArray

from firstarc.border.quarter_day import QuarterDay
from firstarc.border.timescales import tt_from_tai, utc_text
from firstarc.constants import ARCSEC_RAD, DAY_S

_MJD_ZERO = 2400000.5


@dataclass(frozen=True)
class Orientation:
    """Earth orientation at ``n`` instants.

    Attributes
    ----------
    ut1_minus_tai_s, xp_rad, yp_rad, dx_rad, dy_rad : ndarray, shape (n,)
    predicted : ndarray of bool, shape (n,)
        UT1 comes from predicted rows.
    outside : ndarray of bool, shape (n,)
        The instant is not covered by the table; the value at its nearer end is held.
    """

    ut1_minus_tai_s: NDArray[np.float64]
    xp_rad: NDArray[np.float64]
    yp_rad: NDArray[np.float64]
    dx_rad: NDArray[np.float64]
    dy_rad: NDArray[np.float64]
    predicted: NDArray[np.bool_]
    outside: NDArray[np.bool_]


class OrientationTable:
    """The bundled table, interpolated linearly in TAI; UT1 - TAI has no steps at leap seconds.

    Parameters
    ----------
    text : bytes
        Content of a ``finals2000A`` file.
    """

    def __init__(self, text: bytes):
        width = text.index(b"\n") + 1
        rows = np.frombuffer(text[: len(text) // width * width], "S1").reshape(-1, width)

        def column(first: int, last: int) -> NDArray[np.bytes_]:
            return np.ascontiguousarray(rows[:, first - 1 : last]).view(f"S{last - first + 1}")[:, 0]

        known = np.char.strip(column(59, 68)) != b""
        rows = rows[known]

        def number(first: int, last: int) -> NDArray[np.float64]:
            cells = np.char.strip(column(first, last))
            return np.where(cells == b"", b"0", cells).astype(float)

        mjd_utc = number(8, 15)

        def final_or(first: int, last: int, rapid: NDArray[np.float64], unit: float) -> NDArray[np.float64]:
            """Bulletin B where it is given, else Bulletin A."""
            given = np.char.strip(column(first, last)) != b""
            return np.where(given, number(first, last), rapid) * unit

        tai1, tai2, _ = _erfa.utctai(np.full(mjd_utc.shape, _MJD_ZERO), mjd_utc)
        self._mjd_tai = (tai1 - _MJD_ZERO) + tai2
        tai_minus_utc_s = np.rint((self._mjd_tai - mjd_utc) * DAY_S)
        mas = 1e-3 * ARCSEC_RAD
        # The pole offsets stay those of Bulletin A: Bulletin B's are off by up to 20 mas before 1984.
        self._values = np.stack(
            [
                final_or(155, 165, number(59, 68), 1.0) - tai_minus_utc_s,
                final_or(135, 144, number(19, 27), ARCSEC_RAD),
                final_or(145, 154, number(38, 46), ARCSEC_RAD),
                number(98, 106) * mas,
                number(117, 125) * mas,
            ],
            axis=1,
        )
        predicted = column(58, 58) == b"P"
        self._first_prediction = float(self._mjd_tai[predicted][0]) if predicted.any() else np.inf

    @property
    def span_utc(self) -> tuple[str, str, str]:
        """Dates of the first row, the first predicted row and the last row, UTC."""
        mjd = [self._mjd_tai[0], min(self._first_prediction, self._mjd_tai[-1]), self._mjd_tai[-1]]
        first, prediction, last = (t[:10] for t in utc_text(np.full(3, _MJD_ZERO), np.array(mjd), 0))
        return first, prediction, last

    def at(self, tai1: NDArray[np.float64], tai2: NDArray[np.float64]) -> Orientation:
        """Orientation at two-part TAI Julian dates, shape (n,)."""
        mjd = (tai1 - _MJD_ZERO) + tai2
        nodes = self._mjd_tai
        k = np.clip(np.searchsorted(nodes, mjd, side="right") - 1, 0, len(nodes) - 2)
        f = np.clip((mjd - nodes[k]) / (nodes[k + 1] - nodes[k]), 0.0, 1.0)[:, None]
        v = self._values[k] * (1.0 - f) + self._values[k + 1] * f
        outside = (mjd < nodes[0]) | (mjd > nodes[-1])
        return Orientation(v[:, 0], v[:, 1], v[:, 2], v[:, 3], v[:, 4], mjd >= self._first_prediction, outside)


@lru_cache(maxsize=1)
def table() -> OrientationTable:
    """The bundled table, read at first use."""
    return OrientationTable((files("astropy_iers_data") / "data" / "finals2000A.all").read_bytes())


def _pole_series(tt1: NDArray[np.float64], tt2: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.stack(_erfa.xys06a(tt1, tt2), axis=1)


#: X, Y of the celestial intermediate pole and the CIO locator s, rad, IAU 2006/2000A, shape (n, 3), of two-part TT.
#: Interpolation is good to 2e-6 arcsec, 6e-5 m on the ground.
celestial_pole = QuarterDay(_pole_series)


def rotation_to_terrestrial(
    tai1: NDArray[np.float64],
    tai2: NDArray[np.float64],
    orientation: Orientation,
    pole: NDArray[np.float64] | None = None,
) -> NDArray[np.float64]:
    """Matrices that turn GCRS (ICRF axes) into ITRS components, shape (n, 3, 3).

    Parameters
    ----------
    tai1, tai2 : ndarray, shape (n,)
        Two-part TAI Julian dates.
    orientation : Orientation
        Values at the same instants.
    pole : ndarray, shape (n, 3), optional
        X, Y, s in rad without the offsets; found by ``celestial_pole`` when not given.
    """
    tt1, tt2 = tt_from_tai(tai1, tai2)
    if pole is None:
        pole = celestial_pole(tt1, tt2)
    x = pole[:, 0] + orientation.dx_rad
    y = pole[:, 1] + orientation.dy_rad
    era = _erfa.era00(tai1, tai2 + orientation.ut1_minus_tai_s / DAY_S)
    polar = _erfa.pom00(orientation.xp_rad, orientation.yp_rad, _erfa.sp00(tt1, tt2))
    return np.asarray(_erfa.c2tcio(_erfa.c2ixys(x, y, pole[:, 2]), era, polar))
