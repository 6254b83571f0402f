"""The Desk without a browser: traits, settings in, scene out, and words for whatever fails."""

from __future__ import annotations

import html
import re
from pathlib import Path
from typing import Any

import ipywidgets
import pytest
import traitlets

import firstarc as fa
from desk_driving import check_scene, headline, sent
from firstarc.widgets import desk as desk_module
from firstarc.widgets import painting, solving
from pipeline.shared_cases import ROOT, frame_of, invented, loaded, sightings_script


@pytest.fixture
def desk() -> fa.Desk:
    return fa.Desk(invented())


# -- as a widget -------------------------------------------------------------------------------------------------


def test_it_is_a_widget_in_full(desk: fa.Desk) -> None:
    box = ipywidgets.VBox([desk, ipywidgets.IntSlider()], layout=ipywidgets.Layout(width="90%"))
    assert box.children[0] is desk and isinstance(desk, ipywidgets.DOMWidget)
    assert fa.Desk(invented(), layout={"height": "700px"}).layout.height == "700px"
    with pytest.raises(fa.UsageError, match="Desk has no argument 'color'"):
        fa.Desk(invented(), color="red")


def test_traits_are_observable(desk: fa.Desk) -> None:
    seen: list[tuple[str, Any]] = []
    desk.observe(lambda change: seen.append((change["name"], change["new"])), ["pick", "what_if", "preliminary"])
    before = desk.preliminary
    desk.pick = (1, 4, 7)
    assert ("pick", (1, 4, 7)) in seen
    assert ("preliminary", desk.preliminary) in seen and desk.preliminary != before
    assert desk.preliminary == fa.preliminary(desk.obs, pick=(1, 4, 7))
    seen.clear()
    sent(desk, offsets={"BRN": {"clock_s": 0.2}})
    assert ("what_if", (fa.WhatIf(clock_s=0.2, station="BRN"),)) in seen, "what the browser sets is observed too"
    assert "preliminary" in [name for name, _ in seen]


def test_traits_can_be_linked(desk: fa.Desk) -> None:
    other = fa.Desk(invented())
    link = traitlets.link((desk, "what_if"), (other, "what_if"))
    traitlets.dlink((desk, "pick"), (other, "pick"))
    desk.pick = (0, 3, 6)
    sent(desk, offsets={"QLN": {"height_m": 120.0}}, pick=[0, 3, 7])
    assert other.pick == (0, 3, 7)
    assert other.what_if == desk.what_if == (fa.WhatIf(height_m=120.0, station="QLN"),)
    assert other.preliminary == desk.preliminary
    other.what_if = ()
    assert desk.what_if == () and desk.preliminary == fa.preliminary(desk.obs, pick=(0, 3, 7))
    link.unlink()
    other.what_if = (fa.WhatIf(clock_s=1.0),)
    assert desk.what_if == ()


def test_the_result_follows_every_control(desk: fa.Desk) -> None:
    """Whatever the Desk shows is the value of the call that a user could type."""
    scene = sent(
        desk,
        pick=[2, 5, 7],
        excluded=[6, 0],
        offsets={"BRN": {"lat_deg": 0.004, "clock_s": 0.3}, "QLN": {"height_m": -20.0}},
        row_clock={"3": -0.05},
    )
    typed = invented().with_what_if(
        fa.WhatIf(lat_deg=0.004, clock_s=0.3, station="BRN"),
        fa.WhatIf(height_m=-20.0, station="QLN"),
        fa.WhatIf(clock_s=-0.05, rows=(3,)),
    )
    expected = fa.preliminary(typed.without([0, 6]), pick=(1, 4, 5))
    assert desk.preliminary == expected and desk.best == expected.best
    assert desk.excluded == (0, 6) and desk.pick == (2, 5, 7)
    assert [row["used"] for row in scene["observations"]["rows"]] == [i not in (0, 6) for i in range(9)]
    assert [row["pick"] for row in scene["observations"]["rows"]] == [0, 0, 1, 0, 0, 2, 0, 3, 0]
    assert desk.obs == invented() and desk.obs.what_if == (), "never written into the observations"


def test_a_row_of_the_pick_cannot_be_out(desk: fa.Desk) -> None:
    sent(desk, pick=[0, 4, 8], excluded=[4, 5])
    assert desk.excluded == (5,)
    desk.pick = (0, 5, 8)
    assert desk.excluded == ()


