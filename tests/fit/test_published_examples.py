"""The generic engine against certified and published least-squares results."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.errors import UsageError
from firstarc.fit.least_squares import StopRules, minimise
from firstarc.results import Code
from published.published_values import CASES, assert_published

NIST = CASES["least_squares_nist_misra1a"]
SPRING = CASES["least_squares_tapley_spring_mass"]


def misra1a(b):
    x, y = np.array(NIST["inputs"]["x"]), np.array(NIST["inputs"]["y"])
    with np.errstate(over="ignore", invalid="ignore"):
        e = np.exp(-b[1] * x)
        return y - b[0] * (1.0 - e), -np.stack((1.0 - e, b[0] * x * e), axis=1)


@pytest.mark.parametrize("start", ["start1", "start2"])
def test_nist_misra1a(start: str) -> None:
    """NIST StRD, nonlinear regression, Misra1a: both certified starts, eleven digits."""
    found = minimise(misra1a, NIST["inputs"][start])
    assert found.status.code is Code.CONVERGED
    freedom = len(NIST["inputs"]["x"]) - 2
    sigma = np.sqrt(found.chi2 / freedom * np.diag(found.covariance))
    assert_published(NIST, "b1", found.x[0])
    assert_published(NIST, "b2", found.x[1])
    assert_published(NIST, "sd_b1", sigma[0])
    assert_published(NIST, "sd_b2", sigma[1])
    assert_published(NIST, "rss", found.chi2)
    assert_published(NIST, "residual_sd", np.sqrt(found.chi2 / freedom))


def test_nist_does_not_depend_on_the_units_of_a_variable() -> None:
    """The same problem with b2 counted in millionths."""

    def rescaled(b):
        residual, jacobian = misra1a([b[0], b[1] * 1e-6])
        return residual, jacobian * [1.0, 1e-6]

    plain = minimise(misra1a, NIST["inputs"]["start1"])
    other = minimise(rescaled, np.array(NIST["inputs"]["start1"]) * [1.0, 1e6])
    assert len(plain.history) == len(other.history)
    np.testing.assert_allclose(other.x * [1.0, 1e-6], plain.x, rtol=1e-9)


def spring_mass(x):
    """Tapley, Schutz and Born 2004, example 4.8.2: range, range rate and the a priori values below."""
    given = SPRING["inputs"]
    t, h = np.array(given["t_s"]), given["h_m"]
    w = np.sqrt((given["k1_n_m"] + given["k2_n_m"]) / given["m_kg"])
    c, s = np.cos(w * t), np.sin(w * t)
    place, speed = x[0] * c + x[1] / w * s, x[1] * c - x[0] * w * s
    d_place, d_speed = np.stack((c, s / w), axis=1), np.stack((-w * s, c), axis=1)
    distance = np.hypot(place, h)
    rate = place * speed / distance
    d_distance = (place / distance)[:, None] * d_place
    d_rate = ((speed / distance)[:, None] * d_place + (place / distance)[:, None] * d_speed
              - (rate / distance)[:, None] * d_distance)  # fmt: skip
    sigma = np.sqrt([given["a_priori_variance_x"], given["a_priori_variance_v"]])
    prior = (x - [given["x0_guess_m"], given["v0_guess_m_s"]]) / sigma
    residual = np.concatenate([given["range_m"] - distance, given["range_rate_m_s"] - rate, prior])
    return residual, np.concatenate([-d_distance, -d_rate, np.diag(1.0 / sigma)])


def test_tapley_schutz_born_4_8_2() -> None:
    found = minimise(spring_mass, [SPRING["inputs"]["x0_guess_m"], SPRING["inputs"]["v0_guess_m_s"]])
    assert found.ok
    sigma = np.sqrt(np.diag(found.covariance))
    assert_published(SPRING, "x0_m", found.x[0])
    assert_published(SPRING, "v0_m_s", found.x[1])
    assert_published(SPRING, "sigma_x0_m", sigma[0])
    assert_published(SPRING, "correlation", found.covariance[0, 1] / (sigma[0] * sigma[1]))
    n = len(SPRING["inputs"]["t_s"])
    distance, rate = found.residual[:n], found.residual[n : 2 * n]
    assert_published(SPRING, "range_residual_mean_m", distance.mean())
    assert_published(SPRING, "range_residual_rms_m", np.sqrt(np.mean(distance**2)))
    assert_published(SPRING, "rate_residual_mean_m_s", rate.mean())
    assert_published(SPRING, "rate_residual_rms_m_s", np.sqrt(np.mean(rate**2)))


def test_a_direction_that_nothing_fixes_is_said_to_be_free() -> None:
    """Two unknowns of which only the sum is seen."""

    def problem(x):
        return np.array([1.0, 2.0, 3.0]) - (x[0] + x[1]), -np.ones((3, 2))

    found = minimise(problem, [0.0, 0.0], scale=[1.0, 1.0])
    assert found.status.code is Code.SINGULAR
    assert found.covariance is None
    np.testing.assert_allclose(np.abs(found.weak_direction), np.sqrt(0.5))
    assert found.weak_direction[0] * found.weak_direction[1] < 0.0
    assert found.x.sum() == pytest.approx(2.0)


def test_held_direction_does_not_move() -> None:
    """With the weaker of two separate unknowns held only the stronger is fitted."""

    def problem(x):
        return np.array([10.0 * (3.0 - x[0]), 0.1 * (5.0 - x[1])]), np.diag([-10.0, -0.1])

    found = minimise(problem, [0.0, 0.0], scale=[1.0, 1.0], held=1)
    assert found.status.code is Code.CONSTRAINED
    assert not found.ok
    np.testing.assert_allclose(found.x, [3.0, 0.0])


def test_running_out_of_steps_is_not_success() -> None:
    found = minimise(misra1a, NIST["inputs"]["start1"], rules=StopRules(iterations=3))
    assert found.status.code is Code.NOT_CONVERGED
    assert "3 steps" in found.status.sentence


def test_rosenbrock_valley() -> None:
    """Rosenbrock 1960, Computer J. 3, 175: minimum 0 at (1, 1) along a bent valley."""

    def problem(x):
        return np.array([10.0 * (x[1] - x[0] ** 2), 1.0 - x[0]]), np.array([[-20.0 * x[0], 10.0], [-1.0, 0.0]])

    found = minimise(problem, [-1.2, 1.0])
    assert found.ok
    np.testing.assert_allclose(found.x, 1.0, atol=1e-9)


@pytest.mark.parametrize("rows", [399, 400, 401, 1000, 80_003])
def test_blocks_of_rows_change_nothing(rows: int) -> None:
    """A linear problem of any length against the library's own solution."""
    rng = np.random.default_rng(rows)
    a, y = rng.normal(size=(rows, 3)), rng.normal(size=rows)
    found = minimise(lambda x: (y - a @ x, -a), np.zeros(3))
    np.testing.assert_allclose(found.x, np.linalg.lstsq(a, y, rcond=None)[0], rtol=1e-10)
    np.testing.assert_allclose(found.covariance, np.linalg.inv(a.T @ a), rtol=1e-9)


def test_misuse_names_what_is_wrong() -> None:
    with pytest.raises(UsageError, match=r"2 residuals cannot fix 3 unknowns"):
        minimise(lambda x: (np.zeros(2), np.zeros((2, 3))), np.zeros(3))
    with pytest.raises(UsageError, match=r"expected \(2, 1\)"):
        minimise(lambda x: (np.zeros(2), np.zeros((1, 2))), np.zeros(1))
    with pytest.raises(UsageError, match="no finite residuals"):
        minimise(lambda x: (np.full(2, np.nan), np.zeros((2, 1))), np.zeros(1))
