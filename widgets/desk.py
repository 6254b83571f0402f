"""The Desk: settings in, kernel calls, results out."""

from __future__ import annotations

import operator
import traceback
from collections.abc import Sequence
from dataclasses import replace
from html import escape
from typing import Any

import numpy as np
import traitlets

from firstarc.errors import UsageError
from firstarc.observing.load import load
from firstarc.observing.observations import Observations
from firstarc.observing.what_if import WhatIf
from firstarc.pipeline import METHODS, default_pick
from firstarc.record.cell_code import preliminary_code

from .painting import Painter
from .parts.snapshot import Failure, Snapshot
from .scene import Scene
from .settings import OFFSETS, Settings, checked
from .solving import Solver, what_ifs_of
from .static_view import static_html, static_text


class Desk(Scene):
    """Determine a first orbit by hand: an inline widget over one set of observations.

    Parameters
    ----------
    obs : Observations, path, DataFrame or Table
        What :func:`firstarc.load` takes is loaded first.
    pick : sequence of three int, optional
        Positions of the three observations to start from; chosen for geometry when left out.
    center, stations
        Passed to :func:`firstarc.load` when ``obs`` is not loaded yet.

    Attributes
    ----------
    obs : Observations
        As recorded; what-if offsets are never written into them.
    pick : tuple of int
        Positions of the three chosen observations. Observable, may be set.
    excluded : tuple of int
        Positions of the observations taken out. Observable, may be set.
    what_if : tuple of WhatIf
        Offsets of the sliders. Observable, may be set.
    method : str
        Method of preliminary determination, see :func:`firstarc.preliminary`. Observable, may be set.
    candidate : str or None
        Letter of the root chosen by hand; None takes the best. Observable, may be set.
    preliminary : Preliminary or None
        The present result; None when the settings admit none. Observable.
    fit : OrbitFit or None
        The least-squares orbit over all observations in use; None while a slider is held or when there is none.
        Observable.

    Raises
    ------
    UsageError
        Fewer than three observations, or an unknown keyword.
    """

    pick = traitlets.Any()
    excluded = traitlets.Any(())
    what_if = traitlets.Any(())
    candidate = traitlets.Unicode(None, allow_none=True)
    method = traitlets.Unicode("gauss")
    preliminary = traitlets.Any(None, read_only=True)
    fit = traitlets.Any(None, read_only=True)

    def __init__(
        self,
        obs: Any,
        *,
        pick: Sequence[int] | None = None,
        center: str | None = None,
        stations: Any = None,
        **given: Any,
    ):
        unknown = [name for name in given if name not in ("layout", "tooltip", "tabbable")]
        if unknown:
            raise UsageError(
                f"Desk has no argument {unknown[0]!r}; it takes obs, pick, center, stations and ipywidgets' layout"
            )
        if not isinstance(obs, Observations):
            obs = load(obs, center=center, stations=stations)
        elif center is not None or stations is not None:
            raise UsageError("center and stations belong to fa.load; these observations are loaded already")
        if obs.what_if:
            raise UsageError("give the Desk the recorded observations (obs.recorded); it sets what-ifs itself")
        if len(obs) < 3:
            raise UsageError(f"a preliminary orbit needs three observations, got {len(obs)}")
        self._ready = False
        super().__init__(**given)
        self.obs = obs
        self._solver = Solver(obs)
        self._painter = Painter()
        self._busy = False
        chosen = checked_pick(pick, len(obs)) if pick is not None else default_pick(obs)[0]
        self._in_force = Settings(pick=chosen, station=obs.station_of(chosen[1]).code, row=chosen[1])
        self._snapshot: Snapshot
        self._ready = True
        self._solve()
        self.observe(self._from_browser, "settings")
        self.observe(self._from_python, ["pick", "excluded", "what_if", "candidate", "method"])

    @property
    def best(self) -> Any:
        """The candidate shown; None when there is none."""
        return self._snapshot.chosen

    def code(self) -> str:
        """Python code that repeats what the Desk shows, to the last digit."""
        return self._code(self._in_force)

    def _code(self, settings: Settings) -> str:
        chosen = self._snapshot.chosen
        by_hand = chosen is not None and chosen.letter == settings.candidate
        return preliminary_code(
            self.obs,
            self._snapshot.what_if,
            settings.excluded,
            settings.pick,
            settings.candidate if by_hand else None,
            settings.method,
            self._snapshot.fit_choices,
        )

    def _from_browser(self, change: Any) -> None:
        if self._busy or not change["new"]:
            return
        stations = tuple(site.code for site in self.obs.stations)
        self._in_force = checked(change["new"], self._in_force, len(self.obs), stations)
        self._solve()

    # Values are brought to one form before anybody is told of them, so that linked Desks agree; a value that cannot
    # be used is refused before it is set.

    @traitlets.validate("pick")
    def _valid_pick(self, proposal: Any) -> Any:
        return checked_pick(proposal["value"], len(self.obs)) if self._ready else proposal["value"]

    @traitlets.validate("excluded")
    def _valid_excluded(self, proposal: Any) -> Any:
        if not self._ready:
            return proposal["value"]
        pick = self._in_force.pick
        return tuple(row for row in checked_rows(proposal["value"], len(self.obs)) if row not in pick)

    @traitlets.validate("what_if")
    def _valid_what_if(self, proposal: Any) -> Any:
        if not self._ready:
            return proposal["value"]
        offsets, row_clock = sliders_of(proposal["value"], self.obs)
        return what_ifs_of(replace(self._in_force, offsets=offsets, row_clock=row_clock), self.obs)

    @traitlets.validate("candidate")
    def _valid_candidate(self, proposal: Any) -> Any:
        letter = proposal["value"]
        if self._ready and not self._busy and letter is not None and self.preliminary is not None:
            self.preliminary.candidate(letter)
        return letter

    @traitlets.validate("method")
    def _valid_method(self, proposal: Any) -> Any:
        if proposal["value"] not in METHODS:
            raise UsageError(f"method must be one of {', '.join(map(repr, METHODS))}, got {proposal['value']!r}")
        return proposal["value"]

    def _from_python(self, change: Any) -> None:
        if self._busy:
            return
        name, value = change["name"], change["new"]
        if value is None and name in ("pick", "excluded", "what_if"):
            # traitlets lets None pass unseen
            self._busy = True
            setattr(self, name, change["old"])
            self._busy = False
            raise UsageError(f"expected positions of observations or what-ifs for {name}, got None")
        if name == "what_if":
            offsets, row_clock = sliders_of(value, self.obs)
            self._in_force = replace(self._in_force, offsets=offsets, row_clock=row_clock)
        elif name == "method":
            self._in_force = replace(self._in_force, method=value, candidate=None)
        else:
            self._in_force = replace(self._in_force, **{name: value})
        self._solve()

    def _solve(self) -> None:
        settings = self._in_force
        excluded = tuple(row for row in settings.excluded if row not in settings.pick)
        # a row that Python takes out is no longer kept: the later choice by hand wins
        kept = tuple(row for row in settings.kept if row not in excluded)
        settings = self._in_force = replace(settings, excluded=excluded, kept=kept)
        try:
            self._snapshot = self._solver.snapshot(settings)
            scene, frame = self._painter.paint(self._snapshot, settings, self._code(settings))
        except Exception as error:  # whatever fails is said in the Desk: stale numbers must not stay
            traceback.print_exc()
            self._snapshot = self._without_orbit(settings, error)
            scene, frame = self._painter.paint(self._snapshot, settings, self._code(settings))
        self._busy = True
        try:
            with self.hold_trait_notifications():
                self.pick = settings.pick
                self.excluded = settings.excluded
                self.what_if = self._snapshot.what_if
                self.candidate = settings.candidate
                self.method = settings.method
                self.set_trait("preliminary", self._snapshot.preliminary)
                self.set_trait("fit", self._snapshot.fit)
        finally:
            self._busy = False
        self.show(scene, frame)

    def _without_orbit(self, settings: Settings, error: Exception) -> Snapshot:
        return Snapshot(
            obs=self.obs,
            recorded_obs=self.obs,
            used=np.ones(len(self.obs), dtype=bool),
            pick=settings.pick,
            selected=settings.row,
            preliminary=None,
            chosen=None,
            residuals=None,
            chi=None,
            recorded=None,
            recorded_residuals=None,
            what_if=what_ifs_of(settings, self.obs),
            method=settings.method,
            failure=Failure(
                f"The computation stopped with {type(error).__name__}: {error}.",
                "reset the what-if; the full message is in the notebook's log.",
            ),
        )

    def _repr_mimebundle_(self, **kwargs: Any) -> Any:
        bundle = super()._repr_mimebundle_(**kwargs)
        data, metadata = bundle if isinstance(bundle, tuple) else (bundle, {})
        if data is None:
            return bundle
        return {**data, "text/html": self._kept_html(), "text/plain": self._kept_text()}, metadata

    def _kept_html(self) -> str:
        try:
            return static_html(self.scene, self.frame)
        except Exception as error:  # the widget itself must show whatever becomes of its kept picture
            return f"<p>{escape(no_picture(error))}</p><pre>{escape(self._kept_text())}</pre>"

    def _kept_text(self) -> str:
        try:
            return static_text(self.scene)
        except Exception as error:
            return no_picture(error)


