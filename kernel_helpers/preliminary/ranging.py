"""Ranging: orbits of every admissible slant range and range rate, weighted by how they fit all observations.

A short arc fixes a direction and its rates (:mod:`firstarc.preliminary.attributable`); slant range rho and range
rate x stay open within the admissible region (:mod:`firstarc.preliminary.admissible_region`). At each node of a
raster in (log rho, x) the orbit's direction and rates are fitted to all observations in least squares, rho and x
held, which leaves a chi-square; the weight of the node is

    exp(-chi2 / 2) |N|^(-1/2) rho^k / (e + 0.02) d(log rho) dx,

N the normal matrix of that fit (the direction and rates integrated out). The prior density inside the region is a
choice, not a measurement, and said to be one. k = 0 is uniform in log rho and favours near objects, k = 1 is uniform
in rho and favours far ones; the usual 1/4 lies between. Around a circular orbit d(log rho) dx grows like e de, which
alone would call circular orbits impossible; divided by e the density is about uniform in e, and the small constant
keeps it finite. With these numbers simulated satellites, main-belt and near-Earth objects lie inside their stated
95 % ranges of slant range in 97 to 99 % of arcs: the ranges are rather wide than narrow.

Where the observations fix more than a raster resolves, the weights fill a narrow, bent valley. For each range the
window of range rates that carries its weight is found first (:mod:`firstarc.preliminary.valley`); then the ranges that
carry weight, until enough of them do. The final raster follows these windows.

References: statistical ranging: Virtanen, Muinonen and Bowell 2001, Icarus 154, 412; fits at fixed rho and x (the
manifold of variations): Milani and Gronchi 2010, *Theory of Orbit Determination*, chapter 8 (recalled). The prior
and the search for the valley are ours.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.dynamics.light_time import tangent_axes
from firstarc.errors import UsageError
from firstarc.preliminary.admissible_region import (
    Excluded,
    Raster,
    RegionLimits,
    excluded,
    range_rate_bounds,
    raster,
    usual_limits,
)
from firstarc.preliminary.attributable import Attributable, attributable
from firstarc.preliminary.line_set import LineSet, line_set, misses, problem_sentence, rejected
from firstarc.preliminary.lines_of_sight import Array
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.valley import Valley, valley
from firstarc.results import Code, Status
from firstarc.twobody.elements import elements_from_state
from firstarc.twobody.kepler import lagrange, propagate, solve_universal

METHOD = "ranging"
#: Ranges and range rates tried while the region shrinks, effective ranges wanted, and how often it shrinks at most.
ROWS, COLUMNS, WANTED_ROWS, LEVELS = 40, 8, 8.0, 8
#: Part of the weight that no longer counts; windows between known ranges are opened by this factor.
LITTLE, WIDER = 1e-6, 4.0
#: Nodes with more chi-square than this above the least carry no weight and are not fitted again.
HOPELESS = 60.0
#: Passes of each node's fit at most, and the gain in chi-square below which it is at its end.
PASSES, SETTLED = 6, 1e-3
#: Power k of the range in the prior density of its logarithm.
PRIOR_POWER = 0.25
#: Eccentricity below which the prior density stays finite.
E_FLOOR = 0.02
#: With fewer effective nodes the raster does not resolve what the observations fix.
UNRESOLVED = 10.0
#: With a chi-square per observed angle beyond this nothing of the region fits.
NO_FIT = 100.0


@dataclass(frozen=True, eq=False)
class RangingSample:
    """Weighted orbits of one arc.

    Parameters
    ----------
    status : Status
        ESTIMATED: one of many orbits, none determined; NOT_CONVERGED: the nodes do not represent the observations;
        NO_CANDIDATE or BAD_INPUT: no sample.
    assumption : str
        Limits of the region and the prior density, in words.
    range_km, range_rate_km_s : ndarray, shape (n,)
        Nodes: at the middle observation.
    states : ndarray, shape (n, 6)
        At ``t_state_s``, direction and rates fitted to the observations.
    t_state_s : float
        Reception time of the middle observation.
    weight : ndarray, shape (n,)
        Their sum is 1; 0 outside the region.
    chi2 : ndarray, shape (n,)
        NaN outside the region. ``dof`` is what n observations leave after direction and rates.
    dof : int
    excluded : Excluded
        Masks (n,) of the limits that nodes break.
    effective_number : float
        1 / sum of squared weights.
    levels : int
        Rasters used until the weights were resolved.
    gm_km3_s2 : float
    best : MethodOrbit
        One orbit of the sample that fits as well as any, nearest to its middle.
    """

    status: Status
    assumption: str
    range_km: Array
    range_rate_km_s: Array
    states: Array
    t_state_s: float
    weight: Array
    chi2: Array
    dof: int
    excluded: Excluded
    effective_number: float
    levels: int
    gm_km3_s2: float
    best: MethodOrbit

    def quantiles(self, values: ArrayLike, parts: ArrayLike = (0.05, 0.5, 0.95)) -> Array:
        """Weighted quantiles of one number per node; NaN without a sample."""
        value, wanted = np.asarray(values, dtype=float), np.asarray(parts, dtype=float)
        use = (self.weight > 0.0) & ~np.isnan(value)
        if not use.any():
            return np.full(wanted.shape, np.nan)
        order = np.argsort(value[use], kind="stable")
        value, weight = value[use][order], self.weight[use][order]
        middle = (np.cumsum(weight) - 0.5 * weight) / weight.sum()
        result: Array = np.interp(wanted, middle, value)
        return result

    def summary(self, axes: ArrayLike | None = None, parts: ArrayLike = (0.05, 0.5, 0.95)) -> dict[str, Array]:
        """Quantiles (5, 50, 95 %) of a_km, e, i_rad, q_km and range_km.

        Parameters
        ----------
        axes : array_like, shape (3, 3), optional
            Rotation from the axes of the states to those of the inclination; None for the same.
        parts : array_like
            Quantiles wanted.
        """
        turn = np.eye(3) if axes is None else np.asarray(axes, dtype=float)
        if turn.shape != (3, 3):
            raise UsageError(f"axes has shape {turn.shape}; expected (3, 3)")
        el = elements_from_state(self.states[:, :3] @ turn.T, self.states[:, 3:] @ turn.T, self.gm_km3_s2)
        values = {"a_km": el.a_km, "e": el.e, "i_rad": el.i_rad, "q_km": el.q_km, "range_km": self.range_km}
        return {name: self.quantiles(value, parts) for name, value in values.items()}


class _Nodes(NamedTuple):
    """Fitted nodes: z = (log rho, x) with measure, states at emission, chi-square, log |N|, masks."""

    rho: Array
    x: Array
    measure: Array
    states: Array
    chi2: Array
    log_det: Array
    out: Excluded

    def log_weight(self) -> Array:
        """Logarithm of the weights, without a constant."""
        value = -0.5 * self.chi2 - 0.5 * self.log_det + np.log(self.measure)
        return np.where(np.isfinite(value), value, -np.inf)


def sample(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    limits: RegionLimits | None = None,
    shape: tuple[int, int] = (60, 60),
    prior_power: float = PRIOR_POWER,
) -> RangingSample:
    """Weighted orbits over the admissible region of a short arc.

    Parameters
    ----------
    los : array_like, shape (k, 3)
        Directions of one arc, ICRF axes, in any order of time; k two or more.
    observer_km : array_like, shape (k, 3)
        One observer on a smooth path.
    t_s : array_like, shape (k,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    center_velocity_km_s : array_like, shape (k, 3), optional
    light_time : bool
    sigma_rad : array_like, shape (k, 2), optional
        Without them 1 arcsec is taken and the assumption says so.
    body_radius_km : float
        Periapsides below it are left out by the usual limits.
    limits : RegionLimits, optional
        Default by the centre: a satellite, or a body of the Solar System.
    shape : (int, int)
        Nodes in range and in range rate, 8 or more each.
    prior_power : float
        k of the prior density rho^k in log rho, -1 to 5.

    Returns
    -------
    RangingSample
        Status ESTIMATED, NOT_CONVERGED (nothing fits, or the raster is too coarse for what the observations fix),
        NO_CANDIDATE (the region is empty) or BAD_INPUT.

    Raises
    ------
    UsageError
        Shapes that do not fit, fewer than two observations.
    """
    lines = line_set(los, observer_km, t_s, gm_km3_s2, center_velocity_km_s, light_time, sigma_rad, 2)
    if len(shape) != 2 or min(shape) < 8:
        raise UsageError(f"shape is {shape!r}; expected two numbers of nodes, 8 or more")
    if not -1.0 <= prior_power <= 5.0:
        raise UsageError(f"prior_power is {prior_power!r}; expected a number from -1 to 5")
    bounds = usual_limits(gm_km3_s2, body_radius_km) if limits is None else limits
    assumption = f"{bounds.words}; prior density range^{prior_power:g} in log range, about uniform in e"
    if sigma_rad is None:
        assumption += "; no sigma stated, 1 arcsec taken"
    if lines.problem is not None:
        return _nothing(lines, assumption, lines.problem, problem_sentence(lines.problem))
    with np.errstate(all="ignore"):
        one = attributable(lines)
        if one is None:
            text = "The directions spread over more than a right angle: not a short arc."
            return _nothing(lines, assumption, Outcome.BAD_INPUT, text)
        fitter = _Fitter(lines, one, bounds, prior_power)
        found = fitter.search(shape)
        if found is None:
            text = f"No slant range and range rate is admitted for this arc ({bounds.words})."
            return _nothing(lines, assumption, Outcome.NO_POSITIVE_ROOT, text)
        nodes, levels = found
        return _sample(lines, one, nodes, levels, assumption)


def solve(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    limits: RegionLimits | None = None,
    shape: tuple[int, int] = (60, 60),
    prior_power: float = PRIOR_POWER,
) -> tuple[MethodOrbit, ...]:
    """The representative orbit of :func:`sample`, in the form of the other methods; parameters as there."""
    return (
        sample(
            los,
            observer_km,
            t_s,
            gm_km3_s2,
            center_velocity_km_s=center_velocity_km_s,
            light_time=light_time,
            sigma_rad=sigma_rad,
            body_radius_km=body_radius_km,
            limits=limits,
            shape=shape,
            prior_power=prior_power,
        ).best,
    )


class _Fitter:
    """Direction and rates fitted at fixed range and range rate, all nodes at once; components first inside."""

    def __init__(self, lines: LineSet, one: Attributable, limits: RegionLimits, prior_power: float):
        self.lines, self.one, self.limits, self.prior_power = lines, one, limits, prior_power
        self.unit_km = float(np.sqrt(one.observer_km @ one.observer_km))
        self.gm, self.per_c = lines.gm_km3_s2, lines.per_c
        self.span = float(lines.t_s[-1] - lines.t_s[0])
        self.dt = lines.t_s - one.t_s
        east, north = tangent_axes(lines.unit)
        self.axes = np.stack((east, north), axis=1)
        self.sigma = lines.weights_sigma
        # Effect of a turn along the attributable's axes on each observed direction's, over the sigmas.
        self.turn = np.einsum("kac,bc->kab", self.axes, one.axes) / self.sigma[:, :, None]

    def search(self, shape: tuple[int, int]) -> tuple[_Nodes, int] | None:
        """Nodes of the final raster, and how many rasters it took."""
        whole = raster(self.one, self.gm, self.limits, (4 * ROWS, COLUMNS))
        if whole is None:
            return None
        first, last = float(np.log(whole.range_km.min())), float(np.log(whole.range_km.max()))
        levels = 0
        for _ in range(LEVELS):
            step = (last - first) / ROWS
            z = first + step * (np.arange(ROWS) + 0.5)
            found = self._valley(z, None)
            levels += found.passes
            if not np.isfinite(found.log_weight).any():
                return self._plain(shape)
            weight = _normalised(found.log_weight)
            carries = np.flatnonzero(weight > LITTLE)
            # One row beyond what carries weight.
            first = float(z[max(carries[0] - 1, 0)] - 0.5 * step)
            last = float(z[min(carries[-1] + 1, ROWS - 1)] + 0.5 * step)
            if 1.0 / float(weight @ weight) >= WANTED_ROWS:
                break
        step = (last - first) / shape[0]
        rows = first + step * (np.arange(shape[0]) + 0.5)
        on = np.isfinite(found.half)
        middle = np.interp(rows, z[on], found.middle[on])
        room = WIDER * np.interp(rows, z[on], found.half[on]) + np.abs(np.gradient(middle))
        final = self._valley(rows, Valley(middle, room, np.zeros(len(rows)), 0))
        on = np.isfinite(final.half)
        if not on.any():
            return self._plain(shape)
        part = (np.arange(shape[1]) + 0.5) / shape[1] * 2.0 - 1.0
        x = final.middle[on, None] + final.half[on, None] * part
        cell = np.repeat(step * 2.0 * final.half[on] / shape[1], shape[1])
        nodes = self.fitted(Raster(np.repeat(np.exp(rows[on]), shape[1]), x.reshape(-1), cell))
        if not np.isfinite(nodes.log_weight()).any():
            return self._plain(shape)
        return nodes, levels + final.passes + 1

    def _plain(self, shape: tuple[int, int]) -> tuple[_Nodes, int] | None:
        """The raster of the whole region, where no valley is found: what fits best of it is at least told."""
        for rows in (shape[0], 4 * shape[0]):
            # A thin region can slip through the coarser raster.
            whole = raster(self.one, self.gm, self.limits, (rows, shape[1]))
            nodes = None if whole is None else self.fitted(whole)
            if nodes is not None and np.isfinite(nodes.log_weight()).any():
                return nodes, 1
        return None

    def _valley(self, z: Array, near: Valley | None) -> Valley:
        """Where the weight lies at ranges of logarithm ``z``."""
        rho = np.exp(z)
        low, high = range_rate_bounds(self.one, self.gm, self.limits, rho)

        def log_weight_at(rows: Array, x: Array, width: Array) -> Array:
            columns = x.shape[1]
            nodes = self.fitted(Raster(np.repeat(rho[rows], columns), x.reshape(-1), np.repeat(width, columns)))
            return nodes.log_weight().reshape(x.shape)

        return valley(log_weight_at, low, high, near)

    def fitted(self, nodes: Raster) -> _Nodes:
        """Fit direction and rates at every node inside the limits."""
        rho, x, measure = nodes
        m = len(rho)
        unit = np.repeat(self.one.unit[:, None], m, axis=1)
        rate = np.repeat(self.one.rate_rad_s[:, None], m, axis=1)
        chi2, log_det = np.full(m, np.nan), np.full(m, np.nan)
        pace = float(np.sqrt(self.one.rate_rad_s @ self.one.rate_rad_s))
        inside = ~self._excluded(rho, x, unit, rate, pace).any
        lanes = np.flatnonzero(inside)
        for index in range(PASSES):
            if not lanes.size:
                break
            du, dr, predicted, now, det = self._step(rho[lanes], x[lanes], unit[:, lanes], rate[:, lanes])
            # What the next correction would gain belongs to the fit; once small it is taken as predicted.
            chi2[lanes], log_det[lanes] = predicted, det
            if index == PASSES - 1:
                chi2[lanes] = now
                break
            going = np.ones(lanes.size, dtype=bool) if not index else now - predicted > SETTLED
            if index:
                # The first prediction is too rough to give a node up by.
                least = np.nanmin(chi2) if np.isfinite(chi2).any() else np.nan
                going &= predicted < 1.5 * least + HOPELESS
            lanes, du, dr = lanes[going], du[:, going], dr[:, going]
            new = unit[:, lanes] + du
            new = new / np.sqrt(np.add.reduce(new * new, axis=0))
            turned = rate[:, lanes] + dr
            unit[:, lanes], rate[:, lanes] = new, turned - np.add.reduce(turned * new, axis=0) * new
        out = self._excluded(rho, x, unit, rate, pace)
        chi2[out.any] = np.nan
        states = self._emission(rho, x, unit, rate).T
        prior = (rho / self.unit_km) ** self.prior_power / (_eccentricity(states, self.gm) + E_FLOOR)
        return _Nodes(rho, x, measure * prior, states, chi2, log_det, out)

    def _emission(self, rho: Array, x: Array, unit: Array, rate: Array) -> Array:
        """States (6, m) at the emission of the middle observation."""
        effective = unit + (self.lines.moving_km_s[self.lines.middle] * self.per_c)[:, None]
        v = (self.one.velocity_km_s[:, None] + x * effective + rho * rate) / (1.0 - x * self.per_c)
        return np.concatenate((self.one.observer_km[:, None] + rho * effective, v))

    def _excluded(self, rho: Array, x: Array, unit: Array, rate: Array, pace: float) -> Excluded:
        return excluded(self.limits, self.gm, rho, x, pace, self._emission(rho, x, unit, rate).T)

    def _step(self, rho: Array, x: Array, unit: Array, rate: Array) -> tuple[Array, Array, Array, Array, Array]:
        """Corrections of direction and rate (3, m), chi-square after and before them, log |N|."""
        k, m = len(self.dt), len(rho)
        state = self._emission(rho, x, unit, rate)
        r, v = state[:3], state[3:]
        radius = np.sqrt(np.add.reduce(r * r, axis=0))
        eta = np.add.reduce(r * v, axis=0)
        beta = 2.0 * self.gm / radius - np.add.reduce(v * v, axis=0)
        # Emission times from a straight range; the rest of the light time is a short straight step below.
        lead = x[None] * self.dt[:, None]
        dt = self.dt[:, None] - lead * self.per_c
        radius, eta, beta = (np.broadcast_to(part, (k, m)) for part in (radius, eta, beta))
        u = solve_universal(radius, eta, beta, dt, self.gm)
        f, g, ft, gt = lagrange(u, radius, dt, self.gm)
        line = f[:, None] * r + g[:, None] * v - self.lines.observer_km[:, :, None]
        if self.per_c:
            moving = self.lines.moving_km_s[:, :, None]
            line -= (moving * self.per_c) * (rho + lead)[:, None]
            speed = ft[:, None] * r + gt[:, None] * v + moving
            # One Newton step for rho_i: line -= (v + Vc) (true - guessed range) / c.
            distance = np.sqrt(np.add.reduce(line * line, axis=1))
            toward = np.add.reduce(line * speed, axis=1) / distance
            late = (distance - rho - lead) * self.per_c / (1.0 + toward * self.per_c)
            line -= late[:, None] * speed
        distance = np.sqrt(np.add.reduce(line * line, axis=1))
        # Observed minus computed on the tangent axes, as an arc.
        flat = -np.einsum("kac,kcm->kam", self.axes, line) / distance[:, None]
        sine = np.hypot(flat[:, 0], flat[:, 1])
        cosine = np.einsum("kc,kcm->km", self.lines.unit, line) / distance
        arc = np.where(sine > 1e-12, np.arctan2(sine, cosine) / sine, 1.0)
        residual = flat * (arc[:, None] / self.sigma[:, :, None])
        # Partials with f and g held: a by the direction, b by the rate over the span of the arc.
        a = (f * rho + g * x) / distance
        b = g * rho / (distance * self.span)
        outer = np.einsum("kab,kac->kbc", self.turn, self.turn).reshape(k, 4)
        blocks = np.empty((m, 2, 2, 2, 2))
        for i, j, scale in ((0, 0, a * a), (0, 1, a * b), (1, 1, b * b)):
            block = (outer.T @ scale).T.reshape(m, 2, 2)
            blocks[:, i, :, j, :] = blocks[:, j, :, i, :] = block
        pulled = np.einsum("kab,kam->kbm", self.turn, residual)
        right = np.stack((np.add.reduce(a[:, None] * pulled), np.add.reduce(b[:, None] * pulled)))
        normal, right = blocks.reshape(m, 4, 4), right.reshape(4, m).T
        good = np.isfinite(normal).all(axis=(1, 2)) & np.isfinite(right).all(axis=1)
        normal[~good] = np.eye(4)
        sign, log_det = np.linalg.slogdet(normal)
        good &= sign > 0.0
        normal[~good] = np.eye(4)
        # The residual falls by what the predicted direction gains.
        solved = np.linalg.solve(normal, right[:, :, None])[:, :, 0]
        now = np.add.reduce(residual * residual, axis=(0, 1))
        after = np.fmax(now - np.sum(solved * right, axis=1), 0.0)
        after, now, log_det = (np.where(good, part, np.nan) for part in (after, now, log_det))
        du = self.one.axes.T @ solved[:, :2].T
        dr = self.one.axes.T @ (solved[:, 2:].T / self.span)
        return du, dr, after, now, log_det


def _eccentricity(states: Array, gm: float) -> Array:
    """Eccentricities (m,) of states (m, 6)."""
    r, v = states[:, :3], states[:, 3:]
    radius, rv, vv = np.sqrt(np.sum(r * r, axis=1)), np.sum(r * v, axis=1), np.sum(v * v, axis=1)
    lead = vv / gm - 1.0 / radius
    vector = lead[:, None] * r - (rv / gm)[:, None] * v
    result: Array = np.sqrt(np.sum(vector * vector, axis=1))
    return result


def _normalised(log_weight: Array) -> Array:
    top = float(np.max(log_weight))
    weight = np.exp(log_weight - top)
    result: Array = weight / weight.sum()
    return result


def _effective(log_weight: Array) -> float:
    """Effective number of nodes."""
    if not np.isfinite(log_weight).any():
        return 0.0
    weight = _normalised(log_weight)
    return float(1.0 / np.sum(weight * weight))


def _sample(lines: LineSet, one: Attributable, nodes: _Nodes, levels: int, assumption: str) -> RangingSample:
    """The result of the final raster."""
    log_weight = nodes.log_weight()
    weight = _normalised(log_weight)
    number = float(1.0 / np.sum(weight * weight))
    r, v = propagate(nodes.states[:, :3], nodes.states[:, 3:], nodes.rho * lines.per_c, lines.gm_km3_s2)
    states = np.concatenate((r, v), axis=1)
    dof = 2 * len(lines.rows) - 4
    least = float(np.nanmin(nodes.chi2))
    order = np.argsort(nodes.rho, kind="stable")
    spread = np.interp((0.05, 0.5, 0.95), np.cumsum(weight[order]), nodes.rho[order])
    text = (
        f"One of many: not a determined orbit. Slant range {spread[0]:.3g} to {spread[2]:.3g} km (5 to 95 % of the "
        f"weight) over {number:.0f} effective orbits."
    )
    # Among the orbits that fit as well as any, the one nearest to the middle of the sample.
    z = np.stack((np.log(nodes.rho), nodes.x))
    mean = z @ weight
    size = np.sqrt(np.sum(weight * (z - mean[:, None]) ** 2, axis=1))
    away = np.sum(((z - mean[:, None]) / np.fmax(size, 1e-300)[:, None]) ** 2, axis=0)
    good = (nodes.chi2 <= least + 1.0) & (weight > 0.0)
    chosen = int(np.flatnonzero(good)[np.argmin(away[good])])
    status = Status(Code.ESTIMATED, text)
    state = states[chosen].copy()
    seen = misses(lines, state, one.t_s)
    miss = np.hypot(seen.residual[:, 0], seen.residual[:, 1])
    remark, outcome = "", Outcome.CONVERGED
    if least > NO_FIT * 2 * len(lines.rows) or number < UNRESOLVED:
        outcome = Outcome.NOT_CONVERGED
        text = (
            f"No orbit of the region fits: least chi-square {least:.3g} for {dof} degrees of freedom; the arc is too "
            "long for one direction with its rates, or the observations do not belong together."
            if least > NO_FIT * 2 * len(lines.rows)
            else f"Only {number:.0f} effective orbits: the observations fix more than the raster resolves; "
            "use a method that determines an orbit."
        )
        status = Status(Code.NOT_CONVERGED, text)
    elif dof > 0 and least > dof + 6.0 * np.sqrt(2.0 * dof):
        remark = f"The best fit is poor: chi-square {least:.3g} for {dof} degrees of freedom."
    best = MethodOrbit(
        METHOD, assumption, lines.rows, outcome, status, remark,
        float(np.sqrt(np.sum(seen.positions_km[lines.middle] ** 2))), state, state.copy(), one.t_s,
        seen.range_km, seen.positions_km, seen.emission_t_s, miss, None, float("nan"), levels,
    )  # fmt: skip
    return RangingSample(
        status, assumption, nodes.rho, nodes.x, states, one.t_s, weight, nodes.chi2, dof, nodes.out, number, levels,
        lines.gm_km3_s2, best,
    )  # fmt: skip


def _nothing(lines: LineSet, assumption: str, outcome: Outcome, text: str) -> RangingSample:
    """A result without a sample."""
    best = rejected(METHOD, assumption, lines, outcome, text)
    none, mask = np.empty(0), np.empty(0, dtype=bool)
    return RangingSample(
        Status(Code.NO_CANDIDATE if outcome == Outcome.NO_POSITIVE_ROOT else outcome.code, text), assumption, none,
        none.copy(), np.empty((0, 6)), best.t_state_s, none.copy(), none.copy(), 2 * len(lines.rows) - 4,
        Excluded(mask, mask, mask, mask, mask), 0.0, 0, lines.gm_km3_s2, best,
    )  # fmt: skip
