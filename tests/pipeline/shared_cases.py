"""The shared cases of tests/data/cases, and the invented sightings of the example notebook."""

from __future__ import annotations

import csv
import importlib.util
import sys
from collections.abc import Sequence
from dataclasses import replace
from functools import cache, lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from astropy.time import Time

import firstarc as fa
from firstarc.constants import AU_KM, DAY_S
from firstarc.dynamics.light_time import predicted_directions

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

ROOT = Path(__file__).resolve().parents[2]
CASES = ROOT / "tests" / "data" / "cases"
EARTH = ("sh-geo-2nights", "sh-leo-pass", "sh-meo-vanguard", "sh-molniya-90min")
SUN = ("sh-comet-parabolic", "sh-jupiter-month", "sh-mars-week", "sh-venus-week")
NOISES = ("n0", "s03", "s1", "s5")


@cache
def case(name: str) -> dict[str, Any]:
    return tomllib.loads((CASES / f"{name}.toml").read_text(encoding="utf-8"))


def csv_rows(name: str) -> list[dict[str, str]]:
    with (CASES / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@cache
def loaded(name: str, noise: str = "") -> fa.Observations:
    return fa.load(CASES / (f"{name}_{noise}.psv" if noise else f"{name}.psv"))


def truth(name: str) -> fa.State:
    """State in the file's [truth]."""
    given = case(name)["truth"]
    if "r_km" in given:
        epoch = Time(given["epoch_utc"].rstrip("Z"), scale="utc")
        return fa.State(given["r_km"], given["v_km_s"], epoch, "earth")
    scale = "tt" if "epoch_jd_tt" in given else "tdb"
    epoch = Time(given[f"epoch_jd_{scale}"], format="jd", scale=scale)
    r, v = np.array(given["r_au"]) * AU_KM, np.array(given["v_au_d"]) * AU_KM / DAY_S
    return fa.State(r, v, epoch, "sun")


def true_row(name: str, row: int, obs: fa.Observations) -> fa.State:
    """State in the csv at the time of one row: not two-body for the satellites, so taken at that time."""
    one = csv_rows(name)[row]
    epoch = (obs.epoch_tdb[0], obs.epoch_tdb[1] + obs.sight_lines.t_s[row] / DAY_S)
    if "sat_x" in one:
        r, v = ([float(one[f"sat_{p}{x}"]) for x in "xyz"] for p in ("", "v"))
        return fa.State(r, v, epoch, "earth")
    r = [float(one[f"tgt_{x}"]) * AU_KM for x in "xyz"]
    v = [float(one[f"tgt_v{x}"]) * AU_KM / DAY_S for x in "xyz"]
    return fa.State(r, v, epoch, "sun")


def nearest(pre: Any, state: fa.State) -> Any:
    """The candidate with an orbit whose position is nearest to a state."""
    solved = [c for c in pre.candidates if c.state is not None]
    assert solved, pre
    return min(solved, key=lambda c: float(np.linalg.norm(c.state.r_km - state.r_km)))


# -- invented sightings ------------------------------------------------------------------------------------------


@lru_cache(maxsize=1)
def sightings_script() -> Any:
    """The script beside the data of the example notebook, as a module."""
    path = ROOT / "example_notebooks" / "data" / "make_sightings.py"
    spec = importlib.util.spec_from_file_location("make_sightings", path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def invented(kind: str = "SATELLITE") -> fa.Observations:
    """Invented sightings: kind is SATELLITE or MINOR_PLANET."""
    script = sightings_script()
    return fa.load(ROOT / "example_notebooks" / "data" / getattr(script, kind)["file"], stations=script.STATIONS)


def with_directions(obs: fa.Observations, los: np.ndarray) -> fa.Observations:
    """The same observations with other directions, given as unit vectors."""
    ra = np.degrees(np.arctan2(los[:, 1], los[:, 0])) % 360.0
    dec = np.degrees(np.arcsin(los[:, 2]))
    return replace(obs, records=replace(obs.records, ra_deg=ra, dec_deg=dec))


def directions_of(state: fa.State, obs: fa.Observations) -> np.ndarray:
    """Noise-free directions of a two-body orbit for these observations."""
    s = obs.sight_lines
    t_state = ((state.epoch_tdb[0] - s.epoch_tdb[0]) + (state.epoch_tdb[1] - s.epoch_tdb[1])) * DAY_S
    plain = np.concatenate([state.r_km, state.v_km_s])
    los, _, _ = predicted_directions(
        plain, t_state, s.t_s, s.observer_km, s.center_velocity_km_s, state.gm_km3_s2, s.light_time
    )
    return los.reshape(-1, 3)


def noisy(los: np.ndarray, sigma_arcsec: np.ndarray, random: np.random.Generator) -> np.ndarray:
    """Directions with Gaussian noise of sigma (n, 2): RA times cos Dec, Dec."""
    east = np.stack([-los[:, 1], los[:, 0], np.zeros(len(los))], axis=1)
    east /= np.linalg.norm(east, axis=1)[:, None]
    north = np.cross(los, east)
    step = np.radians(sigma_arcsec / 3600.0) * random.standard_normal((len(los), 2))
    moved = los + step[:, :1] * east + step[:, 1:] * north
    return moved / np.linalg.norm(moved, axis=1)[:, None]


def frame_of(obs: fa.Observations, directions: Sequence[tuple[float, float]] | None = None, name: str = "x") -> Any:
    """The recorded values as a pandas DataFrame in firstarc's column names."""
    import pandas as pd

    sites = [obs.recorded.station_of(i) for i in range(len(obs))]
    pairs = directions or [(one.ra_deg, one.dec_deg) for one in obs]
    return pd.DataFrame(
        {
            "time_utc": [one.time_utc for one in obs],
            "ra_deg": [ra for ra, _ in pairs],
            "dec_deg": [dec for _, dec in pairs],
            "sigma_ra_arcsec": [one.sigma_ra_arcsec for one in obs],
            "sigma_dec_arcsec": [one.sigma_dec_arcsec for one in obs],
            "station": [site.code for site in sites],
            "lon_deg": [site.lon_deg for site in sites],
            "lat_deg": [site.lat_deg for site in sites],
            "height_m": [site.height_m for site in sites],
            "object": name,
        }
    )
