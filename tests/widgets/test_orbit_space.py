"""The orbit in space: it fits its view, keeps still while dragging, and is cut where it is open."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from firstarc.widgets.figures import (
    FrameWriter,
    RowMark,
    ScaleMemory,
    SpaceOrbit,
    SpaceRow,
    orbit_space,
)
from firstarc.widgets.figures.frame import points_of


def _project(figure: dict[str, Any], points: np.ndarray) -> np.ndarray:
    """The projection that the schema states, written out independently of the package."""
    ra, dec = math.radians(figure["view"]["ra_deg"]), math.radians(figure["view"]["dec_deg"])
    v = np.array([math.cos(dec) * math.cos(ra), math.cos(dec) * math.sin(ra), math.sin(dec)])
    right = np.array([-math.sin(ra), math.cos(ra), 0.0])
    up = np.cross(v, right)
    k = (min(figure["width"], figure["height"] - 24) / 2 - 14) / figure["extent"]
    q = np.asarray(points) - np.asarray(figure["middle"])
    return np.c_[figure["width"] / 2 + k * q @ right, (figure["height"] - 24) / 2 - k * q @ up]


def test_the_whole_orbit_fits_the_default_view_and_is_seen_well(sample: Any) -> None:
    frame = FrameWriter()
    figure = orbit_space(
        sample.orbit(),
        sample.space_rows(),
        center="earth",
        unit="km",
        body_radius=6378.137,
        frame=frame,
        width=366,
    )
    assert figure is not None
    xy = _project(figure, sample.orbit().points)
    assert (xy >= 0).all() and (xy[:, 0] <= 366).all() and (xy[:, 1] <= figure["height"] - 24).all()
    # The picture shows the ellipse open, not edge-on.
    x, y = xy.T
    area = 0.5 * abs(float(np.sum(x[:-1] * np.diff(y) - y[:-1] * np.diff(x))))
    true_axes = 24518.0, 24518.0 * math.sqrt(1 - 0.69999**2)
    k = (min(366, figure["height"] - 24) / 2 - 14) / figure["extent"]
    assert area > 0.5 * math.pi * true_axes[0] * true_axes[1] * k * k
    words = [mark["text"] for mark in figure["marks"]]
    assert "perigee" in words and "apogee" in words
    assert [word for word in words if word.isdigit()] == ["3", "5", "8"]


def test_an_open_orbit_is_cut_and_has_no_apoapsis() -> None:
    anomaly = np.radians(np.linspace(-130, 130, 400))
    r = 1.0 * 2.2 / (1 + 1.2 * np.cos(anomaly))
    points = np.c_[r * np.cos(anomaly), r * np.sin(anomaly), 0.3 * r * np.sin(anomaly)]
    rows = [
        SpaceRow(mark, points[195 + 5 * i], np.array([1.0, 0.1 * i, 0.0]))
        for i, mark in enumerate(RowMark(k + 1, 60.0 * k, "AAA", pick=k + 1) for k in range(3))
    ]
    frame = FrameWriter()
    orbit = SpaceOrbit(points, periapsis=points[200])
    figure = orbit_space(orbit, rows, center="sun", unit="au", body_radius=0.00465, frame=frame, width=366)
    assert figure is not None
    line = next(line for line in figure["lines"] if line["cls"] == "cv now thin")
    drawn = points_of(frame.to_bytes(), line["offset"], line["points"], 3)
    farthest_seen = max(float(np.linalg.norm([row.position, row.observer], axis=1).max()) for row in rows)
    assert np.linalg.norm(drawn, axis=1).max() <= 2.5 * farthest_seen * 1.001
    words = {mark["text"] for mark in figure["marks"]}
    assert "perihelion" in words and "aphelion" not in words
    assert "outer part cut" in figure["note"]
    assert "below 1 px" in figure["note"]


def test_view_and_scale_stay_while_dragging(sample: Any) -> None:
    memory = ScaleMemory()

    def view(turn_deg: float) -> tuple[Any, ...]:
        c, s = math.cos(math.radians(turn_deg)), math.sin(math.radians(turn_deg))
        turn = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1.0]])
        orbit = SpaceOrbit(sample.orbit().points @ turn.T, apoapsis=np.zeros(3))
        figure = orbit_space(
            orbit, sample.space_rows(), center="earth", unit="km", body_radius=6378.137, frame=FrameWriter(),
            width=366, memory=memory,
        )  # fmt: skip
        assert figure is not None
        return figure["view"], figure["extent"], figure["middle"]

    rest = view(0.0)
    memory.held = True
    assert view(3.0) == rest and view(-6.0) == rest
    memory.held = False
    # At rest the scale follows, the direction only for a clearly better one.
    assert view(3.0)[0] == rest[0] and view(3.0)[1:] != rest[1:]
    assert view(90.0)[0] != rest[0]


@pytest.mark.parametrize("inclination", [0.0, 23.4, 63.4, 90.0, 116.0])
def test_every_inclination_gets_a_view_with_a_north(sample: Any, inclination: float) -> None:
    turn = math.radians(inclination - 24.6)
    m = np.array([[1, 0, 0], [0, math.cos(turn), -math.sin(turn)], [0, math.sin(turn), math.cos(turn)]])
    orbit = SpaceOrbit(sample.orbit().points @ m.T, apoapsis=np.zeros(3))
    figure = orbit_space(orbit, [], center="earth", unit="km", body_radius=6378.137, frame=FrameWriter(), width=300)
    assert figure is not None
    assert -90.0 < figure["view"]["dec_deg"] < 90.0
    xy = _project(figure, orbit.points)
    assert (xy >= 0).all() and (xy[:, 0] <= 300).all()


def test_no_orbit_gives_no_figure() -> None:
    assert orbit_space(None, [], center="earth", unit="km", body_radius=1.0, frame=FrameWriter(), width=366) is None
