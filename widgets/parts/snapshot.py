"""One consistent picture of a determination, from which every view of the Desk is made."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firstarc.determination.orbit_fit import Estimate, OrbitFit
from firstarc.determination.preliminary import Preliminary
from firstarc.determination.stages import Candidate
from firstarc.determination.state import State

#: Stations are told apart by shape, never by colour; further stations repeat the shapes beside their code.
SHAPES = ("circle", "triangle", "square", "diamond", "down", "plus")

#: Relative sigma of the middle slant range up to which an orbit is called determined.
DETERMINED_LIMIT = 0.05
#: Beyond this the first-order sigmas mean nothing and are not shown.
LINEAR_LIMIT = 0.30
#: Size of a residual, in sigmas, from which it is set in bold.
LARGE_CHI = 4.0


@dataclass(frozen=True)
class Failure:
    """Why there is no orbit, and what to do about it."""

    sentence: str
    remedy: str
    drop_row: int | None = None


@dataclass(frozen=True)
class Snapshot:
    """Everything that the views need, computed together.

    Rows are positions in the Desk's observations, excluded ones included.

    Attributes
    ----------
    obs : Observations
        All rows, what-if applied.
    recorded_obs : Observations
        All rows as recorded.
    used : ndarray of bool, shape (n,)
        Not taken out by hand.
    pick : tuple of int
    selected : int
    preliminary : Preliminary or None
    chosen : Candidate or None
    residuals, recorded_residuals : ndarray, shape (n, 2), or None
        O-C in arcsec under the least-squares orbit at rest, under the chosen candidate while a slider is held; and
        the same without what-if.
    chi : ndarray, shape (n,), or None
    recorded : Candidate or None
        The candidate that the same choices give without what-if.
    what_if : tuple of WhatIf
    method : str
    failure : Failure or None
    fit, recorded_fit : OrbitFit or None
        The least-squares orbit over all rows in use, and the one without what-if; None while a slider is held.
    fit_problem : str
        Why there is no fit at rest.
    fit_choices : dict or None
        Arguments of ``fit`` beside observations and start.
    held : bool
    estimated : tuple of Estimate
        Offsets that were asked to be estimated from the recorded observations; ``estimate_words`` says what came of it.
    """

    obs: Any
    recorded_obs: Any
    used: NDArray[np.bool_]
    pick: tuple[int, int, int]
    selected: int
    preliminary: Preliminary | None
    chosen: Candidate | None
    residuals: NDArray[np.float64] | None
    chi: NDArray[np.float64] | None
    recorded: Candidate | None
    recorded_residuals: NDArray[np.float64] | None
    what_if: tuple[Any, ...]
    method: str
    failure: Failure | None
    fit: OrbitFit | None = None
    recorded_fit: OrbitFit | None = None
    fit_problem: str = ""
    held: bool = False
    fit_choices: dict[str, Any] | None = None
    estimated: tuple[Estimate, ...] = ()
    estimate_words: str = ""

    @property
    def inside(self) -> NDArray[np.bool_]:
        """Rows in use: those of the fit, or all that were not taken out by hand."""
        return self.used if self.fit is None else self.fit.used

    @property
    def shown_state(self) -> State | None:
        """State of the orbit that figures draw: least squares at rest, else the chosen candidate's."""
        if self.fit is not None:
            return self.fit.state
        return None if self.chosen is None else self.chosen.state

    @property
    def recorded_state(self) -> State | None:
        """The same without what-if."""
        if self.fit is not None:
            return None if self.recorded_fit is None else self.recorded_fit.state
        return None if self.recorded is None else self.recorded.state

    @property
    def center(self) -> str:
        return str(self.obs.center)

    @cached_property
    def numbers(self) -> list[int]:
        """Row numbers as shown: the row of the loaded input, from 1."""
        return [int(row) + 1 for row in self.obs.rows]

    @property
    def pick_numbers(self) -> str:
        numbers = self.numbers
        return "·".join(str(numbers[position]) for position in self.pick)

    @property
    def relative_range_sigma(self) -> float:
        """Sigma of the slant range at the middle observation over the range; NaN without an orbit."""
        if self.chosen is None:
            return float("nan")
        return float(self.chosen.sigma_range_km / abs(self.chosen.ranges_km[1]))

    @property
    def determined(self) -> bool:
        return bool(self.relative_range_sigma <= DETERMINED_LIMIT)

    @property
    def shows_sigma(self) -> bool:
        return bool(self.relative_range_sigma <= LINEAR_LIMIT)

    @cached_property
    def codes(self) -> list[str]:
        """Station code of every row."""
        sites, index = self.obs.records.sites, self.obs.records.site_index
        return [sites[k].code for k in index]

    @cached_property
    def shapes(self) -> list[str]:
        """Shape of every row's station, given out in the order of appearance."""
        order = {code: k for k, code in enumerate(dict.fromkeys(self.codes))}
        return [SHAPES[order[code] % len(SHAPES)] for code in self.codes]

    @cached_property
    def sigma_arcsec(self) -> NDArray[np.float64]:
        """Stated sigmas (n, 2): RA times cos Dec, Dec."""
        return np.asarray(np.degrees(self.obs.sight_lines.sigma_rad) * 3600.0)


def text(value: str, **marks: Any) -> dict[str, Any]:
    """A run of text with marks: k (one line), b (bold), dev (what-if colour), sub, em, act."""
    return {"t": value, **marks}
