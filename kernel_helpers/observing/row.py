"""One row of an input while it is being read."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass


@dataclass
class Row:
    """What is known of a row so far; NaN and None where nothing is."""

    where: str
    cells: Mapping[str, str]
    time: str = ""
    ra_deg: float = math.nan
    dec_deg: float = math.nan
    ra_step_arcsec: float = 0.0
    dec_step_arcsec: float = 0.0
    sigma_ra: float | None = None
    sigma_dec: float | None = None
    corr: float = 0.0
    sigma_time_s: float = 0.0
    range_km: float = math.nan
    sigma_range_km: float = math.nan
    code: str = ""
    place: tuple[float, float, float] | None = None
    place_name: str = ""
