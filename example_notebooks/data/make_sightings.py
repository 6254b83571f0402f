"""Makes the sightings of the example notebooks. Stations, objects and sightings are all invented.

    python make_sightings.py            writes the files beside this script

The orbits are two-body orbits, except where a scenario names its forces; directions are astrometric (light time in),
with Gaussian noise from a fixed seed. A scenario may let a station's clock go slow and plant a bad sighting.
"""

from __future__ import annotations

import io
from pathlib import Path

import numpy as np
from astropy.time import Time

import firstarc as fa
from firstarc.border import planets
from firstarc.constants import AU_KM, DAY_S, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.determination.elements import reference_axes
from firstarc.dynamics.force_models import full
from firstarc.dynamics.light_time import predicted_directions
from firstarc.dynamics.perturbed_directions import perturbed_directions
from firstarc.dynamics.trajectory import Trajectory
from firstarc.observing.sight_lines import SightLines
from firstarc.twobody.elements import state_from_elements

#: Invented observatories; the codes are not those of any real one.
STATIONS = {
    "BRN": dict(lon_deg=-6.41773, lat_deg=41.18264, height_m=1184.0, name="Brannoc (invented)"),
    "QLN": dict(lon_deg=12.60518, lat_deg=38.90471, height_m=642.0, name="Quillon (invented)"),
}

#: Invented objects: elements, epoch, and the sightings as (station, time), sigma in arcsec by station.
SATELLITE = {
    "file": "invented_satellite.csv",
    "object": "0417-A",
    "center": "earth",
    "epoch": "2026-04-17T21:23:27.300",
    "elements": dict(a_km=24518.0, e=0.70, i_deg=24.6, node_deg=22.3, argp_deg=4.7, nu_deg=131.0),
    "sigma": {"BRN": 1.0, "QLN": 1.5},
    "seed": 417,
    "sightings": [
        ("BRN", "2026-04-17T20:52:12.41"),
        ("BRN", "2026-04-17T20:58:03.77"),
        ("BRN", "2026-04-17T21:06:41.20"),
        ("BRN", "2026-04-17T21:14:09.95"),
        ("BRN", "2026-04-17T21:23:27.30"),
        ("QLN", "2026-04-17T21:31:18.64"),
        ("QLN", "2026-04-17T21:40:50.12"),
        ("QLN", "2026-04-17T21:51:33.48"),
        ("QLN", "2026-04-17T22:03:05.06"),
    ],
}
MINOR_PLANET = {
    "file": "invented_minor_planet.psv",
    "object": "0511-K",
    "center": "sun",
    "epoch": "2026-05-20T00:00:00.000",
    "elements": dict(a_km=1.62 * AU_KM, e=0.31, i_deg=9.4, node_deg=241.0, argp_deg=318.0, nu_deg=28.0),
    "sigma": {"BRN": 0.4, "QLN": 0.5},
    "seed": 511,
    "sightings": [
        ("BRN", "2026-05-11T21:11:08.2"),
        ("BRN", "2026-05-11T21:52:31.6"),
        ("BRN", "2026-05-11T22:33:47.9"),
        ("QLN", "2026-05-19T20:08:14.4"),
        ("QLN", "2026-05-19T20:50:02.7"),
        ("QLN", "2026-05-19T21:31:55.3"),
        ("BRN", "2026-05-28T21:40:40.1"),
        ("BRN", "2026-05-28T22:22:18.8"),
        ("BRN", "2026-05-28T23:03:26.5"),
    ],
}
#: Four nights of a satellite under all forces modelled about the Earth (zonals to J4, Sun, Moon). The clock of one
#: station is slow, so that its recorded times want 0.25 s added, and one sighting is bad by ten sigmas.
SLOW_CLOCK = {
    "file": "invented_slow_clock.psv",
    "object": "0310-S",
    "center": "earth",
    "epoch": "2026-03-10T19:00:00.000",
    "elements": dict(a_km=27303.0, e=0.234, i_deg=56.7, node_deg=158.6, argp_deg=290.3, nu_deg=343.4),
    "forces": "full",
    "sigma": {"BRN": 1.0, "QLN": 1.2},
    "seed": 310,
    "clock_s": {"QLN": 0.25},
    "planted": {"sighting": 3, "dra_arcsec": -6.0, "ddec_arcsec": 8.0},
    "sightings": [
        ("BRN", "2026-03-10T21:18:42.31"),
        ("QLN", "2026-03-10T21:41:05.86"),
        ("QLN", "2026-03-10T22:03:27.12"),
        ("BRN", "2026-03-10T22:31:50.47"),
        ("QLN", "2026-03-10T23:02:11.93"),
        ("BRN", "2026-03-10T23:35:29.70"),
        ("BRN", "2026-03-11T00:14:08.25"),
        ("QLN", "2026-03-11T00:40:33.08"),
        ("QLN", "2026-03-11T22:50:16.64"),
        ("BRN", "2026-03-11T23:12:39.02"),
        ("QLN", "2026-03-11T23:49:54.35"),
        ("BRN", "2026-03-12T00:27:13.78"),
        ("QLN", "2026-03-12T01:06:45.51"),
        ("BRN", "2026-03-12T01:40:02.16"),
        ("BRN", "2026-03-13T01:20:37.44"),
        ("QLN", "2026-03-13T02:05:58.90"),
        ("BRN", "2026-03-14T02:11:21.07"),
    ],
}


