"""Which files belong to the project."""

from __future__ import annotations

import os
import subprocess
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
#: What the build hook makes; not kept, but shipped.
BUILT = frozenset({"widgets/static/desk.js", "widgets/static/desk.css"})
#: Folders that come and go in an unpacked sdist that somebody works in.
PASSING = frozenset(
    {"node_modules", "__pycache__", "build", "dist", "static", ".dev", ".venv", ".venv-checks"}
    | {".hypothesis", ".ipynb_checkpoints", ".mypy_cache", ".pytest_cache", ".ruff_cache"}
)


def kept_files() -> set[str]:
    """What git knows or would add; in an unpacked sdist, everything but what was built or left behind."""
    if (ROOT / ".git").exists():
        command = ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"]
        listed = subprocess.run(command, cwd=ROOT, capture_output=True, check=True).stdout.decode()
        return {name for name in listed.split("\0") if name and (ROOT / name).is_file()}
    found = set()
    for folder, folders, names in os.walk(ROOT):
        folders[:] = [name for name in folders if name not in PASSING and not Path(folder, name).is_symlink()]
        found |= {Path(folder, name).relative_to(ROOT).as_posix() for name in names if name != "PKG-INFO"}
    return found
