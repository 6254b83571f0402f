"""What every preliminary method besides Gauss' returns for each of its solutions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from firstarc.preliminary.lines_of_sight import Array
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.solution import Iteration
from firstarc.results import Status


@dataclass(frozen=True, eq=False)
class MethodOrbit:
    """One solution of one method.

    Parameters
    ----------
    method : str
        Name as given to ``firstarc.preliminary(method=...)``.
    assumption : str
        What was assumed beyond the observations, in words ("" for nothing).
    rows : tuple of int
        Positions of the observations used, in order of time.
    outcome : Outcome
    status : Status
        Admissible where its code is CONVERGED; otherwise the sentence says why it is rejected.
    remark : str
        A doubt that does not reject ("" for none).
    root_km : float
        Distance from the centre at the middle observation used, as the method's own equation gave it.
    estimate : ndarray, shape (6,)
        State (km, km/s) at ``t_state_s`` by the method's own formula, before any refinement; NaN if there is none.
    state : ndarray, shape (6,)
        Final state at ``t_state_s``.
    t_state_s : float
        Reception time of the middle observation used, TDB seconds.
    range_km : ndarray, shape (k,)
        Slant ranges at the observations used.
    positions_km : ndarray, shape (k, 3)
        Positions on the lines of sight at ``emission_t_s``.
    emission_t_s : ndarray, shape (k,)
    miss_rad : ndarray, shape (k,)
        Angles by which the final orbit misses the directions used.
    covariance : ndarray, shape (6, 6), or None
        Of ``state`` from the stated sigmas, to first order; None without sigmas.
    range_sigma_km : float
        Sigma of the middle slant range; NaN without sigmas.
    iterations : int
        Of the refinement.
    history : tuple of Iteration
        Its course, the start first; ranges and misses in the order of ``rows``. Empty where nothing was refined.
    """

    method: str
    assumption: str
    rows: tuple[int, ...]
    outcome: Outcome
    status: Status
    remark: str
    root_km: float
    estimate: Array
    state: Array
    t_state_s: float
    range_km: Array
    positions_km: Array
    emission_t_s: Array
    miss_rad: Array
    covariance: Array | None
    range_sigma_km: float
    iterations: int
    history: tuple[Iteration, ...] = ()

    @property
    def admissible(self) -> bool:
        return self.outcome == Outcome.CONVERGED

    @property
    def has_orbit(self) -> bool:
        """True when ``state`` holds numbers, admissible or not."""
        return bool(np.isfinite(self.state).all())


def without_orbit(
    method: str, rows: tuple[int, ...], outcome: Outcome, sentence: str, t_state_s: float, assumption: str = ""
) -> MethodOrbit:
    """The result of a method that found no orbit: every number NaN, the sentence says why."""
    nothing, k = np.full(6, np.nan), len(rows)
    return MethodOrbit(
        method,
        assumption,
        rows,
        outcome,
        Status(outcome.code, sentence),
        "",
        float("nan"),
        nothing,
        nothing.copy(),
        t_state_s,
        np.full(k, np.nan),
        np.full((k, 3), np.nan),
        np.full(k, np.nan),
        np.full(k, np.nan),
        None,
        float("nan"),
        0,
    )
