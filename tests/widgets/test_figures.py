"""Figure geometry: what is drawn lies where the numbers say, labels keep clear, scales hold still."""

from __future__ import annotations

import json
import math
import re
from itertools import combinations, pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firstarc.widgets.figures import (
    FrameWriter,
    Root,
    RowMark,
    ScaleMemory,
    Track,
    convergence,
    margin_bar,
    residuals,
    root_function,
    sky_track,
)
from firstarc.widgets.figures.axes import (
    declination_ticks,
    hour_ticks,
    linear_ticks,
    nice_down,
    nice_up,
    time_of_day_ticks,
)
from firstarc.widgets.figures.frame import points_of
from firstarc.widgets.figures.geometry import clipped
from firstarc.widgets.figures.labels import text_width

SHAPES = ("circle", "triangle", "square", "diamond", "down", "plus")


def items_of(figure: dict[str, Any], kind: str, css: str | None = None) -> list[Any]:
    return [item for item in figure["items"] if item[0] == kind and (css is None or item[1] == css)]


def text_boxes(figure: dict[str, Any], css: str | None = None) -> list[tuple[float, float, float, float, str]]:
    out = []
    for _, cls, x, y, anchor, text in items_of(figure, "text", css):
        width = text_width(text, "strong" in cls)
        left = x - (0.0 if anchor == "start" else width if anchor == "end" else width / 2)
        out.append((left, y - 8.0, left + width, y + 2.0, text))
    return out


def overlapping(boxes: list[tuple[float, float, float, float, str]]) -> list[tuple[str, str]]:
    return [
        (a[4], b[4])
        for a, b in combinations(boxes, 2)
        if a[0] < b[2] - 0.5 and a[2] > b[0] + 0.5 and a[1] < b[3] - 0.5 and a[3] > b[1] + 0.5
    ]


