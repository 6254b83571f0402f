"""Names of the columns that are understood, and the choice of the ones an input uses.

Tables (CSV, ECSV, DataFrame, astropy Table):

=========================  =====================================================================
``time_utc``               UTC, ISO 8601, with or without ``Z``
``ra_deg``                 right ascension, degrees; or ``ra_h``, hours; or ``ra_hms``, ``hh:mm:ss.s``
``dec_deg``                declination, degrees; or ``dec_dms``, ``dd:mm:ss.s``
``sigma_ra_arcsec``        sigma of RA times cos Dec, arcsec; ``sigma_arcsec`` for both coordinates
``sigma_dec_arcsec``       sigma of Dec, arcsec
``sigma_corr``             correlation of the two
``sigma_time_s``           sigma of the time, s
``range_km``               measured slant range (one way, the light path from the object), km; may be empty
``sigma_range_km``         its sigma, km; needed wherever a range is given
``station``                MPC code, or a name from ``stations=``, or the name of a place given in the row
``lon_deg`` ``lat_deg``    east longitude and geodetic latitude of the place, degrees (WGS 84)
``height_m``               height of the place above the ellipsoid, m
``station_name``           name of the place for people
``object``                 designation of the object
=========================  =====================================================================

The ADES names ``obsTime ra dec rmsRA rmsDec rmsCorr rmsTime stn permID provID artSat trkSub mode astCat
sys ctr pos1 pos2 pos3 precTime precRA precDec`` are understood everywhere, with the meaning of the
standard. A plain ``ra`` without ``obsTime`` beside it says no unit and is refused.
"""

from __future__ import annotations

import difflib
from collections.abc import Sequence

from firstarc.errors import Problem

TIME = ("time_utc", "obsTime")
RA = ("ra_deg", "ra_h", "ra_hms")
DEC = ("dec_deg", "dec_dms")
PLACE = ("lon_deg", "lat_deg", "height_m")
# fmt: off
ADES_USED = frozenset((
    "obsTime", "ra", "dec", "rmsRA", "rmsDec", "rmsCorr", "rmsTime", "stn", "permID", "provID", "artSat",
    "trkSub", "mode", "astCat", "sys", "ctr", "pos1", "pos2", "pos3", "precTime", "precRA", "precDec",
))
#: Fields of the ADES standard that say nothing about direction, time or place.
ADES_OTHER = frozenset((
    "obsID", "obsSubID", "trkID", "trkMPC", "prog", "mag", "rmsMag", "band", "fltr", "photCat", "photAp",
    "nucMag", "logSNR", "seeing", "exp", "rmsFit", "nStars", "ref", "disc", "subFrm", "subFmt", "uncTime",
    "notes", "remarks", "localUse", "orbProd", "orbID", "resRA", "resDec", "selAst", "sigRA", "sigDec",
    "sigCorr", "sigTime", "biasRA", "biasDec", "biasTime", "vel1", "vel2", "vel3", "posCov11", "posCov12",
    "posCov13", "posCov22", "posCov23", "posCov33", "resMag", "selPhot", "sigMag", "biasMag", "com", "frq",
    "trx", "rcv", "shapeOcc", "obsCenter", "deltaRA", "deltaDec", "raStar", "decStar", "dist", "pa", "delay",
    "rmsDelay", "doppler", "rmsDoppler",
))
# fmt: on


def ades_named(columns: Sequence[str]) -> bool:
    """True when the names are those of the standard, so that ``ra`` and ``dec`` mean degrees."""
    return "obsTime" in columns


def missing_columns(columns: Sequence[str], standard: bool = False) -> list[Problem]:
    """What an input lacks before any row is looked at; ``standard`` asks for the names of ADES."""
    ades = ades_named(columns)
    problems = []
    if not any(c in columns for c in TIME):
        name = "obsTime" if standard else "time_utc"
        problems.append(_missing("time", name, columns, "UTC times as YYYY-MM-DDThh:mm:ss.sssZ"))
    if not any(c in columns for c in RA) and not ("ra" in columns and (ades or standard)):
        no_unit = None if standard else _no_unit("ra", columns)
        name, form = ("ra", "degrees") if standard else ("ra_deg", "or ra_h or ra_hms")
        problems.append(no_unit or _missing("right ascension", name, columns, form))
    if not any(c in columns for c in DEC) and not ("dec" in columns and (ades or standard)):
        no_unit = None if standard else _no_unit("dec", columns)
        name, form = ("dec", "degrees") if standard else ("dec_deg", "or dec_dms")
        problems.append(no_unit or _missing("declination", name, columns, form))
    if not all(c in columns for c in PLACE) and not any(c in columns for c in ("station", "stn")):
        name, form = (
            ("stn", "MPC codes") if standard else ("station", "or the place itself as lon_deg, lat_deg, height_m")
        )
        problems.append(_missing("station", name, columns, form))
    return problems


def _no_unit(kind: str, columns: Sequence[str]) -> Problem | None:
    names = {"ra": ("ra", "right_ascension", "alpha"), "dec": ("dec", "declination", "delta", "de")}[kind]
    for column in columns:
        if column.casefold() in names:
            choices = "ra_deg (degrees), ra_h (hours) or ra_hms (hh:mm:ss)" if kind == "ra" else (
                "dec_deg (degrees) or dec_dms (dd:mm:ss)"
            )  # fmt: skip
            return Problem(f"column {column}", column, "does not say its unit", f"Name it {choices}")
    return None


def _missing(what: str, name: str, columns: Sequence[str], form: str) -> Problem:
    near = difflib.get_close_matches(name.casefold(), [c.casefold() for c in columns], 1, 0.7)
    hint = ""
    if near:
        found = next(c for c in columns if c.casefold() == near[0])
        hint = f"; is column {found!r} meant?"
    return Problem("columns", ", ".join(columns)[:120], f"hold no {what}", f"Add a column {name}, {form}{hint}")
