"""Every root of Gauss' equation with its letter, its orbit or the reason why it is rejected."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from firstarc.constants import AU_KM
from firstarc.determination.stages import Candidate
from firstarc.pipeline import METHODS
from firstarc.report.rounding import DASH, fixed, sigma_decimals, significant

from .snapshot import Snapshot, text


def candidate_table(snap: Snapshot) -> dict[str, Any]:
    """Rows in the order of the ranking."""
    earth = snap.center == "earth"
    unit = "km" if earth else "au"
    head = [
        ["root"],
        [f"r {unit}"],
        [f"slant ranges {snap.pick_numbers} {unit}"],
        [f"a {unit}"],
        ["e"],
        ["h", text("p", sub=1), " km"] if earth else [f"q {unit}"],
        ["rms others ″"],
    ]
    candidates = () if snap.preliminary is None else snap.preliminary.candidates
    if snap.method == "auto":
        head.insert(2, ["method"])
    rows = [candidate_row(snap, candidate, 1.0 if earth else 1.0 / AU_KM) for candidate in candidates]
    return {
        "note": note(snap),
        "methods": [{"key": key, "label": METHODS[key].label} for key in methods_for(snap)],
        "method": snap.method,
        "head": head,
        "rows": rows,
    }


def methods_for(snap: Snapshot) -> list[str]:
    """Methods that these observations allow."""
    ranges = int(np.isfinite(snap.obs.sight_lines.range_km).sum())
    count = int(snap.used.sum())
    return [key for key, method in METHODS.items() if (ranges if method.takes == "ranges" else count) >= method.fewest]


def note(snap: Snapshot) -> str:
    if snap.preliminary is None:
        return "none"
    count = len(snap.preliminary.candidates)
    admissible = sum(c.admissible for c in snap.preliminary.candidates)
    noun = "positive root" if snap.method == "gauss" else "orbit"
    if not count:
        return f"no {noun}"
    verdict = "none" if not admissible else str(admissible)
    return f"{count} {noun}{'s' if count != 1 else ''}, {verdict} admissible"


def candidate_row(snap: Snapshot, candidate: Candidate, scale: float) -> dict[str, Any]:
    earth = snap.center == "earth"
    sigma = candidate.sigma_range_km * scale
    places = [range_places(sigma, r * scale) for r in candidate.ranges_km]
    cells: list[str] = []
    if candidate.admissible and candidate.elements is not None:
        elements = candidate.elements
        cells = [METHODS[candidate.method].label] if snap.method == "auto" else []
        cells += [
            " · ".join(fixed(r * scale, p) for r, p in zip(candidate.ranges_km, places, strict=True)),
            significant(elements.a_km * scale, 5) if math.isfinite(elements.a_km) else DASH,
            fixed(elements.e, 3),
            significant(elements.periapsis_height_km, 4) if earth else significant(elements.q_au, 4),
            rms_text(candidate.rms_others_arcsec),
        ]
    # the automatic choice tries several methods; a rejected row has no cells, so its reason names the method
    tried = f"{METHODS[candidate.method].label}, " if snap.method == "auto" else ""
    return {
        "letter": candidate.letter,
        "admissible": candidate.admissible,
        "chosen": snap.chosen is not None and candidate.letter == snap.chosen.letter,
        "root": significant(candidate.root_km * scale, 5),
        "cells": cells,
        "reason": "" if candidate.admissible else f"{tried}rejected: {candidate.reason}",
    }


def rms_text(value: float) -> str:
    """An rms in arcsec to two or three digits, or a dash where no other row is in."""
    if not math.isfinite(value):
        return DASH
    return fixed(value, 1 if value < 1000 else 0) if value >= 0.95 else fixed(value, 2)


def range_places(sigma: float, value: float) -> int:
    """Decimals of a slant range: its sigma's, but five significant digits at most."""
    most = 4 - math.floor(math.log10(abs(value))) if value else 0
    if math.isfinite(sigma) and sigma > 0.0:
        return min(sigma_decimals(sigma), most)
    return most
