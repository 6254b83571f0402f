"""One triple of observations: every root with its Gauss, Gibbs or Herrick-Gibbs and converged stage.

All arrays of a solution are rows in the order in which the three observations were given.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.preliminary.gauss import RangePolynomial
from firstarc.preliminary.gibbs import coplanarity_rad, gibbs_vectors
from firstarc.preliminary.lines_of_sight import (
    Array,
    Lines,
    angle_covariance,
    checked_rows,
    determinant,
    determinant_sigma,
    norm,
    separations_rad,
    time_ordered,
)
from firstarc.preliminary.outcome import Outcome
from firstarc.preliminary.refine import Look, angle_map, geometry, look
from firstarc.preliminary.root_orbits import (
    EXCESS_LIMIT_KM_S,
    OWN_RANGE,
    STARTS,
    RootOrbits,
    herrick_gibbs_of,
    periapsis,
    positions,
    solve_roots,
)
from firstarc.preliminary.rule import GIBBS, RuleChoice, angle_noise, choose
from firstarc.preliminary.solution import (
    CoreCandidate,
    CoreConverged,
    CoreGibbs,
    CoreStage,
    Iteration,
    RootFunction,
    TripleSolution,
)
from firstarc.results import Code, Status
from firstarc.twobody.kepler import propagate, short_partials

__all__ = [
    "CoreCandidate",
    "CoreConverged",
    "CoreGibbs",
    "CoreStage",
    "Iteration",
    "RootFunction",
    "TripleSolution",
    "solve_triple",
]

#: Angle of motion during the light time below which a Taylor step is exact to rounding.
_SHORT = 2e-4
#: A determinant below this many of its sigmas leaves the ranges undetermined.
WEAK_DETERMINANT_SIGMAS = 3.0


def solve_triple(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    gm_km3_s2: float,
    *,
    center_velocity_km_s: ArrayLike | None = None,
    light_time: bool = False,
    sigma_rad: ArrayLike | None = None,
    correlation: ArrayLike | None = None,
    body_radius_km: float = 0.0,
    excess_limit_km_s: float = EXCESS_LIMIT_KM_S,
) -> TripleSolution:
    """All candidates of three observations, every stage.

    Parameters
    ----------
    los : array_like, shape (3, 3)
        Directions, one a row, ICRF axes; in any time order.
    observer_km : array_like, shape (3, 3)
        Observer from the centre at reception.
    t_s : array_like, shape (3,)
        Reception times, TDB seconds.
    gm_km3_s2 : float
    center_velocity_km_s : array_like, shape (3, 3), optional
        Barycentric velocity of the centre; used with light time.
    light_time : bool
        True for astrometric directions, False for geometric ones.
    sigma_rad : array_like, shape (3, 2), optional
        Sigmas of (alpha cos delta, delta); without them no rule by predicted error and no covariance.
    correlation : array_like, shape (3,), optional
        Their correlations.
    body_radius_km : float
        Radius of the central body; 0 for no surface check.
    excess_limit_km_s : float
        Larger hyperbolic excesses are rejected.

    Returns
    -------
    TripleSolution
        Status CONVERGED, NO_CANDIDATE, NO_POSITIVE_ROOT, COPLANAR_LINES or BAD_INPUT.

    Raises
    ------
    UsageError
        Shapes that do not fit, or a gravitational parameter that is not positive.
    """
    if not (np.isfinite(gm_km3_s2) and gm_km3_s2 > 0.0):
        raise UsageError(f"gm_km3_s2 is {gm_km3_s2!r}; expected a positive number in km3/s2")
    los_, observer, times, moving = checked_rows(los, observer_km, t_s, center_velocity_km_s, single=True)
    lines, order, middle = time_ordered(los_, observer, times, moving, gm_km3_s2, light_time)
    covariance = None
    if sigma_rad is not None:
        covariance = angle_covariance(sigma_rad, correlation)[order[0]]
    codes, poly, orbits = solve_roots(lines, body_radius_km, excess_limit_km_s, True, thorough=True)
    with np.errstate(all="ignore"):
        d0 = float(determinant(lines.unit)[0])
        d0_sigma = (
            float("nan") if covariance is None else float(determinant_sigma(lines.unit, covariance, lines.frame)[0])
        )
        apart = np.degrees(separations_rad(lines.unit)[:, 0])
        unit_km = float(norm(lines.observer_km[1])[0])
        function = RootFunction(float(poly.a[0]), float(poly.b[0]), float(poly.c[0]), unit_km)
        candidates: tuple[CoreCandidate, ...] = ()
        if orbits.triple.size:
            builder = _Builder(lines, poly, orbits, order[0], float(middle[0]), covariance, body_radius_km)
            candidates = builder.candidates(excess_limit_km_s)
    status = _triple_status(Outcome(int(codes[0])), times[0], d0, d0_sigma, candidates)
    return TripleSolution(
        status,
        function,
        float(poly.big_a[0]),
        float(poly.big_b[0]),
        orbits.root_km,
        d0,
        d0_sigma,
        apart,
        times[0],
        order[0],
        float(gm_km3_s2),
        light_time,
        body_radius_km,
        candidates,
        lines,
    )


def _triple_status(
    code: Outcome, t_s: Array, d0: float, d0_sigma: float, candidates: tuple[CoreCandidate, ...]
) -> Status:
    if code == Outcome.BAD_INPUT:
        return Status(Code.BAD_INPUT, "A direction, an observer position or a time is zero or not finite.")
    if code == Outcome.EQUAL_TIMES:
        return Status(Code.BAD_INPUT, "Two of the three observations have the same time: pick another.")
    if code == Outcome.COPLANAR_LINES:
        return Status(
            Code.COPLANAR_LINES,
            f"The three lines of sight lie in one plane (determinant {d0:.1e}, lost in rounding): "
            "the ranges are undetermined.",
        )
    if code == Outcome.NO_POSITIVE_ROOT:
        return Status(Code.NO_POSITIVE_ROOT, "The range polynomial has no positive root.")
    good = sum(one.admissible for one in candidates)
    weak = d0_sigma > 0.0 and abs(d0) < WEAK_DETERMINANT_SIGMAS * d0_sigma
    doubt = f" The determinant is only {abs(d0) / d0_sigma:.1f} times its noise." if weak else ""
    roots = f"{len(candidates)} positive root{'s' if len(candidates) != 1 else ''}"
    if not good:
        reasons = sorted({one.outcome.words for one in candidates})
        return Status(Code.NO_CANDIDATE, f"No admissible orbit among {roots}: {', '.join(reasons)}.{doubt}")
    orbits = f"{good} admissible orbit{'s' if good != 1 else ''}"
    return Status(Code.CONVERGED, f"{orbits} of {roots}.{doubt}")


class _Builder:
    """Stages of all roots of one triple, the work shared between roots."""

    def __init__(
        self,
        lines: Lines,
        poly: RangePolynomial,
        orbits: RootOrbits,
        order: Array,
        t_middle: float,
        covariance: Array | None,
        body_radius_km: float,
    ):
        self.lines, self.orbits, self.order, self.t_middle = lines, orbits, order, t_middle
        self.covariance, self.body_radius_km = covariance, body_radius_km
        self.gm = lines.gm_km3_s2
        self.back = np.argsort(order)
        found, gauss, lanes = orbits.refined, orbits.gauss, orbits.lines
        self.converged = found.converged
        self.count = m = orbits.root_km.size
        self.by_herrick = herrick_gibbs_of(lanes, gauss)
        self.choices = self._choices()
        by_gibbs = np.array([choice.rule == GIBBS for choice in self.choices])
        corrected = np.where(by_gibbs, orbits.gibbs_v2, self.by_herrick)
        # Lanes of the three stages side by side: Gauss, corrected, converged.
        ranges = np.concatenate((gauss.range_km, gauss.range_km, found.range_km), axis=1)
        v2 = np.concatenate((gauss.v2_km_s, corrected, found.v2_km_s), axis=1)
        triple_lanes = lanes.take(np.tile(np.arange(m), 3))
        placed = positions(triple_lanes, ranges)
        delay = ranges[1] * lines.per_c
        r, v, self.stm = short_partials(placed[1].T, v2.T, delay, self.gm)
        pace = self.gm * delay**2 / norm(placed[1]) ** 3
        if not (pace < _SHORT**2).all():
            r, v = propagate(placed[1].T, v2.T, delay, self.gm)
        self.ranges, self.v2, self.placed = (
            ranges.reshape(3, 3, m),
            v2.reshape(3, 3, m),
            placed.reshape(3, 3, 3, m),
        )
        self.states = np.concatenate((r, v), axis=1).reshape(3, m, 6)
        # One pass of light time is enough: what a range error leaves is v/c times the miss it goes with.
        self.geo = geometry(lanes)
        twice = self.geo._replace(lines=np.tile(self.geo.lines, 2), middle=np.tile(self.geo.middle, 2))
        seen = look(twice, ranges[:, : 2 * m], v2[:, : 2 * m])
        self.miss = np.concatenate((seen.miss_rad, found.miss_rad), axis=1).reshape(3, 3, m)
        self.q, self.excess2 = periapsis(placed[1, :, 2 * m :], found.v2_km_s, self.gm)
        self.q, self.excess2 = np.atleast_1d(self.q), np.atleast_1d(self.excess2)

    def _choices(self) -> list[RuleChoice]:
        orbits, m = self.orbits, self.count
        noise = None
        if self.covariance is not None:
            noise = angle_noise(self.lines, orbits.root_km, self.covariance)
        reference = orbits.refined.v2_km_s
        cut = norm(orbits.gibbs_v2 - reference), norm(self.by_herrick - reference)
        self.separations = np.degrees(separations_rad(orbits.gauss.r_km))
        usable = np.isfinite(np.stack((orbits.gibbs_v2, self.by_herrick))).all(axis=1)
        return [
            choose(
                self.separations[:, k],
                None if noise is None else (float(noise[0][k]), float(noise[1][k])),
                (float(cut[0][k]), float(cut[1][k])) if self.converged[k] else None,
                (bool(usable[0][k]), bool(usable[1][k])),
            )
            for k in range(m)
        ]

    def _rows(self, column: Array) -> Array:
        return column[self.back]

    def _stage(self, stage: int, k: int, status: Status) -> CoreStage:
        ranges = self.ranges[:, stage, k]
        reception = self.lines.t_s[:, 0] + self.t_middle
        return CoreStage(
            status,
            self._rows(ranges),
            self._rows(self.placed[:, :, stage, k]),
            self._rows(reception - ranges * self.lines.per_c),
            self.states[stage, k],
            self.t_middle,
            self.v2[:, stage, k],
            self._rows(self.miss[:, stage, k]),
        )

    def candidates(self, excess_limit_km_s: float) -> tuple[CoreCandidate, ...]:
        """One candidate per root."""
        orbits, m = self.orbits, self.count
        n, d, s = gibbs_vectors(orbits.gauss.r_km)
        out_of_plane = np.degrees(coplanarity_rad(orbits.gauss.r_km))
        covariances, range_sigma = self._covariances()
        out = []
        for k in range(m):
            outcome = Outcome(int(orbits.outcome[k]))
            status, remark = self._verdict(k, outcome, excess_limit_km_s)
            gauss = self._stage(0, k, Status(Code.ESTIMATED, "First estimate from the root."))
            corrected_ok = bool(np.isfinite(self.v2[:, 1, k]).all())
            text = self.choices[k].reason if corrected_ok else "Neither rule gives a velocity at these positions."
            corrected = self._stage(1, k, Status(Code.ESTIMATED if corrected_ok else Code.SINGULAR, text))
            final = self._stage(2, k, self._converged_status(k))
            out.append(
                CoreCandidate(
                    float(orbits.root_km[k]),
                    bool(orbits.double[k]),
                    outcome,
                    status,
                    remark,
                    gauss,
                    CoreGibbs(
                        **vars(corrected),
                        choice=self.choices[k],
                        coplanarity_deg=float(out_of_plane[k]),
                        separations_deg=self.separations[:, k],
                        n_km3=n[:, k],
                        d_km2=d[:, k],
                        s_km2=s[:, k],
                    ),
                    CoreConverged(
                        **vars(final),
                        iterations=int(orbits.refined.iterations[k]),
                        start=STARTS[int(orbits.start[k])],
                        history=self._history(k),
                        covariance=covariances[k],
                        range2_sigma_km=range_sigma[k],
                        q_km=float(self.q[k]),
                        excess_km_s=float(np.sqrt(max(float(self.excess2[k]), 0.0))),
                    ),
                )
            )
        return tuple(out)

    def _converged_status(self, k: int) -> Status:
        found = self.orbits.refined
        if found.converged[k]:
            start = STARTS[int(self.orbits.start[k])]
            return Status(
                Code.CONVERGED,
                f"Two-body orbit through the three lines of sight, {found.iterations[k]} iterations from {start}.",
            )
        if self.ranges[1, 0, k] <= 0.0:
            return Status(Code.NOT_ATTEMPTED, "The first estimate lies behind the observer.")
        worst = float(np.nanmax(found.miss_rad[:, k])) if np.isfinite(found.miss_rad[:, k]).any() else float("nan")
        return Status(
            Code.NOT_CONVERGED,
            f"Not converged after {found.iterations[k]} iterations from any start; nearest miss "
            f"{np.degrees(worst) * 3600.0:.2g} arcsec.",
        )

    def _history(self, k: int) -> tuple[Iteration, ...]:
        rows = self.orbits.refined.history[: int(self.orbits.refined.iterations[k]) + 1]
        return tuple(
            Iteration(
                tuple(float(x) for x in self._rows(row.range_km[:, k])),  # type: ignore[arg-type]
                float(row.change[k]),
                tuple(float(x) for x in self._rows(row.miss_rad[:, k])),  # type: ignore[arg-type]
            )
            for row in rows
        )

    def _covariances(self) -> tuple[list[Array | None], list[float]]:
        m = self.count
        if self.covariance is None or not self.converged.any():
            return [None] * m, [float("nan")] * m
        found, lanes = self.orbits.refined, self.orbits.lines
        d_range, d_r, d_v = angle_map(
            lanes, found.range_km, self.geo, Look(found.range_km, found.miss_rad, found.looks)
        )
        r, v = self.states[2, :, :3], self.states[2, :, 3:]
        stm = self.stm[2 * m :]
        at_emission = np.concatenate((d_r, d_v), axis=1).transpose(2, 1, 0)
        pull = -self.gm * r / np.sum(r * r, axis=1, keepdims=True) ** 1.5
        # A longer range makes the light leave earlier: the step to the reception time grows with it.
        rate = np.concatenate((v, pull), axis=1)[:, :, None]
        jacobian = stm @ at_emission + rate * (d_range.T * self.lines.per_c)[:, None, :]
        block = np.zeros((6, 6))
        for line in range(3):
            block[2 * line : 2 * line + 2, 2 * line : 2 * line + 2] = self.covariance[line]
        full = jacobian @ block @ jacobian.transpose(0, 2, 1)
        sigma = np.sqrt(np.add.reduce(d_range * (block @ d_range), axis=0))
        covariances = [0.5 * (full[k] + full[k].T) if self.converged[k] else None for k in range(m)]
        return covariances, [float(sigma[k]) if self.converged[k] else float("nan") for k in range(m)]

    def _verdict(self, k: int, outcome: Outcome, excess_limit_km_s: float) -> tuple[Status, str]:
        """Status and remark of one root."""
        ranges = self.ranges[:, 2 if self.converged[k] else 0, k]
        stage = "after convergence" if self.converged[k] else "in the first estimate"
        remark = ""
        if self.orbits.double[k]:
            remark = "Double root: two orbits run together here."
        if outcome == Outcome.CONVERGED:
            if 0.0 < self.q[k] < self.body_radius_km:
                remark = f"Perigee {self.body_radius_km - self.q[k]:.0f} km below the surface: grazing."
            return Status(Code.CONVERGED, "Admissible."), remark
        if outcome == Outcome.NEGATIVE_RANGE:
            row = int(self.order[int(np.argmin(ranges))]) + 1
            if self.orbits.gauss.range_km[1, k] <= 0.0:
                ranges, stage, row = self.ranges[:, 0, k], "in the first estimate", int(self.order[1]) + 1
                text = f"Slant range {ranges[1]:.4g} km at observation {row} {stage}."
            else:
                text = f"Slant range {ranges.min():.4g} km at observation {row} {stage}."
        elif outcome == Outcome.BELOW_SURFACE:
            lowest = float(norm(self.placed[:, :, 2, k : k + 1]).min())
            if lowest < self.body_radius_km:
                text = f"{self.body_radius_km - lowest:.0f} km below the surface when observed."
            else:
                text = f"Perigee {self.body_radius_km - self.q[k]:.0f} km below the surface after convergence."
        elif outcome == Outcome.OWN_ORBIT:
            nearest = float(np.abs(ranges).max() / norm(self.lines.observer_km[1])[0])
            text = (
                f"The observer's own orbit: within {nearest * 100.0:.2g} % of the observer's distance from "
                f"the centre at all three times (limit {OWN_RANGE * 100.0:g} %)."
            )
        elif outcome == Outcome.SAME_ORBIT:
            text = "Converges to the same orbit as a smaller root."
        elif outcome == Outcome.TOO_FAST:
            text = f"Hyperbolic excess {self.excess2[k] ** 0.5:.0f} km/s, limit {excess_limit_km_s:g} km/s."
        else:
            text = self._converged_status(k).sentence
        return Status(outcome.code, text), remark
