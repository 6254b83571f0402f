"""The default pick: its reason, and that one bad observation cannot get into it."""

from __future__ import annotations

import numpy as np
import pytest

import firstarc as fa
from pipeline.shared_cases import SUN, directions_of, frame_of, invented, loaded, noisy, with_directions


@pytest.mark.parametrize("name", ["sh-leo-pass", "sh-molniya-90min", *SUN])
def test_a_pick_is_three_rows_in_order_of_time_with_a_reason(name: str) -> None:
    obs = loaded(name, "s1")
    pre = fa.preliminary(obs)
    times = obs.sight_lines.t_s[list(pre.pick)]
    assert len(set(pre.pick)) == 3 and (np.diff(times) > 0.0).all()
    assert "picks tried" in pre.pick_reason and "times its sigma" in pre.pick_reason
    assert fa.preliminary(obs, pick=pre.pick).best == pre.best
    assert fa.preliminary(obs, pick=pre.pick).pick_reason == "given by the caller."
    assert fa.preliminary(obs) == pre, "the choice is the same every time"


def spoiled(name: str, seed: int) -> tuple[fa.Observations, int]:
    """Two-body directions with an arcsecond of noise; one row, drawn by lot, is 30 arcsec off."""
    template = {"satellite": invented, "leo": lambda: loaded("sh-leo-pass", "s1")}[name]()
    state = fa.preliminary(template).best.state
    random = np.random.default_rng(seed)
    row = int(random.integers(len(template)))
    los = noisy(directions_of(state, template), np.ones((len(template), 2)), random)
    size = np.zeros((len(template), 2))
    angle = random.uniform(0.0, 2.0 * np.pi)
    size[row] = 30.0 * np.array([np.cos(angle), np.sin(angle)])

    class Fixed:
        def standard_normal(self, shape: tuple[int, int]) -> np.ndarray:
            return np.ones(shape)

    return with_directions(template, noisy(los, size, Fixed())), row  # type: ignore[arg-type]


@pytest.mark.parametrize("name", ["satellite", "leo"])
def test_a_spoiled_observation_is_not_picked(name: str) -> None:
    picked = 0
    for seed in range(10):
        obs, row = spoiled(name, seed)
        pre = fa.preliminary(obs)
        picked += row in pre.pick
        if row not in pre.pick:
            worst = int(np.argmax(pre.best.chi))
            assert worst == row, "and it stands out in the residuals"
    assert picked <= 1


def test_the_middle_of_four_hundred_observations() -> None:
    """Long lists are thinned for the trial; the pick still spans the arc."""
    template = invented()
    state = fa.preliminary(template).best.state
    frame = frame_of(template[[0]])
    frame = frame.loc[frame.index.repeat(400)].reset_index(drop=True)
    frame["time_utc"] = [f"2026-04-17T20:{50 + k // 60:02d}:{k % 60:02d}.5" for k in range(400)]
    obs = fa.load(frame, center="earth")
    obs = with_directions(obs, noisy(directions_of(state, obs), np.ones((400, 2)), np.random.default_rng(3)))
    pre = fa.preliminary(obs)
    assert pre.pick[0] < 100 and pre.pick[2] > 300
    assert pre.best is not None and pre.best.dof_others == 794
