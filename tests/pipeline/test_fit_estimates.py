"""Clocks, stations and area-to-mass estimated with the orbit; observations outside the fit predicted."""

from __future__ import annotations

import dataclasses
from functools import cache

import numpy as np
import pytest
from astropy.time import Time
from scipy.special import chdtri

import firstarc as fa
from firstarc.border import planets
from firstarc.constants import DAY_S
from firstarc.dynamics.force_models import Drag, full
from firstarc.dynamics.perturbed_directions import perturbed_directions
from firstarc.dynamics.trajectory import Trajectory
from pipeline.fit_scenes import noisy, normalised, orbit, seen, with_directions
from pipeline.shared_cases import invented, loaded, sightings_script

EPOCH = Time("2026-03-01T20:00:00", scale="utc")
#: High enough for an hour above both stations, low enough for a clock to matter (some 40 arcsec a second).
MEDIUM = orbit("earth", EPOCH, 20000.0, 0.05, (55.0, 84.0, 10.0, 35.0))
ARC = [("BRN" if k % 2 else "QLN", f"2026-03-01T20:{3 * k:02d}:00") for k in range(20)]


@cache
def slow_clock() -> fa.Observations:
    """The invented sightings of the second notebook: four nights, a slow clock, a bad sighting."""
    return invented("SLOW_CLOCK")


def test_a_slow_clock_is_found_within_its_sigma() -> None:
    for late, seed in ((0.3, 1), (-0.2, 2), (0.0, 3)):
        obs = seen(MEDIUM, ARC, 1.0, seed, clock_s={"QLN": late})
        assert obs.altitude_deg().min() > 10.0
        fit = fa.fit(obs, start=MEDIUM, forces="two-body", estimate=["clock:QLN"])
        (clock,) = fit.estimates
        assert (clock.name, clock.unit) == ("clock of QLN", "s")
        assert 0.0 < clock.sigma < 0.1 and abs(clock.value - late) < 3.0 * clock.sigma
        assert fit.determined and fit.verdicts.consistent and fit.used.all()
        assert normalised(fit, MEDIUM) < 22.5
        assert fit.dof == 2 * len(ARC) - 7 and fit.covariance.shape == (6, 6)
        assert f"clock of QLN: {clock.report_lines()[0].partition(': ')[2]}" in fit.report()
        plain = fa.fit(obs, start=MEDIUM, forces="two-body", reject=False)
        assert bool(plain.verdicts.consistent) == (late == 0.0)
        # another unknown never makes the orbit better known
        assert (np.diag(fit.covariance) >= np.diag(plain.covariance) * (1.0 - 1e-3)).all()


def test_the_estimate_is_what_a_slider_would_be_set_to() -> None:
    """As a what-if the estimate takes away the chi-square that it explains."""
    obs = seen(MEDIUM, ARC, 1.0, 4, clock_s={"BRN": 0.25})
    fit = fa.fit(obs, start=MEDIUM, forces="two-body", estimate=["clock:BRN"])
    corrected = obs.with_what_if(fa.WhatIf(clock_s=fit.estimates[0].value, station="BRN"))
    again = fa.fit(corrected, start=fit.state, forces="two-body")
    np.testing.assert_allclose(again.chi2, fit.chi2, rtol=1e-4)
    assert np.linalg.norm(again.state.r_km - fit.state.r_km) < 1e-3


def test_a_displaced_station_is_found_within_its_sigma() -> None:
    """150 m north, 40 m up in truth; the record knows nothing of it."""
    truly = fa.WhatIf(lat_deg=150.0 / 111_000.0, height_m=40.0, station="QLN")
    near = orbit("earth", EPOCH, 7600.0, 0.01, (52.0, 78.3, 0.0, 22.0))
    times = [("QLN" if k % 3 else "BRN", f"2026-03-01T20:0{k // 4}:{15 * (k % 4):02d}") for k in range(36)]
    obs = seen(near, times, 0.5, 5, moved=truly)
    assert obs.altitude_deg().min() > 5.0
    fit = fa.fit(obs, start=near, forces="two-body", estimate=["station:QLN"])
    east, north, up = fit.estimates
    assert [one.name for one in fit.estimates] == ["east of QLN", "north of QLN", "up of QLN"]
    assert {one.unit for one in fit.estimates} == {"m"}
    for one, true_m in ((east, 0.0), (north, 150.0), (up, 40.0)):
        assert 0.0 < one.sigma < 75.0 and abs(one.value - true_m) < 3.5 * one.sigma, one
    assert abs(north.value) > 3.0 * north.sigma, "it is noticed"
    assert fit.determined and normalised(fit, near) < 22.5
    assert not fa.fit(obs, start=near, forces="two-body", reject=False).verdicts.consistent


