"""Observations as a frozen sequence: subsets, what-ifs, tables, equality, pickling."""

from __future__ import annotations

import dataclasses
import pickle

import numpy as np
import pytest

import firstarc as fa
from firstarc.border import earth_orientation
from firstarc.observing.stations import mpc_site
from observing.input_texts import CSV, PSV, ROVING, file_of

C_KM_S = 299792.458


@pytest.fixture(scope="module")
def obs() -> fa.Observations:
    return fa.load(file_of(PSV))


def test_subsets_keep_row_numbers_and_epoch(obs: fa.Observations) -> None:
    for part, rows in [
        (obs[[2, 0]], [2, 0]),
        (obs[1:], [1, 2]),
        (obs[np.array([True, False, True])], [0, 2]),
        (obs.without([0]), [1, 2]),
        (obs.without([-1]), [0, 1]),
        (obs.without([0])[[1]], [2]),
        (obs[[np.int64(1)]], [1]),
    ]:
        assert part.rows.tolist() == rows
        assert part.epoch_tdb == obs.epoch_tdb
        np.testing.assert_array_equal(part.sight_lines.t_s, obs.sight_lines.t_s[rows])
        np.testing.assert_array_equal(part.sight_lines.los, obs.sight_lines.los[rows])
        np.testing.assert_array_equal(part.sight_lines.observer_km, obs.sight_lines.observer_km[rows])
    assert [o.row for o in obs] == [0, 1, 2]
    assert obs[-1] == obs[2]


@pytest.mark.parametrize("key", [3, -4, [0, 5], [0, 0], [1.5], "a", None, [[0]], [True, False], []])
def test_indices_that_do_not_fit(obs: fa.Observations, key: object) -> None:
    with pytest.raises(fa.UsageError):
        obs[key]  # type: ignore[call-overload]
    with pytest.raises(IndexError):
        obs[17]


def test_nothing_can_be_changed(obs: fa.Observations) -> None:
    with pytest.raises(dataclasses.FrozenInstanceError):
        obs.center = "earth"  # type: ignore[misc]
    for array in (obs.rows, obs.records.ra_deg, obs.sight_lines.los, obs.sight_lines.t_s):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


def test_equality_and_pickling(obs: fa.Observations) -> None:
    assert obs.sight_lines == obs.sight_lines
    for one in (
        obs,
        obs[[0, 2]],
        obs.with_what_if(fa.WhatIf(clock_s=0.1, rows=[1])),
        fa.load(file_of(ROVING)),
    ):
        back = pickle.loads(pickle.dumps(one))
        assert back == one and hash(back) == hash(one)
        assert back.sight_lines == one.sight_lines and back.warnings == one.warnings
        assert not back.records.ra_deg.flags.writeable
    assert obs != obs[[0, 1]] and obs != fa.load(file_of(PSV.replace("27.254933", "27.254934")))
    assert obs != "obs"
    assert pickle.loads(pickle.dumps(obs[0])) == obs[0]


def test_sight_lines(obs: fa.Observations) -> None:
    s = obs.sight_lines
    assert s.light_time and s.epoch_tdb == (2459097.5, 0.0)
    # 07:00:00 UTC is 07:01:09.184 TT, and TDB is within 2 ms of it.
    assert s.t_s[0] == pytest.approx(7 * 3600 + 69.184, abs=2e-3)
    np.testing.assert_allclose(np.diff(s.t_s), 1800.0, atol=1e-5)
    np.testing.assert_allclose(np.linalg.norm(s.los, axis=1), 1.0, atol=1e-15)
    np.testing.assert_allclose(s.sigma_rad[0], np.radians(np.array([0.3, 0.4]) / 3600.0))
    # The Earth is about 1.008 au from the Sun in early September; the Sun goes round the barycentre at about
    # 15 m/s.
    assert np.linalg.norm(s.observer_km, axis=1) / 149597870.7 == pytest.approx(1.008, abs=2e-3)
    assert np.all(np.linalg.norm(s.center_velocity_km_s, axis=1) < 0.02)
    earth = fa.load(file_of(PSV), center="earth").sight_lines
    assert np.linalg.norm(earth.observer_km, axis=1) == pytest.approx(6372.0, abs=6.0)
    assert np.linalg.norm(earth.center_velocity_km_s, axis=1) == pytest.approx(29.5, abs=0.3)


def test_geometric_directions_have_no_light_time() -> None:
    obs = fa.load(file_of(PSV), directions="geometric")
    assert not obs.light_time and not obs.sight_lines.light_time
    np.testing.assert_array_equal(obs.sight_lines.los, fa.load(file_of(PSV)).sight_lines.los)