def true_state(scenario: dict) -> fa.State:
    """State of an invented object at its epoch, ICRF axes."""
    e = scenario["elements"]
    gm = GM_EARTH_KM3_S2 if scenario["center"] == "earth" else GM_SUN_KM3_S2
    angles = [np.radians(e[name]) for name in ("i_deg", "node_deg", "argp_deg", "nu_deg")]
    p_km = e["a_km"] * (1.0 - e["e"] ** 2)
    r_km, v_km_s = state_from_elements(p_km, e["e"], *angles, gm)
    back = reference_axes(scenario["center"]).T
    return fa.State(back @ r_km, back @ v_km_s, Time(scenario["epoch"], scale="utc"), scenario["center"])


def directions(scenario: dict, frame: SightLines) -> np.ndarray:
    """Unit vectors (n, 3) in which the object is seen, free of noise."""
    state = true_state(scenario)
    plain = np.concatenate([state.r_km, state.v_km_s])
    t_state_s = sum(a - b for a, b in zip(state.epoch_tdb, frame.epoch_tdb, strict=True)) * DAY_S
    seen_from = (frame.t_s, frame.observer_km, frame.center_velocity_km_s)
    if scenario.get("forces") == "full":
        span = (min(t_state_s, frame.t_s.min()) - 60.0, max(t_state_s, frame.t_s.max()) + 60.0)
        tracks = planets.tracks(scenario["center"], frame.epoch_tdb, span)
        forces = full(scenario["center"], tracks, planets.earth_pole(frame.epoch_tdb))
        return perturbed_directions(Trajectory(forces, plain, t_state_s), *seen_from, True)[0]
    return predicted_directions(plain, t_state_s, *seen_from, state.gm_km3_s2, True)[0]


def sightings(scenario: dict) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Right ascension and declination with noise, deg, and altitude above the horizon, deg."""
    rows = "".join(f"{time}Z,0,0,1,{station}\n" for station, time in scenario["sightings"])
    text = "time_utc,ra_deg,dec_deg,sigma_arcsec,station\n" + rows
    observed = fa.load(io.StringIO(text), center=scenario["center"], stations=STATIONS)
    clocks = [fa.WhatIf(clock_s=late, station=code) for code, late in scenario.get("clock_s", {}).items()]
    los = directions(scenario, observed.with_what_if(*clocks).sight_lines)
    random = np.random.default_rng(scenario["seed"])
    sigma = np.array([scenario["sigma"][station] for station, _ in scenario["sightings"]])
    noise_deg = random.standard_normal((len(sigma), 2)) * sigma[:, None] / 3600.0
    if bad := scenario.get("planted"):
        noise_deg[bad["sighting"]] = bad["dra_arcsec"] / 3600.0, bad["ddec_arcsec"] / 3600.0
    dec = np.degrees(np.arcsin(los[:, 2])) + noise_deg[:, 1]
    ra = np.degrees(np.arctan2(los[:, 1], los[:, 0])) + noise_deg[:, 0] / np.cos(np.radians(dec))
    return ra % 360.0, dec, sigma


def csv_text(scenario: dict) -> str:
    ra, dec, sigma = sightings(scenario)
    lines = ["time_utc,ra_hms,dec_dms,sigma_arcsec,station,object"]
    for (station, time), alpha, delta, s in zip(scenario["sightings"], ra, dec, sigma, strict=True):
        hours = sixty(alpha / 15.0, 2)
        sign = "-" if delta < 0 else "+"
        lines.append(f"{time}Z,{hours},{sign}{sixty(abs(delta), 1)},{s},{station},{scenario['object']}")
    return "\n".join(lines) + "\n"


def sixty(value: float, decimals: int) -> str:
    """Degrees or hours as ``dd mm ss.s``."""
    ticks = round(value * 3600 * 10**decimals)
    seconds, part = divmod(ticks, 10**decimals)
    return f"{seconds // 3600:02d} {seconds // 60 % 60:02d} {seconds % 60:02d}.{part:0{decimals}d}"


def psv_text(scenario: dict) -> str:
    ra, dec, sigma = sightings(scenario)
    lines = [
        "# version=2022",
        "# observatory",
        "! name invented stations, see make_sightings.py",
        "trkSub|mode|stn|obsTime|ra|dec|rmsRA|rmsDec|astCat",
    ]
    for (station, time), alpha, delta, s in zip(scenario["sightings"], ra, dec, sigma, strict=True):
        lines.append(f"{scenario['object']}|CCD|{station}|{time}Z|{alpha:.6f}|{delta:+.6f}|{s}|{s}|UNK")
    return "\n".join(lines) + "\n"


def main() -> None:
    here = Path(__file__).parent
    (here / SATELLITE["file"]).write_text(csv_text(SATELLITE), encoding="utf-8")
    (here / MINOR_PLANET["file"]).write_text(psv_text(MINOR_PLANET), encoding="utf-8")
    (here / SLOW_CLOCK["file"]).write_text(psv_text(SLOW_CLOCK), encoding="utf-8")


if __name__ == "__main__":
    main()
