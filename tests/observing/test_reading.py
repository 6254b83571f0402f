"""What ``load`` makes of good input in every form."""

from __future__ import annotations

import hashlib
import io
from pathlib import Path

import numpy as np
import pytest

import firstarc as fa
from observing.input_texts import CSV, PSV, ROVING, file_of


def test_psv(tmp_path: Path) -> None:
    path = tmp_path / "night.psv"
    path.write_text(PSV)
    obs = fa.load(path)
    assert len(obs) == 3 and obs.object_name == "abc" and obs.center == "sun"
    assert obs.source.format == "ADES PSV" and obs.source.path == str(path)
    assert obs.source.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert obs.source.header == (
        "# version=2022",
        "# observatory",
        "! mpcCode 704",
        "# observers",
        "! name A. Nobody",
    )
    one = obs[1]
    assert (one.row, one.time_utc, one.ra_deg, one.dec_deg) == (
        1,
        "2020-09-05T07:30:00.000Z",
        27.255802,
        6.672609,
    )
    assert (one.sigma_ra_arcsec, one.sigma_dec_arcsec, one.station) == (0.3, 0.4, "704")
    assert obs.warnings == ()


def test_psv_as_other_systems_write_it() -> None:
    plain = fa.load(file_of(PSV))
    for text in (
        "\ufeff" + PSV,
        PSV.replace("\n", "\r\n"),
        PSV.replace("\n", "\r"),
        PSV.replace("|", "\t|  "),
        PSV.replace("\nabc", "\n\n   \nabc"),
        PSV.replace("Gaia2\n", "Gaia2|\n").replace("astCat\n", "astCat|\n"),
    ):
        obs = fa.load(io.BytesIO(text.encode("utf-8")))
        assert obs.sight_lines == plain.sight_lines
        assert obs.warnings == ()


def test_several_keyword_records_with_other_columns() -> None:
    text = PSV + (
        "# observatory\n! mpcCode 568\n"
        "permID|trkSub|mode|stn|obsTime|dec|ra|astCat|mag|band|remarks\n"
        "|abc|CCD|568|2020-09-05T09:00:00Z|6.6743|27.2583|UNK|20.1|V|a <b>remark</b>\n"
    )
    obs = fa.load(file_of(text))
    assert [s.code for s in obs.stations] == ["704", "568"]
    assert (obs[3].ra_deg, obs[3].dec_deg) == (27.2583, 6.6743)
    assert obs.source.header[-1] == "! mpcCode 568"
    assert obs.table["remarks"][3] == "a <b>remark</b>" and obs.table["mag"][3] == "20.1"
    assert any("row 4: 1.5″ taken (CCD, no star catalogue named" in w for w in obs.warnings)


def test_rows_of_other_kinds_are_counted() -> None:
    text = PSV + (
        "permID|mode|stn|obsTime|obsCenter|deltaRA|deltaDec\n"
        "1|CCD|F51|2016-08-29T12:32:34Z|Jupiter|0.01|0.02\n1|CCD|F51|2016-08-29T12:33:34Z|Jupiter|0.01|0.02\n"
        "permID|trx|rcv|obsTime|delay|rmsDelay\n1|251|251|2016-08-29T12:32:34Z|1.2|0.1\n"
    )
    obs = fa.load(file_of(text))
    assert len(obs) == 3
    assert "2 offset observations set aside (lines 11, 12): only optical directions are used" in obs.warnings
    assert "1 radar observation set aside (line 14): only optical directions are used" in obs.warnings


def test_sigmas_come_from_rms_or_the_precision_group() -> None:
    head = "trkSub|mode|stn|obsTime|ra|dec|rmsCorr|rmsTime|precTime|precRA|precDec|astCat\n"
    text = (
        head + "a|PHO|675|1977-10-11T10:06:31Z|60.0|60.0|||10|0.1|1|UNK\n"
        "a|PHO|675|1977-10-12T10:00:32Z|60.1|60.0|0.25|2.5||||UNK\n"
    )
    obs = fa.load(file_of(text))
    records = obs.records
    # 0.1 s of time is 1.5 arcsec, times cos 60 deg; 10e-6 d is 0.864 s.
    assert records.sigma_ra_arcsec[0] == pytest.approx(np.hypot(2.5, 3600 * 0.1 * 0.5 / np.sqrt(12)))
    assert records.sigma_time_s[0] == pytest.approx(0.864 / np.sqrt(12))
    assert (records.corr[1], records.sigma_time_s[1]) == (0.25, 2.5)
    assert obs.sight_lines.corr.tolist() == [0.0, 0.25]


