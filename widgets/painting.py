"""From a snapshot to the scene: tables, sentences and figure geometry, and the frame of long polylines."""

from __future__ import annotations

from typing import Any

import numpy as np

from firstarc.constants import AU_KM, EARTH_RADIUS_KM, SUN_RADIUS_KM
from firstarc.preliminary.gauss import root_function as root_values

from .drawn_orbits import DrawnOrbits, curve_of, positions_at, space_orbit
from .figures import (
    FrameWriter,
    Root,
    RowMark,
    ScaleMemory,
    SpaceRow,
    convergence,
    margin_bar,
    orbit_space,
    residuals,
    root_function,
    sky_track,
)
from .parts.candidate_table import candidate_table
from .parts.checks import checks
from .parts.headline import headline
from .parts.observation_table import directions, observation_table
from .parts.orbit_table import orbit_table
from .parts.snapshot import Snapshot
from .parts.what_if_panel import what_if_panel
from .settings import Settings


class Painter:
    """Makes scenes for one Desk; keeps scales still while a slider is held and remembers slow, unchanging parts."""

    def __init__(self) -> None:
        self._memory = {name: ScaleMemory() for name in ("residuals", "sky", "orbit")}
        self._drawn = DrawnOrbits()

    def paint(self, snap: Snapshot, settings: Settings, code: str) -> tuple[dict[str, Any], bytes]:
        """The scene that answers ``settings``, and its frame."""
        for memory in self._memory.values():
            memory.held = settings.held
        frame = FrameWriter()
        marks = row_marks(snap)
        lines, bad = headline(snap)
        scene = {
            "seq": settings.seq,
            "ok": snap.chosen is not None,
            "title": snap.obs.object_name,
            "subtitle": snap.obs.source.format,
            "headline": lines,
            "bad": bad,
            "observations": observation_table(snap),
            "what_if": what_if_panel(
                snap,
                settings.station,
                dict(settings.offsets.get(settings.station, {})),
                settings.row_clock.get(settings.row, 0.0),
                settings.estimate,
            ),
            "candidates": candidate_table(snap),
            "orbit": orbit_table(snap, self._convergence(snap, frame)),
            "checks": checks(snap, margin_bar),
            "figures": {
                "residuals": self._residuals(snap, marks, frame, settings),
                "sky": self._sky(snap, marks, frame, settings),
                "root": self._root(snap, frame, settings),
                "orbit": self._orbit(snap, marks, frame, settings),
            },
            "code": code,
            "warnings": list(snap.recorded_obs.warnings),
            "settings": settings.as_dict(),
        }
        return scene, frame.to_bytes()

    def _convergence(self, snap: Snapshot, frame: FrameWriter) -> dict[str, Any] | None:
        chosen = snap.chosen
        if chosen is None:
            return None
        # methods other than Gauss' have an estimate of their own name and no correction: a miss of NaN is not drawn
        steps = [(chosen.gauss.name, worst_miss(chosen.gauss)), (chosen.gibbs.rule, worst_miss(chosen.gibbs))]
        steps += [(f"step {k}", one.miss_arcsec) for k, one in enumerate(chosen.history[1:], start=1)]
        sigma = float(np.median(snap.sigma_arcsec[list(snap.pick)]))
        return convergence(steps, sigma, frame=frame)

    def _residuals(
        self, snap: Snapshot, marks: list[RowMark], frame: FrameWriter, settings: Settings
    ) -> dict[str, Any]:
        orbit = "least squares" if snap.fit is not None else "converged orbit"
        note = f"observed − computed, {orbit}" if snap.chosen is not None else "no orbit to compare with"
        if snap.what_if and snap.chosen is not None:
            note += "; short bars: recorded"
        return residuals(
            marks,
            snap.residuals,
            snap.sigma_arcsec,
            frame=frame,
            width=settings.widths["residuals"],
            recorded_arcsec=snap.recorded_residuals if snap.what_if else None,
            memory=self._memory["residuals"],
            note=note,
        )

    def _sky(self, snap: Snapshot, marks: list[RowMark], frame: FrameWriter, settings: Settings) -> dict[str, Any]:
        return sky_track(
            marks,
            np.degrees(np.stack(directions(snap.obs.sight_lines.los), axis=1)),
            snap.residuals,
            self._drawn.tracks(snap, snap.shown_state, snap.obs),
            frame=frame,
            width=settings.widths["sky"],
            recorded_tracks=self._drawn.tracks(snap, snap.recorded_state, snap.recorded_obs) if snap.what_if else (),
            recorded_arcsec=snap.recorded_residuals if snap.what_if else None,
            memory=self._memory["sky"],
        )

    def _root(self, snap: Snapshot, frame: FrameWriter, settings: Settings) -> dict[str, Any] | None:
        pre = snap.preliminary
        if pre is None or not np.isfinite(pre.coefficients).all():
            return None
        scale, unit = length_unit(snap.center)
        distance = root_distances(pre.roots_km, pre.unit_km)
        values = root_values(*pre.coefficients, distance, pre.unit_km)
        roots = [
            Root(
                one.letter,
                one.root_km / scale,
                one.admissible,
                snap.chosen is not None and one.letter == snap.chosen.letter,
                f"root {one.letter}: {'admissible' if one.admissible else 'rejected, ' + one.reason}",
            )
            for one in pre.candidates
        ]
        earth = snap.center == "earth"
        return root_function(
            distance / scale,
            values,
            roots,
            unit=unit,
            frame=frame,
            width=settings.widths["root"],
            body_radius=(EARTH_RADIUS_KM if earth else SUN_RADIUS_KM) / scale,
            center_name="the Earth's centre" if earth else "the Sun's centre",
        )

    def _orbit(
        self, snap: Snapshot, marks: list[RowMark], frame: FrameWriter, settings: Settings
    ) -> dict[str, Any] | None:
        chosen, shown = snap.chosen, snap.shown_state
        if chosen is None or shown is None:
            return None
        scale, unit = length_unit(snap.center)
        lines = snap.obs.sight_lines
        positions = positions_at(shown, lines) / scale
        rows = [
            SpaceRow(mark, position, observer)
            for mark, position, observer in zip(marks, positions, lines.observer_km / scale, strict=True)
        ]
        others = [
            space_orbit(one.letter, state, scale)
            for one in (snap.preliminary.candidates if snap.preliminary is not None else ())
            if one.admissible and one.letter != chosen.letter and (state := one.state) is not None
        ]
        ghost = None
        note = ""
        if snap.what_if and (before := snap.recorded_state) is not None:
            ghost = curve_of(before, scale)
            note = "recorded dashed"
        return orbit_space(
            space_orbit(chosen.letter, shown, scale, positions[np.argsort(lines.t_s)]),
            rows,
            center=snap.center,
            unit=unit,
            body_radius=(EARTH_RADIUS_KM if snap.center == "earth" else SUN_RADIUS_KM) / scale,
            frame=frame,
            width=settings.widths["orbit"],
            ghost=ghost,
            others=others,
            earth_orbit=self._drawn.path_of_earth(lines.epoch_tdb) if snap.center == "sun" else None,
            memory=self._memory["orbit"],
            note=note,
        )


