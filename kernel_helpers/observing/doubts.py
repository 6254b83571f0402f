"""Doubts about observations, in words; they never stop the work."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from firstarc.border import earth_orientation
from firstarc.border.timescales import utc_text
from firstarc.formats.plain import shortened
from firstarc.observing.center import median_rate_arcsec_s
from firstarc.observing.records import Doubt, Records
from firstarc.observing.stations import GROUND_RADIUS_KM

if TYPE_CHECKING:
    from firstarc.observing.observations import Observations

#: Refraction lifts an object by at most about this much, so that geometric altitudes down to it are seen
#: (common practice).
REFRACTION_DEG = 0.6


def order_doubts(records: Records) -> list[Doubt]:
    """Equal times at one station, and rows out of order."""
    t_s = ((records.tai1 - records.tai1[0]) + (records.tai2 - records.tai2[0])) * 86400.0
    doubts = []
    seen: dict[tuple[float, int, str], int] = {}
    for i in range(len(records)):
        key = (round(float(t_s[i]), 6), int(records.site_index[i]), records.designations[i].best)
        if key in seen:
            j = seen[key]
            doubts.append(
                Doubt(
                    f"rows {records.row[j] + 1} and {records.row[i] + 1} ({records.where[j]}, {records.where[i]}) "
                    "have the same time and station, "
                    f"{utc_text(records.tai1[[i]], records.tai2[[i]], 3)[0]}",
                    (int(records.row[i]),),
                )
            )
        else:
            seen[key] = i
    back = np.flatnonzero(np.diff(t_s) < 0)
    if len(back):
        first = int(back[0]) + 1
        doubts.append(
            Doubt(
                f"observations are not in order of time (row {records.row[first] + 1}, {records.where[first]}, "
                f"is earlier than the row above it{'' if len(back) == 1 else f'; {len(back)} such rows'}); "
                "the order of the input is kept"
            )
        )
    return doubts


def object_doubts(records: Records) -> list[Doubt]:
    """Several designations in one input."""
    names = list(dict.fromkeys(d.best for d in records.designations))
    if len(names) < 2:
        return []
    shown = ", ".join(shortened(n, 30) or "(none)" for n in names[:6]) + (", …" if len(names) > 6 else "")
    settled = {d.perm_id or d.prov_id or d.art_sat for d in records.designations} - {""}
    if len(settled) > 1:
        first = names[0]
        text = f"several objects ({shown}): an orbit is for one of them; keep it with obs.of_object({first!r})"
    else:
        listed = f"{len(names)} designations ({shown})"
        text = f"{listed}: taken as one object; obs.of_object(name) keeps one of them"
    return [Doubt(text)]


def time_doubts(records: Records) -> list[Doubt]:
    """A stated time error that moves the object by more than the stated angle error."""
    rate = median_rate_arcsec_s(records)
    if rate is None:
        return []
    sigma = np.minimum(records.sigma_ra_arcsec, records.sigma_dec_arcsec)
    rows = np.flatnonzero(records.sigma_time_s * rate > sigma)
    if not len(rows):
        return []
    worst = float(records.sigma_time_s[rows].max())
    return [
        Doubt(
            f"the stated sigma of the time (up to {worst:.2g} s) moves the object by up to "
            f"{worst * rate:.2g}″, more than the sigma of the direction, and is not folded into it",
            tuple(int(r) for r in records.row[rows]),
        )
    ]


def geometry_doubts(obs: Observations) -> list[str]:
    """Doubts that follow from times and places in force: tables left, horizon, height."""
    g, out = obs.geometry, []
    first, prediction, last = earth_orientation.table().span_utc
    if g.orientation.outside.any():
        out.append(
            f"{_rows_of(obs, g.orientation.outside)}: outside the Earth-orientation table ({first} to "
            f"{last}); its nearer end is held, and station positions may be off by hundreds of metres or "
            "more"
        )
    predicted = g.orientation.predicted & ~g.orientation.outside
    if predicted.any():
        out.append(
            f"{_rows_of(obs, predicted)}: Earth orientation is a prediction (table {first} to {last}, "
            f"predicted from {prediction})"
        )
    if g.bodies.series.any():
        out.append(
            f"{_rows_of(obs, g.bodies.series)}: outside the span of {obs.ephemeris}; the Earth and the Sun "
            "come from a series good to about 10 km"
        )
    altitude = obs.altitude_deg()
    low = np.flatnonzero(altitude < -REFRACTION_DEG)
    for i in low[:5]:
        site = obs.station_of(int(i))
        out.append(
            f"row {obs.rows[i] + 1} ({obs.records.where[i]}): the object is {-altitude[i]:.1f}° below the "
            f"horizon of station {site.label}; check time, station and direction"
        )
    if len(low) > 5:
        out.append(f"{len(low) - 5} more rows have the object below the horizon")
    for site in obs.stations:
        if site.is_geocentre:
            out.append(f"station {site.label} is the Earth's centre: no horizon is checked")
        elif not GROUND_RADIUS_KM[0] <= site.radius_km <= GROUND_RADIUS_KM[1]:
            out.append(
                f"station {site.label} lies {site.radius_km:.1f} km from the Earth's centre (height "
                f"{site.height_m:.0f} m), which is not on the ground; check its height and unit"
            )
    return out


def _rows_of(obs: Observations, mask: NDArray[np.bool_]) -> str:
    listed = (obs.rows[mask] + 1).tolist()  # words count rows from 1, as the Desk does
    if len(listed) == len(obs):
        return "all rows"
    if len(listed) > 6:
        return f"{len(listed)} rows"
    return ("row " if len(listed) == 1 else "rows ") + ", ".join(map(str, listed))
