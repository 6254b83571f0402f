"""From where to look at an orbit, so that its shape and the observed arc are well seen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from firstarc.widgets.figures.geometry import view_axes
from firstarc.widgets.figures.memory import ScaleMemory

Array = NDArray[np.float64]

#: Rows of the drawing that belong to the scale bar, and clear space around the orbit, px.
FOOT_PX, CLEAR_PX = 24.0, 14.0
#: Tilts from the orbit's pole that are tried, degrees, and the one that shows depth best.
_TILTS, _BEST_TILT = (25.0, 40.0, 55.0), 40.0
_AZIMUTHS = 24
#: By how much another view must score better (1 is the size of the picture) to replace the one shown.
_CLEARLY_BETTER = 0.25


@dataclass(frozen=True)
class View:
    """Direction from which the scene is seen (ICRF), the point in the middle and half the height shown."""

    ra_deg: float
    dec_deg: float
    middle: Array
    extent: float


def extent_px(width: float, height: float) -> float:
    """Half the height (or width, where that is less) in px that ``extent`` fills."""
    return min(width, height - FOOT_PX) / 2.0 - CLEAR_PX


def chosen_view(
    content: Array, observed: Array, body_radius: float, width: float, height: float, memory: ScaleMemory
) -> View:
    """The view to start with; while a slider is held, the one of the last drawing, widened if need be.

    Parameters
    ----------
    content : array (m, 3)
        Everything that should fit.
    observed : array (n, 3)
        Observed positions, which the body should not hide.
    body_radius, width, height : float
    memory : ScaleMemory
    """
    points = content[:: max(1, len(content) // 90)]
    before: tuple[float, float] | None = memory.last("direction")
    ra, dec = memory.keep(
        "direction",
        (width, len(observed)),
        lambda: _direction(points, observed, body_radius, width, height, before),
    )
    axes = view_axes(ra, dec)
    seen = np.vstack([content, body_radius * _corners(axes)]) @ axes.T
    low, high = seen.min(axis=0), seen.max(axis=0)
    fit = _extent(high[0] - low[0], high[1] - low[1], width, height)
    # Turned any way, the scene should not run far out of the drawing.
    radius = float(np.linalg.norm(seen - (low + high) / 2, axis=1).max())
    wanted = max(fit, 0.7 * radius)
    middle = memory.keep("middle", (width, ra, dec), lambda: (low + high) / 2 @ axes)
    # A little outside is no reason to change the scale under the hand.
    extent = memory.settle("extent", wanted / 1.2 if memory.held else wanted, float)
    return View(ra, dec, middle, float(extent))


def _corners(axes: Array) -> Array:
    return np.vstack([axes[0], -axes[0], axes[1], -axes[1]])


def _extent(wide: float, tall: float, width: float, height: float) -> float:
    """Half the height to show so that a box of the given size fits."""
    half = extent_px(width, height)
    # Names of the apses and row numbers stand right of their marks.
    return float(max(tall / 2, wide / 2 * half / (width / 2 - 34.0), 1e-12))


def _pole(points: Array) -> Array:
    """Unit normal of the plane that fits the points best, on the northern side."""
    _, _, rows = np.linalg.svd(points - points.mean(axis=0), full_matrices=False)
    pole = rows[2]
    return np.asarray(pole if pole[2] >= 0 else -pole)


def _direction(
    points: Array,
    observed: Array,
    body_radius: float,
    width: float,
    height: float,
    before: tuple[float, float] | None,
) -> tuple[float, float]:
    """Right ascension and declination, whole degrees, of the best of a fixed set of views about the pole.

    The view ``before`` stays unless another is clearly better, so that the picture does not jump.
    """
    pole = _pole(points)
    first = np.cross(pole, [1.0, 0.0, 0.0] if abs(pole[0]) < 0.8 else [0.0, 1.0, 0.0])
    first /= np.linalg.norm(first)
    second = np.cross(pole, first)
    azimuth = np.arange(_AZIMUTHS) * 2.0 * np.pi / _AZIMUTHS
    around = np.cos(azimuth)[:, None] * first + np.sin(azimuth)[:, None] * second
    tilts = np.radians(_TILTS)
    views = (np.cos(tilts)[:, None, None] * pole + np.sin(tilts)[:, None, None] * around).reshape(-1, 3)
    if before is not None:
        views = np.vstack([views, view_axes(*before)[2]])
    tilt = np.degrees(np.arccos(np.clip(views @ pole, -1.0, 1.0)))
    tilt_cost = np.abs(tilt - _BEST_TILT) / 150.0
    right = np.stack([-views[:, 1], views[:, 0], np.zeros(len(views))], axis=1)
    flat = np.linalg.norm(right, axis=1)
    usable = flat > 0.17  # looking straight down an axis leaves no north
    right /= np.maximum(flat, 1e-9)[:, None]
    up = np.cross(views, right)
    x, y = points @ right.T, points @ up.T
    half = extent_px(width, height)
    wide = np.maximum(x.max(axis=0), body_radius) - np.minimum(x.min(axis=0), -body_radius)
    tall = np.maximum(y.max(axis=0), body_radius) - np.minimum(y.min(axis=0), -body_radius)
    need = np.maximum(tall / 2, wide / 2 * half / (width / 2 - 34.0))
    score = need / need.min() + tilt_cost
    if len(observed):
        depth = observed @ views.T
        near = np.hypot(observed @ right.T, observed @ up.T) < 1.05 * body_radius
        score = score + 1.5 * (near & (depth < 0)).mean(axis=0) + 0.4 * (near & (depth >= 0)).mean(axis=0)
        # An observed arc that is seen end-on says little.
        if len(observed) > 1:
            chord = observed[-1] - observed[0]
            length = float(np.linalg.norm(chord)) or 1.0
            score = score + 0.4 * (1.0 - np.hypot(right @ chord, up @ chord) / length)
    # Seen from the north where it costs little: the equator's north side is the familiar one.
    score = score + np.where(views[:, 2] < 0.0, 0.3, 0.0) + np.where(usable, 0.0, 9.0)
    best = int(np.argmin(score))
    if before is not None and score[-1] < score[best] + _CLEARLY_BETTER:
        return before
    view = views[best]
    ra = float(round(np.degrees(np.arctan2(view[1], view[0])))) % 360.0
    return ra, float(round(np.degrees(np.arcsin(np.clip(view[2], -1.0, 1.0)))))
