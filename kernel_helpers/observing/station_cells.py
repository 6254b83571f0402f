"""Which station a row was observed from, out of its cells."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

import numpy as np

from firstarc.border.frames import geodetic_from_itrs_km
from firstarc.errors import Problem, UsageError
from firstarc.formats.plain import shortened
from firstarc.observing import columns as names
from firstarc.observing.numbers import number
from firstarc.observing.row import Row
from firstarc.observing.stations import (
    ROVING_CODES,
    Site,
    mpc_list,
    mpc_site,
    near_matches,
    place_words,
    with_letters,
)

#: Columns that are looked at here.
USED = ("station", "stn", "station_name", *names.PLACE, "sys", "ctr", "pos1", "pos2", "pos3")


class StationCells:
    """Reads the stations of one input.

    Parameters
    ----------
    own : mapping of str to Site
        The caller's stations, which win over the MPC list.
    ades_words : bool
        Name fields in messages as the ADES standard does.
    complain : callable
        Takes row, field, text found, what is wrong, remedy.
    """

    def __init__(self, own: Mapping[str, Site], ades_words: bool, complain: Callable[[Row, str, str, str, str], None]):
        self.own = own
        self.ades_words = ades_words
        self.complain = complain
        self._unknown: dict[str, list[str]] = {}

    def read(self, row: Row) -> None:
        row.code = row.cells.get("station") or row.cells.get("stn") or ""
        if row.cells.get("station") and row.cells.get("stn") and row.cells["station"] != row.cells["stn"]:
            self.complain(row, "station and stn", f"{row.cells['station']}, {row.cells['stn']}", "name two "
                                                                                             "stations",
                      "Fill only one of these columns")  # fmt: skip
            return
        row.place_name = row.cells.get("station_name", "")
        own_place = [n for n in names.PLACE if row.cells.get(n)]
        located = [n for n in ("sys", "pos1", "pos2", "pos3") if row.cells.get(n)]
        if own_place:
            row.place = self._own_place(row, own_place)
            row.code = row.code or "247"
        elif located and row.code in ROVING_CODES:
            row.place = self._ades_place(row, located)
        elif row.cells.get("sys", "").startswith("ICRF"):
            self.complain(row, "sys", row.cells["sys"], "places the observer in space, which is not read here",
                      "Give observations from the ground")  # fmt: skip
        elif located:
            self.complain(row, "sys, pos1, pos2, pos3", row.code or "no station", "place a station that is not "
                                                                              "a roving one",
                      "Leave these cells empty for a fixed station, or give stn 247")  # fmt: skip
        elif not row.code:
            self.complain(row, "stn" if self.ades_words else "station", "", "has no station",
                      "Give an MPC code, a name from stations=, or the place as lon_deg, lat_deg, "
                      "height_m")  # fmt: skip
        elif row.code in self.own:
            return
        elif row.code in ROVING_CODES:
            self.complain(row, "sys", "", f"is empty though station {row.code} is a roving one",
                      "Fill sys WGS84, pos1 (E longitude, deg), pos2 (latitude, deg), pos3 (altitude, "
                      "m)")  # fmt: skip
        elif mpc_site(row.code) is None:
            self._unknown.setdefault(row.code, []).append(row.where)

    def _own_place(self, row: Row, filled: list[str]) -> tuple[float, float, float] | None:
        lacking = [n for n in names.PLACE if n not in filled]
        if lacking:
            self.complain(row, lacking[0], "", "is empty while the rest of the place is filled",
                      "Fill lon_deg, lat_deg and height_m, or none of them")  # fmt: skip
            return None
        values = [self._coordinate(row, n) for n in names.PLACE]
        return self._checked_place(row, values, names.PLACE)

    def _ades_place(self, row: Row, filled: list[str]) -> tuple[float, float, float] | None:
        system = row.cells.get("sys", "")
        lacking = [n for n in ("sys", "pos1", "pos2", "pos3") if n not in filled]
        if lacking:
            self.complain(row, lacking[0], "", "is empty while the rest of the location is filled",
                      "Fill sys, ctr, pos1, pos2 and pos3")  # fmt: skip
            return None
        if system not in ("WGS84", "ITRF"):
            self.complain(
                row,
                "sys",
                system,
                "is no system that can be used for a station on the ground",
                "Give WGS84 (E longitude deg, latitude deg, altitude m) or ITRF (E longitude deg, Rxy km, Rz km)",
            )
            return None
        if row.cells.get("ctr", "399") != "399":
            self.complain(row, "ctr", row.cells["ctr"], "is not the Earth", "Give 399")
            return None
        values = [self._coordinate(row, n) for n in ("pos1", "pos2", "pos3")]
        if system == "WGS84" or any(v is None for v in values):
            return self._checked_place(row, values, ("pos1", "pos2", "pos3"))
        lon, rxy, rz = (float(v) for v in values if v is not None)
        if rxy < 0:
            self.complain(row, "pos2", row.cells["pos2"], "is a negative distance from the axis", "Give Rxy in km")
            return None
        vector = np.array([rxy * math.cos(math.radians(lon)), rxy * math.sin(math.radians(lon)), rz])
        geodetic = geodetic_from_itrs_km(vector)
        return self._checked_place(row, [float(g) for g in geodetic], ("pos1", "pos2", "pos3"))

    def _coordinate(self, row: Row, name: str) -> float | None:
        value = number(row.cells[name])
        if value is None:
            self.complain(row, name, row.cells[name], "is not a number", "Give a plain decimal number")
        return value

    def _checked_place(
        self, row: Row, values: list[float | None], fields: tuple[str, ...]
    ) -> tuple[float, float, float] | None:
        if any(v is None for v in values):
            return None
        lon, lat, height = (float(v) for v in values if v is not None)
        if not -360.0 <= lon <= 360.0:
            self.complain(
                row,
                fields[0],
                row.cells[fields[0]],
                "is out of range",
                "Give an east longitude, -180 to 360 deg",
            )
        elif not -90.0 <= lat <= 90.0:
            self.complain(row, fields[1], row.cells[fields[1]], "is out of range", "Give a latitude from -90 to 90 deg")
        else:
            return lon, lat, height
        return None

    def unknown(self) -> list[Problem]:
        """Stations that nobody knows, one problem for each code."""
        problems = []
        for code, places in self._unknown.items():
            near = near_matches(code, self.own)
            listed = mpc_list().get(code)
            if listed is not None:
                wrong = f"({shortened(str(listed.get('Name', '')))}) has no fixed place on the Earth"
                remedy = "Give observations from the ground, or its place as a roving station (stn 247)"
            else:
                wrong = "is not in the MPC list and not in stations="
                remedy = f"Near matches: {'; '.join(near)}. " if near else ""
                remedy += f"{'Or give' if near else 'Give'} stations={{{code!r}: dict(lon_deg=, lat_deg=, height_m=)}}"
            where = places[0] if len(places) == 1 else f"{places[0]} and {len(places) - 1} more"
            field = "stn" if self.ades_words else "station"
            problems.append(Problem(f"{where}, field {field}", shortened(code), wrong, remedy))
        return problems

    def sites(self, rows: list[Row]) -> tuple[tuple[Site, ...], list[int]]:
        """Distinct sites in order of appearance, and each row's place among them."""
        placed = [r for r in rows if r.place is not None]
        lettered = with_letters([(r.code, r.place) for r in placed if r.place is not None])
        codes = dict(zip(map(id, placed), lettered, strict=True))
        sites: dict[Site, int] = {}
        fixed: dict[str, Site] = {}
        index = []
        for row in rows:
            if row.place is not None:
                listed = None if row.code in ROVING_CODES else mpc_list().get(row.code)
                name = row.place_name or (str(listed["Name"]) if listed else "")
                if not name:
                    name = f"roving, {place_words(*row.place)}" if row.code in ROVING_CODES else row.code
                site = Site(codes[id(row)], name, *row.place)
            else:
                if row.code not in fixed:
                    found = self.own.get(row.code) or mpc_site(row.code)
                    if found is None:  # cannot happen: unknown codes were reported
                        raise UsageError(f"station {row.code!r} is unknown")
                    fixed[row.code] = found
                site = fixed[row.code]
            index.append(sites.setdefault(site, len(sites)))
        return tuple(sites), index
