"""``load``: observations from a file or a table."""

from __future__ import annotations

import difflib
import hashlib
import os
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from firstarc.border.timescales import TT_MINUS_TAI_S
from firstarc.errors import InputError, Problem, UsageError
from firstarc.formats import ades, tables
from firstarc.formats.plain import PlainInput, shortened
from firstarc.formats.recognition import ADES_PSV, CSV, ECSV, NOT_READ, recognise
from firstarc.observing.center import decide
from firstarc.observing.doubts import object_doubts, order_doubts, time_doubts
from firstarc.observing.observation import Source
from firstarc.observing.observations import Observations
from firstarc.observing.reading import Reader
from firstarc.observing.records import Doubt, Records
from firstarc.observing.stations import Site, own_sites

_DIRECTIONS = ("astrometric", "apparent", "geometric")


def load(
    source: Any,
    center: str | None = None,
    stations: Mapping[str, Any] | None = None,
    directions: str = "astrometric",
) -> Observations:
    """Load the observations of one object.

    Parameters
    ----------
    source : path, text file object, pandas DataFrame or astropy Table
        A file in ADES PSV, CSV or ECSV (found from its content), or a table in memory. The column names and
        their units are listed in :mod:`firstarc.observing.columns`. Times are UTC; a second of 60 is
        read where a leap second was inserted.
    center : {"earth", "sun"}, optional
        What the object goes round. Decided from designations and the rate of motion when not given; the
        reason is ``obs.center_reason``.
    stations : mapping, optional
        The caller's own stations: code to ``dict(lon_deg=, lat_deg=, height_m=, name=)`` (east longitude and
        geodetic latitude on WGS 84, height above its ellipsoid) or :class:`firstarc.Site`. They win over MPC
        codes.
    directions : {"astrometric", "apparent", "geometric"}
        What RA and Dec are, always on ICRF axes. Astrometric (the default, as in ADES): light time in, no
        aberration. Apparent: annual and diurnal aberration are taken out here, gravitational deflection is
        not. Geometric: from the station to the object at the same instant, no light time.

    Returns
    -------
    Observations
        Doubts are kept on ``obs.warnings``.

    Raises
    ------
    InputError
        The input cannot be read; every problem is listed with its line, field, text and remedy.
    UsageError
        An argument cannot be used.
    """
    if directions not in _DIRECTIONS:
        raise UsageError(f"directions={directions!r}: give one of {', '.join(map(repr, _DIRECTIONS))}")
    own = own_sites(stations)
    plain, problems, origin = _plain(source)
    label = origin.path or f"<{origin.format}>"
    return _observations(plain, problems, origin, label, center, own, directions)


def _observations(
    plain: PlainInput,
    problems: list[Problem],
    origin: Source,
    label: str,
    center: str | None,
    own: Mapping[str, Site],
    directions: str,
) -> Observations:
    reader = Reader(plain, own)
    records = reader.read()
    problems = sorted(problems + reader.problems, key=_place)
    if problems or records is None:
        raise InputError(label, problems)
    word, reason, doubts = decide(records, center)
    doubts = [
        *reader.doubts,
        *doubts,
        *order_doubts(records),
        *object_doubts(records),
        *time_doubts(records),
    ]
    if directions == "apparent":
        doubts.append(Doubt("apparent directions: aberration taken out, gravitational deflection left in"))
    origin = replace(origin, count=len(records), stations=tuple(own.values()))
    return Observations(records, word, reason, origin, directions, _epoch_tdb(records), (), tuple(doubts))


def _epoch_tdb(records: Records) -> tuple[float, float]:
    """Midnight TDB before the first observation: one float, exact, and near enough for 1e-11 s."""
    jd = records.tai1 + records.tai2 + TT_MINUS_TAI_S / 86400.0
    return float(np.floor(jd.min() - 0.5) + 0.5), 0.0


# -- from the source to plain rows
# -------------------------------------------------------------------------------


def _plain(source: Any) -> tuple[PlainInput, list[Problem], Source]:
    module = type(source).__module__.partition(".")[0]
    if module == "pandas" and type(source).__name__ == "DataFrame":
        return _from_memory(*tables.from_dataframe(source))
    if hasattr(source, "colnames") and hasattr(source, "meta"):
        return _from_memory(*tables.from_astropy_table(source))
    if isinstance(source, (str, os.PathLike)):
        path = os.fspath(source)
        return _from_bytes(_bytes_of(path), str(path))
    if hasattr(source, "read"):
        content = source.read()
        name = getattr(source, "name", None)
        raw = content if isinstance(content, bytes) else str(content).encode("utf-8", "surrogatepass")
        return _from_bytes(raw, name if isinstance(name, str) else None)
    raise UsageError(
        f"source of type {type(source).__name__}: give a path, a text file object, a pandas DataFrame or an "
        "astropy Table"
    )


def _from_memory(plain: PlainInput, problems: list[Problem]) -> tuple[PlainInput, list[Problem], Source]:
    digest = hashlib.sha256(tables.canonical_csv(plain).encode("utf-8", "surrogatepass")).hexdigest()
    return plain, problems, Source(None, plain.format, digest)


def _bytes_of(path: str) -> bytes:
    if "\n" in path:
        raise UsageError("source: a text of several lines is not a path; hand it over as io.StringIO(text)")
    try:
        return Path(path).read_bytes()
    except (OSError, ValueError) as error:
        near: list[str] = []
        folder = os.path.dirname(path) or "."
        if isinstance(error, FileNotFoundError) and os.path.isdir(folder):
            near = difflib.get_close_matches(os.path.basename(path), os.listdir(folder), 3, 0.6)
        remedy = f"Near matches in its folder: {', '.join(near)}" if near else "Check the path"
        words = getattr(error, "strerror", None) or str(error)
        raise InputError(path, [Problem("file", "", f"cannot be opened ({words.lower()})", remedy)]) from error


def _from_bytes(raw: bytes, path: str | None) -> tuple[PlainInput, list[Problem], Source]:
    digest = hashlib.sha256(raw).hexdigest()
    label = path or "<text>"
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        problem = Problem(
            f"line {line}",
            repr(raw[error.start : error.start + 4])[2:-1],
            "is not UTF-8 text",
            "Save the file as UTF-8",
        )
        raise InputError(label, [problem]) from None
    format = recognise(text)
    if format == ADES_PSV:
        plain, problems = ades.read_psv(text)
    elif format == CSV:
        plain, problems = tables.read_csv(text)
    elif format == ECSV:
        plain, problems = tables.read_ecsv(text)
    else:
        raise InputError(label, [_unread(format, text)])
    return plain, problems, Source(path, plain.format, digest, plain.header)


def _unread(format: str | None, text: str) -> Problem:
    if format is not None:
        return Problem("whole file", "", f"is in a format that is not read here ({format})", NOT_READ[format])
    first = next((line for line in text.splitlines() if line.strip()), "")
    wrong = "is in no format that is known" if first else "is empty"
    return Problem(
        "line 1" if first else "whole file", shortened(first), wrong,
        "Give ADES PSV (first line '# version=2022'), or CSV or ECSV whose first line names the columns",
    )  # fmt: skip


def _place(problem: Problem) -> tuple[int, int]:
    """Sort key: problems of the whole first, then by line or row."""
    kind, _, rest = problem.where.partition(" ")
    digits = rest.split(",")[0].split(" ")[0]
    return (1, int(digits)) if kind in ("line", "row") and digits.isdigit() else (0, 0)
