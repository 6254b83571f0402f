"""Observed minus computed of every observation, and the exact partials, light time and moving centre included.

With line = r(t - rho/c) - R - Vc rho/c (see :mod:`firstarc.dynamics.light_time`), rho = \\|line\\| and
L = line / rho, a displacement dq of the object at fixed emission time (minus that of the observer) gives
d rho = L . dq / D,  d line = dq - (v + Vc)/c d rho,  D = 1 + L . (v + Vc)/c.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from firstarc.constants import C_KM_S
from firstarc.dynamics.light_time import tangent_axes
from firstarc.errors import UsageError
from firstarc.fit.deflection import solar_deflection
from firstarc.fit.measurements import Measurements
from firstarc.fit.motion import Array, Motion
from firstarc.fit.parameters import ClockOffset, ForceParameter, Parameter, StationOffset
from firstarc.fit.ranges import range_rows


class Evaluation(NamedTuple):
    """Observed minus computed (n, k) in rad, km, km/s (0 where not observed); partials of it.

    ``by_x`` (n, k, 6 + p) by state and parameters; ``per_second`` (n, k) by an offset of the recorded time,
    None without the observer's velocity; ``los`` (n, 3), ``range_km`` (n,) computed.
    """

    residual: Array
    by_x: Array
    per_second: Array | None
    los: Array
    range_km: Array


class MeasurementModel:
    """Computes observations from a state at one epoch and the parameters asked for.

    Parameters
    ----------
    measurements : Measurements
    motion : Motion
    t_state_s : float
        Epoch of the state.
    parameters : sequence of ClockOffset, StationOffset, ForceParameter

    Raises
    ------
    UsageError
        A parameter needs an array that the measurements do not have, or names an unknown station or force.
    """

    def __init__(
        self, measurements: Measurements, motion: Motion, t_state_s: float, parameters: Sequence[Parameter] = ()
    ):
        if not len(measurements):
            raise UsageError("measurements holds no observation; a fit needs some")
        self.measurements = measurements
        self.motion = motion
        self.t_state_s = float(t_state_s)
        self.parameters = tuple(parameters)
        self.parameter_names = tuple(name for one in self.parameters for name in one.names)
        m = measurements
        self.present = m.present
        seen = self.present[:, :1]
        self._seen = np.where(seen, np.nan_to_num(m.los), [1.0, 0.0, 0.0])
        east, north = tangent_axes(self._seen)
        self._tangent = -np.stack((east, north), axis=1)
        self._check()
        prior = [value for one in self.parameters for value in one.prior]
        self._held = np.array(motion.parameters, float)
        #: for each parameter of the motion that is estimated: its place in x and among the motion's
        self._forces: list[tuple[int, int]] = []
        for column, name in enumerate(self.parameter_names):
            if name in motion.parameter_names:
                place = motion.parameter_names.index(name)
                self._forces.append((6 + column, place))
                if np.isnan(prior[column]):
                    prior[column] = float(self._held[place])
        self.prior = np.array(prior, float)
        self._last: list[tuple[bytes, Evaluation]] = []
        # Room for the light path, should the arc be integrated over a span, and a little for clocks.
        room = _light_room(m) if m.light_time else 0.0
        self._span = (float(m.t_s.min()) - room - 10.0, float(m.t_s.max()) + 10.0)

    def _check(self) -> None:
        m = self.measurements
        if len(set(self.parameter_names)) != len(self.parameter_names):
            raise UsageError(f"parameters {self.parameter_names} name one of them twice")
        if m.observer_velocity_km_s is None:
            needing = [
                ("sigma_time_s", bool((m.sigma_time_s > 0.0).any())),
                ("range_rate_km_s", m.range_rate_km_s is not None),
                ("two_way", m.two_way),
                ("a clock offset", any(isinstance(one, ClockOffset) for one in self.parameters)),
            ]
            for what, needed in needing:
                if needed:
                    raise UsageError(f"{what} needs observer_velocity_km_s, the observer's velocity on ICRF axes")
        for one in self.parameters:
            if isinstance(one, ForceParameter):
                if one.name not in self.motion.parameter_names:
                    known = ", ".join(self.motion.parameter_names) or "none"
                    raise UsageError(f"force parameter {one.name!r} is unknown to the motion; it knows: {known}")
                continue
            if m.station is None or not (m.station == one.station).any():
                raise UsageError(f"no observation belongs to station {one.station}; see Measurements.station")
            if isinstance(one, StationOffset) and m.station_axes is None:
                raise UsageError("a station offset needs station_axes (n, 3, 3): east, north, up on ICRF axes")

    def start(self, state: Array) -> Array:
        """State (6,) followed by the parameters' starting values."""
        return np.concatenate([np.asarray(state, float), self.prior])

    def forces(self, x: Array) -> Array:
        """Values of all the motion's parameters: the estimated ones from ``x``, the others as it holds them."""
        out = self._held.copy()
        for column, place in self._forces:
            out[place] = x[column]
        return out

    def prior_rows(self) -> tuple[Array, Array]:
        """Rows (q, 6 + p) and right sides (q,) so that rows @ x - right is the prior's normalised residual."""
        rows, right, column = [], [], 6
        width = 6 + len(self.parameter_names)
        for one in self.parameters:
            for _ in one.names:
                if one.prior_sigma is not None:
                    row = np.zeros(width)
                    row[column] = 1.0 / one.prior_sigma
                    rows.append(row)
                    right.append(self.prior[column - 6] / one.prior_sigma)
                column += 1
        return np.array(rows).reshape(-1, width), np.array(right)

    def covariance(self, per_second: Array | None) -> Array:
        """Covariance (n, k, k) of each observation; identity where a component was not observed.

        The sigma of the time adds sigma_time^2 times the outer product of the rates ``per_second``: an error
        along the track of the image.
        """
        m = self.measurements
        k = m.kinds
        out = np.zeros((len(m), k, k))
        out[:, 0, 0], out[:, 1, 1] = m.sigma_rad[:, 0] ** 2, m.sigma_rad[:, 1] ** 2
        out[:, 0, 1] = out[:, 1, 0] = m.corr * m.sigma_rad[:, 0] * m.sigma_rad[:, 1]
        for column, sigma in ((2, m.sigma_range_km), (3, m.sigma_range_rate_km_s)):
            if sigma is not None:
                out[:, column, column] = sigma**2
        if per_second is not None and (m.sigma_time_s > 0.0).any():
            along = per_second * m.sigma_time_s[:, None]
            out += along[:, :, None] * along[:, None, :]
        if not self.present.all():
            both = self.present[:, :, None] & self.present[:, None, :]
            out = np.where(both, out, np.eye(k))
        return out

    def whitening(self, per_second: Array | None) -> Array:
        """Matrices (n, k, k) that turn residuals into independent ones of unit variance (inverse Cholesky).

        The range components are in km beside angles in rad, so each is scaled by its own sigma first.
        """
        covariance = self.covariance(per_second)
        sigma = np.sqrt(np.einsum("nii->ni", covariance))
        correlation = covariance / (sigma[:, :, None] * sigma[:, None, :])
        return np.asarray(np.linalg.inv(np.linalg.cholesky(correlation)) / sigma[:, None, :])

    def evaluate(self, x: Array) -> Evaluation:
        """Residuals and partials at state and parameters ``x`` (6 + p,); NaN for an orbit without an answer."""
        key = np.asarray(x, float).tobytes()
        for known, found in self._last:
            if known == key:
                return found
        if not np.isfinite(x).all():
            raise UsageError(f"x is {x}; expected finite numbers: state in km and km/s, then parameters")
        found = self._evaluated(np.asarray(x, float))
        # A fit asks for the same orbit twice in a row: to weight, to step, to report.
        self._last = [(key, found), *self._last[:1]]
        return found

    def _evaluated(self, x: Array) -> Evaluation:
        m = self.measurements
        state = np.asarray(x[:6], float)
        clock, place = self._offsets(x)
        t, observer = m.t_s, m.observer_km
        if clock is not None and m.observer_velocity_km_s is not None:
            t = t + clock
            observer = observer + m.observer_velocity_km_s * clock[:, None]
        if place is not None:
            observer = observer + place
        with np.errstate(all="ignore"):
            arc = self.motion.arc(state, self.t_state_s, self._span, self.forces(x))
            w = np.zeros((len(m), 3))
            emission = t
            rho = np.zeros(len(m))
            if m.light_time:
                r, v = arc.at(t)
                w = (v + m.center_velocity_km_s) / C_KM_S
                line = r - observer
                rho = np.sqrt(np.sum(line * line, axis=1))
                rho = rho / (1.0 + np.sum(line * w, axis=1) / rho)
                emission = t - rho / C_KM_S
            moved = arc.with_partials(emission)
            line = moved.r_km - observer
            if m.light_time:
                w = (moved.v_km_s + m.center_velocity_km_s) / C_KM_S
                line = line - m.center_velocity_km_s * (rho / C_KM_S)[:, None]
                size = np.sqrt(np.sum(line * line, axis=1))
                # What the estimate of the light path lacks is metres to a kilometre: one more step is exact.
                lack = (size - rho) / (1.0 + np.sum(line * w, axis=1) / size)
                line = line - w * lack[:, None]
                rho = np.sqrt(np.sum(line * line, axis=1))
            else:
                rho = np.sqrt(np.sum(line * line, axis=1))
            los = line / rho[:, None]
            return self._rows(moved, los, rho, w)

    def _offsets(self, x: Array) -> tuple[Array | None, Array | None]:
        """Clock offsets (n,) and station displacements (n, 3) on ICRF axes."""
        m = self.measurements
        clock: Array | None = None
        place: Array | None = None
        column = 6
        for one in self.parameters:
            if isinstance(one, ClockOffset):
                clock = np.zeros(len(m)) if clock is None else clock
                clock[m.station == one.station] += x[column]
            elif isinstance(one, StationOffset):
                place = np.zeros((len(m), 3)) if place is None else place
                assert m.station_axes is not None
                mine = m.station == one.station
                place[mine] += m.station_axes[mine] @ x[column : column + 3]
            column += len(one.names)
        return clock, place

    def _rows(self, moved: Any, los: Array, rho: Array, w: Array) -> Evaluation:
        m = self.measurements
        n, k = len(m), m.kinds
        dq, dv = self._displacements(moved)
        facing = 1.0 + np.sum(los * w, axis=1)
        seen_los = los
        if m.sun_to_observer_km is not None:
            seen_los = los + solar_deflection(los, m.sun_to_observer_km, rho)
            seen_los = seen_los / np.sqrt(np.sum(seen_los * seen_los, axis=1))[:, None]
        angle, slope = self._angles(seen_los)
        across = slope - np.sum(slope * los[:, None], axis=2, keepdims=True) * los[:, None]
        turned = np.sum(across * w[:, None], axis=2) / facing[:, None]
        map_q = (across - turned[:, :, None] * los[:, None]) / rho[:, None, None]
        residual = np.zeros((n, k))
        residual[:, :2] = angle
        by_x = np.empty((n, k, dq.shape[2]))
        by_x[:, :2] = map_q @ dq
        rate_q: Array | None = None
        per_second: Array | None = None
        own = m.observer_velocity_km_s
        if own is not None:
            rate_q = moved.v_km_s - own
            per_second = np.empty((n, k))
            per_second[:, :2] = (map_q @ rate_q[:, :, None])[:, :, 0]
        if k == 4:
            geometric = los * rho[:, None]
            if m.light_time:
                geometric = geometric + m.center_velocity_km_s * (rho / C_KM_S)[:, None]
            pull = self._pull(moved.r_km)
            seen = range_rows(geometric, rho, moved.v_km_s, pull, m, dq, dv, rate_q)
            for column, computed, observed in ((2, seen.range_km, m.range_km), (3, seen.rate_km_s, m.range_rate_km_s)):
                if observed is not None and computed is not None:
                    residual[:, column] = observed - computed
            by_x[:, 2], by_x[:, 3] = -seen.range_by_x, -seen.rate_by_x
            if per_second is not None:
                per_second[:, 2], per_second[:, 3] = -seen.range_per_second, -seen.rate_per_second
        if not self.present.all():
            residual = np.where(self.present, residual, 0.0)
            by_x = np.where(self.present[:, :, None], by_x, 0.0)
            per_second = None if per_second is None else np.where(self.present, per_second, 0.0)
        return Evaluation(residual, by_x, per_second, los, rho)

    def _angles(self, los: Array) -> tuple[Array, Array]:
        """Residual (n, 2) in the tangent plane of the observed direction, and its partials (n, 2, 3) by los."""
        flat = (self._tangent @ los[:, :, None])[:, :, 0]
        cosine = np.sum(self._seen * los, axis=1)
        square = np.sum(flat * flat, axis=1)
        sine = np.sqrt(square)
        near = (sine < 1e-3) & (cosine > 0.0)
        safe = np.where(sine > 0.0, sine, 1.0)
        arc = np.arctan2(sine, cosine)
        scale = np.where(near, 1.0 + square / 6.0 + 3.0 * square * square / 40.0, arc / safe)
        # d(arc/sine) = (cos - arc/sine)/sine dsine - dcos, by its series where sine is small.
        bend = np.where(near, -2.0 / 3.0 - 0.2 * square, (cosine - scale) / safe**2)
        turn = bend[:, None] * (flat[:, None, :] @ self._tangent)[:, 0] - self._seen
        slope = scale[:, None, None] * self._tangent + flat[:, :, None] * turn[:, None, :]
        return flat * scale[:, None], slope

    def _displacements(self, moved: Any) -> tuple[Array, Array | None]:
        """Partials of position minus observer (n, 3, 6 + p) and of velocity, at fixed emission time."""
        m = self.measurements
        n, width = len(m), 6 + len(self.parameter_names)
        with_v = m.kinds == 4
        if width == 6:
            return moved.by_state[:, :3], moved.by_state[:, 3:] if with_v else None
        dq, dv = np.zeros((n, 3, width)), np.zeros((n, 3, width))
        dq[:, :, :6], dv[:, :, :6] = moved.by_state[:, :3], moved.by_state[:, 3:]
        for column, place in self._forces:
            mine = moved.by_parameters[:, :, place]
            dq[:, :, column], dv[:, :, column] = mine[:, :3], mine[:, 3:]
        column = 6
        for one in self.parameters:
            if not isinstance(one, ForceParameter):
                rows = m.station == one.station
                if isinstance(one, ClockOffset):
                    assert m.observer_velocity_km_s is not None
                    dq[rows, :, column] = (moved.v_km_s - m.observer_velocity_km_s)[rows]
                    if with_v:
                        dv[rows, :, column] = self._pull(moved.r_km)[rows]
                else:
                    assert m.station_axes is not None
                    dq[rows, :, column : column + 3] = -m.station_axes[rows]
            column += len(one.names)
        return dq, dv if with_v else None

    def _pull(self, r_km: Array) -> Array:
        """Acceleration by the centre: only for the change of velocity over a change of the light path."""
        return np.asarray(-self.motion.gm_km3_s2 * r_km / np.sum(r_km * r_km, axis=1)[:, None] ** 1.5)


def _light_room(m: Measurements) -> float:
    """Seconds of light path to allow for: four times the farthest observer, or about 50 au for the Sun."""
    return float(min(4.0 * np.linalg.norm(m.observer_km, axis=1).max() * 12.5 / C_KM_S + 10.0, 3.0e4))
