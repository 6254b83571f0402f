"""The Desk at rest shows the least-squares orbit; while a slider is held, the preliminary one."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import firstarc as fa
from desk_driving import (
    check_scene,
    element_values,
    headline,
    number,
    orbit_rows,
    sent,
    shown,
    unit_of_last_place,
    words,
)
from firstarc.pipeline import METHODS
from firstarc.report.rounding import fixed, significant, with_sigma
from firstarc.results import Code, Status
from firstarc.widgets import solving
from firstarc.widgets.parts.headline import range_words
from pipeline.shared_cases import directions_of, invented, loaded, noisy, with_directions

#: Position of the sighting that is spoiled, outside every pick used here.
BAD = 6
FIT, SIGMA, RECORDED = 3, 4, 5


def spoiled(arcsec: float = 12.0) -> fa.Observations:
    """The invented satellite with one declination that is off."""
    obs = invented()
    step = np.zeros((9, 1))
    step[BAD] = np.radians(arcsec / 3600.0)
    los = obs.sight_lines.los
    moved = los + step * (np.array([0.0, 0.0, 1.0]) - los[:, 2:] * los)
    return with_directions(obs, moved / np.linalg.norm(moved, axis=1)[:, None])


def late(what_if: fa.WhatIf, seed: int = 5) -> fa.Observations:
    """Sightings of an exact orbit with noise, by stations that stand or run as the what-if says, unknown to them."""
    obs = invented()
    truly = obs.with_what_if(what_if)
    los = directions_of(fa.fit(obs).state, truly)
    sigma = np.degrees(obs.sight_lines.sigma_rad) * 3600.0
    return with_directions(obs, noisy(los, sigma, np.random.default_rng(seed)))


@pytest.fixture
def desk() -> fa.Desk:
    return fa.Desk(invented(), pick=(2, 4, 7))


# -- at rest and held --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["SATELLITE", "MINOR_PLANET"])
def test_the_fit_is_the_call_that_a_user_could_type(kind: str) -> None:
    desk = fa.Desk(invented(kind))
    fit = fa.fit(desk.obs, start=desk.preliminary)
    assert desk.fit == fit and fit.determined
    rows, earth = orbit_rows(desk), desk.obs.center == "earth"
    sigmas = {
        "a": fit.sigmas.a_km / (1.0 if earth else fa.constants.AU_KM),
        "e": fit.sigmas.e,
        "i": np.degrees(fit.sigmas.i_rad),
    }
    for key, value in element_values(fit.elements).items():
        cells = rows[key]["cells"]
        assert abs(shown(cells[FIT]) - value) <= 0.5001 * unit_of_last_place(cells[FIT], cells[SIGMA]), key
        assert cells[FIT]["agree"] == 0, "digits are underlined against this column"
        if key in sigmas:
            assert shown(cells[SIGMA]) == pytest.approx(sigmas[key], rel=0.34), key
    assert shown(rows["rms"]["cells"][FIT]) == pytest.approx(fit.rms_arcsec, abs=0.0051)
    columns = desk.scene["orbit"]["columns"]
    assert [column["kind"] for column in columns] == ["stage", "stage", "stage", "fit", "sigma", "recorded"]
    assert columns[FIT]["title"] == "Least squares" and columns[FIT]["sub"] == "9 rows, perturbed"
    assert desk.scene["orbit"]["note"].endswith("Underlined digits agree with least squares.")
    assert desk.scene["figures"]["residuals"]["note"].startswith("observed − computed, least squares")


def test_the_fit_follows_every_choice(desk: fa.Desk) -> None:
    sent(desk, excluded=[0, 6])
    assert desk.fit == fa.fit(desk.obs, start=desk.preliminary, leave_out=(0, 6))
    assert desk.scene["orbit"]["columns"][FIT]["sub"].startswith("7 rows")
    assert (
        headline(desk)[1].startswith("7 of 9 observations in the fit, rms ") and "Rows 1, 7 out." in headline(desk)[1]
    )
    desk.pick = (0, 4, 8)
    assert desk.fit == fa.fit(desk.obs, start=desk.preliminary, leave_out=(6,))
    several = fa.Desk(loaded("sh-molniya-90min", "s1"), pick=(0, 3, 6))
    assert several.fit == fa.fit(several.obs, start=several.preliminary)
    several.candidate = "A"
    assert several.fit == fa.fit(several.obs, start=several.preliminary.candidate("A"))
    assert several.fit.start.startswith("candidate A")


def test_a_held_slider_waits_for_the_fit(desk: fa.Desk) -> None:
    """Only the stages are computed; no number of the earlier fit stays as if it were current."""
    before, offsets = desk.fit, {"BRN": {"clock_s": 0.35}}
    sent(desk, offsets=offsets, held=True)
    scene, best = check_scene(desk), desk.best
    assert desk.fit is None and before is not None
    column = scene["orbit"]["columns"][FIT]
    assert column["sub"] == "when the hand rests" and scene["orbit"]["columns"][SIGMA]["sub"] == "3 sightings"
    assert all(row["cells"][FIT]["whole"] in ("–", "") for row in scene["orbit"]["rows"])
    assert all(not row["cells"][FIT]["fraction"] for row in scene["orbit"]["rows"])
    for row, residual in zip(scene["observations"]["rows"], best.converged.residuals_arcsec, strict=True):
        assert abs(number(row["oc_ra"]) - residual[0]) < 0.051 and abs(number(row["oc_dec"]) - residual[1]) < 0.051
    assert headline(desk)[1].startswith("Orbit through rows 3·5·8; the other 6 rows in use: rms ")
    assert "held" not in scene["observations"]["foot"] and "fa.fit" not in desk.code()
    assert scene["orbit"]["note"].endswith("Underlined digits agree with the converged orbit.")
    assert scene["figures"]["residuals"]["note"].startswith("observed − computed, converged orbit")
    sent(desk, held=False)
    fresh = fa.Desk(invented(), pick=(2, 4, 7))
    sent(fresh, offsets=offsets)
    assert desk.fit == fresh.fit and desk.scene["headline"] == fresh.scene["headline"]
    for row, residual in zip(desk.scene["observations"]["rows"], desk.fit.residuals_arcsec, strict=True):
        assert abs(number(row["oc_ra"]) - residual[0]) < 0.051 and abs(number(row["oc_dec"]) - residual[1]) < 0.051


def test_the_fit_is_observable(desk: fa.Desk) -> None:
    seen: list[Any] = []
    desk.observe(lambda change: seen.append(change["new"]), "fit")
    sent(desk, offsets={"BRN": {"clock_s": 0.1}}, held=True)
    sent(desk, held=False)
    assert seen == [None, desk.fit] and desk.fit is not None


# -- compared with the recorded ----------------------------------------------------------------------------------


@pytest.mark.parametrize("held", [True, False])
def test_a_what_if_is_compared_with_the_recorded(desk: fa.Desk, held: bool) -> None:
    """Candidate with candidate while held, fit with fit at rest, both at the epoch shown."""
    base_pre = fa.preliminary(desk.obs, pick=desk.pick)
    base_fit = fa.fit(desk.obs, start=base_pre)
    sent(desk, offsets={"BRN": {"clock_s": 0.35}}, held=held)
    now, base = (desk.best.state, base_pre.best.state) if held else (desk.fit.state, base_fit.state)
    assert base.epoch_tdb != now.epoch_tdb, "the clock moves the epoch too"
    before = element_values(base.propagated(now.epoch_tdb).elements)
    for key, value in element_values(now.elements).items():
        cells = orbit_rows(desk)[key]["cells"]
        unit = unit_of_last_place(cells[2 if held else FIT], cells[SIGMA])
        assert abs(shown(cells[RECORDED]) - (value - before[key])) <= 0.5001 * unit, key
        ratio = abs(value - before[key]) / shown(cells[SIGMA])
        assert number(cells[RECORDED]["in_sigma"]) == pytest.approx(ratio, rel=0.4, abs=0.1), key
        assert cells[RECORDED]["dev"]
    assert headline(desk)[2].startswith("What-if: BRN clock +0.35 s.")
    sent(desk, offsets={})
    assert headline(desk)[2] == "No what-if: these are the recorded observations."
    assert all(row["cells"][RECORDED]["whole"] in ("·", "") for row in desk.scene["orbit"]["rows"])


def test_the_headline_weighs_the_what_if(desk: fa.Desk) -> None:
    recorded = desk.fit
    for clock, word in ((0.35, "speak against it"), (0.001, "cannot tell")):
        sent(desk, offsets={"BRN": {"clock_s": clock}})
        change = desk.fit.chi2 - recorded.chi2
        assert f"χ² {fixed(change, 1, sign=True)}: the observations {word}." in headline(desk)[2]
        assert f"Rms {recorded.rms_arcsec:.2f}″ → {desk.fit.rms_arcsec:.2f}″" in headline(desk)[2]


def test_residual_bars_of_the_recorded_are_of_the_same_kind(desk: fa.Desk, monkeypatch: Any) -> None:
    """Without a fit of the what-if the candidate is shown, and compared with the recorded candidate."""
    recorded = fa.preliminary(desk.obs, pick=desk.pick).best.converged.residuals_arcsec
    for held in (True, False):
        if not held:
            monkeypatch.setattr(solving, "fit", refusing(solving.fit, lambda obs: bool(obs.what_if)))
        sent(desk, offsets={"BRN": {"clock_s": 0.3 if held else 0.2}}, held=held)
        assert desk.fit is None
        np.testing.assert_array_equal(desk._snapshot.recorded_residuals, recorded)
        assert desk._snapshot.recorded_state == fa.preliminary(desk.obs, pick=desk.pick).best.state
    monkeypatch.undo()
    sent(desk, offsets={"BRN": {"clock_s": 0.1}})
    typed = fa.fit(desk.obs, start=fa.preliminary(desk.obs, pick=desk.pick))
    np.testing.assert_array_equal(desk._snapshot.recorded_residuals, typed.residuals_arcsec)


# -- rejection ---------------------------------------------------------------------------------------------------


def test_a_rejected_row_is_named_and_can_be_kept() -> None:
    desk = fa.Desk(spoiled(), pick=(0, 4, 8))
    assert list(np.flatnonzero(~desk.fit.used)) == [BAD] and desk.excluded == ()
    size = fixed(float(desk.fit.chi[BAD]), 1)
    assert headline(desk)[1].startswith("8 of 9 observations in the fit") and float(size) > 5.0
    assert f"Row 7 is out ({size} σ)." in headline(desk)[1]
    foot = desk.scene["observations"]["foot"]
    assert f"Row 7 out, rejected: {size} σ." in foot and "by hand" not in foot
    row = desk.scene["observations"]["rows"][BAD]
    assert not row["used"] and row["big"] and row["oc_dec"].startswith("(") and row["chi"] == f"({size})"
    assert abs(number(row["oc_dec"]) - desk.fit.residuals_arcsec[BAD, 1]) < 0.051

    sent(desk, kept=[BAD])
    assert desk.fit == fa.fit(desk.obs, start=desk.preliminary, keep=(BAD,)) and desk.fit.used.all()
    assert desk.scene["observations"]["rows"][BAD]["used"] and "rejected" not in desk.scene["observations"]["foot"]
    assert headline(desk)[1].startswith("9 of 9 observations in the fit")
    assert "larger than the stated σ allow" in headline(desk)[1]
    assert desk.scene["checks"][-1]["verdict"] == "Residuals above σ" and desk.scene["checks"][-1]["fails"]

    sent(desk, kept=[])
    assert list(np.flatnonzero(~desk.fit.used)) == [BAD], "and rejected again"


def test_the_later_choice_by_hand_wins() -> None:
    desk = fa.Desk(spoiled(), pick=(0, 4, 8))
    scene = sent(desk, kept=[BAD], excluded=[BAD])
    assert scene["settings"]["excluded"] == [BAD] and scene["settings"]["kept"] == []
    assert "taken out by hand" in scene["observations"]["foot"] and "rejected" not in scene["observations"]["foot"]
    sent(desk, kept=[BAD], excluded=[])
    assert desk.fit.used.all()
    desk.excluded = (BAD,)
    assert desk.scene["settings"]["kept"] == [] and list(np.flatnonzero(~desk.fit.used)) == [BAD]
    assert desk.fit == fa.fit(desk.obs, start=desk.preliminary, leave_out=(BAD,))


def test_rejections_are_held_during_a_what_if() -> None:
    """So that chi-square is compared over the same rows: nothing leaves or returns while the hand tries offsets."""
    desk = fa.Desk(spoiled(), pick=(0, 4, 8))
    sent(desk, offsets={"BRN": {"clock_s": 0.8}})
    moved = spoiled().with_what_if(fa.WhatIf(clock_s=0.8, station="BRN"))
    assert desk.fit == fa.fit(moved, start=desk.preliminary, leave_out=(BAD,), reject=False)
    assert desk.fit.used.sum() == 8 and not desk.fit.used[BAD]
    assert fa.fit(moved, start=desk.preliminary).used.sum() != 8, "left to itself it would choose other rows"
    assert desk.scene["observations"]["foot"].endswith("Rejections held as recorded during a what-if.")
    sent(desk, kept=[BAD])
    assert desk.fit == fa.fit(moved, start=desk.preliminary, reject=False) and desk.fit.used.all()
    sent(desk, kept=[], excluded=[1])
    assert desk.fit == fa.fit(moved, start=desk.preliminary, leave_out=(1, BAD), reject=False)


# -- estimates ---------------------------------------------------------------------------------------------------


def test_a_clock_is_estimated_and_set_as_a_what_if() -> None:
    desk = fa.Desk(late(fa.WhatIf(clock_s=0.6, station="QLN")), pick=(0, 4, 8))
    recorded = desk.fit
    answer = sent(desk, estimate="clock:QLN")["what_if"]["estimate"]
    typed = fa.fit(desk.obs, start=desk.best, estimate=("clock:QLN",))
    (one,) = typed.estimates
    assert answer["asked"] == "clock:QLN" and answer["station"] == "QLN"
    assert answer["text"] == f"QLN clock {with_sigma(one.value, one.sigma, 's')} by least squares"
    assert answer["offsets"] == {"clock_s": round(one.value, 6)}
    assert abs(one.value - 0.6) < 3.5 * one.sigma and one.value > 5.0 * one.sigma, "the planted clock is found"
    sent(desk, offsets={"QLN": answer["offsets"]}, estimate="")
    assert desk.what_if == (fa.WhatIf(clock_s=round(one.value, 6), station="QLN"),)
    assert desk.fit.chi2 < recorded.chi2 - 9.0
    assert "the observations speak for it." in headline(desk)[2]


def test_a_place_is_estimated_and_set_as_a_what_if() -> None:
    desk = fa.Desk(late(fa.WhatIf(lat_deg=0.5, lon_deg=-0.4, station="QLN")), pick=(0, 2, 4))
    answer = sent(desk, estimate="station:QLN")["what_if"]["estimate"]
    typed = fa.fit(desk.obs, start=desk.best, estimate=("station:QLN",))
    parts = [
        f"{with_sigma(one.value, one.sigma, 'm')} {axis}"
        for one, axis in zip(typed.estimates, ("east", "north", "up"), strict=True)
    ]
    assert answer["text"] == f"QLN {', '.join(parts)} by least squares"
    recorded = desk.fit
    sent(desk, offsets={"QLN": answer["offsets"]})
    assert set(answer["offsets"]) == {"lat_deg", "lon_deg", "height_m"}
    assert desk.fit.chi2 < recorded.chi2 - 9.0
    assert "the observations speak for it." in headline(desk)[2]


def test_an_estimate_is_of_the_recorded_observations_and_of_the_choices_in_force(desk: fa.Desk) -> None:
    sent(desk, estimate="clock:BRN")
    first = desk.scene["what_if"]["estimate"]
    sent(desk, offsets={"BRN": {"clock_s": 0.5}})
    assert desk.scene["what_if"]["estimate"] == first, "the what-if does not enter"
    sent(desk, held=True)
    assert desk.scene["what_if"]["estimate"] == {"asked": "clock:BRN", "text": "", "offsets": {}, "station": ""}
    sent(desk, held=False, offsets={}, method="laplace", excluded=[0])
    typed = fa.fit(desk.obs, start=desk.best, estimate=("clock:BRN",), leave_out=(0,))
    assert desk._snapshot.estimated == typed.estimates
    sent(desk, method="circular")
    assert (
        desk._snapshot.estimated == fa.fit(desk.obs, start=desk.best, estimate=("clock:BRN",), leave_out=(0,)).estimates
    )
    refused = sent(desk, estimate="clock:<nowhere>")
    assert refused["settings"]["estimate"] == "clock:BRN"


def test_an_estimate_that_cannot_be_had_says_why() -> None:
    desk = fa.Desk(invented()[[0, 4, 8]])
    answer = sent(desk, estimate="station:BRN")["what_if"]["estimate"]
    with pytest.raises(fa.UsageError) as refused:
        fa.fit(desk.obs, start=desk.best, estimate=("station:BRN",))
    assert answer["text"].startswith("Not estimated: ") and str(refused.value) in answer["text"]
    assert answer["offsets"] == {}
    rejected = fa.Desk(loaded("sh-geo-2nights", "n0"), pick=(0, 3, 5))
    answer = sent(rejected, estimate="clock:247")["what_if"]["estimate"]
    assert answer["text"] == "Not estimated: there is no recorded orbit to start from."


# -- methods -----------------------------------------------------------------------------------------------------


def test_a_method_is_chosen_by_settings_and_by_trait(desk: fa.Desk) -> None:
    offered = desk.scene["candidates"]["methods"]
    assert [one["key"] for one in offered][:3] == ["auto", "gauss", "laplace"]
    assert {"key": "double-r", "label": "double-r"} in offered
    assert "measured-ranges" not in [one["key"] for one in offered], "no range was measured"
    for set_it in (lambda: sent(desk, method="laplace"), lambda: setattr(desk, "method", "double-r")):
        set_it()
        check_scene(desk)
        typed = fa.preliminary(desk.obs, pick=desk.pick, method=desk.method)
        assert desk.preliminary == typed and desk.fit == fa.fit(desk.obs, start=typed)
        assert desk.scene["candidates"]["method"] == desk.scene["settings"]["method"] == desk.method
        name = {"laplace": "Laplace", "double-r": "double-r"}[desk.method]
        columns = desk.scene["orbit"]["columns"]
        assert columns[0]["title"] == f"{name} estimate" and columns[1]["sub"] == "not used"
        label = desk.scene["orbit"]["convergence"]["label"]
        assert f"in arcsec: {name} estimate " in label and "Gauss" not in label and "Gibbs" not in label
    with pytest.raises(fa.UsageError, match=r"method must be one of .*'gauss'.*, got 'guess'"):
        desk.method = "guess"
    assert desk.method == "double-r" == desk.scene["settings"]["method"]
    sent(desk, method="<b>")
    assert desk.method == "double-r"


def test_methods_that_the_observations_do_not_allow_are_not_offered() -> None:
    keys = [one["key"] for one in fa.Desk(invented()[[0, 4, 8]]).scene["candidates"]["methods"]]
    assert "four-observations" not in keys and "measured-ranges" not in keys and "gauss" in keys


def test_rows_of_the_automatic_choice_carry_the_method() -> None:
    desk = fa.Desk(loaded("real-1977ub"))
    desk.method = "auto"
    table, candidates = desk.scene["candidates"], desk.preliminary.candidates
    assert len({c.method for c in candidates}) > 2, "it tried several"
    assert [words(line) for line in table["head"]][2] == "method"
    for row, c in zip(table["rows"], candidates, strict=True):
        label = METHODS[c.method].label
        if c.admissible:
            assert row["cells"][0] == label and len(row["cells"]) == len(table["head"]) - 2
        else:
            assert row["reason"] == f"{label}, rejected: {c.reason}" and row["cells"] == []
    check_scene(desk)


# -- what the data do not decide ---------------------------------------------------------------------------------


def undetermined() -> dict[str, Any]:
    return {
        "a week of Mars at 5 arcsec": (lambda: loaded("sh-mars-week", "s5"), "au"),
        "two nights of a minor planet": (lambda: invented("MINOR_PLANET")[[0, 1, 2, 3, 4, 5]], "au"),
        "a far body over three weeks": (lambda: loaded("real-1977ub"), "au"),
        "three sightings": (lambda: invented()[[0, 4, 8]], "km"),
    }


@pytest.mark.parametrize("name", undetermined())
def test_an_undetermined_fit_claims_nothing(name: str) -> None:
    make, unit = undetermined()[name]
    desk = fa.Desk(make())
    scene, fit = check_scene(desk), desk.fit
    assert not fit.determined and scene["bad"] and scene["ok"]
    assert headline(desk)[0].startswith(f"Not determined. {len(desk.obs)} observations leave the slant range open ")
    assert "±" not in headline(desk)[0]
    found = re.search(
        r"between ([\d.\u202f]+) and ([\d.\u202f]+) (?:au|km) \(90 % of the sample\)\.", headline(desk)[0]
    )
    assert found is not None
    low, high = found.groups()
    scale = 1.0 if unit == "km" else fa.constants.AU_KM
    ends = fit.sample.quantiles(fit.sample.range_km, (0.05, 0.95)) / scale
    digits = max(3, len(low.replace(".", "").replace("\u202f", "").lstrip("0")))
    assert low != high and number(low) < number(high)
    np.testing.assert_allclose([number(low), number(high)], ends, rtol=0.6 * 10.0 ** (1 - digits))
    assert f" {unit} (90 %" in headline(desk)[0]
    for row in scene["orbit"]["rows"]:
        assert row["cells"][SIGMA]["whole"] in ("–", ""), "no sigma"
    assert scene["orbit"]["columns"][FIT]["sub"] == f"{len(desk.obs)} rows, one of many"
    assert scene["checks"][0]["verdict"] == "Not determined" and scene["checks"][0]["fails"]
    assert scene["orbit"]["note"].endswith("agree with the converged orbit.")


def test_a_sample_without_a_fitting_orbit_gives_no_range() -> None:
    """A sample that misses the observations is not quoted, whatever numbers it holds."""
    desk = fa.Desk(loaded("sh-mars-week", "s5"))
    sample = desk.fit.sample
    missed = replace(sample, status=Status(Code.NOT_CONVERGED, "No orbit of the region fits."))
    assert range_words(desk._snapshot, sample).startswith(" between 0.")
    assert range_words(desk._snapshot, missed) == "; no sampled orbit fits them that could say how far"
    lost = replace(sample, best=replace(sample.best, state=np.full(6, np.nan)))
    assert "between" not in range_words(desk._snapshot, lost)


def test_another_minimum_is_told() -> None:
    desk = fa.Desk(loaded("sh-venus-week", "s03"), pick=(0, 3, 5))
    assert not desk.fit.determined and not desk.fit.verdicts.single
    assert headline(desk)[0].endswith(desk.fit.verdicts.single.sentence)
    assert desk.scene["checks"][0]["text"] == desk.fit.verdicts.single.sentence


def test_no_redundancy_is_no_consistency() -> None:
    desk = fa.Desk(invented()[[0, 4, 8]])
    assert desk.fit.dof == 0 and "for 0 degrees of freedom." in headline(desk)[1]
    assert not re.search(r"0\.0000", headline(desk)[1]), "rounding noise is a power of ten"
    assert desk.scene["checks"][-1]["verdict"] == "No redundancy"


# -- a fit that fails --------------------------------------------------------------------------------------------


def refusing(real: Any, when: Any) -> Any:
    def fit(obs: Any, *args: Any, **given: Any) -> Any:
        if when(obs):
            raise fa.UsageError("the <i>forces</i> need an ephemeris that ends in 2050")
        return real(obs, *args, **given)

    return fit


def test_a_fit_that_refuses_becomes_words(desk: fa.Desk, monkeypatch: Any, capsys: Any) -> None:
    monkeypatch.setattr(solving, "fit", refusing(solving.fit, lambda obs: True))
    sent(desk, pick=[0, 4, 8])
    scene = check_scene(desk)
    assert desk.fit is None and scene["ok"] and desk.best == desk.preliminary.best
    assert headline(desk)[1].endswith("No least-squares orbit: the <i>forces</i> need an ephemeris that ends in 2050.")
    assert scene["orbit"]["columns"][FIT]["sub"] == "none"
    assert all(row["cells"][FIT]["whole"] in ("–", "") for row in scene["orbit"]["rows"]), "no stale number"
    for row, residual in zip(scene["observations"]["rows"], desk.best.converged.residuals_arcsec, strict=True):
        assert abs(number(row["oc_dec"]) - residual[1]) < 0.051
    assert "fa.fit" not in desk.code() and "<i>forces" not in desk._repr_mimebundle_()[0]["text/html"]
    assert "Traceback" not in capsys.readouterr().err
    monkeypatch.undo()
    sent(desk, pick=[2, 4, 7])
    assert desk.fit == fa.fit(desk.obs, start=desk.preliminary)


def test_a_what_if_that_cannot_be_fitted_becomes_words(desk: fa.Desk, monkeypatch: Any) -> None:
    monkeypatch.setattr(solving, "fit", refusing(solving.fit, lambda obs: bool(obs.what_if)))
    sent(desk, offsets={"QLN": {"height_m": 50.0}})
    check_scene(desk)
    assert desk.fit is None and "No least-squares orbit: the <i>forces</i> need" in headline(desk)[1]
    assert "What-if: QLN height +50 m." in headline(desk)[2]


def test_a_fit_that_breaks_withdraws_everything(desk: fa.Desk, monkeypatch: Any, capsys: Any) -> None:
    def broken(*args: Any, **given: Any) -> None:
        raise np.linalg.LinAlgError("SVD did not converge")

    monkeypatch.setattr(solving, "fit", broken)
    sent(desk, pick=[0, 4, 8])
    scene = check_scene(desk)
    assert "The computation stopped with LinAlgError: SVD did not converge." in headline(desk)[0]
    assert desk.fit is None and desk.best is None and scene["orbit"]["rows"] == []
    assert "Traceback" in capsys.readouterr().err
    monkeypatch.undo()
    sent(desk, pick=[2, 4, 7])
    assert desk.fit is not None


def test_numbers_of_the_fit_carry_the_digits_of_their_sigma(desk: fa.Desk) -> None:
    fit = desk.fit
    assert f"a {with_sigma(fit.elements.a_km, fit.sigmas.a_km, 'km')}" in headline(desk)[0]
    assert f"χ² {significant(fit.chi2, 3)} for {fit.dof} degrees of freedom" in headline(desk)[1]
