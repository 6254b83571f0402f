"""Python code that repeats what was done by hand.

Everything that comes from a file is written as a Python literal, so that no file name or object name can
become code of its own.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any


def load_code(obs: Any) -> str:
    """Code that gives these observations again.

    From a file: its path and the arguments given to ``load``. From a DataFrame or Table: the rows themselves as
    CSV text, every number to its last digit.
    """
    recorded = obs.recorded
    arguments = [f"center={recorded.center!r}"]
    if recorded.directions != "astrometric":
        arguments.append(f"directions={recorded.directions!r}")
    if recorded.source.path is None:
        # only the line feed ends a line here: str.splitlines would also cut a cell at U+2028 or a form feed
        text = "".join(f"    {line + chr(10)!r}\n" for line in recorded.to_csv_text().split("\n")[:-1])
        return f"import io\n\nobs = fa.load(io.StringIO(\n{text}), {', '.join(arguments)})"
    if recorded.source.stations:
        arguments.insert(1, f"stations={station_literal(recorded.source.stations)}")
    code = f"obs = fa.load({str(recorded.source.path)!r}, {', '.join(arguments)})"
    rows = [int(row) for row in recorded.rows]
    if rows != list(range(recorded.source.count)):
        code += f"[{rows}]"
    return code


def station_literal(stations: Sequence[Any]) -> str:
    """Stations given by hand, as the mapping that ``load`` takes."""
    entries = []
    for site in stations:
        values = f"lon_deg={site.lon_deg!r}, lat_deg={site.lat_deg!r}, height_m={site.height_m!r}, name={site.name!r}"
        entries.append(f"{site.code!r}: dict({values})")
    return "{\n" + "".join(f"    {entry},\n" for entry in entries) + "}"


def preliminary_code(
    obs: Any,
    what_if: Sequence[Any],
    excluded: Sequence[int],
    pick: Sequence[int],
    letter: str | None,
    method: str = "gauss",
    fit: Mapping[str, Any] | None = None,
) -> str:
    """Code that repeats a preliminary determination.

    Parameters
    ----------
    obs : Observations
        As given to the Desk.
    what_if : sequence of WhatIf
    excluded : sequence of int
        Positions in ``obs`` taken out.
    pick : sequence of int
        Positions in ``obs`` of the pick; rewritten as positions after the exclusions.
    letter : str or None
        The candidate chosen by hand; None for the best.
    method : str
        As given to ``preliminary``.
    fit : mapping, optional
        ``keep``, ``leave_out`` (positions in ``obs``) and ``reject`` of the fit that follows; None for no fit.
    """
    out = sorted(int(position) for position in excluded)
    kept = [position for position in range(len(obs)) if position not in out]
    lines = ["import firstarc as fa", "", load_code(obs)]
    if what_if:
        renumbered = _row_numbers_of_code(obs)
        lines.append(f"obs = obs.with_what_if({', '.join(what_if_code(one, renumbered) for one in what_if)})")
    numbers = tuple(kept.index(int(position)) for position in pick)
    way = "" if method == "gauss" else f", method={method!r}"
    of = f"obs.without({out})" if out else "obs"
    lines.append(f"pre = fa.preliminary({of}, pick={numbers}{way})")
    lines.append("candidate = pre.best" if letter is None else f"candidate = pre.candidate({letter!r})")
    if fit is None:
        lines.append("candidate")
    else:
        usual = {"keep": [], "leave_out": [], "reject": True}
        given = {**usual, **fit, "keep": [int(i) for i in fit["keep"]], "leave_out": [int(i) for i in fit["leave_out"]]}
        options = "".join(f", {name}={given[name]!r}" for name in usual if given[name] != usual[name])
        start = "pre" if letter is None else "candidate"
        lines += [f"fit = fa.fit(obs, start={start}{options})", "fit"]
    return "\n".join(lines) + "\n"


def _row_numbers_of_code(obs: Any) -> dict[int, int]:
    """Row numbers of these observations, and those that the loading code gives the same rows."""
    rows = [int(row) for row in obs.rows]
    # rows written out as text are counted anew; those of a file keep their numbers
    return {row: row if obs.source.path is not None else position for position, row in enumerate(rows)}


def what_if_code(what_if: Any, renumbered: Mapping[int, int] | None = None) -> str:
    """A ``WhatIf`` as the call that makes it; ``renumbered`` gives its rows other numbers."""
    fields = ("clock_s", "lat_deg", "lon_deg", "height_m")
    parts = [f"{name}={getattr(what_if, name)!r}" for name in fields if getattr(what_if, name)]
    if what_if.station is not None:
        parts.append(f"station={what_if.station!r}")
    if what_if.rows is not None:
        rows = [int(row) for row in what_if.rows]
        parts.append(f"rows={[row if renumbered is None else renumbered.get(row, row) for row in rows]!r}")
    return f"fa.WhatIf({', '.join(parts)})"
