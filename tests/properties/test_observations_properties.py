"""Properties of reading: what is written loads again, and no text breaks the reader."""

from __future__ import annotations

import io

import numpy as np
from hypothesis import example, given, settings
from hypothesis import strategies as st

import firstarc as fa
from firstarc.border import frames
from firstarc.border.timescales import tai_from_utc_text, utc_text
from firstarc.observing.numbers import number, sexagesimal
from observing.input_texts import CSV, PSV, ROVING

finite = st.floats(allow_nan=False, allow_infinity=False)
rows = st.tuples(
    st.integers(0, 86399999),
    st.floats(0.0, 359.999999),
    st.floats(-90.0, 90.0),
    st.floats(1e-3, 60.0),
    st.floats(1e-3, 60.0),
    st.floats(-0.99, 0.99),
    st.sampled_from([0.0, 0.004, 2.5]),
    st.sampled_from(["S", "T", "247"]),
    st.floats(-180.0, 180.0),
    st.floats(-89.0, 89.0),
    st.floats(-400.0, 8000.0),
    st.text(
        st.characters(codec="utf-8", exclude_categories=("Cc", "Cs", "Zl", "Zp", "Zs")),
        min_size=1,
        max_size=8,
    ),
)


@settings(max_examples=60)
@given(st.lists(rows, min_size=1, max_size=5))
def test_csv_text_loads_back_to_the_same_numbers(many: list[tuple]) -> None:
    head = (
        "time_utc,ra_deg,dec_deg,sigma_ra_arcsec,sigma_dec_arcsec,sigma_corr,sigma_time_s,station,lon_deg,lat_deg,height_m,"
        "object"
    )
    out = io.StringIO()
    import csv

    writer = csv.writer(out)
    writer.writerow(head.split(","))
    for ms, *values in many:
        seconds, milli = divmod(ms, 1000)
        clock = f"{seconds // 3600:02d}:{seconds // 60 % 60:02d}:{seconds % 60:02d}.{milli:03d}"
        writer.writerow([f"2021-03-04T{clock}Z", *(repr(v) if isinstance(v, float) else v for v in values)])
    obs = fa.load(io.StringIO(out.getvalue()), center="earth")
    back = fa.load(io.StringIO(obs.to_csv_text()), center="earth")
    assert back.sight_lines == obs.sight_lines
    assert back.records.same_as(obs.records) or [s.code for s in back.stations] == [s.code for s in obs.stations]
    assert back.object_name == obs.object_name
    assert fa.load(io.StringIO(back.to_csv_text()), center="earth").records.same_as(back.records)


BASES = (PSV, ROVING, CSV)
junk = st.text(st.sampled_from("|,;#!\n\r\t \"'0123456789.+-:TZabcdefrasnobTime247NaN<>&é\u2028\ufeff\0"), max_size=6)


@settings(max_examples=300)
@given(
    st.integers(0, 2),
    st.lists(st.tuples(st.floats(0.0, 1.0), st.integers(0, 12), junk), min_size=1, max_size=4),
)
@example(0, [(0.0, 400, "")])
@example(2, [(0.9, 0, '"')])
def test_damaged_text_gives_observations_or_a_clear_error(base: int, wounds: list[tuple[float, int, str]]) -> None:
    text = BASES[base]
    for place, length, put in wounds:
        at = int(place * len(text))
        text = text[:at] + put + text[at + length :]
    try:
        obs = fa.load(io.StringIO(text))
    except fa.FirstArcError as error:
        assert str(error)
        return
    assert len(obs) >= 1
    assert np.isfinite(obs.sight_lines.t_s).all() and np.isfinite(obs.sight_lines.observer_km).all()
    assert repr(obs) and isinstance(obs.warnings, tuple)


@settings(max_examples=100)
@given(st.binary(max_size=200))
def test_bytes_of_any_kind_give_a_clear_error(raw: bytes) -> None:
    try:
        fa.load(io.BytesIO(raw))
    except fa.FirstArcError as error:
        assert str(error)


@given(st.floats(-180.0, 180.0), st.floats(-90.0, 90.0), st.floats(-500.0, 9000.0))
def test_geodetic_round_trip(lon: float, lat: float, height_m: float) -> None:
    site = fa.Site("x", "x", lon, lat, height_m)
    back_lon, back_lat, back_height = frames.geodetic_from_itrs_km(site.itrs_km)
    again = frames.itrs_km_from_geodetic(back_lon, back_lat, back_height)
    assert np.abs(again - site.itrs_km).max() < 1e-11 * 6400 * 10
    assert abs(back_height - height_m) < 1e-6


@given(st.integers(0, 60 * 365 * 86400), st.integers(0, 999999))
def test_utc_text_round_trip(seconds: int, micro: int) -> None:
    day = np.datetime64("1973-01-02") + np.timedelta64(seconds // 86400, "D")
    s = seconds % 86400
    text = f"{day}T{s // 3600:02d}:{s // 60 % 60:02d}:{s % 60:02d}.{micro:06d}Z"
    read = tai_from_utc_text([text])
    assert read.problems == {}
    assert utc_text(read.tai1, read.tai2, 6) == [text]


@given(st.integers(0, 359), st.integers(0, 59), st.integers(0, 599999), st.booleans())
def test_sexagesimal(degrees: int, minutes: int, seconds: int, negative: bool) -> None:
    text = f"{'-' if negative else ''}{degrees:02d}:{minutes:02d}:{seconds / 10000:07.4f}"
    value = sexagesimal(text)
    assert value is not None
    exact = (degrees * 3600 + minutes * 60 + seconds / 10000) / 3600.0
    assert abs(abs(value) - exact) < 1e-13 * max(1.0, exact)
    assert (np.signbit(value)) == negative


@given(finite)
def test_numbers_written_by_repr_come_back(value: float) -> None:
    assert number(repr(value)) == value


@given(st.text(max_size=8))
def test_numbers_are_finite_or_nothing(text: str) -> None:
    value = number(text)
    assert value is None or np.isfinite(value)


@settings(max_examples=40)
@given(st.floats(-5.0, 5.0), st.floats(-0.5, 0.5), st.floats(-0.5, 0.5), st.floats(-500.0, 500.0))
def test_what_if_and_its_opposite_cancel(clock_s: float, lat: float, lon: float, height_m: float) -> None:
    obs = fa.load(io.StringIO(ROVING))
    there = fa.WhatIf(clock_s=clock_s, lat_deg=lat, lon_deg=lon, height_m=height_m)
    back = fa.WhatIf(clock_s=-clock_s, lat_deg=-lat, lon_deg=-lon, height_m=-height_m)
    both = obs.with_what_if(there, back).sight_lines
    np.testing.assert_allclose(both.t_s, obs.sight_lines.t_s, atol=1e-10)
    np.testing.assert_allclose(both.observer_km, obs.sight_lines.observer_km, atol=1e-9)
    np.testing.assert_array_equal(both.los, obs.sight_lines.los)
