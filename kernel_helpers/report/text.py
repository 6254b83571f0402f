"""Reports as plain text."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any


def as_text(lines: Sequence[Any]) -> str:
    """Paragraphs and tables as text. A table is a list of rows; its first row is the head.

    Numbers are set flush right; a column is taken as numbers when every cell below the head has a digit.
    """
    return "\n".join(_table(item) if isinstance(item, list) else str(item) for item in lines)


def numeric_columns(rows: Sequence[Sequence[str]]) -> list[bool]:
    return [
        all(any(ch.isdigit() for ch in cell) or cell in ("", "–", "·") for cell in column[1:])
        for column in zip(*rows, strict=True)
    ]


def _table(rows: Sequence[Sequence[str]]) -> str:
    rows = [[str(cell) for cell in row] for row in rows]
    right = numeric_columns(rows)
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return "\n".join(
        "  "
        + "  ".join(
            cell.rjust(width) if flush else cell.ljust(width)
            for cell, width, flush in zip(row, widths, right, strict=True)
        ).rstrip()
        for row in rows
    )
