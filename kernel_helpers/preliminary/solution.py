"""What three observations give, stage by stage: plain frozen results of the numeric core.

All arrays are rows in the order in which the three observations were given, unless said to be in time order.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike

from firstarc.preliminary.gauss import range_polynomial, root_function
from firstarc.preliminary.lines_of_sight import Array, Lines
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.rule import RuleChoice
from firstarc.preliminary.textbook_loop import gauss_gibbs_loop
from firstarc.results import Status

#: Passes of the textbook loop kept for the convergence view.
LOOP_PASSES = 12


@dataclass(frozen=True, eq=False)
class CoreStage:
    """One stage of a candidate.

    Parameters
    ----------
    status : Status
    range_km : ndarray, shape (3,)
        Slant ranges.
    positions_km : ndarray, shape (3, 3)
        Positions on the sight lines, one a row, at ``emission_t_s``.
    emission_t_s : ndarray, shape (3,)
    state : ndarray, shape (6,)
        Position (km) and velocity (km/s) at ``t_state_s``, the middle reception time.
    t_state_s : float
    v2_km_s : ndarray, shape (3,)
        Velocity at the middle emission time, the one that the stage's formula gives.
    miss_rad : ndarray, shape (3,)
        Angle by which the orbit of this state misses each observed direction.
    """

    status: Status
    range_km: Array
    positions_km: Array
    emission_t_s: Array
    state: Array
    t_state_s: float
    v2_km_s: Array
    miss_rad: Array


@dataclass(frozen=True, eq=False)
class CoreGibbs(CoreStage):
    """The Gibbs or Herrick-Gibbs correction.

    Parameters
    ----------
    choice : RuleChoice
        The rule used, its reason, both predicted errors, the textbook's word.
    coplanarity_deg : float
        Angle of the first position out of the plane of the other two.
    separations_deg : ndarray, shape (3,)
        Angles between positions 1-2, 2-3 and 1-3 in time order.
    n_km3, d_km2, s_km2 : ndarray, shape (3,)
        The vectors N, D, S of Gibbs.
    """

    choice: RuleChoice
    coplanarity_deg: float
    separations_deg: Array
    n_km3: Array
    d_km2: Array
    s_km2: Array


@dataclass(frozen=True)
class Iteration:
    """One row of the refinement's history: ranges (3,) km, largest relative change, misses (3,) rad."""

    range_km: tuple[float, float, float]
    change: float
    miss_rad: tuple[float, float, float]


@dataclass(frozen=True, eq=False)
class CoreConverged(CoreStage):
    """The exact two-body orbit through the three lines of sight.

    Parameters
    ----------
    iterations : int
        Newton iterations.
    start : str
        Which start led there: "Gibbs", "Gauss", "averaged loop" or "range scan".
    history : tuple of Iteration
        The start first.
    covariance : ndarray, shape (6, 6), or None
        Of ``state``, from the sigmas of the six angles (first order; six angles fix six numbers, so the map
        is exact); None without sigmas or without an orbit.
    range2_sigma_km : float
        Sigma of the middle slant range; NaN without sigmas.
    q_km : float
        Periapsis distance.
    excess_km_s : float
        Hyperbolic excess; 0 on a closed orbit.
    """

    iterations: int
    start: str
    history: tuple[Iteration, ...]
    covariance: Array | None
    range2_sigma_km: float
    q_km: float
    excess_km_s: float


@dataclass(frozen=True, eq=False)
class CoreCandidate:
    """A root with its three stages.

    Parameters
    ----------
    root_km : float
    double : bool
        Two roots run together here.
    outcome : Outcome
    status : Status
        Admissible where its code is CONVERGED; otherwise the sentence says why it is rejected.
    remark : str
        A doubt that does not reject ("" for none).
    gauss : CoreStage
    gibbs : CoreGibbs
    converged : CoreConverged
    """

    root_km: float
    double: bool
    outcome: Outcome
    status: Status
    remark: str
    gauss: CoreStage
    gibbs: CoreGibbs
    converged: CoreConverged

    @property
    def admissible(self) -> bool:
        return self.outcome == Outcome.CONVERGED


@dataclass(frozen=True, eq=False)
class RootFunction:
    """x^8 + a x^6 + b x^3 + c (km): its positive roots are the middle distances; NaN if there is none."""

    a_km2: float
    b_km5: float
    c_km8: float
    unit_km: float

    def __call__(self, x_km: ArrayLike) -> Array:
        """Value at x divided by ``unit_km``^8: a number to draw."""
        return root_function(self.a_km2, self.b_km5, self.c_km8, x_km, self.unit_km)

    def slant_range_km(self, x_km: ArrayLike, big_a_km: float, big_b: float, gm_km3_s2: float) -> Array:
        """Middle slant range A + gm B / x^3 that goes with a middle distance."""
        result: Array = big_a_km + gm_km3_s2 * big_b / np.asarray(x_km, dtype=float) ** 3
        return result


@dataclass(frozen=True, eq=False)
class TripleSolution:
    """Everything that three observations give.

    Parameters
    ----------
    status : Status
    polynomial : RootFunction
    big_a_km, big_b_km_s2 : float
        A and B of the middle range A + gm B / r^3.
    roots_km : ndarray
        Positive roots, ascending.
    determinant, determinant_sigma : float
        L1 . (L2 x L3) of the unit vectors in time order, and its sigma (NaN without sigmas).
    separations_deg : ndarray, shape (3,)
        Angles between the sight lines 1-2, 2-3, 1-3 in time order.
    t_s : ndarray, shape (3,)
        Reception times as given.
    order : ndarray of int, shape (3,)
        Indices that sort the observations in time.
    gm_km3_s2, light_time, body_radius_km
        As given.
    candidates : tuple of CoreCandidate
        One per positive root, ascending, and any orbit that the range scan adds.
    lines : Lines
        The three lines as the numeric core holds them.
    """

    status: Status
    polynomial: RootFunction
    big_a_km: float
    big_b_km_s2: float
    roots_km: Array
    determinant: float
    determinant_sigma: float
    separations_deg: Array
    t_s: Array
    order: Array
    gm_km3_s2: float
    light_time: bool
    body_radius_km: float
    candidates: tuple[CoreCandidate, ...]
    lines: Lines = field(repr=False)

    def loop_change(self, index: int, averaged: bool, passes: int = LOOP_PASSES) -> Array:
        """Largest relative change of a slant range in each pass of the textbook loop, for the record.

        Parameters
        ----------
        index : int
            Position in ``candidates``.
        averaged : bool
            Average old and new f and g, or replace them outright (which diverges for most distant
            satellites).
        passes : int

        Returns
        -------
        ndarray, shape (passes,)
            NaN once a pass has no orbit.
        """
        one = self.candidates[index]
        order, corrected = self.order, one.gibbs.v2_km_s
        start = corrected if np.isfinite(corrected).all() else one.gauss.v2_km_s
        poly = range_polynomial(self.lines)
        ranges = one.gauss.range_km[order][:, None]
        loop = gauss_gibbs_loop(self.lines, poly, ranges, start[:, None], passes, averaged)
        return loop.change[1:, 0]
