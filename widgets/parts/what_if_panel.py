"""The what-if sliders: offsets of a station's position and clock and of one row's time."""

from __future__ import annotations

import math
from typing import Any

from firstarc.report.rounding import MINUS, fixed, sexagesimal, with_sigma

from .snapshot import Snapshot

#: Metres on the ground for a degree of latitude (mean meridian degree of WGS 84; common practice).
METRES_PER_DEGREE = 111_132.0

#: Offsets that the sliders span at first, and their steps: (span, step, decimals) by centre and key.
SPANS = {
    "earth": {
        "lat_deg": (0.02, 0.00001, 5),
        "lon_deg": (0.02, 0.00001, 5),
        "height_m": (500.0, 1.0, 0),
        "clock_s": (1.0, 0.001, 3),
        "row_clock": (1.0, 0.001, 3),
    },
    "sun": {
        "lat_deg": (1.0, 0.0005, 4),
        "lon_deg": (1.0, 0.0005, 4),
        "height_m": (5000.0, 10.0, 0),
        "clock_s": (120.0, 0.1, 1),
        "row_clock": (120.0, 0.1, 1),
    },
}


def what_if_panel(
    snap: Snapshot, station: str, offsets: dict[str, float], row_clock: float, estimate: str = ""
) -> dict[str, Any]:
    """Sliders for one station and for the selected row.

    Parameters
    ----------
    snap : Snapshot
    station : str
        Code of the station shown.
    offsets : dict
        ``lat_deg``, ``lon_deg``, ``height_m``, ``clock_s`` of that station; missing means zero.
    row_clock : float
        Offset of the selected row's time, s.
    estimate : str
        What was asked to be estimated, as for ``fit(estimate=...)``.
    """
    sites = snap.recorded_obs.stations
    site = next(site for site in sites if site.code == station)
    number = snap.numbers[snap.selected]
    stamp = snap.recorded_obs.utc_iso(snap.selected, 6)[11:].rstrip("Z")
    hours, minutes, seconds = stamp.split(":")
    day_s = int(hours) * 3600 + int(minutes) * 60 + float(seconds)
    spans = SPANS[snap.center]
    cos_lat = max(math.cos(math.radians(site.lat_deg)), 1e-6)
    sliders = [
        degree_slider(spans, "lat_deg", "latitude", site.lat_deg, offsets, METRES_PER_DEGREE, "N"),
        degree_slider(spans, "lon_deg", "longitude", site.lon_deg, offsets, METRES_PER_DEGREE * cos_lat, "E"),
        plain_slider(spans, "height_m", "height", "m", site.height_m, offsets.get("height_m", 0.0), sign=False),
        plain_slider(spans, "clock_s", "clock", "s", 0.0, offsets.get("clock_s", 0.0), sign=True),
        row_slider(spans, number, day_s, row_clock),
    ]
    return {
        "stations": [{"code": s.code, "label": f"{s.code} {s.name}".strip()} for s in sites],
        "station": station,
        "any": bool(snap.what_if),
        "sliders": sliders,
        "estimate": estimate_answer(snap, estimate),
    }


def estimate_answer(snap: Snapshot, estimate: str) -> dict[str, Any]:
    """The offset that the recorded observations themselves ask for, with its sigma, and how to set it as a what-if."""
    if not estimate or snap.held:
        return {"asked": estimate, "text": "", "offsets": {}, "station": ""}
    kind, _, code = estimate.partition(":")
    if not snap.estimated:
        words = snap.estimate_words or "there is no recorded orbit to start from."
        return {"asked": estimate, "text": f"Not estimated: {words}", "offsets": {}, "station": code}
    parts = [with_sigma(one.value, one.sigma, one.unit) for one in snap.estimated]
    if kind == "clock":
        words = f"{code} clock {parts[0]} by least squares"
        offsets = {"clock_s": round(snap.estimated[0].value, 6)}
    else:
        names = [one.name.split(" ")[0] for one in snap.estimated]
        moved = ", ".join(f"{part} {name}" for part, name in zip(parts, names, strict=True))
        words = f"{code} {moved} by least squares"
        east, north, up = (one.value for one in snap.estimated)
        site = next(site for site in snap.recorded_obs.stations if site.code == code)
        cos_lat = max(math.cos(math.radians(site.lat_deg)), 1e-6)
        offsets = {
            "lat_deg": round(north / METRES_PER_DEGREE, 8),
            "lon_deg": round(east / METRES_PER_DEGREE / cos_lat, 8),
            "height_m": round(up, 2),
        }
    return {"asked": estimate, "text": words, "offsets": offsets, "station": code}


def slider(spans: dict, key: str, value: float, **rest: Any) -> dict[str, Any]:
    span, step, _ = spans[key]
    while abs(value) > span:
        span *= 2.0
    return {"key": key, "min": -span, "max": span, "step": step, "value": value, "changed": value != 0.0, **rest}


def degree_slider(
    spans: dict, key: str, label: str, recorded: float, offsets: dict[str, float], metres: float, axis: str
) -> dict[str, Any]:
    value = offsets.get(key, 0.0)
    box = fixed(recorded + value, spans[key][2], sign=True)
    distance = value * metres
    change = f"{fixed(distance, 0 if abs(distance) >= 10 else 1, sign=True)} m {axis}" if value else "0 m"
    return slider(
        spans,
        key,
        value,
        label=label,
        unit="°",
        box=box,
        base=recorded,
        kind="number",
        change=change,
        valuetext=f"{box}°, {change} from recorded",
    )


def plain_slider(
    spans: dict, key: str, label: str, unit: str, recorded: float, value: float, *, sign: bool
) -> dict[str, Any]:
    places = spans[key][2]
    box = fixed(recorded + value, places, sign=sign)
    change = f"{fixed(value, places, sign=True)} {unit}" if value else f"0 {unit}"
    return slider(
        spans,
        key,
        value,
        label=label,
        unit=unit,
        box=box,
        base=recorded,
        kind="number",
        change=change,
        valuetext=f"{box} {unit}, {change} from recorded",
    )


def row_slider(spans: dict, number: int, day_s: float, value: float) -> dict[str, Any]:
    places = spans["row_clock"][2]
    box = sexagesimal(((day_s + value) % 86400.0) / 3600.0, places, sign=False, separator=":")
    change = f"{fixed(value, places, sign=True)} s" if value else "0 s"
    return slider(
        spans,
        "row_clock",
        value,
        label=f"time, row {number}",
        unit="",
        box=box,
        base=day_s,
        kind="time_of_day",
        change=change,
        valuetext=f"{box} UTC, {change} from recorded",
    )


def what_if_words(what_if: tuple[Any, ...], center: str) -> str:
    """The what-if in words: ``BRN clock +0.35 s; row 5 time −0.020 s``."""
    spans = SPANS[center]
    parts = []
    for one in what_if:
        place = f"row {one.rows[0] + 1}" if one.rows else (one.station or "every station")
        named = [
            ("latitude", one.lat_deg, "°", "lat_deg"),
            ("longitude", one.lon_deg, "°", "lon_deg"),
            ("height", one.height_m, " m", "height_m"),
            ("time" if one.rows else "clock", one.clock_s, " s", "clock_s"),
        ]
        for word, value, unit, key in named:
            if value:
                parts.append(f"{place} {word} {signed(value, spans[key][2])}{unit}")
    return "; ".join(parts)


def signed(value: float, places: int) -> str:
    text = fixed(value, places, sign=True)
    # trailing zeros say nothing about a value that a hand has set
    return text.rstrip("0").rstrip(".") if "." in text and text.strip("+" + MINUS) != "0" else text
