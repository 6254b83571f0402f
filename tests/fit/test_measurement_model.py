"""Residuals, partials and weights of the measurement model."""

from __future__ import annotations

from dataclasses import replace

import erfa
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from firstarc.constants import ARCSEC_RAD, AU_KM, C_KM_S
from firstarc.dynamics.light_time import predicted_directions, residuals_rad
from firstarc.errors import UsageError
from firstarc.fit.deflection import solar_deflection
from firstarc.fit.parameters import ClockOffset, ForceParameter, StationOffset
from firstarc.twobody.kepler import propagate
from fit.scenes import noisy, scene, shifted, with_ranges

REGIMES = ["leo", "meo", "geo", "near-earth", "main-belt", "distant"]


@pytest.mark.parametrize("regime", REGIMES)
def test_residuals_are_those_of_the_iterated_light_path(regime: str) -> None:
    """Against the separate, iterated light-time solution, for an orbit some degrees away."""
    here = scene(regime)
    state = here.state * (1.0 + 1e-3 * np.arange(1, 7))
    m = here.exact
    los, distance, _ = predicted_directions(state, 0.0, m.t_s, m.observer_km, m.center_velocity_km_s, here.gm, True)
    found = here.model(m).evaluate(state)
    assert np.abs(found.residual).max() > 1e-4
    np.testing.assert_allclose(found.residual, residuals_rad(m.los, los), atol=2e-14, rtol=0)
    np.testing.assert_allclose(found.range_km, distance, rtol=1e-14)
    exact = here.model(m).evaluate(here.state).residual
    assert np.abs(exact).max() < 1e-14


@settings(max_examples=40)
@given(
    regime=st.sampled_from(REGIMES),
    away=st.lists(st.floats(-1.0, 1.0), min_size=6, max_size=6),
    clock=st.floats(-0.5, 0.5),
    offset=st.floats(-1.0, 1.0),
    light_time=st.booleans(),
    seen=st.floats(0.0, 0.5),
)
def test_partials_are_those_of_central_differences(regime, away, clock, offset, light_time, seen) -> None:
    """All four components by state, clock and station, also where residuals are large (to half a radian)."""
    here = scene(regime)
    m = with_ranges(shifted(here.exact, np.full((len(here.exact), 2), seen)))
    model = here.model(replace(m, light_time=light_time), parameters=[ClockOffset(0), StationOffset(0)])
    x = model.start(here.state * (1.0 + 1e-3 * np.array(away)))
    x[6:] = clock, offset, -offset, 0.5 * offset
    found = model.evaluate(x)
    size = np.concatenate([np.repeat([np.linalg.norm(x[:3]), np.linalg.norm(x[3:6])], 3) * 3e-6, [0.02], [0.05] * 3])
    for j in range(x.size):
        step = np.zeros(x.size)
        step[j] = size[j]
        numeric = (model.evaluate(x + step).residual - model.evaluate(x - step).residual) / (2.0 * size[j])
        for k in range(4):
            # The scale of a column is that of its largest partial over the state, in comparable units.
            scale = np.abs(found.by_x[:, k] * size).max()
            assert np.abs((numeric[:, k] - found.by_x[:, k, j]) * size[j]).max() <= 1e-6 * scale


@pytest.mark.parametrize("two_way", [False, True])
def test_ranges_are_those_of_the_light_path_step_by_step(two_way: bool) -> None:
    """Down from the object, and up from where the station stood, each solved by plain iteration."""
    here = scene("geo")
    m = here.exact
    expected = []
    for t, place, speed in zip(m.t_s, m.observer_km, m.observer_velocity_km_s, strict=True):
        down = up = 0.0
        for _ in range(12):
            seen = propagate(here.state[:3], here.state[3:], t - down / C_KM_S, here.gm)[0]
            down = np.linalg.norm(seen - place)
        for _ in range(12):
            up = np.linalg.norm(seen - (place - speed * (down + up) / C_KM_S))
        expected.append(0.5 * (down + up) if two_way else down)
    found = -here.model(replace(with_ranges(m), two_way=two_way)).evaluate(here.state).residual[:, 2]
    # A millimetre.
    np.testing.assert_allclose(found, expected, atol=1e-6, rtol=0)


