"""Down-weighting of many observations of one station in one night."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.fit.motion import Array

#: Observations of one station count as one night while no gap is longer, s.
NIGHT_GAP_S = 8.0 * 3600.0
#: So many observations of a night have full weight.
FULL_WEIGHT = 4


def nights(t_s: ArrayLike, station: ArrayLike, gap_s: float = NIGHT_GAP_S) -> Array:
    """Number (n,) of the night of each observation: one station, no gap longer than ``gap_s``.

    Parameters
    ----------
    t_s : array_like, shape (n,)
        Times, any order.
    station : array_like of int, shape (n,)
    gap_s : float
    """
    t, who = np.asarray(t_s, float), np.asarray(station)
    if t.shape != who.shape or t.ndim != 1:
        raise UsageError(f"station has shape {who.shape}; expected {t.shape}, one station per time")
    order = np.lexsort((t, who))
    new = np.ones(t.size, bool)
    new[1:] = (np.diff(who[order]) != 0) | (np.diff(t[order]) > gap_s)
    out = np.empty(t.size, int)
    out[order] = np.cumsum(new) - 1
    return out


def same_night_factors(t_s: ArrayLike, station: ArrayLike, gap_s: float = NIGHT_GAP_S) -> Array:
    """Factors (n,) by which to multiply sigmas: sqrt(N / 4) for N > 4 observations of a station in a night.

    Star catalogue, refraction and clock errors are shared by a night, so that N observations of it do not
    count N times.

    Parameters
    ----------
    t_s, station, gap_s
        As for :func:`nights`.

    References
    ----------
    Vereš, Farnocchia, Chesley and Chamberlin 2017, Icarus 296, 139 (recalled).

    Examples
    --------
    >>> [float(f) for f in same_night_factors([0, 60, 120, 180, 240, 300, 360, 420, 480, 1e6], [0] * 9 + [0])]
    [1.5, 1.5, 1.5, 1.5, 1.5, 1.5, 1.5, 1.5, 1.5, 1.0]
    """
    night = nights(t_s, station, gap_s)
    count = np.bincount(night)[night] if night.size else np.zeros(0)
    return np.sqrt(np.maximum(count, FULL_WEIGHT) / FULL_WEIGHT)
