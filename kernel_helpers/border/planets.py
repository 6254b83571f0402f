"""Sun, Moon and planets as callables of t_s for the numeric core, and the pole of the Earth.

The JPL ephemeris that is installed (see :mod:`firstarc.border.solar_system`) is re-expanded once over the span
of an arc: one table of Chebyshev series per body, relative to the centre, in pieces of four days. The pieces of
the ephemeris itself last four days or a multiple of it, so this is exact to rounding.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
from erfa import ufunc as _erfa
from numpy.typing import NDArray

from firstarc.border.solar_system import ephemeris
from firstarc.constants import DAY_S
from firstarc.errors import UsageError

#: Way from the solar-system barycentre to each body, as (centre, target) pairs of an SPK file.
_WAYS: dict[str, tuple[tuple[int, int], ...]] = {
    "sun": ((0, 10),),
    "mercury": ((0, 1),),
    "venus": ((0, 2),),
    "earth": ((0, 3), (3, 399)),
    "moon": ((0, 3), (3, 301)),
    "mars": ((0, 4),),
    "jupiter": ((0, 5),),
    "saturn": ((0, 6),),
    "uranus": ((0, 7),),
    "neptune": ((0, 8),),
}
NAMES = tuple(_WAYS)
#: Days of a piece and terms of its series; the longest series of DE421 has 14 terms.
_PIECE_DAYS = 4.0
_TERMS = 15
#: A grid on which every piece of the JPL ephemerides begins.
_GRID_JD = 2414864.5
#: Days added before and after the span asked for: light time, and the length of an integration's last step.
_MARGIN_DAYS = 8.0


@dataclass(frozen=True, eq=False)
class Track:
    """Position of one body from the centre: call it with t_s (n,), get (n, 3) km on ICRF axes.

    Parameters
    ----------
    name, center, source : str
    epoch_tdb : tuple of float
        Two-part TDB Julian date that t_s counts from.
    start_s, piece_s : float
        Beginning of the table, seconds from the epoch, and length of a piece.
    series : ndarray, shape (pieces, terms, 3)
        Chebyshev coefficients in km.
    """

    name: str
    center: str
    source: str
    epoch_tdb: tuple[float, float]
    start_s: float
    piece_s: float
    series: NDArray[np.float64] = field(repr=False)

    def __call__(self, t_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Positions (n, 3) km.

        Raises
        ------
        UsageError
            A time lies outside the ephemeris.
        """
        t = np.atleast_1d(np.asarray(t_s, dtype=float))
        u = (t - self.start_s) / self.piece_s
        pieces, terms, _ = self.series.shape
        low, high = float(u.min()), float(u.max())
        if not (low >= 0.0 and high <= pieces):
            return self._elsewhere(t)
        piece = np.minimum(u.astype(np.int64), pieces - 1)
        x = 2.0 * (u - piece) - 1.0
        # Clenshaw's recurrence on the gathered rows.
        rows = self.series[piece]
        twice = (2.0 * x)[:, None]
        b1 = np.zeros((len(t), 3))
        b2 = b1
        for j in range(terms - 1, 0, -1):
            b1, b2 = twice * b1 - b2 + rows[:, j], b1
        return np.asarray(x[:, None] * b1 - b2 + rows[:, 0])

    def _elsewhere(self, t: NDArray[np.float64]) -> NDArray[np.float64]:
        """Times outside the table: straight from the file."""
        if not np.all(np.isfinite(t)):
            raise UsageError(f"position of {self.name}: t_s holds numbers that are not finite")
        jd1 = np.full(t.shape, self.epoch_tdb[0])
        jd2 = self.epoch_tdb[1] + t / DAY_S
        first, last = span_jd()
        jd = jd1 + jd2
        if jd.min() < first or jd.max() > last:
            raise UsageError(
                f"position of {self.name}: {self.source} covers TDB Julian dates {first:.1f} to {last:.1f}, "
                f"asked for {jd.min():.1f} to {jd.max():.1f}; use two-body motion (no third bodies) outside"
            )
        return _barycentric(self.name, jd1, jd2) - _barycentric(self.center, jd1, jd2)


@lru_cache(maxsize=1)
def _kernel() -> Any:
    return ephemeris().kernel


