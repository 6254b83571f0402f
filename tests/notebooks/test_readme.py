"""The README's example runs as written, and its output is what it prints."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

pytestmark = pytest.mark.notebook


def squeezed(text: str) -> str:
    """Text without its line breaks and runs of blanks: the README wraps long lines."""
    return " ".join(text.split())


def test_the_example_prints_what_the_readme_shows(project_root: Path) -> None:
    readme = (project_root / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```(\w+)\n(.*?)```", readme, re.DOTALL)
    (code,) = (body for kind, body in blocks if kind == "python")
    (shown,) = (body for kind, body in blocks if kind == "text")
    run = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        encoding="utf-8",
        cwd=project_root,
        env={**os.environ, "PYTHONIOENCODING": "utf-8"},
    )
    assert run.returncode == 0, run.stderr
    assert squeezed(run.stdout) == squeezed(shown)