def test_default_sigma_carries_the_rounding_of_the_written_digits() -> None:
    """4 decimals of a degree are steps of 0.36 arcsec, sigma 0.36/sqrt(12); default 1 arcsec."""
    text = "trkSub|mode|stn|obsTime|ra|dec|astCat\na|CCD|704|2020-09-05T07:00:00Z|27.2549|6.6720|Gaia2\n"
    obs = fa.load(file_of(text), center="sun")
    assert obs.records.sigma_dec_arcsec[0] == pytest.approx(np.hypot(1.0, 0.36 / np.sqrt(12.0)))
    assert any("row 1: 1″ taken" in w and "Vereš" in w for w in obs.warnings)


def test_roving_stations_get_names_and_letters() -> None:
    obs = fa.load(file_of(ROVING))
    assert [(s.code, s.name) for s in obs.stations] == [("247", "roving, 33.8170° N 106.6600° W 1510 m")]
    assert (obs[0].lon_deg, obs[0].lat_deg, obs[0].height_m) == (-106.66, 33.817, 1510.0)
    second = ROVING.replace("33.817|1510|2006-06-28T04:28:55", "33.9|1510|2006-06-28T04:28:55")
    two = fa.load(file_of(second))
    assert [two.station_of(i).code for i in range(3)] == ["247a", "247b", "247a"]


def test_itrf_cylinder_is_the_same_place() -> None:
    site = fa.Site("x", "x", -106.66, 33.817, 1510.0)
    x, y, z = site.itrs_km
    text = ROVING.replace("WGS84|399|-106.66|33.817|1510", f"ITRF|399|-106.66|{np.hypot(x, y)!r}|{z!r}")
    text = text.replace("np.float64(", "").replace(")", "")
    found, wanted = fa.load(file_of(text)).sight_lines, fa.load(file_of(ROVING)).sight_lines
    np.testing.assert_allclose(found.observer_km, wanted.observer_km, atol=1e-9)


def test_own_stations_win_over_the_list() -> None:
    own = {"704": {"lon_deg": 10.0, "lat_deg": 50.0, "height_m": 300.0, "name": "Invented"}}
    obs = fa.load(file_of(CSV), stations=own)
    assert obs.stations == (fa.Site("704", "Invented", 10.0, 50.0, 300.0),)
    site = fa.load(file_of(CSV), stations={"704": fa.Site("?", "Hill", 10.0, 50.0, 300.0)}).stations[0]
    assert (site.code, site.name) == ("704", "Hill")


def test_csv_with_every_way_to_write_a_direction() -> None:
    texts = [
        "time_utc;ra_hms;dec_dms;sigma_arcsec;station\n2020-09-05T07:00:00Z;01:49:01.18392;-06 40 19.3404;1;010\n",
        "time_utc\tra_h\tdec_deg\tsigma_arcsec\tstation\n2020-09-05 07:00:00\t1.8169955333333333\t-6.672039\t1\t010\n",
        "time_utc,ra_deg,dec_deg,sigma_arcsec,station\n2020-09-05T07:00:00Z,27.254933,-6.672039,1,010\n",
        "obsTime,ra,dec,rmsRA,rmsDec,stn\n2020-09-05T07:00:00Z,27.254933,-6.672039,1,1,010\n",
    ]
    loaded = [fa.load(file_of(t), center="sun") for t in texts]
    assert {obs[0].station for obs in loaded} == {"010"}
    for obs in loaded:
        assert obs[0].ra_deg == pytest.approx(27.254933, abs=1e-12)
        assert obs[0].dec_deg == pytest.approx(-6.672039, abs=1e-12)
        assert obs.source.format == "CSV"


def test_minus_zero_degrees() -> None:
    text = "time_utc,ra_deg,dec_dms,sigma_arcsec,station\n2020-09-05T07:00:00Z,1,-00:30:00,1,704\n"
    assert fa.load(file_of(text), center="sun")[0].dec_deg == -0.5


def test_unknown_columns_are_kept_and_said() -> None:
    text = CSV.replace("object", "seeing_px").replace("abc", "2.5")
    obs = fa.load(file_of(text))
    assert "column not understood and only kept in the table: seeing_px" in obs.warnings
    assert list(obs.table["seeing_px"]) == ["2.5", "2.5", "2.5"]