def _barycentric(name: str, jd1: NDArray[np.float64], jd2: NDArray[np.float64]) -> NDArray[np.float64]:
    kernel = _kernel()
    total = np.zeros((len(jd1), 3))
    for pair in _WAYS[name]:
        total += kernel[pair].compute(jd1, jd2).T
    return total


@lru_cache(maxsize=1)
def span_jd() -> tuple[float, float]:
    """First and last TDB Julian date of the ephemeris."""
    kernel = _kernel()
    segments = [kernel[pair] for way in _WAYS.values() for pair in way]
    return max(s.start_jd for s in segments), min(s.end_jd for s in segments)


def tracks(
    center: str,
    epoch_tdb: tuple[float, float],
    span_s: tuple[float, float],
    names: Sequence[str] | None = None,
) -> dict[str, Track]:
    """Positions of bodies from a centre over the span of an arc.

    Parameters
    ----------
    center : str
        ``"earth"`` or ``"sun"``.
    epoch_tdb : tuple of float
        Two-part TDB Julian date of the arc's epoch.
    span_s : tuple of float
        First and last time that matter, TDB seconds from the epoch. Times outside are answered too,
        more slowly.
    names : sequence of str, optional
        Of :data:`NAMES`; default the Sun and the Moon about the Earth, planets and the Moon about the Sun.

    Returns
    -------
    dict of str to Track

    Raises
    ------
    UsageError
        An unknown name or centre, or a span that the ephemeris does not cover.
    """
    if center not in ("earth", "sun"):
        raise UsageError(f"center={center!r}; expected 'earth' or 'sun'")
    if names is None:
        names = ("sun", "moon") if center == "earth" else tuple(n for n in NAMES if n != "sun")
    unknown = [name for name in names if name not in _WAYS or name == center]
    if unknown:
        raise UsageError(f"names={unknown}; about the {center} expected some of {', '.join(NAMES)} but not itself")
    begin, end = min(span_s), max(span_s)
    if not (np.isfinite(begin) and np.isfinite(end)):
        raise UsageError(f"span_s={span_s!r}; expected two finite numbers of seconds")
    first, last = span_jd()
    jd = epoch_tdb[0] + epoch_tdb[1]
    if jd + begin / DAY_S < first or jd + end / DAY_S > last:
        raise UsageError(
            f"{ephemeris().name} covers TDB Julian dates {first:.1f} to {last:.1f}, the span reaches from "
            f"{jd + begin / DAY_S:.1f} to {jd + end / DAY_S:.1f}; use two-body motion there"
        )
    # Whole pieces of the ephemeris, so that the table repeats its polynomials.
    piece = _PIECE_DAYS
    low = max(_GRID_JD + np.floor((jd + begin / DAY_S - _MARGIN_DAYS - _GRID_JD) / piece) * piece, first)
    count = int(np.ceil((min(jd + end / DAY_S + _MARGIN_DAYS, last) - low) / piece))
    count = max(1, min(count, int((last - low) / piece)))
    starts = low + piece * np.arange(count)
    nodes = -np.cos((np.arange(_TERMS) + 0.5) * np.pi / _TERMS)
    jd1 = np.repeat(starts, _TERMS)
    jd2 = np.tile(0.5 * piece * (nodes + 1.0), count)
    transform = np.cos(np.outer(np.arange(_TERMS), np.arccos(nodes))) * (2.0 / _TERMS)
    transform[0] *= 0.5
    # The epoch's two parts, so that no digits of t_s are lost.
    start_s = ((low - epoch_tdb[0]) - epoch_tdb[1]) * DAY_S
    origin = _barycentric(center, jd1, jd2)
    out = {}
    for name in names:
        values = (_barycentric(name, jd1, jd2) - origin).reshape(count, _TERMS, 3)
        series = np.einsum("jk,pkx->pjx", transform, values)
        series.setflags(write=False)
        out[name] = Track(
            name, center, ephemeris().name, (float(epoch_tdb[0]), float(epoch_tdb[1])), start_s, piece * DAY_S, series
        )
    return out


def earth_pole(epoch_tdb: tuple[float, float]) -> tuple[float, float, float]:
    """Unit vector of the Earth's true pole (celestial intermediate pole, IAU 2006/2000A) on ICRF axes.

    TDB is taken for TT; celestial pole offsets (below 1 mas) are left out.
    """
    x, y, _ = _erfa.xys06a(epoch_tdb[0], epoch_tdb[1])
    return float(x), float(y), float(np.sqrt(1.0 - x * x - y * y))