@pytest.mark.parametrize("two_way", [False, True])
def test_range_rate_is_the_rate_of_the_range(two_way: bool) -> None:
    """Ranges a hundredth of a second apart in reception time, the observer carried along."""
    here = scene("leo")
    m = replace(with_ranges(here.exact), two_way=two_way)

    def ranges(dt):
        moved = replace(m, t_s=m.t_s + dt, observer_km=m.observer_km + dt * m.observer_velocity_km_s)
        return -here.model(moved).evaluate(here.state).residual[:, 2]

    rate = (ranges(0.01) - ranges(-0.01)) / 0.02
    found = here.model(m).evaluate(here.state)
    np.testing.assert_allclose(-found.residual[:, 3], rate, atol=1e-8)
    np.testing.assert_allclose(found.per_second[:, 2], -rate, rtol=1e-5, atol=1e-5 * np.abs(rate).max())


def test_missing_components_take_no_part() -> None:
    here = scene("leo")
    m = with_ranges(here.exact)
    los, distance = m.los.copy(), m.range_km.copy()
    los[3], distance[[1, 4]] = np.nan, np.nan
    m = replace(m, los=los, range_km=distance)
    model = here.model(m)
    found = model.evaluate(here.state)
    assert not model.present[3, 0] and not model.present[1, 2] and model.present[3, 2]
    assert model.present.sum() == 4 * len(m) - 4
    for row, column in ((3, 0), (3, 1), (1, 2), (4, 2)):
        assert found.residual[row, column] == 0.0
        assert not found.by_x[row, column].any()
    assert np.isfinite(found.by_x).all()


def test_whitened_noise_has_unit_variance() -> None:
    """Correlated noise with time errors along the track, 4000 draws of one row each."""
    here = scene("leo")
    n = 4000
    m = here.exact.take(np.full(n, 7))
    m = replace(m, corr=np.full(n, 0.7), sigma_time_s=np.full(n, 1e-2), sigma_rad=m.sigma_rad * [1.0, 3.0])
    model = here.model(m)
    rate = model.evaluate(here.state).per_second
    rng = np.random.default_rng(5)
    clean = noisy(m, rng)
    late = rng.normal(size=n) * m.sigma_time_s
    # A time tag that is late by dt belongs to a direction seen dt earlier.
    drawn = shifted(clean, rate * late[:, None])
    residual = here.model(drawn).evaluate(here.state).residual
    assert np.linalg.norm(rate[0]) * 1e-2 > 2.0 * m.sigma_rad[0, 1]
    white = (model.whitening(rate) @ residual[:, :, None])[:, :, 0]
    # Sampling error of variances and correlation over 4000 draws: 1/sqrt(2000) and 1/sqrt(4000); 4 sigma.
    np.testing.assert_allclose(np.cov(white.T), np.eye(2), atol=4.0 * np.sqrt(2.0 / n))


def test_time_error_lies_along_the_track() -> None:
    here = scene("leo")
    m = replace(here.exact, sigma_time_s=np.full(len(here.exact), 0.01))
    model = here.model(m)
    rate = model.evaluate(here.state).per_second
    added = model.covariance(rate) - here.model(here.exact).covariance(rate)
    values, vectors = np.linalg.eigh(added)
    np.testing.assert_allclose(values[:, 0], 0.0, atol=1e-9 * values[:, 1].max())
    # The rate from the motion of the image itself.
    step = 0.05
    los = [
        predicted_directions(
            here.state, 0.0, m.t_s + dt, m.observer_km + dt * m.observer_velocity_km_s,
            m.center_velocity_km_s, here.gm, True,
        )[0]
        for dt in (-step, step)
    ]  # fmt: skip
    moved = residuals_rad(los[1], los[0]) / (2.0 * step)
    np.testing.assert_allclose(values[:, 1], (0.01 * np.linalg.norm(moved, axis=1)) ** 2, rtol=1e-4)
    cosine = np.abs(np.sum(vectors[:, :, 1] * moved, axis=1)) / np.linalg.norm(moved, axis=1)
    np.testing.assert_allclose(cosine, 1.0, atol=1e-6)


