"""Reports as HTML: the same paragraphs and tables as the text, every text escaped."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from ..results import escaped
from .text import numeric_columns

_CELL = "padding:1px 8px;white-space:nowrap;text-align:"


def as_html(lines: Sequence[Any]) -> str:
    """Paragraphs and tables as an HTML fragment without scripts or style sheets."""
    body = "".join(
        _table(item) if isinstance(item, list) else f"<p style='margin:0 0 4px'>{escaped(item)}</p>" for item in lines
    )
    return f"<div style='font-variant-numeric:tabular-nums'>{body}</div>"


def _table(rows: Sequence[Sequence[str]]) -> str:
    rows = [[str(cell) for cell in row] for row in rows]
    sides = ["right" if flush else "left" for flush in numeric_columns(rows)]
    head = "".join(
        f"<th scope='col' style='{_CELL}{side}'>{escaped(cell)}</th>" for cell, side in zip(rows[0], sides, strict=True)
    )
    body = "".join(
        "<tr>"
        + "".join(f"<td style='{_CELL}{side}'>{escaped(cell)}</td>" for cell, side in zip(row, sides, strict=True))
        + "</tr>"
        for row in rows[1:]
    )
    return f"<table style='margin:0 0 6px'><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
