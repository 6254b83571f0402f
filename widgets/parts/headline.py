"""The three lines on top: verdict and orbit, what it rests on, and the what-if."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from firstarc.constants import AU_KM
from firstarc.determination.orbit_fit import OrbitFit
from firstarc.determination.stages import Candidate, element_rows, sigma_rows
from firstarc.report.rounding import DASH, fixed, significant, with_sigma

from .checks import CHANCE_LIMIT, chi2_words
from .observation_table import rows_out
from .snapshot import LARGE_CHI, Snapshot, text
from .what_if_panel import what_if_words

#: How much better the rows outside the pick must fit one candidate than the next for it to be preferred outright.
DECISIVE_RATIO = 3.0


def headline(snap: Snapshot) -> tuple[list[list[Any]], bool]:
    """Three lines, and whether the verdict is bad."""
    if snap.chosen is None:
        return failed(snap), True
    if snap.fit is not None:
        first, bad = fit_verdict(snap, snap.fit)
        return [first, fit_basis(snap, snap.fit), fit_what_if_line(snap, snap.fit)], bad
    first, bad = verdict(snap, snap.chosen)
    second = basis(snap, snap.chosen)
    if snap.fit_problem:
        second = [*second, f" No least-squares orbit: {snap.fit_problem}"]
    return [first, second, what_if_line(snap)], bad


def fit_verdict(snap: Snapshot, fit: OrbitFit) -> tuple[list[Any], bool]:
    """Is it determined, and which orbit?"""
    about = f"{fit.elements.shape} about {'the Earth' if snap.center == 'earth' else 'the Sun'}"
    if fit.determined:
        runs = element_runs(snap, element_rows(fit.elements), sigma_rows(fit.elements, fit.sigmas))
        return [text("Determined.", b=1), f" {about[0].upper()}{about[1:]}: ", *runs, "."], False
    words = f" {int(fit.used.sum())} observations leave the slant range open{range_words(snap, fit.sample)}."
    if not fit.verdicts.single.ok:
        words += f" {fit.verdicts.single.sentence}"
    return [text("Not determined.", b=1), words], True


def range_words(snap: Snapshot, sample: Any) -> str:
    """Where 90 % of a weighted sample lies. A sample none of whose orbits fits says nothing about the range."""
    if not sample.status.ok or not np.isfinite(sample.best.state).all():
        return "; no sampled orbit fits them that could say how far"
    ends = sample.quantiles(sample.range_km, (0.05, 0.95))
    unit, scale = ("km", 1.0) if snap.center == "earth" else ("au", AU_KM)
    # as many digits as it takes to tell the ends apart
    pairs = [tuple(significant(float(end) / scale, digits) for end in ends) for digits in range(3, 9)]
    low, high = next((pair for pair in pairs if pair[0] != pair[1]), pairs[-1])
    return f" between {low} and {high} {unit} (90 % of the sample)"


def fit_basis(snap: Snapshot, fit: OrbitFit) -> list[Any]:
    """How the rows agree with the least-squares orbit."""
    count, inside = len(fit.used), int(fit.used.sum())
    line = (
        f"{inside} of {count} observations in the fit, rms {rms(fit.rms_arcsec)} against stated σ of "
        f"{stated_sigmas(snap)}, χ² {chi2_words(fit.chi2)} for {fit.dof} degrees of freedom"
    )
    line += "." if fit.verdicts.consistent.ok or fit.dof < 1 else f": {sigma_doubt(fit)}."
    out = np.flatnonzero(~fit.used)
    if len(out) == 1:
        line += f" Row {snap.numbers[int(out[0])]} is out ({fixed(float(fit.chi[out[0]]), 1)} σ)."
    elif len(out):
        line += f" {rows_out(snap, ~fit.used)}."
    large = large_rows(snap)
    if large and snap.what_if:
        line += f" {large}"
    return [line]


def sigma_doubt(fit: OrbitFit) -> str:
    return "larger than the stated σ allow" if fit.chi2 > fit.dof else "smaller than the stated σ would give"


def fit_what_if_line(snap: Snapshot, fit: OrbitFit) -> list[Any]:
    if not snap.what_if:
        return ["No what-if: these are the recorded observations."]
    line: list[Any] = [text(f"What-if: {what_if_words(snap.what_if, snap.center)}.", b=1, dev=1)]
    before = snap.recorded_fit
    if before is None:
        return [*line, " The recorded observations have no fit to compare with."]
    change = fit.chi2 - before.chi2
    # a change of one is what chance alone does to chi-square when one number is moved by its sigma
    word = "cannot tell" if abs(change) < 1.0 else "speak against it" if change > 0.0 else "speak for it"
    line.append(
        f" Rms {rms(before.rms_arcsec)} → {rms(fit.rms_arcsec)}, χ² {fixed(change, 1, sign=True)}: the observations "
        f"{word}. Dashed grey: recorded."
    )
    return line


def failed(snap: Snapshot) -> list[list[Any]]:
    failure = snap.failure
    sentence = "no root is admissible." if failure is None else failure.sentence
    second: list[Any] = []
    if failure is not None and failure.remedy:
        second = [text("Remedy: ", b=1), failure.remedy]
        if failure.drop_row is not None:
            number = snap.numbers[failure.drop_row]
            second += [
                ", or ",
                text(f"take row {number} out of the pick", act={"do": "drop_from_pick", "row": failure.drop_row}),
            ]
    third = what_if_line(snap) if snap.what_if else ["No what-if: these are the recorded observations."]
    return [[text("No preliminary orbit.", b=1), " ", sentence], second, third]


def verdict(snap: Snapshot, chosen: Candidate) -> tuple[list[Any], bool]:
    rivals = rival_letters(snap, chosen)
    about = "the Earth" if snap.center == "earth" else "the Sun"
    shape = chosen.elements.shape.capitalize() if chosen.elements is not None else ""
    orbit: list[Any] = [f" {shape} about {about}: ", *orbit_runs(snap, chosen), "."]
    if not snap.determined:
        row = snap.numbers[snap.pick[1]]
        relative = snap.relative_range_sigma
        size = f"±{significant(100 * relative, 2)} %" if relative < 1.0 else "more than its own length"
        why = f" The three sightings leave the slant range at row {row} open by {size} (1 σ)."
        return [text("Not determined.", b=1), why, f" {shape} about {about} as it stands."], True
    if rivals:
        word = "Two" if len(rivals) == 1 else str(len(rivals) + 1)
        names = f"{word} candidates fit the pick {snap.pick_numbers} exactly"
        how = (
            "; no other row is in that could decide."
            if chosen.dof_others == 0
            else f"; the other rows do not decide between {chosen.letter} and {', '.join(rivals)}."
        )
        return [text(names, b=1), how, f" {chosen.letter}:", *orbit], True
    return [text("Determined.", b=1), *orbit], False


def rival_letters(snap: Snapshot, chosen: Candidate) -> list[str]:
    """Other admissible candidates that the rows outside the pick do not rule out."""
    pre = snap.preliminary
    if pre is None:
        return []
    mine = chosen.rms_others_arcsec
    rivals = []
    for other in pre.candidates:
        if other.letter == chosen.letter or not other.admissible:
            continue
        decided = (
            math.isfinite(mine)
            and math.isfinite(other.rms_others_arcsec)
            and other.rms_others_arcsec > DECISIVE_RATIO * mine
        )
        if not decided:
            rivals.append(other.letter)
    return rivals


def orbit_runs(snap: Snapshot, chosen: Candidate) -> list[Any]:
    sigma = sigma_rows(chosen.elements, chosen.sigmas) if snap.shows_sigma else {}
    return element_runs(snap, element_rows(chosen.elements), sigma)


def element_runs(snap: Snapshot, values: dict[str, tuple[float, str]], sigma: dict[str, float]) -> list[Any]:
    """The elements that name an orbit, with their sigmas."""
    q_name = "perigee" if snap.center == "earth" else "q"
    runs: list[Any] = []
    for key, name in (("a", "a"), ("e", "e"), ("i", "i"), ("q", q_name)):
        value, unit = values[key]
        if not math.isfinite(value):
            continue
        if runs:
            runs.append(", ")
        shown = with_sigma(value, sigma.get(key), unit)
        runs.append(text(f"{name} {shown}" + (" up" if key == "q" and snap.center == "earth" else ""), k=1))
    return runs


def stated_sigmas(snap: Snapshot) -> str:
    sigma = np.unique(np.round(np.degrees(snap.obs.sight_lines.sigma_rad[snap.used]) * 3600.0, 3))
    low, high = (significant(float(x), 2) for x in (sigma[0], sigma[-1]))
    return f"{low}″" if low == high else f"{low}″ to {high}″"


def basis(snap: Snapshot, chosen: Candidate) -> list[Any]:
    """What the orbit rests on and how the other rows agree with it."""
    gone = f" {rows_out(snap, ~snap.used)}." if not snap.used.all() else ""
    if chosen.dof_others == 0:
        return [f"Orbit through rows {snap.pick_numbers} alone: three directions leave no redundancy.{gone}"]
    others = int(snap.used.sum()) - 3
    rows = f"the other {others} rows" if others > 1 else "the one other row"
    line = (
        f"Orbit through rows {snap.pick_numbers}; {rows} in use: rms {rms(chosen.rms_others_arcsec)} "
        f"against stated σ of {stated_sigmas(snap)}."
    )
    large = large_rows(snap)
    if chosen.chance_others < CHANCE_LIMIT:
        line += " Larger than the stated σ allow."
        if large:
            line += f" {large}"
    return [line + gone]


def large_rows(snap: Snapshot) -> str:
    if snap.chi is None:
        return ""
    picked = () if snap.fit is not None else snap.pick
    rows = [i for i in np.argsort(-snap.chi) if snap.inside[i] and snap.chi[i] > LARGE_CHI and i not in picked]
    if not rows:
        return ""
    worst = int(rows[0])
    more = f", {len(rows) - 1} more above {fixed(LARGE_CHI, 0)} σ" if len(rows) > 1 else ""
    return f"Row {snap.numbers[worst]} is off by {fixed(float(snap.chi[worst]), 1)} σ{more}."


def rms(value: float) -> str:
    if not math.isfinite(value):
        return DASH
    return f"{fixed(value, 2 if value < 10 else 1 if value < 1000 else 0)}″"


def what_if_line(snap: Snapshot) -> list[Any]:
    if not snap.what_if:
        return ["No what-if: these are the recorded observations."]
    line: list[Any] = [text(f"What-if: {what_if_words(snap.what_if, snap.center)}.", b=1, dev=1)]
    if snap.chosen is None or snap.recorded is None:
        return line
    before, now = snap.recorded.rms_others_arcsec, snap.chosen.rms_others_arcsec
    if math.isfinite(before) and math.isfinite(now):
        line.append(f" Rms of the other rows {rms(before)} → {rms(now)}. Dashed grey: recorded.")
    else:
        line.append(" Dashed grey: recorded.")
    return line
