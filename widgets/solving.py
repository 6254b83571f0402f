"""From settings to a snapshot: the kernel calls behind the Desk, each one that a user could have typed."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from firstarc.determination.orbit_fit import Estimate, OrbitFit
from firstarc.determination.preliminary import Preliminary
from firstarc.determination.stages import Candidate
from firstarc.errors import FirstArcError
from firstarc.observing.what_if import WhatIf
from firstarc.pipeline import fit, preliminary, residuals_of
from firstarc.report.rounding import fixed
from firstarc.results import Code

from .parts.snapshot import Failure, Snapshot
from .settings import Settings

#: A sighting counts as below the horizon from this altitude on; refraction lifts by half a degree (common practice).
HORIZON_DEG = -1.0


def what_ifs_of(settings: Settings, obs: Any) -> tuple[WhatIf, ...]:
    """The sliders' offsets as what-ifs: stations in their order, then rows."""
    found = []
    for site in obs.stations:
        offsets: Mapping[str, float] = settings.offsets.get(site.code, {})
        if any(offsets.values()):
            found.append(
                WhatIf(
                    station=site.code,
                    clock_s=offsets.get("clock_s", 0.0),
                    lat_deg=offsets.get("lat_deg", 0.0),
                    lon_deg=offsets.get("lon_deg", 0.0),
                    height_m=offsets.get("height_m", 0.0),
                )
            )
    for position, seconds in sorted(settings.row_clock.items()):
        if seconds:
            found.append(WhatIf(clock_s=seconds, rows=(int(obs.rows[position]),)))
    return tuple(found)


class Solver:
    """Keeps the observations and the recorded solution of the present choices."""

    def __init__(self, obs: Any):
        self.obs = obs
        self._residuals: tuple[Any, np.ndarray | None] = (None, None)
        self._recorded: dict[Any, Preliminary | None] = {}
        self._recorded_fits: dict[Any, OrbitFit] = {}
        self._estimates: tuple[Any, tuple[Estimate, ...], str] = (None, (), "")

    def snapshot(self, settings: Settings) -> Snapshot:
        """Solve under ``settings``. Data that admit no orbit, and settings that cannot be used, become a failure."""
        what_if = what_ifs_of(settings, self.obs)
        used = np.ones(len(self.obs), dtype=bool)
        used[list(settings.excluded)] = False
        for position in settings.pick:
            used[position] = True
        moved = self.obs
        failure: Failure | None = None
        pre: Preliminary | None = None
        try:
            if what_if:
                moved = self.obs.with_what_if(*what_if)
            pre = self._preliminary(moved, used, settings)
        except FirstArcError as error:
            failure = Failure(sentence(str(error)), "reset the what-if or choose another pick.")
        chosen = chosen_of(pre, settings.candidate)
        if chosen is None and failure is None:
            failure = reason_of_failure(moved, settings.pick, pre)
        recorded = self._recorded_candidate(used, settings) if what_if else chosen
        found, recorded_fit, problem, asked = self._fits(moved, used, settings, pre, chosen)
        residuals, chi = residual_arrays(chosen, moved)
        if found is not None:
            residuals, chi = found.residuals_arcsec, found.chi
        # compared is what is of the same kind: fit with fit, candidate with candidate
        base: Any = recorded if found is None else recorded_fit
        if base is not self._residuals[0]:
            of_fit = isinstance(base, OrbitFit)
            self._residuals = (base, base.residuals_arcsec if of_fit else residual_arrays(base, self.obs)[0])
        estimated, words = self._estimate(settings, recorded)
        return Snapshot(
            obs=moved,
            recorded_obs=self.obs,
            used=used,
            pick=settings.pick,
            selected=settings.row,
            preliminary=pre,
            chosen=chosen,
            residuals=residuals,
            chi=chi,
            recorded=recorded,
            recorded_residuals=self._residuals[1],
            what_if=what_if,
            method=settings.method,
            failure=failure,
            fit=found,
            recorded_fit=recorded_fit,
            fit_problem=problem,
            fit_choices=asked if found is not None else None,
            held=settings.held,
            estimated=estimated,
            estimate_words=words,
        )

    def _fits(
        self,
        moved: Any,
        used: np.ndarray,
        settings: Settings,
        pre: Preliminary | None,
        chosen: Candidate | None,
    ) -> tuple[OrbitFit | None, OrbitFit | None, str, dict[str, Any]]:
        """The fit in force, the recorded one, why there is none, and the choices. None while a slider is held."""
        asked = choices(settings)
        what_if = moved is not self.obs
        if settings.held or chosen is None:
            return None, None, "", asked
        key = (settings.excluded, settings.kept, settings.pick, settings.method, settings.candidate)
        base = self._recorded_solution(used, settings) if what_if else pre
        if key not in self._recorded_fits and base is not None and base.best is not None:
            try:
                self._recorded_fits = {key: fit(self.obs, start=start_of(base, settings.candidate), **asked)}
            except FirstArcError as error:
                self._recorded_fits = {}
                if not what_if:
                    return None, None, sentence(str(error)), asked
        recorded_fit = self._recorded_fits.get(key)
        if not what_if:
            return recorded_fit, recorded_fit, "" if recorded_fit else "no recorded candidate to start from.", asked
        held_out = () if recorded_fit is None else tuple(int(i) for i in np.flatnonzero(~recorded_fit.used))
        asked = choices(settings, held_out)
        try:
            return fit(moved, start=start_of(pre, settings.candidate), **asked), recorded_fit, "", asked
        except FirstArcError as error:
            return None, recorded_fit, sentence(str(error)), asked

    def _estimate(self, settings: Settings, recorded: Candidate | None) -> tuple[tuple[Estimate, ...], str]:
        """Offsets of a station from the recorded observations, where the hand asked for them."""
        if not settings.estimate or settings.held or recorded is None:
            return (), ""
        key = (
            *(settings.estimate, settings.excluded, settings.kept),
            *(settings.pick, settings.method, settings.candidate),
        )
        if self._estimates[0] != key:
            try:
                found = fit(self.obs, start=recorded, estimate=(settings.estimate,), **choices(settings))
                self._estimates = (key, found.estimates, "")
            except FirstArcError as error:
                self._estimates = (key, (), sentence(str(error)))
        return self._estimates[1], self._estimates[2]

    def _preliminary(self, obs: Any, used: np.ndarray, settings: Settings) -> Preliminary:
        if used.all():
            return preliminary(obs, pick=settings.pick, method=settings.method)
        inside = np.searchsorted(np.flatnonzero(used), settings.pick)
        kept = obs.without(np.flatnonzero(~used).tolist())
        return preliminary(kept, pick=tuple(int(i) for i in inside), method=settings.method)

    def _recorded_candidate(self, used: np.ndarray, settings: Settings) -> Candidate | None:
        return chosen_of(self._recorded_solution(used, settings), settings.candidate)

    def _recorded_solution(self, used: np.ndarray, settings: Settings) -> Preliminary | None:
        key = (used.tobytes(), settings.pick, settings.method)
        if key not in self._recorded:
            # one entry: only the present choices are ever compared with
            try:
                self._recorded = {key: self._preliminary(self.obs, used, settings)}
            except FirstArcError:
                self._recorded = {key: None}
        return self._recorded[key]


