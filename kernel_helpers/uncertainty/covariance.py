"""Sigma of osculating elements from the covariance of a state (first-order propagation)."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ..twobody.elements import elements_from_state
from .consistency import one_sigma_columns, small_steps

_TURN = 2.0 * np.pi


class ElementSigmas(NamedTuple):
    """One sigma of each element, in the core's units; NaN where the element does not exist."""

    a_km: float
    e: float
    i_rad: float
    node_rad: float
    argp_rad: float
    mean_anomaly_rad: float
    q_km: float
    period_s: float


def element_sigmas(
    state: NDArray[np.float64], covariance: NDArray[np.float64], gm_km3_s2: float, axes: NDArray[np.float64]
) -> ElementSigmas:
    """Sigma of the elements of one state.

    Parameters
    ----------
    state : ndarray, shape (6,)
        km, km/s on ICRF axes.
    covariance : ndarray, shape (6, 6)
        Of that state, same order and units.
    gm_km3_s2 : float
    axes : ndarray, shape (3, 3)
        Rotation from ICRF axes to those of the elements.

    Notes
    -----
    Central differences along the principal axes of the covariance, with steps of a small part of each axis'
    own sigma: the steps fit the scale on which the elements are needed, however stretched the covariance is.
    """
    columns = one_sigma_columns(covariance)
    step = small_steps(columns, state)
    shifted = np.concatenate([state + step[:, None] * columns, state - step[:, None] * columns])
    vectors_r = shifted[:, :3] @ axes.T
    vectors_v = shifted[:, 3:] @ axes.T
    found = elements_from_state(vectors_r, vectors_v, gm_km3_s2)
    table = np.stack(
        [
            found.a_km,
            found.e,
            found.i_rad,
            found.node_rad,
            found.argp_rad,
            found.mean_anomaly_rad,
            found.q_km,
            found.period_s,
        ],
        axis=1,
    )
    with np.errstate(invalid="ignore"):
        difference = table[:6] - table[6:]
        angles = difference[:, 3:6]
        difference[:, 3:6] = (angles + np.pi) % _TURN - np.pi
        slope = difference / (2.0 * step[:, None])
        sigma = np.sqrt((slope**2).sum(axis=0))
    return ElementSigmas(*(float(value) for value in sigma))
