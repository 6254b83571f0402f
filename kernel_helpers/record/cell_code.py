"""Python code that repeats what was done by hand.

Everything that comes from a file is written as a Python literal, so that no file name or object name can
become code of its own.
"""

from __future__ import annotations

from collections.abc import Sequence
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
        text = "".join(f"    {line + chr(10)!r}\n" for line in recorded.to_csv_text().splitlines())
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
    return "{" + ", ".join(entries) + "}"


def preliminary_code(
    obs: Any, what_if: Sequence[Any], excluded: Sequence[int], pick: Sequence[int], letter: str | None
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
    """
    out = sorted(int(position) for position in excluded)
    kept = [position for position in range(len(obs)) if position not in out]
    lines = ["import firstarc as fa", "", load_code(obs)]
    if what_if:
        lines.append(f"obs = obs.with_what_if({', '.join(what_if_code(one) for one in what_if)})")
    if out:
        lines.append(f"obs = obs.without({out})")
    numbers = tuple(kept.index(int(position)) for position in pick)
    lines.append(f"pre = fa.preliminary(obs, pick={numbers})")
    lines.append("candidate = pre.best" if letter is None else f"candidate = pre.candidate({letter!r})")
    lines.append("candidate")
    return "\n".join(lines) + "\n"


def what_if_code(what_if: Any) -> str:
    """A ``WhatIf`` as the call that makes it."""
    fields = ("clock_s", "lat_deg", "lon_deg", "height_m")
    parts = [f"{name}={getattr(what_if, name)!r}" for name in fields if getattr(what_if, name)]
    if what_if.station is not None:
        parts.append(f"station={what_if.station!r}")
    if what_if.rows is not None:
        parts.append(f"rows={[int(row) for row in what_if.rows]!r}")
    return f"fa.WhatIf({', '.join(parts)})"
