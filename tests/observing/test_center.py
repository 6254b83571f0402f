"""About the Earth or about the Sun: decided, with the reason, or asked for."""

from __future__ import annotations

import pytest

import firstarc as fa
from observing.input_texts import CSV, PSV, ROVING, file_of


def moving(arcsec_per_s: float, **columns: str) -> str:
    """Three sightings a minute apart of an invented object that moves in declination."""
    head = ",".join(["time_utc,ra_deg,dec_deg,sigma_arcsec,station", *columns])
    rows = [
        ",".join([f"2020-09-05T07:0{i}:00Z,27,{i * arcsec_per_s / 60.0!r},1,704", *columns.values()]) for i in range(3)
    ]
    return "\n".join([head, *rows])


def test_given() -> None:
    obs = fa.load(file_of(ROVING), center="Sun")
    assert (obs.center, obs.center_reason) == ("sun", "given as center='sun'")


def test_by_rate() -> None:
    fast = fa.load(file_of(ROVING))
    assert fast.center == "earth"
    assert "0.4" in fast.center_reason and "°/s" in fast.center_reason and "30 km/s" in fast.center_reason
    slow = fa.load(file_of(PSV))
    assert slow.center == "sun" and "″/h" in slow.center_reason and "1\u202f500\u202f000 km" in slow.center_reason


@pytest.mark.parametrize(
    ("rate", "center", "doubted"),
    [
        (0.02, "sun", False),
        (0.3, "sun", True),
        (0.9, "sun", True),
        (1.2, "earth", True),
        (15.0, "earth", False),
    ],
)
def test_rates_between(rate: float, center: str, doubted: bool) -> None:
    obs = fa.load(file_of(moving(rate)))
    assert obs.center == center
    other = "sun" if center == "earth" else "earth"
    assert any(f"give center='{other}' to try the other" in w for w in obs.warnings) == doubted


def test_by_designation() -> None:
    psv = PSV.replace("trkSub ", "artSat ").replace("abc    ", "1998-067A")
    obs = fa.load(file_of(psv))
    assert obs.center == "earth" and "artificial satellite (1998-067A)" in obs.center_reason
    assert any("yet it moves at" in w for w in obs.warnings)
    for column, name in (("permID", "433"), ("provID", "2014 AA360"), ("provID", "C/1999 K7")):
        obs = fa.load(file_of(PSV.replace("trkSub", column).replace("abc    ", name)))
        assert obs.center == "sun" and f"Sun-orbiting body ({name})" in obs.center_reason
        assert obs.warnings == ()
    assert fa.load(file_of(moving(9.0, object="1998-067A"))).center == "earth"
    fast = fa.load(file_of(moving(9.0, object="2014 AA360")))
    assert fast.center == "sun" and any("yet it moves at 9″/s" in w for w in fast.warnings)


def test_nothing_to_decide_by() -> None:
    one = "\n".join(CSV.splitlines()[:2])
    with pytest.raises(fa.UsageError, match="give center='earth' or center='sun'"):
        fa.load(file_of(one))
    assert fa.load(file_of(one), center="earth").center == "earth"


def test_a_standing_object() -> None:
    assert fa.load(file_of(moving(0.0))).center == "sun"
