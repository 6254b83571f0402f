"""May the orbit be believed? Verdicts in words with number, limit and margin."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

from scipy.special import chdtrc

from firstarc.determination.orbit_fit import OrbitFit
from firstarc.determination.stages import Candidate
from firstarc.report.rounding import MINUS, fixed, scientific, significant
from firstarc.results import Code

from .observation_table import angle
from .snapshot import DETERMINED_LIMIT, Snapshot

#: The determinant of the three lines of sight counts as different from zero from this many of its own sigmas.
DETERMINANT_LIMIT = 10.0
#: Probability below which chi-square is called inconsistent with the stated sigmas.
CHANCE_LIMIT = 0.01


def checks(snap: Snapshot, bar: Callable[[float], dict[str, Any]]) -> list[dict[str, Any]]:
    """The checks that apply. ``bar`` draws a margin (1 is the limit)."""
    found = [determinant_check(snap)]
    if snap.chosen is not None:
        chosen = snap.chosen
        first = determined_check(snap, chosen) if snap.fit is None else fit_check(snap.fit)
        found = [first, *found, rule_check(snap, chosen), coplanarity_check(chosen)]
        found += residual_checks(chosen) if snap.fit is None else fit_residual_checks(snap.fit)
    return [
        {**one, "margin": margin_text(one["margin"]), "bar": bar(one["margin"])} for one in found if one is not None
    ]


def check(verdict: str, words: str, margin: float, *, fails: bool) -> dict[str, Any]:
    return {"verdict": verdict, "text": words, "margin": margin, "fails": fails}


def margin_text(margin: float) -> str:
    if not math.isfinite(margin):
        return ""
    if margin < 0.01 or margin >= 1e5:
        return "×" + scientific(margin, 1)
    return "×" + (significant(margin, 2) if margin < 100 else fixed(margin, 0))


def determined_check(snap: Snapshot, chosen: Candidate) -> dict[str, Any]:
    row = snap.numbers[snap.pick[1]]
    limit = f"limit {fixed(100 * DETERMINED_LIMIT, 0)} %"
    relative = snap.relative_range_sigma
    if not math.isfinite(relative):
        return check("Not determined", f"slant range at row {row} has no sigma; {limit}", math.nan, fails=True)
    known = f"slant range at row {row} known to {percent(relative)} %, {limit}"
    holds = snap.determined
    return check("Determined" if holds else "Not determined", known, DETERMINED_LIMIT / relative, fails=not holds)


def fit_check(fit: OrbitFit) -> dict[str, Any]:
    """Do the observations fix one orbit? The first question of the fit that is answered with no decides."""
    judged = fit.verdicts
    size = judged.conditioned
    known = f"weakest direction known to {percent(size.number)} % of distance and speed, limit {percent(size.limit)} %"
    margin = size.limit / size.number if size.number > 0 else math.nan
    if fit.determined:
        return check("Determined", known, margin, fails=False)
    for one in (judged.converged, judged.redundant):
        if not one.ok:
            return check("Not determined", one.sentence, math.nan, fails=True)
    if not judged.conditioned.ok:
        return check("Not determined", known, margin, fails=True)
    if not judged.single.ok:
        return check("Not determined", judged.single.sentence, math.nan, fails=True)
    return check("Not determined", judged.linear.sentence, judged.linear.limit / judged.linear.number, fails=True)


def fit_residual_checks(fit: OrbitFit) -> list[dict[str, Any]]:
    if fit.dof < 1:
        words = "no more observed numbers than unknowns: nothing tests the sigmas"
        return [check("No redundancy", words, math.nan, fails=False)]
    head = f"χ² {chi2_words(fit.chi2)} for {fit.dof} degrees of freedom"
    return [verdict_on_residuals(head, float(chdtrc(fit.dof, fit.chi2)))]


def chi2_words(value: float) -> str:
    """A chi-square to three digits, with a power of ten where it is very small or very large."""
    return significant(value, 3) if 1e-3 <= value < 1e6 else scientific(value)


def percent(fraction: float) -> str:
    value = 100.0 * fraction
    return significant(value, 1 if value < 0.95 else 2) if value < 1e4 else "more than 10 000"


def determinant_check(snap: Snapshot) -> dict[str, Any] | None:
    pre = snap.preliminary
    if pre is None or not math.isfinite(pre.determinant):
        return None
    # three times the same line: the determinant is zero, and so is its sigma
    sigma = pre.determinant_sigma
    margin = abs(pre.determinant) / sigma / DETERMINANT_LIMIT if sigma > 0.0 else 0.0
    holds = margin >= 1.0
    size = scientific(pre.determinant, 3).replace("-", MINUS)
    words = f"determinant {size}, σ {scientific(pre.determinant_sigma)}, limit {fixed(DETERMINANT_LIMIT, 0)} σ"
    return check("Lines not coplanar" if holds else "Lines coplanar", words, margin, fails=not holds)


def rule_check(snap: Snapshot, chosen: Candidate) -> dict[str, Any] | None:
    stage = chosen.gibbs
    if stage.status.code is Code.NOT_ATTEMPTED:
        return None
    if stage.state is None:
        return check("No correction", str(stage.status), math.nan, fails=True)
    first, second = (angle(value) for value in stage.separations_deg)
    sides = f"sides {first}, {second}"
    errors = dict(stage.predicted_error_km_s)
    other = "Herrick-Gibbs" if stage.rule == "Gibbs" else "Gibbs"
    verdict = f"{stage.rule} better".replace("-", "–")
    if errors and all(math.isfinite(value) for value in errors.values()):
        mine, theirs = errors[stage.rule], errors[other]
        words = f"{sides}: {speed(mine)}, {other.replace('-', '–')} {speed(theirs)}; {textbook(stage.separations_deg)}"
        return check(verdict, words, theirs / mine if mine > 0 else math.nan, fails=False)
    return check(f"{stage.rule} chosen".replace("-", "–"), f"{sides}: {stage.rule_reason}", math.nan, fails=False)


def speed(km_s: float) -> str:
    """A velocity error in the unit that reads best."""
    return f"{significant(km_s, 2)} km/s" if km_s >= 1.0 else f"{significant(km_s * 1000.0, 2)} m/s"


def textbook(separations: tuple[float, float]) -> str:
    """What the textbook angles say: Herrick-Gibbs below 1 degree, Gibbs above 5, either between (see rule.py)."""
    least = min(separations)
    if least > 5.0:
        return "angle rule: Gibbs"
    return "angle rule: Herrick–Gibbs" if least < 1.0 else "angle rule: either"


def coplanarity_check(chosen: Candidate) -> dict[str, Any] | None:
    stage = chosen.gibbs
    if not math.isfinite(stage.coplanarity_deg):
        return None
    words = f"{fixed(abs(stage.coplanarity_deg), 3)}° by construction: a test only with measured positions"
    return check("Positions coplanar", words, math.nan, fails=False)


def residual_checks(chosen: Candidate) -> list[dict[str, Any]]:
    if chosen.dof_others == 0 or not math.isfinite(chosen.chi2_others):
        words = "no other sighting: three directions leave no redundancy, so nothing tests the sigmas"
        return [check("No redundancy", words, math.nan, fails=False)]
    head = f"other rows: χ² {chi2_words(chosen.chi2_others)} for {chosen.dof_others} degrees of freedom"
    return [verdict_on_residuals(head, chosen.chance_others)]


def verdict_on_residuals(head: str, chance: float) -> dict[str, Any]:
    """Chi-square against the stated sigmas, on both sides."""
    limit = f"limit {significant(CHANCE_LIMIT, 1)}"
    if chance < CHANCE_LIMIT:
        shown = scientific(chance, 1) if chance > 1e-12 else "below 10⁻¹²"
        margin = max(chance, 1e-12) / CHANCE_LIMIT
        return check("Residuals above σ", f"{head}, chance {shown}, {limit}", margin, fails=True)
    if chance > 1.0 - CHANCE_LIMIT:
        words = f"{head}, chance {fixed(chance, 4)}: smaller than the stated sigmas allow"
        return check("Residuals below σ", words, (1.0 - chance) / CHANCE_LIMIT, fails=False)
    words = f"{head}, chance {fixed(chance, 2)}, {limit}"
    return check("Residuals match σ", words, chance / CHANCE_LIMIT, fails=False)
