"""Perturbing accelerations at given times: everything but the attraction of the centre.

Zonals: with u = (pole . r) / r and P_n the Legendre polynomials, the gradient of
-gm J_n R^n r^-(n+1) P_n(u) is  gm J_n R^n r^-(n+2) (P'_(n+1) r/r - P'_n pole).

References
----------
O. Montenbruck and E. Gill 2000, *Satellite Orbits*, chapter 3; R. H. Battin 1999, section 8.6 (third body);
IERS Conventions 2010, TN 36, equation 10.12 (Schwarzschild). All recalled.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from firstarc.constants import (
    AU_KM,
    C_KM_S,
    EARTH_FLATTENING,
    EARTH_RADIUS_KM,
    EARTH_ROTATION_RAD_S,
    EARTH_ZONALS_RADIUS_KM,
    GM_BODIES_KM3_S2,
    SUNLIGHT_PRESSURE_N_M2,
)
from firstarc.dynamics.atmosphere import density_kg_m3
from firstarc.dynamics.force_models import ForceModel
from firstarc.dynamics.shadow import SHADOWS, edges
from firstarc.twobody.kepler import Array

#: Sunlight's acceleration in km/s2 of 1 m2/kg at 1 km from the Sun.
SUNLIGHT_KM3_S2 = SUNLIGHT_PRESSURE_N_M2 * AU_KM**2 / 1000.0


def dot(a: Array, b: Array) -> Array:
    """Scalar products of rows."""
    return np.asarray(np.add.reduce(a * b, axis=-1))


def _legendre(zonals: tuple[float, ...], u: Array) -> tuple[list[Array], list[Array]]:
    """First and second derivatives of P_n at u, n = 2 .. 5 as far as needed."""
    square = u * u
    first: list[Array] = [3.0 * u, 7.5 * square - 1.5]
    second: list[Array] = [np.full_like(u, 3.0), 15.0 * u]
    if len(zonals) > 1:
        first.append((17.5 * square - 7.5) * u)
        second.append(52.5 * square - 7.5)
    if len(zonals) > 2:
        first.append((39.375 * square - 26.25) * square + 1.875)
        second.append((157.5 * square - 52.5) * u)
    return first, second


class Forces:
    """The perturbing forces of a model at fixed times, with the bodies' positions looked up once.

    Parameters
    ----------
    model : ForceModel
    t_s : ndarray, shape (n,)
    """

    def __init__(self, model: ForceModel, t_s: Array):
        self.model = model
        self.gm = model.gm_km3_s2
        self.pole = np.array(model.pole)
        places = {body.name: np.asarray(body.position_km(t_s), dtype=float) for body in model.bodies}
        if places:
            self.bodies_km: Array | None = np.stack(list(places.values()))
            self.body_gm = np.array([body.gm_km3_s2 for body in model.bodies])[:, None, None]
            square = dot(self.bodies_km, self.bodies_km)
            weight = self.body_gm[..., 0] / (square * np.sqrt(square))
            # The centre itself is accelerated towards the bodies.
            self.indirect = np.add.reduce(weight[..., None] * self.bodies_km, axis=0)
        else:
            self.bodies_km = None
        self.earth_km = places.get("earth")
        self.sun_km = places.get("sun")
        if model.zonals:
            gm = self.gm if model.center == "earth" else GM_BODIES_KM3_S2["earth"]
            powers = EARTH_ZONALS_RADIUS_KM ** np.arange(2, 2 + len(model.zonals))
            self.zonal_strength = gm * np.array(model.zonals) * powers

    # ---------------------------------------------------------------- the sum

    def acceleration(self, r: Array, v: Array) -> Array:
        """Perturbing acceleration (n, 3) in km/s2 of positions (n, 3) km and velocities (n, 3) km/s."""
        model = self.model
        total = np.zeros_like(r)
        if self.bodies_km is not None:
            line = self.bodies_km - r
            square = dot(line, line)
            weight = self.body_gm[..., 0] / (square * np.sqrt(square))
            total += np.add.reduce(weight[..., None] * line, axis=0) - self.indirect
        if model.zonals:
            total += self.zonal(self.from_earth(r))
        if model.relativity:
            total += self.schwarzschild(r, v)
        if model.radiation is not None:
            scale = model.radiation.area_to_mass_m2_kg
            if scale:
                total += scale * self.sunlight(r)
        if model.drag is not None and model.drag.ballistic_m2_kg:
            total += model.drag.ballistic_m2_kg * self.air(r, v)
        return total

    def from_earth(self, r: Array) -> Array:
        """Positions from the Earth's centre."""
        return r if self.model.center == "earth" else r - self.earth_km

    # ---------------------------------------------------------------- term by term

    def zonal_sums(self, r: Array) -> tuple[Array, ...]:
        """1/r, r/r, u, and sums of F_n times P'_(n+1), (n + 2) P'_(n+1), (n + 2) P'_n, P''_(n+1) and P''_n.

        F_n = gm J_n R^n r^-(n+2).
        """
        square = dot(r, r)
        inverse = 1.0 / np.sqrt(square)
        unit = r * inverse[:, None]
        u = unit @ self.pole
        first, second = _legendre(self.model.zonals, u)
        power = inverse * inverse * inverse * inverse
        sums = [np.zeros_like(u) for _ in range(5)]
        for k, strength in enumerate(self.zonal_strength):
            scale = strength * power
            a, b = scale * first[k + 1], scale * first[k]
            terms = (a, (k + 4) * a, (k + 4) * b, scale * second[k + 1], scale * second[k])
            for total, term in zip(sums, terms, strict=True):
                total += term
            power = power * inverse
        return inverse, unit, u, *sums

    def zonal(self, r: Array) -> Array:
        """Zonal harmonics; positions from the Earth."""
        inverse = 1.0 / np.sqrt(dot(r, r))
        unit = r * inverse[:, None]
        u = unit @ self.pole
        first, _ = _legendre(self.model.zonals, u)
        power = (inverse * inverse) ** 2
        radial, axial = np.zeros_like(u), np.zeros_like(u)
        for k, strength in enumerate(self.zonal_strength):
            scale = strength * power
            radial += scale * first[k + 1]
            axial += scale * first[k]
            power = power * inverse
        return np.asarray(radial[:, None] * unit - axial[:, None] * self.pole)

    def schwarzschild(self, r: Array, v: Array) -> Array:
        """Relativistic term of the centre, to the first order in 1/c2."""
        square = dot(r, r)
        distance = np.sqrt(square)
        scale = self.gm / (C_KM_S**2 * square * distance)
        along = 4.0 * self.gm / distance - dot(v, v)
        return np.asarray((scale * along)[:, None] * r + (4.0 * scale * dot(r, v))[:, None] * v)

    def sunlight(self, r: Array) -> Array:
        """Acceleration by sunlight per m2/kg of area-to-mass, reflectivity and shadow included."""
        light = self.model.radiation
        assert light is not None
        from_sun = r if self.sun_km is None else r - self.sun_km
        square = dot(from_sun, from_sun)
        scale = SUNLIGHT_KM3_S2 * light.reflectivity / (square * np.sqrt(square))
        return np.asarray((scale * self.lit(r))[:, None] * from_sun)

    def lit(self, r: Array) -> Array:
        """Visible fraction of the Sun."""
        light = self.model.radiation
        if light is None or light.shadow is None or self.sun_km is None:
            return np.ones(len(r))
        return SHADOWS[light.shadow](r, self.sun_km)

    def height_km(self, r: Array) -> tuple[Array, Array]:
        """Height above the ellipsoid, to the first order of the flattening, and its gradient."""
        distance = np.sqrt(dot(r, r))
        unit = r / distance[:, None]
        u = unit @ self.pole
        bulge = EARTH_RADIUS_KM * EARTH_FLATTENING
        height = distance - EARTH_RADIUS_KM + bulge * u * u
        gradient = unit + (2.0 * bulge * u / distance)[:, None] * (self.pole - u[:, None] * unit)
        return height, gradient

    def air_speed(self, r: Array, v: Array) -> Array:
        """Velocity against the air that turns with the Earth."""
        x, y, z = EARTH_ROTATION_RAD_S * self.pole
        turn = np.array([[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]])
        return np.asarray(v - r @ turn)

    def air(self, r: Array, v: Array) -> Array:
        """Drag per m2/kg of the ballistic coefficient."""
        height, _ = self.height_km(r)
        density, _ = density_kg_m3(height)
        relative = self.air_speed(r, v)
        speed = np.sqrt(dot(relative, relative))
        return np.asarray(-(500.0 * density * speed)[:, None] * relative)

    def nearest_km(self, r: Array) -> float:
        """Smallest distance from any of the bodies; infinite without bodies."""
        if self.bodies_km is None:
            return float("inf")
        line = self.bodies_km - r
        return float(np.sqrt(np.min(dot(line, line))))

    # ---------------------------------------------------------------- kinks

    def has_edges(self, parameters: Sequence[str] = ()) -> bool:
        """Whether a shadow's edge matters to the motion or to the partials by the parameters."""
        light = self.model.radiation
        if light is None or light.shadow is None or self.sun_km is None:
            return False
        return bool(light.area_to_mass_m2_kg) or "area_to_mass_m2_kg" in parameters

    def edges(self, r: Array) -> Array:
        """Smooth functions (m, n) of the positions that change sign where the shadow begins or ends."""
        light = self.model.radiation
        assert light is not None and light.shadow is not None and self.sun_km is not None
        return edges(light.shadow, r, self.sun_km)
