"""The order in which candidates are shown, and why each stands where it does."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from .stages import Candidate

#: Names of candidates. Gauss' roots come from the outermost inwards: a root keeps its letter while sliders move.
LETTERS = "ABCDEFGHIJKLMNOPQRSTUVWXYZ"

#: A candidate whose other rows miss this many times more than the best's is ruled out by them in words.
DECISIVE_RATIO = 3.0


#: Chance below which the other observations contradict a candidate, its own uncertainty allowed for.
CHANCE_LIMIT = 0.01


def ranked(candidates: Sequence[Candidate]) -> tuple[Candidate, ...]:
    """Candidates with letters, admissible ones first.

    Those that the other observations do not contradict come before those that they do, then by the rms of all
    observations; an orbit that leaves no observation over is ordered as bound before open, round before eccentric.
    Letters follow the order given; rejected candidates come after the others and keep their reason.
    """
    candidates = [replace(c, letter=LETTERS[min(k, len(LETTERS) - 1)]) for k, c in enumerate(candidates)]
    admissible = sorted((c for c in candidates if c.admissible), key=_order)
    rejected = sorted((c for c in candidates if not c.admissible), key=lambda c: c.letter)
    return (*(replace(c, reason=_reason(c, admissible)) for c in admissible), *rejected)


def contradicted(candidate: Candidate) -> bool:
    """True when the other observations disagree with the orbit beyond its own uncertainty and theirs."""
    return candidate.dof_others > 0 and not candidate.chance_others >= CHANCE_LIMIT


def score(candidate: Candidate) -> float:
    """Rms of all observations, arcsec; infinite where the orbit was made from all of them: it proves nothing then."""
    rms = candidate.converged.rms_arcsec
    return rms if candidate.dof_others > 0 and math.isfinite(rms) else math.inf


def _order(candidate: Candidate) -> tuple[bool, float, bool, float]:
    elements = candidate.elements
    return (
        contradicted(candidate),
        score(candidate),
        elements is None or elements.e >= 1.0,
        math.inf if elements is None else elements.e,
    )


def _reason(candidate: Candidate, admissible: Sequence[Candidate]) -> str:
    remark = "" if not candidate.reason else f"; {candidate.reason}"
    if len(admissible) == 1:
        return f"the only admissible one{remark}"
    best = admissible[0]
    if not math.isfinite(score(candidate)) or not math.isfinite(score(best)):
        where = "first" if candidate is best else "after the others"
        return f"{where} for want of other observations: bound and rounder orbits come first{remark}"
    if contradicted(candidate):
        verdict = "the other observations contradict it"
        return f"{verdict}, the others even more{remark}" if candidate is best else f"{verdict}{remark}"
    if candidate is not best:
        return f"the other observations fit {best.letter} better{remark}"
    if all(map(contradicted, admissible[1:])):
        return f"the other observations agree with it alone{remark}"
    ratio = min(map(score, admissible[1:])) / max(score(candidate), 1e-9)
    decisive = "clearly " if ratio > DECISIVE_RATIO else ""
    return f"the other observations fit it {decisive}best{remark}"
