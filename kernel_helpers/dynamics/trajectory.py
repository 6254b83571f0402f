"""A perturbed orbit that can be asked for states and partials at any time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import EARTH_RADIUS_KM, SUN_RADIUS_KM
from firstarc.dynamics.chebyshev import basis
from firstarc.dynamics.force_models import ForceModel
from firstarc.dynamics.integration import (
    POINTS,
    SHORTEST,
    TOLERANCE,
    Segment,
    first_length,
    growth,
    segment,
)
from firstarc.errors import UsageError
from firstarc.results import Code, Status
from firstarc.twobody.kepler import Array, propagate, propagate_with_partials, solve_universal

#: How far beyond the time asked for a segment may reach, s: light time is asked for next.
REACH_S = {"earth": 60.0, "sun": 21600.0}
#: Segments after which an integration stops; a low orbit needs about thirty a day.
MAX_SEGMENTS = 20000
#: Nearer to the centre than this share of its radius nothing is integrated.
DEEPEST = 0.5


class StatesAndPartials(NamedTuple):
    """States at n times and their partials.

    ``r_km``, ``v_km_s`` (n, 3); ``by_state`` (n, 6, 6): partials of (r, v) by the state at its own epoch, km
    and km/s; ``by_parameters`` (n, 6, p): partials by the parameters of the forces, per m2/kg.
    """

    r_km: Array
    v_km_s: Array
    by_state: Array
    by_parameters: Array


class _Side:
    """Segments on one side of the epoch, in the order in which they were integrated."""

    def __init__(self, state: Array, t_s: float, sign: float, length: float, columns: int):
        self.sign = sign
        self.start_t_s = t_s
        self.t_s, self.state = t_s, state
        self.length = length * sign
        self.stopped: Status | None = None
        self.segments: list[Segment] = []
        self.partials: list[Array] = []
        self.reached = np.eye(6, 6 + columns)
        self._stacked: dict[str, Array] = {}

    def append(self, part: Segment) -> None:
        self.segments.append(part)
        self.partials.append(self.reached)
        if part.end_partials is not None:
            now = part.end_partials[:, :6] @ self.reached
            now[:, 6:] += part.end_partials[:, 6:]
            self.reached = now
        self.t_s, self.state = part.end_t_s, part.end_state
        self._stacked = {}

    def stacked(self, name: str) -> Array:
        if name not in self._stacked:
            if name == "partials":
                self._stacked[name] = np.array(self.partials)
            else:
                self._stacked[name] = np.array([getattr(part, name) for part in self.segments])
        return self._stacked[name]


class Trajectory:
    """Perturbed orbit through one state; integrated as far as it is asked for.

    Parameters
    ----------
    model : ForceModel
    state : array_like, shape (6,)
        Position (km) and velocity (km/s) about the centre of the model, ICRF axes.
    t_state_s : float
        Its time, TDB seconds from the epoch that the model's tracks count from.
    parameters : sequence of str
        Parameters of the forces whose partials are wanted.
    partials : bool
        False saves the work of the variational equations.
    tolerance : float
        Error that a segment (about half a revolution) may add, as a share of the distance from the centre or from a
        nearer body. The default, 1e-13, is a micrometre in low orbit and a centimetre or two at 1 au; over an arc
        it grows as any error of a state does.

    Attributes
    ----------
    status : Status
        Not ok when the integration had to stop; rows beyond that time are NaN.

    Raises
    ------
    UsageError
        The state is not six finite numbers, or a parameter is not one of the model's.
    """

    def __init__(
        self,
        model: ForceModel,
        state: ArrayLike,
        t_state_s: float = 0.0,
        parameters: Sequence[str] = (),
        partials: bool = True,
        tolerance: float = TOLERANCE,
    ):
        self.model = model
        self.state = np.array(state, dtype=float)
        self.t_state_s = float(t_state_s)
        self.parameters = tuple(parameters)
        self.tolerance = float(tolerance)
        self._with_partials = bool(partials)
        if self.state.shape != (6,) or not np.all(np.isfinite(self.state)) or not np.any(self.state[:3]):
            raise UsageError(f"state is {self.state}; expected six finite numbers (km, km/s), not at the centre")
        if not np.isfinite(self.t_state_s):
            raise UsageError(f"t_state_s={t_state_s!r}; expected a finite number of seconds")
        if not 1e-15 <= self.tolerance <= 1e-3:
            raise UsageError(f"tolerance={tolerance!r}; expected between 1e-15 and 1e-3")
        for name in self.parameters:
            model.value_of(name)
        length = first_length(self.state, model.gm_km3_s2)
        columns = len(self.parameters)
        self._sides = tuple(_Side(self.state, self.t_state_s, sign, length, columns) for sign in (1.0, -1.0))

    # ---------------------------------------------------------------- questions

    @property
    def status(self) -> Status:
        for side in self._sides:
            if side.stopped is not None:
                return side.stopped
        count = sum(len(side.segments) for side in self._sides)
        if self.model.two_body:
            return Status(Code.CONVERGED, "Two-body orbit.")
        return Status(Code.CONVERGED, f"Integrated in {count} segment{'s' if count != 1 else ''}.")

    def at(self, t_s: ArrayLike) -> tuple[Array, Array]:
        """Positions (n, 3) km and velocities (n, 3) km/s at TDB seconds ``t_s`` (n,)."""
        t = np.atleast_1d(np.asarray(t_s, dtype=float))
        if self.model.two_body:
            return propagate(self.state[:3], self.state[3:], t - self.t_state_s, self.model.gm_km3_s2)
        r, v = np.full((t.size, 3), np.nan), np.full((t.size, 3), np.nan)
        for side, rows in self._rows(t):
            state, dt, which, t_basis = self._located(side, t[rows])
            on_orbit = propagate(state[:, :3], state[:, 3:], dt, self.model.gm_km3_s2)
            d = np.einsum("nj,njk->nk", t_basis, side.stacked("deviation")[which])
            r[rows], v[rows] = on_orbit[0] + d[:, :3], on_orbit[1] + d[:, 3:]
        return r, v

    def with_partials(self, t_s: ArrayLike) -> StatesAndPartials:
        """States and partials at TDB seconds ``t_s`` (n,).

        Raises
        ------
        UsageError
            The trajectory was made with ``partials=False``.
        """
        t = np.atleast_1d(np.asarray(t_s, dtype=float))
        gm = self.model.gm_km3_s2
        if self.model.two_body:
            r, v, stm = propagate_with_partials(self.state[:3], self.state[3:], t - self.t_state_s, gm)
            return StatesAndPartials(r, v, stm, np.zeros((t.size, 6, 0)))
        if not self._with_partials:
            raise UsageError("this trajectory was made with partials=False; make it with partials=True")
        count = len(self.parameters)
        r, v = np.full((t.size, 3), np.nan), np.full((t.size, 3), np.nan)
        by_all = np.full((t.size, 6, 6 + count), np.nan)
        for side, rows in self._rows(t):
            state, dt, which, t_basis = self._located(side, t[rows])
            on_orbit = propagate_with_partials(state[:, :3], state[:, 3:], dt, gm)
            d = np.einsum("nj,njk->nk", t_basis, side.stacked("deviation")[which])
            r[rows], v[rows] = on_orbit[0] + d[:, :3], on_orbit[1] + d[:, 3:]
            variation = side.stacked("variation")
            flat = variation.reshape(*variation.shape[:2], -1)
            w = np.empty((len(which), flat.shape[2]))
            for k in np.unique(which):
                here = which == k
                w[here] = t_basis[here] @ flat[k]
            within = on_orbit[2] @ (np.eye(6, 6 + count) + w.reshape(-1, 6, 6 + count))
            whole = within[:, :, :6] @ side.stacked("partials")[which]
            whole[:, :, 6:] += within[:, :, 6:]
            by_all[rows] = whole
        return StatesAndPartials(r, v, by_all[:, :, :6], by_all[:, :, 6:])

    # ---------------------------------------------------------------- the work

    def _rows(self, t: Array) -> list[tuple[_Side, Array]]:
        """Rows that each side answers, integrated as far as they need."""
        answers = []
        for side in self._sides:
            since = (t - self.t_state_s) * side.sign
            mine = np.isfinite(t) & ((since >= 0.0) if side.sign > 0.0 else (since > 0.0))
            if not mine.any():
                continue
            self._extend(side, float(np.max(t[mine] * side.sign) * side.sign))
            reached = np.flatnonzero(mine & ((t - side.t_s) * side.sign <= 0.0))
            if reached.size and side.segments:
                answers.append((side, reached))
        return answers

    def _located(self, side: _Side, t: Array) -> tuple[Array, Array, Array, Array]:
        """First states, times since, numbers and Chebyshev polynomials of the segments that hold the times."""
        ends = side.stacked("end_t_s") * side.sign
        which = np.minimum(np.searchsorted(ends, t * side.sign), len(ends) - 1)
        state = side.stacked("state")[which]
        dt = t - side.stacked("t_s")[which]
        radius = np.sqrt(np.sum(state[:, :3] ** 2, axis=1))
        gm = self.model.gm_km3_s2
        beta = 2.0 * gm / radius - np.sum(state[:, 3:] ** 2, axis=1)
        s = solve_universal(radius, np.sum(state[:, :3] * state[:, 3:], axis=1), beta, dt, gm).s
        x = np.clip(2.0 * s / side.stacked("length")[which] - 1.0, -1.0, 1.0)
        return state, dt, which, basis(x, POINTS)

    def _extend(self, side: _Side, t_s: float) -> None:
        """Integrate one side until it holds a time, or has to stop."""
        model = self.model
        floor_km = DEEPEST * (EARTH_RADIUS_KM if model.center == "earth" else SUN_RADIUS_KM)
        while side.stopped is None and ((t_s - side.t_s) * side.sign > 0.0 or not side.segments):
            # No farther than asked: the tables of the bodies end there too.
            ahead = t_s - side.t_s + side.sign * REACH_S[model.center]
            trial, natural = self._to(side, ahead)
            shortest = SHORTEST * first_length(side.state, model.gm_km3_s2)
            over_edge = False
            while True:
                part = segment(
                    model, side.t_s, side.state, trial, self._with_partials, self.parameters, self.tolerance, over_edge
                )
                if isinstance(part, Segment):
                    break
                trial = part.length
                natural = natural and not part.edge
                if natural:
                    side.length = trial
                if abs(trial) < shortest:
                    if over_edge or model.radiation is None:
                        side.stopped = self._stop(side, "the forces change too abruptly to be followed")
                        return
                    trial, natural, over_edge = side.sign * shortest, False, True
            side.append(part)
            radius = float(np.linalg.norm(part.end_state[:3]))
            if natural:
                side.length = trial * growth(part)
            if radius < floor_km:
                side.stopped = self._stop(side, f"the orbit comes within {radius:.0f} km of the centre")
            elif len(side.segments) >= MAX_SEGMENTS:
                side.stopped = self._stop(side, f"{MAX_SEGMENTS} segments were not enough")

    def _to(self, side: _Side, ahead_s: float) -> tuple[float, bool]:
        """Length of the next trial and whether it is the natural one, not cut at a time."""
        gm, state = self.model.gm_km3_s2, side.state
        radius = np.array([np.linalg.norm(state[:3])])
        eta, beta = np.array([state[:3] @ state[3:]]), 2.0 * gm / radius - state[3:] @ state[3:]
        s = float(solve_universal(radius, eta, beta, np.array([ahead_s]), gm).s[0])
        return (side.length, True) if not abs(s) < abs(side.length) else (s, False)

    def _stop(self, side: _Side, why: str) -> Status:
        days = (side.t_s - self.t_state_s) / 86400.0
        return Status(Code.NOT_CONVERGED, f"Integration stopped {days:+.4g} d from the epoch: {why}.")


@dataclass(frozen=True)
class Perturbed:
    """Motion under a force model, as the fit asks for it.

    Parameters
    ----------
    model : ForceModel
    parameter_names : tuple of str
        Parameters of the forces to estimate, of ``model.parameters``.
    tolerance : float
        As for :class:`Trajectory`.
    """

    model: ForceModel
    parameter_names: tuple[str, ...] = ()
    tolerance: float = TOLERANCE

    @property
    def gm_km3_s2(self) -> float:
        return self.model.gm_km3_s2

    @property
    def parameters(self) -> Array:
        """Values that the model itself holds, in the order of ``parameter_names``."""
        return np.array([self.model.value_of(name) for name in self.parameter_names])

    def arc(
        self, state: ArrayLike, t_state_s: float, span_s: tuple[float, float], parameters: ArrayLike = ()
    ) -> Trajectory:
        """Trajectory through a state, integrated over a span of times.

        Parameters
        ----------
        state : array_like, shape (6,)
        t_state_s : float
        span_s : tuple of float
            First and last time that will be asked for; others may be asked for too.
        parameters : array_like, shape (p,)
            Values of ``parameter_names``; none keeps those of the model.
        """
        model = self.model
        values = np.atleast_1d(np.asarray(parameters, dtype=float))
        if values.size:
            if values.size != len(self.parameter_names):
                raise UsageError(f"parameters has {values.size} values for {self.parameter_names}")
            for name, value in zip(self.parameter_names, values, strict=True):
                model = model.with_value(name, float(value))
        trajectory = Trajectory(model, state, t_state_s, self.parameter_names, tolerance=self.tolerance)
        trajectory.at(np.array(span_s, dtype=float))
        return trajectory