@pytest.mark.slow
def test_area_to_mass_is_an_unknown_of_the_forces() -> None:
    """The invented object has none: the estimate is zero within its sigma, radiation pressure being modelled."""
    obs = slow_clock()[:14]
    fit = fa.fit(obs, estimate=["clock:QLN", "area-to-mass"])
    clock, light = fit.estimates
    assert (light.name, light.unit) == ("area-to-mass", "m²/kg")
    assert abs(light.value) < 4.0 * light.sigma and light.sigma > 0.0
    assert "solar radiation pressure" in fit.forces
    assert abs(clock.value - 0.25) < 3.5 * clock.sigma


def under_drag(state: fa.State, sightings: list[tuple[str, str]], ballistic_m2_kg: float, seed: int) -> fa.Observations:
    """Sightings (1 arcsec) of an orbit integrated with all forces and drag."""
    blank = seen(state, sightings, 1.0)
    lines = blank.sight_lines
    plain = np.concatenate([state.r_km, state.v_km_s])
    t_state_s = sum(a - b for a, b in zip(state.epoch_tdb, lines.epoch_tdb, strict=True)) * DAY_S
    span = (min(t_state_s, lines.t_s.min()) - 60.0, max(t_state_s, lines.t_s.max()) + 60.0)
    tracks = planets.tracks("earth", lines.epoch_tdb, span)
    forces = full("earth", tracks, planets.earth_pole(lines.epoch_tdb), drag=Drag(ballistic_m2_kg))
    path = Trajectory(forces, plain, t_state_s)
    los, _, _ = perturbed_directions(path, lines.t_s, lines.observer_km, lines.center_velocity_km_s, True)
    return with_directions(blank, noisy(los, np.full((len(blank), 2), 1.0), np.random.default_rng(seed)))


def test_drag_is_modelled_when_given_and_found_when_asked_for() -> None:
    """A low satellite over a day: without drag the fit is inconsistent, with it the orbit and C_D A / m come back."""
    low = orbit("earth", EPOCH, 6800.0, 0.001, (51.0, 84.0, 10.0, 35.0))
    times = [
        ("QLN" if k % 2 else "BRN", f"2026-03-0{1 + k // 16}T{20 + k % 4:02d}:{3 * (k % 16):02d}:00") for k in range(32)
    ]
    obs = under_drag(low, times, 0.03, 3)
    without = fa.fit(obs, start=low, reject=False)
    assert not without.verdicts.consistent
    assert "Drag is not included" in without.forces_reason and "give or estimate" in without.forces_reason
    given = fa.fit(obs, start=low, ballistic_m2_kg=0.03)
    assert "drag" in given.forces and given.verdicts.consistent and not given.estimates
    free = fa.fit(obs, start=low, estimate=["ballistic"])
    (drag,) = free.estimates
    assert (drag.name, drag.unit) == ("ballistic coefficient C_D A/m", "m²/kg")
    assert 0.0 < drag.sigma < 0.01 and abs(drag.value - 0.03) < 3.5 * drag.sigma
    assert free.verdicts.consistent and free.dof == given.dof - 1
    assert given.determined and free.determined, free.verdicts
    assert f"drag with {drag.value:.4g} m2/kg" in free.forces
    later = under_drag(low, [("BRN", f"2026-03-04T21:{m:02d}:00") for m in range(4)], 0.03, 4)
    assert max(free.residuals_of(later)["chi"]) < 4.0


def test_drag_is_for_the_earth_only() -> None:
    comet = loaded("sh-comet-parabolic", "s1")
    with pytest.raises(fa.UsageError, match="drag acts on satellites of the Earth only"):
        fa.fit(comet, ballistic_m2_kg=0.01)


