"""Observed places on the sky, predicted tracks, and residuals as arrows drawn larger by a stated factor."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firstarc.widgets.figures.axes import grouped, nice_down
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.geometry import clipped
from firstarc.widgets.figures.labels import Layout, Spot, TextItem, Wanted, text_width
from firstarc.widgets.figures.marks import SHAPE_SIGNS, RowMark
from firstarc.widgets.figures.memory import ScaleMemory
from firstarc.widgets.figures.sky_window import SkyWindow

Array = NDArray[np.float64]
Item = tuple[Any, ...]

#: Arrows: longest drawn whole, and the length that a typical residual is to have, px.
_LONGEST, _TYPICAL = 46.0, 20.0


@dataclass(frozen=True)
class Track:
    """Predicted track seen from one station.

    Parameters
    ----------
    station, shape : str
    ra_deg, dec_deg : array (m,)
        Directions, ICRF, degrees, in order of time.
    first, last : int
        Part that spans this station's observations, drawn in full weight: points ``first`` to ``last``.
    """

    station: str
    shape: str
    ra_deg: Array
    dec_deg: Array
    first: int
    last: int


def sky_track(
    rows: Sequence[RowMark],
    ra_dec_deg: ArrayLike,
    oc_arcsec: ArrayLike | None,
    tracks: Sequence[Track],
    *,
    frame: FrameWriter,
    width: float,
    recorded_tracks: Sequence[Track] = (),
    recorded_arcsec: ArrayLike | None = None,
    memory: ScaleMemory | None = None,
    note: str = "",
) -> dict[str, Any]:
    """Draw the arc on the sky.

    Right ascension increases to the left. An arc that comes within 10° of a pole or spans more than 120° of
    right ascension is drawn in a stereographic projection about its middle, which the note then says.

    Parameters
    ----------
    rows : sequence of RowMark, length n
    ra_dec_deg : array (n, 2)
        Observed right ascension and declination, ICRF, degrees.
    oc_arcsec : array (n, 2) or None
        Observed minus computed, arcsec: right ascension times cos Dec, declination.
    tracks : sequence of Track
        One per station; empty without an orbit.
    frame : FrameWriter
    width : float
        Width, px.
    recorded_tracks, recorded_arcsec : optional
        The recorded solution, drawn dashed and grey.
    memory : ScaleMemory, optional
        Keeps the magnification and the labels still while a slider is held.
    note : str
        Words beside the caption.

    Returns
    -------
    dict
        A flat figure.
    """
    memory = memory or ScaleMemory()
    n = len(rows)
    places = np.asarray(ra_dec_deg, dtype=float).reshape(n, 2)
    height = 244.0 if width <= 420.0 else float(round(min(300.0, 0.6 * width)))
    key = (width, height, places.tobytes())
    window = memory.keep("window", key, lambda: SkyWindow(places, width, height))
    xy = window.project(places[:, 0], places[:, 1])
    items: list[Item] = window.grid_items(frame)
    for track in recorded_tracks:
        line = window.project(track.ra_deg, track.dec_deg)
        items += frame.lines("ghost", clipped(line, window.box))
    drawn: list[tuple[Track, Array]] = []
    for track in tracks:
        line = window.project(track.ra_deg, track.dec_deg)
        items += frame.lines("cv now thin", clipped(line, window.box))
        items += frame.lines("cv now", clipped(line[track.first : track.last + 1], window.box))
        drawn.append((track, line))
    oc = None if oc_arcsec is None else np.asarray(oc_arcsec, dtype=float).reshape(n, 2)
    ghost = None if recorded_arcsec is None else np.asarray(recorded_arcsec, dtype=float).reshape(n, 2)
    arrows = _Arrows(rows, xy, oc, ghost, window, memory)
    items += arrows.items(frame)
    for row, (x, y) in zip(rows, np.round(xy, 1).tolist(), strict=True):
        items.append(("mark", row.css_class, row.shape, x, y, 4, row.title))
    # A mark or a label of the grid weighs as much as many points of a line.
    drawn_points = [
        np.repeat(xy, 10, axis=0),
        np.repeat(window.labelled, 50, axis=0),
        *(line for _, line in drawn),
    ]
    items += arrows.key_items(window, np.vstack(drawn_points))
    names = tuple((track.station, track.shape) for track in tracks)
    # Where labels go does not depend on the arrows' exact tips, so that they hold still while dragging.
    label_key = (key, names, tuple((row.row, row.pick, row.used) for row in rows), oc is None)
    items += memory.keep("labels", label_key, lambda: _labels(rows, xy, drawn, arrows, window))
    items += arrows.length_labels()
    notes = [text for text in (note, window.note) if text]
    return {
        "width": width,
        "height": height,
        "label": _finding(rows, oc, arrows.magnification, window),
        "caption": "Sky track",
        "note": ", ".join(notes),
        "items": items,
    }


class _Arrows:
    """Residual arrows, one scale in both directions."""

    def __init__(
        self,
        rows: Sequence[RowMark],
        xy: Array,
        oc: Array | None,
        ghost: Array | None,
        window: SkyWindow,
        memory: ScaleMemory,
    ):
        self.rows, self.xy, self.window, self.memory = rows, xy, window, memory
        self.magnification = 0.0
        self.px_per_arcsec = 0.0
        self._texts: list[Item] = []
        self.boxes: list[tuple[float, float, float, float]] = []
        self.vectors: Array | None = None
        self.ghosts: Array | None = None
        if oc is None or not np.isfinite(oc).any():
            return
        # A row without a residual has no arrow.
        oc = np.where(np.isfinite(oc), oc, 0.0)
        lengths = np.hypot(oc[:, 0], oc[:, 1])
        free = np.array([row.used and not row.pick for row in rows])
        used = np.array([row.used for row in rows])
        chosen = lengths[free] if free.any() else lengths[used] if used.any() else lengths
        typical = max(float(np.percentile(chosen, 60)), float(chosen.max()) * _TYPICAL / _LONGEST / 1.5, 1e-6)
        true_px = window.px_per_deg / 3600.0
        wanted = typical * _LONGEST / _TYPICAL

        def stated(limit_arcsec: float) -> float:
            """Largest arrow, arcsec, for which the magnification is a round number, at least one."""
            factor = _LONGEST / limit_arcsec / true_px
            return _LONGEST / (max(nice_down(factor), 1.0) if factor > 0 else 1.0) / true_px

        limit = memory.settle(("arrow", window.px_per_deg), wanted, stated)
        self.px_per_arcsec = _LONGEST / limit
        self.magnification = self.px_per_arcsec / true_px
        axes = window.directions_at(xy)
        self.vectors = np.einsum("nk,nkj->nj", oc * self.px_per_arcsec, axes)
        if ghost is not None and np.isfinite(ghost).all():
            self.ghosts = np.einsum("nk,nkj->nj", ghost * self.px_per_arcsec, axes)
        self.lengths = lengths

    def items(self, frame: FrameWriter) -> list[Item]:
        if self.vectors is None:
            return []
        out: list[Item] = []
        sizes = np.hypot(self.vectors[:, 0], self.vectors[:, 1])
        if self.ghosts is not None:
            size = np.hypot(self.ghosts[:, 0], self.ghosts[:, 1])
            ends = self.xy + self.ghosts * np.minimum(1.0, _LONGEST / np.maximum(size, 1e-9))[:, None]
            far = np.hypot(*(self.ghosts - self.vectors).T) > 1.5
            for (x0, y0), (x1, y1), apart in zip(
                np.round(self.xy, 1).tolist(), np.round(ends, 1).tolist(), far.tolist(), strict=True
            ):
                if apart:
                    out.append(("seg", "gl", x0, y0, x1, y1))
        # Arrows are cut where they would be longer than the longest, or leave the drawing.
        shown = np.minimum(1.0, _LONGEST / np.maximum(sizes, 1e-9))
        tips = self.xy + self.vectors * shown[:, None]
        starts, ends_ = np.round(self.xy, 1).tolist(), np.round(tips, 1).tolist()
        for i, row in enumerate(self.rows):
            (x0, y0), (x1, y1) = starts[i], ends_[i]
            if sizes[i] < 0.5:
                continue
            out.append(("seg", "vec", x0, y0, x1, y1))
            if shown[i] < 1.0:
                ux, uy = self.vectors[i] / sizes[i]
                head = [
                    (x1 - 5.5 * ux - 3.4 * uy, y1 - 5.5 * uy + 3.4 * ux),
                    (x1, y1),
                    (x1 - 5.5 * ux + 3.4 * uy, y1 - 5.5 * uy - 3.4 * ux),
                ]
                out.append(frame.line("off", np.asarray(head)))
                self._name(i, row, x1, y1, ux, uy)
        return out

    def _name(self, i: int, row: RowMark, x: float, y: float, ux: float, uy: float) -> None:
        text = _length_text(float(self.lengths[i]))
        text = text if row.used else f"({text})"
        w = text_width(text, strong=True)
        base = y + 4.0 + 6.0 * uy
        best: tuple[float, float, str, tuple[float, float, float, float]] | None = None
        for anchor in ("start", "end") if ux >= -0.3 else ("end", "start"):
            left = x + 6.0 if anchor == "start" else x - 6.0 - w
            box = (left, base - 9.0, left + w, base + 2.0)
            clash = any(box[0] < b[2] and box[2] > b[0] and box[1] < b[3] and box[3] > b[1] for b in self.boxes)
            if clash or left < 0 or box[2] > self.window.width or base < 10:
                continue
            covered = _inside(self.xy, (box[0] - 5.0, box[1] - 5.0, box[2] + 5.0, box[3] + 5.0))
            if best is None or covered < best[0]:
                best = (covered, x + 6.0 if anchor == "start" else x - 6.0, anchor, box)
        if best is None or len(self.boxes) >= 6:
            return
        self.boxes.append(best[3])
        self._texts.append(("text", "t strong", round(best[1], 1), round(base, 1), best[2], text))

    def length_labels(self) -> list[Item]:
        return self._texts

    def key_items(self, window: SkyWindow, drawn: Array) -> list[Item]:
        """The scale bar of the arrows, where least is drawn."""
        if self.vectors is None:
            self.key_box = (0.0, 0.0, 0.0, 0.0)
            return []
        longest = 38.0 / self.px_per_arcsec
        unit = _length_unit(longest)[0]
        size = unit * nice_down(longest / unit)
        bar = round(size * self.px_per_arcsec, 1)
        text = f"residual ×{grouped(self.magnification)}: {_length_text(size, short=True)}"
        wide = bar + 10.0 + text_width(text)
        x0, y0, x1, y1 = window.box
        lines = 2 if self.ghosts is not None else 1
        tall = 15.0 * lines + 6.0
        depends_on = (window.box, round(wide, 1), tall)

        def corner() -> tuple[float, float]:
            """Right end and top of the emptiest place, upper right first."""
            rights = (x1 - 4.0, x0 + wide + 10.0, (x0 + x1 + wide) / 2)
            corners = [(r, t) for t in (y0, y1 - tall - 4.0) for r in rights]
            return min(corners, key=lambda c: _inside(drawn, (c[0] - wide - 4, c[1] - 4, c[0] + 4, c[1] + tall)))

        right, top = self.memory.keep("key", depends_on, corner)
        y = top + 6.0
        self.key_box = (right - wide, top, right, top + tall)
        out: list[Item] = [
            ("seg", "vec", round(right - bar, 1), y, right, y),
            ("text", "t", round(right - bar - 6.0, 1), y + 4.0, "end", text),
        ]
        if lines == 2:
            out.append(("seg", "gl", round(right - bar, 1), y + 15.0, right, y + 15.0))
            out.append(("text", "t", round(right - bar - 6.0, 1), y + 19.0, "end", "recorded"))
        return out


def _inside(points: Array, box: tuple[float, float, float, float]) -> int:
    """How many of the points (m, 2) lie in a box."""
    with np.errstate(invalid="ignore"):
        x, y = points[:, 0], points[:, 1]
        return int(((x > box[0]) & (x < box[2]) & (y > box[1]) & (y < box[3])).sum())


def _length_unit(arcsec: float) -> tuple[float, str]:
    """Size in arcsec and sign of the unit in which a length is said."""
    return (3600.0, "°") if arcsec >= 3600.0 else (60.0, "′") if arcsec >= 300.0 else (1.0, "″")


def _length_text(arcsec: float, short: bool = False) -> str:
    unit, sign = _length_unit(arcsec)
    value = arcsec / unit
    return (f"{value:g}" if short else f"{value:.0f}" if value >= 100 else f"{value:.1f}") + sign


_NAME_SPOTS = tuple(
    Spot(dx, dy, anchor)
    for dx, dy, anchor in (
        (-6.0, 14.0, "end"), (6.0, 14.0, "start"), (-6.0, -6.0, "end"), (6.0, -6.0, "start"),
        (0.0, 22.0, "middle"), (0.0, -14.0, "middle"), (-10.0, 4.0, "end"), (10.0, 4.0, "start"),
        (-16.0, 26.0, "end"), (16.0, 26.0, "start"), (-16.0, -18.0, "end"), (16.0, -18.0, "start"),
    )
)  # fmt: skip


def _labels(
    rows: Sequence[RowMark], xy: Array, drawn: list[tuple[Track, Array]], arrows: _Arrows, window: SkyWindow
) -> list[TextItem]:
    """Row numbers and station names, picked rows first; numbers that find no room are left out."""
    keep_free = [np.repeat(xy, 6, axis=0), np.repeat(window.labelled, 6, axis=0)]
    keep_free += [line[:: max(1, len(line) // 60)] for _, line in drawn]
    if arrows.vectors is not None:
        size = np.hypot(arrows.vectors[:, 0], arrows.vectors[:, 1])[:, None]
        cut = arrows.vectors * np.minimum(1.0, _LONGEST / np.maximum(size, 1e-9))
        keep_free += [xy + share * cut for share in (0.35, 0.7, 1.0)]
    points = np.vstack(keep_free)
    points = points[np.isfinite(points).all(axis=1)]
    x0, _, _, y1 = window.box
    layout = Layout((x0 + 1.0, 14.0, window.width, y1 - 1.0), points)
    layout.reserve(*arrows.key_box)
    for box in arrows.boxes:
        layout.reserve(*box)
    wanted: list[Wanted] = []
    named: set[str] = set()
    for track, line in drawn:
        inside = [piece for piece in clipped(line, window.box) if len(piece)]
        if not inside or track.station in named:
            continue
        named.add(track.station)
        own = [i for i, row in enumerate(rows) if row.station == track.station]
        ends = np.array([inside[0][0], inside[-1][-1]])
        middle = xy.mean(axis=0)
        # The free end of the track is the one farther from the other stations' marks.
        others = xy[[i for i in range(len(rows)) if i not in own]] if len(own) < len(rows) else middle[None, :]
        gap = [float(np.hypot(*(others - end).T).min()) for end in ends]
        at = ends[int(gap[1] >= gap[0])] if own else ends[1]
        text = f"{track.station} {SHAPE_SIGNS[track.shape]}"
        wanted.append(Wanted(text, float(at[0]), float(at[1]), strong=True, must=True, spots=_NAME_SPOTS))
    if not drawn:
        for row in rows:
            if row.station not in named:
                named.add(row.station)
                x, y = xy[rows.index(row)].tolist()
                wanted.append(Wanted(row.station_sign, x, y, strong=True, spots=_NAME_SPOTS))
    for picked in (True, False):
        for row, (x, y) in zip(rows, xy.tolist(), strict=True):
            if bool(row.pick) is picked:
                wanted.append(Wanted(str(row.row), x, y, strong=picked, must=picked))
    return layout.place(wanted)


def _finding(rows: Sequence[RowMark], oc: Array | None, magnification: float, window: SkyWindow) -> str:
    span = window.span_deg
    size = (
        f"{span:.1f} degrees"
        if span >= 1.0
        else f"{span * 60:.1f} arcmin"
        if span * 60 >= 1
        else f"{span * 3600:.0f} arcsec"
    )
    text = f"Sky track of {len(rows)} observations over {size}"
    if oc is None or not magnification:
        return text + ", no orbit to compare with."
    lengths = np.hypot(oc[:, 0], oc[:, 1])
    i = int(np.argmax(lengths))
    return (
        f"{text}; residuals drawn {grouped(magnification)} times larger; "
        f"the largest is {nice_text(float(lengths[i]))} arcsec at row {rows[i].row}."
    )


def nice_text(value: float) -> str:
    """A size with two significant digits, without an exponent."""
    return f"{value:.0f}" if value >= 10 else f"{value:.2g}"
