"""What every reader hands on: rows of text cells with the place they came from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True)
class PlainRow:
    """One record as text.

    Parameters
    ----------
    where : str
        Place for people, ``"line 12"`` in a file or ``"row 3"`` in a table in memory.
    cells : mapping of str to str
        Field name to text without padding; empty cells are left out.
    """

    where: str
    cells: Mapping[str, str]


@dataclass(frozen=True)
class PlainInput:
    """All records of one input.

    Parameters
    ----------
    format : str
        Name for people, such as ``"ADES PSV"``.
    ades : bool
        The names follow the ADES rules: ra and dec are degrees, obsTime is UTC.
    rows : tuple of PlainRow
    header : tuple of str
        Context and comment lines, kept as read.
    columns : tuple of str
        Every field name that occurs, in order of appearance.
    notes : tuple of str
        Doubts and things set aside while reading.
    """

    format: str
    ades: bool
    rows: tuple[PlainRow, ...]
    header: tuple[str, ...] = ()
    columns: tuple[str, ...] = ()
    notes: tuple[str, ...] = field(default=())


def shortened(text: str, limit: int = 60) -> str:
    """A text that is fit for a message: one line, not longer than ``limit``."""
    flat = " ".join(text.split())
    return flat if len(flat) <= limit else flat[: limit - 1] + "…"
