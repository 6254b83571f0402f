"""The observations of one object, ready for orbit determination."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace
from functools import cached_property
from typing import Any, overload

import numpy as np
from numpy.typing import NDArray

from firstarc.border import frames
from firstarc.border.solar_system import ephemeris
from firstarc.border.timescales import utc_text, utc_text_from_tdb
from firstarc.errors import UsageError
from firstarc.formats.tables import csv_text
from firstarc.observing import sight_lines as lines
from firstarc.observing.doubts import geometry_doubts
from firstarc.observing.observation import Observation, Source, degree_digits
from firstarc.observing.records import Designations, Doubt, Records
from firstarc.observing.sight_lines import Geometry, SightLines
from firstarc.observing.stations import Site
from firstarc.observing.what_if import WhatIf
from firstarc.results import Shown


@dataclass(frozen=True, eq=False, repr=False)
class Observations(Shown):
    """Observations of one object: recorded values, and the what-ifs that are tried on.

    Made by :func:`firstarc.load`. Frozen: every change gives new observations. ``obs[i]`` is one
    :class:`Observation`; ``obs[[0, 4, 8]]``, a slice or a mask gives observations; positions are those in
    ``obs``, ``obs.rows`` are the row numbers of the loaded input.

    Attributes
    ----------
    records : Records
        The recorded values as plain arrays.
    center : {"earth", "sun"}
    center_reason : str
        Why, in words.
    source : Source
    directions : {"astrometric", "apparent", "geometric"}
        What the recorded directions are.
    what_if : tuple of WhatIf
        Offsets in force; never part of the recorded values.
    epoch_tdb : tuple of float
        Two-part TDB Julian date from which ``sight_lines.t_s`` counts; the same for all subsets.
    """

    records: Records
    center: str
    center_reason: str
    source: Source
    directions: str
    epoch_tdb: tuple[float, float]
    what_if: tuple[WhatIf, ...] = ()
    doubts: tuple[Doubt, ...] = ()

    # -- as a sequence ---------------------------------------------------------------------------------------

    def __len__(self) -> int:
        return len(self.records)

    @overload
    def __getitem__(self, key: int) -> Observation: ...
    @overload
    def __getitem__(self, key: slice | Sequence[int] | Sequence[bool] | NDArray[Any]) -> Observations: ...
    def __getitem__(self, key: Any) -> Observation | Observations:
        if isinstance(key, (int, np.integer)) and not isinstance(key, (bool, np.bool_)):
            return self._observation(self._position(int(key)))
        return self._taken(self._positions(key))

    def __iter__(self) -> Iterator[Observation]:
        return (self._observation(i) for i in range(len(self)))

    def _position(self, index: int) -> int:
        if not -len(self) <= index < len(self):
            raise _OutOfRange(f"observation {index} of {len(self)}: give an index from 0 to {len(self) - 1}")
        return index % len(self)

    def _positions(self, key: Any) -> list[int]:
        if isinstance(key, slice):
            return list(range(len(self)))[key]
        try:
            array = np.asarray(key)
        except ValueError:
            array = np.array(None)
        if array.ndim == 1 and array.dtype == bool:
            if len(array) != len(self):
                raise UsageError(f"mask of {len(array)} values for {len(self)} observations: give one per observation")
            return np.flatnonzero(array).tolist()
        if array.ndim == 1 and array.size == 0:
            return []
        if array.ndim != 1 or not np.issubdtype(array.dtype, np.integer):
            raise UsageError(f"obs[{key!r}]: give an index, a list of indices, a slice or a mask of True and False")
        positions = [self._position(int(i)) for i in array]
        twice = sorted({p for p in positions if positions.count(p) > 1}) if len(set(positions)) < len(positions) else []
        if twice:
            raise UsageError(f"observation {twice[0]} is asked for twice: an observation counts once")
        return positions

    def _taken(self, positions: list[int]) -> Observations:
        if not positions:
            raise UsageError("no observation is left: keep at least one")
        return replace(self, records=self.records.taken(positions))

    def _observation(self, i: int) -> Observation:
        r = self.records
        site = r.sites[r.site_index[i]]
        return Observation(
            int(r.row[i]),
            r.time_text[i],
            float(r.ra_deg[i]),
            float(r.dec_deg[i]),
            float(r.sigma_ra_arcsec[i]),
            float(r.sigma_dec_arcsec[i]),
            site.code,
            site.name,
            site.lon_deg,
            site.lat_deg,
            site.height_m,
            r.designations[i].best,
        )

    def without(self, positions: Sequence[int]) -> Observations:
        """All but the observations at these positions."""
        out = set(self._positions([positions] if isinstance(positions, (int, np.integer)) else list(positions)))
        return self._taken([i for i in range(len(self)) if i not in out])

    def of_object(self, name: str) -> Observations:
        """The observations that name this object."""
        positions = [i for i, d in enumerate(self.records.designations) if d.best == name]
        if not positions:
            known = ", ".join(repr(n) for n in dict.fromkeys(d.best for d in self.records.designations))
            raise UsageError(f"object {name!r} is not among the observations; they name {known}")
        return self._taken(positions)

    def with_what_if(self, *what_ifs: WhatIf) -> Observations:
        """The same observations with these offsets in force, in place of any others; none resets.

        Raises
        ------
        UsageError
            An offset names a station or a row that is not among the loaded observations, or moves a station over
            a pole.
        """
        codes = [s.code for s in self.records.sites]
        for w in what_ifs:
            if not isinstance(w, WhatIf):
                raise UsageError(f"with_what_if({w!r}): give fa.WhatIf(...)")
            if w.station is not None and w.station not in codes:
                raise UsageError(f"{w!r}: no observation is from station {w.station!r}; stations: {', '.join(codes)}")
        moved = replace(self, what_if=tuple(w for w in what_ifs if not w.is_zero))
        if any(w.lat_deg for w in what_ifs):
            _ = moved._places  # a station over a pole is refused here, not when it is first used
        return moved

    @property
    def recorded(self) -> Observations:
        """The observations without any what-if."""
        return self if not self.what_if else replace(self, what_if=())

    # -- what they are ---------------------------------------------------------------------------------------

    @property
    def rows(self) -> NDArray[np.int64]:
        """0-based row numbers in the loaded input, shape (n,)."""
        return self.records.row

    @property
    def object_name(self) -> str:
        """Designation of the object; several are joined by a comma, none is an empty text."""
        return ", ".join(dict.fromkeys(d.best for d in self.records.designations if d.best))

    @property
    def designations(self) -> tuple[Designations, ...]:
        """What the rows call the object, each distinct set once."""
        return tuple(dict.fromkeys(self.records.designations))

    @property
    def light_time(self) -> bool:
        """False when the directions are same-instant geometric ones."""
        return self.directions != "geometric"

    @property
    def stations(self) -> tuple[Site, ...]:
        """Distinct sites in use, what-ifs applied, in order of appearance."""
        return tuple(dict.fromkeys(self.station_of(i) for i in range(len(self))))

    def station_of(self, i: int) -> Site:
        """Site of observation ``i``, what-ifs applied."""
        i = self._position(i)
        site = self.records.sites[self.records.site_index[i]]
        if not self.what_if:
            return site
        lon, lat, height = self._places[0][i]
        lon = (lon + 180.0) % 360.0 - 180.0 if abs(lon) > 360.0 else lon
        return replace(site, lon_deg=float(lon), lat_deg=float(lat), height_m=float(height))

    def utc_iso(self, i: int, decimals: int = 3) -> str:
        """UTC of observation ``i``, clock offsets in force applied, such as ``2006-06-28T04:28:24.000Z``."""
        i = self._position(i)
        shift = self._places[1][i] / 86400.0
        return utc_text(self.records.tai1[[i]], self.records.tai2[[i]] + shift, decimals)[0]

    def utc_texts(self, decimals: int = 3) -> list[str]:
        """UTC of every observation, as :meth:`utc_iso` gives it for one."""
        return utc_text(self.records.tai1, self.records.tai2 + self._places[1] / 86400.0, decimals)

    def utc_iso_at(self, t_s: float, decimals: int = 3) -> str:
        """UTC of an instant given as TDB seconds from ``epoch_tdb``."""
        return utc_text_from_tdb(
            np.array([self.epoch_tdb[0]]), np.array([self.epoch_tdb[1] + t_s / 86400.0]), decimals
        )[0]

    # -- as geometry -----------------------------------------------------------------------------------------

    @cached_property
    def _places(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        return lines.places(self.records, self.what_if)

    @cached_property
    def geometry(self) -> Geometry:
        return lines.geometry(self.records, self.what_if, self.center == "sun" or self.directions == "apparent")

    @cached_property
    def sight_lines(self) -> SightLines:
        """Lines of sight, observer vectors and times as plain arrays, what-ifs applied."""
        return lines.sight_lines(self.records, self.geometry, self.center, self.directions, self.epoch_tdb)

    @cached_property
    def observer_velocity_km_s(self) -> NDArray[np.float64]:
        """Velocity (n, 3) of each observer from the centre, ICRF axes, km/s, what-ifs applied."""
        return lines.observer_velocity(self.geometry, self.center)

    @cached_property
    def station_axes(self) -> NDArray[np.float64]:
        """East, north and up (n, 3, 3) at each station on ICRF axes, one a row, what-ifs applied."""
        return lines.station_axes(self.geometry)

    def altitude_deg(self) -> NDArray[np.float64]:
        """Altitudes above the station's horizon, deg, without refraction; NaN at the geocentre."""
        g = self.geometry
        los = frames.unit_vectors(self.records.ra_deg, self.records.dec_deg)
        altitude = np.degrees(frames.altitude_rad(los, g.to_terrestrial, g.lon_deg, g.lat_deg))
        return np.where(np.linalg.norm(g.station_km, axis=1) < 1.0, np.nan, altitude)

    def observer_track(
        self, site: Site | str, t_s: Sequence[float] | NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Where an observer at a site is between the observations.

        Parameters
        ----------
        site : Site or str
            A site, or the code of one in use.
        t_s : array_like, shape (m,)
            TDB seconds from ``epoch_tdb``.

        Returns
        -------
        observer_km : ndarray, shape (m, 3)
            From the centre, ICRF axes.
        center_velocity_km_s : ndarray, shape (m, 3)
            Barycentric velocity of the centre.
        """
        if isinstance(site, str):
            found = next((s for s in self.stations if s.code == site), None)
            if found is None:
                codes = ", ".join(s.code for s in self.stations)
                raise UsageError(f"station {site!r} is not in use; stations: {codes}")
            site = found
        return lines.observer_track(site, np.asarray(t_s, float), self.center, self.epoch_tdb)

    @property
    def ephemeris(self) -> str:
        """Where the Earth's and the Sun's motion comes from."""
        return ephemeris().name

    # -- doubts ----------------------------------------------------------------------------------------------

    @cached_property
    def warnings(self) -> tuple[str, ...]:
        """Doubts about the input, in words; those about rows that were left out are not shown."""
        present = set(self.rows.tolist())
        kept = [d.text for d in self.doubts if d.rows is None or present & set(d.rows)]
        return tuple(kept + geometry_doubts(self))

    # -- shown and written -----------------------------------------------------------------------------------

    @cached_property
    def table(self) -> Any:
        """Recorded values as an astropy Table with units, other columns of the input included as text."""
        from astropy import units as u
        from astropy.table import Column, Table

        r = self.records
        sites = [r.sites[k] for k in r.site_index]
        columns: list[Any] = [
            Column(r.row + 1, "row", description="row of the loaded input, from 1"),
            Column(list(r.time_text), "time_utc"),
            Column(r.ra_deg, "ra", unit=u.deg),
            Column(r.dec_deg, "dec", unit=u.deg),
            Column(r.sigma_ra_arcsec, "sigma_ra", unit=u.arcsec, description="RA times cos Dec"),
            Column(r.sigma_dec_arcsec, "sigma_dec", unit=u.arcsec),
            Column(r.corr, "sigma_corr"),
            Column(r.sigma_time_s, "sigma_time", unit=u.s),
            Column([s.code for s in sites], "station"),
            Column([s.lon_deg for s in sites], "lon", unit=u.deg),
            Column([s.lat_deg for s in sites], "lat", unit=u.deg),
            Column([s.height_m for s in sites], "height", unit=u.m),
            Column([d.best for d in r.designations], "object"),
        ]
        if np.isfinite(r.range_km).any():
            columns.append(Column(r.range_km, "range", unit=u.km, description="measured slant range"))
            columns.append(Column(r.sigma_range_km, "sigma_range", unit=u.km))
        taken = {c.name for c in columns}
        for name, texts in r.others:
            shown = name if name not in taken else f"{name} (input)"
            columns.append(Column(list(texts), shown))
        return Table(columns, meta={"center": self.center, "directions": f"{self.directions}, ICRF axes"})

    def to_csv_text(self) -> str:
        """CSV in firstarc's own column names that loads back to exactly the same numbers, what-ifs left out.

        Load it with ``center=`` and ``directions=`` of these observations.
        """
        r = self.records
        sites = [r.sites[k] for k in r.site_index]
        columns: list[tuple[str, list[str]]] = [
            ("time_utc", list(r.time_text)),
            ("ra_deg", [repr(float(v)) for v in r.ra_deg]),
            ("dec_deg", [repr(float(v)) for v in r.dec_deg]),
            ("sigma_ra_arcsec", [repr(float(v)) for v in r.sigma_ra_arcsec]),
            ("sigma_dec_arcsec", [repr(float(v)) for v in r.sigma_dec_arcsec]),
            ("sigma_corr", [repr(float(v)) if v else "" for v in r.corr]),
            ("sigma_time_s", [repr(float(v)) if v else "" for v in r.sigma_time_s]),
            ("range_km", ["" if np.isnan(v) else repr(float(v)) for v in r.range_km]),
            ("sigma_range_km", ["" if np.isnan(v) else repr(float(v)) for v in r.sigma_range_km]),
            ("station", [s.code for s in sites]),
            ("lon_deg", [repr(s.lon_deg) for s in sites]),
            ("lat_deg", [repr(s.lat_deg) for s in sites]),
            ("height_m", [repr(s.height_m) for s in sites]),
            ("station_name", [s.name for s in sites]),
            ("object", [d.best for d in r.designations]),
        ]
        return csv_text([(n, texts) for n, texts in columns if any(texts)])

    def report_lines(self) -> list:
        n = len(self)
        center = {"earth": "Earth", "sun": "Sun"}[self.center]
        name = self.object_name
        head = f"{n} observation{'s' if n != 1 else ''}" + (f" of {name}" if name else "") + f", center {center}"
        span = ""
        if n > 1:
            order = np.argsort((self.records.tai1 - self.records.tai1[0]) + self.records.tai2)
            first, last = self.utc_iso(int(order[0]), 0), self.utc_iso(int(order[-1]), 0)
            span = f" From {first} to {last}."
        origin = self.source.path or "memory"
        out: list = [
            head,
            f"Center: {self.center_reason}.{span} Directions {self.directions}, ICRF axes; times UTC. "
            f"Source: {origin} ({self.source.format}).",
        ]
        digits = degree_digits(float(min(self.records.sigma_ra_arcsec.min(), self.records.sigma_dec_arcsec.min())))
        rows = [["row", "time (UTC)", "RA (°)", "Dec (°)", "σ RA cos Dec (″)", "σ Dec (″)", "station"]]
        shown = range(n) if n <= 40 else [*range(20), *range(n - 20, n)]
        for i in shown:
            o = self._observation(i)
            rows.append(
                [str(o.row + 1), o.time_utc, f"{o.ra_deg:.{digits}f}", f"{o.dec_deg:+.{digits}f}",
                 f"{o.sigma_ra_arcsec:.2g}", f"{o.sigma_dec_arcsec:.2g}", o.station]
            )  # fmt: skip
        out.append(rows)
        if n > 40:
            out.append(f"{n - 40} rows between are not shown.")
        if self.what_if:
            out.append("What-if in force, not part of the recorded values: " + ", ".join(map(repr, self.what_if)))
        out += [f"Warning: {w}" for w in self.warnings]
        return out

    # -- equality and pickling -------------------------------------------------------------------------------

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Observations):
            return NotImplemented
        mine = [getattr(self, f.name) for f in fields(self) if f.name != "records"]
        theirs = [getattr(other, f.name) for f in fields(other) if f.name != "records"]
        return mine == theirs and self.records.same_as(other.records)

    def __hash__(self) -> int:
        return hash((self.source, self.center, self.directions, self.what_if, self.records.row.tobytes()))

    def __getstate__(self) -> dict[str, Any]:
        return {f.name: getattr(self, f.name) for f in fields(self)}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)


class _OutOfRange(UsageError, IndexError):
    """Also an IndexError, as Python's sequence protocol expects."""
