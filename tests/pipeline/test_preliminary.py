"""What fa.preliminary promises beside the numbers: picks, roots, reasons, ranking."""

from __future__ import annotations

import itertools
import re
from typing import Any

import numpy as np
import pytest

import firstarc as fa
from firstarc.constants import AU_KM
from pipeline.shared_cases import SUN, case, directions_of, frame_of, invented, loaded, with_directions


@pytest.fixture(scope="module")
def satellite() -> fa.Observations:
    return invented("SATELLITE")


@pytest.mark.parametrize(
    "pick",
    [(0, 1), (0, 1, 2, 3), (0, 0, 4), (0, 4, 9), (-1, 4, 8), "abc", 5, (None, 1, 2), [], (0.0, "x", 2)],
)
def test_unusable_picks_are_named(satellite: fa.Observations, pick: Any) -> None:
    with pytest.raises(fa.UsageError) as caught:
        fa.preliminary(satellite, pick=pick)
    words = str(caught.value)
    assert words == f"pick must be three different positions from 0 to 8, got {pick!r}"


def test_numpy_picks_are_taken(satellite: fa.Observations) -> None:
    assert fa.preliminary(satellite, pick=np.array([2, 4, 7])) == fa.preliminary(satellite, pick=(2, 4, 7))


def test_misuse_is_named(satellite: fa.Observations) -> None:
    with pytest.raises(fa.UsageError, match=r"method must be .*gauss.*, got 'guess'"):
        fa.preliminary(satellite, method="guess")
    with pytest.raises(fa.UsageError, match=r"obs must be Observations from firstarc\.load, got str"):
        fa.preliminary("night.psv")  # type: ignore[arg-type]
    for obs in (satellite[[0, 1]], satellite[[3]]):
        with pytest.raises(fa.UsageError, match=f"needs three observations, got {len(obs)}"):
            fa.preliminary(obs)


@pytest.mark.parametrize("kind", ["SATELLITE", "MINOR_PLANET"])
def test_order_of_the_pick_does_not_matter(kind: str) -> None:
    obs = invented(kind)
    reference = fa.preliminary(obs, pick=(1, 4, 7))
    assert reference.pick == (1, 4, 7)
    for order in itertools.permutations((1, 4, 7)):
        assert fa.preliminary(obs, pick=order) == reference


def test_order_of_the_observations_does_not_matter(satellite: fa.Observations) -> None:
    shuffled = satellite[[5, 2, 8, 0, 7, 4, 1, 3, 6]]
    back = {int(row): position for position, row in enumerate(shuffled.rows)}
    a = fa.preliminary(satellite, pick=(2, 4, 7))
    b = fa.preliminary(shuffled, pick=[back[7], back[2], back[4]])
    assert [back[p] for p in a.pick] == list(b.pick)
    assert a.best.state == b.best.state
    assert a.best.reason == b.best.reason
    np.testing.assert_allclose(a.best.chi2_others, b.best.chi2_others, rtol=1e-9)
    np.testing.assert_array_equal(a.best.residuals["dra_arcsec"][shuffled.rows], b.best.residuals["dra_arcsec"])


def lagrange_roots(pre: Any) -> np.ndarray:
    """Positive real roots by numpy's companion matrix."""
    unit = pre.unit_km  # the companion matrix needs numbers of order one
    a, b, c = (x / unit**power for x, power in zip(pre.coefficients, (2, 5, 8), strict=True))
    roots = np.roots([1.0, 0.0, a, 0.0, 0.0, b, 0.0, 0.0, c])
    real = roots[np.abs(roots.imag) < 1e-6 * np.abs(roots)].real
    return np.sort(real[real > 0.0]) * unit


