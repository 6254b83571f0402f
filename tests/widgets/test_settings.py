"""Settings come from outside the kernel: whatever arrives, only usable values come into force."""

from __future__ import annotations

import math

from hypothesis import given
from hypothesis import strategies as st

from firstarc.pipeline import METHODS
from firstarc.widgets.settings import LARGEST, Settings, checked

BEFORE = Settings(pick=(0, 4, 8), station="BRN", row=4)
STATIONS = ("BRN", "QLN")

anything = st.recursive(
    st.none() | st.booleans() | st.integers(-20, 20) | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)
keys = st.sampled_from(list(BEFORE.as_dict()))


@given(st.dictionaries(keys, anything))
def test_anything_from_the_browser_gives_settings_that_can_be_used(raw):
    settings = checked(raw, BEFORE, 9, STATIONS)
    assert len(set(settings.pick)) == 3 and all(0 <= row < 9 for row in settings.pick)
    assert all(0 <= row < 9 for row in settings.excluded)
    assert all(0 <= row < 9 for row in settings.kept) and not set(settings.kept) & set(settings.excluded)
    assert settings.method in METHODS
    assert settings.estimate in ("", "clock:BRN", "clock:QLN", "station:BRN", "station:QLN")
    assert settings.station in STATIONS and 0 <= settings.row < 9
    for code, values in settings.offsets.items():
        assert code in STATIONS
        assert all(math.isfinite(value) and abs(value) <= LARGEST[key] for key, value in values.items())
    assert all(0 <= row < 9 and math.isfinite(value) for row, value in settings.row_clock.items())
    assert all(width >= 120.0 for width in settings.widths.values())
    assert checked(settings.as_dict(), BEFORE, 9, STATIONS) == settings


def test_what_the_browser_sets_comes_into_force():
    raw = {
        "seq": 7,
        "pick": [1, 2, 5],
        "excluded": [6, 3, 6],
        "station": "QLN",
        "offsets": {"BRN": {"clock_s": 0.35, "lat_deg": 0}, "nowhere": {"clock_s": 1}},
        "row_clock": {"4": -0.02},
        "row": 3,
        "candidate": "B",
        "held": True,
        "widths": {"sky": 500, "residuals": 3},
    }
    settings = checked(raw, BEFORE, 9, STATIONS)
    assert settings.pick == (1, 2, 5)
    assert settings.excluded == (3, 6)
    assert settings.offsets == {"BRN": {"clock_s": 0.35}}
    assert settings.row_clock == {4: -0.02}
    assert (settings.candidate, settings.held, settings.seq) == ("B", True, 7)
    assert settings.widths["sky"] == 500.0
    assert settings.widths["residuals"] == BEFORE.widths["residuals"]


def test_what_is_out_is_not_kept():
    """Taken out by hand is the later word; rows out before stay out where the browser names none."""
    out = Settings(pick=(0, 4, 8), station="BRN", row=4, excluded=(6,), kept=(2,))
    assert checked({"kept": [1, 6]}, out, 9, STATIONS).kept == (1,)
    assert checked({"excluded": [2]}, out, 9, STATIONS).kept == ()
    assert checked({"excluded": [], "kept": [6, 2, 6]}, out, 9, STATIONS).kept == (2, 6)
    assert checked({"kept": [9]}, out, 9, STATIONS).kept == (2,), "a row that is none: the rows in force stay"


def test_estimates_and_methods_are_those_there_are():
    chosen = checked({"estimate": "station:QLN", "method": "laplace"}, BEFORE, 9, STATIONS)
    assert (chosen.estimate, chosen.method) == ("station:QLN", "laplace")
    for raw in ({"estimate": "clock:XYZ", "method": "best"}, {"estimate": ["clock:BRN"], "method": None}, {}):
        kept = checked(raw, chosen, 9, STATIONS)
        assert (kept.estimate, kept.method) == ("station:QLN", "laplace")
    assert checked({"estimate": ""}, chosen, 9, STATIONS).estimate == ""