def test_slow_clock_and_bad_sighting_of_the_notebook() -> None:
    script = sightings_script().SLOW_CLOCK
    obs, bad, late = slow_clock(), script["planted"]["sighting"], script["clock_s"]["QLN"]
    first = fa.fit(obs[:14])
    assert not first.verdicts.consistent and not first.used[bad] and first.notes
    clock = fa.fit(obs[:14], estimate=["clock:QLN"])
    assert list(np.flatnonzero(~clock.used)) == [bad], "the good ones come back"
    assert clock.verdicts.consistent and clock.determined
    assert abs(clock.estimates[0].value - late) < 3.0 * clock.estimates[0].sigma
    corrected = obs.with_what_if(fa.WhatIf(clock_s=round(clock.estimates[0].value, 2), station="QLN"))
    again = fa.fit(corrected[:14])
    later = again.residuals_of(corrected[14:])
    assert list(later["row"]) == [15, 16, 17]
    assert max(later["chi"]) < np.sqrt(chdtri(2, 1e-3))


def test_other_nights_are_predicted_within_the_stated_sigma() -> None:
    """Two nights fitted, the third predicted, 24 times: chi-square of the predictions as it should be."""
    body = orbit("sun", Time("2026-05-20T00:00:00", scale="utc"), 2.4e8, 0.31, (9.4, 241.0, 318.0, 28.0))
    nights = [("BRN", f"2026-05-{d}T{h}:{m:02d}:00") for d in (11, 19, 28) for h, m in ((21, 10), (21, 50), (22, 30))]
    values = []
    for seed in range(24):
        obs = seen(body, nights, 0.4, 100 + seed)
        fit = fa.fit(obs[:6], start=body, forces="two-body")
        found = fit.residuals_of(obs[6:7])
        values.append(float(found["chi"][0]) ** 2)
        assert found["sigma_ra_arcsec"][0] > 5.0, "the orbit's share is the larger by far"
    # 24 values of two degrees of freedom each: the sum has 48; the orbit's range enters it bent, so 99.8 % each side
    low, high = chdtri(48, 0.998), chdtri(48, 0.002)
    assert low < sum(values) < high


def test_predictions_of_a_fit_with_an_estimated_clock() -> None:
    """The estimated offset belongs to that station: it is applied, with its share of the sigma, and to no other."""
    obs = slow_clock()
    fit = fa.fit(obs[:14], estimate=["clock:QLN"])
    found = fit.residuals_of(obs[14:])
    assert max(found["chi"]) < np.sqrt(chdtri(2, 1e-3))
    by_hand = obs.with_what_if(fa.WhatIf(clock_s=fit.estimates[0].value, station="QLN"))
    np.testing.assert_allclose(
        found["dra_arcsec"], fa.fit(by_hand[:14]).residuals_of(by_hand[14:])["dra_arcsec"], atol=0.05
    )
    only = fit.residuals_of(obs[[14, 16]])  # without any sighting of that station
    np.testing.assert_allclose(only["dra_arcsec"], found["dra_arcsec"][[0, 2]], atol=1e-6)
    np.testing.assert_allclose(only["sigma_ra_arcsec"], found["sigma_ra_arcsec"][[0, 2]], rtol=1e-6)


def test_observations_of_the_fit_itself_have_its_residuals() -> None:
    obs = seen(MEDIUM, ARC, 1.0, 8)
    fit = fa.fit(obs, start=MEDIUM, forces="two-body")
    again = fit.residuals_of(obs)
    np.testing.assert_allclose(again["dra_arcsec"], fit.residuals_arcsec[:, 0], atol=1e-7)
    np.testing.assert_allclose(again["ddec_arcsec"], fit.residuals_arcsec[:, 1], atol=1e-7)


def test_no_covariance_no_prediction() -> None:
    """Where the observations leave a direction free there is no sigma, hence no judgement of others."""
    fit = fa.fit(seen(MEDIUM, ARC, 1.0, 8), start=MEDIUM, forces="two-body")
    free = dataclasses.replace(fit, solution=dataclasses.replace(fit.solution, covariance=None))
    with pytest.raises(fa.UsageError, match="leaves a direction free, so that predictions have no sigma"):
        free.residuals_of(fit.observations)
