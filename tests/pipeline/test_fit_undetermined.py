"""Arcs that fix no orbit: said in a sentence, with a weighted sample in place of one."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest
from astropy.time import Time

import firstarc as fa
from firstarc.constants import AU_KM, DAY_S
from pipeline.fit_scenes import orbit, seen
from pipeline.shared_cases import case, loaded, truth

EPOCH = Time("2026-05-20T00:00:00", scale="utc")
SEEDS = (1, 2, 3, 4, 5, 6)
#: Bound comet of one night, a near-Earth object seen three times, an object beyond Neptune over two days.
ARCS: dict[str, tuple[fa.State, list[tuple[str, str]], float]] = {
    "one-night comet": (
        orbit("sun", EPOCH, 8.0 * AU_KM, 0.8, (50.6, 200.0, 40.0, 5.0)),
        [("BRN", f"2026-05-19T{20 + m // 60}:{m % 60:02d}:00") for m in (0, 45, 90, 135, 180, 225)],
        0.3,
    ),
    "fourteen minutes": (
        orbit("sun", EPOCH, 2.4e8, 0.31, (9.4, 241.0, 318.0, 28.0)),
        [("BRN", f"2026-05-19T21:{m:02d}:00") for m in (10, 17, 24)],
        0.5,
    ),
    "distant, two days": (
        orbit("sun", EPOCH, 41.0 * AU_KM, 0.1, (12.0, 220.0, 10.0, 0.0)),
        [("BRN", f"2026-05-{day}T{hour}:00:00") for day in (19, 21) for hour in (21, 22, 23)],
        0.3,
    ),
}


@cache
def undetermined(name: str, seed: int) -> Any:
    state, sightings, sigma = ARCS[name]
    obs = seen(state, sightings, sigma, seed)
    assert obs.altitude_deg().min() > 5.0 and obs.center == "sun"
    return fa.fit(obs)


def true_range_km(name: str, fit: Any) -> float:
    """Slant range at the time that the sample's nodes stand for, of the same instant (light time is below 1e-4)."""
    lines = fit.observations.sight_lines
    k = int(np.argmin(np.abs(lines.t_s - fit.sample.t_state_s)))
    there = ARCS[name][0].propagated((lines.epoch_tdb[0], lines.epoch_tdb[1] + lines.t_s[k] / DAY_S))
    return float(np.linalg.norm(there.r_km - lines.observer_km[k]))


@pytest.mark.parametrize("name", list(ARCS))
def test_undetermined_with_a_sentence(name: str) -> None:
    for seed in SEEDS[:3]:
        fit = undetermined(name, seed)
        assert not fit.determined
        assert fit.verdicts.sentence.startswith("The observations do not fix a single orbit: ")
        assert len(fit.verdicts.sentence) > 80 and fit.verdicts.sentence in fit.report()
        failed = [key for key, one in fit.verdicts.items() if not one.ok and key != "consistent"]
        assert failed
        # the forces do not matter, and are not integrated along an orbit that nobody claims
        assert fit.forces == "Two-body attraction of the Sun only."
        assert "Only with" in fit.status.sentence or fit.status.ok


@pytest.mark.parametrize("name", list(ARCS))
def test_the_sample_stands_in_for_the_orbit(name: str) -> None:
    inside = 0
    for seed in SEEDS:
        sample = undetermined(name, seed).sample
        assert abs(sample.weight.sum() - 1.0) < 1e-9 and (sample.weight >= 0.0).all()
        assert sample.effective_number > 10.0
        low, middle, high = sample.summary()["range_km"]
        assert low < middle < high
        true = true_range_km(name, undetermined(name, seed))
        inside += low < true < high
        # the sample holds orbits that fit as well as the best of all found by iteration
        assert np.nanmin(sample.chi2) < undetermined(name, seed).chi2 + 4.0
    # of six with nine chances in ten each, fewer than four happens once in 60 times
    assert inside >= 4, f"{inside} of {len(SEEDS)} in the 90 % range"


def test_the_report_gives_ranges_in_place_of_sigmas() -> None:
    fit = undetermined("fourteen minutes", 1)
    text = fit.report()
    assert "of the sample" in text and "5 %" in text and "95 %" in text
    assert "One of many: not a determined orbit." in text
    assert "prior density" in text, "what was assumed is said"
    assert fit.dof == 0 and "No redundancy" in text
    assert "The arc fixes no single orbit" in text or "Two-body is enough" in text


def test_a_determined_orbit_needs_no_sample() -> None:
    fit = fa.fit(loaded("sh-comet-parabolic", "s1"), forces="two-body")
    assert fit.determined and fit.sample is None and "of the sample" not in fit.report()


@pytest.mark.parametrize("name", ["sh-venus-week", "sh-jupiter-month"])
def test_undetermined_cases_as_their_files_demand(name: str) -> None:
    assert not case(name)["formal"]["s5"]["determined"]
    fit = fa.fit(loaded(name, "s5"), forces="two-body")
    assert not fit.determined and fit.sample is not None
    if name == "sh-jupiter-month":
        low, _, high = fit.sample.summary()["range_km"] / AU_KM
        assert low < case(name)["truth"]["range_au"] < high


def test_more_nights_settle_it() -> None:
    """The near-Earth object of the fourteen minutes after three nights in nine days."""
    state = ARCS["fourteen minutes"][0]
    nights = [("BRN", f"2026-05-{d}T{h}:{m:02d}:00") for d in (11, 19, 28) for h, m in ((21, 10), (21, 50), (22, 30))]
    fit = fa.fit(seen(state, nights, 0.4, 7), forces="two-body")
    assert fit.determined and fit.sample is None
    assert abs(fit.elements.a_au - state.elements.a_au) < 4.0 * fit.sigmas.a_km / AU_KM


def test_prediction_of_an_undetermined_orbit_carries_its_doubt() -> None:
    """Nine days on, the predicted sigma is tens of degrees, or there is none: never a small number."""
    state = ARCS["fourteen minutes"][0]
    later = seen(
        state, [("BRN", "2026-05-28T21:40:40"), ("BRN", "2026-05-28T22:22:18"), ("BRN", "2026-05-28T23:03:26")]
    )
    fit = undetermined("fourteen minutes", 3)
    if fit.solution.covariance is None:
        with pytest.raises(fa.UsageError, match="use sampled orbits"):
            fit.residuals_of(later)
    else:
        assert min(fit.residuals_of(later)["sigma_ra_arcsec"]) > 3600.0


def test_truth_helper_agrees_with_the_case() -> None:
    """The comet of the shared case, for the distance that a published parabola gives."""
    state = truth("sh-comet-parabolic")
    assert abs(np.linalg.norm(state.r_km) / AU_KM - case("sh-comet-parabolic")["label"]["true_r_au"]) < 1e-6
