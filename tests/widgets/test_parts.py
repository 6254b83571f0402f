"""The parts of the scene: words and digits against the results they are made from."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.stats import chi2 as chi2_law

import firstarc as fa
from desk_driving import element_values, number, orbit_rows, sent, shown, unit_of_last_place, words
from firstarc.constants import AU_KM
from firstarc.widgets.drawn_orbits import runs_of, track_times
from firstarc.widgets.parts.candidate_table import rms_text
from firstarc.widgets.parts.checks import chi2_words, margin_text
from firstarc.widgets.parts.headline import DECISIVE_RATIO
from firstarc.widgets.parts.what_if_panel import signed, what_if_words
from pipeline.shared_cases import invented, loaded


@pytest.fixture(params=["SATELLITE", "MINOR_PLANET"])
def desk(request: Any) -> fa.Desk:
    return fa.Desk(invented(request.param))


@pytest.mark.parametrize("hand", ["at rest", "held"])
def test_observation_table(desk: fa.Desk, hand: str) -> None:
    sent(desk, held=hand == "held")
    table, obs = desk.scene["observations"], desk.obs
    residuals = desk.best.converged.residuals_arcsec if hand == "held" else desk.fit.residuals_arcsec
    chi = desk.best.chi if hand == "held" else desk.fit.chi
    assert [row["row"] for row in table["rows"]] == list(range(9))
    assert [row["number"] for row in table["rows"]] == [str(k) for k in range(1, 10)]
    sigma = np.degrees(obs.sight_lines.sigma_rad) * 3600.0
    for row, one, residual, s, size in zip(table["rows"], obs, residuals, sigma, chi, strict=True):
        hours, minutes, seconds = row["ra"].split()
        ra = 15.0 * (float(hours) + float(minutes) / 60.0 + float(seconds) / 3600.0)
        assert abs(ra - one.ra_deg) * 3600.0 * math.cos(math.radians(one.dec_deg)) < s[0]
        degrees, minutes, seconds = row["dec"].split()
        dec = abs(number(degrees)) + float(minutes) / 60.0 + float(seconds) / 3600.0
        assert abs((-dec if row["dec"][0] == "−" else dec) - one.dec_deg) * 3600.0 < s[1]
        assert abs(number(row["oc_ra"]) - residual[0]) < 0.06 * max(1.0, s[0])
        assert abs(number(row["oc_dec"]) - residual[1]) < 0.06 * max(1.0, s[1])
        assert abs(number(row["chi"]) - size) < 0.0501
        assert row["station"] == one.station
    assert {row["shape"] for row in table["rows"] if row["station"] == "BRN"} == {"circle"}
    assert {row["shape"] for row in table["rows"] if row["station"] == "QLN"} == {"triangle"}
    assert "UTC" in table["note"] and "ICRF" in table["note"] and "RA × cos Dec" in table["note"]
    separations = desk.preliminary.separations_deg
    assert f"{separations[0]:.1f}°" in table["foot"] and f"{separations[1]:.1f}°" in table["foot"]


def test_rows_out_keep_their_residuals_in_parentheses() -> None:
    desk = fa.Desk(invented())
    desk.excluded = (next(row for row in range(9) if row not in desk.pick),)
    (out,) = desk.excluded
    row = desk.scene["observations"]["rows"][out]
    assert not row["used"] and row["oc_ra"].startswith("(") and row["chi"].endswith(")")
    assert f"Row {out + 1} out, taken out by hand." in desk.scene["observations"]["foot"]
    typed = fa.fit(desk.obs, start=desk.preliminary, leave_out=(out,)).residuals_arcsec[out]
    assert abs(number(row["oc_ra"]) - typed[0]) < 0.06, "as the fit without it predicts it"
    sent(desk, held=True)
    row = desk.scene["observations"]["rows"][out]
    assert not row["used"] and row["oc_ra"].startswith("(") and row["chi"].endswith(")")
    typed = fa.preliminary(desk.obs, pick=desk.pick).best.converged.residuals_arcsec[out]
    assert abs(number(row["oc_ra"]) - typed[0]) < 0.06, "the same orbit, as the pick is the same"


def test_numbers_of_subsets_are_those_of_the_input() -> None:
    desk = fa.Desk(invented()[[8, 1, 3, 5]])
    assert [row["number"] for row in desk.scene["observations"]["rows"]] == ["9", "2", "4", "6"]
    assert [row["row"] for row in desk.scene["observations"]["rows"]] == [0, 1, 2, 3]


@pytest.mark.parametrize("hand", ["at rest", "held"])
def test_orbit_table(desk: fa.Desk, hand: str) -> None:
    """The stages as computed; digits are settled against least squares, while held against the converged orbit."""
    sent(desk, held=hand == "held")
    scene, best, fit = desk.scene, desk.best, desk.fit
    rows = orbit_rows(desk)
    stages = [stage.elements for stage in (best.gauss, best.gibbs, best.converged)]
    columns = [element_values(elements) for elements in (stages if hand == "held" else [*stages, fit.elements])]
    assert list(rows) == [*columns[0], "miss", "rms"]
    reference = len(columns) - 1
    for key in columns[0]:
        cells = rows[key]["cells"]
        true = [column[key] for column in columns]
        unit = unit_of_last_place(cells[reference], cells[4])
        np.testing.assert_allclose([shown(cell) for cell in cells[: len(true)]], true, rtol=0, atol=0.5001 * unit)
        for k in range(1, len(true)):
            step = cells[k]["step"]
            assert step == "=" or abs(number(step) - (true[k] - true[k - 1])) < 0.5001 * unit, (key, k)
        assert cells[reference]["agree"] == 0
        for k in range(reference):
            text, settled = cells[k]["whole"] + cells[k]["fraction"], cells[k]["agree"]
            assert settled <= len(text)
            if settled:
                # the last underlined digit: the two values are within half a unit of its place
                before_point = sum(map(str.isdigit, cells[k]["whole"][settled:]))
                place = 10.0 ** (before_point or -max(settled - len(cells[k]["whole"]) - 1, 0))
                assert abs(true[k] - true[reference]) < 0.5 * place, (key, k)
    sigmas = best.sigmas if hand == "held" else fit.sigmas
    scale = 1.0 if desk.obs.center == "earth" else AU_KM
    assert shown(rows["a"]["cells"][4]) == pytest.approx(sigmas.a_km / scale, rel=0.5)
    assert shown(rows["e"]["cells"][4]) == pytest.approx(sigmas.e, rel=0.5)
    assert [column["title"] for column in scene["orbit"]["columns"]][:4] == [
        "Gauss estimate",
        f"{best.gibbs.rule.replace('-', '–')} correction",
        "Converged",
        "Least squares",
    ]
    assert rows["miss"]["cells"][2]["whole"] + rows["miss"]["cells"][2]["fraction"] == "0.0"
    assert shown(rows["miss"]["cells"][0]) == pytest.approx(best.gauss.miss_arcsec.max(), rel=0.01)
    assert shown(rows["rms"]["cells"][2]) == pytest.approx(best.converged.rms_arcsec, abs=0.006)
    assert ("ICRF equator" if desk.obs.center == "earth" else "J2000 ecliptic") in scene["orbit"]["note"]


def test_candidate_table() -> None:
    obs = loaded("sh-molniya-90min", "s1")
    desk = fa.Desk(obs, pick=(0, 3, 6))
    table = desk.scene["candidates"]
    assert table["note"] == "3 positive roots, 2 admissible"
    for row, c in zip(table["rows"], desk.preliminary.candidates, strict=True):
        assert row["letter"] == c.letter and row["admissible"] == c.admissible
        assert number(row["root"]) == pytest.approx(c.root_km, rel=5e-5)
        if not c.admissible:
            assert row["reason"] == f"rejected: {c.reason}" and row["cells"] == []
            continue
        assert len(row["cells"]) == len(table["head"]) - 2
        ranges = [number(text) for text in row["cells"][0].split(" · ")]
        np.testing.assert_allclose(ranges, c.ranges_km, rtol=2e-2)
        assert number(row["cells"][2]) == pytest.approx(c.elements.e, abs=6e-4)
        assert number(row["cells"][4]) == pytest.approx(c.rms_others_arcsec, rel=0.06)
    assert words(table["head"][2]) == "slant ranges 1·4·7 km"


def test_headline_of_two_candidates() -> None:
    """Venus: two roots, the other looks do not decide; the headline must not call it determined."""
    desk = fa.Desk(loaded("sh-venus-week", "s03"), pick=(0, 3, 5))
    first, second = (c for c in desk.preliminary.candidates if c.admissible)
    assert words(desk.scene["headline"][0]).startswith("Not determined."), "the fit has two minima"
    assert not desk.fit.verdicts.single and desk.scene["bad"]
    sent(desk, held=True)
    assert second.rms_others_arcsec < DECISIVE_RATIO * first.rms_others_arcsec
    text = words(desk.scene["headline"][0])
    assert text.startswith("Two candidates fit the pick 1·4·6 exactly")
    assert "do not decide between B and C" in text and desk.scene["bad"]
    three = fa.Desk(loaded("sh-venus-week", "s03")[[0, 3, 5]])
    assert words(three.scene["headline"][0]).startswith("Not determined.") and three.scene["bad"]
    sent(three, held=True)
    assert "no other row is in that could decide" in words(three.scene["headline"][0])


def test_headline_of_a_determined_orbit() -> None:
    desk = fa.Desk(invented())
    verdict, basis, what_if = (words(line) for line in desk.scene["headline"])
    assert verdict.startswith("Determined. Elliptic about the Earth: a 24\u202f5")
    assert not desk.scene["bad"]
    assert basis.startswith("9 of 9 observations in the fit, rms ") and "stated σ of 1.0″ to 1.5″" in basis
    assert what_if == "No what-if: these are the recorded observations."
    sent(desk, held=True)
    verdict, basis, what_if = (words(line) for line in desk.scene["headline"])
    assert verdict.startswith("Determined. Elliptic about the Earth: a 24\u202f5")
    assert not desk.scene["bad"]
    assert "the other 6 rows in use: rms " in basis and "stated σ of 1.0″ to 1.5″" in basis
    assert what_if == "No what-if: these are the recorded observations."
    sun = fa.Desk(invented("MINOR_PLANET"))
    assert words(sun.scene["headline"][0]).startswith("Determined. Elliptic about the Sun: a 1.6")


@pytest.mark.parametrize("hand", ["at rest", "held"])
def test_checks_follow_the_numbers(desk: fa.Desk, hand: str) -> None:
    sent(desk, held=hand == "held")
    best, pre, fit = desk.best, desk.preliminary, desk.fit
    found = {check["verdict"]: check for check in desk.scene["checks"]}
    assert "Determined" in found and "Lines not coplanar" in found and "Residuals match σ" in found
    assert not any(check["fails"] for check in found.values())
    if hand == "held":
        relative, limit = 100.0 * best.sigma_range_km / best.ranges_km[1], 5.0
        chi2, dof, chance = best.chi2_others, best.dof_others, best.chance_others
    else:
        relative, limit = 100.0 * fit.verdicts.conditioned.number, 10.0
        chi2, dof, chance = fit.chi2, fit.dof, float(chi2_law.sf(fit.chi2, fit.dof))
    text = found["Determined"]["text"]
    assert f"limit {limit:.0f} %" in text
    assert number(text.split("known to ")[1].split(" %")[0]) == pytest.approx(relative, rel=0.5)
    assert number(found["Determined"]["margin"]) == pytest.approx(limit / relative, rel=0.06)
    text = found["Residuals match σ"]["text"]
    assert number(text.split("χ² ")[1].split(" for")[0]) == pytest.approx(chi2, rel=0.006)
    assert f"for {dof} degrees of freedom" in text
    assert number(text.split("chance ")[1].split(",")[0]) == pytest.approx(chance, abs=0.0051)
    margin = abs(pre.determinant) / pre.determinant_sigma / 10.0
    assert number(found["Lines not coplanar"]["margin"]) == pytest.approx(margin, rel=0.06)
    (rule,) = [check for verdict, check in found.items() if verdict.endswith("better")]
    errors = dict(best.gibbs.predicted_error_km_s)
    assert errors[best.gibbs.rule] == min(errors.values())
    assert number(rule["margin"]) == pytest.approx(max(errors.values()) / min(errors.values()), rel=0.06)


@pytest.mark.parametrize("hand", ["at rest", "held"])
def test_checks_of_doubtful_orbits(hand: str) -> None:
    def scene_of(obs: Any, pick: Any = None) -> dict[str, Any]:
        return sent(fa.Desk(obs, pick=pick), held=hand == "held")

    far = scene_of(loaded("real-1977ub"))["checks"]
    assert far[0]["verdict"] == "Not determined" and far[0]["fails"]
    three = scene_of(invented()[[0, 4, 8]])["checks"]
    assert three[-1]["verdict"] == "No redundancy" and not three[-1]["fails"] and three[-1]["margin"] == ""
    spoiled = scene_of(loaded("real-1998yp11"), (0, 2, 3))
    assert spoiled["checks"][-1]["verdict"] == "Residuals above σ" and spoiled["checks"][-1]["fails"]
    if hand == "held":
        assert "Larger than the stated σ allow. Row 2 is off by" in words(spoiled["headline"][1])
    else:
        assert "degrees of freedom: larger than the stated σ allow." in words(spoiled["headline"][1])
    # noise-free data against stated sigmas of over an arcsecond: too good, and that is said too
    quiet = scene_of(loaded("sh-mars-week", "n0"))["checks"][-1]
    assert quiet["verdict"] == "Residuals below σ" and not quiet["fails"]


@pytest.mark.parametrize(
    ("value", "text"),
    [(17.06, "17.1"), (0.0058, "0.00580"), (3.44e-9, "3.4·10⁻⁹"), (2530.0, "2\u202f530"), (3e7, "3.0·10⁷")],
)
def test_chi_squares(value: float, text: str) -> None:
    assert chi2_words(value) == text


def test_sliders() -> None:
    desk = fa.Desk(invented())
    desk.settings = {
        **desk.scene["settings"],
        "seq": 1,
        "station": "QLN",
        "row": 6,
        "offsets": {"QLN": {"lat_deg": 0.05, "height_m": -30.0}},
        "row_clock": {"6": -0.25},
    }
    panel = desk.scene["what_if"]
    sliders = {one["key"]: one for one in panel["sliders"]}
    assert panel["station"] == "QLN" and panel["any"]
    assert panel["stations"][1] == {"code": "QLN", "label": "QLN Quillon (invented)"}
    assert sliders["lat_deg"]["box"] == "+38.95471" and sliders["lat_deg"]["value"] == 0.05
    assert sliders["lat_deg"]["max"] >= 0.05, "the scale follows a value that was typed"
    assert sliders["lat_deg"]["base"] == 38.90471
    assert number(sliders["lat_deg"]["change"].removesuffix(" m N")) == pytest.approx(0.05 * 111_132.0, abs=1.0)
    assert sliders["height_m"]["box"] == "612" and sliders["height_m"]["change"] == "−30 m"
    assert sliders["clock_s"]["value"] == 0.0 and not sliders["clock_s"]["changed"]
    row = sliders["row_clock"]
    assert row["label"] == "time, row 7" and row["box"] == "21:40:49.870" and row["kind"] == "time_of_day"
    assert row["base"] == pytest.approx(21 * 3600 + 40 * 60 + 50.12, abs=1e-6)


def test_what_if_in_words() -> None:
    one = (fa.WhatIf(clock_s=0.35, lat_deg=-0.001, station="BRN"), fa.WhatIf(clock_s=-0.02, rows=(4,)))
    assert what_if_words(one, "earth") == "BRN latitude −0.001°; BRN clock +0.35 s; row 5 time −0.02 s"
    assert what_if_words((fa.WhatIf(height_m=12.0),), "sun") == "every station height +12 m"
    assert signed(0.5, 3) == "+0.5" and signed(-1.25, 3) == "−1.25"


@pytest.mark.parametrize(
    ("margin", "text"),
    [
        (math.nan, ""),
        (math.inf, ""),
        (0.0, "×0"),
        (0.5, "×0.50"),
        (12.34, "×12"),
        (1234.5, "×1\u202f234"),
        (1e-5, "×1·10⁻⁵"),
    ],
)
def test_margins(margin: float, text: str) -> None:
    assert margin_text(margin) == text


def test_rms_texts() -> None:
    assert rms_text(math.nan) == "–" and rms_text(0.123) == "0.12" and rms_text(12.34) == "12.3"
    assert rms_text(12345.6) == "12\u202f346"


def test_runs_of_sightings() -> None:
    t = np.array([0.0, 60.0, 120.0, 5000.0, 5060.0, 30.0])
    codes = ["A", "A", "A", "A", "A", "B"]
    assert runs_of(codes, t, about_earth=True) == [[0, 1, 2], [3, 4], [5]]
    assert runs_of(codes, t, about_earth=False) == [[0, 1, 2, 3, 4], [5]]
    grid = track_times(np.array([10.0, 58.0]))
    assert 10.0 in grid and abs(grid - 58.0).min() < 1e-9 and grid[0] < 10.0 and grid[-1] > 58.0
