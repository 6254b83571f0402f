"""Nights and their weights."""

from __future__ import annotations

import doctest

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from firstarc.errors import UsageError
from firstarc.fit import weighting
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.weighting import nights, same_night_factors
from fit.scenes import scene

DAY = 86400.0


def test_four_of_a_night_count_fully_and_nine_like_four() -> None:
    t = np.concatenate([np.arange(4) * 600.0, DAY + np.arange(9) * 600.0])
    factors = same_night_factors(t, np.zeros(13, int))
    np.testing.assert_allclose(factors, [1.0] * 4 + [1.5] * 9)
    # Sum of weights of a night never exceeds that of four.
    assert (1.0 / factors[4:] ** 2).sum() == pytest.approx(4.0)


def test_stations_and_gaps_part_nights() -> None:
    t = np.array([0.0, 100.0, 200.0, 8.1 * 3600 + 200.0, 50.0])
    assert nights(t, [0, 0, 0, 0, 1]).tolist() == [0, 0, 0, 1, 2]


@given(st.lists(st.tuples(st.floats(0.0, 1e6), st.integers(0, 3)), min_size=1, max_size=40), st.randoms())
def test_order_does_not_matter(rows, chance) -> None:
    mixed = list(rows)
    chance.shuffle(mixed)
    first = dict(zip(map(tuple, rows), same_night_factors(*zip(*rows, strict=True)), strict=True))
    second = dict(zip(map(tuple, mixed), same_night_factors(*zip(*mixed, strict=True)), strict=True))
    assert first == second


def test_factors_enlarge_the_sigmas_of_directions_only() -> None:
    """Twenty-five looks of two stations in one night: the orbit's sigmas grow as those of the observations."""
    here = scene("leo")
    factors = same_night_factors(here.exact.t_s, here.exact.station)
    weighted = here.exact.with_sigma_factors(factors)
    np.testing.assert_allclose(weighted.sigma_rad, here.exact.sigma_rad * factors[:, None])
    np.testing.assert_allclose(factors, np.where(here.exact.station == 0, np.sqrt(13 / 4), np.sqrt(12 / 4)))
    plain = fit_orbit(here.model(here.exact), here.state, 0.0)
    careful = fit_orbit(here.model(weighted), here.state, 0.0)
    ratio = np.sqrt(np.diag(careful.covariance) / np.diag(plain.covariance))
    assert np.all((ratio > factors.min() - 1e-9) & (ratio < factors.max() + 1e-9))


def test_shapes_are_checked() -> None:
    with pytest.raises(UsageError, match="one station per time"):
        nights([0.0, 1.0], [0])


def test_the_example_gives_what_it_says() -> None:
    result = doctest.testmod(weighting)
    assert result.attempted == 1 and result.failed == 0
