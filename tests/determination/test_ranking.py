"""The order of candidates: ties, no other observations, contradicted and rejected ones."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import firstarc as fa
from firstarc.determination.ranking import contradicted, ranked
from firstarc.determination.stages import Candidate
from pipeline.shared_cases import invented


@pytest.fixture(scope="module")
def found() -> Candidate:
    """An admissible candidate of invented sightings."""
    best = fa.preliminary(invented("SATELLITE"), pick=(1, 4, 7)).best
    assert best is not None and best.admissible
    return replace(best, reason="")


def speeded(candidate: Candidate, factor: float) -> Candidate:
    """The same with another velocity, hence another eccentricity."""
    state = candidate.converged.state
    assert state is not None
    moved = fa.State(state.r_km, factor * np.asarray(state.v_km_s), state.epoch, state.center)
    return replace(candidate, converged=replace(candidate.converged, state=moved))


def with_others(candidate: Candidate, rms_arcsec: float, chance: float) -> Candidate:
    """The same with other observations that it misses by so much."""
    converged = replace(candidate.converged, rms_arcsec=rms_arcsec)
    return replace(candidate, converged=converged, rms_others_arcsec=rms_arcsec, dof_others=8, chance_others=chance)


def alone(candidate: Candidate) -> Candidate:
    """The same made from all observations that there are."""
    nan = float("nan")
    return replace(candidate, rms_others_arcsec=nan, chi2_others=nan, dof_others=0, chance_others=nan)


def test_without_other_observations_bound_and_rounder_orbits_come_first(found: Candidate) -> None:
    orbits = [alone(speeded(found, factor)) for factor in (1.6, 1.0, 1.25)]
    shapes = [one.elements.e for one in orbits]
    assert shapes[0] > 1.0 > shapes[2] > shapes[1]
    order = ranked(orbits)
    assert [one.letter for one in order] == ["B", "C", "A"]
    assert order[0].reason.startswith("first for want of other observations")
    assert all(one.reason.startswith("after the others for want") for one in order[1:])


def test_a_tie_goes_to_the_rounder_orbit(found: Candidate) -> None:
    tied = [with_others(speeded(found, factor), 1.0, 0.5) for factor in (1.2, 1.0)]
    order = ranked(tied)
    assert [one.letter for one in order] == ["B", "A"]
    assert order[0].reason == "the other observations fit it best"
    assert order[1].reason == "the other observations fit B better"
    # Twins in every respect keep the order in which they came.
    assert [one.letter for one in ranked([tied[0], tied[0]])] == ["A", "B"]


def test_residuals_come_before_shape_and_contradiction_before_both(found: Candidate) -> None:
    round_and_bad = with_others(found, 40.0, 1e-9)
    eccentric_and_good = with_others(speeded(found, 1.25), 1.0, 0.6)
    order = ranked([round_and_bad, eccentric_and_good])
    assert [one.letter for one in order] == ["B", "A"]
    assert order[0].reason == "the other observations agree with it alone"
    assert order[1].reason == "the other observations contradict it"
    assert contradicted(round_and_bad) and not contradicted(eccentric_and_good)
    # A small rms does not help where the sigmas rule the orbit out.
    precise = with_others(found, 0.5, 1e-9)
    assert [one.letter for one in ranked([precise, eccentric_and_good])] == ["B", "A"]


def test_rejected_ones_come_last_with_their_reason(found: Candidate) -> None:
    rejected = replace(found, admissible=False, reason="below the surface")
    order = ranked([rejected, with_others(found, 1.0, 0.5)])
    assert [one.letter for one in order] == ["B", "A"]
    assert order[0].reason == "the only admissible one"
    assert order[1].reason == "below the surface"
    assert ranked([]) == ()
