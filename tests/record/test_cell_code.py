"""The code that the Desk writes gives the same result again, whatever was done and whatever things are called."""

from __future__ import annotations

import ast
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import firstarc as fa
from firstarc.record.cell_code import load_code, what_if_code
from pipeline.shared_cases import ROOT, frame_of, invented, loaded, sightings_script, with_directions

HOSTILE_NAMES = [
    "plain",
    'it\'s "quoted"',
    "three \"\"\" quotes ''' both",
    "back\\slash \\n \\x41 \\",
    "{braces} {0} %s %(x)s ${y}",
    "two\nlines",
    "carriage\r\nreturn",
    "separator\u2028paragraph\u2029next\x85line",
    "form\x0cfeed\x1cfile",
    "comma, semicolon; tab\tend",
    '")\nimport os\nos.abort()\n#',
    "# comment",
    "é ∂ 🛰",
]


def replay(desk: fa.Desk) -> dict[str, Any]:
    namespace: dict[str, Any] = {}
    ast.parse(desk.code())
    exec(desk.code(), namespace)
    return namespace


def assert_same_observations(again: fa.Observations, obs: fa.Observations) -> None:
    """All but the reason for the centre, which the code gives by hand."""
    assert (again.center, again.directions, again.source) == (obs.center, obs.directions, obs.source)
    assert again.what_if == obs.what_if and again.epoch_tdb == obs.epoch_tdb
    assert again.records.same_as(obs.records)


offsets = st.fixed_dictionaries(
    {},
    optional={
        "clock_s": st.floats(-2.0, 2.0),
        "lat_deg": st.floats(-0.05, 0.05),
        "lon_deg": st.floats(-0.05, 0.05),
        "height_m": st.floats(-500.0, 500.0),
    },
)
stations_moved = st.dictionaries(st.sampled_from(["BRN", "QLN"]), offsets)
rows_moved = st.dictionaries(st.integers(0, 8), st.floats(-1.0, 1.0), max_size=3)
picks = st.lists(st.integers(0, 8), min_size=3, max_size=3, unique=True)
DESKS: dict[str, fa.Desk] = {}


def desk_of(source: str) -> fa.Desk:
    if source not in DESKS:
        obs = invented() if source == "file" else fa.load(frame_of(invented()), center="earth")
        DESKS[source] = fa.Desk(obs)
    return DESKS[source]


hands = st.fixed_dictionaries(
    {
        "offsets": stations_moved,
        "row_clock": rows_moved.map(lambda rows: {str(row): seconds for row, seconds in rows.items()}),
        "pick": picks,
        "excluded": st.sets(st.integers(0, 8), max_size=3).map(sorted),
        "kept": st.sets(st.integers(0, 8), max_size=3).map(sorted),
        "candidate": st.sampled_from([None, "A", "B", "C"]),
        "method": st.sampled_from(["gauss", "gauss", "laplace", "double-r", "two-ranges", "circular", "auto"]),
        "held": st.sampled_from([False, False, True]),
    }
)


def same_again(source: str, hand: dict[str, Any]) -> None:
    """Whatever the hand has set, the code gives an equal candidate and an equal fit, to the last digit."""
    desk = desk_of(source)
    desk.settings = {"seq": desk.scene["seq"] + 1, **hand}
    namespace = replay(desk)
    assert namespace["pre"] == desk.preliminary
    assert namespace["candidate"] == desk.best
    assert namespace.get("fit") == desk.fit
    assert (desk.fit is None) == (hand["held"] or desk.best is None or "No least-squares orbit" in second_line(desk))
    if desk.fit is not None:
        again = namespace["fit"]
        np.testing.assert_array_equal(again.covariance, desk.fit.covariance)
        np.testing.assert_array_equal(again.residuals_arcsec, desk.fit.residuals_arcsec)
        assert again.reasons == desk.fit.reasons and again.used.tolist() == desk.fit.used.tolist()
    shown = desk.obs.with_what_if(*desk.what_if)
    np.testing.assert_array_equal(namespace["obs"].sight_lines.observer_km, shown.sight_lines.observer_km)
    np.testing.assert_array_equal(namespace["obs"].sight_lines.t_s, shown.sight_lines.t_s)
    assert list(namespace["obs"].rows) == list(shown.rows)
    assert namespace["pre"].pick_rows == tuple(int(shown.rows[k]) + 1 for k in in_time_order(desk))


