"""Do observations that were not used agree with an orbit? Chi-square with the orbit's own uncertainty in it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from ..dynamics.light_time import predicted_directions, residuals_rad

Array = NDArray[np.float64]


class Agreement(NamedTuple):
    """Chi-square of the residuals, its degrees of freedom, the probability of a larger one."""

    chi2: float
    dof: int
    chance: float


def one_sigma_columns(covariance: Array) -> Array:
    """Displacements (6, 6), one a row, whose outer products add up to the covariance."""
    covariance = 0.5 * (covariance + covariance.T)
    scale = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    return np.asarray((vectors * np.sqrt(np.maximum(values, 0.0))).T * scale)


def small_steps(columns: Array, state: Array) -> Array:
    """Part (6,) of each one-sigma displacement that changes the state by 1e-5 at most: a step for differences."""
    r_size, v_size = np.linalg.norm(state[:3]), np.linalg.norm(state[3:])
    relative = np.maximum(
        np.linalg.norm(columns[:, :3], axis=1) / r_size, np.linalg.norm(columns[:, 3:], axis=1) / v_size
    )
    return np.minimum(1.0, 1e-5 / np.maximum(relative, 1e-12))


def agreement_of_others(
    state: Array,
    covariance: Array,
    t_state_s: float,
    residuals: Array,
    t_s: Array,
    observer_km: Array,
    center_velocity_km_s: Array,
    sigma_rad: Array,
    gm_km3_s2: float,
    light_time: bool,
) -> Agreement:
    """Chi-square of residuals of observations that the orbit was not made from.

    Parameters
    ----------
    state : ndarray, shape (6,)
        km, km/s at ``t_state_s``.
    covariance : ndarray, shape (6, 6)
    t_state_s : float
    residuals : ndarray, shape (n, 2)
        Observed minus computed, rad: RA times cos Dec, Dec.
    t_s, observer_km, center_velocity_km_s
        Of those observations, shapes (n,), (n, 3), (n, 3).
    sigma_rad : ndarray, shape (n, 2)
    gm_km3_s2 : float
    light_time : bool

    Returns
    -------
    Agreement
        NaN when the numbers are not finite. The residuals' covariance is that of the observations plus that
        of the prediction, which ties all of them together; its inverse is taken by the matrix inversion lemma.

    References
    ----------
    Tapley, Schutz and Born 2004, *Statistical Orbit Determination*, section 4.7 (predicted measurement
    covariance; recalled); Woodbury 1950 for the inverse.
    """
    count = 2 * len(t_s)
    nothing = Agreement(float("nan"), count, float("nan"))
    if count == 0 or not (np.isfinite(covariance).all() and np.isfinite(residuals).all()):
        return nothing
    columns = one_sigma_columns(covariance)
    step = small_steps(columns, state)
    shifted = np.concatenate([state + step[:, None] * columns, state - step[:, None] * columns])
    seen, _, _ = predicted_directions(
        shifted, np.full(12, t_state_s), t_s, observer_km, center_velocity_km_s, gm_km3_s2, light_time
    )
    shift = residuals_rad(seen[6:], seen[:6])  # (6, n, 2): minus to plus
    partials = (-shift / (2.0 * step[:, None, None])).reshape(6, count)
    weighted = residuals.reshape(count) / sigma_rad.reshape(count)
    partials = partials / sigma_rad.reshape(count)
    if not np.isfinite(partials).all():
        return nothing
    inner = np.eye(6) + partials @ partials.T
    along = partials @ weighted
    chi2 = float(weighted @ weighted - along @ np.linalg.solve(inner, along))
    chi2 = max(chi2, 0.0)
    return Agreement(chi2, count, float(chdtrc(count, chi2)))