def test_deflection_is_that_of_the_standards_library() -> None:
    """ERFA's ld (IAU SOFA), object at a finite distance and at infinity."""
    rng = np.random.default_rng(4)
    for _ in range(50):
        observer = rng.normal(size=3)
        observer *= AU_KM / np.linalg.norm(observer)
        u = rng.normal(size=3)
        u /= np.linalg.norm(u)
        distance = 10.0 ** rng.uniform(6.0, 9.5)
        body = observer + distance * u
        q, e = body / np.linalg.norm(body), observer / AU_KM
        if 1.0 + q @ e < 1e-3:
            continue
        whole = solar_deflection(u[None], observer[None], [distance], relative_to_stars=False)[0]
        np.testing.assert_allclose(u + whole, erfa.ld(1.0, u, q, e, 1.0, 1e-6), atol=2e-15)
        star = erfa.ld(1.0, u, u, e, 1.0, 1e-6)
        left = solar_deflection(u[None], observer[None], [distance])[0]
        np.testing.assert_allclose(u + left - whole, 2.0 * u - star, atol=2e-15)


def test_deflection_has_its_known_sizes() -> None:
    """0.00407 arcsec at 90 degrees, 1.75 arcsec at the limb (Will 1993, common values)."""
    observer = np.array([[AU_KM, 0.0, 0.0]])
    far = [1e14]
    side = solar_deflection([[0.0, 1.0, 0.0]], observer, far, relative_to_stars=False)[0]
    assert side[0] / ARCSEC_RAD == pytest.approx(0.00407, abs=5e-6)
    angle = 695700.0 / AU_KM
    limb = [[-np.cos(angle), np.sin(angle), 0.0]]
    bent = solar_deflection(limb, observer, far, relative_to_stars=False)[0]
    assert np.linalg.norm(bent) / ARCSEC_RAD == pytest.approx(1.75, abs=5e-3)
    assert bent[1] > 0.0
    # Against the field's stars an infinitely distant object is not bent at all.
    np.testing.assert_allclose(solar_deflection(limb, observer, [1e20])[0], 0.0, atol=1e-14)


def test_deflection_enters_the_residuals() -> None:
    here = scene("main-belt")
    m = replace(here.exact, sun_to_observer_km=here.exact.observer_km)
    model = here.model(m)
    found = model.evaluate(here.state)
    expected = solar_deflection(found.los, m.observer_km, found.range_km)
    assert 1e-9 < np.linalg.norm(expected, axis=1).max() < 1e-7
    np.testing.assert_allclose(found.residual, residuals_rad(m.los, found.los + expected), atol=1e-15)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"los": np.zeros((3, 3))}, "los has shape"),
        ({"sigma_rad": np.zeros((25, 2))}, "sigma_rad holds 0.0"),
        ({"corr": np.ones(25)}, "corr must lie between"),
        ({"sigma_time_s": np.full(25, -1.0)}, "sigma_time_s"),
        ({"range_km": np.ones(25)}, "sigma_range_km is missing"),
        ({"range_km": np.ones(25), "sigma_range_km": np.zeros(25)}, "sigma_range_km holds"),
    ],
)
def test_bad_arrays_are_named(change, said: str) -> None:
    with pytest.raises(UsageError, match=said):
        replace(scene("leo").exact, **change)


def test_what_a_parameter_lacks_is_named() -> None:
    here = scene("leo")
    bare = replace(here.exact, observer_velocity_km_s=None, station_axes=None)
    with pytest.raises(UsageError, match="a clock offset needs observer_velocity_km_s"):
        here.model(bare, parameters=[ClockOffset(0)])
    with pytest.raises(UsageError, match="sigma_time_s needs observer_velocity_km_s"):
        here.model(replace(bare, sigma_time_s=np.ones(25)))
    with pytest.raises(UsageError, match="station offset needs station_axes"):
        here.model(bare, parameters=[StationOffset(0)])
    with pytest.raises(UsageError, match="no observation belongs to station 9"):
        here.model(here.exact, parameters=[ClockOffset(9)])
    with pytest.raises(UsageError, match="unknown to the motion; it knows: none"):
        here.model(here.exact, parameters=[ForceParameter("area_to_mass_m2_kg")])
    with pytest.raises(UsageError, match="twice"):
        here.model(here.exact, parameters=[ClockOffset(0), ClockOffset(0)])
    with pytest.raises(UsageError, match="prior_sigma"):
        ClockOffset(0, prior_sigma_s=0.0)