def row_marks(n: int, stations: int = 1, step_s: float = 60.0) -> list[RowMark]:
    picks = {0: 1, n // 2: 2, n - 1: 3}
    return [
        RowMark(i + 1, step_s * i, f"S{i * stations // n}", SHAPES[i * stations // n], True, picks.get(i, 0))
        for i in range(n)
    ]


# ---- the frame


def test_frame_gives_back_what_was_added() -> None:
    frame = FrameWriter()
    first, second = np.arange(8.0).reshape(4, 2), np.arange(9.0).reshape(3, 3)
    places = [frame.add(first), frame.add(second)]
    data = frame.to_bytes()
    assert places == [(0, 4), (8, 3)]
    assert len(data) == 4 * 17
    assert np.array_equal(points_of(data, 0, 4, 2), first)
    assert np.array_equal(points_of(data, 8, 3, 3), second)


@pytest.mark.parametrize("points", [np.zeros(4), np.zeros((2, 4)), [[0.0, math.nan]], [[math.inf, 0.0]]])
def test_frame_refuses_what_cannot_be_painted(points: Any) -> None:
    with pytest.raises(ValueError, match="points of a line"):
        FrameWriter().add(points)


# ---- axes


@given(st.floats(1e-9, 1e12))
def test_nice_values_bracket_the_value(value: float) -> None:
    up, down = nice_up(value), nice_down(value)
    assert down * (1 - 1e-9) <= value <= up * (1 + 1e-9)
    assert up / down <= 2.5 * (1 + 1e-9)
    mantissa = up / 10.0 ** math.floor(math.log10(up) + 1e-9)
    assert min(abs(mantissa - m) for m in (1, 2, 5)) < 1e-6


@given(st.floats(-360, 720), st.floats(1e-5, 300), st.integers(2, 6))
def test_hour_labels_read_back_as_their_right_ascension(low: float, span: float, target: int) -> None:
    for value, text in hour_ticks(low, low + span, target):
        assert low - 1e-6 <= value <= low + span + 1e-6
        h, m, s = (re.search(rf"([\d.]+){sign}", text) for sign in "ʰᵐˢ")
        read = sum(float(x.group(1)) * f for x, f in ((h, 15.0), (m, 0.25), (s, 1 / 240)) if x)
        assert abs((read - value + 180.0) % 360.0 - 180.0) < 1e-6


@given(st.floats(-90, 89), st.floats(1e-5, 170), st.integers(2, 6))
def test_declination_labels_read_back(low: float, span: float, target: int) -> None:
    for value, text in declination_ticks(low, min(low + span, 90.0), target):
        d, m, s = (re.search(rf"([\d.]+){sign}", text) for sign in "°′″")
        read = sum(float(x.group(1)) / f for x, f in ((d, 1.0), (m, 60.0), (s, 3600.0)) if x)
        assert abs((-read if text.startswith("−") else read) - value) < 1e-6


def test_labels_of_times_cross_midnight() -> None:
    assert time_of_day_ticks(86390.0, 86410.0, 2) == [
        (86390.0, "23:59:50"),
        (86400.0, "00:00:00"),
        (86410.0, "00:00:10"),
    ]


def test_linear_ticks_carry_the_digits_of_their_step() -> None:
    assert linear_ticks(-0.05, 0.05, 5, sign=True) == [
        (pytest.approx(-0.04), "−0.04"),
        (pytest.approx(-0.02), "−0.02"),
        (0.0, "0.00"),
        (pytest.approx(0.02), "+0.02"),
        (pytest.approx(0.04), "+0.04"),
    ]


# ---- cutting lines

_coordinate = st.floats(-20, 20).map(lambda v: round(v, 3))


@given(st.lists(st.tuples(_coordinate, _coordinate), min_size=2, max_size=12))
def test_clipped_lines_keep_exactly_the_length_inside(points: list[tuple[float, float]]) -> None:
    line, box = np.array(points), (-5.0, -5.0, 5.0, 5.0)
    pieces = clipped(line, box)
    for piece in pieces:
        assert (np.abs(piece) <= 5.0 + 1e-9).all()
    # Against fine sampling of every segment.
    share = (np.arange(2000) + 0.5) / 2000
    expected = 0.0
    for a, b in pairwise(line):
        samples = a + share[:, None] * (b - a)
        expected += np.hypot(*(b - a)) * float((np.abs(samples) <= 5.0).all(axis=1).mean())
    drawn = sum(float(np.hypot(*np.diff(piece, axis=0).T).sum()) for piece in pieces)
    assert drawn == pytest.approx(expected, abs=0.03 * len(points))


def test_a_line_that_leaves_and_comes_back_is_cut_in_the_middle() -> None:
    line = np.array([[0, 0], [0, 6], [0, 0.0]])
    assert [piece.tolist() for piece in clipped(line, (-5, -5, 5, 5))] == [[[0, 0], [0, 5]], [[0, 5], [0, 0]]]


def test_a_line_is_broken_where_it_has_no_value() -> None:
    line = np.array([[0, 0], [1, 0], [np.nan, np.nan], [2, 0], [3, 0.0]])
    assert [piece.tolist() for piece in clipped(line, (-5, -5, 5, 5))] == [[[0, 0], [1, 0]], [[2, 0], [3, 0]]]


# ---- schema


def _schema_fields(root: Path, interface: str) -> set[str]:
    text = (root / "widgets/frontend/src/schema/scene.ts").read_text(encoding="utf-8")
    body = re.search(rf"export interface {interface} \{{(.*?)\n\}}", text, re.S)
    assert body, f"{interface} is not in the schema"
    plain = re.sub(r"/\*.*?\*/|//[^\n]*", "", body.group(1), flags=re.S)
    plain = re.sub(r"\{[^{}]*\}", "x", plain)
    return set(re.findall(r"(\w+)\??:", plain))


def test_figures_have_the_fields_that_the_browser_expects(build_scene: Any, project_root: Path) -> None:
    scene, _ = build_scene(ghost=True)
    flat = [scene["figures"][name] for name in ("residuals", "sky", "root")] + [scene["orbit"]["convergence"]]
    flat += [check["bar"] for check in scene["checks"]]
    for figure in flat:
        assert set(figure) == _schema_fields(project_root, "Figure")
    assert set(scene["figures"]["orbit"]) == _schema_fields(project_root, "Figure3D")
    json.dumps(scene, allow_nan=False)


def test_items_are_finite_and_lines_lie_in_the_frame(build_scene: Any) -> None:
    scene, data = build_scene(ghost=True)
    lengths = {"line": 4, "seg": 6, "mark": 7, "text": 6, "rect": 6, "circle": 5}
    for figure in [scene["figures"][name] for name in ("residuals", "sky", "root")]:
        for item in figure["items"]:
            assert len(item) == lengths[item[0]]
            assert all(math.isfinite(v) for v in item[2:] if isinstance(v, (int, float)))
            if item[0] == "line":
                points = points_of(data, item[2], item[3], 2)
                assert (points[:, 0] >= -1).all() and (points[:, 0] <= figure["width"] + 1).all()
    for line in scene["figures"]["orbit"]["lines"]:
        assert points_of(data, line["offset"], line["points"], 3).shape == (line["points"], 3)


# ---- residuals


def test_residuals_lie_at_their_value_on_the_scale(sample: Any) -> None:
    figure = residuals(sample.rows, sample.oc, sample.sigma, frame=FrameWriter(), width=480)
    marks = items_of(figure, "mark")
    ticks = {item[5]: item[3] - 4.0 for item in items_of(figure, "text", "t") if item[4] == "end"}
    del ticks["row"]
    assert len(marks) == 2 * len(sample.rows)
    # Both strips carry the same labels, so the dictionary holds the lower strip: declination.
    tick = float(next(text for text in ticks if text.startswith("+")))
    px = (ticks["0"] - ticks[f"+{tick:.0f}"]) / tick
    for mark, (_, ddec), row in zip(marks[len(sample.rows) :], sample.oc, sample.rows, strict=True):
        if row.used:
            assert mark[4] == pytest.approx(ticks["0"] - ddec * px, abs=0.11)


def test_a_residual_off_the_scale_stays_at_the_edge_with_its_number(sample: Any) -> None:
    figure = residuals(sample.rows, sample.oc, sample.sigma, frame=FrameWriter(), width=480)
    texts = [item[5] for item in items_of(figure, "text")]
    assert "(+10.7)" in texts and "(−3.8)" in texts
    assert len(items_of(figure, "line", "off")) == 2
    hollow = items_of(figure, "mark", "mk now h")
    assert [mark[3] for mark in hollow] == [hollow[0][3]] * 2


@pytest.mark.parametrize("n", [3, 9, 40, 200])
@pytest.mark.parametrize("width", [360, 480, 868])
def test_texts_of_residuals_do_not_overlap_and_are_not_cut(n: int, width: int) -> None:
    rng = np.random.default_rng(n)
    oc = rng.normal(size=(n, 2)) * 3
    oc[n // 3] = [40.0, -700.0]
    figure = residuals(row_marks(n, 3), oc, np.ones((n, 2)), frame=FrameWriter(), width=width)
    boxes = text_boxes(figure)
    assert overlapping(boxes) == []
    assert all(left >= -0.5 and right <= width + 0.5 for left, _, right, _, _ in boxes)
    picked = [item[5] for item in items_of(figure, "text", "t strong") if item[3] > figure["height"] - 12]
    assert picked == [str(row.row) for row in row_marks(n) if row.pick]


def test_rows_are_placed_in_order_of_time() -> None:
    rows = [RowMark(1, 300.0, "A"), RowMark(2, 0.0, "A"), RowMark(3, 100.0, "A")]
    figure = residuals(rows, np.ones((3, 2)), np.ones((3, 2)), frame=FrameWriter(), width=480)
    numbers = [(item[2], item[5]) for item in items_of(figure, "text") if item[5] in "123" and item[3] > 300]
    assert [text for _, text in sorted(numbers)] == ["2", "3", "1"]


def test_without_an_orbit_there_are_no_marks(sample: Any) -> None:
    figure = residuals(sample.rows, None, sample.sigma, frame=FrameWriter(), width=480)
    assert items_of(figure, "mark") == []
    assert "no orbit" in figure["label"]


def test_large_residuals_are_read_in_degrees() -> None:
    figure = residuals(row_marks(5), np.full((5, 2), 7200.0 * 9), np.ones((5, 2)), frame=FrameWriter(), width=480)
    texts = [item[5] for item in items_of(figure, "text")]
    assert "Dec, °" in texts
    ticks = [float(text) for text in texts if re.fullmatch(r"\+\d+", text)]
    assert ticks and all(tick == int(tick) for tick in ticks)


# ---- scales hold still


def test_a_held_scale_never_shrinks_and_grows_by_three() -> None:
    memory = ScaleMemory()
    assert memory.settle("s", 1.8, nice_up) == 2.0
    memory.held = True
    assert memory.settle("s", 0.01, nice_up) == 2.0
    assert memory.settle("s", 1.99, nice_up) == 2.0
    assert memory.settle("s", 2.1, nice_up) == 10.0
    assert memory.settle("s", 0.1, nice_up) == 10.0
    memory.held = False
    assert memory.settle("s", 0.1, nice_up) == 0.1


@given(st.lists(st.floats(0.01, 1000), min_size=2, max_size=30))
def test_a_held_scale_grows_at_most_once_per_factor_of_three(wanted: list[float]) -> None:
    memory = ScaleMemory()
    scales = [memory.settle("s", wanted[0], nice_up)]
    memory.held = True
    scales += [memory.settle("s", value, nice_up) for value in wanted[1:]]
    for before, after in pairwise(scales):
        assert after == before or after >= 3.0 * before * (1 - 1e-9)
    assert scales[-1] >= max(wanted) * (1 - 1e-9)


def test_ticks_of_residuals_stay_while_dragging(sample: Any) -> None:
    memory = ScaleMemory()

    def ticks(factor: float) -> list[str]:
        figure = residuals(sample.rows, sample.oc * factor, sample.sigma, frame=FrameWriter(), width=480, memory=memory)
        return [item[5] for item in items_of(figure, "text", "t") if item[4] == "end" and item[5] != "row"]

    rest = ticks(1.0)
    memory.held = True
    assert ticks(0.1) == rest
    grown = ticks(4.0)
    assert grown != rest
    assert ticks(1.0) == grown
    memory.held = False
    assert ticks(1.0) == rest


# ---- sky track


def test_right_ascension_increases_to_the_left_and_declination_upward(sample: Any) -> None:
    figure = sky_track(sample.rows, sample.ra_dec_deg, sample.oc, sample.tracks(), frame=FrameWriter(), width=366)
    xy = np.array([mark[3:5] for mark in items_of(figure, "mark")])
    ra, dec = sample.ra_dec_deg.T
    assert np.corrcoef(ra, xy[:, 0])[0, 1] == pytest.approx(-1.0, abs=1e-5)
    assert np.corrcoef(dec, xy[:, 1])[0, 1] == pytest.approx(-1.0, abs=1e-5)


def test_arrows_have_the_stated_magnification(sample: Any) -> None:
    figure = sky_track(sample.rows, sample.ra_dec_deg, sample.oc, [], frame=FrameWriter(), width=366)
    marks = np.array([mark[3:5] for mark in items_of(figure, "mark")])
    key = next(item[5] for item in items_of(figure, "text") if item[5].startswith("residual ×"))
    factor, size = re.fullmatch(r"residual ×([\d\u2009]+): ([\d.]+)″", key).groups()  # type: ignore[union-attr]
    slope = np.polyfit(sample.ra_dec_deg[:, 1], marks[:, 1], 1)[0]
    px_per_arcsec = -slope / 3600.0 * float(factor.replace("\u2009", ""))
    segments = items_of(figure, "seg", "vec")
    bar = segments[-1]
    assert bar[4] - bar[2] == pytest.approx(px_per_arcsec * float(size), rel=0.01)
    for segment, (dra, ddec), row in zip(segments[:-1], sample.oc, sample.rows, strict=True):
        if row.used:
            assert segment[4] - segment[2] == pytest.approx(-dra * px_per_arcsec, abs=0.25)
            assert segment[5] - segment[3] == pytest.approx(-ddec * px_per_arcsec, abs=0.25)


@pytest.mark.parametrize(("n", "span"), [(3, 2.0), (12, 0.01), (40, 8.0), (40, 60.0)])
def test_numbers_and_names_on_the_sky_keep_clear_of_each_other(n: int, span: float) -> None:
    rng = np.random.default_rng(n)
    x = np.linspace(-1, 1, n)
    places = np.column_stack([(359.9 + span * x) % 360.0, -30 + 0.4 * span * x * x])
    fine = np.linspace(-1.1, 1.1, 120)
    tracks = [
        Track(f"S{k}", SHAPES[k], (359.9 + span * fine) % 360.0, -30 + 0.4 * span * fine**2, 10, 110) for k in range(2)
    ]
    figure = sky_track(row_marks(n, 2), places, rng.normal(size=(n, 2)), tracks, frame=FrameWriter(), width=366)
    boxes = text_boxes(figure)
    assert overlapping(boxes) == []
    assert all(left >= -1 and right <= 367 and top >= 0 and low <= 245 for left, top, right, low, _ in boxes)
    shown = {item[5] for item in items_of(figure, "text", "t strong")}
    assert {str(row.row) for row in row_marks(n) if row.pick} <= shown


def test_an_arc_through_zero_hours_is_drawn_in_one_piece() -> None:
    ra = np.array([358.0, 359.0, 0.0, 1.0, 2.0])
    places = np.column_stack([ra, np.zeros(5)])
    figure = sky_track(row_marks(5), places, None, [], frame=FrameWriter(), width=366)
    x = np.array([mark[3] for mark in items_of(figure, "mark")])
    assert np.ptp(np.diff(x)) < 0.2
    assert (np.diff(x) < 0).all()


def test_an_arc_over_the_pole_is_drawn_in_a_conformal_projection() -> None:
    """Crossing the pole along a great circle: a straight line, with residual arrows turned as the sky is."""
    dec = np.array([80.0, 85.0, 89.0, 85.0, 80.0])
    ra = np.array([30.0, 30.0, 30.0, 210.0, 210.0])
    oc = np.zeros((5, 2))
    oc[:, 1] = 1.0
    figure = sky_track(row_marks(5), np.column_stack([ra, dec]), oc, [], frame=FrameWriter(), width=366)
    assert "stereographic" in figure["note"]
    xy = np.array([mark[3:5] for mark in items_of(figure, "mark")])
    along = xy[-1] - xy[0]
    across = np.abs(np.cross(np.append(along, 0), np.c_[xy - xy[0], np.zeros(5)])[:, 2]) / np.hypot(*along)
    assert across.max() < 0.2
    arrows = np.array([item[2:6] for item in items_of(figure, "seg", "vec")[:-1]])
    directions = arrows[:, 2:] - arrows[:, :2]
    # North is towards the pole from either side.
    assert directions[0] @ along > 0 > directions[-1] @ along


def test_a_wide_track_is_drawn_zenithal_and_a_narrow_one_is_not() -> None:
    ra = np.linspace(100.0, 240.0, 7)
    wide = sky_track(row_marks(7), np.c_[ra, np.zeros(7)], None, [], frame=FrameWriter(), width=366)
    narrow = sky_track(row_marks(7), np.c_[ra / 2, np.zeros(7)], None, [], frame=FrameWriter(), width=366)
    assert "stereographic" in wide["note"] and narrow["note"] == ""


@pytest.mark.parametrize("n", [0, 1, 2])
def test_few_rows_and_equal_rows_are_drawn(n: int) -> None:
    rows = [RowMark(i + 1, 0.0, "A") for i in range(n)]
    places, oc = np.tile([120.0, 35.0], (n, 1)), np.zeros((n, 2))
    for residual in (oc, None, oc * np.nan):
        sky = sky_track(rows, places, residual, [], frame=FrameWriter(), width=366)
        strips = residuals(rows, residual, np.ones((n, 2)), frame=FrameWriter(), width=480)
        assert len(items_of(sky, "mark")) == n
        assert len(items_of(strips, "mark")) == (2 * n if residual is oc else 0)
        json.dumps([sky, strips], allow_nan=False)


def test_a_row_without_a_residual_leaves_the_others() -> None:
    oc = np.array([[0.0, 1.0], [np.nan, np.nan], [2.0, 0.0], [0.0, -1.0]])
    rows = row_marks(4)
    places = np.column_stack([np.arange(4.0), np.arange(4.0)])
    sky = sky_track(rows, places, oc, [], frame=FrameWriter(), width=366)
    strips = residuals(rows, oc, np.ones((4, 2)), frame=FrameWriter(), width=480)
    assert len(items_of(sky, "mark")) == 4
    assert len(items_of(sky, "seg", "vec")) == 3 + 1
    assert len(items_of(strips, "mark")) == 6


def test_labels_stay_in_place_while_dragging(sample: Any) -> None:
    memory = ScaleMemory()

    def numbers(factor: float) -> list[Any]:
        figure = sky_track(
            sample.rows,
            sample.ra_dec_deg,
            sample.oc * factor,
            sample.tracks(0.02 * factor),
            frame=FrameWriter(),
            width=366,
            memory=memory,
        )
        return [item for item in items_of(figure, "text") if re.fullmatch(r"\d+|[A-Z]{3} .", item[5])]

    numbers(1.0)
    memory.held = True
    rest = numbers(1.0)
    assert len(rest) == len(sample.rows) + 2
    assert numbers(0.2) == rest and numbers(2.5) == rest


# ---- root function, convergence, margins


def test_the_curve_crosses_the_axis_at_every_root(sample: Any) -> None:
    frame = FrameWriter()
    r, values = sample.root_values()
    figure = root_function(r, values, sample.roots(), unit="km", frame=frame, width=230, body_radius=6378.0)
    marks = items_of(figure, "mark")
    zero = marks[0][4]
    _, _, offset, count = items_of(figure, "line")[0]
    line = points_of(frame.to_bytes(), offset, count, 2)
    crossing = np.flatnonzero(np.diff(np.sign(zero - line[:, 1])) != 0)
    assert [round(float(x)) for x in sorted(mark[3] for mark in marks)] == pytest.approx(
        line[crossing, 0].tolist(), abs=1.5
    )
    assert [(mark[1], mark[2]) for mark in marks] == [("xx", "x"), ("xx", "x"), ("mk now u", "circle")]
    assert len(items_of(figure, "rect", "solid")) == 1


def test_no_positive_root_is_said() -> None:
    r = np.linspace(5e3, 5e4, 100)
    figure = root_function(r, r**2, [], unit="km", frame=FrameWriter(), width=230)
    assert "no positive root" in figure["label"]
    assert items_of(figure, "mark") == []


def test_double_roots_keep_their_letters_apart() -> None:
    r = np.linspace(0.3, 4.0, 300)
    roots = [Root("A", 1.0, True, True), Root("B", 1.001, True)]
    figure = root_function(r, (r - 1.0) * (r - 1.001), roots, unit="au", frame=FrameWriter(), width=230)
    letters = [item for item in items_of(figure, "text", "t strong")]
    assert [item[5] for item in letters] == ["A", "B"]
    assert letters[1][2] - letters[0][2] >= 9.0


def test_convergence_is_drawn_on_a_log_scale() -> None:
    steps = [("Gauss estimate", 1000.0), ("Gibbs", 100.0), ("step 1", 0.1), ("step 2", 1e-6)]
    figure = convergence(steps, 1.0, frame=FrameWriter())
    y = [mark[4] for mark in items_of(figure, "mark")]
    per_decade = (y[1] - y[0]) / 1.0
    assert (y[2] - y[1]) / 3.0 == pytest.approx(per_decade, abs=0.1)
    assert (y[3] - y[2]) / 5.0 == pytest.approx(per_decade, abs=0.1)
    sigma = items_of(figure, "seg", "gl")[0]
    assert sigma[3] == pytest.approx(y[0] + 3 * per_decade, abs=0.3)
    assert overlapping(text_boxes(figure)) == []
    assert "10⁻⁶" in [item[5] for item in items_of(figure, "text")]


@pytest.mark.parametrize("count", [1, 2, 5, 12, 40])
def test_convergence_labels_keep_clear(count: int) -> None:
    steps = [(f"step {k}", 10.0 ** (4 - k * 14 / count)) for k in range(count)]
    figure = convergence(steps, 2.0, frame=FrameWriter())
    boxes = text_boxes(figure)
    assert overlapping(boxes) == []
    assert all(left >= 0 and right <= figure["width"] for left, _, right, _, _ in boxes)
    assert all(0 <= mark[4] <= figure["height"] for mark in items_of(figure, "mark"))


@given(st.floats(1e-12, 1e12))
def test_margin_stands_right_of_the_limit_when_it_holds(margin: float) -> None:
    figure = margin_bar(margin)
    (mark,) = items_of(figure, "mark")
    (limit,) = items_of(figure, "seg", "lim")
    if margin >= 1.0:
        assert mark[1] == "mk now u" and mark[2] == "circle" and mark[3] >= limit[2]
    else:
        assert mark[1] == "mk dev h" and mark[2] == "diamond" and mark[3] <= limit[2]
    assert 5.0 <= mark[3] <= 145.0


def test_all_margins_share_one_log_scale() -> None:
    x = [items_of(margin_bar(m), "mark")[0][3] for m in (0.1, 1.0, 10.0, 100.0)]
    assert np.diff(x) == pytest.approx([25.55] * 3, abs=0.1)
    assert items_of(margin_bar(None), "mark") == []
    assert len(margin_bar(1e9)["items"]) > len(margin_bar(10.0)["items"])