def second_line(desk: fa.Desk) -> str:
    return "".join(run if isinstance(run, str) else run["t"] for run in desk.scene["headline"][1])


def in_time_order(desk: fa.Desk) -> list[int]:
    """The pick in the order of the times in force, in which a preliminary result names its rows."""
    times = desk.obs.with_what_if(*desk.what_if).sight_lines.t_s
    return sorted(desk.pick, key=lambda position: (times[position], position))


@given(st.sampled_from(["file", "frame"]), hands)
@settings(max_examples=12)
def test_code_gives_an_equal_candidate_and_fit(source: str, hand: dict[str, Any]) -> None:
    same_again(source, hand)


@pytest.mark.slow
@given(st.sampled_from(["file", "frame"]), hands)
@settings(max_examples=60)
def test_code_gives_an_equal_candidate_and_fit_of_many_hands(source: str, hand: dict[str, Any]) -> None:
    same_again(source, hand)


@pytest.mark.parametrize(
    ("hand", "line"),
    [
        ({}, "fit = fa.fit(obs, start=pre)"),
        ({"kept": [6]}, "fit = fa.fit(obs, start=pre, keep=[6])"),
        ({"excluded": [6, 1]}, "fit = fa.fit(obs, start=pre, leave_out=[1, 6])"),
        ({"candidate": "A"}, "fit = fa.fit(obs, start=candidate)"),
        ({"offsets": {"BRN": {"clock_s": 0.1}}}, "fit = fa.fit(obs, start=pre, reject=False)"),
        (
            {"offsets": {"BRN": {"clock_s": 0.1}}, "excluded": [3], "kept": [6]},
            "fit = fa.fit(obs, start=pre, leave_out=[3], reject=False)",
        ),
    ],
)
def test_the_last_lines_are_the_fit(hand: dict[str, Any], line: str) -> None:
    desk = fa.Desk(invented(), pick=(2, 4, 7))
    desk.settings = {**desk.scene["settings"], "seq": 1, **hand}
    assert desk.code().splitlines()[-2:] == [line, "fit"]
    assert replay(desk)["fit"] == desk.fit
    desk.settings = {**desk.scene["settings"], "seq": 2, "held": True}
    assert "fa.fit" not in desk.code() and desk.code().splitlines()[-1] == "candidate"


def test_rejections_of_the_recorded_are_written_into_a_what_if() -> None:
    """The code of a what-if leaves out by name what the recorded fit rejected, and lets nothing else leave."""
    obs = invented()
    los = obs.sight_lines.los.copy()
    los[6] += np.radians(12.0 / 3600.0) * (np.array([0.0, 0.0, 1.0]) - los[6, 2] * los[6])
    desk = fa.Desk(with_directions(obs, los / np.linalg.norm(los, axis=1)[:, None]), pick=(0, 4, 8))
    # directions changed in memory are not those of the file, so only the last lines are compared
    assert list(np.flatnonzero(~desk.fit.used)) == [6] and "fa.fit(obs, start=pre)" in desk.code()
    desk.what_if = (fa.WhatIf(clock_s=0.05, station="BRN"),)
    assert "fit = fa.fit(obs, start=pre, leave_out=[6], reject=False)" in desk.code()


@pytest.mark.parametrize("name", HOSTILE_NAMES)
def test_hostile_object_names(name: str) -> None:
    obs = fa.load(frame_of(invented(), name=name), center="earth")
    assert obs.object_name == name.strip()
    desk = fa.Desk(obs)
    desk.what_if = (fa.WhatIf(station="BRN", clock_s=0.25),)
    namespace = replay(desk)
    assert namespace["candidate"] == desk.best and namespace["fit"] == desk.fit is not None
    assert namespace["obs"].object_name == obs.object_name


