"""Slow functions of time that are costly to evaluate, interpolated between nodes a quarter of a day apart.

Long series of the Earth's motion cost 10 to 30 us an instant, too much where a slider asks for them sixty times
a second. Their shortest periods are days, so that cubics between quarter days keep all digits that matter.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

_MJD_ZERO = 2400000.5
_NODE_D = 0.25
#: Nodes kept, 68 years; beyond it the store starts anew.
_MOST_NODES = 100_000

_Series = Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]]


class QuarterDay:
    """A function of two-part TT that is evaluated at nodes, kept there, and interpolated by cubics.

    Parameters
    ----------
    series : callable
        Takes two-part Julian dates (m,), gives values (m, c).
    """

    def __init__(self, series: _Series):
        self._series = series
        self._kept: dict[int, NDArray[np.float64]] = {}

    def __call__(self, tt1: NDArray[np.float64], tt2: NDArray[np.float64]) -> NDArray[np.float64]:
        """Values (n, c) at two-part Julian dates (n,)."""
        u = ((tt1 - _MJD_ZERO) + tt2) / _NODE_D
        whole = np.floor(u)
        f = u - whole
        first, place = np.unique(whole.astype(np.int64), return_inverse=True)
        values = self._at_nodes((first[:, None] + np.arange(-1, 3)).ravel().tolist())
        weights = np.stack(
            [
                -f * (f - 1.0) * (f - 2.0) / 6.0,
                (f + 1.0) * (f - 1.0) * (f - 2.0) / 2.0,
                -(f + 1.0) * f * (f - 2.0) / 2.0,
                (f + 1.0) * f * (f - 1.0) / 6.0,
            ],
            axis=1,
        )
        nodes = values.reshape(len(first), 4, -1)[place.reshape(-1)]
        return np.einsum("nw,nwc->nc", weights, nodes)

    def _at_nodes(self, wanted: list[int]) -> NDArray[np.float64]:
        kept = self._kept
        missing = sorted(set(wanted) - kept.keys())
        if missing:
            found = self._series(np.full(len(missing), _MJD_ZERO), np.array(missing) * _NODE_D)
            # A new dict, not the old one changed: another thread may be reading it.
            kept = {**(kept if len(kept) < _MOST_NODES else {}), **dict(zip(missing, found, strict=True))}
            if not all(node in kept for node in wanted):
                return self._series(np.full(len(wanted), _MJD_ZERO), np.array(wanted) * _NODE_D)
            self._kept = kept
        return np.array([kept[node] for node in wanted])