@pytest.mark.parametrize("name", ["sh-molniya-90min", "sh-leo-pass", *SUN])
@pytest.mark.parametrize("noise", ["n0", "s1"])
def test_every_root_is_kept(name: str, noise: str) -> None:
    pre = fa.preliminary(loaded(name, noise), pick=case(name)["suggested_triplet"])
    np.testing.assert_allclose(pre.roots_km, lagrange_roots(pre), rtol=1e-6)
    np.testing.assert_array_equal(np.sort([c.root_km for c in pre.candidates]), pre.roots_km)
    by_distance = sorted(pre.candidates, key=lambda c: -c.root_km)
    assert "".join(c.letter for c in by_distance) == "ABCDEFGH"[: len(by_distance)], "A is the outermost"
    for c in pre.candidates:
        assert c.reason and c.gauss.positions_km.shape == (3, 3)
        assert pre.candidate(c.letter) is c
    flags = [c.admissible for c in pre.candidates]
    assert flags == sorted(flags, reverse=True), "admissible ones first"
    with pytest.raises(fa.UsageError, match="letter must be one of"):
        pre.candidate("Z")


@pytest.mark.parametrize("name", SUN)
@pytest.mark.parametrize("noise", ["n0", "s1", "s5"])
def test_the_observers_own_orbit_is_recognised(name: str, noise: str) -> None:
    """One root of each Sun case lies at the Earth: it must be rejected as such, never shown as the object."""
    obs = loaded(name, noise)
    pre = fa.preliminary(obs, pick=case(name)["suggested_triplet"])
    observer = np.linalg.norm(obs.sight_lines.observer_km[pre.pick[1]])
    own = [c for c in pre.candidates if abs(c.root_km / observer - 1.0) < 0.02]
    assert len(own) == 1
    assert not own[0].admissible
    assert own[0].reason.startswith("the observer's own orbit: within ") and "% of the observer's" in own[0].reason
    assert all("own orbit" not in c.reason for c in pre.candidates if c is not own[0])


def test_rejected_roots_speak_the_analysts_language() -> None:
    """Ranges in km about the Earth, au about the Sun; row numbers as shown, from 1, kept through subsetting."""
    molniya = loaded("sh-molniya-90min", "n0")
    (rejected,) = [c for c in fa.preliminary(molniya, pick=(0, 3, 6)).candidates if not c.admissible]
    found = re.fullmatch(r"slant range negative \(−([\d\u202f ]+) km at row (\d)\)", rejected.reason)
    assert found is not None, rejected.reason
    kilometres = float(re.sub(r"\D", "", found[1]))
    row = int(found[2]) - 1
    ranges = rejected.gauss.positions_km - molniya.sight_lines.observer_km[[0, 3, 6]]
    along = np.einsum("ij,ij->i", ranges, molniya.sight_lines.los[[0, 3, 6]])
    assert row in (0, 3, 6) and abs(-along[(0, 3, 6).index(row)] / kilometres - 1.0) < 0.01

    mars = loaded("sh-mars-week", "n0")
    last = fa.preliminary(mars, pick=(0, 4, 8)).candidates[-1]
    found = re.fullmatch(r"slant range negative \(−([\d.]+) au at row 5\)", last.reason)
    assert found is not None, last.reason
    along = (last.gauss.positions_km[1] - mars.sight_lines.observer_km[4]) @ mars.sight_lines.los[4]
    assert abs(-along / AU_KM / float(found[1]) - 1.0) < 0.01
    subset = fa.preliminary(mars[[0, 4, 8]]).candidates[-1]
    assert subset.reason == last.reason, "row 5 of the input stays row 5"


def below_surface(obs: fa.Observations) -> fa.Observations:
    """Directions of an orbit whose perigee lies 1000 km below the ground, seen high up."""
    state = fa.preliminary(invented(), pick=(2, 4, 7)).best.state
    slow = fa.State(state.r_km, state.v_km_s * 0.80, state.epoch, "earth")
    assert slow.elements.q_km < 5500.0
    return with_directions(obs, directions_of(slow, obs))


def test_an_orbit_through_the_ground(satellite: fa.Observations) -> None:
    """It is rejected with the depth, or admitted with a remark: never passed over in silence."""
    pre = fa.preliminary(below_surface(satellite), pick=(2, 4, 7))
    through = min((c for c in pre.candidates if c.state), key=lambda c: c.elements.q_km)
    assert through.elements.q_km < 6378.137
    depth = 6378.137 - through.elements.q_km
    words = re.search(r"perigee ([\d\u202f,.]+) km below the surface", through.reason, re.IGNORECASE)
    assert words is not None, through.reason
    assert abs(float(re.sub(r"[^\d.]", "", words[1])) - depth) < 1.0


