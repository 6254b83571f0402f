"""The result of a preliminary orbit determination: every root, ranked, with its reasons."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..constants import AU_KM, EARTH_RADIUS_KM
from ..errors import UsageError
from ..preliminary.methods import METHODS
from ..report.rounding import DASH, fixed, scientific, significant, with_sigma
from ..results import Result, Status
from .elements import reference_axes
from .stages import Candidate


@dataclass(frozen=True, eq=False, repr=False)
class Preliminary(Result):
    """Preliminary orbits through three of the observations.

    Attributes
    ----------
    pick : tuple of int
        Positions in the observations of the three used, in the order of time.
    pick_rows : tuple of int
        Rows of the loaded input, counted from 1 as in tables and in the Desk.
    pick_reason : str
    method : str
    tried : tuple of (str, str)
        For ``method="auto"``: each method tried, with the reason and what it gave.
    sample : RangingSample or None
        Weighted orbits of the method "ranging".
    status : Status
    candidates : tuple of Candidate
        Every positive root: admissible ones first, best first; rejected ones keep their reason.
    roots_km : ndarray
        All positive roots of the eighth-degree equation, ascending.
    coefficients : tuple of float
        a (km2), b (km5), c (km8) of x^8 + a x^6 + b x^3 + c = 0, x in km.
    unit_km : float
        A length of the order of the roots; with x in units of it the coefficients are of order one.
    determinant : float
        Triple product of the three (unit) lines of sight.
    determinant_sigma : float
        Its sigma from the stated sigmas of the observations.
    separations_deg : tuple of float
        Angles between the first and second, and second and third, lines of sight.
    center : {"earth", "sun"}
    """

    pick: tuple[int, int, int]
    pick_rows: tuple[int, int, int]
    pick_reason: str
    method: str
    tried: tuple[tuple[str, str], ...]
    status: Status
    candidates: tuple[Candidate, ...]
    sample: Any
    roots_km: NDArray[np.float64]
    coefficients: tuple[float, float, float]
    unit_km: float
    determinant: float
    determinant_sigma: float
    separations_deg: tuple[float, float]
    center: str

    @property
    def best(self) -> Candidate | None:
        """The first admissible candidate; None when every root is rejected (``status`` says why)."""
        return next((c for c in self.candidates if c.admissible), None)

    def candidate(self, letter: str) -> Candidate:
        """The candidate of that letter.

        Raises
        ------
        UsageError
            There is none.
        """
        for candidate in self.candidates:
            if candidate.letter == letter:
                return candidate
        known = ", ".join(c.letter for c in self.candidates) or "none"
        raise UsageError(f"letter must be one of {known}, got {letter!r}")

    def report_lines(self) -> list[Any]:
        numbers = " · ".join(str(row) for row in self.pick_rows)
        first, second = (fixed(angle, 2) for angle in self.separations_deg)
        lines: list[Any] = [
            f"Preliminary orbit, method {METHODS[self.method].label}, rows {numbers} (pick={self.pick}): "
            f"{self.pick_reason}",
            *(f"Tried {label}: {outcome}" for label, outcome in self.tried),
            str(self.status),
            f"lines of sight {first}° and {second}° apart, determinant {scientific(self.determinant)}"
            f" with sigma {scientific(self.determinant_sigma)}",
        ]
        unit, scale = ("km", 1.0) if self.center == "earth" else ("au", AU_KM)
        if self.candidates:
            units = (f"r {unit}", f"slant ranges {unit}", f"a {unit}")
            table = [["candidate", "method", *units, "e", "rms others ″", "verdict"]]
            for c in self.candidates:
                elements, sigmas = c.elements, c.sigmas
                sigma = c.sigma_range_km / scale
                table.append(
                    [
                        c.letter,
                        METHODS[c.method].label,
                        significant(c.root_km / scale, 5),
                        " · ".join(to_sigma(x / scale, sigma) for x in c.ranges_km),
                        DASH if elements is None else to_sigma(elements.a_km / scale, sigmas and sigmas.a_km / scale),
                        DASH if elements is None else to_sigma(elements.e, sigmas and sigmas.e),
                        DASH if elements is None else significant(c.rms_others_arcsec, 3),
                        ("admissible: " if c.admissible else "rejected: ") + c.reason,
                    ]
                )
            lines.append(table)
        if self.sample is not None:
            lines += sample_lines(self.sample, self.center)
        if self.best is not None:
            lines += self.best.report_lines()
        return lines


def sample_lines(sample: Any, center: str) -> list[Any]:
    """What a weighted sample of orbits says: 5, 50 and 95 per cent of it, no orbit to use."""
    if not sample.status.ok or not np.isfinite(sample.best.state).all():
        return [str(sample.status)]
    summary = sample.summary(reference_axes(center))
    unit, scale = ("km", 1.0) if center == "earth" else ("au", AU_KM)
    names = [("a", "a_km", unit, scale), ("e", "e", "", 1.0), ("i", "i_rad", "°", math.pi / 180.0)]
    names += [("q" if center == "sun" else "perigee height", "q_km", unit, scale)]
    names += [("slant range", "range_km", unit, scale)]
    if center == "earth":
        summary = {**summary, "q_km": summary["q_km"] - EARTH_RADIUS_KM}
    rows = [["of the sample", "5 %", "50 %", "95 %", "unit"]]
    for name, key, word, size in names:
        rows.append([name, *(significant(float(x) / size, 3) for x in summary[key]), word])
    return [f"{sample.status} {sample.assumption}", rows]


def to_sigma(value: float, sigma: float | None) -> str:
    """A value to the place of its sigma, four significant digits without one."""
    return with_sigma(value, sigma).partition(" ±")[0]
