"""Bad input: which line, which field, what was read, what to do."""

from __future__ import annotations

from pathlib import Path

import pytest

import firstarc as fa
from observing.input_texts import CSV, PSV, ROVING, ROVING_HEAD, file_of

#: text to change, what to put there, place, wrong, remedy
IN_PSV = [
    ("27.255802", "27.25580x", "line 8, field ra", "is not a right ascension", "Give it in degrees"),
    ("27.255802", "1_0", "line 8, field ra", "is not a right ascension", "Give it in degrees"),
    ("27.255802", "nan", "line 8, field ra", "is not a right ascension", "Give it in degrees"),
    ("27.255802", "360.0", "line 8, field ra", "is out of range", "from 0 to 360 degrees"),
    ("27.255802", "", "line 8, field ra", "has no right ascension", "Fill the cell"),
    ("+6.672609", "+96.672609", "line 8, field dec", "is out of range", "from -90 to 90 degrees"),
    ("T07:30:00.000Z", "T07:30", "line 8, field obsTime", "is not a UTC time", "YYYY-MM-DDThh:mm:ss"),
    ("T07:30:00.000Z", "T25:30:00Z", "line 8, field obsTime", "has an hour that does not exist", "YYYY-MM-DD"),
    ("2020-09-05T07:30:00.000Z", "", "line 8, field obsTime", "has no time", "Fill the cell"),
    ("T07:30:00.000Z", "T23:59:60Z", "line 8, field obsTime", "no leap second was inserted", "23:59:60 "
                                                                                             "exists only"),
    ("704 |2020-09-05T07:30", "70X |2020-09-05T07:30", "line 8, field stn", "is not in the MPC "
                                                                            "list", "Near matches: 700 "),
    ("704 |2020-09-05T07:30", "7O4 |2020-09-05T07:30", "line 8, field stn", "is not in the MPC "
                                                                            "list", "Near matches: 704 "),
    ("704 |2020-09-05T07:30", "C57 |2020-09-05T07:30", "line 8, field stn", "has no fixed place", "roving"),
    ("704 |2020-09-05T07:30", "    |2020-09-05T07:30", "line 8, field stn", "has no station", "MPC code"),
    ("704 |2020-09-05T07:30", "247 |2020-09-05T07:30", "line 8, field sys", "is empty though station "
                                                                            "247", "WGS84"),
    ("+6.672609|0.3", "+6.672609|0", "line 8, field rmsRA", "is not a positive number", "above zero"),
    ("+6.672609|0.3", "+6.672609|-1", "line 8, field rmsRA", "is not a positive number", "above zero"),
    ("Gaia2\nabc    |CCD |704 |2020-09-05T07:30", "Gaia2|9\nabc    |CCD |704 |2020-09-05T07:30", "line 7",
     "has 10 cells where its keyword record names 9 fields", "Give every field its own cell"),
    ("trkSub |mode", "trkSub |trkSub", "line 6, field trkSub", "is named twice", "Name each field once"),
    ("trkSub |mode|stn |obsTime                 |ra       |dec ", "trkSub |mode|stn |obsTime "
                                                                  "|alpha|dec ", "columns",
     "hold no right ascension", "Add a column ra, degrees"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "where", "wrong", "remedy"), IN_PSV)
def test_psv(old: str, new: str, where: str, wrong: str, remedy: str) -> None:
    assert old in PSV
    with pytest.raises(fa.InputError) as caught:
        fa.load(file_of(PSV.replace(old, new, 1)))
    problem = caught.value.problems[0]
    assert problem.where == where
    assert wrong in problem.wrong
    assert remedy in problem.remedy
    assert where in str(caught.value) and remedy in str(caught.value)


