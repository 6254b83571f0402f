"""What the caller may choose: start, forces, rejection, what is kept and left out; and what misuse is told."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from astropy.time import Time

import firstarc as fa
from firstarc.results import Code
from pipeline.fit_scenes import normalised, orbit, seen, with_error
from pipeline.shared_cases import EARTH, case, invented, loaded, truth

LEO = "sh-leo-pass"
BAD = 3


@cache
def leo() -> fa.Observations:
    """The pass as a two-body orbit would give it, with noise of 1 arcsec."""
    from pipeline.shared_cases import directions_of, noisy, with_directions

    obs = loaded(LEO, "s1")
    los = noisy(directions_of(truth(LEO), obs), np.ones((len(obs), 2)), np.random.default_rng(20))
    return with_directions(obs, los)


def test_every_start_leads_to_the_same_orbit() -> None:
    obs = leo()
    pre = fa.preliminary(obs)
    fits = {
        "nothing": fa.fit(obs, forces="two-body"),
        "preliminary": fa.fit(obs, start=pre, forces="two-body"),
        "candidate": fa.fit(obs, start=pre.best, forces="two-body"),
        "state": fa.fit(obs, start=truth(LEO), forces="two-body"),
    }
    for one in fits.values():
        assert one.determined and normalised(one, truth(LEO)) < 22.5
        np.testing.assert_allclose(one.chi2, fits["state"].chi2, rtol=1e-6)
        np.testing.assert_allclose(one.elements.a_km, fits["state"].elements.a_km, rtol=1e-8)
    assert fits["nothing"].start == fits["preliminary"].start == "every admissible candidate (A)"
    assert fits["candidate"].start == "candidate A (Gauss)"
    assert fits["state"].start == "a state given by the caller"
    assert fits["state"].state.epoch_tdb == truth(LEO).epoch_tdb
    assert fits["candidate"].state.epoch_tdb == pre.best.state.epoch_tdb


def test_forces_are_taken_at_their_word() -> None:
    obs = leo()
    two, full = (fa.fit(obs, start=truth(LEO), forces=word) for word in ("two-body", "full"))
    assert two.forces == "Two-body attraction of the Earth only." and "zonals J2 to J4" in full.forces
    assert "Sun and Moon" in full.forces
    assert two.forces_reason == full.forces_reason == "Asked for by the caller."
    light = fa.fit(obs, start=truth(LEO), area_to_mass_m2_kg=0.02)
    assert "radiation pressure with 0.02 m2/kg" in light.forces
    # over four minutes J2 moves it by some arcsec, more than this noise
    assert np.linalg.norm(two.state.r_km - full.state.r_km) > 1e-3


def test_forces_by_the_arc() -> None:
    """Ten minutes of a satellite 20 000 km out need no J2 at 2 arcsec; an hour does, and the reason says so."""
    high = orbit("earth", Time("2026-03-01T20:00:00", scale="utc"), 20000.0, 0.05, (55.0, 84.0, 10.0, 35.0))
    brief = fa.fit(seen(high, [("BRN", f"2026-03-01T20:{m:02d}:00") for m in range(0, 12, 2)], 2.0, 1), start=high)
    longer = fa.fit(seen(high, [("BRN", f"2026-03-01T20:{m:02d}:00") for m in range(0, 60, 9)], 2.0, 1), start=high)
    assert brief.forces == "Two-body attraction of the Earth only."
    assert "Two-body is enough: the neglected terms move the object by less than" in brief.forces_reason
    assert "over the arc of 10 min (smallest sigma 2 arcsec)" in brief.forces_reason
    assert "Earth zonal J2" in longer.forces
    assert "Kept for the arc of 54 min" in longer.forces_reason and "Left out, together less" in longer.forces_reason
    pass_of_leo = fa.fit(loaded(LEO, "s1"))
    assert "Earth zonal J2" in pass_of_leo.forces, "four minutes near the Earth: 24 arcsec"


def test_a_ten_sigma_sighting_leaves_and_nothing_else() -> None:
    for row, error in ((BAD, (10.0, 0.0)), (6, (-6.0, 8.0))):
        fit = fa.fit(with_error(leo(), row, error), forces="two-body")
        assert list(np.flatnonzero(~fit.used)) == [row]
        assert fit.reasons[row].startswith("rejected: chi-square ")
        assert all(reason == "used" for k, reason in enumerate(fit.reasons) if k != row)
        assert fit.determined and fit.verdicts.consistent and normalised(fit, truth(LEO)) < 22.5
        assert f"Row {row + 1} is out: rejected: chi-square" in fit.report()
        assert list(fit.residuals["used"]) == list(fit.used)
        assert fit.dof == 2 * (len(leo()) - 1) - 6


@pytest.mark.parametrize("name", EARTH)
def test_planted_errors_of_every_orbit(name: str) -> None:
    """Ten times the stated sigma in the middle of the real noise of each case."""
    obs = loaded(name, "s5")
    row = case(name)["truth"]["obs_index"] - 1
    fit = fa.fit(with_error(obs, row, (40.0, -30.0)), start=truth(name))
    assert list(np.flatnonzero(~fit.used)) == [row]


def test_the_choice_by_hand_wins() -> None:
    spoilt = with_error(leo(), BAD, (10.0, 0.0))
    kept = fa.fit(spoilt, forces="two-body", keep=[BAD])
    assert kept.used[BAD] and kept.reasons[BAD].startswith("kept by hand though chi-square")
    assert not kept.verdicts.consistent
    out = fa.fit(spoilt, forces="two-body", leave_out=[0, BAD])
    assert list(np.flatnonzero(~out.used)) == [0, BAD]
    assert out.reasons[0] == out.reasons[BAD] == "taken out by hand"
    assert np.isfinite(out.residuals_arcsec).all(), "residuals are given for those that are out as well"
    every = fa.fit(spoilt, forces="two-body", reject=False)
    assert every.used.all() and set(every.reasons) == {"used"}
    # what is left out by hand is as if it had never been there
    fewer = fa.fit(spoilt.without([0, BAD]), start=out.state, forces="two-body")
    np.testing.assert_allclose(fewer.chi2, out.chi2, rtol=1e-7)
    np.testing.assert_allclose(fewer.covariance, out.covariance, rtol=1e-4)


def test_rows_are_those_of_the_file() -> None:
    """A fit of part of the observations names the rows of the loaded file."""
    spoilt = with_error(leo(), BAD, (10.0, 0.0))
    fit = fa.fit(spoilt.without([0]), forces="two-body")
    assert list(fit.residuals["row"]) == [2, 3, 4, 5, 6, 7, 8, 9]
    assert f"Row {BAD + 1} is out" in fit.report()


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (dict(forces="everything"), r"forces must be None, 'two-body' or 'full', got 'everything'"),
        (dict(start=7), r"start must be a Candidate, State, Preliminary or None, got int"),
        (dict(estimate=["clock:XYZ"]), r"estimate names station 'XYZ'; stations: BRN, QLN"),
        (dict(estimate=["wind"]), r"estimate holds 'wind'; give \"clock:CODE\", \"station:CODE\", \"area-to-mass\" or"),
        (dict(estimate=["ballistic"], forces="two-body"), "leaves no room for radiation pressure or drag"),
        (dict(ballistic_m2_kg=-0.1), "ballistic_m2_kg must be a number from 0 on"),
        (dict(keep=[20]), r"keep holds \[20\]; observations are numbered 0 to 8"),
        (dict(leave_out=[-1]), r"leave_out holds \[-1\]; observations are numbered 0 to 8"),
        (dict(keep=[1], leave_out=[1, 2]), r"observations \[1\] are to be both kept and left out; choose one"),
        (dict(leave_out=[0, 1, 2, 3, 4, 5, 6]), r"4 observed numbers cannot fix 6 unknowns"),
        (
            dict(leave_out=[0, 1, 2, 3, 4, 5], estimate=["clock:QLN"]),
            r"6 observed numbers cannot fix 7 unknowns; add observations",
        ),
    ],
)
def test_misuse_names_what_to_change(options: dict, words: str) -> None:
    with pytest.raises(fa.UsageError, match=words):
        fa.fit(invented("SATELLITE"), **options)


def test_misuse_of_observations_and_centres() -> None:
    with pytest.raises(fa.UsageError, match=r"obs must be Observations from firstarc\.load, got str"):
        fa.fit("night.psv")  # type: ignore[arg-type]
    with pytest.raises(fa.UsageError, match="a fit needs three observations, got 2"):
        fa.fit(invented("SATELLITE")[:2])
    with pytest.raises(fa.UsageError, match="start is about the earth, the observations about the sun"):
        fa.fit(invented("MINOR_PLANET"), start=truth(LEO))
    fit = fa.fit(leo(), start=truth(LEO), forces="two-body")
    with pytest.raises(fa.UsageError, match="the fit is about the earth, the observations about the sun"):
        fit.residuals_of(invented("MINOR_PLANET"))


def test_a_rejected_candidate_is_no_start() -> None:
    pre = fa.preliminary(loaded("sh-geo-2nights", "n0"), pick=(0, 3, 5))
    assert pre.best is None
    with pytest.raises(fa.UsageError, match="no admissible preliminary orbit to start from"):
        fa.fit(loaded("sh-geo-2nights", "n0"), start=pre)
    unsolved = [c for c in pre.candidates if c.state is None]
    for one in unsolved:
        with pytest.raises(fa.UsageError, match="has no converged orbit to start from"):
            fa.fit(loaded("sh-geo-2nights", "n0"), start=one)


def test_a_start_that_leads_nowhere_is_a_result_not_an_error() -> None:
    """The station's antipode as a start: whatever comes of it says so in words, and holds no covariance it lacks."""
    far = orbit("earth", Time("2006-06-28T04:30:29", scale="utc"), 90000.0, 0.1, (10.0, 200.0, 20.0, 170.0))
    fit = fa.fit(leo(), start=far, forces="two-body")
    if fit.determined:
        assert normalised(fit, truth(LEO)) < 22.5
    else:
        assert not fit.status.ok or not fit.verdicts.consistent or not fit.verdicts.conditioned
        assert fit.status.code in (Code.NOT_CONVERGED, Code.SINGULAR, Code.CONSTRAINED, Code.CONVERGED)
        assert len(fit.status.sentence) > 20