def no_picture(error: Exception) -> str:
    """Why the cell keeps no picture of the Desk."""
    return f"The Desk's kept picture could not be made: {type(error).__name__}: {error}"


def checked_pick(value: Any, count: int) -> tuple[int, int, int]:
    rows = checked_rows(value, count)
    if len(rows) != 3:
        raise UsageError(f"pick must be three different positions from 0 to {count - 1}, got {value!r}")
    return rows[0], rows[1], rows[2]


def checked_rows(value: Any, count: int) -> tuple[int, ...]:
    try:
        rows = tuple(sorted({operator.index(row) for row in value}))
    except TypeError:
        raise UsageError(f"expected positions of observations, got {value!r}") from None
    if rows and not 0 <= rows[0] <= rows[-1] < count:
        raise UsageError(f"positions run from 0 to {count - 1}, got {value!r}")
    return rows


def what_ifs_given(what_if: Any) -> tuple[WhatIf, ...]:
    """What-ifs as a tuple, whether one, several or none were given."""
    ones = (what_if,) if isinstance(what_if, WhatIf) else what_if or ()
    try:
        found = tuple(ones)
    except TypeError:
        found = (ones,)
    if not all(isinstance(one, WhatIf) for one in found):
        raise UsageError(f"what_if must be fa.WhatIf(...) or several of them, got {what_if!r}")
    return found