def test_ranking_has_reasons() -> None:
    """Molniya: two admissible roots; the four other looks decide, and say so. Without them habit does, and says so."""
    obs = loaded("sh-molniya-90min", "n0")
    pre = fa.preliminary(obs, pick=(0, 3, 6))
    assert [c.letter for c in pre.candidates] == ["B", "A", "C"]
    first, second, _ = pre.candidates
    assert first.rms_others_arcsec * 3.0 < second.rms_others_arcsec
    assert first.reason == "the other observations agree with it alone"
    assert second.reason == "the other observations contradict it"

    alone = fa.preliminary(obs[[0, 3, 6]])
    first, second, _ = alone.candidates
    assert alone.pick_reason == "there are only three observations."
    assert first.elements.e < 1.0 < second.elements.e
    assert first.reason.startswith("first for want of other observations: bound and rounder orbits come first")
    assert second.reason.startswith("after the others for want of other observations")
    assert np.isnan(first.rms_others_arcsec) and first.dof_others == 0 and np.isnan(first.chi2_others)

    only = fa.preliminary(loaded("sh-leo-pass", "s1"), pick=(0, 4, 8)).best
    assert only.reason == "the only admissible one"


def test_tie_is_not_called_clear() -> None:
    """Venus over a week with an arcsecond: the other looks hardly prefer either root."""
    pre = fa.preliminary(loaded("sh-venus-week", "s1"), pick=(0, 3, 5))
    first, second = pre.candidates[:2]
    assert second.admissible and second.rms_others_arcsec < 1.2 * first.rms_others_arcsec
    assert first.reason == "the other observations fit it best"
    headline = fa.Desk(loaded("sh-venus-week", "s1"), pick=(0, 3, 5)).scene
    assert headline["bad"]


def test_residuals_are_those_of_the_orbit(satellite: fa.Observations) -> None:
    """O-C from the table against directions predicted from the state, by their own way through RA and Dec."""
    best = fa.preliminary(satellite, pick=(2, 4, 7)).best
    los = directions_of(best.state, satellite)
    ra, dec = np.degrees(np.arctan2(los[:, 1], los[:, 0])) % 360.0, np.degrees(np.arcsin(los[:, 2]))
    observed = satellite.table
    dra = (np.array(observed["ra"]) - ra) * 3600.0 * np.cos(np.radians(dec))
    ddec = (np.array(observed["dec"]) - dec) * 3600.0
    table = best.residuals
    np.testing.assert_allclose(table["dra_arcsec"], dra, atol=1e-4)
    np.testing.assert_allclose(table["ddec_arcsec"], ddec, atol=1e-4)
    assert list(table["used"].nonzero()[0]) == [2, 4, 7]
    assert list(table["row"]) == list(range(1, 10))
    used = np.array(table["used"])
    assert np.abs(dra[used]).max() < 1e-4 < 0.05 < np.abs(dra[~used]).max()
    others = np.concatenate([dra[~used], ddec[~used]])
    assert abs(best.rms_others_arcsec - np.sqrt(np.mean(others**2))) < 1e-4
    sigma = np.array([1.0] * 5 + [1.5] * 4)
    np.testing.assert_allclose(table["chi"], np.hypot(dra, ddec) / sigma, atol=1e-4)


def test_data_without_an_orbit_are_a_result() -> None:
    """The same look three times, times apart; and two looks at one time."""
    obs = invented()
    same = with_directions(obs, np.repeat(obs.sight_lines.los[:1], 9, axis=0))
    pre = fa.preliminary(same, pick=(0, 1, 2))
    assert isinstance(pre.status, fa.Status)
    frame = frame_of(obs)
    frame.loc[4, "time_utc"] = frame.loc[3, "time_utc"]
    twice = fa.preliminary(fa.load(frame, center="earth"), pick=(3, 4, 8))
    assert twice.best is None and twice.candidates == ()
    assert twice.status.code.value == "unusable input" and "same time" in twice.status.sentence
    assert twice.status.sentence in repr(twice)
