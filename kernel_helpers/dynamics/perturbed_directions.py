"""Directions in which a perturbed orbit is seen: :mod:`firstarc.dynamics.light_time` along a trajectory."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S
from firstarc.dynamics.trajectory import Trajectory
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array

#: Passes of the light-time iteration at most; each gains v/c, four digits or more.
PASSES = 5


def perturbed_directions(
    trajectory: Trajectory,
    t_s: ArrayLike,
    observer_km: ArrayLike,
    center_velocity_km_s: ArrayLike | None,
    light_time: bool,
) -> tuple[Array, Array, Array]:
    """Directions, slant ranges and emission times of a perturbed orbit as seen by an observer.

    Parameters
    ----------
    trajectory : Trajectory
    t_s : array_like, shape (n,)
        Reception times, TDB seconds on the scale of the trajectory.
    observer_km : array_like, shape (n, 3)
        Observer from the centre at reception.
    center_velocity_km_s : array_like, shape (n, 3), or None
        Barycentric velocity of the centre; None for zero. Used only with light time.
    light_time : bool
        False gives geometric directions of the same instant.

    Returns
    -------
    los : ndarray, shape (n, 3)
        Unit vectors.
    range_km : ndarray, shape (n,)
        Slant ranges (light paths).
    emission_t_s : ndarray, shape (n,)
        Emission times, the reception times themselves for geometric directions.

    Raises
    ------
    UsageError
        Rows of observers and times do not match.

    Notes
    -----
    The convention is that of :func:`firstarc.dynamics.light_time.predicted_directions`. Rows that the trajectory
    cannot reach are NaN; ``trajectory.status`` says why.
    """
    t = np.atleast_1d(np.asarray(t_s, dtype=float))
    observer = np.asarray(observer_km, dtype=float).reshape(-1, 3)
    if observer.shape[0] != t.size:
        raise UsageError(f"observer_km has {observer.shape[0]} rows for {t.size} times; expected one row per time")
    r, v = trajectory.at(t)
    line = r - observer
    distance = np.sqrt(np.sum(line * line, axis=1))
    if not light_time:
        return line / distance[:, None], distance, t.copy()
    moving = np.zeros(3)
    if center_velocity_km_s is not None:
        moving = np.asarray(center_velocity_km_s, dtype=float) / C_KM_S
    # First correction with the line-of-sight rate, so that the passes start close.
    rate = np.sum((v + moving * C_KM_S) * line, axis=1) / (distance * C_KM_S)
    distance = distance / (1.0 + rate)
    for _ in range(PASSES):
        r, _ = trajectory.at(t - distance / C_KM_S)
        line = r - observer - moving * distance[:, None]
        fresh = np.sqrt(np.sum(line * line, axis=1))
        change = np.abs(fresh - distance)
        distance = fresh
        # What is left is smaller by v/c again; rows without a number do not count.
        if not np.any(change > 1e-10 * distance):
            break
    return line / distance[:, None], distance, t - distance / C_KM_S
