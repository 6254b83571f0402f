"""The three stages side by side: the same elements in each row, and the step from stage to stage."""

from __future__ import annotations

import math
from typing import Any

from firstarc.determination.stages import Candidate, element_rows, sigma_rows
from firstarc.determination.state import State
from firstarc.report.rounding import DASH, agreeing, fixed, sigma_decimals, split_point
from firstarc.results import Code

from .snapshot import Snapshot, text

#: symbol, long name; the periapsis row is named by the centre.
ROWS: dict[str, tuple[list[Any], str]] = {
    "a": ([text("a", em=1)], "semi-major axis"),
    "e": ([text("e", em=1)], "eccentricity"),
    "i": ([text("i", em=1)], "inclination"),
    "node": ([text("Ω", em=1)], "ascending node"),
    "argp": ([text("ω", em=1)], "argument of periapsis"),
    "M": ([text("M", em=1)], "mean anomaly"),
    "q": ([text("q", em=1)], "periapsis distance"),
    "P": ([text("P", em=1)], "period"),
}
EARTH_Q = ([text("h", em=1), text("p", sub=1)], "perigee height")
ANGLES = {"i": None, "node": 360.0, "argp": 360.0, "M": 360.0}
#: Most decimals shown whatever sigma says: further ones are beyond the constants' own digits.
MOST_DECIMALS = 8


def orbit_table(snap: Snapshot, convergence: dict[str, Any] | None) -> dict[str, Any]:
    """Elements of the three stages and of least squares, sigma, and change from the recorded solution."""
    chosen = snap.chosen
    row_number = snap.numbers[snap.pick[1]]
    columns = [
        {
            "title": "Gauss estimate" if chosen is None else chosen.gauss.name,
            "sub": "none" if chosen is None else f"root {chosen.letter}, row {row_number}",
            "kind": "stage",
        },
        {
            "title": f"{rule_name(chosen)} correction",
            "sub": "none" if chosen is None else rule_words(chosen),
            "kind": "stage",
        },
        {"title": "Converged", "sub": "none" if chosen is None else passes(chosen), "kind": "stage"},
        {"title": "Least squares", "sub": fit_words(snap), "kind": "fit"},
        {"title": "± σ", "sub": "3 sightings" if snap.fit is None else "", "kind": "sigma"},
        {"title": "Δ recorded", "sub": "and in σ" if snap.what_if else "no what-if", "kind": "recorded"},
    ]
    rows = [] if chosen is None else element_table_rows(snap, chosen) + closing_rows(snap, chosen)
    return {
        "note": caption_note(snap),
        "columns": columns,
        "rows": rows,
        "none": "" if chosen is not None else no_orbit_sentence(snap),
        "convergence": convergence,
    }


def rule_name(chosen: Candidate | None) -> str:
    return "Gibbs" if chosen is None or not chosen.gibbs.rule else chosen.gibbs.rule.replace("-", "–")


def fit_words(snap: Snapshot) -> str:
    """What the least-squares column rests on, or why it is empty."""
    if snap.fit is None:
        return "when the hand rests" if snap.held else "none"
    rows = f"{int(snap.fit.used.sum())} rows"
    if not snap.fit.determined:
        return f"{rows}, one of many"
    return f"{rows}, {'two-body' if snap.fit.forces.endswith('only.') else 'perturbed'}"


def rule_words(chosen: Candidate) -> str:
    if chosen.gibbs.status.code is Code.NOT_ATTEMPTED:
        return "not used"
    if chosen.gibbs.state is None:
        return "no velocity"
    return f"{chosen.gibbs.rule.replace('-', '–')} chosen"


def passes(chosen: Candidate) -> str:
    if chosen.converged.state is None:
        return "not reached"
    if not chosen.history:
        return "exact" if chosen.dof_others or len(chosen.picked) == 3 else "as it stands"
    steps = max(len(chosen.history) - 1, 0)
    return f"{steps} Newton step{'s' if steps != 1 else ''}"


def caption_note(snap: Snapshot) -> str:
    stamp = snap.obs.utc_iso(snap.pick[1], 2)
    frame = "ICRF equator" if snap.center == "earth" else "J2000 ecliptic"
    reference = "least squares" if settled_fit(snap) else "the converged orbit"
    tail = f" Underlined digits agree with {reference}." if snap.chosen is not None else ""
    return f"at {stamp[:10]} {stamp[11:].rstrip('Z')} UTC, {frame}.{tail}"


def no_orbit_sentence(snap: Snapshot) -> str:
    if snap.failure is not None:
        return f"No value: {snap.failure.sentence[0].lower()}{snap.failure.sentence[1:]}"
    return "No value: no root is admissible."


def settled_fit(snap: Snapshot) -> bool:
    """True when the least-squares orbit is there and determined."""
    return snap.fit is not None and snap.fit.determined


def sigmas_shown(snap: Snapshot, chosen: Candidate) -> dict[str, float]:
    """Sigmas of the last orbit shown; none where they would claim what the data do not decide."""
    if snap.fit is not None:
        return sigma_rows(snap.fit.elements, snap.fit.sigmas) if snap.fit.determined else {}
    return sigma_rows(chosen.elements, chosen.sigmas) if snap.shows_sigma else {}


