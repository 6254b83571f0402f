"""Partials of the accelerations with respect to position, velocity and the parameters of the forces.

All are analytic; the only thing left out is the shadow's edge: its gradient acts for seconds, and the partials of
sunlight are those of the light that is there.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from firstarc.constants import C_KM_S, EARTH_ROTATION_RAD_S
from firstarc.dynamics.accelerations import SUNLIGHT_KM3_S2, Forces, dot
from firstarc.dynamics.atmosphere import density_kg_m3
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array

_EYE = np.eye(3)


def outer(a: Array, b: Array) -> Array:
    """Dyadic products of rows; shape (n, 3, 3)."""
    return a[..., :, None] * b[..., None, :]


def point_mass(r: Array, gm: Array | float) -> Array:
    """Gradient (..., 3, 3) of the attraction -gm r / r^3."""
    square = dot(r, r)
    pull = gm / (square * np.sqrt(square))
    return np.asarray((3.0 * pull / square)[..., None, None] * outer(r, r) - pull[..., None, None] * _EYE)


def cross_matrix(w: Array) -> Array:
    """Matrix of the product w x ."""
    return np.array([[0.0, -w[2], w[1]], [w[2], 0.0, -w[0]], [-w[1], w[0], 0.0]])


def zonal_gradient(forces: Forces, r: Array) -> Array:
    """Gradient (n, 3, 3) of the zonal acceleration; positions from the Earth."""
    inverse, unit, u, a, a_n, b_n, a_u, b_u = forces.zonal_sums(r)
    pole = forces.pole
    across = pole - u[:, None] * unit
    first = -(a_n[:, None] * unit - b_n[:, None] * pole)
    turned = a_u[:, None] * unit - b_u[:, None] * pole
    projector = _EYE - outer(unit, unit)
    return np.asarray(
        inverse[:, None, None] * (outer(first, unit) + a[:, None, None] * projector + outer(turned, across))
    )


def schwarzschild_gradients(forces: Forces, r: Array, v: Array) -> tuple[Array, Array]:
    """Gradients of the relativistic term with respect to position and velocity."""
    gm = forces.gm
    square = dot(r, r)
    distance = np.sqrt(square)
    scale = gm / (C_KM_S**2 * square * distance)
    along = 4.0 * gm / distance - dot(v, v)
    radial = dot(r, v)
    vector = along[:, None] * r + 4.0 * radial[:, None] * v
    by_r = along[:, None, None] * _EYE - outer(r, r) * (4.0 * gm / (square * distance))[:, None, None]
    by_r += 4.0 * outer(v, v) - (3.0 / square)[:, None, None] * outer(vector, r)
    by_v = -2.0 * outer(r, v) + 4.0 * outer(v, r) + 4.0 * radial[:, None, None] * _EYE
    return np.asarray(scale[:, None, None] * by_r), np.asarray(scale[:, None, None] * by_v)


def partials(forces: Forces, r: Array, v: Array, parameters: Sequence[str]) -> tuple[Array, Array | None, Array]:
    """Partials of the perturbing acceleration.

    Parameters
    ----------
    forces : Forces
        At n times.
    r, v : ndarray, shape (n, 3)
        km and km/s.
    parameters : sequence of str
        Of :data:`firstarc.dynamics.force_models.PARAMETERS`.

    Returns
    -------
    by_r : ndarray, shape (n, 3, 3)
        1/s2.
    by_v : ndarray, shape (n, 3, 3), or None
        1/s; None when no force depends on the velocity.
    by_parameters : ndarray, shape (n, 3, p)
        km/s2 per m2/kg.

    Raises
    ------
    UsageError
        The model has no term for a parameter.
    """
    model = forces.model
    by_r = np.zeros((len(r), 3, 3))
    by_v: Array | None = None
    columns = np.zeros((len(r), 3, len(parameters)))
    for name in parameters:
        if name not in model.parameters:
            raise UsageError(f"the force model has no parameter {name!r}; it has {model.parameters or 'none'}")
    if forces.bodies_km is not None:
        by_r += np.add.reduce(point_mass(r - forces.bodies_km, forces.body_gm[..., 0]), axis=0)
    if model.zonals:
        by_r += zonal_gradient(forces, forces.from_earth(r))
    if model.relativity:
        of_r, of_v = schwarzschild_gradients(forces, r, v)
        by_r += of_r
        by_v = of_v
    if model.radiation is not None:
        light = model.radiation
        if "area_to_mass_m2_kg" in parameters:
            columns[:, :, list(parameters).index("area_to_mass_m2_kg")] = forces.sunlight(r)
        if light.area_to_mass_m2_kg:
            from_sun = r if forces.sun_km is None else r - forces.sun_km
            strength = SUNLIGHT_KM3_S2 * light.reflectivity * light.area_to_mass_m2_kg
            by_r -= point_mass(from_sun, strength * forces.lit(r))
    if model.drag is not None:
        if "ballistic_m2_kg" in parameters:
            columns[:, :, list(parameters).index("ballistic_m2_kg")] = forces.air(r, v)
        if model.drag.ballistic_m2_kg:
            of_r, of_v = drag_gradients(forces, r, v, model.drag.ballistic_m2_kg)
            by_r += of_r
            by_v = of_v if by_v is None else by_v + of_v
    return by_r, by_v, columns


def drag_gradients(forces: Forces, r: Array, v: Array, ballistic_m2_kg: float) -> tuple[Array, Array]:
    """Gradients of drag with respect to position and velocity."""
    height, up = forces.height_km(r)
    density, slope = density_kg_m3(height)
    relative = forces.air_speed(r, v)
    speed = np.sqrt(dot(relative, relative))
    strength = -500.0 * ballistic_m2_kg * density
    by_v = (strength * speed)[:, None, None] * (_EYE + outer(relative, relative) / (speed * speed)[:, None, None])
    by_r = (strength * speed * slope)[:, None, None] * outer(relative, up)
    by_r -= by_v @ (EARTH_ROTATION_RAD_S * cross_matrix(forces.pole))
    return np.asarray(by_r), np.asarray(by_v)
