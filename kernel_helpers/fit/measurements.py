"""Observations as the fit takes them: plain arrays, each with its sigma."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from firstarc.errors import UsageError
from firstarc.fit.motion import Array


@dataclass(frozen=True, eq=False)
class Measurements:
    """n observations as plain arrays, ICRF axes; each has a direction, a range, a range rate, or several.

    Parameters
    ----------
    t_s : ndarray, shape (n,)
        Recorded reception times, TDB s from the arc's epoch.
    los : ndarray, shape (n, 3)
        Unit directions, astrometric when ``light_time``; a row of NaN where no direction was observed.
    observer_km : ndarray, shape (n, 3)
        Observer from the centre at reception.
    center_velocity_km_s : ndarray, shape (n, 3)
        Barycentric velocity of the centre.
    sigma_rad : ndarray, shape (n, 2)
        Of RA times cos Dec and of Dec.
    corr : ndarray, shape (n,)
        Correlation of the two.
    sigma_time_s : ndarray, shape (n,)
        Sigma of the time tag; 0 where the time is exact.
    light_time : bool
    observer_velocity_km_s : ndarray, shape (n, 3), optional
        Velocity of the observer relative to the centre, ICRF axes. Needed for sigma of time, clock offsets
        and range rates.
    station : ndarray of int, shape (n,), optional
        Index of each observation's station; needed for offsets.
    station_axes : ndarray, shape (n, 3, 3), optional
        Columns: the station's east, north and up on ICRF axes at reception; needed for station offsets.
    range_km, sigma_range_km : ndarray, shape (n,), optional
        Light path to the object, received at ``t_s``, by clocks at rest with the centre (no barycentric
        velocity in it); NaN where not observed.
    range_rate_km_s, sigma_range_rate_km_s : ndarray, shape (n,), optional
        Its rate by reception time; NaN where not observed.
    two_way : bool
        Ranges and range rates are half of those of the way up and down (radar, laser), not of the way down.
    sun_to_observer_km : ndarray, shape (n, 3), optional
        When given, solar light bending relative to the field's stars is applied
        (:func:`firstarc.fit.deflection.solar_deflection`).

    Raises
    ------
    UsageError
        A shape does not fit, a sigma is not positive, a correlation is not inside (-1, 1).
    """

    t_s: Array
    los: Array
    observer_km: Array
    center_velocity_km_s: Array
    sigma_rad: Array
    corr: Array
    sigma_time_s: Array
    light_time: bool
    observer_velocity_km_s: Array | None = None
    station: Array | None = None
    station_axes: Array | None = None
    range_km: Array | None = None
    sigma_range_km: Array | None = None
    range_rate_km_s: Array | None = None
    sigma_range_rate_km_s: Array | None = None
    two_way: bool = False
    sun_to_observer_km: Array | None = None

    def __post_init__(self) -> None:
        n = len(np.atleast_1d(self.t_s))
        shapes: dict[str, tuple[int, ...]] = {
            "los": (n, 3),
            "observer_km": (n, 3),
            "center_velocity_km_s": (n, 3),
            "sigma_rad": (n, 2),
            "observer_velocity_km_s": (n, 3),
            "station_axes": (n, 3, 3),
            "sun_to_observer_km": (n, 3),
        }
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, bool) or value is None:
                continue
            array = np.array(value, int if field.name == "station" else float)
            expected = shapes.get(field.name, (n,))
            if array.shape != expected:
                raise UsageError(f"{field.name} has shape {array.shape}; expected {expected} for {n} observations")
            array.flags.writeable = False
            object.__setattr__(self, field.name, array)
        seen = np.asarray(np.isfinite(self.los).all(axis=1))
        self._positive("sigma_rad", self.sigma_rad[seen].min(initial=1.0))
        if not (np.abs(self.corr) < 1.0).all():
            raise UsageError("corr must lie between -1 and 1, both excluded")
        if not (self.sigma_time_s >= 0.0).all():
            raise UsageError("sigma_time_s must be 0 or positive; 0 stands for an exact time")
        for name in ("range_km", "range_rate_km_s"):
            value, sigma = getattr(self, name), getattr(self, f"sigma_{name}")
            if value is None:
                continue
            if sigma is None:
                raise UsageError(f"sigma_{name} is missing: every {name} needs its sigma")
            self._positive(f"sigma_{name}", sigma[np.isfinite(value)].min(initial=1.0))

    @staticmethod
    def _positive(name: str, least: float) -> None:
        if not least > 0.0:
            raise UsageError(f"{name} holds {float(least)!r}; every sigma must be positive")

    def __len__(self) -> int:
        return len(self.t_s)

    @property
    def kinds(self) -> int:
        """Components kept per observation: 2 (direction) or 4 (direction, range, range rate)."""
        return 2 if self.range_km is None and self.range_rate_km_s is None else 4

    @property
    def present(self) -> Array:
        """Mask (n, kinds) of what was observed."""
        out = np.zeros((len(self), self.kinds), bool)
        out[:, :2] = np.asarray(np.isfinite(self.los).all(axis=1))[:, None]
        for column, values in ((2, self.range_km), (3, self.range_rate_km_s)):
            if values is not None:
                out[:, column] = np.isfinite(values)
        return out

    @classmethod
    def of_sight_lines(cls, lines: Any, **more: Any) -> Measurements:
        """From an object with the arrays of sight lines (``t_s``, ``los``, ``observer_km``...), and more fields."""
        names = ("t_s", "los", "observer_km", "center_velocity_km_s", "sigma_rad", "corr", "sigma_time_s", "light_time")
        return cls(**{name: getattr(lines, name) for name in names}, **more)

    def with_sigma_factors(self, factors: Any) -> Measurements:
        """The same with the sigmas of the directions multiplied, one factor (n,) per observation."""
        return replace(self, sigma_rad=self.sigma_rad * np.asarray(factors, float)[:, None])

    def take(self, rows: Any) -> Measurements:
        """The chosen rows."""
        parts = {f.name: getattr(self, f.name) for f in fields(self)}
        return Measurements(**{k: v[rows] if isinstance(v, np.ndarray) else v for k, v in parts.items()})
