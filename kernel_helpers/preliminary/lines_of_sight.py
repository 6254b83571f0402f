"""Three lines of sight: geometry, determinant and its noise.

Inside the preliminary step vectors are kept component-first, shape (..., 3, m) with the m lanes last and
contiguous, so that one NumPy call serves one triple and a hundred thousand alike. Rows, (..., 3), stay at the
border of the public functions.

With light time the effective direction is L' = L + Vc/c (Vc the centre's barycentric velocity), and
r(t - rho/c) = R + rho L' holds with rho the light path; see :mod:`firstarc.dynamics.light_time`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import C_KM_S
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array

#: Above this many lanes sums run over whole rows, below in one call; the digits are the same.
_MANY = 256


def dot(a: Array, b: Array) -> Array:
    """Scalar products of component-first vectors."""
    product: Array
    if a.shape[-1] > _MANY:
        product = a[..., 0, :] * b[..., 0, :]
        product += a[..., 1, :] * b[..., 1, :]
        product += a[..., 2, :] * b[..., 2, :]
    else:
        product = np.add.reduce(a * b, axis=-2)
    return product


def cross(a: Array, b: Array) -> Array:
    """Vector products of component-first vectors."""
    ax, ay, az = a[..., 0, :], a[..., 1, :], a[..., 2, :]
    bx, by, bz = b[..., 0, :], b[..., 1, :], b[..., 2, :]
    out = np.empty(a.shape if a.shape == b.shape else np.broadcast(a, b).shape)
    out[..., 0, :] = ay * bz - az * by
    out[..., 1, :] = az * bx - ax * bz
    out[..., 2, :] = ax * by - ay * bx
    return out


def crosses(first: tuple[Array, ...], second: tuple[Array, ...]) -> Array | list[Array]:
    """Vector products of several pairs of equal shape: in one call where there are few lanes."""
    if first[0].shape[-1] > _MANY:
        return [cross(a, b) for a, b in zip(first, second, strict=True)]
    return cross(np.array(first), np.array(second))


def norm(a: Array) -> Array:
    """Lengths of component-first vectors."""
    length: Array = np.sqrt(dot(a, a))
    return length


def angle(a: Array, b: Array) -> Array:
    """Angles (rad) between component-first vectors, exact near 0 and pi."""
    result: Array = np.arctan2(norm(cross(a, b)), dot(a, b))
    return result


@dataclass(frozen=True)
class Lines:
    """Three sight lines per lane, time-ordered, component-first.

    Parameters
    ----------
    unit : ndarray, shape (3, 3, m)
        Unit vectors L: observation, component, lane.
    effective : ndarray, shape (3, 3, m)
        L' = L + Vc/c with light time, else L itself.
    observer_km : ndarray, shape (3, 3, m)
    t_s : ndarray, shape (3, m)
        Reception times relative to the middle one of each lane.
    gm_km3_s2 : float
    per_c : float
        1/c in s/km with light time, else 0.
    """

    unit: Array
    effective: Array
    observer_km: Array
    t_s: Array
    gm_km3_s2: float
    per_c: float

    @cached_property
    def frame(self) -> Array:
        """East, north and along each line, (3 axes, 3 observations, 3, m)."""
        return tangent_frame(self.unit)

    def take(self, lanes: Array) -> Lines:
        """The chosen lanes, in the given order."""
        return Lines(
            self.unit[..., lanes],
            self.effective[..., lanes],
            self.observer_km[..., lanes],
            self.t_s[..., lanes],
            self.gm_km3_s2,
            self.per_c,
        )


def checked_rows(
    los: ArrayLike,
    observer_km: ArrayLike,
    t_s: ArrayLike,
    center_velocity_km_s: ArrayLike | None,
    single: bool,
) -> tuple[Array, Array, Array, Array | None]:
    """Arrays of the public functions as float64 with a leading lane axis; shapes that do not fit raise."""
    lead = () if single else ("n",)
    arrays: list[Array | None] = []
    given = (("los", los, 2), ("observer_km", observer_km, 2), ("t_s", t_s, 1))
    for name, value, depth in (*given, ("center_velocity_km_s", center_velocity_km_s, 2)):
        if value is None:
            arrays.append(None)
            continue
        try:
            array = np.asarray(value, dtype=float)
        except (TypeError, ValueError) as error:
            raise UsageError(f"{name} is not an array of numbers ({error})") from None
        expected = (*lead, *(3,) * depth)
        if array.shape[len(lead) :] != (3,) * depth or array.ndim != len(expected):
            shape = "(" + ", ".join(map(str, expected)) + ("," if len(expected) == 1 else "") + ")"
            raise UsageError(f"{name} has shape {array.shape}; expected {shape}")
        arrays.append(array[None] if single else array)
    first, second, third, fourth = arrays
    assert first is not None and second is not None and third is not None
    count = first.shape[0]
    for name, other in (("observer_km", second), ("t_s", third), ("center_velocity_km_s", fourth)):
        if other is not None and other.shape[0] != count:
            raise UsageError(f"{name} has {other.shape[0]} rows and los has {count}; expected one row per triple")
    return first, second, third, fourth


def time_ordered(
    los: Array,
    observer_km: Array,
    t_s: Array,
    center_velocity_km_s: Array | None,
    gm_km3_s2: float,
    light_time: bool,
) -> tuple[Lines, Array, Array]:
    """Component-first lines of rows (m, 3, 3), each triple put in time order.

    Returns
    -------
    lines : Lines
    order : ndarray of int, shape (m, 3)
        Position in the caller's triple of each time-ordered observation.
    t_middle_s : ndarray, shape (m,)
        The middle reception time, origin of ``lines.t_s``.
    """
    order = np.argsort(t_s, axis=1, kind="stable")
    if (order != np.arange(3)).any():
        rows = np.arange(len(t_s))[:, None]
        los, observer_km, t_s = los[rows, order], observer_km[rows, order], t_s[rows, order]
        if center_velocity_km_s is not None:
            center_velocity_km_s = center_velocity_km_s[rows, order]
    unit = np.ascontiguousarray(los.transpose(1, 2, 0))
    observer = np.ascontiguousarray(observer_km.transpose(1, 2, 0))
    middle = t_s[:, 1]
    with np.errstate(all="ignore"):
        length = norm(unit)
        unit = unit / length[:, None, :]
        effective = unit
        if light_time and center_velocity_km_s is not None:
            effective = unit + center_velocity_km_s.transpose(1, 2, 0) / C_KM_S
        times = np.ascontiguousarray((t_s - middle[:, None]).T)
    lines = Lines(unit, effective, observer, times, float(gm_km3_s2), 1.0 / C_KM_S if light_time else 0.0)
    return lines, order, middle


def tangent_frame(unit: Array) -> Array:
    """Orthonormal frames of component-first unit vectors: east, north, the vector itself.

    Returns
    -------
    ndarray, shape (3, ..., 3, m)
        Axis first: towards increasing right ascension, declination, and along the line.
    """
    x, y, z = unit[..., 0, :], unit[..., 1, :], unit[..., 2, :]
    flat = np.sqrt(x * x + y * y)
    polar = flat < 1e-300
    safe = np.where(polar, 1.0, flat)
    cos_ra, sin_ra = np.where(polar, 1.0, x / safe), np.where(polar, 0.0, y / safe)
    frame = np.empty((3, *unit.shape))
    frame[0, ..., 0, :], frame[0, ..., 1, :], frame[0, ..., 2, :] = -sin_ra, cos_ra, 0.0
    frame[1, ..., 0, :], frame[1, ..., 1, :], frame[1, ..., 2, :] = -z * cos_ra, -z * sin_ra, flat
    frame[2] = unit
    return frame


def determinant(unit: Array) -> Array:
    """L1 . (L2 x L3) of component-first unit vectors (3, 3, m): six times the volume they span.

    Formed from differences, so that short arcs keep their digits.
    """
    middle = unit[1]
    return dot(middle, cross(unit[2] - middle, unit[0] - middle))


_NEXT, _AFTER = np.array([1, 2, 0]), np.array([2, 0, 1])


def determinant_sigma(unit: Array, covariance: Array, frame: Array | None = None) -> Array:
    """First-order sigma of the determinant.

    Parameters
    ----------
    unit : ndarray, shape (3, 3, m)
    covariance : ndarray, shape (3, 2, 2)
        Of (d alpha cos delta, d delta) of each line, rad^2.
    frame : ndarray, optional
        :func:`tangent_frame` of ``unit``, where it is at hand.

    Returns
    -------
    ndarray, shape (m,)
    """
    axes = (tangent_frame(unit) if frame is None else frame)[:2]
    slope = dot(axes, cross(unit[_NEXT], unit[_AFTER])[None])
    first, second = slope[0], slope[1]
    variance = covariance[:, 0, 0, None] * first * first + covariance[:, 1, 1, None] * second * second
    variance += 2.0 * covariance[:, 0, 1, None] * first * second
    result: Array = np.sqrt(np.add.reduce(variance, axis=0))
    return result


def angle_covariance(sigma_rad: ArrayLike, correlation: ArrayLike | None = None) -> Array:
    """Covariances (3, 2, 2) of three directions from sigmas (3, 2) and correlations (3,)."""
    sigma = np.asarray(sigma_rad, dtype=float).reshape(3, 2)
    rho = np.zeros(3) if correlation is None else np.nan_to_num(np.asarray(correlation, dtype=float).reshape(3))
    out = np.zeros((3, 2, 2))
    out[:, 0, 0], out[:, 1, 1] = sigma[:, 0] ** 2, sigma[:, 1] ** 2
    out[:, 0, 1] = out[:, 1, 0] = rho * sigma[:, 0] * sigma[:, 1]
    return out


_FROM, _TO = np.array([0, 1, 0]), np.array([1, 2, 2])


def separations_rad(unit: Array) -> Array:
    """Angles between vectors 1-2, 2-3 and 1-3 of component-first (3, 3, m), shape (3, m)."""
    return angle(unit[_FROM], unit[_TO])
