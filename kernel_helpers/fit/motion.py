"""What the fit asks of the motion of an object; two-body motion answers here, perturbed motion elsewhere."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from firstarc.dynamics.trajectory import StatesAndPartials
from firstarc.twobody.kepler import propagate, propagate_with_partials

Array = NDArray[Any]


class Arc(Protocol):
    """One trajectory, ready to be asked at any time inside the span it was made for."""

    def at(self, t_s: Array) -> tuple[Array, Array]:
        """Positions (n, 3) km and velocities (n, 3) km/s."""

    def with_partials(self, t_s: Array) -> StatesAndPartials:
        """The same with partials."""


class Motion(Protocol):
    """How an object moves: a central attraction and whatever else.

    ``parameter_names`` are the motion's own parameters that can be estimated (area-to-mass, for instance).
    """

    @property
    def gm_km3_s2(self) -> float:
        """Gravitational parameter of the centre."""

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names of the motion's parameters that may be estimated."""

    @property
    def parameters(self) -> Array:
        """Values (p,) that the motion itself holds for them, used unless they are estimated."""

    def arc(self, state: Array, t_state_s: float, span_s: tuple[float, float], parameters: Array) -> Arc:
        """Trajectory of a state (6,) given at ``t_state_s``, valid at least over ``span_s``."""


@dataclass(frozen=True)
class TwoBodyArc:
    """Two-body trajectory; any time may be asked for."""

    state: Array
    t_state_s: float
    gm_km3_s2: float

    def at(self, t_s: Array) -> tuple[Array, Array]:
        return propagate(self.state[:3], self.state[3:], t_s - self.t_state_s, self.gm_km3_s2)

    def with_partials(self, t_s: Array) -> StatesAndPartials:
        r, v, stm = propagate_with_partials(self.state[:3], self.state[3:], t_s - self.t_state_s, self.gm_km3_s2)
        return StatesAndPartials(r, v, stm, np.empty((len(r), 6, 0)))


@dataclass(frozen=True)
class TwoBody:
    """Motion about a point mass, with analytic partials.

    Parameters
    ----------
    gm_km3_s2 : float
    """

    gm_km3_s2: float

    @property
    def parameter_names(self) -> tuple[str, ...]:
        return ()

    @property
    def parameters(self) -> Array:
        return np.zeros(0)

    def arc(self, state: Array, t_state_s: float, span_s: tuple[float, float], parameters: Array) -> TwoBodyArc:
        return TwoBodyArc(np.asarray(state, float), t_state_s, self.gm_km3_s2)