@pytest.mark.parametrize("name", [n for n in HOSTILE_NAMES if "\n" not in n])
def test_hostile_file_names(name: str, tmp_path: Path) -> None:
    """A line feed cannot stand in a path that is loaded: text of several lines is refused as a path."""
    path = tmp_path / f"{name}.csv"
    try:
        path.write_bytes((ROOT / "example_notebooks" / "data" / "invented_satellite.csv").read_bytes())
    except OSError:
        pytest.skip("this file system has no such names")
    obs = fa.load(path, stations=sightings_script().STATIONS)
    desk = fa.Desk(obs)
    namespace = replay(desk)
    assert namespace["candidate"] == desk.best and namespace["fit"] == desk.fit is not None
    assert_same_observations(namespace["obs"], obs)


def test_hostile_station_names() -> None:
    stations = {
        code: {**place, "name": f"{HOSTILE_NAMES[2]} {HOSTILE_NAMES[10]} {code}"}
        for code, place in sightings_script().STATIONS.items()
    }
    obs = fa.load(ROOT / "example_notebooks" / "data" / "invented_satellite.csv", stations=stations)
    assert_same_observations(replay(fa.Desk(obs))["obs"], obs)


def test_a_path_of_several_lines_is_refused() -> None:
    with pytest.raises(fa.UsageError, match="a text of several lines is not a path"):
        fa.load("two\nlines.csv")


def test_codes_of_the_minor_planet_center() -> None:
    """A table in memory whose places are not in it: the code carries them to the last bit."""
    obs = loaded("sh-mars-week", "s1")
    frame = frame_of(obs).drop(columns=["lon_deg", "lat_deg", "height_m"])
    obs = fa.load(frame, center="sun")
    assert len(obs.stations[0].code) == 3
    desk = fa.Desk(obs)
    assert replay(desk)["candidate"] == desk.best


@pytest.mark.parametrize("directions", ["geometric", "apparent"])
def test_directions_are_said(directions: str) -> None:
    obs = fa.load(frame_of(invented()), center="earth", directions=directions)
    desk = fa.Desk(obs)
    namespace = replay(desk)
    assert namespace["obs"].directions == directions
    assert namespace["candidate"] == desk.best and namespace["fit"] == desk.fit is not None


def test_subset_of_a_file_keeps_its_row_numbers() -> None:
    obs = invented()[[0, 2, 4, 6, 8]]
    desk = fa.Desk(obs)
    desk.what_if = (fa.WhatIf(clock_s=0.1, rows=(4,)), fa.WhatIf(station="QLN", lat_deg=0.01))
    desk.excluded = (next(p for p in range(5) if p not in desk.pick),)
    namespace = replay(desk)
    assert namespace["candidate"] == desk.best and namespace["fit"] == desk.fit is not None
    assert list(namespace["obs"].rows) == [0, 2, 4, 6, 8], "the fit keeps what is out, with its residual"
    assert list(namespace["candidate"].rows) == list(desk.obs.without(list(desk.excluded)).rows)


def test_subset_of_a_table_in_memory() -> None:
    """Its rows are written out, so they are counted anew; the numbers and the what-if's row are the same."""
    obs = fa.load(frame_of(invented()), center="earth")[[0, 2, 4, 6, 8]]
    desk = fa.Desk(obs)
    desk.what_if = (fa.WhatIf(clock_s=0.1, rows=(4,)),)
    assert "rows=[2]" in desk.code()
    again = replay(desk)["candidate"]
    for field in fields(again):
        if field.name in ("rows", "reason"):
            continue
        a, b = getattr(again, field.name), getattr(desk.best, field.name)
        assert np.array_equal(a, b, equal_nan=True) if isinstance(a, np.ndarray) else a == b or a != a, field.name


def test_pieces() -> None:
    assert what_if_code(fa.WhatIf(clock_s=0.2)) == "fa.WhatIf(clock_s=0.2)"
    one = fa.WhatIf(lat_deg=-0.5, station="a'b", rows=(3, 4))
    assert eval(what_if_code(one), {"fa": fa}) == one
    code = load_code(invented())
    assert code.startswith("obs = fa.load(") and "BRN" in code
    namespace: dict[str, Any] = {"fa": fa}
    exec(code, namespace)
    assert_same_observations(namespace["obs"], invented())