def test_candidate_by_hand() -> None:
    desk = fa.Desk(loaded("sh-molniya-90min", "s1"), pick=(0, 3, 6))
    assert desk.candidate is None and desk.best.letter == "B"
    desk.candidate = "A"
    assert desk.best.letter == "A" and desk.best == desk.preliminary.candidate("A")
    assert [row["letter"] for row in desk.scene["candidates"]["rows"] if row["chosen"]] == ["A"]
    assert "pre.candidate('A')" in desk.code()
    sent(desk, candidate="C")  # rejected: it cannot be chosen
    assert desk.best.letter == "B" and "pre.best" in desk.code()
    sent(desk, candidate=None)
    assert desk.candidate is None


def test_sequence_numbers_are_echoed(desk: fa.Desk) -> None:
    assert desk.scene["seq"] == -1
    for seq in (1, 2, 17):
        desk.settings = {**desk.scene["settings"], "seq": seq}
        assert desk.scene["seq"] == desk.scene["settings"]["seq"] == seq


def test_settings_in_force_answer_what_was_refused(desk: fa.Desk) -> None:
    scene = sent(desk, pick=[0, 0, 1], station="<nowhere>", row=99, excluded=["x"], offsets={"BRN": {"clock_s": "1"}})
    assert scene["settings"]["pick"] == list(desk.pick) and len(set(desk.pick)) == 3
    assert scene["settings"]["station"] in ("BRN", "QLN")
    assert scene["settings"]["row"] < 9 and scene["settings"]["excluded"] == []
    assert scene["settings"]["offsets"] == {} and desk.what_if == ()


@pytest.mark.parametrize(
    ("trait", "value", "says"),
    [
        ("pick", (0, 1), "pick must be three different positions from 0 to 8"),
        ("pick", (0, 0, 1), "pick must be three different positions from 0 to 8"),
        ("pick", (0, 1, 9), "positions run from 0 to 8"),
        ("pick", None, "expected positions of observations"),
        ("excluded", (12,), "positions run from 0 to 8"),
        ("excluded", "abc", "expected positions of observations"),
        ("what_if", (fa.WhatIf(clock_s=1.0, station="704"),), "what_if names station '704'"),
        ("what_if", (fa.WhatIf(clock_s=1.0, rows=(44,)),), "what_if names row 44"),
        ("what_if", (fa.WhatIf(lat_deg=1.0, rows=(4,)),), "moves their time only"),
    ],
)
def test_refused_values_do_not_stay(desk: fa.Desk, trait: str, value: Any, says: str) -> None:
    desk.what_if = (fa.WhatIf(clock_s=0.1, station="BRN"),)
    kept = (desk.pick, desk.excluded, desk.what_if, desk.preliminary, desk.scene)
    with pytest.raises(fa.UsageError, match=re.escape(says)):
        setattr(desk, trait, value)
    assert (desk.pick, desk.excluded, desk.what_if, desk.preliminary, desk.scene) == kept
    desk.pick = (0, 4, 8)
    assert desk.preliminary.pick == (0, 4, 8), "and the Desk works on"


def test_a_candidate_that_is_no_letter_is_refused(desk: fa.Desk) -> None:
    with pytest.raises(traitlets.TraitError):
        desk.candidate = 3
    assert desk.candidate is None


# -- what it takes -----------------------------------------------------------------------------------------------


def test_paths_and_frames_are_loaded_first() -> None:
    script = sightings_script()
    path = ROOT / "example_notebooks" / "data" / script.SATELLITE["file"]
    direct = fa.Desk(path, stations=script.STATIONS)
    assert direct.obs == invented() and direct.best == fa.Desk(str(path), stations=script.STATIONS).best
    assert fa.Desk(frame_of(invented()), center="earth").best == fa.Desk(invented()).best
    assert fa.Desk(invented(), pick=[8, 0, 4]).pick == (0, 4, 8)


def test_what_it_cannot_take_is_named(tmp_path: Path) -> None:
    with pytest.raises(fa.UsageError, match=r"center and stations belong to fa\.load"):
        fa.Desk(invented(), center="earth")
    with pytest.raises(fa.UsageError, match="give the Desk the recorded observations"):
        fa.Desk(invented().with_what_if(fa.WhatIf(clock_s=1.0)))
    with pytest.raises(fa.UsageError, match="needs three observations, got 2"):
        fa.Desk(invented()[[0, 1]])
    with pytest.raises(fa.UsageError, match="pick must be three different positions"):
        fa.Desk(invented(), pick=(0, 1))
    with pytest.raises(fa.InputError, match="cannot be opened"):
        fa.Desk(tmp_path / "missing.csv")


# -- whatever fails is said --------------------------------------------------------------------------------------


