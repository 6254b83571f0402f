"""UTC, TAI, TT, UT1 and TDB as two-part Julian dates, and UTC as text.

Inside firstarc an instant is a two-part TAI Julian date: the sum of two floats, whose second part
stays below one day, so that a step of 1e-11 s is kept. UTC appears only as text: a UTC count
of days is not uniform where a leap second falls. The conversions are those of ERFA (IAU SOFA).
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from erfa import ufunc as _erfa
from numpy.typing import NDArray

from firstarc.border.quarter_day import QuarterDay
from firstarc.constants import DAY_S

#: TT - TAI, s, exact by definition (IAU 1991 Resolution A4).
TT_MINUS_TAI_S = 32.184

_UTC_TEXT = re.compile(
    r"(\d{4})-(\d{2})-(\d{2})[Tt ](\d{2}):(\d{2}):(\d{2}(?:\.\d*)?)\s*([Zz]|[+-]\d{2}:?\d{2})?", re.ASCII
)
_FORM = "Write it as YYYY-MM-DDThh:mm:ss.sssZ in UTC"


@dataclass(frozen=True)
class Unreadable:
    """Why a text is no UTC instant, and what to do about it."""

    wrong: str
    remedy: str


@dataclass(frozen=True)
class ReadTimes:
    """UTC texts turned into TAI.

    Attributes
    ----------
    tai1, tai2 : ndarray, shape (n,)
        Two-part TAI Julian dates; NaN where the text could not be read.
    problems : dict of int to Unreadable
        By position in the input.
    dubious : ndarray of bool, shape (n,)
        True where UTC has no certain relation to TAI: before 1960, or years after the leap-second
        list that this version of ERFA knows.
    without_z : ndarray of bool, shape (n,)
        True where the text says no time scale.
    """

    tai1: NDArray[np.float64]
    tai2: NDArray[np.float64]
    problems: dict[int, Unreadable]
    dubious: NDArray[np.bool_]
    without_z: NDArray[np.bool_]


def tai_from_utc_text(texts: Sequence[str]) -> ReadTimes:
    """Read UTC texts such as ``2016-12-31T23:59:60.5Z``.

    Parameters
    ----------
    texts : sequence of str
        ISO 8601 calendar form to the second or finer, ``T`` or a blank between, optional ``Z`` or ``+00:00``.
        A second of 60 is read where a leap second was inserted and refused elsewhere.

    Returns
    -------
    ReadTimes
    """
    n = len(texts)
    parts = np.zeros((n, 6))
    parts[:, :3] = 2000, 1, 1
    problems: dict[int, Unreadable] = {}
    without_z = np.zeros(n, bool)
    for place, text in enumerate(texts):
        match = _UTC_TEXT.fullmatch(text.strip())
        if match is None:
            problems[place] = Unreadable("is not a UTC time", _FORM)
            continue
        zone = match[7]
        without_z[place] = zone is None
        if zone is not None and zone not in ("Z", "z") and zone.replace(":", "").replace("-", "+") != "+0000":
            problems[place] = Unreadable(f"is given at an offset of {zone} from UTC", _FORM)
            continue
        parts[place] = [float(p) for p in match.groups()[:6]]
    days = parts[:, :5].astype(np.intc)
    utc1, utc2, status = _erfa.dtf2d(b"UTC", *days.T, parts[:, 5])
    for i in np.flatnonzero((status < 0) | (status > 1)).tolist():
        problems.setdefault(i, _calendar_problem(int(status[i]), texts[i]))
    bad = np.zeros(n, bool)
    bad[list(problems)] = True
    utc1 = np.where(bad, 2451544.5, utc1)
    utc2 = np.where(bad, 0.0, utc2)
    tai1, tai2, _ = _erfa.utctai(utc1, utc2)
    return ReadTimes(
        np.where(bad, np.nan, tai1),
        np.where(bad, np.nan, tai2),
        problems,
        (status == 1) & ~bad,
        without_z & ~bad,
    )


def _calendar_problem(status: int, text: str) -> Unreadable:
    if status > 1:
        return Unreadable(
            "has a second of 60 where no leap second was inserted",
            "Check the time; 23:59:60 exists only at the end of days with a leap second",
        )
    part = {-1: "year", -2: "month", -3: "day", -4: "hour", -5: "minute", -6: "second"}.get(status, "date")
    article = "an" if part == "hour" else "a"
    return Unreadable(f"has {article} {part} that does not exist in the calendar", _FORM)


def utc_text(tai1: NDArray[np.float64], tai2: NDArray[np.float64], decimals: int = 3) -> list[str]:
    """UTC texts ``YYYY-MM-DDThh:mm:ss.sssZ`` of TAI instants, leap seconds written as 60.

    Parameters
    ----------
    tai1, tai2 : array_like, shape (n,)
        Two-part TAI Julian dates.
    decimals : int
        Decimals of the seconds, 0 to 9; rounded, carried into the minute where needed.

    Returns
    -------
    list of str
        ``""`` where an instant is not finite.
    """
    tai1, tai2 = np.broadcast_arrays(np.atleast_1d(np.asarray(tai1, float)), np.asarray(tai2, float))
    decimals = min(max(int(decimals), 0), 9)
    finite = np.isfinite(tai1) & np.isfinite(tai2)
    utc1, utc2, _ = _erfa.taiutc(np.where(finite, tai1, 2451544.5), np.where(finite, tai2, 0.0))
    year, month, day, clock, _ = _erfa.d2dtf(b"UTC", decimals, utc1, utc2)
    out = []
    for row in zip(finite, year, month, day, clock, strict=True):
        ok, y, m, d, c = row
        fraction = f".{c['f']:0{decimals}d}" if decimals else ""
        out.append(f"{y:04d}-{m:02d}-{d:02d}T{c['h']:02d}:{c['m']:02d}:{c['s']:02d}{fraction}Z" if ok else "")
    return out


def tt_from_tai(
    tai1: NDArray[np.float64], tai2: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Two-part TT Julian dates of two-part TAI Julian dates."""
    return tai1, tai2 + TT_MINUS_TAI_S / DAY_S