IN_ROVING = [
    ("WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:55", "IAU|399|-106.66|33.817|1510|2006-06-28T04:28:55",
     "line 4, field sys", "is no system", "WGS84"),
    ("WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:55",
     "ICRF_KM|399|-106.66|33.817|1510|2006-06-28T04:28:55",
     "line 4, field sys", "is no system", "ITRF"),
    ("399|-106.66|33.817|1510|2006-06-28T04:28:55", "499|-106.66|33.817|1510|2006-06-28T04:28:55",
     "line 4, field ctr", "is not the Earth", "Give 399"),
    ("33.817|1510|2006-06-28T04:28:55", "93.817|1510|2006-06-28T04:28:55",
     "line 4, field pos2", "is out of range", "latitude from -90 to 90"),
    ("33.817|1510|2006-06-28T04:28:55", "33.817||2006-06-28T04:28:55",
     "line 4, field pos3", "is empty while", "Fill sys, ctr, pos1, pos2 and pos3"),
    ("247|WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:55",
     "704|WGS84|399|-106.66|33.817|1510|2006-06-28T04:28:55",
     "line 4, field sys, pos1, pos2, pos3", "not a roving one", "Leave these cells empty"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "where", "wrong", "remedy"), IN_ROVING)
def test_roving_stations(old: str, new: str, where: str, wrong: str, remedy: str) -> None:
    assert old in ROVING
    with pytest.raises(fa.InputError) as caught:
        fa.load(file_of(ROVING.replace(old, new, 1)))
    assert len(caught.value.problems) == 1
    problem = caught.value.problems[0]
    assert problem.where == where
    assert wrong in problem.wrong
    assert remedy in problem.remedy


IN_CSV = [
    ("ra_deg", "ra", "column ra", "does not say its unit", "ra_deg (degrees), ra_h (hours)"),
    ("dec_deg", "Dec", "column Dec", "does not say its unit", "dec_deg (degrees)"),
    ("time_utc", "Time_UTC", "columns", "hold no time", "is column 'Time_UTC' meant?"),
    ("station", "site", "columns", "hold no station", "lon_deg, lat_deg, height_m"),
    ("station", "ra_h", "columns", "hold no station", "Add a column station"),
    ("object", "ra_deg", "line 1, column ra_deg", "is the name of two columns", "own name"),
    (
        "27.255802,6",
        "27.255802;6",
        "line 3",
        "has 5 cells where the head line names 6 columns",
        "quote a cell",
    ),
    (
        "0.5,704,abc\n2020-09-05T08",
        "0.5,70,abc\n2020-09-05T08",
        "line 3, field station",
        "is not in the MPC list",
        "070 ",
    ),
    ("6.672609", "6 40 21", "line 3, field dec_deg", "is not a declination", "Give it in degrees"),
]


@pytest.mark.parametrize(("old", "new", "where", "wrong", "remedy"), IN_CSV)
def test_csv(old: str, new: str, where: str, wrong: str, remedy: str) -> None:
    assert old in CSV
    with pytest.raises(fa.InputError) as caught:
        fa.load(file_of(CSV.replace(old, new, 1)))
    problem = next(p for p in caught.value.problems if p.where == where)
    assert wrong in problem.wrong
    assert remedy in problem.remedy


def test_line_numbers_count_lines_of_the_file() -> None:
    """A quoted cell over two lines, blank lines and comments move the rows, not the numbering."""
    text = (
        "# invented\n\ntime_utc,ra_deg,dec_deg,station,object\n"
        '2020-09-05T07:00:00Z,27,6,704,"a\nb"\n\n2020-09-05T08,27,6,704,c\n'
    )
    with pytest.raises(fa.InputError) as caught:
        fa.load(file_of(text))
    assert [p.where for p in caught.value.problems] == ["line 7, field time_utc"]


