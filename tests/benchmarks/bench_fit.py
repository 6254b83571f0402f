"""How fast an orbit is fitted to many observations, against a general optimiser in the same run.

Run ``python tests/benchmarks/bench_fit.py``. Budget: two-body fit of 1,000 observations within 50 ms.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
from scipy.optimize import least_squares

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from firstarc.dynamics.light_time import predicted_directions
from firstarc.fit.measurements import Measurements
from firstarc.fit.orbit_fit import fit_orbit
from firstarc.fit.rejection import RejectionRule
from fit.scenes import EARTH_MOVES, noisy, scene, turning


def least(call, repeats=10):
    """Smallest wall time of several runs, ms."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return 1e3 * min(times)


def many(count):
    """Observations of a low orbit over a week, one station, any altitude."""
    here = scene("leo")
    t = np.linspace(-3.0e5, 3.0e5, count)
    place, speed, axes = turning(30.0, 10.0, t)
    moving = np.broadcast_to(EARTH_MOVES, (count, 3))
    los, _, _ = predicted_directions(here.state, 0.0, t, place, moving, here.gm, True)
    exact = Measurements(
        t, los, place, moving, np.full((count, 2), 5e-6), np.zeros(count), np.zeros(count), True,
        observer_velocity_km_s=speed, station=np.zeros(count, int), station_axes=axes,
    )  # fmt: skip
    return here, noisy(exact, np.random.default_rng(1))


def report() -> list[str]:
    here, observed = many(1000)
    start = here.state * (1.0 + 1e-6 * np.arange(6))
    ours = least(lambda: fit_orbit(here.model(observed), start, 0.0))
    checked = least(lambda: fit_orbit(here.model(observed), start, 0.0, rejection=RejectionRule()))
    model = here.model(observed)
    whitening = model.whitening(None)
    scale = np.repeat([np.linalg.norm(start[:3]), np.linalg.norm(start[3:])], 3)

    def white(y):
        return (whitening @ model.evaluate(y * scale).residual[:, :, None]).ravel()

    general = least(lambda: least_squares(white, start / scale, method="lm"), 3)
    short = scene("near-earth")
    forty = noisy(short.exact.take(np.resize(np.arange(len(short.exact)), 40)), np.random.default_rng(2))
    fit = fit_orbit(short.model(forty), short.state, 0.0)

    def leave_one_out():
        for k in range(40):
            fit_orbit(short.model(forty.take(np.delete(np.arange(40), k))), fit.state, 0.0)

    return [
        "| wall time, shortest of several runs | ms | budget |",
        "|---|---:|---:|",
        f"| 1000 observations, two-body | {ours:.1f} | 50 |",
        f"| the same with the rejection of blunders | {checked:.1f} | 50 |",
        f"| the same by a general optimiser with differences ({general / ours:.1f} times ours) | {general:.1f} | |",
        f"| leave-one-out over 40 observations, every fit in full | {least(leave_one_out, 3):.0f} | 300 |",
    ]


if __name__ == "__main__":
    print("\n".join(report()))