def _tdb_series(tt1: NDArray[np.float64], tt2: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(_erfa.dtdb(tt1, tt2, 0.0, 0.0, 0.0, 0.0))[:, None]


_tdb_minus_tt = QuarterDay(_tdb_series)


def tdb_minus_tt_s(tt1: NDArray[np.float64], tt2: NDArray[np.float64]) -> NDArray[np.float64]:
    """TDB - TT at the geocentre in seconds, shape (n,), of two-part TT or TDB.

    Fairhead and Bretagnon 1990, as in ERFA ``dtdb``, interpolated within 1e-10 s. The terms that depend on
    the place on the Earth, 2 us, are left out: a LEO object moves 2 cm in that time.
    """
    return _tdb_minus_tt(tt1, tt2)[:, 0]


def tai_from_tdb(
    tdb1: NDArray[np.float64], tdb2: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Two-part TAI of geocentric two-part TDB. The difference TDB - TT moves by less than 4e-10 s per s."""
    tdb1, tdb2 = np.broadcast_arrays(np.asarray(tdb1, float), np.asarray(tdb2, float))
    offset_s = tdb_minus_tt_s(tdb1, tdb2) + TT_MINUS_TAI_S
    return tdb1, tdb2 - offset_s / DAY_S


def utc_text_from_tdb(tdb1: NDArray[np.float64], tdb2: NDArray[np.float64], decimals: int = 3) -> list[str]:
    """UTC texts of two-part TDB instants; see :func:`utc_text`."""
    return utc_text(*tai_from_tdb(np.atleast_1d(tdb1), np.asarray(tdb2, float)), decimals)
