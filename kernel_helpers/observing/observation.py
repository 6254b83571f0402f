"""One sighting, and where it came from."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from firstarc.observing.stations import place_words
from firstarc.results import Shown


@dataclass(frozen=True)
class Source:
    """Where observations came from.

    Parameters
    ----------
    path : str or None
        File as given; None for objects in memory.
    format : str
        Format, found from the content.
    sha256 : str
        Of the file's bytes; of a canonical CSV text for tables in memory.
    header : tuple of str
        Context and comment lines of the file.
    count : int
        Observations in the input, before any was left out.
    stations : tuple of Site
        The caller's own stations, as given to ``load``.
    """

    path: str | None
    format: str
    sha256: str
    header: tuple[str, ...] = ()
    count: int = 0
    stations: tuple[Any, ...] = ()


@dataclass(frozen=True, repr=False)
class Observation(Shown):
    """One recorded sighting.

    Parameters
    ----------
    row : int
        0-based row number in the loaded input.
    time_utc : str
        UTC as recorded.
    ra_deg, dec_deg : float
        As recorded, ICRF axes.
    sigma_ra_arcsec, sigma_dec_arcsec : float
        Of RA times cos Dec, and of Dec.
    station, station_name : str
    lon_deg, lat_deg, height_m : float
        Recorded place of the station: east longitude, geodetic latitude, height above WGS 84.
    object_name : str
    """

    row: int
    time_utc: str
    ra_deg: float
    dec_deg: float
    sigma_ra_arcsec: float
    sigma_dec_arcsec: float
    station: str
    station_name: str
    lon_deg: float
    lat_deg: float
    height_m: float
    object_name: str

    def report_lines(self) -> list:
        digits = degree_digits(min(self.sigma_ra_arcsec, self.sigma_dec_arcsec))
        place = place_words(self.lon_deg, self.lat_deg, self.height_m)
        return [
            f"Observation, row {self.row + 1}" + (f", of {self.object_name}" if self.object_name else ""),
            [
                ["quantity", "value"],
                ["time (UTC)", self.time_utc],
                ["RA (ICRF)", f"{self.ra_deg:.{digits}f}°"],
                ["Dec (ICRF)", f"{self.dec_deg:+.{digits}f}°"],
                ["sigma RA cos Dec, Dec", f"{self.sigma_ra_arcsec:.2g}″, {self.sigma_dec_arcsec:.2g}″"],
                ["station", f"{self.station} {self.station_name}".strip()],
                ["place (WGS 84)", place],
            ],
        ]


def degree_digits(sigma_arcsec: float) -> int:
    """Decimals of a degree that show a tenth of the sigma."""
    return int(min(max(math.ceil(-math.log10(sigma_arcsec / 3600.0)) + 1, 2), 10))
