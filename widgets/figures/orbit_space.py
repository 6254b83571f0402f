"""The orbit in space about its body, for a view that can be turned."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from firstarc.widgets.figures.axes import grouped, nice_down
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.geometry import runs
from firstarc.widgets.figures.marks import RowMark
from firstarc.widgets.figures.memory import ScaleMemory
from firstarc.widgets.figures.view_choice import View, chosen_view, extent_px

Array = NDArray[np.float64]

_APSES = {"earth": ("perigee", "apogee"), "sun": ("perihelion", "aphelion")}
#: Words beside the caption that only a view which can be turned needs.
TURN_HINT = "drag or arrow keys turn"
#: An orbit that reaches out more than this many times farther than what was observed is not drawn to its end.
_FAR, _DRAWN = 12.0, 5.0

_ANGLES = np.linspace(0.0, 2.0 * np.pi, 73)
_RING = np.column_stack([np.cos(_ANGLES), np.sin(_ANGLES), np.zeros(73)])


@dataclass(frozen=True)
class SpaceOrbit:
    """An orbit to be drawn.

    Parameters
    ----------
    points : array (m, 3)
        Positions along the orbit, ICRF axes, in the unit of the figure; closed orbits end where they begin.
    seen : array (k, 3) or None
        Positions over the observed arc, drawn thick.
    periapsis, apoapsis : array (3,) or None
        Where the orbit is nearest and farthest; no apoapsis for an open orbit.
    ascending, descending : array (3,) or None
        Where the orbit crosses the reference plane.
    letter : str
        Letter of the candidate.
    """

    points: Array
    seen: Array | None = None
    periapsis: Array | None = None
    apoapsis: Array | None = None
    ascending: Array | None = None
    descending: Array | None = None
    letter: str = ""


@dataclass(frozen=True)
class SpaceRow:
    """An observation in space: where the object was and where the observer stood, same unit."""

    mark: RowMark
    position: Array
    observer: Array


def orbit_space(
    orbit: SpaceOrbit | None,
    rows: Sequence[SpaceRow],
    *,
    center: str,
    unit: str,
    body_radius: float,
    frame: FrameWriter,
    width: float,
    ghost: ArrayLike | None = None,
    others: Sequence[SpaceOrbit] = (),
    earth_orbit: ArrayLike | None = None,
    memory: ScaleMemory | None = None,
    note: str = "",
) -> dict[str, Any] | None:
    """Describe the orbit, the observations and the body as points in space.

    Parameters
    ----------
    orbit : SpaceOrbit or None
        The chosen orbit. None gives no figure.
    rows : sequence of SpaceRow
        All observations; sight lines are drawn for the picked ones.
    center : {"earth", "sun"}
    unit : {"km", "au"}
        Unit of every length.
    body_radius : float
    frame : FrameWriter
    width : float
        Width, px.
    ghost : array (m, 3), optional
        The recorded orbit, dashed.
    others : sequence of SpaceOrbit
        Other candidates, dotted, with their letters.
    earth_orbit : array (m, 3), optional
        The Earth's path about the Sun.
    memory : ScaleMemory, optional
        Keeps view and scale still while a slider is held.
    note : str
        Words beside the caption, before what this function adds.

    Returns
    -------
    dict or None
        A three-dimensional figure.
    """
    if orbit is None:
        return None
    memory = memory or ScaleMemory()
    rows = [row for row in rows if np.isfinite(row.position).all() and np.isfinite(row.observer).all()]
    height = 244.0 if width <= 420.0 else float(round(min(300.0, 0.6 * width)))
    positions = np.array([row.position for row in rows], dtype=float).reshape(-1, 3)
    observers = np.array([row.observer for row in rows], dtype=float).reshape(-1, 3)
    reach, cut = _reach(orbit, positions, observers)
    shown = _within(orbit.points, reach)
    content = np.vstack([*shown, positions, observers]) if shown else np.vstack([positions, observers])
    view = chosen_view(content, positions, body_radius, width, height, memory)
    k = extent_px(width, height) / view.extent

    lines: list[dict[str, Any]] = []
    segs: list[dict[str, Any]] = []
    marks: list[dict[str, Any]] = []
    labels: list[dict[str, Any]] = []

    def draw(css_class: str, points: ArrayLike) -> None:
        offset, count = frame.add(points)
        lines.append({"cls": css_class, "offset": offset, "points": count})

    if center == "earth":
        _graticule(draw, segs, body_radius)
    if earth_orbit is not None:
        earth_points = np.asarray(earth_orbit, dtype=float)
        draw("grat eq", earth_points)
        if float(np.abs(earth_points).max()) * k > 8.0:
            at = earth_points[len(earth_points) // 3]
            labels.append({"cls": "t", "p": _point(at), "text": "Earth's orbit"})
    limit = 2.2 * view.extent
    if ghost is not None:
        for run in _near(np.asarray(ghost, dtype=float), view.middle, limit):
            draw("ghost", run)
    letters = 0
    for other in others:
        drawn = _near(np.asarray(other.points, dtype=float), view.middle, limit)
        for run in drawn:
            draw("alt", run)
        if drawn and other.letter:
            letters += 1
            at = _letter_place(max(drawn, key=len), positions)
            labels.append({"cls": "t strong", "p": at, "text": other.letter})
    for run in shown:
        draw("cv now thin", run)
    if orbit.seen is not None:
        seen = np.asarray(orbit.seen, dtype=float).reshape(-1, 3)
        for run in runs(seen, np.asarray(np.isfinite(seen).all(axis=1))):
            draw("cv now wide", run)
    _nodes(orbit, segs, labels, reach)
    _rows(rows, segs, marks)
    _apses(orbit, center, reach, marks)
    if letters and orbit.letter and shown:
        labels.append({"cls": "t strong", "p": _letter_place(shown[0], positions), "text": orbit.letter})
    tiny = body_radius * k < 1.0
    name = "Earth" if center == "earth" else "Sun"
    if tiny:
        labels.append({"cls": "t", "p": (0.0, 0.0, 0.0), "text": name})
    notes = [note] if note else []
    notes.append(f"{name} a cross, below 1 px" if tiny else f"{name} to scale")
    if cut:
        notes.append("outer part cut")
    notes.append(TURN_HINT)
    bar = nice_down(75.0 / k)
    return {
        "width": width,
        "height": height,
        "label": _finding(orbit, rows, name, cut, tiny),
        "caption": "Orbit",
        "note": ", ".join(notes),
        "middle": _point(view.middle),
        "extent": view.extent,
        "body_radius": body_radius,
        "body": center,
        "view": {"ra_deg": view.ra_deg, "dec_deg": view.dec_deg},
        "lines": lines,
        "marks": marks,
        "labels": labels,
        "segs": segs,
        "scale": {"length": bar, "text": _length(bar, unit)},
    }


def seen_from(view: View | dict[str, float]) -> str:
    """Words for a view direction, as ``seen from RA 2ʰ32ᵐ, Dec +34°``."""
    ra, dec = (view["ra_deg"], view["dec_deg"]) if isinstance(view, dict) else (view.ra_deg, view.dec_deg)
    minutes = round(ra * 4.0) % 1440
    sign = "−" if round(dec) < 0 else "+"
    return f"seen from RA {minutes // 60}ʰ{minutes % 60:02d}ᵐ, Dec {sign}{abs(round(dec))}°"


def _point(p: ArrayLike) -> tuple[float, float, float]:
    x, y, z = np.asarray(p, dtype=float).tolist()
    return (x, y, z)


def _letter_place(points: Array, positions: Array) -> tuple[float, float, float]:
    """Where on an orbit its letter stands: away from the observations and from the body."""
    outer = points[np.linalg.norm(points, axis=1) >= 0.6 * np.linalg.norm(points, axis=1).max()]
    if not len(positions):
        return _point(outer[len(outer) // 2])
    return _point(outer[int(np.argmax(np.linalg.norm(outer - positions.mean(axis=0), axis=1)))])


def _length(value: float, unit: str) -> str:
    decimals = max(0, -int(np.floor(np.log10(value) + 1e-9)))
    return f"{grouped(value, decimals)}\u2009{unit}"


def _reach(orbit: SpaceOrbit, positions: Array, observers: Array) -> tuple[float, bool]:
    """Distance up to which the orbit is drawn, and whether that cuts it."""
    points = np.asarray(orbit.points, dtype=float)
    distance = np.linalg.norm(points[np.isfinite(points).all(axis=1)], axis=1)
    farthest = float(distance.max(initial=0.0))
    near = np.vstack([positions, observers])
    if not len(near):
        return max(farthest, 1.0), False
    seen = float(np.linalg.norm(near, axis=1).max())
    open_orbit = orbit.apoapsis is None
    if open_orbit or farthest > _FAR * seen:
        reach = min(farthest, (2.5 if open_orbit else _DRAWN) * seen)
        return reach, reach < farthest or open_orbit
    return farthest, False


def _within(points: ArrayLike, reach: float) -> list[Array]:
    array = np.asarray(points, dtype=float)
    with np.errstate(invalid="ignore"):
        return runs(array, np.linalg.norm(array, axis=1) <= reach * (1.0 + 1e-9))


def _near(points: Array, middle: Array, limit: float) -> list[Array]:
    with np.errstate(invalid="ignore"):
        return runs(points, np.linalg.norm(points - middle, axis=1) <= limit)


def _graticule(draw: Any, segs: list[dict[str, Any]], radius: float) -> None:
    """Equator, two parallels and the ends of the axis."""
    draw("grat eq", radius * _RING)
    for sine in (-0.70710678, 0.70710678):
        draw("grat", radius * (_RING * np.sqrt(1.0 - sine * sine) + np.array([0.0, 0.0, sine])))
    for sign in (-1.0, 1.0):
        segs.append({"cls": "grat eq", "a": (0.0, 0.0, sign * radius), "b": (0.0, 0.0, sign * 1.25 * radius)})


def _nodes(orbit: SpaceOrbit, segs: list[dict[str, Any]], labels: list[dict[str, Any]], reach: float) -> None:
    ends = [p for p in (orbit.ascending, orbit.descending) if p is not None and np.linalg.norm(p) <= reach * 1.001]
    for end in ends:
        segs.append({"cls": "node", "a": (0.0, 0.0, 0.0), "b": _point(end)})
    if ends:
        longest = max(ends, key=lambda p: float(np.linalg.norm(p)))
        labels.append({"cls": "t", "p": _point(0.6 * np.asarray(longest)), "text": "line of nodes"})


def _rows(rows: Sequence[SpaceRow], segs: list[dict[str, Any]], marks: list[dict[str, Any]]) -> None:
    ordered = sorted(rows, key=lambda row: bool(row.mark.pick))
    for row in ordered:
        mark = row.mark
        if mark.pick:
            segs.append({"cls": "los", "a": _point(row.observer), "b": _point(row.position)})
    for row in ordered:
        mark = row.mark
        marks.append(
            {
                "cls": mark.css_class,
                "shape": mark.shape,
                "p": _point(row.position),
                "r": 3.4 if mark.pick else 2.0,
                "text": str(mark.row) if mark.pick else "",
                "title": mark.title,
            }
        )


def _apses(orbit: SpaceOrbit, center: str, reach: float, marks: list[dict[str, Any]]) -> None:
    for p, word in zip((orbit.periapsis, orbit.apoapsis), _APSES[center], strict=True):
        if p is not None and float(np.linalg.norm(p)) <= reach * 1.001:
            marks.append({"cls": "tick", "shape": "cross", "p": _point(p), "r": 4, "text": word, "title": word})


def _finding(orbit: SpaceOrbit, rows: Sequence[SpaceRow], name: str, cut: bool, tiny: bool) -> str:
    kind = "Open orbit" if orbit.apoapsis is None else "Orbit"
    picked = "-".join(str(row.mark.row) for row in rows if row.mark.pick)
    scale = "drawn as a cross" if tiny else "drawn to scale"
    return (
        f"{kind} about the {name}, {name} {scale}; observed arc thick"
        + (f", sight lines of rows {picked}" if picked else "")
        + (", outer part cut" if cut else "")
        + "."
    )
