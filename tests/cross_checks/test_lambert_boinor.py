"""Lambert's problem against boinor's solver (D. Izzo's algorithm, an independent implementation)."""

from __future__ import annotations

import numpy as np
import pytest

from firstarc.preliminary.lambert import LambertCode, lambert

GM = 398600.4418
pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def izzo():
    return pytest.importorskip("boinor.core.iod").izzo


def cases(n, seed):
    """Random pairs of positions and times from a tenth to several periods of their mean distance."""
    rng = np.random.default_rng(seed)
    r = rng.normal(size=(2, n, 3))
    r *= (rng.uniform(6600.0, 50000.0, (2, n)) / np.linalg.norm(r, axis=2))[..., None]
    period = 2.0 * np.pi * np.sqrt(np.linalg.norm(r, axis=2).mean(axis=0) ** 3 / GM)
    return r[0], r[1], period * rng.uniform(0.05, 6.0, n)


@pytest.mark.parametrize("revolutions", [0, 1, 3])
@pytest.mark.parametrize("prograde", [True, False])
@pytest.mark.parametrize("low", [True, False])
def test_same_velocities(izzo, revolutions, prograde, low):
    r1, r2, dt = cases(60, 3 + revolutions)
    up = np.cross(r1, r2)[:, 2] > 0.0
    ours = lambert(r1, r2, dt, GM, long_way=up != prograde, revolutions=revolutions, right_branch=low)
    compared = 0
    for k in range(len(dt)):
        try:
            v1, v2 = izzo(GM, r1[k], r2[k], dt[k], revolutions, prograde, low, 35, 1e-12)
        except ValueError:
            assert ours.code[k] == LambertCode.NO_ORBIT
            continue
        assert ours.code[k] == LambertCode.SOLVED
        # 1e-7 of the speed: what the other solver's tolerance leaves near its least time.
        size = np.linalg.norm(v1) + np.linalg.norm(v2)
        np.testing.assert_allclose(ours.v1_km_s[k], v1, rtol=0, atol=1e-7 * size)
        np.testing.assert_allclose(ours.v2_km_s[k], v2, rtol=0, atol=1e-7 * size)
        compared += 1
    assert compared > 10