def sliders_of(what_if: Any, obs: Any) -> tuple[dict[str, dict[str, float]], dict[int, float]]:
    """Offsets per station and per row of a set of what-ifs.

    Raises
    ------
    UsageError
        A what-if moves the station of single rows, which no slider can show.
    """
    ones = what_ifs_given(what_if)
    codes = [site.code for site in obs.stations]
    positions = {int(row): position for position, row in enumerate(obs.rows)}
    offsets: dict[str, dict[str, float]] = {}
    row_clock: dict[int, float] = {}
    for one in ones:
        values = {key: float(getattr(one, key)) for key in OFFSETS}
        if one.rows is not None:
            if any(values[key] for key in OFFSETS if key != "clock_s") or one.station is not None:
                raise UsageError("in the Desk a what-if of single rows moves their time only (clock_s)")
            for row in one.rows:
                if int(row) not in positions:
                    raise UsageError(f"what_if names row {row}; the observations have rows {sorted(positions)}")
                row_clock[positions[int(row)]] = row_clock.get(positions[int(row)], 0.0) + values["clock_s"]
            continue
        if one.station is not None and one.station not in codes:
            raise UsageError(f"what_if names station {one.station!r}; the observations have {', '.join(codes)}")
        for code in codes if one.station is None else [one.station]:
            held = offsets.setdefault(code, {})
            for key, value in values.items():
                if value:
                    held[key] = held.get(key, 0.0) + value
    return offsets, row_clock