def element_table_rows(snap: Snapshot, chosen: Candidate) -> list[dict[str, Any]]:
    stages = [element_rows(stage.elements) for stage in (chosen.gauss, chosen.gibbs, chosen.converged)]
    stages.append({} if snap.fit is None else element_rows(snap.fit.elements))
    sigma = sigmas_shown(snap, chosen)
    recorded = recorded_values(snap, chosen)
    reference = 3 if settled_fit(snap) else 2
    rows = []
    for key, (symbol, name) in ROWS.items():
        if key == "q" and snap.center == "earth":
            symbol, name = EARTH_Q
        elif key == "q":
            name = "perihelion distance"
        elif key == "argp":
            name = "argument of perigee" if snap.center == "earth" else "argument of perihelion"
        values = [stage[key][0] if stage else math.nan for stage in stages]
        if not any(math.isfinite(value) for value in values):
            continue
        unit = next(stage[key][1] for stage in stages if stage)
        places = row_places(values, sigma.get(key))
        last = values[3] if snap.fit is not None else values[2]
        rows.append(
            {
                "key": key,
                "symbol": symbol,
                "name": name,
                "unit": unit,
                "kind": "element",
                "cells": [
                    *stage_cells(values, places, ANGLES.get(key), reference),
                    sigma_cell(sigma.get(key), places),
                    recorded_cell(last, recorded.get(key), sigma.get(key), places, ANGLES.get(key)),
                ],
            }
        )
    return rows


def row_places(values: list[float], sigma: float | None) -> int:
    """One fixed number of decimals for a row: sigma's, or four significant digits where there is no usable sigma."""
    if sigma is not None and math.isfinite(sigma) and sigma > 0.0:
        return min(sigma_decimals(sigma), MOST_DECIMALS)
    size = max((abs(value) for value in values if math.isfinite(value)), default=1.0)
    return 3 - math.floor(math.log10(size)) if size > 0.0 else 3


def cell(value: str = "", **rest: Any) -> dict[str, Any]:
    whole, fraction = split_point(value)
    return {"whole": whole, "fraction": fraction, "agree": 0, "step": "", "in_sigma": "", "dev": False, **rest}


def stage_cells(values: list[float], places: int, period: float | None, reference: int) -> list[dict[str, Any]]:
    """One cell a stage; digits settled against the stage ``reference`` are counted."""
    cells = []
    for index, value in enumerate(values):
        shown = fixed(value, places)
        agree = agreeing(shown, value, values[reference], places, period=period) if index < reference else 0
        step = "" if index == 0 else step_text(value, values[index - 1], places, period)
        cells.append(cell(shown, agree=agree, step=step))
    return cells


def wrapped(difference: float, period: float | None) -> float:
    return (difference + period / 2.0) % period - period / 2.0 if period else difference


def step_text(value: float, before: float, places: int, period: float | None) -> str:
    if not (math.isfinite(value) and math.isfinite(before)):
        return ""
    change = wrapped(value - before, period)
    return "=" if round(change, places) == 0.0 else fixed(change, places, sign=True)


def sigma_cell(sigma: float | None, places: int) -> dict[str, Any]:
    if sigma is None or not math.isfinite(sigma) or sigma <= 0.0:
        return cell(DASH)
    return cell(fixed(sigma, places) if round(sigma, places) > 0.0 else f"<{fixed(10.0**-places, places)}")


def recorded_values(snap: Snapshot, chosen: Candidate) -> dict[str, float]:
    """Elements of the recorded solution of the same kind, brought to the epoch of the present one."""
    if not snap.what_if:
        return {}
    if snap.fit is not None:
        now: State | None = snap.fit.state
    else:
        now = chosen.state
    before = snap.recorded_state
    if before is None or now is None:
        return {}
    if before.epoch_tdb != now.epoch_tdb:
        before = before.propagated(now.epoch_tdb)
    return {key: value for key, (value, _) in element_rows(before.elements).items()}


def recorded_cell(
    value: float, recorded: float | None, sigma: float | None, places: int, period: float | None
) -> dict[str, Any]:
    if recorded is None or not (math.isfinite(value) and math.isfinite(recorded)):
        return cell("·")
    change = wrapped(value - recorded, period)
    in_sigma = ""
    if sigma is not None and math.isfinite(sigma) and sigma > 0.0:
        ratio = abs(change) / sigma
        in_sigma = fixed(ratio, 1 if ratio < 100 else 0)
    shown = "0" if round(change, places) == 0.0 else fixed(change, places, sign=True)
    return cell(shown, in_sigma=in_sigma, dev=True)


def closing_rows(snap: Snapshot, chosen: Candidate) -> list[dict[str, Any]]:
    """Miss of the three sight lines, and rms over the rows in use, for every stage."""
    stages = (chosen.gauss, chosen.gibbs, chosen.converged)
    miss = [max(map(abs, stage.miss_arcsec), default=math.nan) for stage in stages]
    rms = [stage.rms_arcsec for stage in stages]
    fitted = [] if snap.fit is None else [snap.fit.rms_arcsec]
    blank = [cell(), cell()]
    return [
        {
            "key": "miss",
            "symbol": ["miss ″"],
            "name": "largest angle between a picked line of sight and the orbit",
            "unit": "",
            "kind": "miss",
            "cells": [*(cell(arcsec_text(value)) for value in miss), cell(), *blank],
        },
        {
            "key": "rms",
            "symbol": ["rms ″"],
            "name": "rms of the residuals of the rows in use",
            "unit": "",
            "kind": "rms",
            "cells": [*(cell(arcsec_text(value)) for value in rms + (fitted or [math.nan])), *blank],
        },
    ]


def arcsec_text(value: float) -> str:
    if not math.isfinite(value):
        return DASH
    if value < 0.005:
        return "0.0"
    return fixed(value, 2 if value < 10 else 1 if value < 10_000 else 0)
