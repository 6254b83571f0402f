"""The table of observations: time, direction, station, residuals, pick and in/out."""

from __future__ import annotations

from typing import Any

import numpy as np

from firstarc.report.rounding import (
    declination,
    declination_decimals,
    fixed,
    right_ascension,
    right_ascension_decimals,
    sigma_decimals,
)

from .snapshot import LARGE_CHI, Snapshot


def observation_table(snap: Snapshot) -> dict[str, Any]:
    """Rows in the order of the input."""
    obs = snap.obs
    lines = obs.sight_lines
    count = len(obs)
    ra_deg, dec_deg = np.degrees(directions(lines.los))
    sigma = snap.sigma_arcsec
    stamps = [stamp.rstrip("Z") for stamp in obs.utc_texts(time_decimals(snap))]
    dates = [stamp[:10] for stamp in stamps]
    several_days = len(set(dates)) > 1
    # one number of decimals for a column, that of its most precise row
    ra_places = max(map(right_ascension_decimals, sigma[:, 0], dec_deg))
    dec_places = max(map(declination_decimals, sigma[:, 1]))
    rows = []
    for i in range(count):
        stamp = stamps[i]
        oc_ra, oc_dec, chi, big = residual_texts(snap, i, sigma[i])
        rows.append(
            {
                "row": i,
                "number": str(snap.numbers[i]),
                "pick": snap.pick.index(i) + 1 if i in snap.pick else 0,
                "used": bool(snap.inside[i]),
                "selected": i == snap.selected,
                "time": f"{stamp[5:10]} {stamp[11:]}" if several_days else stamp[11:],
                "station": snap.codes[i],
                "shape": snap.shapes[i],
                "ra": right_ascension(ra_deg[i], ra_places),
                "dec": declination(dec_deg[i], dec_places),
                "oc_ra": oc_ra,
                "oc_dec": oc_dec,
                "chi": chi,
                "big": big,
            }
        )
    day = dates[0] if not several_days else f"{min(dates)} to {max(dates)}"
    return {
        "caption": "Observations",
        "note": f"{day} UTC, {direction_word(obs)}; O−C in ″, RA × cos Dec",
        "foot": foot(snap),
        "rows": rows,
    }


def direction_word(obs: Any) -> str:
    return "astrometric ICRF" if obs.light_time else "geometric, ICRF axes"


def directions(los: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Right ascension in 0..2 pi and declination of unit vectors, rad."""
    ra = np.arctan2(los[:, 1], los[:, 0]) % (2.0 * np.pi)
    return ra, np.arctan2(los[:, 2], np.hypot(los[:, 0], los[:, 1]))


def time_decimals(snap: Snapshot) -> int:
    """Decimals of the second that the table shows: what the direction's sigma can tell apart, two at most."""
    return 2 if snap.center == "earth" else 1


def residual_texts(snap: Snapshot, i: int, sigma: np.ndarray) -> tuple[str, str, str, bool]:
    if snap.residuals is None or snap.chi is None or not np.isfinite(snap.residuals[i]).all():
        return "", "", "", False
    texts = []
    for axis in range(2):
        value = snap.residuals[i, axis]
        places = max(min(sigma_decimals(sigma[axis]), 3), 0) if abs(value) < 1000.0 else 0
        texts.append(fixed(value, places, sign=True))
    chi = float(snap.chi[i])
    texts.append(fixed(chi, 1 if chi < 1000.0 else 0))
    if not snap.inside[i]:
        texts = [f"({value})" for value in texts]
    return texts[0], texts[1], texts[2], chi > LARGE_CHI


def foot(snap: Snapshot) -> str:
    """The pick and why, and which rows are out."""
    parts = []
    if snap.preliminary is not None:
        first, second = snap.preliminary.separations_deg
        parts.append(f"Pick {snap.pick_numbers}: lines of sight {angle(first)} and {angle(second)} apart.")
    else:
        parts.append(f"Pick {snap.pick_numbers}.")
    rejected = ~snap.inside & snap.used
    if rejected.any():
        parts.append(f"{rows_out(snap, rejected)}{sizes(snap, rejected)}.")
    if not snap.used.all():
        parts.append(f"{rows_out(snap, ~snap.used)}, taken out by hand.")
    if snap.what_if and snap.fit is not None:
        parts.append("Rejections held as recorded during a what-if.")
    return " ".join(parts)


def sizes(snap: Snapshot, mask: np.ndarray) -> str:
    """How far a few rows are off, in sigmas."""
    if snap.chi is None or mask.sum() > 3:
        return ", rejected by the fit"
    return ", rejected: " + ", ".join(f"{fixed(float(snap.chi[i]), 1)} σ" for i in np.flatnonzero(mask))


def rows_out(snap: Snapshot, mask: np.ndarray) -> str:
    """Which rows are out: ``Row 7 out``, ``Rows 3, 7 out``; many are counted, not listed."""
    out = [str(snap.numbers[i]) for i in np.flatnonzero(mask)]
    if len(out) > 8:
        return f"{len(out)} rows out"
    return f"Row{'s' if len(out) > 1 else ''} {', '.join(out)} out"


def angle(degrees: float) -> str:
    """An angle between directions to about three digits, in the unit that reads best."""
    if degrees >= 1.0:
        return fixed(degrees, 1) + "°"
    if degrees * 60.0 >= 1.0:
        return fixed(degrees * 60.0, 1) + "′"
    return fixed(degrees * 3600.0, 1) + "″"
