"""How the miss of the three sight lines fell from step to step."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from firstarc.widgets.figures.axes import power_of_ten
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.labels import text_width

Item = tuple[Any, ...]

_HEIGHT, _TOP, _BOTTOM = 46.0, 14.0, 38.0
#: A miss below this cannot be told from zero in double precision, arcsec.
_FLOOR_ARCSEC = 1e-10


def convergence(
    steps: Sequence[tuple[str, float]], sigma_arcsec: float, *, frame: FrameWriter, width: float = 226.0
) -> dict[str, Any]:
    """Draw the miss at each step on a log scale, with the stated standard deviation dashed.

    Parameters
    ----------
    steps : sequence of (str, float)
        What the step is (``"Gauss estimate"``, ``"step 1"``...) and its miss of the sight lines, arcsec.
    sigma_arcsec : float
        Standard deviation of the observations, arcsec.
    frame : FrameWriter
    width : float
        Width, px.

    Returns
    -------
    dict
        A flat figure.
    """
    shown = [(name, miss) for name, miss in steps if math.isfinite(miss)]
    items: list[Item] = []
    said = ", ".join(f"{name} {_spoken(miss)}" for name, miss in shown)
    figure = {
        "width": width,
        "height": _HEIGHT,
        "label": f"Convergence: miss of the three sight lines in arcsec: {said}."
        if shown
        else "Convergence: no steps.",
        "caption": "Convergence",
        "note": "",
        "items": items,
    }
    if not shown:
        return figure
    logs = [math.log10(max(miss, _FLOOR_ARCSEC)) for _, miss in shown]
    sigma = math.log10(sigma_arcsec) if sigma_arcsec > 0 else None
    high = max([*logs, 0.0 if sigma is None else sigma + 0.5])
    low = min([*logs, 0.0 if sigma is None else sigma - 0.5])
    px = (_BOTTOM - _TOP) / max(high - low, 1.0)
    x0, x1 = 24.0, width - 48.0
    x = [x0 + (x1 - x0) * i / max(len(shown) - 1, 1) for i in range(len(shown))]
    y = [_TOP + (high - value) * px for value in logs]
    if sigma is not None:
        at = round(_TOP + (high - sigma) * px, 1)
        items.append(("seg", "gl", 16.0, at, x1 + 8.0, at))
        items.append(("text", "t", 13.0, at + 4.0, "end", "σ"))
    if len(shown) > 1:
        items.append(frame.line("cv now thin", np.column_stack([x, y])))
    taken: list[tuple[float, float, float, float]] = []
    if sigma is not None:
        taken.append((3.0, at - 5.0, 15.0, at + 6.0))
    texts: list[Item] = []
    order = sorted(range(len(shown)), key=lambda i: (i not in (0, len(shown) - 1), i))
    for i in order:
        text = _short(shown[i][1])
        w = text_width(text)
        falling_to = i + 1 < len(shown)
        above = (x[i] + 5.0, y[i] - 3.0, "start") if falling_to else (x[i] + 6.0, y[i] + 4.0, "start")
        below = (x[i] - 4.0, y[i] + 12.0, "end")
        spots = (above, below) if shown[i][1] >= 1e-3 or not falling_to else (below, above)
        for tx, base, anchor in spots:
            base = min(max(base, 9.0), _HEIGHT - 1.0)
            left = tx if anchor == "start" else tx - w
            box = (left, base - 8.5, left + w, base + 1.0)
            on_mark = any(box[0] < px_ + 3 and box[2] > px_ - 3 and box[1] < py + 3 and box[3] > py - 3
                          for k, (px_, py) in enumerate(zip(x, y, strict=True)) if k != i)  # fmt: skip
            if (
                on_mark
                or left < 0
                or box[2] > width
                or any(box[0] < t[2] and box[2] > t[0] and box[1] < t[3] and box[3] > t[1] for t in taken)
            ):
                continue
            taken.append(box)
            texts.append(("text", "t", round(tx, 1), round(base, 1), anchor, text))
            break
    for i, (name, miss) in enumerate(shown):
        items.append(("mark", "mk now u", "circle", round(x[i], 1), round(y[i], 1), 2.4, f"{name}: {_spoken(miss)}″"))
    items += texts
    return figure


def _short(miss: float) -> str:
    """A miss in arcsec as briefly as it can be said."""
    if miss >= 1e5:
        return power_of_ten(miss)
    if miss >= 99.5:
        return f"{miss:.0f}"
    if miss >= 0.0095:
        return f"{miss:.2g}"
    return power_of_ten(miss) if miss > _FLOOR_ARCSEC / 10 else "0"


def _spoken(miss: float) -> str:
    return f"{miss:.1f}" if miss >= 10 else f"{miss:.2g}"
