"""Other ways into the fit: order of times, dates beyond the tables, geometric directions, measured ranges."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from astropy.time import Time

import firstarc as fa
from firstarc.dynamics.light_time import predicted_directions
from pipeline.fit_scenes import normalised, orbit, seen
from pipeline.shared_cases import frame_of, loaded, truth

LEO = "sh-leo-pass"
EPOCH = Time("2026-03-01T20:00:00", scale="utc")
MEDIUM = orbit("earth", EPOCH, 20000.0, 0.05, (55.0, 84.0, 10.0, 35.0))
ARC = [("BRN" if k % 2 else "QLN", f"2026-03-01T20:{4 * k:02d}:00") for k in range(12)]


def test_times_in_any_order() -> None:
    obs = loaded(LEO, "s1")
    order = [4, 0, 8, 2, 6, 1, 7, 3, 5]
    straight = fa.fit(obs, start=truth(LEO))
    shuffled = fa.fit(obs[order], start=truth(LEO))
    np.testing.assert_allclose(shuffled.chi2, straight.chi2, rtol=1e-8)
    np.testing.assert_allclose(shuffled.state.r_km, straight.state.r_km, rtol=1e-10)
    np.testing.assert_allclose(shuffled.residuals_arcsec, straight.residuals_arcsec[order], atol=1e-5)
    assert list(shuffled.residuals["row"]) == [k + 1 for k in order]
    # the way without a start, preliminary orbit included
    np.testing.assert_allclose(fa.fit(obs[order]).chi2, straight.chi2, rtol=1e-6)


def test_a_table_has_the_fit_of_its_file() -> None:
    """Recorded values by way of a DataFrame: the same fit within the digits of the table."""
    obs = loaded(LEO, "s1")
    frame = frame_of(obs).sample(frac=1.0, random_state=3)
    by_table = fa.fit(fa.load(frame, center="earth"), start=truth(LEO))
    np.testing.assert_allclose(by_table.chi2, fa.fit(obs, start=truth(LEO)).chi2, rtol=1e-4)


@pytest.mark.filterwarnings("ignore:.*dubious year")  # said by the load in our own words
def test_dates_beyond_the_earth_orientation_table() -> None:
    """2045: no Earth-orientation yet. The load says so, the fit works; the Sun and Moon are still in the ephemeris."""
    state = orbit("earth", Time("2045-03-01T20:00:00", scale="utc"), 20000.0, 0.05, (55.0, 84.0, 10.0, 35.0))
    times = [(station, time.replace("2026", "2045")) for station, time in ARC]
    obs = seen(state, times, 1.0, 1)
    assert any("outside the Earth-orientation table" in warning for warning in obs.warnings)
    fit = fa.fit(obs, start=state)
    assert fit.status.ok and "J2" in fit.forces
    plain = fa.fit(obs, start=state, forces="two-body")
    assert normalised(plain, state) < 22.5


@pytest.mark.filterwarnings("ignore:.*dubious year")
def test_dates_beyond_the_ephemeris() -> None:
    """2060 lies outside the planetary ephemeris: forces are decided without third bodies, and that is said."""
    state = orbit("earth", Time("2060-03-01T20:00:00", scale="utc"), 20000.0, 0.05, (55.0, 84.0, 10.0, 35.0))
    obs = seen(state, [(station, time.replace("2026", "2060")) for station, time in ARC], 1.0, 1)
    fit = fa.fit(obs, start=state)
    assert "No ephemeris was given: the Sun and the Moon were not considered." in fit.forces_reason
    with pytest.raises(fa.UsageError, match="these forces need the planetary ephemeris"):
        fa.fit(obs, start=state, forces="full")


def test_geometric_directions() -> None:
    """Same-instant directions: fitted as such they give the truth, as astrometric ones they miss it by far."""
    geometric = seen(MEDIUM, ARC, 1.0, 2, directions="geometric")
    assert not geometric.light_time
    fit = fa.fit(geometric, start=MEDIUM, forces="two-body")
    assert fit.determined and fit.verdicts.consistent and normalised(fit, MEDIUM) < 22.5
    wrong = fa.fit(replace(geometric, directions="astrometric"), start=MEDIUM, forces="two-body")
    assert normalised(wrong, MEDIUM) > 100.0, "light time and the Earth's motion are 20 arcsec"


def ranged(sigma_km: float, seed: int) -> fa.Observations:
    """The medium orbit with a measured slant range to every other sighting."""
    bare = seen(MEDIUM, ARC, 1.0)
    s = bare.sight_lines
    t_state = ((MEDIUM.epoch_tdb[0] - s.epoch_tdb[0]) + (MEDIUM.epoch_tdb[1] - s.epoch_tdb[1])) * 86400.0
    # the light path by clocks at rest with the Earth: no motion of the centre in it
    _, path, _ = predicted_directions(
        np.concatenate([MEDIUM.r_km, MEDIUM.v_km_s]), t_state, s.t_s, s.observer_km, 0.0 * s.observer_km,
        MEDIUM.gm_km3_s2, True,
    )  # fmt: skip
    random = np.random.default_rng(seed)
    values = path.reshape(-1) + sigma_km * random.standard_normal(len(ARC))
    cells = [f"{value:.9f}" if k % 2 == 0 else "" for k, value in enumerate(values)]
    sigmas = [f"{sigma_km}" if cell else "" for cell in cells]
    return seen(MEDIUM, ARC, 1.0, seed, extra={"range_km": cells, "sigma_range_km": sigmas})


def test_measured_ranges_make_the_orbit_better_known() -> None:
    with_ranges = ranged(0.05, 4)
    assert np.isfinite(with_ranges.sight_lines.range_km).sum() == len(ARC) // 2
    fit = fa.fit(with_ranges, start=MEDIUM, forces="two-body")
    without = fa.fit(seen(MEDIUM, ARC, 1.0, 4), start=MEDIUM, forces="two-body")
    assert fit.dof == without.dof + len(ARC) // 2
    assert fit.determined and fit.verdicts.consistent and normalised(fit, MEDIUM) < 22.5
    assert fit.sigmas.a_km < 0.2 * without.sigmas.a_km
    better = np.linalg.eigvalsh(without.covariance_rtn[:3, :3] - fit.covariance_rtn[:3, :3])
    assert better.min() > -1e-3 * np.trace(without.covariance_rtn[:3, :3])
    # a range that is no longer believed weighs nothing
    weak = fa.fit(ranged(1e3, 4), start=MEDIUM, forces="two-body", reject=False)
    np.testing.assert_allclose(weak.sigmas.a_km, without.sigmas.a_km, rtol=1e-3)


def test_a_wrong_range_is_rejected() -> None:
    good = ranged(0.05, 4)
    values = good.records.range_km.copy()
    values[4] += 1.0  # twenty sigma
    fit = fa.fit(replace(good, records=replace(good.records, range_km=values)), start=MEDIUM, forces="two-body")
    assert list(np.flatnonzero(~fit.used)) == [4]


def test_many_sightings_of_a_night_without_stated_sigma_count_less() -> None:
    """Default sigmas are enlarged where a station gave more than four in a night; stated ones stand as they are."""
    stated = seen(MEDIUM, ARC, 1.0, 5)
    fit = fa.fit(stated, start=MEDIUM, forces="two-body")
    np.testing.assert_allclose(fit.sigma_arcsec, 1.0, rtol=1e-12)
    frame = frame_of(stated).drop(columns=["sigma_ra_arcsec", "sigma_dec_arcsec"])
    obs = fa.load(frame, center="earth")
    plain = np.degrees(obs.sight_lines.sigma_rad) * 3600.0
    wide = fa.fit(obs, start=MEDIUM, forces="two-body").sigma_arcsec
    np.testing.assert_allclose(wide / plain, np.sqrt(6.0 / 4.0), rtol=1e-9)  # six of each station
