"""From settings to a snapshot: the kernel calls behind the Desk, each one that a user could have typed."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from firstarc.determination.preliminary import Preliminary
from firstarc.determination.stages import Candidate
from firstarc.errors import FirstArcError
from firstarc.observing.what_if import WhatIf
from firstarc.pipeline import preliminary, residuals_of
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
        self._residuals: tuple[Candidate | None, np.ndarray | None] = (None, None)
        self._recorded: dict[Any, Preliminary | None] = {}

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
        residuals, chi = residual_arrays(chosen, moved)
        if recorded is not self._residuals[0]:
            self._residuals = (recorded, residual_arrays(recorded, self.obs)[0])
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
        )

    def _preliminary(self, obs: Any, used: np.ndarray, settings: Settings) -> Preliminary:
        if used.all():
            return preliminary(obs, pick=settings.pick, method=settings.method)
        inside = np.searchsorted(np.flatnonzero(used), settings.pick)
        kept = obs.without(np.flatnonzero(~used).tolist())
        return preliminary(kept, pick=tuple(int(i) for i in inside), method=settings.method)

    def _recorded_candidate(self, used: np.ndarray, settings: Settings) -> Candidate | None:
        key = (used.tobytes(), settings.pick, settings.method)
        if key not in self._recorded:
            # one entry: only the present choices are ever compared with
            try:
                self._recorded = {key: self._preliminary(self.obs, used, settings)}
            except FirstArcError:
                self._recorded = {key: None}
        return chosen_of(self._recorded[key], settings.candidate)


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
    remedy = remedies.get(code, "put other sightings into the pick; each root below keeps its reason")
    return Failure(sentence(pre.status.sentence), remedy)