def root_distances(roots_km: np.ndarray, unit_km: float) -> np.ndarray:
    """Distances at which the root function is drawn: from half the observer's own to beyond the outermost root."""
    outermost = float(roots_km[-1]) if len(roots_km) else unit_km
    innermost = float(roots_km[0]) if len(roots_km) else unit_km
    low, high = min(0.5 * unit_km, 0.8 * innermost), max(1.8 * outermost, 2.5 * unit_km)
    return np.linspace(low, high, 161)


def row_marks(snap: Snapshot) -> list[RowMark]:
    times = snap.obs.sight_lines.t_s
    return [
        RowMark(
            row=snap.numbers[i],
            t_s=float(times[i]),
            station=snap.codes[i],
            shape=snap.shapes[i],
            used=bool(snap.inside[i]),
            pick=snap.pick.index(i) + 1 if i in snap.pick else 0,
            selected=i == snap.selected,
        )
        for i in range(len(snap.obs))
    ]


def worst_miss(stage: Any) -> float:
    return float(np.max(stage.miss_arcsec)) if stage.state is not None else float("nan")


def length_unit(center: str) -> tuple[float, str]:
    """Kilometres in the unit of length that figures use, and its sign."""
    return (1.0, "km") if center == "earth" else (AU_KM, "au")