def assert_withdrawn(desk: fa.Desk, sentence: str) -> None:
    scene = check_scene(desk)
    assert not scene["ok"] and scene["bad"] and desk.best is None and desk.preliminary is None
    assert headline(desk)[0].startswith("No preliminary orbit.") and sentence in headline(desk)[0]
    assert scene["orbit"]["rows"] == [] and scene["orbit"]["none"].startswith("No value")
    assert scene["figures"]["orbit"] is None
    assert all(not row["oc_ra"] and not row["chi"] for row in scene["observations"]["rows"]), "no stale residual"
    bundle = desk._repr_mimebundle_()[0]
    assert html.escape(sentence) in bundle["text/html"] and sentence in bundle["text/plain"]


def test_a_solver_that_raises_becomes_words(desk: fa.Desk, monkeypatch: Any, capsys: Any) -> None:
    def broken(*args: Any, **given: Any) -> None:
        raise ZeroDivisionError("a <b>number</b> was 0")

    monkeypatch.setattr(solving, "preliminary", broken)
    scene = sent(desk, pick=[0, 3, 8])
    assert_withdrawn(desk, "The computation stopped with ZeroDivisionError: a <b>number</b> was 0.")
    assert scene["seq"] == 0 and desk.pick == (0, 3, 8), "the settings stay in force and are answered"
    assert "Traceback" in capsys.readouterr().err, "the whole message goes to the log"
    assert "<b>number" not in desk._repr_mimebundle_()[0]["text/html"]
    monkeypatch.undo()
    sent(desk, pick=[0, 4, 8])
    assert desk.best is not None and desk.scene["ok"], "the next setting works again"


def test_a_painter_that_raises_becomes_words(desk: fa.Desk, monkeypatch: Any, capsys: Any) -> None:
    good = desk.scene

    def broken(snap: Any) -> list[Any]:
        if snap.chosen is None:
            return []
        raise ValueError("no such figure")

    monkeypatch.setattr(painting, "checks", lambda snap, bar: broken(snap))
    sent(desk, offsets={"BRN": {"clock_s": 0.5}})
    assert desk.scene is not good and desk.scene["seq"] == 0
    assert_withdrawn(desk, "The computation stopped with ValueError: no such figure.")
    assert "no such figure" in capsys.readouterr().err
    monkeypatch.undo()
    sent(desk, offsets={})
    assert desk.scene["ok"]


def test_a_known_refusal_is_a_sentence_not_a_traceback(desk: fa.Desk, monkeypatch: Any, capsys: Any) -> None:
    def refused(*args: Any, **given: Any) -> None:
        raise fa.UsageError("the station is on the Moon")

    monkeypatch.setattr(solving, "preliminary", refused)
    sent(desk, pick=[0, 3, 8])
    assert_withdrawn(desk, "the station is on the Moon.")
    assert "Traceback" not in capsys.readouterr().err


def test_a_station_on_the_wrong_side_of_the_earth(desk: fa.Desk) -> None:
    sent(desk, offsets={"QLN": {"lon_deg": 170.0}}, pick=[2, 5, 8])
    scene = check_scene(desk)
    if desk.best is None:
        assert "below the horizon of QLN" in headline(desk)[0]
        remedy = headline(desk)[1]
        assert "check the longitude of QLN (in force −177.39482°)" in remedy or "check the longitude" in remedy
        (act,) = [run["act"] for run in scene["headline"][1] if isinstance(run, dict) and "act" in run]
        assert act["do"] == "drop_from_pick" and act["row"] in (5, 8)
    else:
        assert desk.best.chance_others < 1e-6
    assert "What-if: QLN longitude +170°." in headline(desk)[2]
    assert scene["what_if"]["any"]


def test_only_the_synced_traits_cross() -> None:
    """Observations and results stay in the kernel; the scene, its frame and the settings cross."""
    own = set(fa.Desk(invented()).keys) - set(ipywidgets.DOMWidget().keys)
    assert {"scene", "frame", "settings"} <= own
    assert not own & {"pick", "what_if", "preliminary", "fit", "obs", "excluded", "candidate"}


def test_sliders_of_a_what_if_for_every_station() -> None:
    offsets, rows = desk_module.sliders_of(
        (fa.WhatIf(clock_s=0.5), fa.WhatIf(clock_s=0.25, station="QLN"), fa.WhatIf(clock_s=0.1, rows=(2, 3))),
        invented(),
    )
    assert offsets == {"BRN": {"clock_s": 0.5}, "QLN": {"clock_s": 0.75}}
    assert rows == {2: 0.1, 3: 0.1}
