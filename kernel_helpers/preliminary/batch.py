"""Many triples at once: arrays in, one row per root out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.lines_of_sight import Array, checked_rows, time_ordered
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.root_orbits import EXCESS_LIMIT_KM_S, RootOrbits, positions, solve_parts

#: Triples solved together: large enough to amortise NumPy's calls, small enough to stay in the cache.
CHUNK = 8192


@dataclass(frozen=True, eq=False)
class SolvedTriples:
    """Orbits of many triples, one row per positive root.

    A triple without any root has one row of NaN that carries its status, so that no triple is lost.

    Parameters
    ----------
    triple : ndarray of int, shape (m,)
        Index of the triple in the input, ascending.
    root_km : ndarray, shape (m,)
        Root of Gauss's polynomial, ascending within a triple; for an orbit that no root led to (found by
        scanning the slant range) its own middle distance.
    positions_km : ndarray, shape (m, 3, 3)
        Positions of the converged orbit at the three observations (their emission times with light time),
        in the order of the input.
    velocity_km_s : ndarray, shape (m, 3)
        Velocity at the middle one in time.
    status : ndarray of int, shape (m,)
        :class:`~firstarc.preliminary.outcome.Outcome`; 0 is an admissible converged orbit.
    iterations : ndarray of int, shape (m,)
        Newton iterations.
    """

    triple: Array
    root_km: Array
    positions_km: Array
    velocity_km_s: Array
    status: Array
    iterations: Array

    def __len__(self) -> int:
        return len(self.triple)

    @property
    def admissible(self) -> Array:
        """Mask of the rows that hold an admissible orbit."""
        mask: Array = self.status == Outcome.CONVERGED
        return mask

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, SolvedTriples):
            return NotImplemented
        return all(
            np.array_equal(getattr(self, name), getattr(other, name), equal_nan=name not in ("triple", "status"))
            for name in self.__dataclass_fields__
        )

    def __repr__(self) -> str:
        codes, counts = np.unique(self.status, return_counts=True)
        parts = ", ".join(f"{count} {Outcome(code).words}" for code, count in zip(codes, counts, strict=False))
        return f"<SolvedTriples: {len(self)} rows of {len(np.unique(self.triple))} triples: {parts or 'none'}>"


def solve_triples(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    body_radius_km: float = 0.0,
    excess_limit_km_s: float = EXCESS_LIMIT_KM_S,
    thorough: bool = True,
    chunk: int = CHUNK,
) -> SolvedTriples:
    """Exact two-body orbits through many triples of sight lines, every root of Gauss's polynomial.

    Parameters
    ----------
    los : array_like, shape (n, 3, 3)
        Directions, one a row (any length but zero): triple, observation, component; ICRF axes.
    observer_km : array_like, shape (n, 3, 3)
        Observer from the centre at reception.
    t_s : array_like, shape (n, 3)
        Reception times, TDB seconds, any order within a triple.
    gm_km3_s2 : float
        Gravitational parameter of the centre.
    center_velocity_km_s : array_like, shape (n, 3, 3), optional
        Barycentric velocity of the centre at reception; used with light time.
    light_time : bool
        True for astrometric directions, False for geometric ones.
    body_radius_km : float
        With a positive value, orbits below the surface get the status BELOW_SURFACE.
    excess_limit_km_s : float
        Largest hyperbolic excess that is taken.
    thorough : bool
        Where no root gives an admissible orbit the slant range is scanned for one; True scans also where
        a long arc may have cost the truncated polynomial a pair of roots, which takes up to twice as long.
    chunk : int
        Triples solved together; bounds the memory in use, does not change the result.

    Returns
    -------
    SolvedTriples

    Raises
    ------
    UsageError
        Shapes that do not fit, or a gravitational parameter that is not positive.

    References
    ----------
    Curtis, *Orbital Mechanics for Engineering Students*, section 5.10 (the roots); Battin 1999, section 9.7
    (the partials of the refinement).
    """
    if not (np.isfinite(gm_km3_s2) and gm_km3_s2 > 0.0):
        raise UsageError(f"gm_km3_s2 is {gm_km3_s2!r}; expected a positive number in km3/s2")
    if chunk < 1:
        raise UsageError(f"chunk is {chunk!r}; expected a positive number of triples")
    los_, observer, times, moving = checked_rows(los, observer_km, t_s, center_velocity_km_s, single=False)
    parts = []
    for begin in range(0, len(los_), chunk):
        piece = slice(begin, begin + chunk)
        parts.append(
            _solved(
                los_[piece],
                observer[piece],
                times[piece],
                None if moving is None else moving[piece],
                float(gm_km3_s2),
                light_time,
                body_radius_km,
                excess_limit_km_s,
                thorough,
                begin,
            )
        )
    if not parts:
        nothing = np.zeros(0, dtype=int)
        return SolvedTriples(nothing, np.zeros(0), np.zeros((0, 3, 3)), np.zeros((0, 3)), nothing, nothing)
    return SolvedTriples(*(np.concatenate(columns) for columns in zip(*parts, strict=False)))


def _solved(
    los: Array,
    observer: Array,
    times: Array,
    moving: Array | None,
    gm: float,
    light_time: bool,
    body_radius_km: float,
    excess_limit_km_s: float,
    thorough: bool,
    offset: int,
) -> tuple[Array, ...]:
    lines, order, _ = time_ordered(los, observer, times, moving, gm, light_time)
    codes, _, parts = solve_parts(lines, body_radius_km, excess_limit_km_s, False, thorough)
    rows = [_rows(orbits, order) for orbits in parts if orbits.triple.size]
    empty = np.flatnonzero(codes != Outcome.CONVERGED)
    if empty.size or not rows:
        k = empty.size
        none = np.full((k, 3, 3), np.nan)
        rows.append((empty, none[:, 0, 0], none, none[:, 0], codes[empty], np.zeros(k, dtype=int)))
    columns = rows[0]
    if len(rows) > 1:
        columns = tuple(np.concatenate(several) for several in zip(*rows, strict=True))
        sort = np.lexsort((columns[1], columns[0]))
        columns = tuple(column[sort] for column in columns)
    return (columns[0] + offset, *columns[1:])


def _rows(orbits: RootOrbits, order: Array) -> tuple[Array, ...]:
    """Triple, root, positions in the caller's order, velocity, outcome and iterations of each orbit."""
    found = orbits.refined
    placed = positions(orbits.lines, found.range_km).transpose(2, 0, 1)
    order = order[orbits.triple]
    if (order != np.arange(3)).any():
        rows = np.arange(len(order))[:, None]
        back = np.empty_like(placed)
        back[rows, order] = placed
        placed = back
    velocity = found.v2_km_s.T
    lost = np.flatnonzero(~found.converged)
    if lost.size:
        placed[lost], velocity[lost] = np.nan, np.nan
    return orbits.triple, orbits.root_km, placed, velocity, orbits.outcome, found.iterations
