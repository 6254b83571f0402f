"""Residuals (O−C) of every observation in two strips: right ascension times cos Dec, and declination."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firstarc.widgets.figures.axes import grouped, nice_up
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.labels import text_width
from firstarc.widgets.figures.marks import RowMark
from firstarc.widgets.figures.memory import ScaleMemory

Array = NDArray[np.float64]

_TITLES = ("RA × cos Dec", "Dec")
_TICKS = (1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0)
_TOP, _GAP, _FOOT, _RIGHT, _INSET = 22.0, 16.0, 24.0, 10.0, 16.0
#: Spacing of neighbouring rows against the median spacing in time.
_NARROWEST, _WIDEST = 0.6, 1.8


def residuals(
    rows: Sequence[RowMark],
    oc_arcsec: ArrayLike | None,
    sigma_arcsec: ArrayLike,
    *,
    frame: FrameWriter,
    width: float,
    recorded_arcsec: ArrayLike | None = None,
    memory: ScaleMemory | None = None,
    note: str = "",
) -> dict[str, Any]:
    """Draw the residuals in order of time, with a band of one standard deviation per station.

    Parameters
    ----------
    rows : sequence of RowMark, length n
    oc_arcsec : array (n, 2) or None
        Observed minus computed, arcsec: right ascension times cos Dec, declination. NaN where there is none.
    sigma_arcsec : array (n, 2)
        Stated standard deviations, arcsec.
    frame : FrameWriter
    width : float
        Width, px.
    recorded_arcsec : array (n, 2), optional
        Residuals of the recorded solution, drawn as short bars.
    memory : ScaleMemory, optional
        Keeps the scale still while a slider is held.
    note : str
        Words beside the caption; a note on cut gaps is added when there are any.

    Returns
    -------
    dict
        A flat figure.
    """
    drawing = _Residuals(rows, oc_arcsec, sigma_arcsec, recorded_arcsec, frame, width, memory or ScaleMemory())
    items = drawing.items()
    notes = [note] if note else []
    if recorded_arcsec is not None and oc_arcsec is not None and "recorded" not in note:
        notes.append("short bars: recorded")
    if drawing.cut_gaps:
        notes.append("long gaps cut")
    return {
        "width": width,
        "height": drawing.height,
        "label": drawing.finding(),
        "caption": "Residuals over time",
        "note": ", ".join(notes),
        "items": items,
    }


def _unit(tick_arcsec: float) -> tuple[float, str]:
    """Size in arcsec and sign of the unit in which a strip is read."""
    if tick_arcsec >= 3.0 * 3600.0:
        return 3600.0, "°"
    if tick_arcsec >= 180.0:
        return 60.0, "′"
    return 1.0, "″"


def _round_tick(tick_arcsec: float) -> float:
    """A distance between ticks that is round in the unit in which the strip is read."""
    unit = _unit(tick_arcsec)[0]
    return unit * nice_up(tick_arcsec / unit, _TICKS)


class _Residuals:
    def __init__(
        self,
        rows: Sequence[RowMark],
        oc_arcsec: ArrayLike | None,
        sigma_arcsec: ArrayLike,
        recorded_arcsec: ArrayLike | None,
        frame: FrameWriter,
        width: float,
        memory: ScaleMemory,
    ):
        n = len(rows)
        order = sorted(range(n), key=lambda i: rows[i].t_s)
        self.rows = [rows[i] for i in order]
        self.sigma = np.asarray(sigma_arcsec, dtype=float).reshape(n, 2)[order]
        empty = np.full((n, 2), np.nan)
        self.oc = empty if oc_arcsec is None else np.asarray(oc_arcsec, dtype=float).reshape(n, 2)[order]
        self.recorded = (
            empty if recorded_arcsec is None else np.asarray(recorded_arcsec, dtype=float).reshape(n, 2)[order]
        )
        self.frame, self.width, self.memory = frame, width, memory
        self.strip = 128.0 if width <= 620.0 else 87.0
        self.height = _TOP + 2 * self.strip + _GAP + _FOOT
        tick = memory.settle("tick", max(self._wanted_limit() / 1.5, 1e-9), _round_tick)
        self.tick, self.limit = tick, 1.5 * tick
        self.unit, self.sign = _unit(tick)
        decimals = max(0, -int(np.floor(np.log10(tick / self.unit) + 1e-9)))
        self.tick_texts = [grouped(k * tick / self.unit, decimals, sign=True) for k in (-1, 0, 1)]
        self.decimals = decimals + 1
        self.left = max(34.0, round(max(map(text_width, self.tick_texts)) + 9.0))
        self.right = width - _RIGHT
        self.cut_gaps = False
        self.x = self._places()

    def _wanted_limit(self) -> float:
        """Half the range to show: two sigma, and the used residuals unless one stands far apart."""
        base = 2.0 * float(self.sigma.max(initial=0.0)) or 1.0
        free = [i for i, row in enumerate(self.rows) if row.used and not row.pick]
        used = [i for i, row in enumerate(self.rows) if row.used]
        sizes = np.abs(self.oc[free or used]).ravel()
        sizes = sizes[np.isfinite(sizes)]
        if not len(sizes):
            return base
        largest = float(sizes.max())
        if len(sizes) >= 6:
            largest = min(largest, 6.0 * float(np.median(sizes)))
        return max(base, 1.15 * largest)

    def _places(self) -> list[float]:
        """x of every row: spaced by time, with long gaps shortened and close rows kept apart."""
        x0, x1 = self.left + _INSET, self.right - _INSET
        n = len(self.rows)
        if n < 2:
            return [(x0 + x1) / 2] * n
        gaps = np.diff([row.t_s for row in self.rows])
        middle = float(np.median(gaps))
        spacing = np.clip(gaps / middle, _NARROWEST, _WIDEST) if middle > 0 else np.ones(n - 1)
        self.cut_gaps = bool(middle > 0 and (gaps > 3.0 * middle).any())
        along = np.concatenate(([0.0], np.cumsum(spacing)))
        return np.round(x0 + (x1 - x0) * along / along[-1], 1).tolist()

    def items(self) -> list[tuple[Any, ...]]:
        out: list[tuple[Any, ...]] = self._station_names()
        for column in (0, 1):
            top = _TOP + column * (self.strip + _GAP)
            out += self._strip(column, top)
        return out + self._row_numbers()

    def _blocks(self, column: int | None) -> list[tuple[int, int]]:
        """Runs (first, last) of rows from one station; with one sigma too when a column is given."""
        out: list[tuple[int, int]] = []
        start = 0
        for i in range(1, len(self.rows) + 1):
            same = i < len(self.rows) and self.rows[i].station == self.rows[start].station
            if same and column is not None:
                # A sigma that follows cos Dec changes a little from row to row: still one band.
                a, b = self.sigma[i, column], self.sigma[start, column]
                same = bool(abs(a - b) <= 0.03 * b)
            if not same:
                out.append((start, i - 1))
                start = i
        return out if self.rows else []

    def _station_names(self) -> list[tuple[Any, ...]]:
        out: list[tuple[Any, ...]] = []
        end = 0.0
        for first, last in self._blocks(None):
            block = self.sigma[first : last + 1]
            low, high = float(block.min()), float(block.max())
            sigma = _sigma_text(low) if high < 1.05 * low else f"{_sigma_text(low)}–{_sigma_text(high)}"
            sign = self.rows[first].station_sign
            middle = (self.x[first] + self.x[last]) / 2
            for text in (f"{sign}\u2002σ {sigma}″", sign):
                half = text_width(text) / 2
                x = min(max(middle, half), self.width - half)
                if x - half >= end + 6.0 and (first == last or half <= (self.x[last] - self.x[first]) / 2 + 14.0):
                    out.append(("text", "t", round(x, 1), 11, "middle", text))
                    end = x + half
                    break
        return out

    def _strip(self, column: int, top: float) -> list[tuple[Any, ...]]:
        left, right, x = self.left, self.right, self.x
        zero, bottom = top + self.strip / 2, top + self.strip
        px = self.strip / 2 / self.limit
        out: list[tuple[Any, ...]] = []
        for first, last in self._blocks(column):
            half = round(min(float(self.sigma[first, column]), self.limit) * px, 1)
            before = x[first] - 9.0 if first == 0 else max(x[first] - 9.0, (x[first - 1] + x[first]) / 2)
            after = x[last] + 9.0 if last == len(x) - 1 else min(x[last] + 9.0, (x[last] + x[last + 1]) / 2)
            out.append(("rect", "band", round(before, 1), zero - half, round(after - before, 1), 2 * half))
        out.append(("seg", "ax0", left, zero, right, zero))
        for k, text in zip((-1, 0, 1), self.tick_texts, strict=True):
            y = round(zero - k * self.tick * px, 1)
            out.append(("seg", "ax", left - 3, y, left, y))
            out.append(("text", "t", left - 6, y + 4, "end", text))
        out.append(("seg", "ax", left, top, left, bottom))
        out.append(("text", "t strong", left + 3, top + 9, "start", f"{_TITLES[column]}, {self.sign}"))
        values = self.oc[:, column].tolist()
        recorded = self.recorded[:, column].tolist()
        title_end = left + 6 + text_width(_TITLES[column] + ", ″", strong=True)
        numbers: list[tuple[float, float, str, bool]] = []
        places: list[tuple[float, float]] = []
        for i, row in enumerate(self.rows):
            value, at = values[i], x[i]
            if value != value:
                continue
            off = abs(value) > self.limit
            y = round(zero - value * px, 1)
            if off:
                y = top + 16.0 if value > 0 else bottom - 16.0
            ghost = recorded[i]
            if ghost == ghost and abs(ghost) <= self.limit:
                y_ghost = round(zero - ghost * px, 1)
                if abs(y_ghost - y) > 2.5 and not off:
                    out.append(("seg", "gl", at, y_ghost, at, y))
                out.append(("seg", "gt", at - 6, y_ghost, at + 6, y_ghost))
            if not off and row.used:
                out.append(("seg", "stem", at, zero, at, y))
            if off:
                away = -1.0 if value > 0 else 1.0
                head = [(at - 4, y + 8 * away), (at, y + 13 * away), (at + 4, y + 8 * away)]
                out.append(self.frame.line("off", np.asarray(head)))
                numbers.append((at, y - 2.0 if value > 0 else y + 8.0, self._number(value, row), row.used))
            elif not row.pick and abs(value) > 4.0 * float(self.sigma[i, column]):
                numbers.append((at, y + 4.0, self._number(value, row), row.used))
            places.append((at, y))
            out.append(("mark", row.css_class, row.shape, at, y, 4, self._title(i)))
        return out + self._numbers(numbers, places, top, title_end)

    def _number(self, value: float, row: RowMark) -> str:
        text = grouped(value / self.unit, min(self.decimals, 2), sign=True)
        return text if row.used else f"({text})"

    def _title(self, i: int) -> str:
        dra, ddec = self.oc[i].tolist()
        return f"{self.rows[i].title}: RA {grouped(dra, 2, True)}″, Dec {grouped(ddec, 2, True)}″"

    def _numbers(
        self,
        numbers: list[tuple[float, float, str, bool]],
        places: list[tuple[float, float]],
        top: float,
        title_end: float,
    ) -> list[tuple[Any, ...]]:
        """Numbers beside marks off scale or far out, as many as find room; the tooltips have all."""
        if len(numbers) > 12:
            numbers = numbers[:12]
        taken: list[tuple[float, float, float, float]] = [(self.left, top - 2.0, title_end, top + 12.0)]
        marks = [(x - 4.0, y - 4.0, x + 4.0, y + 4.0) for x, y in places]
        out: list[tuple[Any, ...]] = []
        for x, y, text, _ in numbers:
            w = text_width(text, strong=True)
            for left, anchor in ((x + 9.0, "start"), (x - 9.0 - w, "end")):
                box = (left, y - 9.0, left + w, y + 2.0)
                if box[0] < self.left or box[2] > self.width:
                    continue
                if any(_touch(box, other) for other in taken) or any(_touch(box, other) for other in marks):
                    continue
                taken.append(box)
                at = x + 9.0 if anchor == "start" else x - 9.0
                out.append(("text", "t strong", round(at, 1), round(y, 1), anchor, text))
                break
        return out

    def _row_numbers(self) -> list[tuple[Any, ...]]:
        base = self.height - 8.0
        out: list[tuple[Any, ...]] = [("text", "t", self.left - 6, base, "end", "row")]
        taken: list[tuple[float, float]] = [(-99.0, self.left - 4.0)]
        picks = [i for i, row in enumerate(self.rows) if row.pick]
        others = [i for i, row in enumerate(self.rows) if not row.pick]
        for i in picks + others:
            row = self.rows[i]
            text = str(row.row)
            half = max(7.0, text_width(text, strong=True) / 2 + 2.5) if row.pick else text_width(text) / 2 + 1.5
            x = self.x[i]
            if not row.pick and any(x - half < b and x + half > a for a, b in taken):
                continue
            taken.append((x - half - 2.0, x + half + 2.0))
            out.append(("text", "t strong" if row.pick else "t", x, base, "middle", text))
            if row.pick:
                out.append(("rect", "pk", round(x - half, 1), base - 11.0, round(2 * half, 1), 15.0))
        return out

    def finding(self) -> str:
        """One sentence: how many rows lie within two sigma, and the largest residual."""
        with np.errstate(invalid="ignore", divide="ignore"):
            chi = np.abs(self.oc) / self.sigma
        shown = np.isfinite(chi).all(axis=1)
        if not shown.any():
            return "Residuals over time: there is no orbit to compare with."
        within = int((chi[shown].max(axis=1) <= 2.0).sum())
        i, column = np.unravel_index(int(np.nanargmax(np.where(np.isfinite(chi), chi, -1.0))), chi.shape)
        row = self.rows[i]
        largest = grouped(float(self.oc[i, column]), 2, True)
        return (
            f"Residuals, observed minus computed, over time: {within} of {int(shown.sum())} rows within "
            f"2 sigma; largest at row {row.row}, {largest} arcsec in {_TITLES[column]}, "
            f"{float(chi[i, column]):.1f} sigma" + ("." if row.used else ", out.")
        )


def _sigma_text(arcsec: float) -> str:
    """Two digits, as a stated standard deviation is written."""
    return f"{arcsec:.0f}" if arcsec >= 9.95 else f"{arcsec:.1f}" if arcsec >= 0.995 else f"{arcsec:.2g}"


def _touch(a: tuple[float, float, float, float], b: tuple[float, float, float, float]) -> bool:
    return a[0] < b[2] and a[2] > b[0] and a[1] < b[3] and a[3] > b[1]
