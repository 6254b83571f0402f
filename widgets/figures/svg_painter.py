"""Paints figures as SVG text, for the picture kept in the cell; the browser's painter draws the same."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firstarc.widgets.figures.frame import points_of
from firstarc.widgets.figures.geometry import view_axes
from firstarc.widgets.figures.labels import AROUND, Layout, Wanted
from firstarc.widgets.figures.orbit_space import seen_from
from firstarc.widgets.figures.view_choice import FOOT_PX, extent_px

Array = NDArray[np.float64]

_FILLED = {
    "triangle": ((0.0, -1.25), (1.19, 0.88), (-1.19, 0.88)),
    "down": ((0.0, 1.25), (-1.19, -0.88), (1.19, -0.88)),
    "square": ((-0.9, -0.9), (0.9, -0.9), (0.9, 0.9), (-0.9, 0.9)),
    "diamond": ((0.0, -1.25), (1.25, 0.0), (0.0, 1.25), (-1.25, 0.0)),
    "plus": ((-0.4, -1.15), (0.4, -1.15), (0.4, -0.4), (1.15, -0.4), (1.15, 0.4), (0.4, 0.4), (0.4, 1.15),
             (-0.4, 1.15), (-0.4, 0.4), (-1.15, 0.4), (-1.15, -0.4), (-0.4, -0.4)),
}  # fmt: skip
_STROKES = {
    "cross": (((-1.0, 0.0), (1.0, 0.0)), ((0.0, -1.0), (0.0, 1.0))),
    "x": (((-1.0, -1.0), (1.0, 1.0)), ((1.0, -1.0), (-1.0, 1.0))),
}


def figure_svg(figure: dict[str, Any], frame: bytes) -> str:
    """A flat figure as an ``<svg>`` element of true size."""
    parts = [_item(item, frame) for item in figure["items"]]
    return _svg(figure, figure["label"], parts)


def space_svg(figure: dict[str, Any], frame: bytes) -> str:
    """A figure in space, seen from its default direction, as an ``<svg>`` element."""
    width, height = figure["width"], figure["height"]
    scene = _Projected(figure, frame)
    front: list[str] = []
    back: list[str] = []
    for css_class, points in scene.polylines():
        for runs, out in zip(cut_at_body(points), (front, back), strict=True):
            if runs:
                out.append(_path(f"{css_class} ln", runs))
    wanted: list[Wanted] = []
    center = scene.point((0.0, 0.0, 0.0))
    busy: list[Array] = [points[:: max(1, len(points) // 60), :2] for _, points in scene.polylines()]
    for mark in figure["marks"]:
        x, y, depth = scene.point(mark["p"])
        (front if depth >= 0 else back).append(_mark(mark["cls"], mark["shape"], x, y, mark["r"], mark["title"]))
        busy.append(np.repeat([[x, y]], 8, axis=0))
        hidden = depth < 0 and np.hypot(x - center[0], y - center[1]) < figure["body_radius"] * scene.k
        if mark["text"] and not hidden:
            strong = "tick" not in mark["cls"]
            wanted.append(Wanted(mark["text"], x, y, strong=strong, must=strong, spots=_AT_MARK))
    for label in figure["labels"]:
        x, y, _ = scene.point(label["p"])
        strong = "strong" in label["cls"]
        wanted.append(Wanted(label["text"], x, y, strong=strong, must=strong))
    x, y, _ = center
    radius = figure["body_radius"] * scene.k
    if radius < 1.0:
        body = _mark("tick", "cross", x, y, 4.0, "")
    else:
        body = f'<circle class="earth" cx="{x:.1f}" cy="{y:.1f}" r="{radius:.1f}"/>'
    layout = Layout((2.0, 0.0, width - 2.0, height - FOOT_PX + 4.0), np.vstack(busy) if busy else np.zeros((0, 2)))
    texts = layout.place(sorted(wanted, key=lambda label: not label.strong))
    foot = _foot(figure, scene.k)
    label = f"{figure['label']} It is {seen_from(figure['view'])}."
    return _svg(figure, label, [*back, body, *front, *(_item(item, frame) for item in texts), *foot])


#: Row numbers and apses stand beside their mark rather than above it.
_AT_MARK = (AROUND[2], AROUND[3], *AROUND[4:8], AROUND[0], AROUND[1], *AROUND[8:])


class _Projected:
    """The default orthographic view of a figure in space, in px; depth grows towards the viewer."""

    def __init__(self, figure: dict[str, Any], frame: bytes):
        self._figure, self._frame = figure, frame
        width, height = figure["width"], figure["height"]
        self.k = extent_px(width, height) / (figure["extent"] or 1.0)
        self._axes = view_axes(figure["view"]["ra_deg"], figure["view"]["dec_deg"])
        middle = self._axes @ np.asarray(figure["middle"], dtype=float)
        # The middle is taken out on the picture only: depth is counted from the body's centre.
        self._shift = np.array([width / 2 - self.k * middle[0], (height - FOOT_PX) / 2 + self.k * middle[1], 0.0])

    def points(self, points: Any) -> Array:
        seen = np.asarray(points, dtype=float) @ self._axes.T * self.k
        return np.asarray(seen * np.array([1.0, -1.0, 1.0]) + self._shift)

    def point(self, p: Any) -> tuple[float, float, float]:
        x, y, depth = self.points(p).tolist()
        return x, y, depth

    def polylines(self) -> list[tuple[str, Array]]:
        out = [
            (line["cls"], self.points(points_of(self._frame, line["offset"], line["points"], 3)))
            for line in self._figure["lines"]
        ]
        return out + [(seg["cls"], self.points([seg["a"], seg["b"]])) for seg in self._figure["segs"]]


def cut_at_body(points: Array) -> tuple[list[Array], list[Array]]:
    """Pieces (x, y) of a projected polyline (m, 3) before and behind the plane through the body's centre.

    What lies behind that plane is painted before the body's disc, and so hidden by it.
    """
    if len(points) < 2:
        return [], []
    depth = points[:, 2]
    crossing = np.flatnonzero((depth[:-1] >= 0) != (depth[1:] >= 0))
    pieces: tuple[list[Array], list[Array]] = ([], [])
    start: Array = points[:1, :2]
    begin = 0
    for i in crossing.tolist():
        share = depth[i] / (depth[i] - depth[i + 1])
        cut = (points[i] + share * (points[i + 1] - points[i]))[None, :2]
        pieces[0 if depth[i] >= 0 else 1].append(np.vstack([start, points[begin + 1 : i + 1, :2], cut]))
        start, begin = cut, i
    pieces[0 if depth[-1] >= 0 else 1].append(np.vstack([start, points[begin + 1 :, :2]]))
    return pieces


def _foot(figure: dict[str, Any], k: float) -> list[str]:
    """Scale bar at the left, the direction of view at the right."""
    y = figure["height"] - 10.0
    x1, x2 = 12.0, 12.0 + figure["scale"]["length"] * k
    return [
        _line("ax", x1, y, x2, y),
        _line("ax", x1, y - 3, x1, y + 3),
        _line("ax", x2, y - 3, x2, y + 3),
        _text("t", x2 + 6, y + 4, "start", figure["scale"]["text"]),
        _text("t", figure["width"] - 6.0, y + 4, "end", seen_from(figure["view"])),
    ]


def _svg(figure: dict[str, Any], label: str, parts: Iterable[str]) -> str:
    width, height = figure["width"], figure["height"]
    return (
        f'<svg class="fig" xmlns="http://www.w3.org/2000/svg" width="{width:g}" height="{height:g}" '
        f'viewBox="0 0 {width:g} {height:g}" role="img" aria-label="{escape(label)}">' + "".join(parts) + "</svg>"
    )


def _item(item: Any, frame: bytes) -> str:
    kind, css_class, *rest = item
    if kind == "line":
        offset, count = rest
        return _path(f"{css_class} ln", [points_of(frame, offset, count, 2)])
    if kind == "seg":
        return _line(css_class, *rest)
    if kind == "mark":
        return _mark(css_class, *rest)
    if kind == "text":
        return _text(css_class, *rest)
    if kind == "rect":
        x, y, w, h = rest
        size = f'width="{max(w, 0):g}" height="{max(h, 0):g}"'
        return f'<rect class="{escape(css_class)}" x="{x:g}" y="{y:g}" {size}/>'
    if kind == "circle":
        x, y, r = rest
        return f'<circle class="{escape(css_class)}" cx="{x:g}" cy="{y:g}" r="{r:g}"/>'
    raise ValueError(f"a figure has no items of kind {kind!r}")


def _path(css_class: str, runs: Iterable[Any]) -> str:
    d = "".join("M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in run.tolist()) for run in runs)
    return f'<path class="{escape(css_class)}" d="{d}"/>'


def _line(css_class: str, x1: float, y1: float, x2: float, y2: float) -> str:
    return f'<line class="{escape(css_class)}" x1="{x1:.1f}" y1="{y1:.1f}" x2="{x2:.1f}" y2="{y2:.1f}"/>'


def _text(css_class: str, x: float, y: float, anchor: str, text: str) -> str:
    place = f'x="{x:.1f}" y="{y:.1f}" text-anchor="{escape(anchor)}"'
    return f'<text class="{escape(css_class)}" {place}>{escape(text)}</text>'


def _mark(css_class: str, shape: str, x: float, y: float, r: float, title: str) -> str:
    css_class = escape(css_class)
    inner = f"<title>{escape(title)}</title>" if title else ""
    if shape == "circle":
        return f'<circle class="{css_class}" cx="{x:.1f}" cy="{y:.1f}" r="{r:g}">{inner}</circle>'
    if shape in _FILLED:
        d = "M" + "L".join(f"{x + dx * r:.1f} {y + dy * r:.1f}" for dx, dy in _FILLED[shape]) + "Z"
    else:
        d = "".join(
            f"M{x + a[0] * r:.1f} {y + a[1] * r:.1f}L{x + b[0] * r:.1f} {y + b[1] * r:.1f}" for a, b in _STROKES[shape]
        )
    return f'<path class="{css_class}" d="{d}">{inner}</path>'