def test_what_if_moves_clock_and_station() -> None:
    obs = fa.load(file_of(ROVING))
    clock = obs.with_what_if(fa.WhatIf(clock_s=0.25))
    np.testing.assert_allclose(clock.sight_lines.t_s - obs.sight_lines.t_s, 0.25, atol=1e-9)
    assert clock.utc_iso(0) == "2006-06-28T04:28:24.250Z" and clock[0].time_utc == "2006-06-28T04:28:24Z"
    moved = obs.with_what_if(fa.WhatIf(lat_deg=0.01, lon_deg=-0.02, height_m=5.0))
    site, recorded = moved.stations[0], obs.stations[0]
    assert site.lat_deg == pytest.approx(33.827) and site.lon_deg == pytest.approx(-106.68) and site.height_m == 1515.0
    wanted = fa.load(file_of(ROVING.replace("-106.66|33.817|1510", "-106.68|33.827|1515"))).sight_lines
    np.testing.assert_allclose(moved.sight_lines.observer_km, wanted.observer_km, atol=1e-9)
    assert obs.stations == (recorded,) and moved.recorded == obs and obs.recorded is obs
    assert moved.what_if == (fa.WhatIf(lat_deg=0.01, lon_deg=-0.02, height_m=5.0),)
    assert obs.with_what_if(fa.WhatIf()) == obs and moved.with_what_if() == obs


def test_what_if_of_one_station_or_one_row() -> None:
    text = CSV.replace("0.5,704,abc\n2020-09-05T08", "0.5,568,abc\n2020-09-05T08")
    obs = fa.load(file_of(text))
    part = obs.with_what_if(fa.WhatIf(clock_s=1.0, station="568"), fa.WhatIf(clock_s=2.0, rows=[2]))
    np.testing.assert_allclose(part.sight_lines.t_s - obs.sight_lines.t_s, [0.0, 1.0, 2.0], atol=1e-9)
    # Rows are those of the input, also in a subset.
    np.testing.assert_allclose(part[[2]].sight_lines.t_s, obs.sight_lines.t_s[[2]] + 2.0, atol=1e-9)
    both = obs.with_what_if(fa.WhatIf(clock_s=1.0), fa.WhatIf(clock_s=0.5, rows=(0,)))
    np.testing.assert_allclose(both.sight_lines.t_s - obs.sight_lines.t_s, [1.5, 1.0, 1.0], atol=1e-9)
    tilted = obs.with_what_if(fa.WhatIf(height_m=100.0, rows=[0]))
    assert [s.height_m - mpc_site(s.code).height_m for s in tilted.stations] == [100.0, 0.0, 0.0]  # type: ignore[union-attr]


def test_what_if_says_what_is_wrong(obs: fa.Observations) -> None:
    with pytest.raises(fa.UsageError, match=r"no observation is from station '568'; stations: 704"):
        obs.with_what_if(fa.WhatIf(clock_s=1.0, station="568"))
    with pytest.raises(fa.UsageError, match=r"give fa\.WhatIf"):
        obs.with_what_if({"clock_s": 1.0})  # type: ignore[arg-type]
    with pytest.raises(fa.UsageError, match=r"latitude of station '704' becomes 123\.8183 deg"):
        _ = obs.with_what_if(fa.WhatIf(lat_deg=90.0)).sight_lines
    for wrong in (
        {"clock_s": float("nan")},
        {"clock_s": "1"},
        {"rows": [0.5]},
        {"rows": [-1]},
        {"rows": 3},
        {"station": 704},
    ):
        with pytest.raises(fa.UsageError):
            fa.WhatIf(**wrong)  # type: ignore[arg-type]


def test_what_if_is_written_as_it_is_typed() -> None:
    assert repr(fa.WhatIf(clock_s=0.2, station="704", rows=[1, 2])) == "WhatIf(clock_s=0.2, station='704', rows=(1, 2))"
    assert repr(fa.WhatIf()) == "WhatIf()"
    one = fa.WhatIf(lat_deg=-0.1, lon_deg=1e-7)
    assert eval(repr(one), {"WhatIf": fa.WhatIf}) == one


def test_observer_track_meets_the_observations(obs: fa.Observations) -> None:
    s = obs.sight_lines
    for site in (obs.stations[0], "704"):
        position_km, velocity_km_s = obs.observer_track(site, s.t_s)
        np.testing.assert_allclose(position_km, s.observer_km, atol=1e-6)
        np.testing.assert_allclose(velocity_km_s, s.center_velocity_km_s, atol=1e-9)
    with pytest.raises(fa.UsageError, match="station '568' is not in use"):
        obs.observer_track("568", [0.0])


def test_times_of_the_track(obs: fa.Observations) -> None:
    assert [obs.utc_iso_at(t, 3) for t in obs.sight_lines.t_s] == [obs.utc_iso(i) for i in range(3)]


def test_csv_text_gives_the_same_numbers() -> None:
    for text in (PSV, ROVING, CSV, ROVING.replace("1510|2006-06-28T04:28:55", "1511|2006-06-28T04:28:55")):
        obs = fa.load(file_of(text))
        back = fa.load(file_of(obs.to_csv_text()), center=obs.center)
        assert back.sight_lines == obs.sight_lines
        assert back.stations == obs.stations
        assert [o.time_utc for o in back] == [o.time_utc for o in obs]


def test_the_table_loads_again(obs: fa.Observations) -> None:
    assert obs.table["ra"].unit == "deg" and obs.table["sigma_ra"].unit == "arcsec"
    assert fa.load(obs.table, center="sun").sight_lines == obs.sight_lines