def test_all_problems_are_reported_together_in_order() -> None:
    text = PSV.replace("27.254933", "x").replace("+6.672609", "91").replace("T08:00", "T08-00").replace("704 ", "7O4 ")
    with pytest.raises(fa.InputError) as caught:
        fa.load(file_of(text))
    assert [p.where for p in caught.value.problems] == [
        "line 7, field ra", "line 7 and 2 more, field stn", "line 8, field dec", "line 9, field obsTime",
    ]  # fmt: skip
    assert "4 problems" in str(caught.value)


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    (tmp_path / "night.psv").write_text(PSV)
    with pytest.raises(fa.InputError, match=r"cannot be opened \(no such file.*Near matches in its folder: night\.psv"):
        fa.load(tmp_path / "nigth.psv")
    with pytest.raises(fa.InputError, match="cannot be opened"):
        fa.load(tmp_path)
    with pytest.raises(fa.UsageError, match=r"io\.StringIO"):
        fa.load(PSV)
    with pytest.raises(fa.UsageError, match="source of type int"):
        fa.load(3)
    (tmp_path / "latin").write_bytes(PSV.replace("Nobody", "Ñobody").encode("latin-1"))
    with pytest.raises(fa.InputError, match=r"line 5: .* is not UTF-8 text\. Save the file as UTF-8"):
        fa.load(tmp_path / "latin")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("\n \n", "is empty"),
        ("hello\nworld\n", r"line 1: 'hello' is in no format that is known"),
        ("\0\1\2,\0", "spreadsheet or other binary"),
        ('<?xml version="1.0"?>\n<ades version="2022"/>', "ADES XML"),
        ('<?xml version="1.0"?>\n<tdm id="x"/>', "CCSDS tracking data message"),
        ("CCSDS_TDM_VERS = 2.0\n", "CCSDS tracking data message"),
        (
            "     K14Aa0A  C2020 09 05.12345 01 02 03.45 +04 05 06.7          20.1 V      704\n",
            "MPC 80-column",
        ),
        ("# version=2022\n", "holds no optical observation"),
        ("time_utc,ra_deg,dec_deg,station\n", "holds no optical observation"),
    ],
)
def test_other_formats_are_named(text: str, words: str) -> None:
    with pytest.raises(fa.InputError, match=words):
        fa.load(file_of(text))


def test_rows_of_other_kinds_alone() -> None:
    text = "permID|mode|stn|obsTime|obsCenter|deltaRA|deltaDec\n"
    text += "1|CCD|F51|2016-08-29T12:32:34Z|Jupiter|0.01|0.02\n"
    with pytest.raises(fa.InputError, match=r"holds no optical observation; 1 offset observation set aside \(line 2\)"):
        fa.load(file_of(text))


@pytest.mark.parametrize(
    ("stations", "words"),
    [
        (
            {"A": {"lon_deg": 0, "lat_deg": 91, "height_m": 0}},
            r"lat_deg=91\.0; give a latitude from -90 to 90",
        ),
        ({"A": {"lon_deg": 400, "lat_deg": 0, "height_m": 0}}, "east longitude from -180 to 360"),
        ({"A": {"lon_deg": "x", "lat_deg": 0, "height_m": 0}}, "lon_deg='x'; give a finite number"),
        ({"A": {"lon": 0, "lat_deg": 0, "height_m": 0}}, "'lon' is not known .*did you mean 'lon_deg'"),
        ({"A": {"lon_deg": 0, "lat_deg": 0}}, "height_m missing"),
        ({10: {"lon_deg": 0, "lat_deg": 0, "height_m": 0}}, "the code 10 is not text; write '10'"),
        ({"A": 5}, r"give a Site or dict\(lon_deg="),
        ([1], "stations=list: give a mapping"),
    ],
)
def test_stations_that_make_no_sense(stations: object, words: str) -> None:
    with pytest.raises(fa.UsageError, match=words):
        fa.load(file_of(CSV), stations=stations)  # type: ignore[arg-type]


def test_arguments() -> None:
    with pytest.raises(fa.UsageError, match="directions='true'"):
        fa.load(file_of(CSV), directions="true")
    with pytest.raises(fa.UsageError, match="center='moon'"):
        fa.load(file_of(CSV), center="moon")


def test_keyword_record_is_asked_for() -> None:
    head = f"# version=2022\nsat|CCD|247|WGS84|399|0|0|0|2006-06-28T04:28:24Z|1|2|UNK\n{ROVING_HEAD}\n"
    with pytest.raises(fa.InputError, match=r"line 2: .*stands before any keyword record"):
        fa.load(file_of(head))
