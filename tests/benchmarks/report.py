"""All benchmarks in one run, as Markdown.

Run ``python tests/benchmarks/report.py [FILE]``; without FILE the report goes to standard output. Needs Chromium for
the slider. Nothing here is a test: numbers depend on the machine, which the report names.
"""

from __future__ import annotations

import os
import platform
import sys
from collections.abc import Callable
from datetime import datetime, timezone
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from benchmarks import bench_dynamics, bench_fit, bench_import, bench_slider, bench_triples

PARTS: list[tuple[str, Callable[[], list[str]]]] = [
    ("Starting", bench_import.report),
    ("Slider to picture", bench_slider.report),
    ("Three-observation orbits", bench_triples.report),
    ("Least-squares fit", bench_fit.report),
    ("Trajectories", bench_dynamics.report),
]


def processor() -> str:
    """The processor's name where the system tells it."""
    info = Path("/proc/cpuinfo")
    names = (
        [line.partition(":")[2].strip() for line in info.read_text().splitlines() if line.startswith("model name")]
        if info.exists()
        else []
    )
    return names[0] if names else platform.processor() or "processor unknown"


def main() -> None:
    import numpy
    import scipy

    import firstarc

    lines = [
        "# Benchmarks",
        "",
        f"{datetime.now(timezone.utc):%Y-%m-%d}, {processor()}, {os.cpu_count()} cores, "
        f"Python {platform.python_version()}, numpy {numpy.__version__}, scipy {scipy.__version__}, "
        f"firstarc {firstarc.__version__}.",
    ]
    for title, part in PARTS:
        print(f"{title} ...", file=sys.stderr)
        lines += ["", f"## {title}", "", *part()]
    text = "\n".join(lines) + "\n"
    if len(sys.argv) > 1:
        Path(sys.argv[1]).write_text(text, encoding="utf-8")
    else:
        print(text)


if __name__ == "__main__":
    main()
