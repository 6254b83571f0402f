"""The polynomial of the preliminary orbit against distance, with its positive roots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firstarc.widgets.figures.axes import grouped, linear_ticks, signed_log
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.geometry import clipped

Array = NDArray[np.float64]
Item = tuple[Any, ...]

_TOP, _BOTTOM, _SIDE = 16.0, 22.0, 8.0


@dataclass(frozen=True)
class Root:
    """A positive root: its letter, its distance in the unit of the figure, and what became of it."""

    letter: str
    r: float
    admissible: bool
    chosen: bool = False
    title: str = ""


def root_function(
    r: ArrayLike,
    values: ArrayLike,
    roots: Sequence[Root],
    *,
    unit: str,
    frame: FrameWriter,
    width: float,
    body_radius: float = 0.0,
    center_name: str = "centre",
) -> dict[str, Any]:
    """Draw the root function on a signed log scale.

    Parameters
    ----------
    r : array (m,)
        Distances from the centre, increasing.
    values : array (m,)
        The polynomial there, in any scale.
    roots : sequence of Root
        The positive roots: the chosen one filled, other admissible ones hollow, rejected ones crossed.
    unit : str
        ``"km"`` or ``"au"``, the unit of ``r``.
    frame : FrameWriter
    width : float
        Width, px.
    body_radius : float
        Radius of the central body; distances below it are shaded.
    center_name : str
        What the distance is measured from, for screen readers.

    Returns
    -------
    dict
        A flat figure.
    """
    distances, heights = np.asarray(r, dtype=float), np.asarray(values, dtype=float)
    good = np.isfinite(heights) & np.isfinite(distances)
    distances, heights = distances[good], heights[good]
    height = float(round(min(max(width * 0.46, 100.0), 124.0)))
    x0, x1, top, bottom = _SIDE, width - _SIDE, _TOP, height - _BOTTOM
    items: list[Item] = []
    label = _finding(roots, unit, center_name)
    figure = {
        "width": width,
        "height": height,
        "label": label,
        "caption": "Root function",
        "note": "",
        "items": items,
    }
    if len(distances) < 2:
        items.append(("text", "t", x0, 11.0, "start", "root function: no values"))
        return figure
    low, high = float(distances[0]), float(distances[-1])
    scaled = signed_log(heights, _knee(distances, heights, roots))
    least, most = min(float(scaled.min()), 0.0), max(float(scaled.max()), 0.0)
    # The axis keeps room for the letters above it and for its own name beneath.
    room = bottom - top
    px = room / max(most - least, 1e-12)
    zero = min(max(bottom + least * px, top + 18.0), bottom)
    px = min(
        (zero - top) / most if most > 0 else np.inf,
        (bottom - zero) / -least if least < 0 else np.inf,
    )
    px = px if np.isfinite(px) else 1.0
    x = x0 + (distances - low) * (x1 - x0) / (high - low)
    y = zero - scaled * px
    items.append(("seg", "ax", x0, round(zero, 1), x1, round(zero, 1)))
    power = 1000.0 if unit == "km" and high >= 3000.0 else 1.0
    for value, text in linear_ticks(low / power, high / power, 4):
        at = round(x0 + (value * power - low) * (x1 - x0) / (high - low), 1)
        items.append(("seg", "ax", at, bottom, at, bottom + 4.0))
        if x0 <= at <= x1:
            items.append(("text", "t", at, bottom + 15.0, "middle", text))
    items.append(("seg", "ax0", x0, bottom, x1, bottom))
    name = "r, 1000 km" if power == 1000.0 else f"r, {unit}"
    shade = x0 + (body_radius - low) * (x1 - x0) / (high - low)
    if shade > x0 + 0.5:
        items.append(("rect", "solid", x0, top, round(min(shade, x1) - x0, 1), bottom - top))
    items += frame.lines("cv now", clipped(np.column_stack([x, y]), (x0, top, x1, bottom)))
    # Right of the curve's end beneath the axis is free for a rising polynomial.
    items.append(
        (
            "text",
            "t",
            x1,
            round(min(zero + 14.0, bottom - 4.0) if zero < bottom - 6 else bottom - 5.0, 1),
            "end",
            name,
        )
    )
    items += _root_items(roots, low, high, x0, x1, round(zero, 1))
    title = "root function, signed log scale" if roots else "root function: no positive root"
    items.append(("text", "t", x0, 11.0, "start", title))
    return figure


def _knee(r: Array, values: Array, roots: Sequence[Root]) -> float:
    """Where the scale turns from linear to logarithmic: the smallest hump between neighbouring roots."""
    sizes = np.abs(values)
    largest = float(sizes.max()) or 1.0
    edges = np.searchsorted(r, sorted(root.r for root in roots))
    humps = [float(part.max()) for part in np.split(sizes, edges) if len(part)]
    smallest = min((h for h in humps if h > 0.0), default=largest)
    return float(np.clip(smallest / 2.0, 1e-12 * largest, 0.05 * largest))


def _root_items(roots: Sequence[Root], low: float, high: float, x0: float, x1: float, zero: float) -> list[Item]:
    items: list[Item] = []
    last_letter = -99.0
    for root in sorted(roots, key=lambda root: root.r):
        if not low <= root.r <= high:
            continue
        at = round(x0 + (root.r - low) * (x1 - x0) / (high - low), 1)
        title = root.title or f"root {root.letter}"
        if root.admissible:
            items.append(("mark", "mk now u" if root.chosen else "mk now h", "circle", at, zero, 5, title))
        else:
            items.append(("mark", "xx", "x", at, zero, 4, title))
        letter = max(at, last_letter + 9.0)
        last_letter = letter
        items.append(("text", "t strong", round(letter, 1), zero - 9.0, "middle", root.letter))
    return items


def _finding(roots: Sequence[Root], unit: str, center_name: str) -> str:
    if not roots:
        return f"Root function against distance from the {center_name}: no positive root."
    decimals = 0 if unit == "km" else 4
    said = ", ".join(
        f"{root.letter} at {grouped(root.r, decimals)} {unit}"
        + (", chosen" if root.chosen else "" if root.admissible else ", rejected")
        for root in sorted(roots, key=lambda root: root.r)
    )
    return f"Root function against distance from the {center_name} with its positive roots: {said}."
