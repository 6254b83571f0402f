"""Where the weight of orbits lies over range and range rate: for each range a window of range rates.

Observations that fix more than a raster resolves leave the weights in a narrow, bent valley. Along the range rate
alone, the range held, the weight has one summit; so each range's window is shrunk onto its own summit until enough of
its nodes carry weight, whatever way the valley bends. Ours.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from firstarc.preliminary.lines_of_sight import Array

#: Range rates tried in a window, how many must carry weight, and what part of the summit counts as weight.
COLUMNS, ENOUGH, LITTLE = 15, 6.0, 1e-5
#: Passes at most; each narrows a window by a factor of four or more.
PASSES = 14
#: Columns by which a window is moved on where the weight reaches beyond its end.
STRIDE = 3.0


class Valley(NamedTuple):
    """Per range (n,): middle and half width of the window of range rates, and logarithm of the weight in it.

    Where nothing carries weight the window is NaN and the logarithm minus infinity. ``passes`` counts the rasters used.
    """

    middle: Array
    half: Array
    log_weight: Array
    passes: int


def valley(
    log_weight_at: Callable[[Array, Array, Array], Array], low: Array, high: Array, near: Valley | None
) -> Valley:
    """Windows of range rates that carry the weight of each range.

    Parameters
    ----------
    log_weight_at : callable
        Of indices of ranges (m,), range rates (m, c) and the width of a cell (m,): logarithms of weights (m, c), minus
        infinity outside the region.
    low, high : ndarray, shape (n,)
        Bounds of the range rate; NaN where a range is not admitted.
    near : Valley or None
        Windows to begin with; None begins with the bounds.
    """
    a, b = low.copy(), high.copy()
    if near is not None:
        a, b = np.fmax(low, near.middle - near.half), np.fmin(high, near.middle + near.half)
    n = len(low)
    middle, half, total = np.full(n, np.nan), np.full(n, np.nan), np.full(n, -np.inf)
    open_ = np.isfinite(a) & np.isfinite(b) & (b > a)
    part = (np.arange(COLUMNS) + 0.5) / COLUMNS
    passes = 0
    while open_.any() and passes < PASSES:
        passes += 1
        rows = np.flatnonzero(open_)
        width = (b - a)[rows] / COLUMNS
        x = a[rows, None] + (b - a)[rows, None] * part
        value = log_weight_at(rows, x, width)
        best = value.max(axis=1)
        some = np.isfinite(best)
        open_[rows[~some]] = False
        rows, width, x, value, best = rows[some], width[some], x[some], value[some], best[some]
        weight = np.exp(value - best[:, None])
        mass = weight.sum(axis=1)
        effective = mass**2 / np.sum(weight**2, axis=1)
        carries = weight > LITTLE
        first, last = carries.argmax(axis=1), COLUMNS - 1 - carries[:, ::-1].argmax(axis=1)
        each = np.arange(rows.size)
        # One column beyond what carries weight, inside the bounds.
        left = np.fmax(low[rows], x[each, first] - width)
        right = np.fmin(high[rows], x[each, last] + width)
        middle[rows], half[rows], total[rows] = 0.5 * (left + right), 0.5 * (right - left), best + np.log(mass)
        cut = ((first == 0) & (a[rows] > low[rows])) | ((last == COLUMNS - 1) & (b[rows] < high[rows]))
        left = np.where(cut, np.fmax(low[rows], left - STRIDE * width), left)
        right = np.where(cut, np.fmin(high[rows], right + STRIDE * width), right)
        # A window as narrow as the rounding of its range rate is not narrowed further.
        narrow = right - left <= 1e-13 * np.fmax(np.abs(left), np.abs(right))
        open_[rows[((effective >= ENOUGH) & ~cut) | narrow]] = False
        a[rows], b[rows] = left, right
    return Valley(middle, half, total, passes)
