"""The same motion by scipy's DOP853 in Cartesian coordinates: nothing shared with the library but the forces."""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp

from firstarc.dynamics.accelerations import Forces


def integrated(model, state, t_from_s, t_to_s, atol=1e-11, max_step=np.inf):
    """State (6,) at ``t_to_s``."""

    def rhs(t, y):
        r, v = y[None, :3], y[None, 3:]
        pull = Forces(model, np.array([t])).acceleration(r, v)[0]
        return np.concatenate((y[3:], pull - model.gm_km3_s2 * y[:3] / np.linalg.norm(y[:3]) ** 3))

    end = solve_ivp(rhs, (t_from_s, t_to_s), state, method="DOP853", rtol=1e-13, atol=atol, max_step=max_step)
    return end.y[:, -1]
