"""From the core's plain results to candidates with units, residuals of all observations, letters and reasons."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..constants import ARCSEC_RAD, AU_KM, DAY_S, EARTH_RADIUS_KM, SUN_RADIUS_KM
from ..dynamics.light_time import predicted_directions, residuals_rad
from ..observing.observations import Observations
from ..observing.sight_lines import SightLines
from ..preliminary.method_orbit import MethodOrbit
from ..preliminary.methods import METHODS
from ..preliminary.outcome import Outcome
from ..preliminary.solution import CoreCandidate, CoreGibbs, CoreStage, TripleSolution
from ..report.rounding import significant
from ..results import Code, Status
from ..twobody.kepler import propagate_with_partials
from ..uncertainty.consistency import agreement_of_others
from .stages import Candidate, CorrectedStage, Iteration, Stage
from .state import GM_KM3_S2, State

Array = NDArray[np.float64]
BODY_RADIUS_KM = {"earth": EARTH_RADIUS_KM, "sun": SUN_RADIUS_KM}


def residuals_under(states: Array, t_state_s: Any, lines: SightLines, gm_km3_s2: float) -> Array:
    """O-C (k, n, 2) of all observations under two-body states (k, 6), rad; (n, 2) for one state."""
    predicted, _, _ = predicted_directions(
        states, t_state_s, lines.t_s, lines.observer_km, lines.center_velocity_km_s, gm_km3_s2, lines.light_time
    )
    return residuals_rad(lines.los, predicted)


class Builder:
    """Makes the candidates of one set of observations and one pick."""

    def __init__(self, obs: Observations, pick: tuple[int, int, int]):
        self.obs, self.lines, self.pick = obs, obs.sight_lines, pick
        self.gm = GM_KM3_S2[obs.center]
        self.t_middle_s = float(self.lines.t_s[pick[1]])
        self.epoch = (self.lines.epoch_tdb[0], self.lines.epoch_tdb[1] + self.t_middle_s / DAY_S)

    def of_gauss(self, solution: TripleSolution) -> list[Candidate]:
        """Every root of Gauss' equation, from the outermost inwards."""
        cores = solution.candidates
        if not cores:
            return []
        states = np.stack([stage.state for core in cores for stage in (core.gauss, core.gibbs, core.converged)])
        residuals = residuals_under(states, self.t_middle_s, self.lines, self.gm).reshape(len(cores), 3, -1, 2)
        return [self._gauss_candidate(core, residuals[k]) for k, core in reversed(list(enumerate(cores)))]

    def of_method(self, method: str, orbits: Sequence[MethodOrbit], rows: Sequence[int]) -> list[Candidate]:
        """The solutions of another method; ``rows`` are the observations that it was given."""
        return [self._method_candidate(method, orbit, rows) for orbit in orbits if math.isfinite(orbit.root_km)]

    def _gauss_candidate(self, core: CoreCandidate, residuals: Array) -> Candidate:
        arcsec = residuals / ARCSEC_RAD
        final = core.converged
        converged = self._stage("Converged", final, arcsec[2])
        return self._candidate(
            method="gauss",
            root_km=core.root_km,
            admissible=core.admissible,
            reason=self._gauss_reason(core),
            gauss=self._stage("Gauss estimate", core.gauss, arcsec[0]),
            gibbs=self._corrected(core.gibbs, arcsec[1]),
            converged=converged,
            history=final.history,
            ranges_km=final.range_km if converged.state is not None else core.gauss.range_km,
            covariance=final.covariance,
            sigma_range_km=final.range2_sigma_km,
            state=final.state,
            residuals=residuals[2],
            picked=self.pick,
        )

    def _method_candidate(self, method: str, orbit: MethodOrbit, rows: Sequence[int]) -> Candidate:
        name = METHODS[method].label
        estimate, _ = self._at_middle(orbit.estimate, orbit.t_state_s, None)
        state, covariance = self._at_middle(orbit.state, orbit.t_state_s, orbit.covariance)
        residuals = residuals_under(np.stack([estimate, state]), self.t_middle_s, self.lines, self.gm)
        arcsec = residuals / ARCSEC_RAD
        picked = tuple(int(rows[k]) for k in orbit.rows)
        has_orbit = bool(np.isfinite(state).all())
        if not has_orbit:
            final = orbit.status
        elif orbit.admissible:
            final = Status(Code.CONVERGED, f"{name}{', ' + orbit.assumption if orbit.assumption else ''}.")
        else:
            final = Status(Code.CONVERGED, orbit.status.sentence)
        reason = orbit.remark if orbit.admissible else self._method_reason(orbit, picked)
        assumed = f"assumed {orbit.assumption}" if orbit.assumption else ""
        return self._candidate(
            method=method,
            root_km=orbit.root_km,
            admissible=orbit.admissible,
            reason="; ".join(part for part in (assumed, lowered(reason)) if part),
            gauss=self._plain_stage(
                f"{name} estimate",
                Status(Code.ESTIMATED, f"First state of the {name} method."),
                estimate,
                np.full((len(picked), 3), np.nan),
                np.hypot(*arcsec[0][list(picked)].T),
                arcsec[0],
            ),
            gibbs=CorrectedStage(
                name="No correction",
                status=Status(Code.NOT_ATTEMPTED, f"The {name} method has no separate correction."),
                positions_km=np.full((len(picked), 3), np.nan),
                state=None,
                miss_arcsec=np.full(len(picked), np.nan),
                residuals_arcsec=np.full_like(arcsec[0], np.nan),
                rms_arcsec=math.nan,
            ),
            converged=self._plain_stage(
                "Converged", final, state, orbit.positions_km, orbit.miss_rad / ARCSEC_RAD, arcsec[1]
            ),
            history=orbit.history,
            ranges_km=orbit.range_km,
            covariance=covariance,
            sigma_range_km=orbit.range_sigma_km,
            state=state,
            residuals=residuals[1],
            picked=picked,
        )

    def _at_middle(self, state: Array, t_state_s: float, covariance: Array | None) -> tuple[Array, Array | None]:
        """A state and its covariance at the time of the pick's middle observation."""
        if t_state_s == self.t_middle_s or not np.isfinite(state).all():
            return state, covariance
        r, v, partials = propagate_with_partials(
            state[None, :3], state[None, 3:], np.array([self.t_middle_s - t_state_s]), self.gm
        )
        moved = None if covariance is None else partials[0] @ covariance @ partials[0].T
        return np.concatenate([r[0], v[0]]), moved

    def _candidate(
        self,
        *,
        method: str,
        root_km: float,
        admissible: bool,
        reason: str,
        gauss: Stage,
        gibbs: CorrectedStage,
        converged: Stage,
        history: Sequence[Any],
        ranges_km: Array,
        covariance: Array | None,
        sigma_range_km: float,
        state: Array,
        residuals: Array,
        picked: tuple[int, ...],
    ) -> Candidate:
        lines = self.lines
        others = np.setdiff1d(np.arange(len(lines)), picked)
        known = np.full((6, 6), np.nan) if covariance is None else covariance
        chi2, dof, chance = agreement_of_others(
            state,
            known,
            self.t_middle_s,
            residuals[others],
            lines.t_s[others],
            lines.observer_km[others],
            lines.center_velocity_km_s[others],
            lines.sigma_rad[others],
            self.gm,
            lines.light_time,
        )
        with np.errstate(invalid="ignore"):
            chi = np.hypot(*(residuals / lines.sigma_rad).T)
        return Candidate(
            letter="?",
            method=method,
            root_km=root_km,
            admissible=admissible,
            reason=reason,
            gauss=gauss,
            gibbs=gibbs,
            converged=converged,
            history=tuple(
                Iteration(np.array(one.range_km), one.change, max(one.miss_rad) / ARCSEC_RAD) for one in history
            ),
            ranges_km=ranges_km,
            covariance=known,
            sigma_range_km=sigma_range_km,
            chi=chi,
            rms_others_arcsec=rms(residuals[others] / ARCSEC_RAD),
            chi2_others=chi2,
            dof_others=dof,
            chance_others=chance,
            picked=picked,
            rows=np.asarray(self.obs.rows),
            sigma_arcsec=lines.sigma_rad / ARCSEC_RAD,
        )

    def _method_reason(self, orbit: MethodOrbit, picked: tuple[int, ...]) -> str:
        """Why a solution is rejected, in the units and row numbers of the analyst."""
        if orbit.outcome is Outcome.NEGATIVE_RANGE and np.isfinite(orbit.range_km).any():
            return self._negative(orbit.range_km, picked, int(np.nanargmin(orbit.range_km)))
        if orbit.outcome is Outcome.BELOW_SURFACE and np.isfinite(orbit.positions_km).all():
            lowest = float(np.linalg.norm(orbit.positions_km, axis=1).min())
            depth = BODY_RADIUS_KM[self.obs.center] - lowest
            if depth > 0.0:
                return f"{length_text(depth, self.obs.center)} below the surface when observed"
        return orbit.status.sentence

    def _negative(self, ranges: Array, picked: Sequence[int], worst: int) -> str:
        row = int(self.obs.rows[picked[worst]]) + 1
        return f"slant range negative ({length_text(float(ranges[worst]), self.obs.center)} at row {row})"

    def _gauss_reason(self, core: CoreCandidate) -> str:
        """Why a root is rejected, or what is doubtful about it, in the units and row numbers of the analyst."""
        obs = self.obs
        if core.outcome is Outcome.NEGATIVE_RANGE:
            late = bool(core.gauss.range_km[1] > 0.0)
            ranges = core.converged.range_km if late else core.gauss.range_km
            return self._negative(ranges, self.pick, int(np.argmin(ranges)) if late else 1)
        if core.outcome is Outcome.BELOW_SURFACE:
            radius = BODY_RADIUS_KM[obs.center]
            lowest = float(np.linalg.norm(core.converged.positions_km, axis=1).min())
            if lowest < radius:
                return f"{length_text(radius - lowest, obs.center)} below the surface when observed"
            word = "perigee" if obs.center == "earth" else "perihelion"
            depth = length_text(radius - core.converged.q_km, obs.center)
            return f"{word} {depth} below the surface after convergence"
        return lowered(core.remark if core.admissible else core.status.sentence)

    def _state(self, status: Status, plain: Array) -> State | None:
        if not status.ok or not np.isfinite(plain).all():
            return None
        return State(plain[:3], plain[3:], self.epoch, self.obs.center)

    def _plain_stage(
        self, name: str, status: Status, plain: Array, positions_km: Array, miss_arcsec: Array, residuals: Array
    ) -> Stage:
        return Stage(
            name=name,
            status=status,
            positions_km=positions_km,
            state=self._state(status, plain),
            miss_arcsec=miss_arcsec,
            residuals_arcsec=residuals,
            rms_arcsec=rms(residuals),
        )

    def _stage(self, name: str, stage: CoreStage, residuals: Array) -> Stage:
        return self._plain_stage(
            name, stage.status, stage.state, stage.positions_km, stage.miss_rad / ARCSEC_RAD, residuals
        )

    def _corrected(self, stage: CoreGibbs, residuals: Array) -> CorrectedStage:
        choice = stage.choice
        return CorrectedStage(
            name=f"{choice.rule} correction",
            status=stage.status,
            positions_km=stage.positions_km,
            state=self._state(stage.status, stage.state),
            miss_arcsec=stage.miss_rad / ARCSEC_RAD,
            residuals_arcsec=residuals,
            rms_arcsec=rms(residuals),
            rule=choice.rule,
            rule_reason=choice.reason,
            coplanarity_deg=stage.coplanarity_deg,
            separations_deg=(float(stage.separations_deg[0]), float(stage.separations_deg[1])),
            n_vector=stage.n_km3,
            d_vector=stage.d_km2,
            s_vector=stage.s_km2,
            predicted_error_km_s=(
                ("Gibbs", choice.gibbs_error_km_s),
                ("Herrick-Gibbs", choice.herrick_gibbs_error_km_s),
            ),
        )


def lowered(sentence: str) -> str:
    """A sentence as part of another one: no full stop, no capital at its head."""
    sentence = sentence.rstrip(".")
    return sentence[:1].lower() + sentence[1:]


def length_text(km: float, center: str) -> str:
    """A length to about four digits: km about the Earth, au about the Sun."""
    return f"{significant(km, 4)} km" if center == "earth" else f"{significant(km / AU_KM, 3)} au"


def rms(values: Array) -> float:
    """Root mean square; NaN of nothing."""
    return float(np.sqrt(np.mean(values**2))) if values.size else math.nan
