"""Orbits and tracks as the figures draw them: points along a candidate's orbit, in space and on the sky."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from firstarc.border.solar_system import ephemeris
from firstarc.constants import AU_KM, DAY_S
from firstarc.determination.elements import reference_axes
from firstarc.determination.state import State
from firstarc.dynamics.light_time import predicted_directions
from firstarc.twobody.curve import orbit_curve
from firstarc.twobody.kepler import propagate

from .figures import SpaceOrbit, Track
from .parts.observation_table import directions
from .parts.snapshot import Snapshot

Array = NDArray[np.float64]

#: Points of a predicted track between the first and the last sighting of a run, and beyond either end.
TRACK_POINTS, TRACK_BEYOND = 48, 8
#: A pause this many times the usual spacing, and longer than ten minutes, starts a new run about the Earth.
PAUSE, SHORTEST_PAUSE_S = 6.0, 600.0
#: Curves are cut at this many times the present distance, but not within this many au.
REACH, REACH_AU = 4.0, 30.0


class DrawnOrbits:
    """What is drawn again and again while a slider moves, kept as long as it stays the same."""

    def __init__(self) -> None:
        self._earth: tuple[Any, Array] | None = None
        self._observers: dict[Any, tuple[Array, Array]] = {}
        self._recorded: tuple[Any, list[Track]] | None = None

    def path_of_earth(self, epoch_tdb: tuple[float, float]) -> Array:
        """The Earth's path about the Sun in the year around an epoch, au."""
        if self._earth is None or self._earth[0] != epoch_tdb:
            days = np.linspace(-182.7, 182.7, 91)
            found = ephemeris().at(np.full(days.shape, epoch_tdb[0]), epoch_tdb[1] + days)
            self._earth = (epoch_tdb, (found.earth_km - found.sun_km) / AU_KM)
        return self._earth[1]

    def tracks(self, snap: Snapshot, state: State | None, obs: Any) -> list[Track]:
        """Predicted directions along each run of sightings of one station, and a little beyond."""
        if state is None:
            return []
        if obs is not snap.recorded_obs:
            return self._tracks(snap, state, obs)
        if self._recorded is None or self._recorded[0] is not state:
            self._recorded = (state, self._tracks(snap, state, obs))
        return self._recorded[1]

    def _tracks(self, snap: Snapshot, state: State, obs: Any) -> list[Track]:
        recorded = snap.recorded_obs.sight_lines
        runs = runs_of(snap.codes, recorded.t_s, about_earth=snap.center == "earth")
        grids = [track_times(recorded.t_s[run]) for run in runs]
        seen = [self._observer(obs, run[0], grid) for run, grid in zip(runs, grids, strict=True)]
        los, _, _ = predicted_directions(
            np.concatenate([state.r_km, state.v_km_s]),
            seconds_after(state, recorded.epoch_tdb),
            np.concatenate(grids),
            np.concatenate([observer for observer, _ in seen]),
            np.concatenate([moving for _, moving in seen]),
            state.gm_km3_s2,
            recorded.light_time,
        )
        found = []
        for run, part in zip(runs, np.split(los, len(runs)), strict=True):
            if not np.isfinite(part).all():
                continue
            ra, dec = np.degrees(directions(part))
            last = TRACK_BEYOND + TRACK_POINTS
            found.append(Track(snap.codes[run[0]], snap.shapes[run[0]], ra, dec, TRACK_BEYOND, last))
        return found

    def _observer(self, obs: Any, position: int, grid: Array) -> tuple[Array, Array]:
        site = obs.station_of(position)
        key = (site, float(grid[0]), float(grid[-1]))
        if key not in self._observers:
            if len(self._observers) > 64:
                self._observers.clear()
            self._observers[key] = obs.observer_track(site, grid)
        return self._observers[key]


