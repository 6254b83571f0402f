"""What starting costs: ``import firstarc``, and a Desk on bundled data, in whole new processes.

Run ``python tests/benchmarks/bench_import.py``. Budgets: the import at most 0.3 s over bare Python; a Desk made in
a warm installation within 2 s of the start of its process.
"""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
DESK = """
import sys
import firstarc as fa
sys.path.insert(0, "data")
stations = {
    "BRN": dict(lon_deg=-6.41773, lat_deg=41.18264, height_m=1184),
    "QLN": dict(lon_deg=12.60518, lat_deg=38.90471, height_m=642),
}
desk = fa.Desk(fa.load("data/invented_satellite.csv", stations=stations))
desk._repr_mimebundle_()
"""


def seconds(code: str, repeats: int = 5) -> float:
    """Least wall time of a new process that runs ``code``."""
    times = []
    for _ in range(repeats + 1):
        start = time.perf_counter()
        subprocess.run([sys.executable, "-c", code], check=True, cwd=ROOT / "example_notebooks")
        times.append(time.perf_counter() - start)
    return min(times[1:])  # the first run warms the file cache


def measure() -> dict[str, float]:
    bare = seconds("pass")
    return {
        "bare_s": bare,
        "import_s": seconds("import firstarc") - bare,
        "numpy_s": seconds("import numpy") - bare,
        "desk_s": seconds(DESK, repeats=3) - bare,
    }


def report() -> list[str]:
    found = measure()
    desk, ratio = found["desk_s"], found["desk_s"] / found["numpy_s"]
    return [
        "| start, over bare Python | measured | of `import numpy` | budget |",
        "|---|---|---|---|",
        f"| `import firstarc` | {found['import_s']:.3f} s | {found['import_s'] / found['numpy_s']:.2f} | 0.3 s |",
        f"| imports, load, Desk with its picture | {desk:.2f} s | {ratio:.1f} | 2 s |",
    ]


if __name__ == "__main__":
    print("\n".join(report()))
