"""Cutting of polylines to a box, and directions on the sky."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


def runs(points: Array, inside: NDArray[np.bool_]) -> list[Array]:
    """The unbroken pieces of a polyline (m, k) whose points are all ``inside`` (m,), two points at least."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], inside, [False])).astype(np.int8)))
    return [points[a:b] for a, b in zip(edges[::2], edges[1::2], strict=True) if b - a > 1]


def clipped(points: Array, box: tuple[float, float, float, float]) -> list[Array]:
    """The pieces of a polyline (m, 2) inside a box (x0, y0, x1, y1), cut exactly at its edges.

    Points that are not finite break the line. Every segment is cut by its parameters at the four edges.
    """
    if len(points) < 2:
        return []
    a, d = points[:-1], np.diff(points, axis=0)
    low, high = np.array(box[:2]), np.array(box[2:])
    with np.errstate(divide="ignore", invalid="ignore"):
        s, t = (low - a) / d, (high - a) / d
        entry, leave = np.minimum(s, t), np.maximum(s, t)
        # A segment along an axis is inside that pair of edges for all parameters, or for none.
        flat, within = d == 0.0, (a >= low) & (a <= high)
        entry = np.where(flat, np.where(within, -np.inf, np.inf), entry)
        leave = np.where(flat, np.where(within, np.inf, -np.inf), leave)
        t0 = np.maximum(entry.max(axis=1), 0.0)
        t1 = np.minimum(leave.min(axis=1), 1.0)
        shown = t0 < t1
    index = np.flatnonzero(shown)
    if not len(index):
        return []
    if len(index) == len(a) and (t0 == 0.0).all() and (t1 == 1.0).all():
        return [points]
    start, end = a[index] + t0[index, None] * d[index], a[index] + t1[index, None] * d[index]
    joined = (np.diff(index) == 1) & (t1[index[:-1]] == 1.0) & (t0[index[1:]] == 0.0)
    out = []
    first = 0
    for last in [*np.flatnonzero(~joined).tolist(), len(index) - 1]:
        out.append(np.vstack([start[first], end[first : last + 1]]))
        first = last + 1
    return out


def unit_vectors(ra_deg: ArrayLike, dec_deg: ArrayLike) -> Array:
    """Unit vectors (..., 3) of directions given in degrees."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)


def view_axes(ra_deg: float, dec_deg: float) -> Array:
    """Rows right, up and towards the viewer (3, 3) of an orthographic view from a direction, north up."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    sa, ca, sd, cd = np.sin(ra), np.cos(ra), np.sin(dec), np.cos(dec)
    return np.array([[-sa, ca, 0.0], [-sd * ca, -sd * sa, cd], [cd * ca, cd * sa, sd]])
