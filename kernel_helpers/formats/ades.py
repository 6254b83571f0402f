"""ADES in its pipe-separated form (PSV), the IAU's exchange standard for astrometry.

Source: *A Concise Description of the Astrometry Data Exchange Standard*, version of 2 May 2024.
"""

from __future__ import annotations

import re

from firstarc.errors import Problem
from firstarc.formats.plain import PlainInput, PlainRow, shortened

FORMAT = "ADES PSV"

#: Words of the location group: only for roving and space-based stations.
LOCATION = ("sys", "ctr", "pos1", "pos2", "pos3")

#: Line ends of files only: other separators of Unicode may stand inside a remark.
_LINE_END = re.compile(r"\r\n|\r|\n")
_NAME = re.compile(r"[a-z][A-Za-z0-9]*", re.ASCII)

#: Names a keyword record may hold that say what the row is about, never free text.
_TELLING = frozenset({"permID", "provID", "artSat", "trkSub", "obsTime", "stn", "ra", "mode", "obsID"})


def looks_like_keyword_record(line: str) -> bool:
    """True for a line of pipe-separated field names that begin with a lower-case letter."""
    cells = _cells(line)
    return len(cells) > 1 and bool(_TELLING & set(cells)) and all(c == "" or _NAME.fullmatch(c) for c in cells)


def _cells(line: str) -> list[str]:
    return [c.strip() for c in line.split("|")]


def read_psv(text: str) -> tuple[PlainInput, list[Problem]]:
    """Split ADES PSV into rows of cells.

    A file may hold several blocks and several keyword records; every row is read under the keyword record
    above it. Context lines (``#`` and ``!``) are kept. Radar, offset and occultation rows carry no direction
    of their own and are set aside with a note that counts them.

    Parameters
    ----------
    text : str

    Returns
    -------
    PlainInput, list of Problem
        Problems are rows that do not fit their keyword record; all are listed.
    """
    names: list[str] | None = None
    rows: list[PlainRow] = []
    header: list[str] = []
    columns: dict[str, None] = {}
    problems: list[Problem] = []
    aside: dict[str, list[int]] = {}
    for number, line in enumerate(_LINE_END.split(text), start=1):
        stripped = line.strip()
        if not stripped:
            continue
        if stripped[0] in "#!":
            header.append(stripped)
            if re.match(r"#\s*observatory\b", stripped):
                names = None
            continue
        if looks_like_keyword_record(line):
            names = _trimmed(_cells(line))
            problems += _keyword_problems(names, number)
            columns.update(dict.fromkeys(n for n in names if n))
            continue
        if names is None:
            problems.append(
                Problem(
                    f"line {number}",
                    shortened(line),
                    "stands before any keyword record",
                    "Put the line of field names (trkSub|mode|stn|obsTime|ra|dec|...) above the first observation",
                )
            )
            continue
        cells = _cells(line)
        extra = [c for c in cells[len(names) :] if c]
        if extra or (len(cells) < len(names) and len(cells) == 1):
            problems.append(
                Problem(
                    f"line {number}",
                    shortened(line),
                    f"has {len(cells)} cells where its keyword record names {len(names)} fields",
                    "Give every field its own cell between | signs, empty where there is no value",
                )
            )
            continue
        named = {n: c for n, c in zip(names, cells, strict=False) if n and c}
        kind = _kind(named)
        if kind:
            aside.setdefault(kind, []).append(number)
            continue
        rows.append(PlainRow(f"line {number}", named))
    notes = [_aside_note(kind, numbers) for kind, numbers in aside.items()]
    return PlainInput(FORMAT, True, tuple(rows), tuple(header), tuple(columns), tuple(notes)), problems


def _trimmed(names: list[str]) -> list[str]:
    while names and names[-1] == "":
        names.pop()
    return names


def _keyword_problems(names: list[str], number: int) -> list[Problem]:
    twice = sorted({n for n in names if n and names.count(n) > 1})
    return [
        Problem(f"line {number}, field {n}", n, "is named twice in one keyword record", "Name each field once")
        for n in twice
    ]


def _kind(cells: dict[str, str]) -> str | None:
    """Kind of a row that is not an optical direction, or None; told from the filled fields."""
    if "raStar" in cells or "decStar" in cells:
        return "occultation"
    if "obsCenter" in cells:
        return "offset"
    if "delay" in cells or "doppler" in cells:
        return "radar"
    return None


def _aside_note(kind: str, numbers: list[int]) -> str:
    shown = ", ".join(map(str, numbers[:6])) + (", …" if len(numbers) > 6 else "")
    count = len(numbers)
    return (
        f"{count} {kind} observation{'s' if count != 1 else ''} set aside (line{'s' if count != 1 else ''} "
        f"{shown}): only optical directions are used"
    )
