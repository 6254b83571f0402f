"""Print pip constraints that pin every run-time dependency to its lower bound in pyproject.toml."""

from __future__ import annotations

import sys
from pathlib import Path

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

project = tomllib.loads((Path(__file__).resolve().parents[1] / "pyproject.toml").read_text(encoding="utf-8"))
for text in project["project"]["dependencies"]:
    print(text.replace(">=", "==", 1))