def runs_of(codes: list[str], t_s: Array, *, about_earth: bool) -> list[list[int]]:
    """Runs of sightings of one station without a long pause, each in order of time.

    About the Sun a night's pause does not break the track; about the Earth a missed pass does.
    """
    order = [int(i) for i in np.argsort(t_s, kind="stable")]
    gaps = np.diff(t_s[order])
    usual = float(np.median(gaps[gaps > 0.0])) if (gaps > 0.0).any() else 1.0
    limit = max(PAUSE * usual, SHORTEST_PAUSE_S) if about_earth else np.inf
    by_station: dict[str, list[list[int]]] = {}
    for i in order:
        runs = by_station.setdefault(codes[i], [])
        if runs and t_s[i] - t_s[runs[-1][-1]] <= limit:
            runs[-1].append(i)
        else:
            runs.append([i])
    return [run for runs in by_station.values() for run in runs]


def track_times(t_s: Array) -> Array:
    """Times along a run, s: they follow the recorded times, so that they stay while a clock slider moves."""
    begin, end = float(t_s[0]), float(t_s[-1])
    step = (end - begin) / TRACK_POINTS if end > begin else 1.0
    return np.asarray(begin + step * np.arange(-TRACK_BEYOND, TRACK_POINTS + TRACK_BEYOND + 1), dtype=np.float64)


def seconds_after(state: State, epoch_tdb: tuple[float, float]) -> float:
    """Epoch of a state in seconds of the arc's own time."""
    return ((state.epoch_tdb[0] - epoch_tdb[0]) + (state.epoch_tdb[1] - epoch_tdb[1])) * DAY_S


def positions_at(state: State, lines: Any) -> Array:
    """Positions at the times of the sightings, km. Light time moves them by less than a figure can show."""
    dt_s = lines.t_s - seconds_after(state, lines.epoch_tdb)
    found: Array = np.array(propagate(state.r_km, state.v_km_s, dt_s, state.gm_km3_s2)[0], dtype=float)
    return found


def curve_of(state: State, scale: float) -> Array:
    """The whole orbit, or the part of it near the present place, in units of ``scale`` km."""
    reach = max(REACH * float(np.linalg.norm(state.r_km)), REACH_AU * scale)
    return orbit_curve(state.r_km, state.v_km_s, state.gm_km3_s2, farthest_km=reach) / scale


def space_orbit(letter: str, state: State, scale: float, seen: Array | None = None) -> SpaceOrbit:
    """An orbit with its apses and nodes, in units of ``scale`` km; ``seen`` is the observed part."""
    elements = state.elements
    apse, node = apse_and_node(state)
    ends: list[Array | None] = [None, None]
    if node is not None:
        for k, (sign, nu_deg) in enumerate(((1.0, -elements.argp_deg), (-1.0, 180.0 - elements.argp_deg))):
            size = elements.p_km / (1.0 + elements.e * np.cos(np.radians(nu_deg))) / scale
            ends[k] = sign * size * node if size > 0.0 else None
    return SpaceOrbit(
        points=curve_of(state, scale),
        seen=seen,
        periapsis=elements.q_km / scale * apse,
        apoapsis=-elements.a_km * (1.0 + elements.e) / scale * apse if elements.e < 1.0 else None,
        ascending=ends[0],
        descending=ends[1],
        letter=letter,
    )


def apse_and_node(state: State) -> tuple[Array, Array | None]:
    """Unit vectors (ICRF) to the periapsis and to the ascending node; no node for an equatorial orbit."""
    h = np.cross(state.r_km, state.v_km_s)
    toward = state.r_km / np.linalg.norm(state.r_km)
    apse = np.cross(state.v_km_s, h) / state.gm_km3_s2 - toward
    size = np.linalg.norm(apse)
    node = np.cross(reference_axes(state.center)[2], h)
    length = np.linalg.norm(node)
    return (
        apse / size if size > 1e-12 else toward,
        node / length if length > 1e-9 * np.linalg.norm(h) else None,
    )
