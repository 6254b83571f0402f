"""The border against the simulated cases: stations and directions were made by skyfield with DE440."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np
import pytest

import firstarc as fa
from firstarc.constants import ARCSEC_RAD, AU_KM, C_KM_S, GM_SUN_KM3_S2

CASES = Path(__file__).resolve().parents[1] / "data" / "cases"
#: The gravity the satellite cases were labelled with; it moves an object over its light time by far less than
#: 1e-3 arcsec.
GM_EARTH_OF_CASES = 398600.4418
EARTH = ["sh-geo-2nights", "sh-leo-pass", "sh-meo-vanguard", "sh-molniya-90min"]
SUN = ["sh-comet-parabolic", "sh-jupiter-month", "sh-mars-week", "sh-venus-week"]
REAL = ["real-1977ub", "real-1990ha", "real-1993ha2", "real-1998yp11", "real-2020mk4"]


class Truth:
    """The csv of a case as arrays, km and rad."""

    def __init__(self, name: str):
        with (CASES / f"{name}.csv").open(encoding="utf-8", newline="") as file:
            self.rows = list(csv.DictReader(file))
        about_earth = "site_x" in self.rows[0]
        unit, time = (1.0, 1.0) if about_earth else (AU_KM, 86400.0)
        site, target = ("site_", "sat_") if about_earth else ("obs_", "tgt_")
        self.observer_km = self.vectors(site) * unit
        self.r_km = self.vectors(target) * unit
        self.v_km_s = self.vectors(target + "v") * unit / time
        self.gm = GM_EARTH_OF_CASES if about_earth else GM_SUN_KM3_S2

    def number(self, name: str) -> np.ndarray:
        return np.array([float(row[name]) for row in self.rows])

    def vectors(self, prefix: str) -> np.ndarray:
        return np.stack([self.number(prefix + axis) for axis in "xyz"], axis=1)

    def directions(self, kind: str) -> np.ndarray:
        ra, dec = np.radians(self.number(f"ra_{kind}")), np.radians(self.number(f"dec_{kind}"))
        return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=1)

    def earlier_km(self, tau_s: np.ndarray) -> np.ndarray:
        """Position a light time earlier: Taylor series to the third order, enough for 0.3 s or 4 au."""
        tau = tau_s[:, None]
        r = np.linalg.norm(self.r_km, axis=1)[:, None]
        acceleration = -self.gm * self.r_km / r**3
        radial = np.sum(self.r_km * self.v_km_s, axis=1)[:, None]
        jerk = -self.gm * (self.v_km_s / r**3 - 3.0 * radial * self.r_km / r**5)
        return self.r_km - self.v_km_s * tau + acceleration * tau**2 / 2.0 - jerk * tau**3 / 6.0


def apart_arcsec(a: np.ndarray, b: np.ndarray) -> float:
    return float(np.linalg.norm(a - b, axis=1).max() / ARCSEC_RAD)


def predicted(truth: Truth, lines: fa.Observations) -> np.ndarray:
    """Astrometric directions of the true orbit from our observer vectors and the moving centre."""
    s = lines.sight_lines
    rho = np.linalg.norm(truth.r_km - s.observer_km, axis=1)
    for _ in range(6):
        tau = rho / C_KM_S
        path = truth.earlier_km(tau) - s.observer_km - s.center_velocity_km_s * tau[:, None]
        rho = np.linalg.norm(path, axis=1)
    return path / rho[:, None]


@pytest.mark.parametrize("name", EARTH + SUN)
def test_center_is_decided_right(name: str) -> None:
    for noise in ("n0", "s03", "s1", "s5"):
        obs = fa.load(CASES / f"{name}_{noise}.psv")
        assert obs.center == ("earth" if name in EARTH else "sun")
        assert not any("center" in w for w in obs.warnings)


@pytest.mark.parametrize("name", REAL)
def test_center_of_real_observations(name: str) -> None:
    assert fa.load(CASES / f"{name}.psv").center == "sun"


@pytest.mark.parametrize("name", EARTH)
def test_stations_within_a_metre(name: str) -> None:
    found = fa.load(CASES / f"{name}_n0.psv").sight_lines.observer_km
    assert np.abs(found - Truth(name).observer_km).max() < 1e-3


@pytest.mark.parametrize("name", SUN)
def test_heliocentric_observers(name: str) -> None:
    """The truth is DE440. DE421 places the Earth a few hundred metres from it, that is the error of DE421."""
    obs = fa.load(CASES / f"{name}_n0.psv")
    limit_km = {"JPL DE440": 1e-3, "JPL DE421": 0.5}[obs.ephemeris]
    assert np.abs(obs.sight_lines.observer_km - Truth(name).observer_km).max() < limit_km


@pytest.mark.parametrize("name", EARTH + SUN)
def test_directions_within_a_hundredth_of_an_arcsecond(name: str) -> None:
    truth, obs = Truth(name), fa.load(CASES / f"{name}_n0.psv")
    astrometric = truth.directions("ast")
    assert apart_arcsec(predicted(truth, obs), astrometric) < 0.01
    assert apart_arcsec(obs.sight_lines.los, astrometric) < 1e-5


@pytest.mark.parametrize("name", EARTH + SUN)
def test_same_instant_geometry(name: str) -> None:
    truth, obs = Truth(name), fa.load(CASES / f"{name}_n0.psv")
    path = truth.r_km - obs.sight_lines.observer_km
    assert apart_arcsec(path / np.linalg.norm(path, axis=1)[:, None], truth.directions("geom")) < 0.01


@pytest.mark.parametrize("name", EARTH)
def test_apparent_directions_lose_their_aberration(name: str) -> None:
    """Apparent places of the cases carry deflection as well, near the Earth below 0.01 arcsec."""
    truth, obs = Truth(name), fa.load(CASES / f"{name}_n0.psv")
    columns = [f"{ra},{dec}" for ra, dec in zip(truth.number("ra_app"), truth.number("dec_app"), strict=True)]
    text = apparent_csv(obs, columns)
    apparent = fa.load(text, center="earth", directions="apparent")
    assert apart_arcsec(apparent.sight_lines.los, truth.directions("ast")) < 0.02
    assert any("deflection" in w for w in apparent.warnings)


def apparent_csv(obs: fa.Observations, directions: list[str]) -> io.StringIO:
    place = obs.stations[0]
    lines = ["time_utc,ra_deg,dec_deg,station,lon_deg,lat_deg,height_m"]
    for one, direction in zip(obs, directions, strict=True):
        lines.append(f"{one.time_utc},{direction},A,{place.lon_deg},{place.lat_deg},{place.height_m}")
    return io.StringIO("\n".join(lines))


@pytest.mark.parametrize("name", EARTH)
def test_altitudes(name: str) -> None:
    """The cases hold altitudes of the apparent place, no refraction; aberration is up to 30 arcsec."""
    obs = fa.load(CASES / f"{name}_n0.psv")
    truth = Truth(name).number("el_deg")
    assert np.abs(obs.altitude_deg() - truth).max() < 40.0 / 3600.0


@pytest.mark.parametrize("name", SUN)
def test_tdb_of_the_cases(name: str) -> None:
    """The csv gives TDB as a Julian date of 12 decimals in one float: 4e-5 s."""
    obs = fa.load(CASES / f"{name}_n0.psv")
    s = obs.sight_lines
    found = s.epoch_tdb[0] + s.epoch_tdb[1] + s.t_s / 86400.0
    assert np.abs(found - Truth(name).number("jd_tdb")).max() * 86400.0 < 1e-4
