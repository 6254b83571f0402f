"""Every method of preliminary determination through the one public call."""

from __future__ import annotations

import io

import numpy as np
import pytest

import firstarc as fa
from firstarc.preliminary.methods import METHODS
from pipeline.shared_cases import EARTH, SUN, loaded, nearest, true_row

THROUGH_LINES = ("laplace", "double-r", "two-ranges")
PICKS = {"sh-geo-2nights": (0, 1, 2)}


def pick_of(name: str) -> tuple[int, int, int]:
    count = len(loaded(name, "n0"))
    return PICKS.get(name, (0, count // 2, count - 1))


@pytest.mark.parametrize("method", THROUGH_LINES)
@pytest.mark.parametrize("name", [*EARTH, *SUN])
def test_ways_through_three_lines_end_on_the_orbit_of_gauss(name: str, method: str) -> None:
    """They start differently and must end on the same exact orbit where Gauss' way reaches the truth."""
    obs, pick = loaded(name, "n0"), pick_of(name)
    expected = nearest(fa.preliminary(obs, pick=pick), true_row(name, pick[1], obs))
    found = fa.preliminary(obs, pick=pick, method=method)
    same = nearest(found, expected.state)
    scale = np.linalg.norm(expected.state.r_km)
    assert np.linalg.norm(same.state.r_km - expected.state.r_km) < 1e-7 * scale
    assert same.method == method and same.gauss.name == f"{METHODS[method].label} estimate"
    assert max(same.converged.miss_arcsec) < 1e-10 * 206265.0
    assert np.allclose(same.covariance, expected.covariance, rtol=1e-3, atol=1e-6 * np.abs(expected.covariance).max())
    assert same.gibbs.state is None and "no separate correction" in str(same.gibbs.status)


def test_four_observations_where_the_lines_are_coplanar() -> None:
    """A body in the ecliptic seen from the Earth's centre: three lines say nothing, four do."""
    from firstarc.constants import AU_KM, GM_SUN_KM3_S2
    from firstarc.determination.elements import reference_axes
    from firstarc.dynamics.light_time import predicted_directions
    from firstarc.twobody.elements import state_from_elements

    axes = reference_axes("sun").T
    r, v = state_from_elements(2.4 * AU_KM * (1 - 0.2**2), 0.2, 0.0, 0.0, 1.0, 2.0, GM_SUN_KM3_S2)
    times = [f"2026-03-{day:02d}T00:00:00Z" for day in (1, 12, 23, 31)]
    text = "time_utc,ra_deg,dec_deg,sigma_arcsec,station\n" + "".join(f"{t},0,0,0.2,500\n" for t in times)
    lines = fa.load(io.StringIO(text), center="sun").sight_lines
    # the Earth's own path is tilted to the J2000 ecliptic by less than an arcsecond a year
    los, _, _ = predicted_directions(
        np.concatenate([axes @ r, axes @ v]), lines.t_s[1], lines.t_s, lines.observer_km,
        lines.center_velocity_km_s, GM_SUN_KM3_S2, True,
    )  # fmt: skip
    ra, dec = np.degrees(np.arctan2(los[:, 1], los[:, 0])) % 360.0, np.degrees(np.arcsin(los[:, 2]))
    rows = [f"{t},{float(a)!r},{float(d)!r},0.2,500" for t, a, d in zip(times, ra, dec, strict=True)]
    obs = fa.load(io.StringIO("time_utc,ra_deg,dec_deg,sigma_arcsec,station\n" + "\n".join(rows) + "\n"), center="sun")
    gauss = fa.preliminary(obs, pick=(0, 1, 3))
    assert abs(gauss.determinant) < 10.0 * gauss.determinant_sigma
    four = fa.preliminary(obs, pick=(0, 1, 3), method="four-observations")
    assert four.best is not None
    assert abs(four.best.elements.a_au - 2.4) < 0.05 and abs(four.best.elements.e - 0.2) < 0.03
    auto = fa.preliminary(obs, pick=(0, 1, 3), method="auto")
    tried = [label for label, _ in auto.tried]
    assert tried[:2] == ["Gauss", "four observations"]
    assert "coplanar" in auto.tried[1][1]


def test_automatic_choice_stops_where_gauss_suffices() -> None:
    pre = fa.preliminary(loaded("sh-leo-pass", "s1"), method="auto")
    assert [label for label, _ in pre.tried] == ["Gauss"]
    assert pre.best.method == "gauss" and pre.method == "auto"
    assert "Tried Gauss: three directions" in repr(pre)


def test_automatic_choice_ends_with_a_sample_where_nothing_is_determined() -> None:
    pre = fa.preliminary(loaded("real-1977ub"), method="auto")
    assert [label for label, _ in pre.tried][-1] == "ranging"
    assert pre.sample is not None and abs(pre.sample.weight.sum() - 1.0) < 1e-9
    letters = [c.letter for c in pre.candidates]
    assert len(set(letters)) == len(letters)
    assumed = [c for c in pre.candidates if c.method == "circular"]
    assert assumed and all("assumed" in c.reason for c in assumed)


def test_short_arc_methods_say_what_they_assume() -> None:
    obs = loaded("sh-geo-2nights", "n0")[[0, 1, 2]]
    circle = fa.preliminary(obs, method="circular").best
    assert circle.elements.e < 1e-6 and "assumed circular" in circle.reason
    # a geosynchronous object: the true semi-major axis is 42 165 km within its small eccentricity
    assert abs(circle.elements.a_km - 42165.0) < 500.0
    flat = fa.preliminary(obs, method="assumed-eccentricity", eccentricity=0.05)
    assert any(abs(c.elements.e - 0.05) < 1e-6 for c in flat.candidates if c.state is not None)


RANGES = """time_utc,ra_deg,dec_deg,sigma_arcsec,range_km,sigma_range_km,station,lon_deg,lat_deg,height_m
{rows}"""


def with_ranges(keep: tuple[int, ...]) -> fa.Observations:
    """The low orbit's looks with their true ranges, 10 m of sigma, for the rows in ``keep``."""
    obs = loaded("sh-leo-pass", "n0")
    site = obs.stations[0]
    lines = obs.sight_lines
    rows = []
    for i in range(len(obs)):
        state = true_row("sh-leo-pass", i, obs)
        # light path: the object where it was when the light left it, first order in v/c
        line = state.r_km - lines.observer_km[i]
        distance = float(np.linalg.norm(line))
        distance -= float(line @ state.v_km_s) / 299792.458
        shown = f"{distance!r},0.01" if i in keep else ","
        o = obs[i]
        place = f"{site.lon_deg!r},{site.lat_deg!r},{site.height_m!r}"
        rows.append(f"{o.time_utc},{o.ra_deg!r},{o.dec_deg!r},1.0,{shown},here,{place}")
    return fa.load(io.StringIO(RANGES.format(rows="\n".join(rows) + "\n")), center="earth")


@pytest.mark.parametrize("keep", [(0, 4, 8), (0, 8)])
def test_measured_ranges_give_positions_at_once(keep: tuple[int, ...]) -> None:
    obs = with_ranges(keep)
    pre = fa.preliminary(obs, pick=(0, 4, 8), method="measured-ranges")
    best = nearest(pre, true_row("sh-leo-pass", 4, obs))
    assert best.admissible and best.picked == keep
    assert np.linalg.norm(best.state.r_km - true_row("sh-leo-pass", 4, obs).r_km) < 3.0
    auto = fa.preliminary(obs, pick=(0, 4, 8), method="auto")
    assert auto.tried[0][0] == "measured ranges"


def test_measured_ranges_need_ranges() -> None:
    with pytest.raises(fa.UsageError, match="needs 2 observations with a measured range in the pick, got 1"):
        fa.preliminary(with_ranges((0,)), pick=(0, 4, 8), method="measured-ranges")


def test_misuse_is_named() -> None:
    obs = loaded("sh-leo-pass", "n0")
    with pytest.raises(fa.UsageError, match=r"method must be one of 'auto', 'gauss'.*got 'guess'"):
        fa.preliminary(obs, method="guess")
    with pytest.raises(fa.UsageError, match='eccentricity belongs to method="assumed-eccentricity"'):
        fa.preliminary(obs, eccentricity=0.1)
    with pytest.raises(fa.UsageError, match='revolutions belongs to method="two-ranges"'):
        fa.preliminary(obs, method="laplace", revolutions=1)
    with pytest.raises(fa.UsageError, match="method 'four-observations' needs 4 observations, got 3"):
        fa.preliminary(obs[[0, 4, 8]], method="four-observations")


def test_two_nights_of_a_geosynchronous_object_over_a_revolution() -> None:
    """Sightings of both nights in one pick: a whole revolution lies between them."""
    obs = loaded("sh-geo-2nights", "n0")
    pre = fa.preliminary(obs, pick=(0, 3, 5), method="two-ranges")
    state = true_row("sh-geo-2nights", 3, obs)
    best = nearest(pre, state)
    assert np.linalg.norm(best.state.r_km - state.r_km) < 0.05 * np.linalg.norm(state.r_km)
    assert best.admissible
