"""The Desk in every state: its scene can be sent, its picture kept, its code run again."""

from __future__ import annotations

import html
import io
import re
from typing import Any

import numpy as np
import pytest

import firstarc as fa
from desk_driving import check_scene, headline, sent
from firstarc.widgets import desk as desk_module
from firstarc.widgets import static_view
from pipeline.shared_cases import directions_of, frame_of, invented, loaded, with_directions


@pytest.fixture
def desk() -> fa.Desk:
    return fa.Desk(invented())


# -- every state can be sent and kept ----------------------------------------------------------------------------


def arc(codes: list[str], places: dict[str, dict[str, float]], seconds: np.ndarray, flat: bool = False) -> Any:
    """Directions of the invented satellite from invented places, or directions in one plane."""
    stamps = [f"2026-04-17T{20 + int(s) // 3600:02d}:{int(s) // 60 % 60:02d}:{s % 60:05.2f}" for s in seconds]
    rows = "".join(
        f"{stamp},{(10 + 3 * k) % 360},0,1,{code}\n" for k, (stamp, code) in enumerate(zip(stamps, codes, strict=True))
    )
    text = "time_utc,ra_deg,dec_deg,sigma_arcsec,station\n" + rows
    obs = fa.load(io.StringIO(text), center="earth", stations=places)
    state = fa.preliminary(invented()).best.state
    return obs if flat else with_directions(obs, directions_of(state, obs))


ONE = {"A": dict(lon_deg=10.0, lat_deg=40.0, height_m=100.0)}
EIGHT = {f"S{k}": dict(lon_deg=8.0 + 2.0 * k, lat_deg=44.0 - k, height_m=100.0 * k) for k in range(8)}
TIMES = np.linspace(3100.0, 6700.0, 9)


def states() -> dict[str, Any]:
    return {
        "satellite": invented,
        "minor planet": lambda: invented("MINOR_PLANET"),
        "several candidates": lambda: loaded("sh-molniya-90min", "s1"),
        "two candidates about the Sun": lambda: loaded("sh-venus-week", "s1"),
        "not determined": lambda: loaded("real-1977ub"),
        "parabolic": lambda: loaded("sh-comet-parabolic", "n0"),
        "two nights": lambda: loaded("sh-geo-2nights", "s1"),
        "three": lambda: invented()[[0, 4, 8]],
        "one plane": lambda: arc(["E"] * 5, {"E": dict(lon_deg=0.0, lat_deg=0.0, height_m=0.0)}, TIMES[:5], flat=True),
        "one time": lambda: arc(["A"] * 5, ONE, np.full(5, 3200.0)),
        "a time twice": lambda: arc(["A"] * 5, ONE, np.array([3200.0, 3200.0, 4000.0, 5000.0, 6000.0])),
        "pole": lambda: arc(["P"] * 9, {"P": dict(lon_deg=0.0, lat_deg=90.0, height_m=10.0)}, TIMES),
        "200": lambda: arc(["A"] * 200, ONE, np.linspace(3100.0, 6700.0, 200)),
        "eight stations": lambda: arc([f"S{k % 8}" for k in range(24)], EIGHT, np.linspace(3100.0, 6700.0, 24)),
    }


def check_kept(desk: fa.Desk) -> None:
    check_scene(desk)
    data, _ = desk._repr_mimebundle_()
    assert data["text/html"].count("<table") >= 2 and "text/plain" in data


#: States of many rows or several starts; the others show the same in less time.
HEAVY = ("several candidates", "two candidates about the Sun", "two nights", "eight stations")


@pytest.mark.parametrize("name", [pytest.param(n, marks=[pytest.mark.slow] * (n in HEAVY)) for n in states()])
def test_every_state_can_be_sent_and_kept(name: str, capsys: Any) -> None:
    desk = fa.Desk(states()[name]())
    station = desk.obs.stations[0].code
    steps: list[dict[str, Any]] = [
        {},
        {"offsets": {station: {"clock_s": 0.35, "lat_deg": 0.003}}, "row_clock": {"1": -0.02}, "row": 1},
        {"estimate": f"clock:{station}", "offsets": {}, "row_clock": {}, "kept": [1], "excluded": [0]},
        {"held": True, "widths": {"residuals": 300, "sky": 130, "orbit": 800, "root": 121}},
    ]
    for step in steps:
        sent(desk, **step)
        check_kept(desk)
        assert not desk.scene["settings"]["held"] or desk.fit is None
    assert "Traceback" not in capsys.readouterr().err, "nothing may fail unforeseen"


@pytest.mark.slow
@pytest.mark.parametrize("name", states())
def test_the_code_of_every_state_gives_the_same(name: str, capsys: Any) -> None:
    desk = fa.Desk(states()[name]())
    station = desk.obs.stations[0].code
    steps: list[dict[str, Any]] = [
        {},
        {"offsets": {station: {"clock_s": 0.35, "lat_deg": 0.003}}},
        {"row_clock": {"1": -0.02}, "row": 1},
        {"excluded": [row for row in range(len(desk.obs)) if row not in desk.pick], "offsets": {}},
        {"excluded": [], "pick": [0, 1, 2], "row_clock": {}, "kept": [len(desk.obs) - 1], "method": "auto"},
        {"method": "gauss", "kept": []},
        {"offsets": {station: {"lon_deg": 170.0, "height_m": 1e7}}, "pick": list(desk.pick)},
        {"offsets": {}, "held": True},
    ]
    for step in steps:
        sent(desk, **step)
        check_kept(desk)
        namespace: dict[str, Any] = {}
        if desk.best is not None:
            exec(desk.code(), namespace)
            assert namespace["candidate"].converged == desk.best.converged
            assert namespace.get("fit") == desk.fit
    assert "Traceback" not in capsys.readouterr().err, "nothing may fail unforeseen"


