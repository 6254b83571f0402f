"""Outliers leave, good observations stay, and the analyst has the last word."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.errors import UsageError
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.rejection import RejectionRule, manual_choice, next_selection, residual_chi2
from fit.scenes import noisy, scene, shifted

RULE = RejectionRule()


def planted(here, rng, rows, sigmas):
    """Noisy observations of which some are moved by so many sigmas in any direction."""
    moved = np.zeros((len(here.exact), 2))
    angle = rng.uniform(0.0, 2.0 * np.pi, len(rows))
    moved[rows] = sigmas * np.stack((np.cos(angle), np.sin(angle)), axis=1)
    return shifted(noisy(here.exact, rng), moved * here.exact.sigma_rad)


@pytest.mark.parametrize("regime", ["leo", "meo", "geo", "near-earth", "main-belt"])
def test_ten_sigmas_leave_and_the_rest_stays(regime: str) -> None:
    """One bad observation anywhere: right in at least 98 % of 200 repeats."""
    here = scene(regime)
    rng = np.random.default_rng(5)
    right = 0
    for _ in range(200):
        bad = int(rng.integers(len(here.exact)))
        fit = fit_orbit(here.model(planted(here, rng, [bad], 10.0)), here.state, 0.0, rejection=RULE)
        right += np.flatnonzero(~fit.used).tolist() == [bad]
    assert right >= 196


def test_a_rejected_observation_says_why() -> None:
    here = scene("leo")
    fit = fit_orbit(here.model(planted(here, np.random.default_rng(1), [4], 15.0)), here.state, 0.0, rejection=RULE)
    assert np.flatnonzero(~fit.used).tolist() == [4]
    assert fit.reasons[4].startswith("rejected: chi-square")
    assert all(reason == "used" for k, reason in enumerate(fit.reasons) if k != 4)
    assert fit.dof == 2 * (len(fit.used) - 1) - 6
    # An observation outside is judged with the orbit's uncertainty added: chi-square near 15^2.
    assert 120.0 < fit.chi2_each[4] < 350.0


def test_a_gross_error_spoils_its_neighbours_only_for_a_while() -> None:
    """A degree off: whatever left with it comes back."""
    here = scene("geo")
    fit = fit_orbit(here.model(planted(here, np.random.default_rng(2), [0], 3600.0)), here.state, 0.0, rejection=RULE)
    assert np.flatnonzero(~fit.used).tolist() == [0]


def test_several_bad_ones() -> None:
    here = scene("main-belt")
    bad = [0, 9, 17]
    fit = fit_orbit(here.model(planted(here, np.random.default_rng(3), bad, 30.0)), here.state, 0.0, rejection=RULE)
    assert np.flatnonzero(~fit.used).tolist() == bad


def test_the_hand_wins() -> None:
    here = scene("leo")
    model = here.model(planted(here, np.random.default_rng(1), [4], 15.0))
    kept = fit_orbit(model, here.state, 0.0, manual_choice(25, keep=[4], leave_out=[7]), RULE)
    assert kept.used[4] and not kept.used[7]
    assert kept.reasons[4].startswith("kept by hand though chi-square")
    assert kept.reasons[7] == "taken out by hand"
    without = fit_orbit(model, here.state, 0.0, manual_choice(25, leave_out=[4]), RULE)
    automatic = fit_orbit(model, here.state, 0.0, rejection=RULE)
    np.testing.assert_allclose(without.state, automatic.state, rtol=1e-10)


def test_sigmas_that_are_too_small_do_not_empty_the_arc() -> None:
    """Noise ten times as large as stated: at most a third leaves, and the doubt is put into words."""
    here = scene("leo")
    noise = np.random.default_rng(8).normal(size=(25, 2)) * 10.0
    fit = fit_orbit(here.model(shifted(here.exact, noise * here.exact.sigma_rad)), here.state, 0.0, rejection=RULE)
    assert fit.used.sum() >= 25 - 25 // 3
    assert "sigmas" in fit.rejection_note


def test_no_rejection_without_redundancy() -> None:
    here = scene("leo")
    rows = [0, 8, 16, 24]
    moved = np.zeros((4, 2))
    moved[1] = 5e-4
    fit = fit_orbit(here.model(shifted(here.exact.take(rows), moved)), here.state, 0.0, rejection=RULE)
    assert fit.used.sum() >= 4 - 1
    assert fit.dof >= 0
    assert fit.rejection_note


def test_fixed_limits_are_those_of_the_paper_for_two_components() -> None:
    rule = RejectionRule(chi2_reject=8.0, chi2_recover=7.0)
    leave, back = rule.limits(30, np.array([2, 2]))
    np.testing.assert_allclose(leave, 8.0)
    np.testing.assert_allclose(back, 7.0)


def test_default_limit_keeps_its_chance() -> None:
    """For two components chi-square exceeds L with chance exp(-L/2)."""
    leave, back = RejectionRule(chance=0.01).limits(50, np.array([2]))
    assert 50 * np.exp(-leave[0] / 2.0) == pytest.approx(0.01)
    assert back[0] < leave[0]


def test_selection_rules_one_by_one() -> None:
    rule = RejectionRule(chi2_reject=8.0, chi2_recover=7.0, worst_part=0.25, most=0.9)
    chi2 = np.array([100.0, 20.0, 30.0, 7.5, 6.0, 200.0])
    used = np.array([True, True, True, False, False, True])
    manual = np.array([0, 0, 0, 0, 0, 1])
    new, too_many = next_selection(chi2, used, manual, np.full(6, 2), rule)
    # 20 is below a quarter of the worst, 7.5 above the limit to return, the last is kept by hand.
    assert new.tolist() == [False, True, False, False, True, True]
    assert not too_many


def test_residual_covariance_inside_and_outside() -> None:
    """One unknown seen by two equal observations: variances 1/2 inside, 3/2 outside."""
    white = np.array([[1.0], [1.0]])
    design = np.ones((2, 1, 1))
    found = residual_chi2(white, design, np.array([[0.5]]), np.array([True, False]))
    np.testing.assert_allclose(found, [2.0, 1.0 / 1.5])


def test_misuse() -> None:
    with pytest.raises(UsageError, match="both kept and left out"):
        manual_choice(5, keep=[1], leave_out=[1])
    with pytest.raises(UsageError, match="numbered 0 to 4"):
        manual_choice(5, keep=[5])
    with pytest.raises(UsageError, match="probability"):
        RejectionRule(chance=0.0)
    with pytest.raises(UsageError, match="chi2_recover"):
        RejectionRule(chi2_reject=7.0, chi2_recover=8.0)
