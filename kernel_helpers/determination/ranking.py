"""The order in which candidates are shown, and why each stands where it does."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from .stages import Candidate

#: A candidate whose other rows miss this many times more than the best's is ruled out by them in words.
DECISIVE_RATIO = 3.0


def ranked(candidates: Sequence[Candidate]) -> tuple[Candidate, ...]:
    """Admissible candidates first: by the rms of the other observations, else bound orbits before open ones.

    Rejected ones follow from the outermost root inwards and keep their reason.
    """
    admissible = sorted((c for c in candidates if c.admissible), key=_order)
    rejected = sorted((c for c in candidates if not c.admissible), key=lambda c: c.letter)
    return (*(replace(c, reason=_reason(c, admissible)) for c in admissible), *rejected)


def _order(candidate: Candidate) -> tuple[float, bool, float]:
    elements = candidate.elements
    rms = candidate.rms_others_arcsec
    return (
        rms if math.isfinite(rms) else math.inf,
        elements is None or elements.e >= 1.0,
        math.inf if elements is None else elements.e,
    )


def _reason(candidate: Candidate, admissible: Sequence[Candidate]) -> str:
    remark = "" if not candidate.reason else f"; {candidate.reason}"
    if len(admissible) == 1:
        return f"the only admissible root{remark}"
    best = admissible[0]
    rms = candidate.rms_others_arcsec
    if not math.isfinite(rms) or not math.isfinite(best.rms_others_arcsec):
        where = "first" if candidate is best else "after the others"
        return f"{where} for want of other observations: bound and rounder orbits come first{remark}"
    if candidate is best:
        second = min(c.rms_others_arcsec for c in admissible[1:])
        ratio = second / rms if rms > 0.0 else math.inf
        decisive = "clearly " if ratio > DECISIVE_RATIO else ""
        return f"the other observations fit it {decisive}best{remark}"
    return f"the other observations fit {best.letter} better{remark}"
