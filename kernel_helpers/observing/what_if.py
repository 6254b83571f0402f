"""Offsets that are tried on without ever being written into the observations."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields

from firstarc.errors import UsageError


@dataclass(frozen=True, repr=False)
class WhatIf:
    """A question put to the observations: what if the station stood, or its clock went, a little differently?

    Everything is an offset that is added to the recorded value.

    Parameters
    ----------
    clock_s : float
        Added to the recorded times, s.
    lat_deg, lon_deg : float
        Added to the geodetic latitude and the east longitude of the station, deg.
    height_m : float
        Added to the station's height above the ellipsoid, m.
    station : str, optional
        Code of the station it holds for; every station when not given.
    rows : sequence of int, optional
        Row numbers (0-based, as loaded, see ``Observations.rows``) it holds for; every row when not given.

    Raises
    ------
    UsageError
        An offset is not a finite number, or a row is not a whole number from 0 on.
    """

    clock_s: float = 0.0
    lat_deg: float = 0.0
    lon_deg: float = 0.0
    height_m: float = 0.0
    station: str | None = None
    rows: tuple[int, ...] | None = None

    def __post_init__(self) -> None:
        for name in ("clock_s", "lat_deg", "lon_deg", "height_m"):
            object.__setattr__(self, name, _finite(name, getattr(self, name)))
        if self.station is not None and not isinstance(self.station, str):
            raise UsageError(f"WhatIf(station={self.station!r}): give the station's code as text, such as '704'")
        if self.rows is not None:
            object.__setattr__(self, "rows", _row_numbers(self.rows))

    @property
    def is_zero(self) -> bool:
        """True when no offset differs from zero."""
        return not (self.clock_s or self.lat_deg or self.lon_deg or self.height_m)

    def __repr__(self) -> str:
        shown = [
            f"{f.name}={getattr(self, f.name)!r}"
            for f in fields(self)
            if getattr(self, f.name) is not None and getattr(self, f.name) != 0.0
        ]
        return f"WhatIf({', '.join(shown)})"


def _finite(name: str, value: object) -> float:
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        number = math.nan
    if isinstance(value, (str, bytes)) or not math.isfinite(number):
        raise UsageError(f"WhatIf({name}={value!r}): give a finite number")
    return number


def _row_numbers(rows: Sequence[int]) -> tuple[int, ...]:
    try:
        numbers = tuple(int(r) for r in rows)
        whole = all(int(r) == r and not isinstance(r, (str, bool)) for r in rows)
    except (TypeError, ValueError):
        numbers, whole = (), False
    if not whole or any(r < 0 for r in numbers):
        raise UsageError(f"WhatIf(rows={rows!r}): give row numbers as loaded, whole and from 0 on, such as [0, 4]")
    return numbers
