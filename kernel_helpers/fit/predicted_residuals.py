"""O-C, with predicted sigma, of observations that were not in a fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from firstarc.errors import UsageError
from firstarc.fit.fitted import LeastSquares
from firstarc.fit.measurement_model import MeasurementModel
from firstarc.fit.motion import Array


@dataclass(frozen=True, eq=False)
class PredictedResiduals:
    """Observed minus computed of observations outside a fit.

    ``residual``, ``sigma`` (n, k): the sigma holds the observation's own and the orbit's; ``chi2`` (n,) per
    observation; ``present`` (n, k).
    """

    residual: Array
    sigma: Array
    chi2: Array
    present: Array


def predicted_residuals(fit: LeastSquares, model: MeasurementModel) -> PredictedResiduals:
    """O-C, with predicted sigma, of observations that were not in the fit.

    Parameters
    ----------
    fit : LeastSquares
    model : MeasurementModel
        Of those observations, with the fit's motion, epoch and parameters.

    Raises
    ------
    UsageError
        The model has another epoch or other parameters, or the fit has no covariance.

    References
    ----------
    Milani and Gronchi 2010, *Theory of Orbit Determination*, chapter 5 (recalled): covariance of a
    prediction.
    """
    if model.t_state_s != fit.t_state_s or model.parameter_names != fit.parameter_names:
        raise UsageError("the model must have the fit's epoch and parameters")
    if fit.covariance is None:
        raise UsageError("the fit leaves a direction free, so that predictions have no sigma; use sampled orbits")
    found = model.evaluate(fit.x)
    own = model.covariance(found.per_second)
    total = own + found.by_x @ fit.covariance @ np.swapaxes(found.by_x, 1, 2)
    sigma = np.sqrt(np.einsum("nii->ni", total))
    scaled = total / (sigma[:, :, None] * sigma[:, None, :])
    white = found.residual / sigma
    chi2 = np.sum(white * np.linalg.solve(scaled, white[:, :, None])[:, :, 0], axis=1)
    return PredictedResiduals(found.residual, np.where(model.present, sigma, np.nan), chi2, model.present)
