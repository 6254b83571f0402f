"""Sightings for the tests of the fit: any orbit, any times, seen from two invented stations."""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import Any

import numpy as np

import firstarc as fa
from firstarc.determination.elements import reference_axes
from firstarc.determination.state import GM_KM3_S2
from firstarc.twobody.elements import state_from_elements
from pipeline.shared_cases import directions_of, noisy, sightings_script, with_directions


def orbit(center: str, epoch: Any, a_km: float, e: float, angles_deg: Sequence[float]) -> fa.State:
    """State of elements: angles are inclination, node, argument of periapsis, true anomaly."""
    r, v = state_from_elements(a_km * (1.0 - e * e), e, *np.radians(angles_deg), GM_KM3_S2[center])
    back = reference_axes(center).T
    return fa.State(back @ r, back @ v, epoch, center)


def seen(
    state: fa.State,
    sightings: Sequence[tuple[str, str]],
    sigma_arcsec: float = 1.0,
    seed: int | None = None,
    clock_s: dict[str, float] | None = None,
    moved: fa.WhatIf | None = None,
    directions: str = "astrometric",
    extra: dict[str, Sequence[Any]] | None = None,
) -> fa.Observations:
    """Two-body directions of a state at (station, UTC time), with noise when a seed is given.

    ``clock_s`` is what a station's recorded times want added, ``moved`` where a station truly stands; the
    observations returned know of neither.
    """
    extra = extra or {}
    text = ",".join(["time_utc,ra_deg,dec_deg,sigma_arcsec,station,object", *extra]) + "\n"
    for k, (station, time) in enumerate(sightings):
        more = [f"{values[k]}" for values in extra.values()]
        text += ",".join([f"{time}Z,0,0,{sigma_arcsec},{station},invented", *more]) + "\n"
    obs = fa.load(io.StringIO(text), center=state.center, stations=sightings_script().STATIONS, directions=directions)
    truly = [fa.WhatIf(clock_s=late, station=code) for code, late in (clock_s or {}).items()]
    if moved is not None:
        truly.append(moved)
    los = directions_of(state, obs.with_what_if(*truly))
    if seed is not None:
        los = noisy(los, np.full((len(obs), 2), sigma_arcsec), np.random.default_rng(seed))
    return with_directions(obs, los)


def with_error(obs: fa.Observations, row: int, arcsec: Sequence[float]) -> fa.Observations:
    """One sighting moved by (RA times cos Dec, Dec)."""
    los = obs.sight_lines.los.copy()
    east = np.cross([0.0, 0.0, 1.0], los[row])
    east /= np.linalg.norm(east)
    step = np.radians(np.asarray(arcsec) / 3600.0)
    los[row] += step[0] * east + step[1] * np.cross(los[row], east)
    los[row] /= np.linalg.norm(los[row])
    return with_directions(obs, los)


def difference(fit: Any, state: fa.State) -> np.ndarray:
    """Fit minus a state at the fit's epoch, km and km/s."""
    there = state.propagated((fit.state.epoch_tdb[0], fit.state.epoch_tdb[1]))
    return np.concatenate([fit.state.r_km - there.r_km, fit.state.v_km_s - there.v_km_s])


def normalised(fit: Any, state: fa.State) -> float:
    """Square of the difference in sigmas, all six components together."""
    apart = difference(fit, state)
    size = np.sqrt(np.diag(fit.covariance))
    scaled = fit.covariance / np.outer(size, size)
    return float((apart / size) @ np.linalg.solve(scaled, apart / size))
