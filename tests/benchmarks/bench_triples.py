"""How fast three-observation orbits are solved, as ratios within one run.

Run ``python tests/benchmarks/bench_triples.py``. Prints, per regime, the batch against the textbook loop of
``textbook_loop.py`` on one core, whether both agree, the success of both, and the time of one interactive
solution; then the success table of the seeded grid.
"""

from __future__ import annotations

import sys
import time
import tracemalloc
import warnings
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from benchmarks import textbook_loop
from firstarc.preliminary.batch import solve_triples
from firstarc.preliminary.candidates import solve_triple
from properties.orbit_cases import EARTH, REGIMES, triples

BATCH, LOOP = 16384, 150


def least(call, repeats=3):
    """Smallest processor time of several runs, s."""
    times = []
    for _ in range(repeats):
        start = time.process_time()
        call()
        times.append(time.process_time() - start)
    return min(times)


def loop(case, count):
    """Textbook orbits of the first triples: list of lists of (root, positions, velocity)."""
    out = []
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore")
        for k in range(count):
            try:
                out.append(textbook_loop.solve(case.los[k], case.observer_km[k], case.t_s[k], case.gm))
            except (OverflowError, ValueError, ZeroDivisionError):
                out.append([])
    return out


def found(case, positions_km, triple, count):
    off = np.abs(positions_km[:, 1] - case.r2_km[triple]).max(axis=1)
    hit = np.zeros(count, dtype=bool)
    hit[triple[off < 1e-3 * case.range2_km[triple]]] = True
    return hit.mean()


def compare(regime, arc_deg):
    """Time per triple of both, their success, and their largest disagreement where both have the truth."""
    case = triples(regime, BATCH, seed=51, light_time=False, arc_deg=arc_deg)
    batch = solve_triples(case.los, case.observer_km, case.t_s, case.gm)
    fast = least(lambda: solve_triples(case.los, case.observer_km, case.t_s, case.gm)) / BATCH
    slow = least(lambda: loop(case, LOOP), 1) / LOOP
    orbits = loop(case, LOOP)
    rows = [(k, r, v) for k, orbit in enumerate(orbits) for _, r, v in orbit]
    triple = np.array([k for k, _, _ in rows], dtype=int)
    theirs = np.array([r for _, r, _ in rows]).reshape(-1, 3, 3)
    worst = 0.0
    for k, r, v in rows:
        if np.abs(r[1] - case.r2_km[k]).max() > 1e-3 * case.range2_km[k]:
            continue
        mine = batch.velocity_km_s[(batch.triple == k) & batch.admissible]
        worst = max(worst, np.abs(mine - v).max(axis=1).min() / np.linalg.norm(v))
    good = batch.admissible
    return (
        fast * 1e6,
        slow * 1e6,
        slow / fast,
        found(case, batch.positions_km[good], batch.triple[good], BATCH),
        found(case, theirs, triple, LOOP),
        worst,
    )


def interactive(regime):
    """Median and 95 % processor time (ms) of one full solution with sigmas and light time."""
    case = triples(regime, 60, seed=52, arc_deg=(2.0, 20.0))
    sigma = np.full((3, 2), 5e-6)
    radius = 6378.137 if regime in EARTH else 695700.0

    def one(k):
        solve_triple(
            case.los[k],
            case.observer_km[k],
            case.t_s[k],
            case.gm,
            center_velocity_km_s=case.center_velocity_km_s[k],
            light_time=True,
            sigma_rad=sigma,
            body_radius_km=radius,
        )

    return np.percentile([1e3 * least(lambda k=k: one(k)) for k in range(60)], [50, 95])


def peak(count):
    """Peak of traced memory (MB) beyond input and twice the result (its pieces, and their whole)."""
    case = triples("leo", count, seed=53, light_time=False)
    tracemalloc.start()
    kept = solve_triples(case.los, case.observer_km, case.t_s, case.gm, chunk=2048)
    _, most = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    result = sum(getattr(kept, name).nbytes for name in kept.__dataclass_fields__)
    return max(most - 2 * result, 0) / 1e6


def main():
    print("batch against the textbook loop, arcs of 1 to 20 deg, one core")
    print(f"{'regime':16s} {'batch us':>9s} {'loop us':>9s} {'ratio':>7s} {'found':>7s} {'by loop':>8s} {'differ':>9s}")
    ratios = []
    for regime in REGIMES:
        fast, slow, ratio, mine, theirs, worst = compare(regime, (1.0, 20.0))
        ratios.append(slow / fast)
        print(f"{regime:16s} {fast:9.1f} {slow:9.0f} {ratio:7.0f} {mine:7.4f} {theirs:8.3f} {worst:9.1e}")
    print(f"geometric mean of the ratios: {np.exp(np.mean(np.log(ratios))):.0f} (budget 150)")
    print("\none interactive solution, all stages (ms, median and 95 %; budget 2)")
    for regime in REGIMES:
        median, most = interactive(regime)
        print(f"{regime:16s} {median:6.2f} {most:6.2f}")
    few, many = peak(8192), peak(65536)
    print("\npeak memory beyond input and twice the result:")
    print(f"{few:.1f} MB for 8192 triples, {many:.1f} MB for 65536")
    print("\ntruth among the candidates, light time included, arcs of 1 to 40 deg, 4000 cases each")
    for regime in REGIMES:
        case = triples(regime, 4000, seed=54)
        moving = case.center_velocity_km_s
        args = case.los, case.observer_km, case.t_s, case.gm
        result = solve_triples(*args, center_velocity_km_s=moving, light_time=True)
        good = result.admissible
        share = found(case, result.positions_km[good], result.triple[good], 4000)
        print(f"{regime:16s} {share:7.4f}")


if __name__ == "__main__":
    main()
