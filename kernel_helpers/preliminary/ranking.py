"""Order of a triple's candidates, each place with its reason.

Admissible candidates come first. Among them the residuals of the other observations decide, unless they
cannot (no others, or a difference that the noise explains); then closed orbits come before open ones and
smaller eccentricities before larger, which is a habit, not a measurement, and is said to be one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.preliminary.candidates import CoreCandidate, TripleSolution
from firstarc.preliminary.lines_of_sight import Array

#: Two candidates whose chi-squares differ by less are not separated by the residuals (2 sigma of one number).
TIE_CHI2 = 4.0
#: Without sigmas, rms values closer than this ratio are not separated.
TIE_RMS_RATIO = 1.5
_ARCSEC = np.degrees(1.0) * 3600.0


@dataclass(frozen=True, eq=False)
class Ranking:
    """Candidates in order, best first.

    Parameters
    ----------
    order : tuple of int
        Indices into ``solution.candidates``.
    reasons : tuple of str
        Why each stands where it stands, in that order.
    rms_rad : ndarray, shape (m,)
        Root mean square of the residuals of the other observations, both components, per candidate in its
        original place; NaN without other observations or without an orbit.
    chi2 : ndarray, shape (m,)
        Sum of squared residuals over sigmas of the other observations; NaN without sigmas.
    others : int
        Number of other observations.
    """

    order: tuple[int, ...]
    reasons: tuple[str, ...]
    rms_rad: Array
    chi2: Array
    others: int


def _eccentricity(one: CoreCandidate, gm: float) -> float:
    """Eccentricity of the converged orbit."""
    r, v = one.converged.state[:3], one.converged.state[3:]
    radius = float(np.sqrt(r @ r))
    vector = ((v @ v - gm / radius) * r - (r @ v) * v) / gm
    return float(np.sqrt(vector @ vector))


def rank(
    solution: TripleSolution,
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    sigma_rad: ArrayLike | None = None,
    pick: ArrayLike | None = None,
) -> Ranking:
    """Rank the candidates of a triple by all observations at hand.

    Parameters
    ----------
    solution : TripleSolution
    los : array_like, shape (n, 3)
        Unit vectors of all observations.
    observer_km : array_like, shape (n, 3)
    t_s : array_like, shape (n,)
        Reception times on the clock of ``solution``.
    center_velocity_km_s : array_like, shape (n, 3), optional
    sigma_rad : array_like, shape (n, 2), optional
    pick : array_like of int, shape (3,), optional
        The rows that the triple was made from; left out of the residuals. None: none of them is among the
        rows.

    Returns
    -------
    Ranking

    Raises
    ------
    UsageError
        Shapes that do not fit.
    """
    directions = np.asarray(los, dtype=float).reshape(-1, 3)
    n, m = len(directions), len(solution.candidates)
    others = np.ones(n, dtype=bool)
    if pick is not None:
        others[np.asarray(pick, dtype=int)] = False
    count = int(others.sum())
    rms, chi2 = np.full(m, np.nan), np.full(m, np.nan)
    solved = [k for k, one in enumerate(solution.candidates) if np.isfinite(one.converged.state).all()]
    solved = [k for k in solved if solution.candidates[k].converged.status.ok]
    if count and solved:
        times, observer = np.asarray(t_s, dtype=float), np.asarray(observer_km, dtype=float)
        if times.shape != (n,) or observer.shape != (n, 3):
            raise UsageError(f"t_s {times.shape} and observer_km {observer.shape} do not fit los {directions.shape}")
        moving = None if center_velocity_km_s is None else np.asarray(center_velocity_km_s, dtype=float)[others]
        states = np.stack([solution.candidates[k].converged.state for k in solved])
        middle = solution.candidates[solved[0]].converged.t_state_s
        seen, _, _ = predicted_directions(
            states, middle, times[others], observer[others], moving, solution.gm_km3_s2, solution.light_time
        )
        residual = residuals_rad(directions[others], seen)
        with np.errstate(all="ignore"):
            rms[solved] = np.sqrt(np.mean(residual**2, axis=(1, 2)))
            if sigma_rad is not None:
                sigma = np.asarray(sigma_rad, dtype=float).reshape(-1, 2)[others]
                total = np.sum((residual / sigma) ** 2, axis=(1, 2))
                chi2[solved] = np.where(np.isfinite(total), total, np.nan)
    admissible = [k for k, one in enumerate(solution.candidates) if one.admissible]
    rejected = [k for k in range(m) if k not in admissible]
    rejected.sort(key=lambda k: (int(solution.candidates[k].outcome), k))
    order, reasons = _ordered(solution, admissible, rms, chi2, count)
    for k in rejected:
        order.append(k)
        reasons.append(f"Rejected: {solution.candidates[k].status.sentence}")
    return Ranking(tuple(order), tuple(reasons), rms, chi2, count)


def _habit(solution: TripleSolution, k: int) -> tuple[bool, float]:
    one = solution.candidates[k]
    return one.converged.excess_km_s > 0.0, _eccentricity(one, solution.gm_km3_s2)


def _ordered(
    solution: TripleSolution, admissible: list[int], rms: Array, chi2: Array, count: int
) -> tuple[list[int], list[str]]:
    if not admissible:
        return [], []
    if len(admissible) == 1:
        text = "The only admissible root."
        if count and np.isfinite(rms[admissible[0]]):
            text += f" Residuals of the {count} other observations: {_words(rms[admissible[0]])}."
        return admissible, [text]
    with_chi = bool(np.isfinite(chi2[admissible]).any())
    score = chi2 if with_chi else rms
    value = {k: float(score[k]) if np.isfinite(score[k]) else float("inf") for k in admissible}
    least = min(value.values())
    if not count or not np.isfinite(least):
        order = sorted(admissible, key=lambda k: _habit(solution, k))
        reasons = [f"No other observations to decide: {_habit_words(solution, k)}." for k in order]
        return order, reasons
    tied = [k for k in admissible if value[k] - least < TIE_CHI2] if with_chi else []
    if not with_chi:
        tied = [k for k in admissible if value[k] <= least * TIE_RMS_RATIO]
    tied.sort(key=lambda k: _habit(solution, k))
    rest = sorted((k for k in admissible if k not in tied), key=lambda k: value[k])
    reasons = []
    for k in tied:
        text = f"Residuals of the {count} other observations: {_words(rms[k])}"
        if len(tied) > 1:
            text += f", too little to separate it from {len(tied) - 1} more: {_habit_words(solution, k)}"
        reasons.append(text + ".")
    reasons += [f"Residuals of the {count} other observations: {_words(rms[k])}." for k in rest]
    return tied + rest, reasons


def _words(rms_rad: float) -> str:
    arcsec = rms_rad * _ARCSEC
    if not np.isfinite(arcsec):
        return "none, the orbit cannot be propagated to them"
    if arcsec < 120.0:
        return f"{arcsec:.2g} arcsec rms"
    return f"{arcsec / 60.0:.3g} arcmin rms" if arcsec < 7200.0 else f"{arcsec / 3600.0:.3g} deg rms"


def _habit_words(solution: TripleSolution, k: int) -> str:
    opened, e = _habit(solution, k)
    return f"{'open' if opened else 'closed'} orbit, e = {e:.2g} (closed before open, then smaller e)"