def test_ecsv_and_astropy_table() -> None:
    from astropy import units as u
    from astropy.table import Table
    from astropy.time import Time

    plain = fa.load(file_of(CSV))
    table = Table(
        {
            "time_utc": Time([o.time_utc.rstrip("Z") for o in plain], scale="utc"),
            "ra": np.array([o.ra_deg / 15.0 for o in plain]) * u.hourangle,
            "dec": np.radians([o.dec_deg for o in plain]) * u.rad,
            "sigma_arcsec": np.full(3, 500.0) * u.mas,
            "station": ["704"] * 3,
        }
    )
    with pytest.raises(fa.InputError, match="contradicts the unit in the column's name"):
        fa.load(table)
    table["sigma"] = table["sigma_arcsec"]
    del table["sigma_arcsec"]
    for source in (table, io.StringIO(_ecsv(table))):
        obs = fa.load(source)
        np.testing.assert_allclose(obs.sight_lines.los, plain.sight_lines.los, atol=1e-15)
        np.testing.assert_allclose(obs.sight_lines.t_s, plain.sight_lines.t_s, atol=1e-9)
        np.testing.assert_allclose(obs.sight_lines.sigma_rad, plain.sight_lines.sigma_rad)
    assert (
        fa.load(table).source.format == "astropy Table" and fa.load(io.StringIO(_ecsv(table))).source.format == "ECSV"
    )
    table["ra"].unit = u.m
    with pytest.raises(fa.InputError, match="is a unit that cannot be turned into deg"):
        fa.load(table)
    table["ra"].unit = None
    with pytest.raises(fa.InputError, match="column ra: 'ra' does not say its unit"):
        fa.load(table)


def _ecsv(table: object) -> str:
    out = io.StringIO()
    table.write(out, format="ascii.ecsv")  # type: ignore[attr-defined]
    return out.getvalue()


def test_broken_ecsv() -> None:
    with pytest.raises(fa.InputError, match="is not valid ECSV"):
        fa.load(file_of("# %ECSV 1.0\n# ---\n# datatype: [\na b\n1\n"))


def test_dataframe() -> None:
    pandas = pytest.importorskip("pandas")
    frame = pandas.read_csv(file_of(CSV), dtype={"station": str})
    plain, obs = fa.load(file_of(CSV)), fa.load(frame)
    assert obs.sight_lines == plain.sight_lines
    assert obs.source.format == "pandas DataFrame" and obs.source.path is None
    assert obs.source.sha256 == fa.load(frame.copy()).source.sha256
    frame["time_utc"] = pandas.to_datetime(frame["time_utc"]).dt.tz_convert("Europe/Paris")
    assert fa.load(frame).sight_lines == plain.sight_lines
    frame["station"] = 704
    assert fa.load(frame).sight_lines == plain.sight_lines
    frame["station"] = 10
    with pytest.raises(fa.InputError, match="Near matches: 010 "):
        fa.load(frame)
    frame["station"] = "704"
    frame.loc[1, "ra_deg"] = None
    with pytest.raises(fa.InputError, match="row 2, field ra_deg: has no right ascension"):
        fa.load(frame)


def test_a_leap_second_is_read(tmp_path: Path) -> None:
    text = CSV.replace("2020-09-05T07:30:00Z", "2016-12-31T23:59:60.25Z")
    obs = fa.load(file_of(text), center="sun")
    assert obs.utc_iso(1) == "2016-12-31T23:59:60.250Z"


def test_text_of_a_file_is_only_data() -> None:
    """Markup and code in names come back as they were written, and are escaped where they are shown."""
    evil = '<script>alert(1)</script>"{{x}}'
    obs = fa.load(file_of(CSV.replace("abc", '"' + evil.replace('"', '""') + '"')))
    assert obs.object_name == evil
    assert evil in repr(obs)
    assert "<script>" not in obs._repr_html_() and "&lt;script&gt;" in obs._repr_html_()


RANGES = """time_utc,ra_deg,dec_deg,sigma_arcsec,range_km,sigma_range_km,station
2020-09-05T07:00:00Z,10.0,20.0,30,1500.25,0.02,704
2020-09-05T07:01:00Z,11.0,21.0,30,,,704
2020-09-05T07:02:00Z,12.0,22.0,30,1490.5,0.02,704
"""


def test_measured_ranges_are_kept_with_their_sigma() -> None:
    obs = fa.load(file_of(RANGES), center="earth")
    lines = obs.sight_lines
    np.testing.assert_array_equal(lines.range_km, [1500.25, np.nan, 1490.5])
    np.testing.assert_array_equal(lines.sigma_range_km, [0.02, np.nan, 0.02])
    assert str(obs.table["range"].unit) == "km"
    again = fa.load(io.StringIO(obs.to_csv_text()), center="earth")
    assert again.sight_lines == lines
    assert "range" not in fa.load(file_of(CSV)).table.colnames


def test_a_range_without_its_sigma_is_refused() -> None:
    text = RANGES.replace("1490.5,0.02", "1490.5,")
    with pytest.raises(fa.InputError, match="line 4, field sigma_range_km: is empty beside a range"):
        fa.load(file_of(text), center="earth")
    with pytest.raises(fa.InputError, match="field range_km: '-3' is not a positive number"):
        fa.load(file_of(text.replace("1500.25", "-3")), center="earth")