def test_text_and_html_say_the_same(obs: fa.Observations) -> None:
    for words in ("3 observations of abc, center Sun", "2020-09-05T07:30:00.000Z", "27.255802", "704"):
        assert words in repr(obs) and words in obs._repr_html_()
    assert "What-if in force" in repr(obs.with_what_if(fa.WhatIf(clock_s=1.0)))
    long = "time_utc,ra_deg,dec_deg,sigma_arcsec,station\n" + "".join(
        f"2020-09-05T07:{i:02d}:00Z,27,6,1,704\n" for i in range(60)
    )
    many = fa.load(file_of(long), center="sun")
    assert "20 rows between are not shown." in repr(many)
    assert "Linc" in repr(obs[0]) and "row 1" in repr(obs[0])


def test_several_objects() -> None:
    text = PSV.replace("abc    |CCD |704 |2020-09-05T08", "abd    |CCD |704 |2020-09-05T08")
    obs = fa.load(file_of(text))
    assert obs.object_name == "abc, abd"
    assert any("2 designations (abc, abd): taken as one object" in w for w in obs.warnings)
    assert obs.of_object("abd").rows.tolist() == [2]
    with pytest.raises(fa.UsageError, match="they name 'abc', 'abd'"):
        obs.of_object("x")
    settled = fa.load(file_of(text.replace("trkSub", "provID")), center="sun")
    assert any("several objects (abc, abd): an orbit is for one of them" in w for w in settled.warnings)


# -- doubts
# ------------------------------------------------------------------------------------------------------


def warned(text: str, words: str, **arguments: object) -> None:
    obs = fa.load(file_of(text), **arguments)  # type: ignore[arg-type]
    assert any(words in w for w in obs.warnings), obs.warnings
    assert any(words in line for line in obs.report_lines() if isinstance(line, str))


def test_equal_times_and_disorder() -> None:
    twice = PSV.replace("07:30:00.000", "07:00:00.000")
    warned(twice, "rows 1 and 2 (line 7, line 8) have the same time and station, 2020-09-05T07:00:00.000Z")
    obs = fa.load(file_of(twice))
    assert obs.without([1]).warnings == ()
    back = PSV.replace("07:30:00.000", "06:30:00.000")
    warned(
        back,
        "not in order of time (row 2, line 8, is earlier than the row above it); the order of the input is kept",
    )
    assert fa.load(file_of(back)).sight_lines.t_s[1] < fa.load(file_of(back)).sight_lines.t_s[0]


def test_an_object_below_the_horizon() -> None:
    """-66 deg as seen from +33.8 deg culminates 9.8 deg below the horizon."""
    text = PSV.replace("+6.672609", "-66.000000")
    warned(text, "row 2 (line 8): the object is", center="sun")
    warned(text, "below the horizon of station 704 Lincoln Laboratory ETS, New Mexico", center="sun")
    obs = fa.load(file_of(PSV))
    assert not any("horizon" in w for w in obs.warnings)
    assert any("horizon" in w for w in obs.with_what_if(fa.WhatIf(lon_deg=150.0)).warnings)


def test_stations_that_are_not_on_the_ground() -> None:
    warned(ROVING.replace("|1510|", "|1510000|"), "lies 7881.5 km from the Earth's centre (height 1510000 m)")
    warned(CSV.replace(",704,", ",500,"), "station 500 Geocentric is the Earth's centre: no horizon is checked")
    assert np.isnan(fa.load(file_of(CSV.replace(",704,", ",500,"))).altitude_deg()).all()


def test_times_that_the_tables_do_not_reach() -> None:
    first, prediction, last = earth_orientation.table().span_utc
    assert first == "1973-01-02" and first < prediction < last
    warned(PSV.replace("2020", "1965"), f"all rows: outside the Earth-orientation table ({first} to {last})")
    warned(
        PSV.replace("2020-09-05", prediction),
        f"Earth orientation is a prediction (table {first} to {last}, predicted from",
    )
    warned(PSV.replace("2020", "2700"), "no certain leap seconds")
    warned(PSV.replace("2020", "2700"), "a series good to about 10 km")
    assert np.isfinite(fa.load(file_of(PSV.replace("2020", "2700"))).sight_lines.observer_km).all()
    assert not fa.load(file_of(PSV)).warnings


def test_obs_time_without_its_z() -> None:
    warned(PSV.replace("07:30:00.000Z", "07:30:00.000 "), "obsTime of row 2 lacks its Z and was read as UTC")


def test_a_time_error_that_outweighs_the_angle_error() -> None:
    text = CSV.replace("object", "sigma_time_s").replace("abc", "60")
    fast = ROVING.replace("astCat", "rmsTime").replace("UNK", "0.01")
    warned(fast, "the stated sigma of the time (up to 0.01 s) moves the object by up to", center="earth")
    assert fa.load(file_of(fast)).sight_lines.sigma_time_s.tolist() == [0.01] * 3
    assert not any("sigma of the time" in w for w in fa.load(file_of(text)).warnings)