def test_rejected_all_keeps_the_reasons() -> None:
    desk = fa.Desk(loaded("sh-geo-2nights", "n0"), pick=(0, 3, 5))
    scene = check_scene(desk)
    assert desk.best is None and desk.preliminary is not None
    (row,) = scene["candidates"]["rows"]
    assert row["reason"].startswith("rejected: slant range negative") and not row["admissible"]
    assert scene["candidates"]["note"] == "1 positive root, none admissible"
    assert scene["figures"]["root"] is not None and scene["figures"]["residuals"] is not None
    assert "each root below keeps its reason" in headline(desk)[1]
    assert fa.Desk(loaded("sh-geo-2nights", "n0")).scene["ok"]


def test_a_station_over_the_pole_is_named() -> None:
    desk = fa.Desk(states()["pole"]())
    sent(desk, offsets={"P": {"lat_deg": 0.003}})
    assert headline(desk)[0].endswith("latitude of station 'P' becomes 90.0030 deg; keep it from -90 to 90 deg.")
    assert headline(desk)[1].startswith("Remedy: reset the what-if")
    sent(desk, offsets={"P": {"lat_deg": -0.003}})
    assert desk.scene["ok"]


def test_one_time_is_named() -> None:
    desk = fa.Desk(states()["one time"]())
    assert "have the same time" in headline(desk)[0]


# -- what stays in the cell --------------------------------------------------------------------------------------


def test_the_kept_picture_has_the_same_numbers(desk: fa.Desk) -> None:
    sent(desk, offsets={"BRN": {"clock_s": 0.1}})
    data, _ = desk._repr_mimebundle_()
    assert "application/vnd.jupyter.widget-view+json" in data
    seen = html.unescape(re.sub(r"<[^>]*>", "", data["text/html"].split("</style>")[1]))
    for row in desk.scene["orbit"]["rows"]:
        for cell in row["cells"]:
            assert cell["whole"] + cell["fraction"] in seen
    for row in desk.scene["observations"]["rows"]:
        for key in ("time", "ra", "dec", "oc_ra", "oc_dec"):
            assert row[key] in seen and row[key] in data["text/plain"]
    assert desk.code() in seen


def test_hostile_text_is_escaped_in_the_cell() -> None:
    hostile = '<script>alert("x")</script><img src=x onerror=alert(1)>'
    frame = frame_of(invented(), name=hostile)
    frame["station_name"] = hostile
    desk = fa.Desk(frame, center="earth")
    data, _ = desk._repr_mimebundle_()
    assert "<script" not in data["text/html"] and "<img" not in data["text/html"]
    assert html.escape(hostile) in data["text/html"]
    assert desk.scene["title"] == hostile, "the browser sets it as text"
    assert hostile in desk.scene["what_if"]["stations"][0]["label"]


def test_warnings_of_the_input_are_shown() -> None:
    obs = loaded("real-1977ub")
    desk = fa.Desk(obs)
    assert desk.scene["warnings"] == list(obs.warnings) and obs.warnings
    assert html.escape(obs.warnings[0]) in desk._repr_mimebundle_()[0]["text/html"]


# -- when the kept picture cannot be made ------------------------------------------------------------------------


def broken(*args: Any, **given: Any) -> str:
    raise KeyError("a <b>bold</b> key")


def test_the_widget_shows_though_its_picture_cannot_be_made(desk: fa.Desk, monkeypatch: Any) -> None:
    monkeypatch.setattr(desk_module, "static_html", broken)
    data, _ = desk._repr_mimebundle_()
    assert data["application/vnd.jupyter.widget-view+json"]["model_id"] == desk.model_id
    assert "picture could not be made: KeyError: " in data["text/html"]
    assert "<b>bold" not in data["text/html"] and "&lt;b&gt;bold" in data["text/html"]
    assert html.escape(data["text/plain"]) in data["text/html"], "the determination itself is kept as text"
    assert desk.code() in data["text/plain"]


def test_neither_picture_nor_text(desk: fa.Desk, monkeypatch: Any) -> None:
    monkeypatch.setattr(desk_module, "static_html", broken)
    monkeypatch.setattr(desk_module, "static_text", broken)
    data, _ = desk._repr_mimebundle_()
    assert "application/vnd.jupyter.widget-view+json" in data
    assert data["text/plain"].startswith("The Desk's kept picture could not be made: KeyError: ")
    assert "<b>bold" not in data["text/html"]


def test_a_tree_without_a_style_sheet_shows_the_widget(desk: fa.Desk, monkeypatch: Any, tmp_path: Any) -> None:
    monkeypatch.setattr(static_view, "_CSS_FILE", tmp_path / "desk.css")
    static_view._desk_css.cache_clear()
    data, _ = desk._repr_mimebundle_()
    static_view._desk_css.cache_clear()
    assert "application/vnd.jupyter.widget-view+json" in data
    assert "desk.css is missing" in data["text/html"] and "npm run build" in data["text/html"]