def start_of(pre: Preliminary | None, letter: str | None) -> Any:
    """Where the fit begins: at the candidate chosen by hand, else at every admissible one."""
    for candidate in () if pre is None else pre.candidates:
        if candidate.letter == letter and candidate.admissible:
            return candidate
    return pre


def choices(settings: Settings, held_out: tuple[int, ...] | None = None) -> dict[str, Any]:
    """What the hand chose, as arguments of ``fit``. During a what-if rejections are held: ``held_out`` are out."""
    if held_out is None:
        return {"keep": settings.kept, "leave_out": settings.excluded}
    out = sorted({*settings.excluded, *held_out} - set(settings.kept))
    return {"keep": (), "leave_out": tuple(out), "reject": False}


def chosen_of(pre: Preliminary | None, letter: str | None) -> Candidate | None:
    """The candidate chosen by hand if it is admissible, else the best."""
    if pre is None:
        return None
    for candidate in pre.candidates:
        if candidate.letter == letter and candidate.admissible:
            return candidate
    return pre.best


def residual_arrays(candidate: Candidate | None, obs: Any) -> tuple[np.ndarray | None, np.ndarray | None]:
    """O-C of every row, excluded ones too, and their size in stated sigmas."""
    if candidate is None or candidate.state is None:
        return None, None
    if len(candidate.rows) == len(obs):
        return candidate.converged.residuals_arcsec, candidate.chi
    residuals = residuals_of(candidate.state, obs)
    sigma = np.degrees(obs.sight_lines.sigma_rad) * 3600.0
    return residuals, np.hypot(residuals[:, 0] / sigma[:, 0], residuals[:, 1] / sigma[:, 1])


def sentence(text: str) -> str:
    text = " ".join(text.split())
    return text if text.endswith((".", "!", "?")) else text + "."


def reason_of_failure(obs: Any, pick: tuple[int, int, int], pre: Preliminary | None) -> Failure:
    """The most telling cause of a solve without an admissible root, and its remedy."""
    altitude = obs.altitude_deg()
    number = [int(row) + 1 for row in obs.rows]
    low = [i for i in pick if altitude[i] < HORIZON_DEG]
    if low:
        i = min(low, key=lambda position: altitude[position])
        site = obs.station_of(i)
        return Failure(
            f"Row {number[i]} points {fixed(-float(altitude[i]), 0)}° below the horizon of {site.code} at "
            f"{obs.utc_iso(i, 2)[11:].rstrip('Z')} UTC.",
            f"check the longitude of {site.code} (in force {fixed(site.lon_deg, 5, sign=True)}°), then the time of "
            f"row {number[i]}",
            drop_row=i,
        )
    if pre is None:
        return Failure("The three observations could not be used.", "choose another pick")
    code = pre.status.code
    remedies = {
        Code.COPLANAR_LINES: "put sightings into the pick that are further apart or from another station",
        Code.NO_POSITIVE_ROOT: "check times and station of the pick, or put other sightings into it",
        Code.BAD_INPUT: "put three sightings of different times into the pick",
    }
    other = "put other sightings into the pick; each root below keeps its reason"
    if pre.method != "gauss":
        other = "choose another method, or put other sightings into the pick; each root below keeps its reason"
    remedy = remedies.get(code, other)
    return Failure(sentence(pre.status.sentence), remedy)
