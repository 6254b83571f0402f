"""The same fit along perturbed orbits: partials of the integrated motion, forces estimated with the orbit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from firstarc.constants import AU_KM, DAY_S, GM_EARTH_KM3_S2
from firstarc.dynamics.force_models import ForceModel, RadiationPressure, full
from firstarc.dynamics.perturbed_directions import perturbed_directions
from firstarc.dynamics.trajectory import Perturbed, Trajectory
from firstarc.errors import UsageError
from firstarc.fit.measurement_model import MeasurementModel
from firstarc.fit.measurements import Measurements
from firstarc.fit.motion import TwoBody
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.parameters import ForceParameter
from fit.scenes import EARTH_MOVES, noisy, scene, turning


def circling(radius_km: float, period_s: float, tilt: float, start: float):
    """Track of a body on a circle about the Earth: near enough to Sun and Moon for a fit against itself."""

    def track(t_s):
        angle = start + 2.0 * np.pi * np.asarray(t_s) / period_s
        c, s = np.cos(angle), np.sin(angle)
        return radius_km * np.stack((c, s * np.cos(tilt), s * np.sin(tilt)), axis=-1)

    return track


TRACKS = {"sun": circling(AU_KM, 365.25 * DAY_S, 0.409, 1.0), "moon": circling(384400.0, 27.32 * DAY_S, 0.45, 2.0)}


def seen_along(forces: ForceModel, state, t_s, sigma_rad: float = 5e-6) -> Measurements:
    """Exact observations of a perturbed orbit from one turning station."""
    place, speed, axes = turning(20.0, 40.0, t_s)
    moving = np.broadcast_to(EARTH_MOVES, (t_s.size, 3))
    los, _, _ = perturbed_directions(Trajectory(forces, state, 0.0), t_s, place, moving, True)
    n = t_s.size
    return Measurements(
        t_s, los, place, moving, np.full((n, 2), sigma_rad), np.zeros(n), np.zeros(n), True,
        observer_velocity_km_s=speed, station=np.zeros(n, int), station_axes=axes,
    )  # fmt: skip


def test_two_body_motion_gives_the_same_fit_either_way() -> None:
    """A force model with every term off against the analytic motion."""
    here = scene("meo")
    observed = noisy(here.exact, np.random.default_rng(3))
    plain = fit_orbit(here.model(observed), here.state * 1.001, 0.0)
    motion = Perturbed(ForceModel("earth", GM_EARTH_KM3_S2))
    other = fit_orbit(MeasurementModel(observed, motion, 0.0), here.state * 1.001, 0.0)
    np.testing.assert_allclose(other.state, plain.state, rtol=1e-10)
    np.testing.assert_allclose(other.covariance, plain.covariance, rtol=1e-6)


def test_partials_along_a_perturbed_orbit() -> None:
    """Central differences through the whole model, area-to-mass included."""
    forces = full("earth", TRACKS, radiation=RadiationPressure(0.02))
    state = np.array([42164.0, 0.0, 0.0, 0.0, 3.07, 0.2])
    t = np.linspace(-DAY_S, DAY_S, 9)
    m = seen_along(forces, state, t)
    model = MeasurementModel(m, Perturbed(forces, ("area_to_mass_m2_kg",)), 0.0, [ForceParameter("area_to_mass_m2_kg")])
    x = model.start(state)
    assert x[6] == 0.02
    found = model.evaluate(x)
    assert np.abs(found.residual).max() < 1e-12
    size = np.array([0.1, 0.1, 0.1, 1e-5, 1e-5, 1e-5, 0.01])
    for j in range(7):
        step = np.zeros(7)
        step[j] = size[j]
        numeric = (model.evaluate(x + step).residual - model.evaluate(x - step).residual) / (2.0 * size[j])
        np.testing.assert_allclose(numeric, found.by_x[:, :, j], atol=2e-5 * np.abs(found.by_x[:, :, j]).max())


def test_two_body_residuals_show_the_forces_and_the_right_forces_remove_them() -> None:
    """A low orbit over a day, seen with the zonals in: without them chi-square is absurd."""
    here = scene("leo")
    forces = replace(full("earth", TRACKS), bodies=())
    m = seen_along(forces, here.state, np.linspace(-0.5 * DAY_S, 0.5 * DAY_S, 60))
    observed = noisy(m, np.random.default_rng(5))
    right = fit_orbit(MeasurementModel(observed, Perturbed(forces), 0.0), here.state * (1.0 + 1e-5), 0.0)
    assert right.status.ok
    assert 60.0 < right.chi2 < 180.0
    error = right.state - here.state
    # Chi-square of six numbers: 22.5 is passed once in a thousand.
    assert error @ np.linalg.solve(right.covariance, error) < 22.5
    wrong = fit_orbit(here.model(observed), here.state, 0.0)
    assert wrong.chi2 > 1e4 * right.chi2


def test_area_to_mass_is_estimated_with_its_sigma() -> None:
    """A light object in high orbit over two days: 1 m2/kg found from 0.5 within its sigma, 12 repeats."""
    truth = full("earth", TRACKS, radiation=RadiationPressure(1.0))
    state = np.array([42164.0, 0.0, 0.0, 0.0, 3.07, 0.2])
    m = seen_along(truth, state, np.linspace(-DAY_S, DAY_S, 30))
    guess = truth.with_value("area_to_mass_m2_kg", 0.5)
    motion = Perturbed(guess, ("area_to_mass_m2_kg",))
    rng = np.random.default_rng(8)
    scores = []
    for _ in range(12):
        model = MeasurementModel(noisy(m, rng), motion, 0.0, [ForceParameter("area_to_mass_m2_kg")])
        fit = fit_orbit(model, state, 0.0)
        assert fit.status.ok
        assert fit.parameter_names == ("area_to_mass_m2_kg",)
        scores.append((fit.parameters[0] - 1.0) / fit.parameter_sigmas[0])
    assert fit.parameter_sigmas[0] < 0.1
    # Chi-square of 12 degrees of freedom, 99.9 % band (standard tables).
    assert 2.2 < np.sum(np.square(scores)) < 33.0


def test_a_parameter_that_is_not_estimated_keeps_the_value_of_the_motion() -> None:
    forces = full("earth", TRACKS, radiation=RadiationPressure(1.0))
    state = np.array([42164.0, 0.0, 0.0, 0.0, 3.07, 0.2])
    m = seen_along(forces, state, np.linspace(0.0, DAY_S, 5))
    model = MeasurementModel(m, Perturbed(forces, ("area_to_mass_m2_kg",)), 0.0)
    assert np.abs(model.evaluate(state).residual).max() < 1e-12
    assert model.forces(state) == pytest.approx([1.0])


def test_starts_are_tried_with_the_cheaper_motion_first() -> None:
    """Same minimum as without, from several starts of which the perturbed motion then sees one."""
    forces = full("earth", TRACKS)
    state = np.array([42164.0, 0.0, 0.0, 0.0, 3.07, 0.2])
    observed = noisy(seen_along(forces, state, np.linspace(-DAY_S, DAY_S, 20)), np.random.default_rng(3))
    model = MeasurementModel(observed, Perturbed(forces), 0.0)
    cheap = MeasurementModel(observed, TwoBody(GM_EARTH_KM3_S2), 0.0)
    starts = state * np.array([[1.0], [1.003], [0.998]])
    plain = fit_orbit(model, starts, 0.0)
    quick = fit_orbit(model, starts, 0.0, approach=cheap)
    error = quick.state - plain.state
    assert error @ np.linalg.solve(plain.covariance, error) < 1e-6
    assert quick.others == plain.others == ()
    with pytest.raises(UsageError, match="approach must hold the model's epoch"):
        fit_orbit(model, starts, 0.0, approach=MeasurementModel(observed, TwoBody(GM_EARTH_KM3_S2), 5.0))
