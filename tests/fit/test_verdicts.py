"""What is said about a fit, question by question."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from firstarc.fit.fitted import OtherMinimum
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.verdicts import enlargement, nonlinearity, verdicts
from firstarc.results import Code, Status
from fit.scenes import noisy, scene, shifted


def judged(regime: str, seed: int = 1, factor: float = 1.0, rows=None):
    here = scene(regime)
    noise = np.random.default_rng(seed).normal(size=(len(here.exact), 2)) * factor
    observed = shifted(here.exact, noise * here.exact.sigma_rad)
    model = here.model(observed if rows is None else observed.take(rows))
    fit = fit_orbit(model, here.state, 0.0)
    return fit, model, verdicts(fit, model)


@pytest.mark.parametrize("regime", ["leo", "meo", "geo", "near-earth", "main-belt"])
def test_a_sound_arc_is_determined(regime: str) -> None:
    _, _, said = judged(regime)
    assert said.determined
    assert said.consistent
    for _, one in said.items():
        assert one.ok and one.margin >= 0.0 and one.sentence.endswith(".")


@pytest.mark.parametrize("regime", ["one-night", "fourteen-minutes", "distant"])
@pytest.mark.parametrize("seed", range(6))
def test_what_the_data_cannot_decide_is_not_decided(regime: str, seed: int) -> None:
    _, _, said = judged(regime, seed)
    assert not said.determined
    assert not (said.conditioned and said.linear)
    assert said.sentence.startswith("The observations do not fix a single orbit: ")


def test_three_observations_have_no_redundancy() -> None:
    fit, _, said = judged("leo", rows=[0, 12, 24])
    assert fit.dof == 0
    assert said.converged and not said.redundant and not said.determined
    assert "No redundancy" in said.redundant.sentence
    assert not said.consistent and np.isnan(said.consistent.number)


@pytest.mark.parametrize(("factor", "word"), [(2.0, "larger"), (0.3, "smaller")])
def test_wrong_sigmas_are_seen_either_way_but_leave_the_orbit_determined(factor: float, word: str) -> None:
    _, _, said = judged("meo", factor=factor)
    assert not said.consistent and said.consistent.margin < 0.0
    assert word in said.consistent.sentence
    assert said.determined
    assert said.consistent.sentence in said.sentence


def test_residuals_far_beyond_the_sigmas_enlarge_them_in_the_judgement() -> None:
    """The same arc with noise 40 times as large as stated: no longer an orbit whose covariance may be used."""
    sound_fit, _, sound = judged("near-earth")
    fit, _, said = judged("near-earth", factor=40.0)
    assert enlargement(sound_fit) == 1.0 and sound.determined
    assert enlargement(fit) == pytest.approx(40.0, rel=0.2)
    assert said.linear.number > 10.0 * sound.linear.number
    assert not said.determined and "sigmas enlarged" in said.sentence


def test_a_small_bent_region_is_still_one_orbit() -> None:
    """Two nights of a geostationary object to 30 arcsec: second-order terms count, yet the orbit is one."""
    here = scene("geo", 30.0)
    model = here.model(noisy(here.exact, np.random.default_rng(1)))
    said = verdicts(fit_orbit(model, here.state, 0.0), model)
    assert not said.linear and said.conditioned.number < 0.01
    assert said.determined
    assert said.sentence.startswith("The observations fix one orbit. But: ") and "sampled" in said.sentence


def test_chi_square_test_fails_as_often_as_it_says() -> None:
    """One per cent of sound fits: 4 or fewer of 100 (chance of more: 0.3 %)."""
    here = scene("leo")
    rng = np.random.default_rng(77)
    failed = 0
    for _ in range(100):
        model = here.model(noisy(here.exact, rng))
        failed += not verdicts(fit_orbit(model, here.state, 0.0), model).consistent.ok
    assert failed <= 4


def test_a_close_rival_is_a_reason_and_a_far_one_is_not() -> None:
    fit, model, _ = judged("leo")
    fine = Status(Code.CONVERGED, "Converged.")

    def with_rival(above: float):
        rival = OtherMinimum(fit.state * 1.1, fit.parameters, fit.first_chi2 + above, fine, 1)
        return verdicts(replace(fit, others=(rival,)), model)

    near, far = with_rival(3.0), with_rival(500.0)
    assert not near.single and not near.determined and "too close" in near.sentence
    assert far.single and far.determined


def test_nonlinearity_grows_with_the_noise() -> None:
    """Second-order terms grow with the displacement, so with the sigma: ten times for ten times."""
    found = []
    for sigma in (0.1, 1.0):
        here = scene("near-earth", sigma)
        model = here.model(here.exact)
        found.append(nonlinearity(fit_orbit(model, here.state, 0.0), model).max())
    assert found[1] / found[0] == pytest.approx(10.0, rel=0.15)


def test_nonlinearity_predicts_the_asymmetry_of_chi_square() -> None:
    """Along the worst axis, chi-square three sigmas away differs from 9 as the measure allows."""
    here = scene("near-earth")
    model = here.model(here.exact)
    fit = fit_orbit(model, here.state, 0.0)
    part = nonlinearity(fit, model).max()
    scale = np.repeat([np.linalg.norm(fit.state[:3]), np.linalg.norm(fit.state[3:])], 3)
    values, vectors = np.linalg.eigh(fit.covariance / np.outer(scale, scale))
    axis = 3.0 * np.sqrt(values[-1]) * vectors[:, -1] * scale
    for way in (1.0, -1.0):
        white = (model.whitening(None) @ model.evaluate(fit.state + way * axis).residual[:, :, None]).ravel()
        away = np.sqrt(white @ white)
        assert abs(away - 3.0) <= 3.0 * part * (1.0 + 1e-6)
