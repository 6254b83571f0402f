"""Which slant ranges and range rates a direction with its rates admits.

About the Sun (Milani, Gronchi, de' Michieli Vitturi and Knezevic 2004, Celest. Mech. Dyn. Astron. 90, 57): bound to
the Sun; not a satellite of the Earth while inside its sphere of influence; not so near that it would be a meteor,
by range or by absolute magnitude (shooting-star limit). About the Earth (Tommei, Milani and Rossi 2007, Celest.
Mech. Dyn. Astron. 97, 289): bound to the Earth and within its sphere of influence; further limits on perigee and
apogee as in Farnocchia, Tommei, Milani and Rossi 2010, Celest. Mech. Dyn. Astron. 107, 169 (all recalled).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from firstarc.constants import AU_KM, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.errors import UsageError
from firstarc.preliminary.attributable import Attributable, states_of
from firstarc.preliminary.lines_of_sight import Array

#: The Earth's sphere of influence, a (m / M)^(2/5).
EARTH_SPHERE_KM = AU_KM * (GM_EARTH_KM3_S2 / GM_SUN_KM3_S2) ** 0.4
#: Absolute magnitude of a body too small to be anything but a meteor: about half a metre (Milani et al. 2004).
METEOR_MAGNITUDE = 34.5


@dataclass(frozen=True)
class RegionLimits:
    """Limits of an admissible region.

    Parameters
    ----------
    range_min_km, range_max_km : float
        Slant range.
    excess_limit_km_s : float
        Hyperbolic excess about the centre; 0 admits bound orbits only.
    periapsis_min_km, apoapsis_max_km : float
        Distances from the centre; 0 and infinity for none.
    planet_gm_km3_s2, planet_sphere_km : float
        The observer's planet when it is not the centre: orbits bound to it inside its sphere of influence are
        left out. 0 for none.
    """

    range_min_km: float
    range_max_km: float
    excess_limit_km_s: float = 0.0
    periapsis_min_km: float = 0.0
    apoapsis_max_km: float = float("inf")
    planet_gm_km3_s2: float = 0.0
    planet_sphere_km: float = 0.0

    def __post_init__(self) -> None:
        if not 0.0 < self.range_min_km < self.range_max_km:
            raise UsageError(
                f"range limits are {self.range_min_km!r} to {self.range_max_km!r} km; expected 0 < least < largest"
            )
        if not self.excess_limit_km_s >= 0.0 or not self.apoapsis_max_km > self.periapsis_min_km >= 0.0:
            raise UsageError(
                f"excess {self.excess_limit_km_s!r} km/s, periapsis {self.periapsis_min_km!r} km, apoapsis "
                f"{self.apoapsis_max_km!r} km; expected none negative and the apoapsis beyond the periapsis"
            )

    @property
    def words(self) -> str:
        """The limits in words."""
        bound = "bound orbits" if not self.excess_limit_km_s else f"excess up to {self.excess_limit_km_s:g} km/s"
        parts = [bound, f"slant range {self.range_min_km:.4g} to {self.range_max_km:.4g} km"]
        if self.periapsis_min_km > 0.0:
            parts.append(f"periapsis above {self.periapsis_min_km:.5g} km")
        if np.isfinite(self.apoapsis_max_km):
            parts.append(f"apoapsis below {self.apoapsis_max_km:.4g} km")
        if self.planet_gm_km3_s2 > 0.0:
            parts.append("no satellite of the observer's planet")
        return ", ".join(parts)


def earth_limits(body_radius_km: float = 0.0) -> RegionLimits:
    """Limits for a satellite: bound, perigee above the surface, within the Earth's sphere of influence."""
    return RegionLimits(
        50.0, EARTH_SPHERE_KM, periapsis_min_km=body_radius_km, apoapsis_max_km=max(EARTH_SPHERE_KM, 2 * body_radius_km)
    )


def sun_limits(magnitude: float | None = None, body_radius_km: float = 0.0) -> RegionLimits:
    """Limits for a body of the Solar System, from 0.001 to 100 au.

    Parameters
    ----------
    magnitude : float, optional
        Apparent magnitude: the shooting-star limit then takes the place of 0.001 au (phase and the distance from
        the Sun taken as 0 and 1 au).
    body_radius_km : float
        Of the Sun.
    """
    nearest = 1e-3 * AU_KM
    if magnitude is not None:
        if not np.isfinite(magnitude):
            raise UsageError(f"magnitude is {magnitude!r}; expected a number")
        nearest = float(np.clip(10.0 ** ((magnitude - METEOR_MAGNITUDE) / 5.0), 1e-5, 1.0)) * AU_KM
    return RegionLimits(
        nearest, 100.0 * AU_KM, periapsis_min_km=body_radius_km,
        planet_gm_km3_s2=GM_EARTH_KM3_S2, planet_sphere_km=EARTH_SPHERE_KM,
    )  # fmt: skip


