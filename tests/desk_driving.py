"""The Desk driven as a browser would, and its scene read and checked."""

from __future__ import annotations

import json
import re
from typing import Any

import numpy as np

import firstarc as fa


def sent(desk: fa.Desk, **changes: Any) -> dict[str, Any]:
    """What the browser does: the settings in force, changed and numbered anew."""
    desk.settings = {**desk.scene["settings"], "seq": desk.scene["seq"] + 1, **changes}
    return desk.scene


def words(line: list[Any]) -> str:
    return "".join(run if isinstance(run, str) else run["t"] for run in line)


def headline(desk: fa.Desk) -> list[str]:
    return [words(line) for line in desk.scene["headline"]]


def check_scene(desk: fa.Desk) -> dict[str, Any]:
    """JSON without NaN, and every polyline inside the frame and finite."""
    scene = desk.scene
    text = json.dumps(scene, allow_nan=False)
    shown = re.sub(r"nanometre", "", text)
    assert not re.search(r"\b(nan|inf|NaN|None)\b", shown), re.findall(r".{40}\b(?:nan|inf|NaN|None)\b.{10}", shown)
    frame = np.frombuffer(desk.frame, dtype="<f4")
    assert np.isfinite(frame).all()
    flat = [figure for figure in scene["figures"].values() if figure and "items" in figure]
    for figure in flat:
        for item in figure["items"]:
            if item[0] == "line":
                assert item[2] >= 0 and item[2] + 2 * item[3] <= len(frame)
            numbers = [value for value in item if isinstance(value, int | float)]
            assert np.isfinite(numbers).all()
    space = scene["figures"]["orbit"]
    for line in space["lines"] if space else ():
        assert line["offset"] >= 0 and line["offset"] + 3 * line["points"] <= len(frame)
    assert len(scene["headline"]) == 3
    assert scene["ok"] == (desk.best is not None)
    return scene


def number(text: str) -> float:
    """A number as shown."""
    return float(text.replace("−", "-").replace("\u202f", "").strip("()<±×"))


def shown(cell: dict[str, Any]) -> float:
    """The number in a cell of the orbit table."""
    return number(cell["whole"] + cell["fraction"])


def unit_of_last_place(cell: dict[str, Any], sigma: dict[str, Any]) -> float:
    """Value of the last digit shown; tens or hundreds follow from the zeros at the end of the sigma."""
    if cell["fraction"]:
        return float(10.0 ** -(len(cell["fraction"]) - 1))
    return float(10.0 ** (len(sigma["whole"]) - len(sigma["whole"].rstrip("0"))))


def orbit_rows(desk: fa.Desk) -> dict[str, dict[str, Any]]:
    return {row["key"]: row for row in desk.scene["orbit"]["rows"]}


def element_values(elements: Any) -> dict[str, float]:
    """What the element rows of the orbit table show, in their units, straight from the elements."""
    earth = elements.center == "earth"
    return {
        "a": elements.a_km if earth else elements.a_au,
        "e": elements.e,
        "i": elements.i_deg,
        "node": elements.node_deg,
        "argp": elements.argp_deg,
        "M": elements.M_deg,
        "q": elements.periapsis_height_km if earth else elements.q_au,
        "P": elements.period_s / (60.0 if earth else 365.25 * 86400.0),
    }
