"""Which three of many observations to start from: by trial over many triples.

Every trial triple is solved for all its roots, and each orbit is held against all observations. Orbits that the
bulk of the observations agree with are kept (the median of the residuals in sigmas, so that one bad observation
cannot spoil the choice, nor be part of it unseen). Of their triples those whose lines of sight stand farthest out of
one plane, in sigmas of the determinant, are solved again with their noise, and the one with the smallest predicted
error of position and velocity wins.
"""

from __future__ import annotations

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.preliminary.batch import SolvedTriples, solve_triples
from firstarc.preliminary.candidates import solve_triple
from firstarc.preliminary.lines_of_sight import Array, cross, determinant, dot

#: Observations from which trial triples are made, and those that the orbits are held against, at most.
TRIAL_ROWS, JUDGE_ROWS = 12, 60
#: Orbits count as agreeing with the bulk up to this factor of the best median, or up to this many sigmas.
NEAR_BEST, NEAR_SIGMA = 1.5, 1.5
#: A median residual of more sigmas is no agreement.
DISAGREE_SIGMA = 5.0
#: Triples whose error is predicted in full.
SHORTLIST = 24


def choose_pick(
    los: Array,
    observer_km: Array,
    t_s: Array,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: Array | None,
    light_time: bool,
    sigma_rad: Array,
    body_radius_km: float,
) -> tuple[tuple[int, int, int], str]:
    """Three rows in order of time, and the reason.

    Parameters
    ----------
    los, observer_km, center_velocity_km_s : ndarray, shape (n, 3)
    t_s : ndarray, shape (n,)
    gm_km3_s2 : float
    light_time : bool
    sigma_rad : ndarray, shape (n, 2)
    body_radius_km : float

    Raises
    ------
    UsageError
        Fewer than three observations.
    """
    count = len(t_s)
    if count < 3:
        raise UsageError(f"a preliminary orbit needs three observations, got {count}")
    order = np.argsort(t_s, kind="stable")
    if count == 3:
        return _three(order), "there are only three observations."
    trial = order[np.unique(np.linspace(0, count - 1, min(count, TRIAL_ROWS)).round().astype(int))]
    triples = np.array([t for t in combinations(trial, 3) if np.diff(t_s[list(t)]).min() > 0.0])
    ends = _three(order[[0, (count - 1) // 2, count - 1]])
    if not len(triples):
        return ends, "first, middle and last; the times do not allow another choice."
    moving = None if center_velocity_km_s is None else center_velocity_km_s[triples]
    found = solve_triples(
        los[triples],
        observer_km[triples],
        t_s[triples],
        gm_km3_s2,
        center_velocity_km_s=moving,
        light_time=light_time,
        body_radius_km=body_radius_km,
    )
    good = np.flatnonzero(found.admissible)
    if not good.size:
        return ends, f"first, middle and last in time: none of {len(triples)} trial picks gives an admissible orbit."
    judges = order[np.unique(np.linspace(0, count - 1, min(count, JUDGE_ROWS)).round().astype(int))]
    misfit = _median_misfit(
        found.positions_km[good][:, 1], found.velocity_km_s[good], triples[found.triple[good]], los, observer_km, t_s,
        gm_km3_s2, center_velocity_km_s, light_time, sigma_rad, judges,
    )  # fmt: skip
    if not np.isfinite(misfit).any():
        return ends, "first, middle and last in time: no trial orbit can be held against the other observations."
    limit = max(NEAR_BEST * float(np.nanmin(misfit)), NEAR_SIGMA)
    near = np.unique(found.triple[good[misfit <= limit]])
    chosen = triples[near]
    strength = _determinant_in_sigmas(los[chosen].transpose(1, 2, 0), sigma_rad[chosen])
    short = np.argsort(-strength, kind="stable")[:SHORTLIST]
    errors = np.array(
        [
            _predicted_error(
                los[rows], observer_km[rows], t_s[rows], gm_km3_s2,
                None if center_velocity_km_s is None else center_velocity_km_s[rows],
                light_time, sigma_rad[rows], body_radius_km, _best_root(found, good, misfit, int(near[k])),
            )
            for k, rows in zip(short, chosen[short], strict=True)
        ]
    )  # fmt: skip
    best = int(short[int(np.argmin(errors))]) if np.isfinite(errors).any() else int(short[0])
    agrees = misfit[found.triple[good] == near[best]].min()
    least = float(np.min(errors)) if np.isfinite(errors).any() else float("nan")
    predicted = f"{100.0 * least:.2g} % of distance and speed" if np.isfinite(least) else "not to be had"
    if agrees > DISAGREE_SIGMA:
        agreement = "none gives an orbit that the other observations agree with; among those that come nearest"
    else:
        agreement = f"{len(near)} give an orbit that the other observations agree with; of these"
    reason = (
        f"of {len(triples)} picks tried, {agreement} this has the smallest predicted error ({predicted}; determinant "
        f"{strength[best]:.3g} times its sigma, median residual of the others {agrees:.2g} sigma)."
    )
    return _three(chosen[best]), reason


def _best_root(found: SolvedTriples, good: NDArray[np.int64], misfit: Array, triple: int) -> float:
    """Root of the orbit of a triple that the observations agree with best."""
    mine = np.flatnonzero(found.triple[good] == triple)
    return float(found.root_km[good[mine[int(np.argmin(misfit[mine]))]]])


def _predicted_error(
    los: Array, observer_km: Array, t_s: Array, gm: float, moving: Array | None, light_time: bool,
    sigma_rad: Array, body_radius_km: float, root_km: float,
) -> float:  # fmt: skip
    """Sigma of the weakest direction of the state, as part of distance and speed; inf without an orbit."""
    solution = solve_triple(
        los, observer_km, t_s, gm, center_velocity_km_s=moving, light_time=light_time, sigma_rad=sigma_rad,
        body_radius_km=body_radius_km,
    )  # fmt: skip
    good = [one for one in solution.candidates if one.admissible and one.converged.covariance is not None]
    if not good:
        return float("inf")
    final = min(good, key=lambda one: abs(one.root_km - root_km)).converged
    size = np.repeat([np.linalg.norm(final.state[:3]), np.linalg.norm(final.state[3:])], 3)
    return float(np.sqrt(max(np.linalg.eigvalsh(final.covariance / np.outer(size, size))[-1], 0.0)))


def _determinant_in_sigmas(unit: Array, sigma_rad: Array) -> Array:
    """Size of the determinant over its sigma, each direction's noise taken as round; shape (m,)."""
    normals = np.stack((cross(unit[1], unit[2]), cross(unit[2], unit[0]), cross(unit[0], unit[1])))
    along = dot(normals, unit)
    slope_squared = dot(normals, normals) - along**2
    with np.errstate(all="ignore"):
        noise = np.sqrt(np.sum(slope_squared * np.mean(sigma_rad**2, axis=2).T, axis=0))
        result: Array = np.nan_to_num(np.abs(determinant(unit)) / noise)
    return result


def _three(rows: NDArray[np.int64]) -> tuple[int, int, int]:
    first, middle, last = (int(row) for row in rows)
    return first, middle, last


def _median_misfit(
    r2: Array, v2: Array, rows: NDArray[np.int64], los: Array, observer_km: Array, t_s: Array, gm: float,
    center_velocity_km_s: Array | None, light_time: bool, sigma_rad: Array, judges: NDArray[np.int64],
) -> Array:  # fmt: skip
    """Median residual in sigmas over the judging rows; the three rows of an orbit's own triple fit by construction."""
    middle = rows[:, 1]
    state = np.concatenate([r2, v2], axis=1)
    with np.errstate(all="ignore"):
        # positions are those of the emission; the state belongs to that instant
        delay = np.linalg.norm(r2 - observer_km[middle], axis=1) / 299792.458 if light_time else 0.0
        moving = None if center_velocity_km_s is None else center_velocity_km_s[judges]
        predicted, _, _ = predicted_directions(
            state, t_s[middle] - delay, t_s[judges], observer_km[judges], moving, gm, light_time
        )
        ratio = residuals_rad(los[judges], predicted) / sigma_rad[judges]
        size = np.hypot(ratio[..., 0], ratio[..., 1])
    own = (judges[None, :, None] == rows[:, None, :]).any(axis=2)
    size = np.where(own, np.nan, size)
    lost = ~np.isfinite(size) & ~own
    size = np.where(lost, np.inf, size)
    everything_own = own.all(axis=1)
    size[everything_own] = 0.0
    result: Array = np.nanmedian(size, axis=1)
    return result