def usual_limits(gm_km3_s2: float, body_radius_km: float = 0.0) -> RegionLimits:
    """Limits for a satellite or a body of the Solar System, told apart by the gravitational parameter."""
    if gm_km3_s2 < 1e3 * GM_EARTH_KM3_S2:
        return earth_limits(body_radius_km)
    return sun_limits(None, body_radius_km)


class Excluded(NamedTuple):
    """Why nodes are left out, masks (m,): True where the limit is broken."""

    range: Array
    unbound: Array
    periapsis: Array
    apoapsis: Array
    planet: Array

    @property
    def any(self) -> Array:
        result: Array = self.range | self.unbound | self.periapsis | self.apoapsis | self.planet
        return result


def excluded(
    limits: RegionLimits, gm_km3_s2: float, range_km: Array, range_rate_km_s: Array, rate_rad_s: float, states: Array
) -> Excluded:
    """Hold orbits against the limits.

    Parameters
    ----------
    limits : RegionLimits
    gm_km3_s2 : float
    range_km, range_rate_km_s : ndarray, shape (m,)
    rate_rad_s : float
        Angular rate of the direction.
    states : ndarray, shape (m, 6)
    """
    r, v = states[:, :3], states[:, 3:]
    radius, rv, vv = np.sqrt(np.sum(r * r, axis=1)), np.sum(r * v, axis=1), np.sum(v * v, axis=1)
    excess2 = vv - 2.0 * gm_km3_s2 / radius
    p = (radius**2 * vv - rv**2) / gm_km3_s2
    e = np.sqrt(np.fmax(1.0 + p * excess2 / gm_km3_s2, 0.0))
    far = np.where(e < 1.0, p / np.fmax(1.0 - e, 1e-300), np.inf)
    planet = np.zeros(len(states), dtype=bool)
    if limits.planet_gm_km3_s2 > 0.0:
        energy = range_rate_km_s**2 + (range_km * rate_rad_s) ** 2 - 2.0 * limits.planet_gm_km3_s2 / range_km
        planet = (energy < 0.0) & (range_km < limits.planet_sphere_km)
    # Rounding of the bound itself.
    level = limits.excess_limit_km_s**2 + 1e-9 * vv
    return Excluded(
        ~((range_km >= limits.range_min_km) & (range_km <= limits.range_max_km)),
        ~(excess2 <= level),
        p / (1.0 + e) < limits.periapsis_min_km,
        (far > limits.apoapsis_max_km) & (excess2 < 0.0),
        planet,
    )


def range_rate_bounds(
    one: Attributable, gm_km3_s2: float, limits: RegionLimits, range_km: Array
) -> tuple[Array, Array]:
    """Least and largest range rate (m,) that the energy bound leaves; NaN where it leaves none."""
    states, _ = states_of(one, range_km, np.zeros(len(range_km)))
    r, w = states[:, :3], states[:, 3:]
    radius = np.sqrt(np.sum(r * r, axis=1))
    # |w + x L'|^2 <= 2 gm / r + excess^2; the factor 1 - x/c changes the bound by parts in ten thousand.
    a, b = one.effective @ one.effective, w @ one.effective
    c = np.sum(w * w, axis=1) - 2.0 * gm_km3_s2 / radius - limits.excess_limit_km_s**2
    root = np.sqrt(b * b - a * c)
    return (-b - root) / a, (-b + root) / a


class Raster(NamedTuple):
    """Nodes of a raster and the measure of their cells in (log rho, rho'), shape (m,) each."""

    range_km: Array
    range_rate_km_s: Array
    measure: Array


def raster(one: Attributable, gm_km3_s2: float, limits: RegionLimits, shape: tuple[int, int]) -> Raster | None:
    """Raster of the whole region: ranges by logarithm, range rates evenly between the bounds of each range.

    None where no slant range is admitted.
    """
    with np.errstate(all="ignore"):
        edges = np.geomspace(limits.range_min_km, limits.range_max_km, 601)
        low, high = range_rate_bounds(one, gm_km3_s2, limits, edges)
        states, _ = states_of(one, edges, np.where(np.isfinite(low), 0.5 * (low + high), 0.0))
        some = np.isfinite(low)
        if limits.apoapsis_max_km < np.inf:
            some &= np.sum(states[:, :3] ** 2, axis=1) <= limits.apoapsis_max_km**2
        at = np.flatnonzero(some)
        if not at.size:
            return None
        first, last = max(at[0] - 1, 0), min(at[-1] + 1, len(edges) - 1)
        rows, columns = shape
        width = np.log(edges[last] / edges[first]) / rows
        rho = edges[first] * np.exp(width * (np.arange(rows) + 0.5))
        low, high = range_rate_bounds(one, gm_km3_s2, limits, rho)
        part = (np.arange(columns) + 0.5) / columns
        x = low[:, None] + part * (high - low)[:, None]
        measure = np.broadcast_to(width * ((high - low) / columns)[:, None], x.shape)
        good = np.isfinite(x)
    if not good.any():
        return None
    return Raster(np.broadcast_to(rho[:, None], x.shape)[good], x[good], measure[good])
