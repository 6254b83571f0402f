"""Widths of short texts at 11 px and places for them where they cover nothing."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
TextItem = tuple[str, str, float, float, str, str]

# Advance widths in px at 11 px of the widest common interface face, so that no other face runs over.
_NARROW = {" ": 3.5, "\u2009": 2.2, ".": 3.5, ",": 3.5, ":": 3.7, "i": 3.1, "l": 3.1, "j": 3.1, "(": 4.3,
           ")": 4.3, "′": 2.6, "″": 4.3, "°": 5.5, "ʰ": 4.6, "ᵐ": 7.0, "ˢ": 3.8, "r": 4.5, "t": 4.3, "f": 3.9,
           "·": 3.5}  # fmt: skip
_WIDE = {"m": 10.7, "M": 9.5, "w": 9.0, "W": 10.9, "+": 9.2, "−": 9.2, "×": 9.2}


@lru_cache(maxsize=4096)
def text_width(text: str, strong: bool = False) -> float:
    """Width in px of a text drawn at 11 px, on the safe side."""
    width = sum(_NARROW.get(char) or _WIDE.get(char) or 7.0 for char in text)
    return width * 1.1 if strong else width


@dataclass(frozen=True)
class Spot:
    """A place for a label relative to its point: offsets in px of the text's anchor on its base line."""

    dx: float
    dy: float
    anchor: str


#: Places about a mark of 4 to 5 px, best first.
AROUND = (
    Spot(0.0, -9.0, "middle"), Spot(0.0, 18.0, "middle"), Spot(10.0, 4.0, "start"), Spot(-10.0, 4.0, "end"),
    Spot(8.0, -7.0, "start"), Spot(-8.0, -7.0, "end"), Spot(8.0, 15.0, "start"), Spot(-8.0, 15.0, "end"),
    Spot(0.0, -17.0, "middle"), Spot(0.0, 27.0, "middle"), Spot(18.0, 4.0, "start"), Spot(-18.0, 4.0, "end"),
)  # fmt: skip


@dataclass(frozen=True)
class Wanted:
    """A label looking for its place. ``must`` labels are drawn even where every place covers something."""

    text: str
    x: float
    y: float
    strong: bool = False
    must: bool = False
    spots: tuple[Spot, ...] = AROUND


class Layout:
    """Places labels one after the other, each where it covers the least of what is drawn already.

    Parameters
    ----------
    box : tuple of float
        x0, y0, x1, y1 within which every label stays.
    points : array (m, 2)
        Points to be left free: marks, and points along lines.
    """

    def __init__(self, box: tuple[float, float, float, float], points: Array):
        self._box = box
        self._points = points
        self._taken: list[tuple[float, float, float, float]] = []

    def reserve(self, x0: float, y0: float, x1: float, y1: float) -> None:
        """Keep a rectangle free of labels."""
        self._taken.append((x0, y0, x1, y1))

    def place(self, wanted: list[Wanted]) -> list[TextItem]:
        """Text items of the labels that found a place, in the order given."""
        if not wanted:
            return []
        rects, owners = self._rectangles(wanted)
        covered = self._points_covered(rects)
        x0, y0, x1, y1 = self._box
        outside = (rects[:, 0] < x0) | (rects[:, 1] < y0) | (rects[:, 2] > x1) | (rects[:, 3] > y1)
        order = np.argsort(owners, kind="stable")
        bounds = np.searchsorted(owners[order], np.arange(len(wanted) + 1))
        rows, cost, out_of_box = rects.tolist(), covered.tolist(), outside.tolist()
        items: list[TextItem] = []
        for number, label in enumerate(wanted):
            best, best_cost, best_spot = None, 1e9, None
            for spot_index, k in enumerate(range(bounds[number], bounds[number + 1])):
                if out_of_box[k]:
                    continue
                rect = rows[k]
                total = cost[k] + 0.1 * spot_index
                for other in self._taken:
                    if rect[0] < other[2] and rect[2] > other[0] and rect[1] < other[3] and rect[3] > other[1]:
                        total += 60.0
                        if total > best_cost:
                            break
                if total < best_cost:
                    best, best_cost, best_spot = rect, total, label.spots[spot_index]
                    if total < 1.0:
                        break
            if best is None or best_spot is None or (best_cost >= 6.0 and not label.must):
                continue
            self._taken.append((best[0], best[1], best[2], best[3]))
            css = "t strong" if label.strong else "t"
            x, y = round(label.x + best_spot.dx, 1), round(label.y + best_spot.dy, 1)
            items.append(("text", css, x, y, best_spot.anchor, label.text))
        return items

    def _rectangles(self, wanted: list[Wanted]) -> tuple[Array, NDArray[np.int64]]:
        rects: list[tuple[float, float, float, float]] = []
        owners: list[int] = []
        for number, label in enumerate(wanted):
            width = text_width(label.text, label.strong)
            for spot in label.spots:
                left = (
                    label.x
                    + spot.dx
                    - (0.0 if spot.anchor == "start" else width if spot.anchor == "end" else width / 2)
                )
                base = label.y + spot.dy
                rects.append((left, base - 9.0, left + width, base + 2.5))
                owners.append(number)
        return np.array(rects), np.array(owners, dtype=np.int64)

    def _points_covered(self, rects: Array) -> Array:
        if not len(self._points):
            return np.zeros(len(rects))
        r = rects.astype(np.float32)
        x, y = self._points[:, 0].astype(np.float32), self._points[:, 1].astype(np.float32)
        inside = (x > r[:, :1] - 1) & (x < r[:, 2:3] + 1) & (y > r[:, 1:2] - 1) & (y < r[:, 3:4] + 1)
        return np.asarray(inside.sum(axis=1), dtype=float)
