"""What the hand has set in the browser, checked before anything is computed from it.

Settings arrive from outside the kernel: nothing in them is trusted. A value that cannot be used is replaced by
the one in force, and the scene that answers says which settings are in force.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from firstarc.pipeline import METHODS

#: Keys of a station's offsets.
OFFSETS = ("lat_deg", "lon_deg", "height_m", "clock_s")
#: Largest offsets that are taken, so that a slip of the keyboard cannot ask for nonsense.
LARGEST = {"lat_deg": 180.0, "lon_deg": 360.0, "height_m": 1e7, "clock_s": 86400.0}
WIDTHS = {"residuals": 470.0, "sky": 340.0, "orbit": 340.0, "root": 230.0}


@dataclass(frozen=True)
class Settings:
    """Settings in force. Rows are positions in the Desk's observations."""

    pick: tuple[int, int, int]
    station: str
    row: int
    excluded: tuple[int, ...] = ()
    kept: tuple[int, ...] = ()
    estimate: str = ""
    offsets: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    row_clock: Mapping[int, float] = field(default_factory=dict)
    candidate: str | None = None
    method: str = "gauss"
    held: bool = False
    widths: Mapping[str, float] = field(default_factory=lambda: dict(WIDTHS))
    seq: int = -1

    def as_dict(self) -> dict[str, Any]:
        """For the browser."""
        return {
            "seq": self.seq,
            "pick": list(self.pick),
            "excluded": list(self.excluded),
            "kept": list(self.kept),
            "estimate": self.estimate,
            "station": self.station,
            "offsets": {code: dict(values) for code, values in self.offsets.items()},
            "row_clock": {str(row): value for row, value in self.row_clock.items()},
            "row": self.row,
            "candidate": self.candidate,
            "method": self.method,
            "held": self.held,
            "widths": dict(self.widths),
        }


def checked(raw: Mapping[str, Any], before: Settings, count: int, stations: tuple[str, ...]) -> Settings:
    """Settings from the browser; each unusable value is replaced by the one of ``before``."""
    pick = rows_of(raw.get("pick"), count)
    excluded = rows_of(raw.get("excluded"), count)
    out = before.excluded if excluded is None else tuple(sorted(set(excluded)))
    kept = rows_of(raw.get("kept"), count)
    estimates = ["", *(f"{kind}:{code}" for kind in ("clock", "station") for code in stations)]
    station = raw.get("station")
    row = rows_of([raw.get("row")], count)
    candidate = raw.get("candidate", before.candidate)
    method = raw.get("method")
    return Settings(
        pick=before.pick if pick is None or len(pick) != 3 or len(set(pick)) != 3 else (pick[0], pick[1], pick[2]),
        station=station if station in stations else before.station,
        row=before.row if row is None else row[0],
        excluded=out,
        kept=tuple(sorted(set(before.kept if kept is None else kept) - set(out))),
        estimate=raw["estimate"] if raw.get("estimate") in estimates else before.estimate,
        offsets=before.offsets if "offsets" not in raw else offsets_of(raw["offsets"], stations),
        row_clock=before.row_clock if "row_clock" not in raw else row_clock_of(raw["row_clock"], count),
        candidate=candidate if candidate is None or isinstance(candidate, str) else before.candidate,
        method=method if isinstance(method, str) and method in METHODS else before.method,
        held=raw.get("held") is True,
        widths=widths_of(raw.get("widths"), before.widths),
        seq=raw["seq"] if isinstance(raw.get("seq"), int) else before.seq,
    )


def number(value: Any, largest: float) -> float:
    """A finite number within bounds, else zero."""
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return 0.0
    return max(-largest, min(largest, float(value)))


def rows_of(raw: Any, count: int) -> list[int] | None:
    if not isinstance(raw, list | tuple):
        return None
    if not all(isinstance(row, int) and not isinstance(row, bool) and 0 <= row < count for row in raw):
        return None
    return list(raw)


def offsets_of(raw: Any, stations: tuple[str, ...]) -> dict[str, dict[str, float]]:
    found: dict[str, dict[str, float]] = {}
    if not isinstance(raw, Mapping):
        return found
    for code in stations:
        given = raw.get(code)
        if isinstance(given, Mapping):
            values = {key: number(given.get(key), LARGEST[key]) for key in OFFSETS}
            kept = {key: value for key, value in values.items() if value}
            if kept:
                found[code] = kept
    return found


def row_clock_of(raw: Any, count: int) -> dict[int, float]:
    if not isinstance(raw, Mapping):
        return {}
    found = {}
    for key, value in raw.items():
        if str(key).isdigit() and int(key) < count and number(value, LARGEST["clock_s"]):
            found[int(key)] = number(value, LARGEST["clock_s"])
    return found


def widths_of(raw: Any, before: Mapping[str, float]) -> dict[str, float]:
    given = raw if isinstance(raw, Mapping) else {}
    return {key: clamp_width(given.get(key), before.get(key, WIDTHS[key])) for key in WIDTHS}


def clamp_width(value: Any, before: float) -> float:
    wide = number(value, 4000.0)
    return wide if wide >= 120.0 else before
