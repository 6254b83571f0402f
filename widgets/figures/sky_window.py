"""The piece of sky that a sky track shows: its projection, its grid and the labels of its axes."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firstarc.widgets.figures.axes import declination_ticks, hour_ticks
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.geometry import clipped, unit_vectors, view_axes
from firstarc.widgets.figures.labels import text_width

Array = NDArray[np.float64]
Item = tuple[Any, ...]

_TOP, _BOTTOM, _RIGHT = 24.0, 34.0, 12.0
#: The two axes may differ in scale by this factor, no more, so that the track keeps its character.
_STRETCH = 5.0
_SMALLEST_DEG = 20.0 / 3600.0


class SkyWindow:
    """Window about observed places (n, 2), degrees, in a drawing of width x height px.

    Attributes
    ----------
    box : tuple of float
        x0, y0, x1, y1 of the drawn area.
    px_per_deg : float
        Scale in declination, px per degree: the scale against which arrows are magnified.
    zenithal : bool
        True where right ascension and declination cannot serve as straight axes.
    """

    def __init__(self, ra_dec_deg: Array, width: float, height: float):
        self.width, self.height = width, height
        directions = unit_vectors(ra_dec_deg[:, 0], ra_dec_deg[:, 1])
        mean = directions.sum(axis=0) if len(directions) else np.array([1.0, 0.0, 0.0])
        if np.linalg.norm(mean) < 1e-6:
            mean = directions[0]
        mean = mean / np.linalg.norm(mean)
        self.ra0 = float(np.degrees(np.arctan2(mean[1], mean[0])) % 360.0)
        self.dec0 = float(np.degrees(np.arcsin(np.clip(mean[2], -1.0, 1.0))))
        self._axes = view_axes(self.ra0, self.dec0)
        self.span_deg = _span_deg(directions)
        ra = self._unwrapped(ra_dec_deg[:, 0])
        spread = float(np.ptp(ra)) if len(ra) else 0.0
        highest = float(np.abs(ra_dec_deg[:, 1]).max(initial=0.0))
        self.zenithal = highest > 80.0 or spread > 120.0
        self.note = (
            f"stereographic about RA {self.ra0:.0f}°, Dec {self.dec0:+.0f}°".replace("-", "−") if self.zenithal else ""
        )
        x, y = self._plane(ra_dec_deg[:, 0], ra_dec_deg[:, 1])
        self._fit(x, y)
        self._marks = self.project(ra_dec_deg[:, 0], ra_dec_deg[:, 1]) if len(ra_dec_deg) else np.zeros((1, 2))
        #: Places of labels inside the drawing, which the figure keeps free.
        self.labelled = np.zeros((0, 2))

    def _unwrapped(self, ra_deg: ArrayLike) -> Array:
        return self.ra0 + (np.asarray(ra_deg, dtype=float) - self.ra0 + 180.0) % 360.0 - 180.0

    def _plane(self, ra_deg: ArrayLike, dec_deg: ArrayLike) -> tuple[Array, Array]:
        """Plane coordinates, degrees at the middle: x to the left (east), y up (north)."""
        if not self.zenithal:
            return self._unwrapped(ra_deg), np.asarray(dec_deg, dtype=float)
        east, north, along = self._axes @ unit_vectors(ra_deg, dec_deg).T
        with np.errstate(divide="ignore", invalid="ignore"):
            factor = np.where(along > -0.9, np.degrees(2.0 / (1.0 + along)), np.nan)
        return east * factor, north * factor

    def _fit(self, x: Array, y: Array) -> None:
        cos_dec = 1.0 if self.zenithal else max(float(np.cos(np.radians(self.dec0))), 0.05)
        middle = [0.0, 0.0] if self.zenithal else [self.ra0, self.dec0]
        lows, highs = (
            [float(v.min()), float(v.max())] if len(v) else [m, m] for v, m in zip((x, y), middle, strict=True)
        )
        (x_low, x_high), (y_low, y_high) = lows, highs
        self.box = (44.0, _TOP, self.width - _RIGHT, self.height - _BOTTOM)
        inner_w, inner_h = self.box[2] - self.box[0], self.box[3] - self.box[1]
        need_x = max((x_high - x_low) * cos_dec, _SMALLEST_DEG) * 1.22
        need_y = max(y_high - y_low, _SMALLEST_DEG) * 1.38
        scale_x, scale_y = inner_w / need_x, inner_h / need_y
        if self.zenithal:
            scale_x = scale_y = min(scale_x, scale_y)
        else:
            scale_y = min(scale_y, _STRETCH * scale_x)
            scale_x = min(scale_x, _STRETCH * scale_y)
        self._x_mid, self._y_mid = (x_low + x_high) / 2, (y_low + y_high) / 2
        self._sx, self._sy = scale_x * cos_dec, scale_y
        # Labels of the declinations decide the left margin; it changes the scale in x only.
        half_h = inner_h / 2 / scale_y
        if not self.zenithal:
            self._dec_ticks = declination_ticks(self._y_mid - half_h, self._y_mid + half_h, 5)
            left = max(44.0, max((text_width(text) for _, text in self._dec_ticks), default=0.0) + 9.0)
            self.box = (float(round(left)), *self.box[1:])
            narrowed = (self.box[2] - self.box[0]) / inner_w
            self._sx *= narrowed
        self._cx, self._cy = (self.box[0] + self.box[2]) / 2, (self.box[1] + self.box[3]) / 2
        self.px_per_deg = self._sy

    def project(self, ra_deg: ArrayLike, dec_deg: ArrayLike) -> Array:
        """Pixels (n, 2) of directions; a track that crosses the far side of the sky is broken by NaN."""
        x, y = self._plane(ra_deg, dec_deg)
        out = np.stack([self._cx - (x - self._x_mid) * self._sx, self._cy - (y - self._y_mid) * self._sy], axis=1)
        if not self.zenithal and len(x) > 1:
            jump = np.flatnonzero(np.abs(np.diff(x)) > 180.0)
            out[jump + 1] = np.nan
        return out

    def directions_at(self, xy: Array) -> Array:
        """Unit vectors on the drawing (n, 2, 2) towards east and north at the given pixels."""
        if not self.zenithal:
            return np.broadcast_to(np.array([[-1.0, 0.0], [0.0, -1.0]]), (len(xy), 2, 2))
        north = self._north(xy)
        east = np.stack([north[:, 1], -north[:, 0]], axis=1)
        return np.stack([east, north], axis=1)

    def _north(self, xy: Array) -> Array:
        ra, dec = self._sky(xy)
        step = 0.01
        toward = np.where(dec > 90.0 - 2 * step, -step, step)
        shifted = self.project(ra, dec + toward)
        north = (shifted - xy) * np.sign(toward)[:, None]
        return np.asarray(north / np.maximum(np.hypot(north[:, 0], north[:, 1]), 1e-12)[:, None])

    def _sky(self, xy: Array) -> tuple[Array, Array]:
        """Right ascension and declination, degrees, of pixels of the stereographic drawing."""
        x = np.radians((self._cx - xy[:, 0]) / self._sx + self._x_mid)
        y = np.radians((self._cy - xy[:, 1]) / self._sy + self._y_mid)
        rho2 = (x * x + y * y) / 4.0
        along = (1.0 - rho2) / (1.0 + rho2)
        vectors = np.stack([x / (1.0 + rho2), y / (1.0 + rho2), along], axis=1) @ self._axes
        dec = np.degrees(np.arcsin(np.clip(vectors[:, 2], -1.0, 1.0)))
        return np.degrees(np.arctan2(vectors[:, 1], vectors[:, 0])), dec

    def grid_items(self, frame: FrameWriter) -> list[Item]:
        """Grid lines, axes and their labels."""
        x0, y0, x1, y1 = self.box
        self.labelled = np.zeros((0, 2))
        out: list[Item] = self._curved_grid(frame) if self.zenithal else self._straight_grid()
        out += [("seg", "ax", x0, y1, x1, y1), ("seg", "ax", x0, y0, x0, y1)]
        out += [
            ("text", "t", x1, y1 + 28.0, "end", "RA, ICRF"),
            ("text", "t", x0, y0 - 12.0, "start", "Dec, ICRF"),
        ]
        return out

    def _label_on(self, circle: Array, text: str) -> list[Item]:
        """The label of a circle that stays clear of the left edge, where it is farthest from the arc."""
        x0, y0, x1, y1 = self.box
        inner = (circle > [x0 + 16.0, y0 + 8.0]) & (circle < [x1 - 16.0, y1 - 8.0])
        points = circle[inner.all(axis=1)]
        if not len(points):
            return []
        taken = np.vstack([self._marks, self.labelled]) if len(self.labelled) else self._marks
        room = np.hypot(*(points[:, None] - taken[None]).transpose(2, 0, 1)).min(axis=1)
        x, y = points[int(np.argmax(room))].tolist()
        self.labelled = np.vstack([self.labelled, [x, y]])
        return [("text", "t", round(x, 1), round(y + 4.0, 1), "middle", text)]

    def _straight_grid(self) -> list[Item]:
        x0, y0, x1, y1 = self.box
        half_w = (x1 - x0) / 2 / self._sx
        low, high = self._x_mid - half_w, self._x_mid + half_w
        ticks = _spaced(hour_ticks, low, high, (x1 - x0) / (high - low))
        out: list[Item] = []
        for value, text in ticks:
            x = round(self._cx - (value - self._x_mid) * self._sx, 1)
            out.append(("seg", "grid", x, y0, x, y1))
            half = text_width(text) / 2
            if x - half >= 0.0 and x + half <= self.width:
                out.append(("text", "t", x, y1 + 14.0, "middle", text))
        for value, text in self._dec_ticks:
            y = round(self._cy - (value - self._y_mid) * self._sy, 1)
            if y0 <= y <= y1:
                out.append(("seg", "grid", x0, y, x1, y))
                out.append(("text", "t", x0 - 5.0, y + 4.0, "end", text))
        return out

    def _curved_grid(self, frame: FrameWriter) -> list[Item]:
        """Circles of declination and meridians; each labelled where it meets the left or lower edge."""
        x0, y0, x1, y1 = self.box
        # The corners are farther from the middle than the edges.
        half = float(np.hypot(x1 - x0, y1 - y0)) / 2 / self._sy
        dec_low, dec_high = max(self.dec0 - half, -90.0), min(self.dec0 + half, 90.0)
        if self.dec0 + half > 90.0:
            dec_low = min(dec_low, 180.0 - self.dec0 - half)
        if self.dec0 - half < -90.0:
            dec_high = max(dec_high, -180.0 - self.dec0 + half)
        out: list[Item] = []
        all_round = self.ra0 + np.linspace(-180.0, 180.0, 121)
        used: list[float] = []
        for value, text in declination_ticks(max(dec_low, -89.9), min(dec_high, 89.9), 6):
            pieces = clipped(self.project(all_round, np.full(121, value)), self.box)
            out += frame.lines("grid", pieces)
            ends = [float(p[1]) for piece in pieces for p in (piece[0], piece[-1]) if abs(p[0] - x0) < 0.01]
            free = [y for y in sorted(ends) if all(abs(y - other) > 12.0 for other in used)]
            if free:
                used.append(free[0])
                out.append(("text", "t", x0 - 5.0, round(free[0] + 4.0, 1), "end", text))
            elif pieces and not ends:
                out += self._label_on(np.vstack(pieces), text)
        up = np.linspace(max(dec_low, -89.5), min(dec_high, 89.5), 46)
        near_pole = self.dec0 + half > 90.0 or self.dec0 - half < -90.0
        hours = range(0, 24, 2 if near_pole else 1)
        taken: list[tuple[float, float]] = []
        for hour in hours:
            pieces = clipped(self.project(np.full(46, 15.0 * hour), up), self.box)
            out += frame.lines("grid", pieces)
            feet = [float(p[0]) for piece in pieces for p in (piece[0], piece[-1]) if abs(p[1] - y1) < 0.01]
            text = f"{hour}ʰ"
            for x in feet[:1]:
                w = text_width(text) / 2 + 4.0
                if all(x + w < a or x - w > b for a, b in taken):
                    taken.append((x - w, x + w))
                    out.append(("text", "t", round(x, 1), y1 + 14.0, "middle", text))
        return out


def _spaced(
    ticks: Callable[[float, float, int], list[tuple[float, str]]], low: float, high: float, px: float
) -> list[tuple[float, str]]:
    """The most ticks whose labels keep clear of each other."""
    found: list[tuple[float, str]] = []
    for target in (5, 4, 3, 2, 1):
        found = ticks(low, high, target)
        if len(found) < 2:
            return found
        gap = (found[1][0] - found[0][0]) * px
        if max(text_width(text) for _, text in found) + 8.0 <= gap:
            return found
    return found[: 1 if len(found) else 0]


def _span_deg(directions: Array) -> float:
    """Largest angle between two of the directions (n, 3), degrees."""
    if len(directions) < 2:
        return 0.0
    chord = np.linalg.norm(directions[:, None] - directions[None], axis=2).max()
    return float(np.degrees(2.0 * np.arcsin(min(1.0, chord / 2.0))))
