"""Perturbed orbits with partials against scipy's DOP853 on the same forces, in one process.

Run ``python tests/benchmarks/bench_dynamics.py``. Budgets: about the Sun over 60 days, 200 times, with partials
at most 0.15 s; a low orbit over one day with J2 to J4, Sun and Moon at most 0.5 s. The ratio to DOP853, which
integrates the state alone, does not depend on the machine. In the last case DOP853 steps over the edges of the
shadow and is the one that is off: with steps of at most 8 s it comes within a millimetre after a quarter of a day.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from dynamics.independent_integration import integrated
from dynamics.made_up_tracks import DAY, LOW, NEAR_EARTH
from firstarc.border import planets
from firstarc.dynamics.force_models import Drag, RadiationPressure, full
from firstarc.dynamics.trajectory import Trajectory

EPOCH = (2459000.5, 0.123456)


def best_of(count: int, call: Callable[[], object]) -> float:
    """Shortest of some runs, s."""
    times = []
    for _ in range(count):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return min(times)


def report() -> list[str]:
    pole = planets.earth_pole(EPOCH)
    light, drag = RadiationPressure(0.02, 1.3), Drag(0.022)
    cases = (
        ("about the Sun, 60 days", "sun", NEAR_EARTH, 60.0 * DAY, None, None),
        ("low orbit, one day", "earth", LOW, DAY, None, None),
        ("the same with light, shadow, drag", "earth", LOW, DAY, light, drag),
    )
    lines = [
        "| full forces | with partials s | DOP853, state only s | ratio | difference mm |",
        "|---|---:|---:|---:|---:|",
    ]
    for name, center, state, span, pressure, air in cases:
        model = full(center, planets.tracks(center, EPOCH, (0.0, span)), pole, "", pressure, air)
        t = np.linspace(0.0, span, 200)
        ours = best_of(5, lambda m=model, s=state, t=t: Trajectory(m, s, parameters=m.parameters).with_partials(t))
        reference = best_of(1, lambda m=model, s=state, t=t: integrated(m, s, 0.0, t[-1]))
        off = Trajectory(model, state).at([span])[0][0] - integrated(model, state, 0.0, span)[:3]
        size = 1e6 * np.linalg.norm(off)
        lines.append(f"| {name} | {ours:.3f} | {reference:.3f} | {reference / ours:.1f} | {size:.2g} |")
    return lines


if __name__ == "__main__":
    print("\n".join(report()))
