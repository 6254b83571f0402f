"""What a fit of an orbit gives."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from firstarc.fit.least_squares import IterationRow
from firstarc.fit.motion import Array
from firstarc.results import Status


@dataclass(frozen=True, eq=False)
class OtherMinimum:
    """A further minimum of chi-square, from another start; compared before any rejection."""

    state: Array
    parameters: Array
    chi2: float
    status: Status
    start: int


@dataclass(frozen=True, eq=False)
class LeastSquares:
    """A weighted fit.

    Parameters
    ----------
    status : Status
    state : ndarray, shape (6,)
        km, km/s at ``t_state_s``, ICRF axes.
    t_state_s : float
        TDB s from the arc's epoch.
    parameters : ndarray, shape (p,)
    parameter_names : tuple of str
        With their units.
    covariance : ndarray, shape (6 + p, 6 + p), or None
        Of state and parameters; None when the observations leave a direction free.
    residual : ndarray, shape (n, k)
        Observed minus computed: RA times cos Dec, Dec (rad), then range (km), range rate (km/s) when any
        was given; 0 where not observed (see ``present``).
    sigma : ndarray, shape (n, k)
        Stated sigmas, that of the time included.
    white : ndarray, shape (n, k)
        Residuals made independent and of unit variance by the observations' covariance.
    design : ndarray, shape (n, k, 6 + p)
        Partials of ``white``.
    present : ndarray of bool, shape (n, k)
    chi2_each : ndarray, shape (n,)
        Chi-square of each observation with the covariance of its residual, orbit's share included.
    used : ndarray of bool, shape (n,)
    reasons : tuple of str
        Why each observation is in or out.
    chi2 : float
        Of the used observations and the priors.
    dof : int
        Used components and prior values, less what was estimated.
    weak_direction : ndarray, shape (6 + p,)
        Least known direction, one sigma long.
    singular_values : ndarray, shape (6 + p,)
        Of the scaled partials; distances scaled by the radius, speeds by the speed.
    history : tuple of tuple of IterationRow
        One tuple per pass: first fit, then after each change of weights or selection.
    start : int
        Which of the starts led here.
    others : tuple of OtherMinimum
        Other minima, least chi-square first.
    first_chi2 : float
        Chi-square of this minimum before any rejection, to be compared with the others'.
    rejection_note : str
        What the rejection did as a whole; empty when nothing needs saying.
    """

    status: Status
    state: Array
    t_state_s: float
    parameters: Array
    parameter_names: tuple[str, ...]
    covariance: Array | None
    residual: Array
    sigma: Array
    white: Array
    design: Array
    present: Array
    chi2_each: Array
    used: Array
    reasons: tuple[str, ...]
    chi2: float
    dof: int
    weak_direction: Array
    singular_values: Array
    history: tuple[tuple[IterationRow, ...], ...]
    start: int
    others: tuple[OtherMinimum, ...] = ()
    first_chi2: float = float("nan")
    rejection_note: str = ""

    @property
    def x(self) -> Array:
        """State and parameters in one array."""
        return np.concatenate([self.state, self.parameters])

    @property
    def rms_rad(self) -> float:
        """Root mean square of the used angles' residuals, unweighted; NaN without any."""
        angles = self.residual[:, :2][self.used & self.present[:, 0]]
        return float(np.sqrt(np.mean(angles**2))) if angles.size else float("nan")

    @property
    def parameter_sigmas(self) -> Array:
        """Sigma of each parameter; inf where it is not known."""
        if self.covariance is None:
            return np.full(self.parameters.shape, np.inf)
        return np.sqrt(np.diag(self.covariance)[6:])
