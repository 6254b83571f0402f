"""From rows of text to recorded values; every problem is found before any is reported."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import numpy as np

from firstarc.border.timescales import tai_from_utc_text
from firstarc.errors import Problem
from firstarc.formats.plain import PlainInput, PlainRow, shortened
from firstarc.observing import columns as names
from firstarc.observing import weights
from firstarc.observing.numbers import decimals, number, sexagesimal
from firstarc.observing.records import Designations, Doubt, Records
from firstarc.observing.row import Row
from firstarc.observing.station_cells import USED, StationCells
from firstarc.observing.stations import Site

#: Steps of time that ADES allows for precTime, unit 1e-6 d.
_PREC_TIME = frozenset({1, 10, 100, 1000, 10000, 100000, 694, 69, 4167, 41667})


class Reader:
    """Reads one input; ``problems`` and ``doubts`` fill up as it goes.

    Parameters
    ----------
    plain : PlainInput
    own : mapping of str to Site
        The caller's stations, which win over the MPC list.
    """

    def __init__(self, plain: PlainInput, own: Mapping[str, Site]):
        self.plain = plain
        self.problems: list[Problem] = []
        self.doubts: list[Doubt] = [Doubt(note) for note in plain.notes]
        self._used: set[str] = set(USED)
        words = plain.ades or "stn" in plain.columns
        self._stations = StationCells(own, words, self._bad)
        self._written = plain.format in ("ADES PSV", "CSV")

    def read(self) -> Records | None:
        """The records, or None when ``problems`` says why there are none."""
        columns = self.plain.columns
        if not self.plain.rows:
            wrong = "; ".join(("holds no optical observation", *self.plain.notes))
            self.problems.append(Problem("whole input", "", wrong, "Give at least one row with a direction"))
            return None
        self.problems += names.missing_columns(columns, self.plain.ades)
        if any(p.where == "columns" or p.where.startswith("column ") for p in self.problems):
            return None
        rows = [self._row(r) for r in self.plain.rows]
        times = tai_from_utc_text([r.time for r in rows])
        for i, problem in times.problems.items():
            if rows[i].time:
                self._bad(rows[i], self._time_field(rows[i]), rows[i].time, problem.wrong, problem.remedy)
        self.problems += self._stations.unknown()
        if self.problems:
            return None
        if times.dubious.any():
            listed = np.flatnonzero(times.dubious)
            self.doubts.append(
                Doubt(
                    f"UTC of {_rows_words(listed)} has no certain leap seconds (before 1960 or far ahead)",
                    _ints(listed),
                )
            )
        if self.plain.ades and times.without_z.any():
            listed = np.flatnonzero(times.without_z)
            self.doubts.append(
                Doubt(f"obsTime of {_rows_words(listed)} lacks its Z and was read as UTC", _ints(listed))
            )
        sites, site_index = self._stations.sites(rows)
        self._note_columns()
        return self._records(rows, times.tai1, times.tai2, sites, site_index)

    # -- one row ---------------------------------------------------------------------------------------------

    def _row(self, plain: PlainRow) -> Row:
        row = Row(plain.where, plain.cells)
        row.time = self._only_one(row, names.TIME, "time")[1]
        self._directions(row)
        self._sigmas(row)
        self._stations.read(row)
        return row

    def _bad(self, row: Row, field: str, found: str, wrong: str, remedy: str) -> None:
        self.problems.append(Problem(f"{row.where}, field {field}", shortened(found), wrong, remedy))

    def _time_field(self, row: Row) -> str:
        return next((n for n in names.TIME if n in row.cells), names.TIME[0])

    def _only_one(self, row: Row, candidates: Iterable[str], what: str) -> tuple[str, str]:
        """Name and text of the one filled cell among several that say the same thing."""
        candidates = [c for c in candidates if c in self.plain.columns]
        filled = [c for c in candidates if row.cells.get(c)]
        self._used.update(candidates)
        if not filled:
            shown = " or ".join(candidates)
            self._bad(row, shown, "", f"has no {what}", "Fill the cell or leave the row out")
            return "", ""
        if len(filled) > 1:
            text = ", ".join(row.cells[c] for c in filled)
            self._bad(row, " and ".join(filled), text, f"gives the {what} twice", "Fill only one of these columns")
        return filled[0], row.cells[filled[0]]

    def _directions(self, row: Row) -> None:
        ades = names.ades_named(self.plain.columns)
        name, text = self._only_one(row, (*names.RA, *(("ra",) if ades else ())), "right ascension")
        if name:
            row.ra_deg, row.ra_step_arcsec = self._right_ascension(row, name, text)
        name, text = self._only_one(row, (*names.DEC, *(("dec",) if ades else ())), "declination")
        if name:
            row.dec_deg, row.dec_step_arcsec = self._declination(row, name, text)

    def _right_ascension(self, row: Row, name: str, text: str) -> tuple[float, float]:
        hours = name in ("ra_h", "ra_hms")
        value = sexagesimal(text) if name == "ra_hms" else number(text)
        form = {"ra_h": "hours", "ra_hms": "hh:mm:ss.s"}.get(name, "degrees")
        low, high = (0.0, 24.0) if hours else ((0.0, 360.0) if name == "ra" else (-180.0, 360.0))
        if value is None:
            self._bad(row, name, text, "is not a right ascension", f"Give it in {form}")
            return math.nan, 0.0
        if not low <= value <= high or (value == high and name == "ra"):
            self._bad(row, name, text, "is out of range", f"Give a value from {low:g} to {high:g} {form}")
            return math.nan, 0.0
        degrees = value * 15.0 if hours else value
        step = 3600.0 * 10.0 ** -decimals(text) * (15.0 if hours else 1.0)
        if name == "ra_hms":
            step = 15.0 * 10.0 ** -len(text.rstrip('sS"″ ').partition(".")[2])
        return degrees % 360.0, step

    def _declination(self, row: Row, name: str, text: str) -> tuple[float, float]:
        value = sexagesimal(text) if name == "dec_dms" else number(text)
        form = "dd:mm:ss.s" if name == "dec_dms" else "degrees"
        if value is None:
            self._bad(row, name, text, "is not a declination", f"Give it in {form}")
            return math.nan, 0.0
        if not -90.0 <= value <= 90.0:
            self._bad(row, name, text, "is out of range", "Give a value from -90 to 90 degrees")
            return math.nan, 0.0
        step = 3600.0 * 10.0 ** -decimals(text)
        if name == "dec_dms":
            step = 10.0 ** -len(text.rstrip('sS"″ ').partition(".")[2])
        return value, step

    def _positive(self, row: Row, name: str, zero: bool = False) -> float | None:
        self._used.add(name)
        text = row.cells.get(name)
        if not text:
            return None
        value = number(text)
        if value == 0.0 and zero:
            return None
        if value is None or value <= 0.0:
            self._bad(
                row,
                name,
                text,
                "is not a positive number",
                "Give one sigma, above zero, or leave the cell empty",
            )
            return None
        return value

    def _first_positive(self, row: Row, *candidates: str, zero: bool = False) -> float | None:
        found = [v for v in (self._positive(row, c, zero) for c in candidates) if v is not None]
        return found[0] if found else None

    def _sigmas(self, row: Row) -> None:
        both = self._positive(row, "sigma_arcsec")
        row.sigma_ra = self._first_positive(row, "sigma_ra_arcsec", "rmsRA")
        row.sigma_dec = self._first_positive(row, "sigma_dec_arcsec", "rmsDec")
        row.sigma_ra = both if row.sigma_ra is None else row.sigma_ra
        row.sigma_dec = both if row.sigma_dec is None else row.sigma_dec
        self._used.update(("sigma_corr", "rmsCorr"))
        name = "sigma_corr" if row.cells.get("sigma_corr") else "rmsCorr"
        if text := row.cells.get(name):
            value = number(text)
            if value is None or not -1.0 < value < 1.0:
                self._bad(row, name, text, "is not a correlation", "Give a number between -1 and 1, both excluded")
            else:
                row.corr = value
        # An observer who writes no error of the time as zero states nothing.
        row.sigma_time_s = self._first_positive(row, "sigma_time_s", "rmsTime", zero=True) or 0.0
        self._precision(row)
        self._range(row)

    def _range(self, row: Row) -> None:
        """A measured slant range; it counts only with its sigma, which nobody may guess."""
        value = self._positive(row, "range_km")
        sigma = self._positive(row, "sigma_range_km")
        if value is None:
            return
        if sigma is None:
            if not row.cells.get("sigma_range_km"):
                self._bad(row, "sigma_range_km", "", "is empty beside a range", "Give the sigma of the range in km")
            return
        row.range_km, row.sigma_range_km = value, sigma

    def _precision(self, row: Row) -> None:
        """The precision group of ADES: all three or none."""
        group = ("precTime", "precRA", "precDec")
        self._used.update(group)
        filled = [g for g in group if row.cells.get(g)]
        if not filled:
            return
        if len(filled) < 3:
            lacking = next(g for g in group if g not in filled)
            self._bad(row, lacking, "", "is empty while the rest of its group is filled", "Fill all three of "
                      "precTime, precRA, precDec or none")  # fmt: skip
            return
        values = [self._positive(row, g) for g in group]
        if any(v is None for v in values):
            return
        prec_time, prec_ra, prec_dec = (float(v) for v in values if v is not None)
        if prec_time not in _PREC_TIME:
            listed = ", ".join(map(str, sorted(_PREC_TIME)))
            self._bad(row, "precTime", row.cells["precTime"], "is no step of ADES", f"Give one of {listed} (1e-6 d)")
            return
        row.ra_step_arcsec = max(row.ra_step_arcsec, 15.0 * prec_ra)
        row.dec_step_arcsec = max(row.dec_step_arcsec, prec_dec)
        if not row.sigma_time_s:
            row.sigma_time_s = prec_time * 0.0864 / math.sqrt(12.0)

    # -- the whole -------------------------------------------------------------------------------------------

    def _note_columns(self) -> None:
        known = names.ADES_OTHER if names.ades_named(self.plain.columns) else frozenset()
        self._used |= {"permID", "provID", "artSat", "trkSub", "object", "mode", "astCat"}
        unknown = [c for c in self.plain.columns if c not in self._used and c not in known]
        if unknown:
            plural = "s" if len(unknown) > 1 else ""
            shown = ", ".join(shortened(c, 30) for c in unknown[:12])
            self.doubts.append(Doubt(f"column{plural} not understood and only kept in the table: {shown}"))

    def _records(
        self,
        rows: list[Row],
        tai1: np.ndarray,
        tai2: np.ndarray,
        sites: tuple[Site, ...],
        site_index: list[int],
    ) -> Records:
        n = len(rows)
        stated = np.array([r.sigma_ra is not None and r.sigma_dec is not None for r in rows])
        sigma = np.array([[r.sigma_ra or math.nan, r.sigma_dec or math.nan] for r in rows])
        ra_step = min((r.ra_step_arcsec for r in rows), default=0.0) if self._written else 0.0
        dec_step = min((r.dec_step_arcsec for r in rows), default=0.0) if self._written else 0.0
        reasons: dict[tuple[float, str], list[int]] = {}
        for i in np.flatnonzero(~stated):
            row = rows[i]
            default, reason = weights.default_sigma_arcsec(
                row.cells.get("mode", ""), row.cells.get("astCat", ""), int(row.time[:4])
            )
            reasons.setdefault((default, reason), []).append(int(i))
            grouped = bool(row.cells.get("precRA"))
            steps = (row.ra_step_arcsec, row.dec_step_arcsec) if grouped else (ra_step, dec_step)
            rounding = (steps[0] * math.cos(math.radians(row.dec_deg)), steps[1])
            for k in (0, 1):
                if math.isnan(sigma[i, k]):
                    sigma[i, k] = weights.with_rounding(default, rounding[k])
        for (default, reason), listed in reasons.items():
            self.doubts.append(
                Doubt(
                    f"no sigma stated in {_rows_words(listed)}: {default:g}″ taken ({reason}; default after "
                    f"{weights.SOURCE}, with the rounding of the written digits)",
                    tuple(listed),
                )
            )
        others = [c for c in self.plain.columns if c not in self._used or c in ("mode", "astCat")]
        return Records(
            row=np.arange(n),
            where=tuple(r.where for r in rows),
            tai1=tai1,
            tai2=tai2,
            time_text=tuple(r.time for r in rows),
            ra_deg=np.array([r.ra_deg for r in rows]),
            dec_deg=np.array([r.dec_deg for r in rows]),
            sigma_ra_arcsec=sigma[:, 0].copy(),
            sigma_dec_arcsec=sigma[:, 1].copy(),
            corr=np.array([r.corr for r in rows]),
            sigma_time_s=np.array([r.sigma_time_s for r in rows]),
            range_km=np.array([r.range_km for r in rows]),
            sigma_range_km=np.array([r.sigma_range_km for r in rows]),
            sigma_stated=stated,
            site_index=np.array(site_index, dtype=np.int64),
            sites=sites,
            designations=tuple(_designations(r.cells) for r in rows),
            others=tuple((c, tuple(r.cells.get(c, "") for r in rows)) for c in others),
        )


def _designations(cells: Mapping[str, str]) -> Designations:
    return Designations(
        cells.get("permID", ""), cells.get("provID", ""), cells.get("artSat", ""), cells.get("trkSub", ""),
        cells.get("object", ""),
    )  # fmt: skip


def _ints(values: Iterable[int]) -> tuple[int, ...]:
    return tuple(int(v) for v in values)


def _rows_words(rows: Iterable[int]) -> str:
    """``row 3``, ``rows 1, 2, 5`` or ``40 rows``."""
    listed = [int(r) + 1 for r in rows]  # words count rows from 1, as the Desk does
    if len(listed) == 1:
        return f"row {listed[0]}"
    return f"rows {', '.join(map(str, listed))}" if len(listed) <= 6 else f"{len(listed)} rows"
